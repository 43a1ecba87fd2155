"""Where no setting meets the need: each shortfall in numbers, and what would cure it.

A cure is computed by the same model with that one thing changed; by best estimate, not with the wanted confidence.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import ndtri

from sweep.choose.candidates import Candidate, Pick
from sweep.choose.chances import NYQUIST_CY_PX, TIE, motion_transfer
from sweep.choose.evidence import Cause, LensView, Outlook, Place
from sweep.choose.focus import best_refocus
from sweep.choose.settings import exposure_limit_ms, motion_limit_ms, setting_for
from sweep.choose.wording import at_least, at_most, chance, number
from sweep.result import CameraNoise
from sweep.station import Station

_SMALLEST_PIXEL = 0.1  # of the present one: what is looked at
_LARGEST_FEATURE = 30.0  # times the present one
_MOST_FRAMES = 100.0  # times the present number
_MOST_LIGHT = 1000.0


@dataclass(frozen=True, slots=True)
class _Cure:
    """One thing changed, and whether that alone meets the need."""

    works: bool
    text: str


def shortfalls(
    picked: Pick,
    candidates: Sequence[Candidate],
    station: Station,
    camera: CameraNoise,
    outlook: Outlook,
    lens: LensView | None,
) -> tuple[str, ...]:
    """Sentences: what falls short at the recommended stop, by how much, and what would cure it."""
    best = picked.best
    found: list[str] = []
    if best.setting.fails_exposure:
        found += _exposure(best, station)
        found += _least_light(picked, station)
    if best.setting.fails_noise:
        found += _noise(best, station, camera)
    if "beyond-nyquist" in best.why_not:
        found += _nyquist(station, outlook)
    if "contrast" in best.why_not:
        found += _contrast(picked, candidates, station, outlook, lens)
    if "unproven" in best.why_not:
        found += _unproven(picked, station)
    return tuple(found)


def _exposure(best: Candidate, station: Station) -> list[str]:
    need, total = station.need, best.setting.total_ms
    limit = exposure_limit_ms(station)
    step = station.camera.exposure_step_ms
    if total is None:
        return []
    if best.setting.exposure_ms is None:
        return [
            f"Exposure: {best.name} needs {number(total)} ms, {number(limit)} ms are allowed, and the camera's step is "
            f"{number(step or 0)} ms. A camera that exposes more briefly, or less light, would cure it."
        ]
    short = total / (limit * 10 ** (need.max_gain_db / 20))
    spent = f" and {need.max_gain_db:g} dB of gain" if need.max_gain_db else " without gain"
    cures = [
        f"{at_least(short)} times the light",
        f"{at_least(20 * math.log10(short) + need.max_gain_db)} dB of gain allowed",
    ]
    if motion_limit_ms(station) <= limit and need.speed_mm_s:
        cures.append(f"a speed of at most {at_most(need.speed_mm_s / short)} mm/s")
    else:
        cures.append(f"{at_least(limit * short)} ms of exposure allowed")
    return [
        f"Exposure: {best.name} needs {number(total)} ms for a level of {100 * need.level:.0f} %; {number(limit)} ms"
        f"{spent} are allowed, too little by a factor of {at_least(short)}. " + _any_of(cures)
    ]


def _least_light(picked: Pick, station: Station) -> list[str]:
    """Where no stop keeps the exposure: the one that would meet the contrast with the least light."""
    need = station.need
    able = [c for c in picked.pool if c.contrast >= need.contrast and c.setting.total_ms is not None]
    if not able or picked.best.setting.total_ms is None:
        return []
    easiest = min(able, key=lambda c: c.setting.total_ms or math.inf)
    if easiest is picked.best:
        return []
    times = (easiest.setting.total_ms or math.nan) / (exposure_limit_ms(station) * 10 ** (need.max_gain_db / 20))
    return [
        f"{easiest.name} reaches the contrast too ({easiest.contrast:.3f}), with {at_least(times)} times the light."
    ]


def _noise(best: Candidate, station: Station, camera: CameraNoise) -> list[str]:
    snr, wanted = best.setting.snr_db, station.need.min_snr_db
    if snr is None or wanted is None:
        return []
    cures = []
    if camera.electrons_per_dn is not None and best.evidence.tone_per_ms is not None:
        tone = best.evidence.tone_per_ms

        def enough(factor: float) -> bool:
            lit = setting_for(replace(best.evidence, tone_per_ms=tone * factor), station, camera)
            return lit.snr_db is not None and lit.snr_db >= wanted

        factor = _first(enough, 1.0, _MOST_LIGHT)
        if factor is not None:
            cures.append(f"{at_least(factor)} times the light")
    cures.append(f"the mean of {math.ceil(10 ** ((wanted - snr) / 10))} frames of each part")
    return [
        f"Noise: at {best.name} the signal-to-noise ratio is {snr:.1f} dB, {wanted - snr:.1f} dB below the "
        f"{wanted:g} dB wanted. " + _any_of(cures)
    ]


def _nyquist(station: Station, outlook: Outlook) -> list[str]:
    finest = max(outlook.places, key=lambda p: p.feature_cy_px)
    over = finest.feature_cy_px / NYQUIST_CY_PX
    return [
        f"Sampling: at {finest.name} the feature is {finest.feature_cy_px:.3f} cycles per pixel; beyond 0.5 (Nyquist) "
        "it can't be told from coarser patterns, at any stop. "
        + _any_of(
            [
                f"object pixels of at most {at_most(station.scene.object_um_per_px / over)} um "
                f"(now {number(station.scene.object_um_per_px)} um)",
                f"a feature of at least {at_least(station.need.feature_um * over)} um",
            ]
        )
    ]


def _contrast(
    picked: Pick, candidates: Sequence[Candidate], station: Station, outlook: Outlook, lens: LensView | None
) -> list[str]:
    best, need = picked.best, station.need
    if best.worst.contrast is None or best.worst_place is None:
        return []
    missing = need.contrast - best.worst.contrast
    found = [
        f"Contrast: {best.worst.contrast:.3f} at {best.worst_place.name} with {best.name}, {missing:.3f} "
        f"({100 * missing / need.contrast:.0f} %) below the {need.contrast:g} needed."
    ]
    found += _limits_lifted(best, candidates, station)
    if need.speed_mm_s and best.worst.place is not None:
        found += _slower(best, station, outlook)
    if lens is not None:
        cures = [
            _refocus(picked, station, outlook, lens),
            _better_lens(picked, station, outlook, lens),
            _smaller_pixels(best, station, outlook, lens),
        ]
        found += [c.text for c in cures if c.works]
        found += _larger_feature(best, station, outlook, lens)
        if failed := [c.text for c in cures if not c.works]:
            found.append(f"Not enough alone: {'; '.join(failed)}.")
    return found


def _limits_lifted(best: Candidate, candidates: Sequence[Candidate], station: Station) -> list[str]:
    """A stop that would reach the contrast if exposure were allowed."""
    if best.setting.fails:
        return []
    need = station.need
    able = [c for c in candidates if c.readable and c.setting.fails_exposure and c.contrast >= need.contrast]
    able = [c for c in able if c.setting.total_ms is not None and c.setting.exposure_ms is not None]
    if not able:
        return []
    nearest = min(able, key=lambda c: c.setting.total_ms or math.inf)
    allowed = exposure_limit_ms(station) * 10 ** (need.max_gain_db / 20)
    times = (nearest.setting.total_ms or math.nan) / allowed
    return [
        f"With {at_least(times)} times the light {nearest.name} can be used; its contrast is {nearest.contrast:.3f}."
    ]


def _slower(best: Candidate, station: Station, outlook: Outlook) -> list[str]:
    """The speed at which the motion's blur leaves enough contrast, at the same exposure."""
    need, stop = station.need, best.index
    still = np.maximum(outlook.contrast[stop], 0.0)

    def enough(slowing: float) -> bool:
        slower = need.model_copy(update={"speed_mm_s": (need.speed_mm_s or 0.0) / slowing})
        return bool((still * motion_transfer(slower, best.setting.exposure_ms, outlook.places)).min() >= need.contrast)

    slowing = _first(enough, 1.0, 1000.0)
    if slowing is None or not need.speed_mm_s:
        return []
    return [
        f"At {at_most(need.speed_mm_s / slowing)} mm/s (now {number(need.speed_mm_s)}), or with an exposure shorter "
        f"by a factor of {at_least(slowing)}, motion blur leaves enough contrast at {best.name}."
    ]


def _refocus(picked: Pick, station: Station, outlook: Outlook, lens: LensView) -> _Cure:
    tried = [best_refocus(lens, c.index, c.f_number, outlook.places, c.blur, station) for c in _near(picked)]
    names = {c.index: c.name for c in picked.pool}
    top = max(tried, key=lambda r: r.contrast)
    name, way = names[top.stop_index], f"{number(abs(top.shift_mm))} mm {'away from' if top.shift_mm > 0 else 'toward'}"
    if top.contrast >= station.need.contrast:
        return _Cure(
            True,
            f"Move the plane of focus by {way} the camera: {name} then reaches {top.contrast:.3f} at the worst target "
            "and meets the need.",
        )
    if top.contrast > (1 + TIE) * top.unmoved:
        return _Cure(False, f"refocusing ({top.contrast:.3f} at {name}, {way} the camera)")
    return _Cure(False, "refocusing (the focus is best where it is)" if top.contrast > 0 else "refocusing")


def _better_lens(picked: Pick, station: Station, outlook: Outlook, lens: LensView) -> _Cure:
    values = [(_worst(lens, c, outlook.places, c.blur, without="aberration"), c) for c in picked.pool]
    reached, at = max(values, key=lambda v: v[0])
    if reached < station.need.contrast:
        return _Cure(False, f"a lens at the diffraction limit ({reached:.3f} at {at.name})")
    return _Cure(
        True,
        f"A lens of the same focal length at the diffraction limit reaches {reached:.3f} at {at.name} and meets the "
        "need.",
    )


def _smaller_pixels(best: Candidate, station: Station, outlook: Outlook, lens: LensView) -> _Cure:
    pitch, need = station.camera.pixel_pitch_um, station.need
    finest = max(p.feature_cy_px for p in outlook.places)

    def enough(division: float) -> bool:
        reached = _worst(lens, best, outlook.places, best.blur, pixel_scale=1 / division)
        return reached >= need.contrast and finest / division <= NYQUIST_CY_PX

    division = _first(enough, 1.0, 1 / _SMALLEST_PIXEL)
    if division is None:
        return _Cure(False, "smaller pixels")
    smaller = at_most(pitch / division)
    return _Cure(
        True, f"Pixels of {smaller} um (now {number(pitch)}) behind the same lens meet the need at {best.name}."
    )


def _larger_feature(best: Candidate, station: Station, outlook: Outlook, lens: LensView) -> list[str]:
    need = station.need

    def enough(times: float) -> bool:
        places = tuple(replace(p, feature_cy_px=p.feature_cy_px / times) for p in outlook.places)
        blur = motion_transfer(need, best.setting.exposure_ms, places)
        sampled = all(p.feature_cy_px <= NYQUIST_CY_PX for p in places)
        return sampled and _worst(lens, best, places, blur) >= need.contrast

    times = _first(enough, 1.0, _LARGEST_FEATURE)
    if times is None:
        return []
    feature_um = at_least(need.feature_um * times)
    return [f"At {best.name} features of {feature_um} um and more keep a contrast of {need.contrast:g}."]


def _unproven(picked: Pick, station: Station) -> list[str]:
    best, need = picked.best, station.need
    found = []
    if best.setting.total_ms is None:
        found.append(f"The light at {best.name} could not be measured, so exposure and gain are not proven.")
    if need.min_snr_db is not None and best.setting.snr_db is None:
        found.append(
            f"The signal-to-noise ratio at {best.name} could not be measured, so the {need.min_snr_db:g} dB wanted are "
            "not proven. Frames of a linear, unprocessed camera, at least two a stop, would tell."
        )
    if best.chance_meets is not None and best.chance_meets < need.confidence:
        found.append(
            f"The chance that {best.name} meets the need is {chance(best.chance_meets)}, not {need.confidence:g}. "
            + _proof(best, station)
        )
    proven = [c for c in picked.pool if c.meets_need]
    if proven:
        sharpest = max(proven, key=lambda c: c.contrast)
        found.append(
            f"{sharpest.name} is less sharp ({sharpest.contrast:.3f}) but meets the need with a chance of "
            f"{chance(sharpest.chance_meets)}: take it where proof counts."
        )
    return found


def _proof(best: Candidate, station: Station) -> str:
    """How many more frames would prove it: the spread of a mean goes as one over the root of their number."""
    need, u = station.need, best.worst.u or 0.0
    margin = (best.worst.contrast or 0.0) - need.contrast
    wanted = margin / float(ndtri(need.confidence))
    if wanted <= 0 or u <= wanted:
        return "Exposure or noise stand too close to their limits to be sure; a little more light would prove it."
    times = (u / wanted) ** 2
    if times > _MOST_FRAMES:
        return "It stands too close to the limit for more frames to prove it."
    frames = best.evidence.frames
    instead = f" ({math.ceil(frames * times)} instead of {frames})" if frames else ""
    return f"{at_least(times)} times as many frames there{instead} would prove it, as far as the spread is noise."


def _near(picked: Pick) -> list[Candidate]:
    """The chosen stop and its neighbours in the pool, two to each side."""
    place = next(k for k, c in enumerate(picked.pool) if c.index == picked.best.index)
    return list(picked.pool[max(place - 2, 0) : place + 3])


def _worst(
    lens: LensView,
    candidate: Candidate,
    places: Sequence[Place],
    blur: Sequence[float] | np.ndarray[tuple[int, ...], np.dtype[np.float64]],
    *,
    without: Cause | None = None,
    pixel_scale: float = 1.0,
) -> float:
    """The model's worst contrast at a stop with one thing changed."""
    values = [lens.contrast(candidate.index, p, without=without, pixel_scale=pixel_scale) for p in places]
    return float(min(max(v, 0.0) * b for v, b in zip(values, blur, strict=True)))


def _first(enough: Callable[[float], bool], low: float, high: float) -> float | None:
    """The smallest factor from `low` to `high` that is enough, to 0.5 %; None where not even `high` is."""
    if not enough(high):
        return None
    while high / low > 1.005:
        middle = math.sqrt(low * high)
        low, high = (low, middle) if enough(middle) else (middle, high)
    return high


def _any_of(cures: Sequence[str]) -> str:
    text = ", or ".join(cures)
    return f"{text[0].upper()}{text[1:]} would cure it."
