"""Names as the fonts at hand can show them."""

from functools import cache

from matplotlib.font_manager import findfont
from matplotlib.ft2font import FT2Font

MISSING = "\N{WHITE SQUARE}"


def drawable(text: str) -> str:
    """The text with a square for each letter that the fonts of plot and page lack, and no control characters.

    Both come with their own copy of DejaVu, so that they look the same on each machine; whatever this lacks a
    page by PDF/A may not hold. `result.json` keeps every name as it is.
    """
    return "".join(c if ord(c) in _letters() else MISSING for c in text if c.isprintable())


@cache
def _letters() -> frozenset[int]:
    return frozenset(FT2Font(findfont("DejaVu Sans Mono")).get_charmap())
