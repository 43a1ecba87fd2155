"""Names as the fonts at hand can show them."""

import re
from functools import cache
from pathlib import Path

import matplotlib
from matplotlib.ft2font import FT2Font

MISSING = "\N{WHITE SQUARE}"


def drawable(text: str) -> str:
    """The text with a square for each letter that the fonts of plot and page lack, and no control characters.

    Both come with their own copy of DejaVu, so that they look the same on each machine; whatever this lacks a
    page by PDF/A may not hold. `result.json` keeps every name as it is.
    """
    return "".join(c if ord(c) in _letters() else MISSING for c in text if c.isprintable())


def typeset(text: str) -> str:
    """A sentence with true micro and minus signs, drawable."""
    text = re.sub(r"(?<=\d) um\b", " \N{MICRO SIGN}m", text)
    return drawable(re.sub(r"(?<![\w\N{MINUS SIGN}-])-(?=\d)", "\N{MINUS SIGN}", text))


@cache
def _letters() -> frozenset[int]:
    fonts = Path(matplotlib.get_data_path()) / "fonts" / "ttf"
    return frozenset(FT2Font(fonts / "DejaVuSansMono.ttf").get_charmap())
