"""Results to show: a toy lens, made up so that each kind of answer occurs.

Nothing here is measured or claimed; the formulas only give curves of a lifelike shape, and the tests that use them
look at how a result is shown, not at its numbers.
"""

import math
from collections.abc import Sequence
from dataclasses import replace

from sweep.result import (
    CameraNoise,
    CurvePoint,
    DepthMap,
    DepthStop,
    LensModel,
    Note,
    Reading,
    Recommendation,
    Result,
    SourceFacts,
    Stop,
    TargetDetail,
)
from sweep.station import Station, build_station

STOPS = (1.4, 2.0, 2.8, 4.0, 5.6, 8.0, 11.0, 16.0)
TARGETS = (("tray floor", 6.0), ("cap rim", 0.0), ("cap top", -8.0))


def a_station(
    targets: Sequence[tuple[str, float]] = TARGETS, stops: Sequence[float] = STOPS, **need: object
) -> Station:
    """A station of the invented scene; `need` overrides keys of its table."""
    patches = [{"kind": "edge", "region": [10, 10, 60, 80]}, {"kind": "flat", "region": [10, 120, 40, 40]}]
    return build_station(
        {
            "station": {"name": "Vial cap station, lane 2"},
            "lens": {"focal_length_mm": 16.0, "stops": list(stops)},
            "camera": {"pixel_pitch_um": 3.45, "bit_depth": 12},
            "scene": {"object_um_per_px": 58.0, "wavelength_nm": 530, "bandwidth_nm": 30},
            "targets": [{"name": n, "depth_mm": d, "patches": patches} for n, d in targets],
            "need": {
                "feature_um": 180,
                "contrast": 0.3,
                "level": 0.7,
                "max_exposure_ms": 4.0,
                "max_gain_db": 6.0,
                "min_snr_db": 30.0,
            }
            | need,
        }
    )


def a_result(
    station: Station,
    *,
    ms_at_f4: float = 2.0,
    sharpness: float = 1.0,
    snr_db: float = 38.0,
    clipped: Sequence[float] = (),
    warnings: Sequence[Note] = (),
    model: bool = True,
) -> Result:
    """A result at that station. `ms_at_f4`: exposure at f/4; `sharpness` scales contrasts; `clipped`: unread stops."""
    readings = tuple(
        _reading(station, stop, i, patch, sharpness, stop in clipped, model)
        for stop in station.lens.stops
        for i, target in enumerate(station.targets)
        for patch in range(len(target.patches))
    )
    stops = tuple(_stop(station, stop, ms_at_f4, sharpness, snr_db, stop in clipped) for stop in station.lens.stops)
    return Result(
        recommendation=_recommendation(station, stops),
        stops=stops,
        readings=readings,
        camera=CameraNoise(2.61, 2.43, 15.9, 4095, 0.012, 0.08),
        model=LensModel(1.2, 0.82, 0.42, 1.08, 0.1, 0.02, 0.004) if model else LensModel(None, None, None, None),
        warnings=tuple(warnings),
        source=SourceFacts(6 * len(stops), "3f0c" * 16),
        curve=_curve(station, sharpness) if model else (),
        depth_map=_depth_map(station, sharpness) if model else None,
    )


def _contrast(station: Station, depth_mm: float, f_number: float, sharpness: float) -> float:
    """A perfect lens in focus, less a bell of defocus: a shape, not a law."""
    cutoff_um = station.scene.wavelength_nm * 1e-3 * f_number / station.magnification
    v = min(cutoff_um / (2 * station.need.feature_um), 1.0)
    perfect = 2 / math.pi * (math.acos(v) - v * math.sqrt(1 - v * v))
    off = (depth_mm - 1.2) / f_number / 2.2
    return 0.93 * sharpness * perfect * math.exp(-(off**2)) * (1 - 0.5 * math.exp(-((f_number / 2.2) ** 2)))


def _by_light(stop: float) -> float:
    return stop * (1 + 0.02 * math.sin(5 * stop)) if stop > 2 else stop


def _wobble(*key: float) -> float:
    """A made-up error between -1 and 1 that is the same each time."""
    return math.sin(sum((i + 1) * 12.9898 * k for i, k in enumerate(key)))


def _reading(
    station: Station, stop: float, target: int, patch: int, sharpness: float, clipped: bool, model: bool
) -> Reading:
    where = station.targets[target]
    kind = where.patches[patch].kind
    bare = Reading(stop, where.name, patch, kind, where.depth_mm, ok=True)
    if clipped:
        return replace(bare, ok=False, why_not=("frames-saturated",), saturated_fraction=0.31)
    if kind == "flat":
        return bare
    true = _contrast(station, where.depth_mm, _by_light(stop), sharpness)
    u = 0.004 + 0.006 * true
    seen = max(true + 1.5 * u * _wobble(stop, target, patch), 0.0)
    half = 0.08 + 0.2 * seen
    return replace(
        bare,
        mtf50_cy_px=half,
        mtf50_cy_px_u=0.01 * half,
        contrast_at_feature=seen,
        contrast_at_feature_u=u,
        smallest_feature_um=58.0 / (2 * half),
        smallest_feature_um_u=0.4,
        model_contrast=true if model else None,
        model_contrast_u=0.002 if model else None,
        model_mtf50_cy_px=1.003 * half if model else None,
        model_mtf50_cy_px_u=0.003 * half if model else None,
    )


def _stop(station: Station, stop: float, ms_at_f4: float, sharpness: float, snr_db: float, clipped: bool) -> Stop:
    need = station.need
    depths = {t.name: t.depth_mm for t in station.targets}
    depths |= {f"{depth_mm:+.3g} mm": depth_mm for depth_mm in need.depth_range_mm or ()}
    values = {name: _contrast(station, depth_mm, _by_light(stop), sharpness) for name, depth_mm in depths.items()}
    worst = min(values, key=lambda n: values[n])
    total = ms_at_f4 * (stop / 4) ** 2
    limit = need.max_exposure_ms or math.inf
    exposure = min(total, limit)
    gain = min(20 * math.log10(total / exposure), need.max_gain_db)
    snr = snr_db - 0.5 * gain
    why = [
        code
        for code, fails in (
            ("exposure", total > limit * 10 ** (need.max_gain_db / 20)),
            ("noise", need.min_snr_db is not None and snr < need.min_snr_db),
            ("contrast", values[worst] < need.contrast),
            ("no-reading", clipped),
        )
        if fails
    ]
    if not why and values[worst] < need.contrast + 0.006:
        why = ["unproven"]
    return Stop(
        stop=stop,
        f_number_by_light=_by_light(stop),
        f_number_by_light_u=0.004 * stop,
        exposure_ms=exposure,
        gain_db=gain,
        worst_target=worst,
        worst_contrast=values[worst],
        worst_contrast_u=0.004,
        snr_db=snr,
        meets_need=not why,
        why_not=tuple(why),
        chance_meets=0.8 if why == ["unproven"] else float(not why),
        exposure_needed_ms=total,
    )


def _recommendation(station: Station, stops: Sequence[Stop]) -> Recommendation:
    sound = [s for s in stops if "no-reading" not in s.why_not]
    pool = [s for s in sound if not {"exposure", "noise"} & set(s.why_not)] or sound
    if not pool:
        told = "No stop has a sound reading at every target, so none can be recommended; the warnings say what to take."
        return Recommendation(None, None, None, False, None, None, None, (), (told,))
    best = max(pool, key=lambda s: s.worst_contrast or 0.0)
    need = station.need
    return Recommendation(
        stop=best.stop,
        exposure_ms=best.exposure_ms,
        gain_db=best.gain_db,
        meets_need=best.meets_need,
        limited_by="diffraction" if best.stop > 5 else "depth",
        chance_best=0.93,
        optimum_f_number=7.1,
        reasons=(
            f"The sharpest stop that keeps exposure and noise is f/{best.stop:g}: at {best.worst_target}, the worst, a "
            f"feature of {need.feature_um:g} um keeps a contrast of {best.worst_contrast:.3f} (u 0.004); "
            f"{need.contrast:g} is needed.",
            f"Chance that f/{best.stop:g} meets the need: over 0.99; that no other usable stop is better: 0.93.",
            f"{best.exposure_ms:.3g} ms with {best.gain_db:.1f} dB of gain brings the light tone to 70 %.",
            f"Signal-to-noise ratio at the light tone: {best.snr_db:.1f} dB (30 dB wanted).",
            f"What costs most at {best.worst_target} is diffraction at the iris: 31 % of the contrast.",
        ),
        shortfalls=()
        if best.meets_need
        else (
            f"Contrast: {best.worst_contrast:.3f} at {best.worst_target} with f/{best.stop:g}, below the "
            f"{need.contrast:g} needed.",
            f"Move the plane of focus by 3.1 mm away from the camera: f/{best.stop:g} then reaches 0.412 at the worst "
            "target and meets the need.",
            "Not enough alone: a lens at the diffraction limit (0.21 at f/8).",
        ),
    )


def _curve(station: Station, sharpness: float) -> tuple[CurvePoint, ...]:
    low, high = station.lens.stops[0] / 1.19, station.lens.stops[-1] * 1.19
    n = 49
    depths = [(t.name, t.depth_mm) for t in station.targets]
    if station.need.depth_range_mm is not None:
        depths += [(f"{depth_mm:+.3g} mm", depth_mm) for depth_mm in station.need.depth_range_mm]
    return tuple(
        CurvePoint(name, f, _contrast(station, depth_mm, f, sharpness), 0.004)
        for name, depth_mm in depths
        for f in (low * (high / low) ** (i / (n - 1)) for i in range(n))
    )


def _depth_map(station: Station, sharpness: float) -> DepthMap:
    depths = station.need.depth_range_mm or tuple(t.depth_mm for t in station.targets)
    low, high = min(depths), max(depths)
    margin = (high - low) / 4 or 20.0
    mapped = tuple(low - margin + (high - low + 2 * margin) * i / 24 for i in range(25))
    rows = []
    for stop in station.lens.stops:
        contrast = tuple(_contrast(station, depth_mm, _by_light(stop), sharpness) for depth_mm in mapped)
        kept = [d for d, c in zip(mapped, contrast, strict=True) if c >= station.need.contrast]
        ends = (
            (None if kept[0] == mapped[0] else kept[0], None if kept[-1] == mapped[-1] else kept[-1]) if kept else None
        )
        finest = tuple(_finest(c) for c in contrast)
        targets = tuple(
            TargetDetail(t.name, fine and 0.6 * fine, fine)
            for t in station.targets
            for fine in [_finest(_contrast(station, t.depth_mm, _by_light(stop), sharpness))]
        )
        detected = tuple(f and 0.6 * f for f in finest)
        rows.append(DepthStop(stop, ends, contrast, (0.004,) * 25, detected, finest, targets))
    return DepthMap(station.need.part_contrast, mapped, tuple(rows))


def _finest(contrast: float) -> float | None:
    return 58.0 / (2 * (0.08 + 0.2 * contrast)) if contrast > 0.02 else None
