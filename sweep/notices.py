"""What a careful person would notice in a sweep: each code of `result.NOTE_CODES` that pixels, light and fit can tell.

Every test has a threshold that a sound sweep passes with room to spare: at least five of its own standard uncertainties
and a size that matters to the answer. docs/outputs.md lists what to do about each.
"""

import itertools
from collections import defaultdict
from collections.abc import Iterable, Sequence

import numpy as np

from sweep.fit import FocusStep, LensFit
from sweep.light import Light
from sweep.measure.linear import Floats
from sweep.outlook import Discrepancy
from sweep.readings import CLIPPED_SHARE, Sighting, Sweep
from sweep.result import NOTE_CODES, Note, Reading
from sweep.station import Station

SAME_LIGHT_LN_N = 0.1
RING_OFF_LN_N = 0.09
FRAME_OFF_LN_LIGHT = 0.04
DRIFT = 0.03
LAMP_RIPPLE = 0.012
ROW_RIPPLE = 0.003
VIBRATION_PX = 0.04
MOVED_PX = 0.5
RAGGED_PX = 0.2
BENT_PX = 1.5
CORRELATION = 0.03
OVERSHOOT = 0.03
MISFIT_CONTRAST = 0.008
MISFIT_CHI2 = 1.6
FOCUS_STEP_WAVES = 0.15
EXPOSURE_MISMATCH = 0.05
BENT_TRANSFER = 0.35
CERTAIN = 5.0


def notices(
    sweep: Sweep,
    readings: Sequence[Reading],
    light: Light,
    fit: LensFit | None,
    focus_steps: Sequence[FocusStep],
    discrepancy: Discrepancy,
    station: Station,
    compressed: bool,
) -> list[Note]:
    """All notices of a sweep, in the order of the table of codes."""
    processed = [] if compressed else _processing(sweep)
    bent = _exposure_response(sweep, station)
    lamp = [] if bent else _lamp(sweep, light)
    rippling = station.need.flicker_hz > 0 or any(note.code == "flicker" for note in lamp)
    found = [
        *_frames(sweep, station),
        *_stops_by_light(sweep, light),
        *lamp,
        *([] if rippling or bent else _stray_frames(sweep, light)),
        *_movement(sweep, station),
        *_patches(sweep, readings, station),
        *processed,
        *(bent if bent or compressed or processed else _noise_response(sweep, station)),
        *_model(fit, discrepancy, focus_steps, sweep, station),
    ]
    order = list(NOTE_CODES)
    return sorted(found, key=lambda note: order.index(note.code))


def _f(stop: float) -> str:
    return f"f/{stop:g}"


def _listed(names: Iterable[str]) -> str:
    """Names as people list them: a, b and c; the tail of a long list is counted."""
    items = list(dict.fromkeys(names))
    if len(items) > 4:
        items = [*items[:3], f"{len(items) - 3} more"]
    return items[0] if len(items) == 1 else ", ".join(items[:-1]) + " and " + items[-1]


def _frames(sweep: Sweep, station: Station) -> list[Note]:
    """Clipped, dark, few and identical frames, idle bits."""
    out: list[Note] = []
    for stop in sweep.stops:
        clipped = [s for s in sweep.at(stop) if s.saturated_fraction > CLIPPED_SHARE]
        if clipped:
            worst = max(clipped, key=lambda s: s.saturated_fraction)
            names = _listed(station.targets[s.site.target].name for s in clipped)
            out.append(
                Note(
                    "frames-saturated",
                    f"{_f(stop)}: up to {100 * worst.saturated_fraction:.2g} % of the pixels are clipped ({names}). "
                    "Take this stop again at a shorter exposure.",
                )
            )
        dark = [s for s in sweep.at(stop) if "low-signal" in s.why_not]
        if dark:
            names = _listed(station.targets[s.site.target].name for s in dark)
            out.append(Note("low-signal", f"{_f(stop)}: too dark to measure ({names}). Expose this stop longer."))
        few = [s for s in sweep.at(stop) if s.frames < 2]
        if few:
            out.append(
                Note(
                    "too-few-frames",
                    f"{_f(stop)}: a single usable frame; noise can't be told. Take two or more, better eight.",
                )
            )
    for group in sweep.identical:
        out.append(
            Note(
                "frames-identical",
                f"{_same_frames(group)} the same bit for bit, so they are one measurement. Take the stop again.",
            )
        )
    if sweep.idle_bits and station.camera.bit_depth is not None:
        used = station.camera.bit_depth - sweep.idle_bits
        out.append(
            Note(
                "bit-depth",
                f"The lowest {sweep.idle_bits} of {station.camera.bit_depth} bits never change: the camera delivers "
                f"{used} bits. Set camera.bit_depth, or the camera's pixel format, accordingly.",
            )
        )
    return out


def _same_frames(files: Sequence[str]) -> str:
    """Who is the same: several files, or one that is listed more than once."""
    names = list(dict.fromkeys(files))
    return f"{_listed(names)} are" if len(names) > 1 else f"{names[0]} is listed {len(files)} times:"


def _stops_by_light(sweep: Sweep, light: Light) -> list[Note]:
    """Ring positions against the light: order, the same light twice, far from the mark, one frame off."""
    known = [k for k in range(len(sweep.stops)) if np.isfinite(light.f_number[k])]
    off = {k: float(np.log(light.f_number[k] / sweep.stops[k])) for k in known}
    out: list[Note] = []
    named: set[int] = set()
    for a, b in itertools.pairwise(known):
        step = float(np.log(light.f_number[b] / light.f_number[a]))
        wanted = float(np.log(sweep.stops[b] / sweep.stops[a]))
        sure = CERTAIN * float(np.hypot(light.ln_u[a], light.ln_u[b]))
        if step < -max(0.05, sure):
            named |= {a, b}
            out.append(
                Note(
                    "stop-order",
                    f"{_f(sweep.stops[b])} let more light through than {_f(sweep.stops[a])}: the labels are not in "
                    "the order of the light. Check the stop column of shots.csv against the ring.",
                )
            )
        elif abs(step) < min(SAME_LIGHT_LN_N, 0.3 * wanted):
            named |= {a, b}
            out.append(
                Note(
                    "light-unchanged",
                    f"{_f(sweep.stops[a])} and {_f(sweep.stops[b])} let the same light through (within "
                    f"{200 * abs(step):.1f} %): the ring was not turned, or files were mixed up. Take both again.",
                )
            )
    middle = float(np.median(list(off.values()))) if off else 0.0
    for k in known:
        if k in named or len(known) < 3:
            continue
        away = off[k] - middle
        if abs(away) > max(RING_OFF_LN_N, CERTAIN * float(light.ln_u[k])):
            out.append(
                Note(
                    "ring-off",
                    f"{_f(sweep.stops[k])}: by the light the ring stood at f/{sweep.stops[k] * np.exp(away):.3g}. "
                    "Come to the mark from the wide side and take this stop again.",
                )
            )
    return out


def _usual_ripple(light: Light) -> float:
    """What frames usually differ by in light (ln, deviation), a few stray ones apart."""
    off = np.array([f.ln_off for f in light.frames])
    return 1.4826 * float(np.median(np.abs(off))) if off.size else 0.0


def _stray_frames(sweep: Sweep, light: Light) -> list[Note]:
    """Stops of which one frame caught another light than the rest: the ring moved in between."""
    usual = _usual_ripple(light)
    out: list[Note] = []
    for k, stop in enumerate(sweep.stops):
        off = np.array([f.ln_off for f in light.frames if f.stop == k])
        if len(off) < 2:
            continue
        away = off - np.median(off) if len(off) > 2 else np.array([off[1] - off[0]])
        worst = float(away[np.argmax(np.abs(away))])
        rest = np.delete(off, int(np.argmax(np.abs(off - np.median(off))))) if len(off) > 2 else off[:1]
        if abs(worst) > max(FRAME_OFF_LN_LIGHT, 3.0 * float(np.ptp(rest)), 2.0 * CERTAIN * usual):
            out.append(
                Note(
                    "ring-off",
                    f"{_f(stop)}: one frame caught {100 * np.expm1(worst):+.0f} % light against the others of this "
                    "stop: the ring moved between frames. Take this stop again with the ring at rest.",
                )
            )
    return out


def _lamp(sweep: Sweep, light: Light) -> list[Note]:
    """Drift over the sweep, ripple from frame to frame, bands over the rows."""
    out: list[Note] = []
    if abs(light.drift) > max(DRIFT, CERTAIN * light.drift_u):
        out.append(
            Note(
                "light-drift",
                f"The lamp changed by {100 * light.drift:+.1f} % over the sweep. Warm it up, and visit the first stop "
                "once more at the end.",
            )
        )
    ripple = _usual_ripple(light)
    if ripple > LAMP_RIPPLE and len(light.frames) >= 6:
        out.append(
            Note(
                "flicker",
                f"The light differs by {100 * ripple:.1f} % (rms) from frame to frame. Use a steady lamp, "
                "or whole periods of its ripple as exposure, and set need.flicker_hz.",
            )
        )
    bands = row_ripple(sweep.row_light)
    if bands is not None:
        out.append(
            Note(
                "flicker",
                f"Bands of {100 * bands[0]:.1f} % cross the frames, {bands[1]:.0f} rows apart: a rolling shutter "
                "under a rippling lamp. Use a steady lamp, or whole periods of its ripple as exposure.",
            )
        )
    return out


def row_ripple(row_light: Sequence[Floats]) -> tuple[float, float] | None:
    """Amplitude and period (rows) of bands common to the frames; None where no single frequency stands out.

    row_light: for each stop, (n, rows), ratios to the stop's mean frame. The power spectra of all frames are averaged;
    a band is a line at 30 times the median power that holds a quarter of all, of an amplitude that matters.
    """
    spectra = [np.abs(np.fft.rfft(r - r.mean(axis=1, keepdims=True), axis=1)) ** 2 for r in row_light if len(r) >= 2]
    if not spectra:
        return None
    rows = row_light[0].shape[1]
    power = np.concatenate(spectra).mean(axis=0)[2 : rows // 4]
    if power.size < 8:
        return None
    peak = int(np.argmax(power))
    line = float(power[max(peak - 1, 0) : peak + 2].sum())
    amplitude = 2.0 * np.sqrt(line) / rows
    if line < 0.25 * power.sum() or power[peak] < 30.0 * np.median(power) or amplitude < ROW_RIPPLE:
        return None
    return float(amplitude), rows / float(peak + 2)


def _movement(sweep: Sweep, station: Station) -> list[Note]:
    """Vibration from frame to frame, pooled over the sweep; targets that stand elsewhere at one stop."""
    squares: dict[float, list[float]] = defaultdict(list)
    noise2: list[float] = []
    for s in sweep.sightings:
        told = s.shifts_px
        if s.ok and told is not None and len(told[0]) >= 2:
            n = len(told[0])
            squares[s.stop] += [float(v) for v in (told[0] ** 2).ravel() * n / (n - 1)]
            noise2 += [told[1] ** 2] * told[0].size
    out: list[Note] = []
    rms = 0.0
    if noise2:
        every = np.array([v for values in squares.values() for v in values])
        rms = float(np.sqrt(max(every.mean() - np.mean(noise2), 0.0)))
        certain = every.mean() > np.mean(noise2) * (1.0 + CERTAIN * np.sqrt(2.0 / len(every)))
        if rms > VIBRATION_PX and certain:
            worst = max(squares, key=lambda stop: float(np.mean(squares[stop])))
            out.append(
                Note(
                    "vibration",
                    f"The image moves by {rms:.2f} px (rms) between frames of one stop, most at {_f(worst)}. Hold "
                    "camera and parts firmly and take the hand off the ring before a frame is taken.",
                )
            )
    return out + _moved_targets(sweep, station, rms)


def _moved_targets(sweep: Sweep, station: Station, rms: float) -> list[Note]:
    places: dict[tuple[int, int], list[tuple[float, Floats]]] = defaultdict(list)
    for s in sweep.sightings:
        if s.ok and s.position_px is not None:
            places[s.site.target, s.site.patch].append((s.stop, np.array(s.position_px)))
    limit = max(MOVED_PX, 4.0 * rms)
    moved: dict[float, dict[int, float]] = defaultdict(dict)
    for (target, _), seen in places.items():
        middle = np.median([p for _, p in seen], axis=0)
        for stop, p in seen:
            away = float(np.linalg.norm(p - middle))
            if away > limit and len(seen) >= 3:
                moved[stop][target] = max(away, moved[stop].get(target, 0.0))
    out = []
    for stop, targets in sorted(moved.items()):
        every = len(targets) == len({t for t, _ in places}) > 1
        what = "every target stands" if every else f"{_listed(station.targets[t].name for t in targets)} stands"
        cause = "the camera or the whole set was nudged" if every else "it was nudged"
        out.append(
            Note(
                "target-moved",
                f"{_f(stop)}: {what} {max(targets.values()):.1f} px from where it is at the other stops: {cause}. Fix "
                "it and take this stop again.",
            )
        )
    return out


def _patches(sweep: Sweep, readings: Sequence[Reading], station: Station) -> list[Note]:
    """Patches that could not be read as what they should be; bent or ragged edges; features beyond Nyquist."""
    by_code: dict[str, dict[tuple[int, int], list[float]]] = defaultdict(lambda: defaultdict(list))
    for s in sweep.sightings:
        for code in s.why_not:
            if code in ("edge-angle", "edge-not-found", "pattern-not-found"):
                by_code[code][s.site.target, s.site.patch].append(s.stop)
    out: list[Note] = []
    for code, places in by_code.items():
        for (target, patch), stops in places.items():
            where = f"{station.targets[target].name}, patch {patch}"
            out.append(
                Note(
                    code,
                    f"{where} at {_listed(_f(k) for k in stops)}: {NOTE_CODES[code].meaning} {NOTE_CODES[code].remedy}",
                )
            )
    edges: dict[tuple[int, int], list[Sighting]] = defaultdict(list)
    for s in sweep.sightings:
        if s.ok and s.edge is not None:
            edges[s.site.target, s.site.patch].append(s)
    for (target, patch), seen in edges.items():
        sharp = min(seen, key=lambda s: s.edge.spread_px if s.edge else np.inf).edge
        assert sharp is not None
        if sharp.ragged_px > RAGGED_PX or sharp.bend_px > BENT_PX:
            out.append(
                Note(
                    "edge-not-straight",
                    f"{station.targets[target].name}, patch {patch}: the edge wanders by {sharp.ragged_px:.2f} px and "
                    f"bows by {sharp.bend_px:.1f} px. {NOTE_CODES['edge-not-straight'].remedy}",
                )
            )
    beyond = [r.target for r in readings if "beyond-nyquist" in r.why_not]
    if beyond:
        out.append(
            Note(
                "beyond-nyquist",
                f"A feature of {station.need.feature_um:g} um is finer than two pixels a period at {_listed(beyond)}. "
                "Use a larger magnification or smaller pixels.",
            )
        )
    return out


def _processing(sweep: Sweep) -> list[Note]:
    """Sharpening or smoothing in the camera: noise that neighbours share, or an overshoot that no lens gives."""
    points = [p for s in sweep.sightings if s.saturated_fraction <= CLIPPED_SHARE for p in s.noise]
    shared = 0.0
    if points:
        dof = np.array([p.dof for p in points])
        mean = np.average([p.correlation for p in points], axis=0, weights=dof)
        shared = float(mean[np.argmax(np.abs(mean))])
        if abs(shared) < CERTAIN / np.sqrt(dof.sum()):
            shared = 0.0
    seen = [s.edge for s in sweep.sightings if s.ok and s.edge is not None]
    sharp = sorted(seen, key=lambda e: e.spread_px)[: max(3, len(seen) // 2)]
    overshoot = float(np.median([0.5 * sum(e.overshoot) for e in sharp])) if sharp else 0.0
    told = []
    if abs(shared) > CORRELATION:
        told.append(f"noise of neighbouring pixels is correlated ({shared:+.2f})")
    if overshoot > OVERSHOOT:
        told.append(f"edges overshoot by {100 * overshoot:.0f} %, which no lens does")
    if not told:
        return []
    return [
        Note(
            "processed-image",
            f"The camera sharpens, smooths or interpolates its images: {' and '.join(told)}. Turn these off and take "
            "the sweep again; the readings are those of lens and processing together.",
        )
    ]


def _exposure_response(sweep: Sweep, station: Station) -> list[Note]:
    """Frames of one stop whose light does not follow their exposures."""
    ratios = []
    for s in sweep.sightings:
        if s.ok and len(s.exposures) == len(s.frame_light) and np.ptp(s.exposures) > 0.3 * s.exposures.max():
            order = np.argsort(s.exposures)
            ratios.append(float(s.frame_light[order[-1]] / s.frame_light[order[0]]))
    if not ratios or abs(np.median(ratios) - 1.0) <= EXPOSURE_MISMATCH:
        return []
    return [
        Note(
            "response-not-linear",
            f"Longer exposures give {100 * (np.median(ratios) - 1.0):+.0f} % light for the same time: the pixel "
            f"values do not follow the light as camera.response = {station.camera.response!r} says. Set the "
            "camera's gamma to 1, or state its response.",
        )
    ]


def _noise_response(sweep: Sweep, station: Station) -> list[Note]:
    """Noise that does not follow the light."""
    transfer = sweep.photon_transfer
    bend = transfer.bend if transfer is not None else None
    if bend is None or abs(bend[0]) <= max(BENT_TRANSFER, CERTAIN * bend[1]):
        return []
    return [
        Note(
            "response-not-linear",
            f"The noise does not follow the light as camera.response = {station.camera.response!r} says (photon "
            f"transfer is bent by {100 * bend[0]:+.0f} %). Set the camera's gamma to 1, or state its response.",
        )
    ]


def _model(
    fit: LensFit | None, discrepancy: Discrepancy, steps: Sequence[FocusStep], sweep: Sweep, station: Station
) -> list[Note]:
    """A focus that changed midway, else a model that does not describe the readings, and where."""
    if fit is None:
        return []
    certain = [s for s in steps if abs(s.z) > 2.0 * CERTAIN and abs(s.waves) > FOCUS_STEP_WAVES]
    if certain:
        step = max(certain, key=lambda s: abs(s.z))
        return [
            Note(
                "focus-moved",
                f"From {_f(sweep.stops[step.stop])} on the focus lies {step.shift_mm:+.2g} mm elsewhere: the focus "
                "ring was touched. Lock it and take the sweep again.",
            )
        ]
    off = float(np.sqrt(np.mean(discrepancy.deviation**2))) if discrepancy.readings else 0.0
    if off < MISFIT_CONTRAST and fit.reduced_chi2 < MISFIT_CHI2:
        return []
    worst = int(np.argmax(fit.misfit))
    view = fit.views[worst]
    return [
        Note(
            "model-misfit",
            f"The lens model is off the readings by {off:.3f} in contrast (reduced chi-square "
            f"{fit.reduced_chi2:.1f}), most at {_f(sweep.stops[view.stop])}, {station.targets[view.target].name}. "
            "Readings count for more than the model there; look for tilt, dirt, movement or processing.",
        )
    ]
