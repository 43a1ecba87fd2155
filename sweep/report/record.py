"""A result as pages that stand alone in a validation file: `record.pdf`, PDF/A-2b (ISO 19005-2).

The layout is `record.typ`; this module fills in the words. Whatever a user wrote goes in as data, never as markup, and
only fonts that come with the typesetter are used, so the same result gives the same bytes on each machine.
"""

import json
import re
from collections.abc import Sequence
from functools import cache
from importlib.resources import files
from typing import Any

import typst

from sweep import __version__
from sweep.choose.settings import exposure_limit_ms
from sweep.choose.wording import chance, number
from sweep.report.letters import MISSING, drawable
from sweep.result import NOTE_CODES, Reading, Result, Stop
from sweep.station import Station
from sweep.verdict import LIMITED_BY, contrast_line, headline, stop_name, stop_verdict, with_u

TITLE = "Record of an aperture sweep"
EPOCH = 0
"""The pages carry no date of their own (the one beside the signature counts); PDF/A wants one, so it is always this."""

_WORDS = {
    "page": "page",
    "set": "To be set",
    "shortfalls": "What falls short, and what would cure it",
    "reasons": "Why this setting",
    "warnings": "Warnings, and what to do",
    "stops": "The stops",
    "readings": "The readings",
    "need": "What the job needs",
    "numbers": "Camera and lens",
    "source": "What was analysed",
    "method": "How the numbers were made",
    "cautions": "Cautions",
}
_METHOD = (
    "Contrast is the modulation transfer of lens and camera together at the feature's frequency, 1 / (2 x feature) in "
    "object space, on linear light: by the slanted edge (ISO 12233:2023), fitted in the space domain; by a harmonic fit "
    "to rings of a sector star, or to a set of bars.",
    "Uncertainties come from the data and are combined by JCGM 100:2008; the tables state twice the standard uncertainty "
    "(k = 2). The lowest of several contrasts, and chances, come from joint draws (JCGM 101:2008). A need counts as met "
    "where its probability reaches the wanted confidence (JCGM 106:2012).",
    "Readings of all stops and depths are fitted at once by a wave-optical model of a circular pupil with defocus and "
    "spherical aberration (H. H. Hopkins, Proc. R. Soc. A 231, 91-103, 1955), pixel box and sensor blur. Where it does "
    "not describe the readings, these count for more.",
    "The f-number by light follows from the light per exposure at each stop, scaled so that the widest stop without "
    "clipping is as engraved. Camera figures by photon transfer (EMVA Standard 1288, Release 4.0 Linear, 2021).",
)
_CAUTIONS = (
    "Do not look into bright lamps. Flashing light can trigger seizures in some people.",
    "Stop and secure moving machinery before reaching into it; lock the ring and focus screws before it runs again.",
    "This record says what was measured at one time in one place. Measure again when lens, camera, light or distance "
    "change. Local rules, and the judgement of those licensed to practise, prevail.",
)
_FLAT = "–"


def record_pdf(result: Result, station: Station, plot_svg: bytes) -> bytes:
    """The record as PDF/A-2b, with the plot as vectors; the same bytes each time with the same libraries."""
    data = _set_in_type(_content(result, station))
    return typst.compile(  # type: ignore[no-any-return]
        files("sweep.report").joinpath("record.typ").read_bytes(),
        format="pdf",
        font_paths=_fonts(),
        sys_inputs={"data": json.dumps(data), "plot": plot_svg.decode()},
        pdf_standards="a-2b",
        timestamp=EPOCH,
    )


@cache
def _fonts() -> typst.Fonts:
    return typst.Fonts(include_system_fonts=False)


def _set_in_type(value: Any) -> Any:
    """Every text with a true micro sign, and with only letters that the fonts have."""
    if isinstance(value, dict):
        return {key: _set_in_type(v) for key, v in value.items()}
    if isinstance(value, list | tuple):
        return [_set_in_type(v) for v in value]
    return drawable(re.sub(r"(?<=\d) um\b", " µm", value)) if isinstance(value, str) else value


def _content(result: Result, station: Station) -> dict[str, Any]:
    names = [station.station.name, *(t.name for t in station.targets)]
    lacking = any(MISSING in drawable(n) and MISSING not in n for n in names)
    return {
        "title": TITLE,
        "station": station.station.name,
        "footer": f"Aperture Sweep {__version__}; source {result.source.sha256[:16]}"
        + (f"; {MISSING} stands for a letter that this page cannot show" if lacking else ""),
        "words": _WORDS,
        "headline": headline(result, station),
        "contrast": contrast_line(result, station),
        "confidence": _confidence(result, station),
        "set": _to_set(result),
        "shortfalls": result.recommendation.shortfalls,
        "reasons": result.recommendation.reasons,
        "warnings": [{"text": w.text, "remedy": NOTE_CODES[w.code].remedy} for w in result.warnings],
        "stops": _stops(result),
        "readings": _readings(result, station),
        "need": _need(station),
        "numbers": _numbers(result, station),
        "source": _source(result),
        "method": _METHOD,
        "cautions": _CAUTIONS,
        "sign": ("Date", "Name", "Signature"),
    }


def _confidence(result: Result, station: Station) -> str:
    chosen = next((s for s in result.stops if s.stop == result.recommendation.stop), None)
    if chosen is None:
        return ""
    return (
        f"Probability that it meets the need: {chance(chosen.chance_meets)} ({station.need.confidence:g} wanted). "
        f"Probability that no other usable stop is better: {chance(result.recommendation.chance_best)}."
    )


def _to_set(result: Result) -> list[tuple[str, str]]:
    found = result.recommendation
    if found.stop is None:
        return []
    rows = [("Stop", stop_name(found.stop))]
    if found.exposure_ms is not None:
        rows.append(("Exposure", f"{number(found.exposure_ms)} ms"))
    if found.gain_db is not None:
        rows.append(("Gain", f"{found.gain_db:.1f} dB"))
    if found.limited_by is not None:
        rows.append(("Limited by", LIMITED_BY[found.limited_by]))
    return rows


def _stops(result: Result) -> dict[str, Any]:
    head = ["Stop", "By light", "Exposure (ms)", "Gain (dB)", "SNR (dB)", "Worst target", "Contrast", "Verdict"]

    def cells(s: Stop) -> list[str]:
        return [
            stop_name(s.stop),
            with_u(s.f_number_by_light, s.f_number_by_light_u, 2),
            _or_dash(s.exposure_ms),
            _fixed(s.gain_db, 1),
            _fixed(s.snr_db, 1),
            s.worst_target or _FLAT,
            with_u(s.worst_contrast, s.worst_contrast_u),
            stop_verdict(s),
        ]

    body = [{"cells": cells(s), "bold": s.stop == result.recommendation.stop} for s in result.stops]
    note = (
        "± is twice the standard uncertainty. By light: the f-number that the light says. SNR: signal-to-noise ratio "
    )
    note += "of one pixel at the light tone. In bold: the recommended stop."
    return {"head": head, "body": body, "left": [5, 7], "note": note}


def _readings(result: Result, station: Station) -> dict[str, Any]:
    head = [
        "Stop",
        "Target",
        "Depth (mm)",
        "Patch",
        "Contrast",
        "Model",
        "Half-modulation (cycles/px)",
        "Smallest (µm)",
        "",
    ]

    def cells(r: Reading) -> list[str]:
        return [
            stop_name(r.stop),
            r.target,
            f"{r.depth_mm:g}",
            f"{r.patch} {r.kind}",
            with_u(r.contrast_at_feature, r.contrast_at_feature_u) + (" reversed" if r.reversed else ""),
            with_u(r.model_contrast, r.model_contrast_u),
            with_u(r.mtf50_cy_px, r.mtf50_cy_px_u, 4),
            with_u(r.smallest_feature_um, r.smallest_feature_um_u, 1),
            ", ".join(NOTE_CODES[c].meaning.rstrip(".") if c in NOTE_CODES else c for c in r.why_not),
        ]

    body = [{"cells": cells(r), "bold": False} for r in result.readings if r.kind != "flat"]
    note = (
        f"Contrast: of a {number(station.need.feature_um)} µm feature, by the pixels alone; Model: by readings and lens "
        "model together. Half-modulation: the frequency at which the transfer falls to one half. Smallest: the feature "
        f"that keeps a contrast of {station.need.contrast:g}. ± is twice the standard uncertainty."
    )
    return {"head": head, "body": body, "left": [1, 3, 8], "note": note}


def _need(station: Station) -> list[tuple[str, str]]:
    need = station.need
    rows = [
        ("Feature, width of one bar", f"{number(need.feature_um)} µm at the object"),
        ("Contrast", f"{need.contrast:g} at least, with a confidence of {need.confidence:g}"),
        ("Light tone", f"{100 * need.level:g} % of full scale"),
        ("Exposure", f"{number(exposure_limit_ms(station))} ms at most"),
        ("Gain", f"{need.max_gain_db:g} dB at most"),
    ]
    if need.min_snr_db is not None:
        rows.append(("Signal-to-noise ratio", f"{need.min_snr_db:g} dB at least"))
    if need.speed_mm_s:
        rows.append(("Speed of the part", f"{number(need.speed_mm_s)} mm/s"))
    if need.flicker_hz:
        rows.append(("Ripple of the light", f"{need.flicker_hz:g} Hz"))
    if need.depth_range_mm is not None:
        rows.append(("Depths", f"{need.depth_range_mm[0]:g} to {need.depth_range_mm[1]:g} mm"))
    return rows


def _numbers(result: Result, station: Station) -> list[tuple[str, str]]:
    camera, model, lens, scene = result.camera, result.model, station.lens, station.scene
    return [
        ("Lens", f"{lens.focal_length_mm:g} mm, pupil magnification {lens.pupil_magnification:g}"),
        ("Pixels", f"{station.camera.pixel_pitch_um:g} µm, {scene.object_um_per_px:g} µm at the object"),
        ("Wavelength", f"{scene.wavelength_nm:g} nm, bandwidth {scene.bandwidth_nm:g} nm"),
        ("Electrons per DN, at 0 dB", _value(camera.electrons_per_dn, camera.electrons_per_dn_u, "")),
        ("Read noise", _value(camera.read_noise_e, camera.read_noise_e_u, " electrons")),
        ("Black level, full scale", f"{number(camera.black_level_dn)} DN, {camera.full_scale_dn} DN"),
        ("Best focus, from the plane of focus", _value(model.best_focus_mm, model.best_focus_mm_u, " mm")),
        ("Spherical aberration, widest stop", _value(model.spherical_waves, model.spherical_waves_u, " waves")),
        ("Sensor blur", _value(model.blur_px, model.blur_px_u, " pixels")),
        ("Model against readings", f"reduced chi-square {_or_dash(model.reduced_chi2)}"),
        ("Best f-number by the model", _or_dash(result.recommendation.optimum_f_number)),
    ]


def _source(result: Result) -> list[tuple[str, str]]:
    return [
        ("Frames", str(result.source.frames)),
        ("SHA-256 over shots and files", result.source.sha256),
        ("Made by", f"Aperture Sweep {__version__}"),
    ]


def _value(value: float | None, u: float | None, unit: str) -> str:
    if value is None:
        return "unknown"
    return number(value) + ("" if u is None else f" ± {number(2 * u)}") + unit


def _or_dash(value: float | None) -> str:
    return _FLAT if value is None else number(value)


def _fixed(value: float | None, digits: int) -> str:
    return _FLAT if value is None else f"{value:.{digits}f}"


def _joined(parts: Sequence[str]) -> str:
    return ", ".join(p for p in parts if p)
