"""The answer in few words, the same on screen, plot and page.

Codes and keys stay in the files; people read these words. Pure: records in, text out.
"""

import re

from sweep.choose.wording import chance, number
from sweep.result import NOTE_CODES, Note, Result, Stop
from sweep.station import Station

WHY_NOT = {
    "exposure": "too little light",
    "noise": "too noisy",
    "contrast": "too little contrast",
    "beyond-nyquist": "too fine for the pixels",
    "no-reading": "no sound reading",
    "unproven": "not proven",
}
"""What speaks against a stop, by the code in `why_not`."""

LIMITED_BY = {
    "depth": "depth: the targets do not all lie in focus",
    "aberration": "aberration: the lens's own errors",
    "diffraction": "diffraction at the iris",
    "sampling": "sampling: pixel size and sensor blur",
    "exposure": "exposure: a sharper stop gets too little light",
    "noise": "noise: a sharper stop is too noisy",
}
"""What stands in the way of a better contrast, by the code in `limited_by`."""

_COUNT = ("no", "one", "two", "three", "four", "five", "six", "seven", "eight", "nine")


def stop_name(stop: float) -> str:
    """A stop as engraved: `f/5.6`."""
    return f"f/{stop:g}"


def stop_verdict(stop: Stop) -> str:
    """Whether a stop meets the need, or what speaks against it."""
    if stop.meets_need:
        return "meets the need"
    return ", ".join(WHY_NOT.get(code, code) for code in stop.why_not) or "does not meet the need"


def setting(exposure_ms: float | None, gain_db: float | None) -> str:
    """Exposure and gain: `3.9 ms, 0 dB`."""
    if exposure_ms is None:
        return "exposure unknown"
    gain = f"{gain_db or 0.0:.1f}".removeprefix("-")
    return f"{number(exposure_ms)} ms, {'0' if gain == '0.0' else gain} dB"


def with_u(value: float | None, u: float | None, digits: int = 3) -> str:
    """A value with its expanded uncertainty, k = 2, never rounded to none: `0.412 ± 0.008`; a dash for no value."""
    if value is None:
        return "–"
    if not u:
        return f"{value:.{digits}f}"
    return f"{value:.{digits}f} ± {max(2 * u, 10**-digits):.{digits}f}"


def chosen_stop(result: Result) -> Stop | None:
    """The recommended stop's record."""
    return next((s for s in result.stops if s.stop == result.recommendation.stop), None)


def is_forecast(result: Result) -> bool:
    """Whether nothing has been measured: the result of a plan."""
    return result.source.frames == 0


def headline(result: Result, station: Station) -> str:
    """The answer in one sentence, without its full stop."""
    chosen = chosen_stop(result)
    if chosen is None:
        return "No stop can be recommended: none has a sound reading at every target"
    meets = result.recommendation.meets_need
    if is_forecast(result):
        name = stop_name(chosen.stop)
        if meets:
            return f"Forecast, nothing measured yet: {name} should meet the need {_where(station)}"
        return (
            f"Forecast, nothing measured yet: no stop should meet the need; the best is {name} ({stop_verdict(chosen)})"
        )
    use = f"{stop_name(chosen.stop)}, {setting(result.recommendation.exposure_ms, result.recommendation.gain_db)}"
    if meets:
        return f"{use}: meets the need {_where(station)}"
    if set(chosen.why_not) == {"unproven"}:
        return f"{use}: not proven to meet the need"
    return f"No stop meets the need; the best is {use} ({stop_verdict(chosen)})"


def contrast_line(result: Result, station: Station) -> str:
    """The worst target's contrast against the need, as a sentence."""
    chosen = chosen_stop(result)
    if chosen is None or chosen.worst_contrast is None or chosen.worst_target is None:
        return (
            f"A contrast of {station.need.contrast:g} is needed at a feature of {number(station.need.feature_um)} um."
        )
    return (
        f"Contrast of a {number(station.need.feature_um)} um feature at {chosen.worst_target}, the worst: "
        f"{with_u(chosen.worst_contrast, chosen.worst_contrast_u)} (k = 2); {station.need.contrast:g} is needed."
    )


def chance_line(result: Result, station: Station) -> str:
    """How sure the answer is, as a sentence; empty where there is none."""
    chosen = chosen_stop(result)
    if chosen is None:
        return ""
    return (
        f"Chance that it meets the need: {chance(chosen.chance_meets)} ({station.need.confidence:g} wanted). "
        f"Chance that no other usable stop is better: {chance(result.recommendation.chance_best)}."
    )


def told(note: Note) -> str:
    """A warning with what to do: its own text, and the remedy of its kind where the text does not say that already."""
    remedy = NOTE_CODES[note.code].remedy
    words, said = (set(re.findall(r"[a-z]{4,}", text.lower())) for text in (remedy, note.text))
    return note.text if 2 * len(words & said) >= len(words) else f"{note.text} {remedy}"


def _where(station: Station) -> str:
    if station.need.depth_range_mm is not None:
        near, far = station.need.depth_range_mm
        return f"at all depths from {near:g} to {far:g} mm"
    n = len(station.targets)
    if n == 1:
        return f"at {station.targets[0].name}"
    if n == 2:
        return "at both targets"
    return f"at all {_COUNT[n] if n < len(_COUNT) else n} targets"
