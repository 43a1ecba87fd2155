"""Numbers and lists as people read them."""

import math
from collections.abc import Callable, Sequence


def number(value: float) -> str:
    """Three significant digits, without an exponent."""
    return _written(value, round)


def at_least(value: float) -> str:
    """Three significant digits, rounded up: what has to be reached."""
    return _written(value, math.ceil)


def at_most(value: float) -> str:
    """Three significant digits, rounded down: what must not be passed."""
    return _written(value, math.floor)


def chance(value: float | None) -> str:
    """A probability, never rounded to certainty."""
    if value is None:
        return "unknown"
    if value > 0.99:
        return "over 0.99"
    return "under 0.01" if value < 0.01 else f"{value:.2f}"


def listed(names: Sequence[str]) -> str:
    """Names joined by commas and a last `and`."""
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def _written(value: float, rounding: Callable[[float], int]) -> str:
    if not value or not math.isfinite(value):
        return f"{value:g}"
    digits = max(2 - math.floor(math.log10(abs(value))), 0)
    # A ten-thousandth of a digit is forgiven, so that 2.3 stays 2.3 whichever way it is rounded.
    scaled = value * 10**digits
    whole = round(scaled) if abs(scaled - round(scaled)) < 1e-4 else rounding(scaled)
    text = f"{whole / 10**digits:.{digits}f}"
    return text.rstrip("0").rstrip(".") if "." in text else text
