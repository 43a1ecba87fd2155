"""The answer in plain sentences with numbers, and the warnings that belong to the choice."""

import math
from collections.abc import Sequence
from dataclasses import replace

from sweep.choose.between import Between, rises_outward
from sweep.choose.candidates import Candidate, Pick
from sweep.choose.causes import ruled_out
from sweep.choose.chances import TIE
from sweep.choose.evidence import Cause, Outlook
from sweep.choose.focus import Refocus
from sweep.choose.settings import exposure_limit_ms, motion_limit_ms, ripple_left, setting_for
from sweep.choose.wording import at_least, chance, listed, number
from sweep.result import CameraNoise, Note
from sweep.station import Station

_RETAKE_LEVEL = 0.7  # of full scale: bright without clipping (common practice, no source)
_GIVEN_WAY = 0.99  # of the wanted level: what is said
_COST = {
    "depth": "defocus, since the targets lie at different depths or off the plane of focus",
    "aberration": "the lens's own errors (spherical aberration and its like)",
    "diffraction": "diffraction at the iris",
    "sampling": "the size of the pixels and the sensor's blur",
}


def reasons(
    picked: Pick,
    candidates: Sequence[Candidate],
    station: Station,
    losses: dict[Cause, float],
    between: Between | None,
    refocus: Refocus | None,
) -> tuple[str, ...]:
    """Why this stop and this setting, in the order in which one would ask."""
    found = _why_this_stop(picked, station)
    found += _ties(picked)
    found += _ruled_out(picked, candidates, station)
    found += _setting(picked.best, station)
    found += _motion(picked.best, station)
    if losses:
        cause = max(losses, key=lambda c: losses[c])
        name = picked.best.worst_place.name if picked.best.worst_place else "the worst target"
        found.append(f"What costs most at {name} is {_COST[cause]}: {100 * losses[cause]:.0f} % of the contrast.")
    if between is not None:
        sure = "" if between.chance is None else f", chance {chance(between.chance)}"
        found.append(
            f"A ring that can stand between marks does better {between.way} from {between.wider} to {between.narrower} "
            f"(f/{between.f_number:.3g}, {between.light:.2f} of the light at {between.wider}): "
            f"{number(100 * between.gain)} % more contrast{sure}."
        )
    if refocus is not None:
        found.append(_focus(refocus, picked.best.name))
    return tuple(found)


def notes(
    picked: Pick | None,
    candidates: Sequence[Candidate],
    station: Station,
    camera: CameraNoise,
    outlook: Outlook,
) -> tuple[Note, ...]:
    """The warnings of the choice; `candidates` come widest first."""
    found = _retakes(picked, candidates, station, camera)
    found += _short_of_ripple(candidates, station)
    if picked is not None:
        found += _level_given_way(picked.best, station)
        found += _outside(picked, candidates, station, outlook)
    return tuple(found)


def _why_this_stop(picked: Pick, station: Station) -> list[str]:
    best, need = picked.best, station.need
    place = best.worst_place.name if best.worst_place else "the worst target"
    if best.setting.fails:
        rank = "No stop keeps exposure and noise; the sharpest of all is"
    elif len(picked.pool) == 1:
        rank = "The only sound stop that keeps exposure and noise is"
    else:
        rank = "The sharpest stop that keeps exposure and noise is"
    return [
        f"{rank} {best.name}: at {place}, the worst, a feature of {number(need.feature_um)} um keeps a contrast of "
        f"{best.worst.contrast or 0:.3f} (u {best.worst.u or 0:.3f}); {need.contrast:g} is needed.",
        f"Chance that {best.name} meets the need: {chance(best.chance_meets)}; that no other usable stop is better: "
        f"{chance(best.chance_best)}.",
    ]


def _ties(picked: Pick) -> list[str]:
    best = picked.best
    if not picked.tied or best.contrast <= 0:
        return []
    group = sorted((best, *picked.tied), key=lambda c: c.f_number)
    values = listed([f"{c.contrast:.3f}" for c in group])
    names = listed([c.name for c in group])
    differences = [f"{group[-1].name} gives {'the most' if len(group) > 2 else 'more'} depth"]
    for other in picked.tied:
        ratio = _exposure_ratio(other, best)
        if ratio is not None and ratio > 1.05:
            differences.append(f"{best.name} needs {number(1 / ratio)} of the exposure of {other.name}")
        elif ratio is not None and ratio < 0.95:
            differences.append(f"{other.name} needs {number(ratio)} of the exposure of {best.name}")
    told = "; ".join(differences)
    return [f"{names} can't be told apart ({values}, within {100 * TIE:.0f} %); any of them is right: {told}."]


def _exposure_ratio(other: Candidate, best: Candidate) -> float | None:
    if other.setting.exposure_ms is None or best.setting.exposure_ms is None:
        return None
    return other.setting.exposure_ms / best.setting.exposure_ms


def _ruled_out(picked: Pick, candidates: Sequence[Candidate], station: Station) -> list[str]:
    barred = ruled_out(picked, candidates)
    if barred is None or barred is picked.best:
        return []
    setting, need = barred.setting, station.need
    if setting.fails_exposure and setting.total_ms is not None:
        limit = exposure_limit_ms(station)
        short = setting.total_ms / (limit * 10 ** (need.max_gain_db / 20))
        why = (
            f"needs {number(setting.total_ms)} ms where {number(limit)} ms with {need.max_gain_db:g} dB of gain are "
            f"allowed: {at_least(short)} times the light would do"
        )
    else:
        why = (
            f"has a signal-to-noise ratio of {setting.snr_db or 0:.1f} dB where {need.min_snr_db or 0:g} dB are wanted"
        )
    return [f"{barred.name} would be sharper ({barred.worst.contrast or 0:.3f}), but it {why}."]


def _setting(best: Candidate, station: Station) -> list[str]:
    need, setting = station.need, best.setting
    if setting.exposure_ms is None or setting.gain_db is None or setting.level is None or setting.total_ms is None:
        return []
    gain = f" with {setting.gain_db:.1f} dB of gain" if setting.gain_db > 0.05 else " without gain"
    text = (
        f"{number(setting.exposure_ms)} ms{gain} brings the light tone to {number(100 * setting.level)} % of full scale"
    )
    if setting.by_ripple:
        periods = round(setting.exposure_ms * need.flicker_hz / 1000)
        whole = "one whole period" if periods == 1 else f"{periods} whole periods"
        text += f"; the exposure is {whole} of the {need.flicker_hz:g} Hz ripple"
    elif setting.total_ms > exposure_limit_ms(station):
        bound = "motion blur" if motion_limit_ms(station) <= exposure_limit_ms(station) else "need.max_exposure_ms"
        text += f"; the limit of {number(exposure_limit_ms(station))} ms by {bound} binds"
    found = [f"{text}."]
    if _gives_way(best, station):
        found.append(
            f"Whole ripple periods leave the level at {100 * setting.level:.0f} % instead of {100 * need.level:.0f} %; "
            "that is no failed need."
        )
    if setting.snr_db is not None:
        wanted = "" if need.min_snr_db is None else f" ({need.min_snr_db:g} dB wanted)"
        found.append(f"Signal-to-noise ratio at the light tone: {setting.snr_db:.1f} dB{wanted}.")
    return found


def _motion(best: Candidate, station: Station) -> list[str]:
    speed, exposure = station.need.speed_mm_s, best.setting.exposure_ms
    if not speed or exposure is None or best.worst.place is None or best.worst_place is None:
        return []
    blur_px = speed * exposure / best.worst_place.object_um_per_px
    return [
        f"The part moves by {number(blur_px)} pixels during the exposure; that takes "
        f"{100 * (1 - best.blur[best.worst.place]):.1f} % of the contrast and is counted in."
    ]


def _focus(refocus: Refocus, name: str) -> str:
    """Where the focus serves the depths best; a gain within a tie is not worth a turn."""
    if refocus.contrast * (1 - TIE) <= refocus.unmoved:
        return f"The focus stands well for these depths: no other gives more than {100 * TIE:.0f} % more at {name}."
    way = f"{number(abs(refocus.shift_mm))} mm {'farther from' if refocus.shift_mm > 0 else 'nearer to'} the camera"
    return (
        f"The focus would serve these depths best {way}: {refocus.contrast:.3f} instead of {refocus.unmoved:.3f} at "
        f"{name}."
    )


def _retakes(picked: Pick | None, candidates: Sequence[Candidate], station: Station, camera: CameraNoise) -> list[Note]:
    """Stops without a sound reading: all of them in one note where none has one, else those that would win."""
    unread = [c for c in candidates if not c.readable]
    if picked is None:
        return [_nothing_read(unread, candidates)] if unread else []
    found = []
    for c in unread:
        tone = _tone_by_marks(c, candidates)
        lit = setting_for(replace(c.evidence, tone_per_ms=tone), station, camera)
        if lit.fails and not picked.best.setting.fails:
            continue
        if c.worst.contrast is not None and (1 - TIE) * c.contrast > picked.best.contrast:
            found.append(
                Note(
                    "no-reading",
                    f"{c.name} has no sound reading at every target, so it is not recommended; the model expects "
                    f"{c.contrast:.3f} there, more than the {picked.best.contrast:.3f} of {picked.best.name}."
                    + _how_again(c, tone),
                )
            )
    return found


def _nothing_read(unread: Sequence[Candidate], candidates: Sequence[Candidate]) -> Note:
    """One note for a sweep of which no stop could be read."""
    names = ", ".join(c.name for c in unread)
    text = (
        f"No sound reading at {names}. Where patches are clipped or dark, take the stops again; where they are blurred "
        "beyond their region, enlarge the regions, move the focus, or sweep smaller stops."
    )
    first = unread[0]
    return Note("no-reading", text + _how_again(first, _tone_by_marks(first, candidates)))


def _how_again(candidate: Candidate, tone_per_ms: float | None) -> str:
    if tone_per_ms is None:
        return f" Take {candidate.name} again with a light tone of some 70 % of full scale."
    return (
        f" Take {candidate.name} again at about {number(_RETAKE_LEVEL / tone_per_ms)} ms without gain (light tone some "
        f"{100 * _RETAKE_LEVEL:.0f} % of full scale)."
    )


def _tone_by_marks(candidate: Candidate, candidates: Sequence[Candidate]) -> float | None:
    """The light tone per ms of a stop, from its own light or else from the nearest stop's and the engraved marks."""
    if candidate.evidence.tone_per_ms is not None:
        return candidate.evidence.tone_per_ms
    known = [c for c in candidates if c.evidence.tone_per_ms is not None]
    if not known:
        return None
    stop = candidate.evidence.stop
    nearest = min(known, key=lambda c: (abs(math.log(c.evidence.stop / stop)), c.evidence.stop))
    return (nearest.evidence.tone_per_ms or 0.0) * (nearest.evidence.stop / stop) ** 2


def _short_of_ripple(candidates: Sequence[Candidate], station: Station) -> list[Note]:
    hz = station.need.flicker_hz
    if not hz:
        return []
    short = [c for c in candidates if c.setting.exposure_ms is not None and not c.setting.by_ripple]
    if not short:
        return []
    told = listed([f"{c.name} ({number(c.setting.exposure_ms or 0)} ms)" for c in short])
    left = max(ripple_left(hz, c.setting.exposure_ms or 0) for c in short)
    return [
        Note(
            "ripple-not-averaged",
            f"The exposure is shorter than one ripple period ({number(1000 / hz)} ms) at {told}: up to "
            f"{100 * left:.0f} % of the ripple stays in the picture, and brightness changes from frame to frame.",
        )
    ]


def _gives_way(best: Candidate, station: Station) -> bool:
    level = best.setting.level
    return best.setting.by_ripple and level is not None and level < _GIVEN_WAY * station.need.level


def _level_given_way(best: Candidate, station: Station) -> list[Note]:
    if not _gives_way(best, station) or best.setting.fails_exposure:
        return []
    return [
        Note(
            "gain-spent",
            f"At {best.name} whole ripple periods and {best.setting.gain_db or 0:.1f} dB of gain bring the light tone "
            f"to {100 * (best.setting.level or 0):.0f} % of full scale, not to {100 * station.need.level:.0f} %.",
        )
    ]


def _outside(picked: Pick, candidates: Sequence[Candidate], station: Station, outlook: Outlook) -> list[Note]:
    """The best stop is the first or last of the sweep, and the model still rises beyond it."""
    best = picked.best
    found = []
    for end, narrower in ((candidates[0], False), (candidates[-1], True)):
        if end.index != best.index or len(candidates) < 2 or not rises_outward(outlook, best.f_number, narrower):
            continue
        ring = station.lens.stops
        further = [s for s in ring if (s > best.evidence.stop) == narrower and s != best.evidence.stop]
        side = "narrowest" if narrower else "widest"
        advice = (
            f"take f/{(min if narrower else max)(further):g} as well" if further else "the ring has no mark beyond it"
        )
        found.append(
            Note(
                "optimum-outside",
                f"{best.name} is the {side} stop of the sweep, and the model still rises beyond it: {advice}.",
            )
        )
    return found
