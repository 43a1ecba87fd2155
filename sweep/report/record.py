"""A result as pages that stand alone in a validation file: `record.pdf`, PDF/A-2b (ISO 19005-2).

The layout is `record.typ`; this module fills in the words. Whatever a user wrote goes in as data, never as markup, and
only fonts that come with the typesetter are used, so the same result gives the same bytes on each machine.
"""

import json
import math
import re
from collections.abc import Iterator
from functools import cache
from importlib.resources import files
from typing import Any

import typst

from sweep import __version__
from sweep.choose.settings import exposure_limit_ms
from sweep.choose.wording import number
from sweep.report.depth_plot import depths_explained
from sweep.report.letters import MISSING, drawable, typeset
from sweep.report.plot import explanation, headroom
from sweep.result import DepthMap, Reading, Result, Stop
from sweep.station import Station
from sweep.verdict import (
    LIMITED_BY,
    chance_line,
    chosen_stop,
    contrast_line,
    headline,
    is_forecast,
    stop_name,
    stop_verdict,
    told,
    with_u,
)

TITLE = "Record of an aperture sweep"
FORECAST = "Forecast for an aperture sweep"
EPOCH = 0
"""The pages carry no date of their own (the one beside the signature counts); PDF/A wants one, so it is always this."""

_WORDS = {
    "page": "page",
    "need": "What the job needs",
    "shortfalls": "What falls short, and what would cure it",
    "reasons": "Why this setting",
    "warnings": "Warnings, and what to do",
    "depths": "Contrast over depth and stop",
    "details": "The smallest feature told apart",
    "stops": "The stops",
    "readings": "The readings",
    "numbers": "Camera and lens, as found",
    "source": "What was analysed",
    "method": "How the numbers were made",
    "cautions": "Cautions",
}
_METHOD = (
    "Contrast is the modulation transfer of lens and camera together, on linear light, at the feature's frequency, "
    "1 / (2 x feature) in object space: by slanted edges (ISO 12233:2023), fitted in the space domain; by a harmonic "
    "fit to the rings of a sector star; or by a set of bars.",
    "Uncertainties come from the data (JCGM 100:2008). The lowest of several contrasts, and the chances, come from "
    "joint draws (JCGM 101:2008). A need counts as met where its chance reaches the wanted confidence (JCGM 106:2012).",
    "The lens model is fitted to all stops and depths at once: a circular pupil with defocus and spherical aberration "
    "(H. H. Hopkins, Proc. R. Soc. A 231, 91-103, 1955), pixel box and sensor blur. Where it does not describe the "
    "readings, these count for more.",
    "The f-number by light follows from the light per exposure, scaled so that the widest stop without clipping is as "
    "engraved. Noise by photon transfer (EMVA Standard 1288, Release 4.0 Linear, 2021).",
)
_FORECAST_METHOD = (
    "Contrast is the modulation transfer of lens and camera together at the feature's frequency, 1 / (2 x feature) in "
    "object space, by a model: a circular pupil with defocus and spherical aberration (H. H. Hopkins, Proc. R. Soc. A "
    "231, 91-103, 1955), pixel box and sensor blur. The reasons say which lens is assumed.",
    "The lowest of several contrasts, and the chances, come from joint draws of what is unsure (JCGM 101:2008). A need "
    "counts as met where its chance reaches the wanted confidence (JCGM 106:2012).",
)
_CAUTIONS = (
    "Do not look into bright lamps; flashing light can trigger seizures in some people.",
    "Stop and secure moving machinery before reaching into it. Lock the ring and focus screws before it runs again.",
    "This record says what was measured at one time in one place: measure again when lens, camera, light or distance "
    "change. Local rules and licensed practice prevail.",
)
_NO_PROOF = "A forecast proves nothing: take a sweep before relying on it. Local rules and licensed practice prevail."
_SIGN = (("Set by", "Date", "Signature"), ("Checked by", "Date", "Signature"))
_DASH = "–"


def record_pdf(result: Result, station: Station, plot_svg: bytes, depths_svg: bytes | None) -> bytes:
    """The record as PDF/A-2b, with plot and map as vectors; the same bytes each time with the same libraries."""
    data = _set_in_type(_content(result, station))
    pages: bytes = typst.compile(
        files("sweep.report").joinpath("record.typ").read_bytes(),
        format="pdf",
        font_paths=_fonts(),
        sys_inputs={"data": json.dumps(data), "plot": plot_svg.decode(), "depths": (depths_svg or b"").decode()},
        pdf_standards="a-2b",
        timestamp=EPOCH,
    )
    return pages


@cache
def _fonts() -> typst.Fonts:
    return typst.Fonts(include_system_fonts=False)


def _set_in_type(value: Any) -> Any:
    """Every text within, line by line, as the fonts can show it."""
    if isinstance(value, dict):
        return {key: _set_in_type(v) for key, v in value.items()}
    if isinstance(value, list | tuple):
        return [_set_in_type(v) for v in value]
    return "\n".join(map(typeset, value.split("\n"))) if isinstance(value, str) else value


def _content(result: Result, station: Station) -> dict[str, Any]:
    names = [station.station.name, *(t.name for t in station.targets)]
    lacking = any(drawable(name) != name for name in names)
    forecast = is_forecast(result)
    footer = f"Aperture Sweep {__version__}, {'a forecast' if forecast else f'source {result.source.sha256[:16]}'}"
    return {
        "title": FORECAST if forecast else TITLE,
        "station": station.station.name,
        "footer": footer + (f". {MISSING} stands for a letter that this page can't show" if lacking else ""),
        "words": _WORDS | {"numbers": "Camera and lens, as assumed"} if forecast else _WORDS,
        "headline": headline(result, station),
        "verdict": [line for line in _verdict(result, station) if line],
        "set_title": "To be set" if result.recommendation.meets_need and not forecast else "The best found",
        "set": _to_set(result),
        "need": _need(station),
        "shortfalls": result.recommendation.shortfalls,
        "reasons": result.recommendation.reasons,
        "explanation": explanation(result),
        "crop": headroom(result, station) - 0.01,
        "warnings": [told(w) for w in result.warnings],
        "depths": None if result.depth_map is None else depths_explained(result, station),
        "details": None if result.depth_map is None else _details(result.depth_map, result, station),
        "stops": _stops(result),
        "readings": _readings(result, station),
        "numbers": _numbers(result),
        "source": _source(result, station),
        "method": _FORECAST_METHOD if forecast else _METHOD,
        "cautions": (*_CAUTIONS[:-1], _NO_PROOF) if forecast else _CAUTIONS,
        "sign": () if forecast else _SIGN,
    }


def _verdict(result: Result, station: Station) -> list[str]:
    warnings = len(result.warnings)
    warned = f"{warnings} warning{'s' if warnings > 1 else ''}: see below." if warnings else "No warnings."
    return [contrast_line(result, station), chance_line(result, station), warned]


def _to_set(result: Result) -> list[tuple[str, str]]:
    found = result.recommendation
    if found.stop is None:
        return [("Stop", "none")]
    rows = [("Stop", stop_name(found.stop))]
    if found.exposure_ms is not None and found.gain_db is not None:
        rows += [("Exposure", f"{number(found.exposure_ms)} ms"), ("Gain", f"{number(found.gain_db)} dB")]
    chosen = chosen_stop(result)
    if chosen is not None and chosen.snr_db is not None:
        rows.append(("Signal to noise", f"{chosen.snr_db:.1f} dB"))
    if found.limited_by is not None:
        rows.append(("Limited by", LIMITED_BY[found.limited_by]))
    return rows


def _need(station: Station) -> list[tuple[str, str]]:
    need = station.need
    rows = [
        ("Feature", f"{number(need.feature_um)} um at the object (width of one bar)"),
        ("Contrast", f"{need.contrast:g}, with a confidence of {need.confidence:g}"),
        ("Light tone", f"{number(100 * need.level)} % of full scale"),
        ("Exposure", f"at most {number(exposure_limit_ms(station))} ms"),
        ("Gain", f"at most {need.max_gain_db:g} dB"),
    ]
    if need.min_snr_db is not None:
        rows.append(("Signal to noise", f"at least {need.min_snr_db:g} dB"))
    if need.speed_mm_s:
        rows.append(("Speed of the part", f"{number(need.speed_mm_s)} mm/s"))
    if need.flicker_hz:
        rows.append(("Ripple of the light", f"{need.flicker_hz:g} Hz"))
    if need.depth_range_mm is not None:
        rows.append(("Depths", f"{need.depth_range_mm[0]:g} to {need.depth_range_mm[1]:g} mm"))
    return rows


def _stops(result: Result) -> dict[str, Any]:
    head = ("Stop", "By light", "Exposure (ms)", "Gain (dB)", "S/N (dB)", "Worst target", "Its contrast", "Verdict")

    def cells(s: Stop) -> list[str]:
        return [
            stop_name(s.stop),
            with_u(s.f_number_by_light, s.f_number_by_light_u, 2),
            _rounded(s.exposure_ms),
            _fixed(s.gain_db, 1),
            _fixed(s.snr_db, 1),
            s.worst_target or _DASH,
            with_u(s.worst_contrast, s.worst_contrast_u),
            stop_verdict(s),
        ]

    return {
        "head": head,
        "left": [5, 7],
        "wide": [7],
        "rows": [{"cells": cells(s), "bold": s.stop == result.recommendation.stop} for s in result.stops],
        "note": "± is twice the standard uncertainty. By light: the f-number that the light says. S/N: signal-to-noise "
        "ratio of one pixel at the light tone. Bold: the recommended stop.",
    }


def _details(found: DepthMap, result: Result, station: Station) -> dict[str, Any]:
    """The smallest features, a column for each stop, nearest target first; two rows a target where noise is known."""
    need = station.need
    marks = [row.stop for row in found.stops]
    noise = any(s.snr_db is not None for s in result.stops)
    rows = []
    for target in sorted(station.targets, key=lambda t: t.depth_mm):
        told = [t for row in found.stops for t in row.targets if t.target == target.name]
        if not told:  # it has flats only
            continue
        if noise:
            rows.append([target.name, "detected", *(_rounded(t.smallest_detected_um) for t in told)])
        name = "" if noise else target.name
        rows.append([name, f"contrast {need.contrast:g}", *(_rounded(t.smallest_at_need_um) for t in told)])
    part = "" if need.part_contrast == 1 else f" of a part contrast of {need.part_contrast:g}"
    note = f"Width of one bar in \N{MICRO SIGN}m, by the lens model; {number(need.feature_um)} um is needed. "
    if noise:
        note += f"Detected: a bar{part} whose contrast-to-noise ratio over its own area reaches 5 (A. Rose, J. Opt. "
        note += "Soc. Am. 38, 196-208, 1948). "
    return {
        "head": ["Target", "", *(stop_name(m) for m in marks)],
        "left": [0, 1],
        "wide": [],
        "strong": marks.index(result.recommendation.stop) + 2 if result.recommendation.stop in marks else -1,
        "rows": [{"cells": cells, "bold": False} for cells in rows],
        "note": f"{note}Contrast {need.contrast:g}: a bar that keeps it. Never less than one pixel; a dash where even "
        "the largest is lost. Bold: the recommended stop.",
    }


def _readings(result: Result, station: Station) -> dict[str, Any]:
    head = ["Stop", "Target", "Depth (mm)", "Patch", "Contrast", "With model"]
    head += ["Half-modulation frequency (cycles/px)", "Smallest (\N{MICRO SIGN}m)", "Note"]

    def cells(r: Reading) -> list[str]:
        return [
            stop_name(r.stop),
            r.target,
            f"{r.depth_mm:g}",
            f"{r.patch}, {r.kind}",
            with_u(r.contrast_at_feature, r.contrast_at_feature_u),
            with_u(r.model_contrast, r.model_contrast_u),
            with_u(r.mtf50_cy_px, r.mtf50_cy_px_u, 4),
            with_u(r.smallest_feature_um, r.smallest_feature_um_u, 1),
            "; ".join(_remarks(r)),
        ]

    rows = [cells(r) for r in result.readings if r.kind != "flat"]
    width = len(head) if any(row[-1] for row in rows) else len(head) - 1
    return {
        "head": head[:width],
        "left": [1, 3, 8],
        "wide": [8] if width == len(head) else [],
        "rows": [{"cells": row[:width], "bold": False} for row in rows],
        "note": f"± is twice the standard uncertainty. Contrast: of a {number(station.need.feature_um)} um feature, by "
        "the pixels alone; with model: the best estimate from all readings together. Half-modulation frequency: where "
        f"the transfer falls to one half. Smallest: the feature that keeps a contrast of {station.need.contrast:g}.",
    }


def _remarks(reading: Reading) -> Iterator[str]:
    yield from (code.replace("-", " ") for code in reading.why_not)
    if reading.reversed:
        yield "reversed, counts as 0"
    if reading.contrast_at_bars is not None and reading.bars_cy_px is not None:
        bars = with_u(reading.contrast_at_bars, reading.contrast_at_bars_u)
        yield f"bars {bars} at {reading.bars_cy_px:.3f} cycles/px"
    if reading.smallest_element is not None and reading.smallest_element_um is not None:
        yield f"smallest element told apart: {reading.smallest_element}, {number(reading.smallest_element_um)} um"


def _numbers(result: Result) -> list[tuple[str, str]]:
    camera, model = result.camera, result.model
    return [
        ("Electrons per DN, at 0 dB", _value(camera.electrons_per_dn, camera.electrons_per_dn_u, "")),
        ("Read noise", _value(camera.read_noise_e, camera.read_noise_e_u, " electrons")),
        ("Black level; full scale", f"{number(camera.black_level_dn)} DN; {camera.full_scale_dn} DN"),
        ("Best focus, off its plane", _value(model.best_focus_mm, model.best_focus_mm_u, " mm")),
        ("Spherical aberration", _value(model.spherical_waves, model.spherical_waves_u, " waves, widest stop")),
        ("Sensor blur", _value(model.blur_px, model.blur_px_u, " pixels")),
        ("Reduced chi-square", _rounded(model.reduced_chi2)),
        ("Best f-number by the model", _rounded(result.recommendation.optimum_f_number)),
    ]


def _source(result: Result, station: Station) -> list[tuple[str, str]]:
    lens, scene = station.lens, station.scene
    measured = [
        ("Frames used", str(result.source.frames)),
        ("SHA-256 of all", "\n".join(re.findall(".{1,32}", result.source.sha256))),
    ]
    return [
        ("Lens", f"{lens.focal_length_mm:g} mm, pupil magnification {lens.pupil_magnification:g}"),
        ("Pixel", f"{station.camera.pixel_pitch_um:g} um; {scene.object_um_per_px:g} um at the object"),
        ("Wavelength", f"{scene.wavelength_nm:g} nm, bandwidth {scene.bandwidth_nm:g} nm"),
        *([("Frames used", "none: a forecast")] if is_forecast(result) else measured),
        ("Made by", f"Aperture Sweep {__version__}"),
    ]


def _value(value: float | None, u: float | None, unit: str) -> str:
    """A figure to the digits that its uncertainty bears."""
    if value is None:
        return "unknown"
    if not u:
        return number(value) + unit
    digits = max(1 - math.floor(math.log10(2 * u)), 0)
    return f"{value:.{digits}f} ± {2 * u:.{digits}f}{unit}"


def _rounded(value: float | None) -> str:
    return _DASH if value is None else number(value)


def _fixed(value: float | None, digits: int) -> str:
    return _DASH if value is None else f"{value:.{digits}f}"
