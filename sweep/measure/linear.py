"""Pixel values to linear light, and the pixels of a patch as scattered samples.

Raw mosaics are measured on their green sites only, where they lie: nothing is interpolated.
"""

from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from sweep.frames import Pixels
from sweep.station import Layout, Region

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Sample = TypeVar("Sample", bound=np.generic)

COLOUR_SITES: dict[Layout, tuple[str, str]] = {
    "rggb": ("rg", "gb"),
    "grbg": ("gr", "bg"),
    "gbrg": ("gb", "rg"),
    "bggr": ("bg", "gr"),
}


@dataclass(frozen=True, slots=True)
class Sites:
    """Where the sharpness samples of a region lie, relative to its first pixel's centre.

    `x`, `y`: (k,) pixels; `flat_index`: (k,) into the region's pixels, row by row.
    """

    x: Floats
    y: Floats
    flat_index: NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Scale:
    """What turns stored values (DN) into linear light, in DN above black.

    `black_dn`: level without light; `full_dn`: top code; `response`: "linear", "srgb" or a display gamma.
    """

    black_dn: float
    full_dn: float
    response: str | float

    @property
    def span_dn(self) -> float:
        """Full scale less black."""
        return self.full_dn - self.black_dn

    def linear(self, dn: NDArray[np.generic] | Floats) -> Floats:
        """Light that made the values `dn` (any shape): black taken off first, then the response undone.

        The sRGB curve is that of IEC 61966-2-1:1999. Values below black keep their sign, so that
        noise around black averages to nothing.
        """
        above = np.asarray(dn, dtype=np.float64) - self.black_dn
        if self.response == "linear":
            return above
        part = np.abs(above) / self.span_dn
        if self.response == "srgb":
            light = np.where(part <= 0.04045, part / 12.92, ((part + 0.055) / 1.055) ** 2.4)
        else:
            light = part ** float(self.response)
        return np.asarray(np.sign(above) * light * self.span_dn)

    def stored(self, light_dn: float) -> float:
        """The stored value (DN, black included) that stands for an amount of linear light: the inverse of `linear`."""
        if self.response == "linear":
            return light_dn + self.black_dn
        part = max(light_dn, 0.0) / self.span_dn
        if self.response == "srgb":
            code = 12.92 * part if part <= 0.0031308 else 1.055 * part ** (1.0 / 2.4) - 0.055
        else:
            code = part ** (1.0 / float(self.response))
        return code * self.span_dn + self.black_dn

    def slope(self, dn: NDArray[np.generic] | Floats) -> Floats:
        """Linear DN per stored DN at the values `dn`: what one code step, and its rounding, is worth in light."""
        value = np.asarray(dn, dtype=np.float64)
        return np.asarray(self.linear(value + 0.5) - self.linear(value - 0.5))


def sharpness_sites(layout: Layout, region: Region) -> Sites:
    """The sites of `region` that carry sharpness: all of them, or the green ones of a mosaic.

    region: [x, y, width, height] in pixels of the frame.
    """
    left, top, width, height = region
    rows, columns = np.mgrid[0:height, 0:width]
    keep = np.ones((height, width), bool)
    if layout in COLOUR_SITES:
        keep = channel_mask(layout, region, "g")
    return Sites(columns[keep].astype(float), rows[keep].astype(float), np.flatnonzero(keep))


def channel_mask(layout: Layout, region: Region, channel: str) -> Bools:
    """Which pixels of a mosaic's region, (height, width), are of `channel` ("r", "g" or "b")."""
    left, top, width, height = region
    pattern = COLOUR_SITES[layout]
    rows, columns = np.mgrid[top : top + height, left : left + width]
    cell = np.array([[pattern[0][0], pattern[0][1]], [pattern[1][0], pattern[1][1]]])
    return np.asarray(cell[rows % 2, columns % 2] == channel)


def crop(pixels: Pixels, region: Region) -> Pixels:
    """The pixels of `region`, a view: (height, width) or (height, width, 3)."""
    left, top, width, height = region
    return pixels[top : top + height, left : left + width]


def sharpness_values(patch: NDArray[Sample], sites: Sites) -> NDArray[Sample]:
    """Values at the sites, (k,); from the green channel where there are three."""
    plane = patch[..., 1] if patch.ndim == 3 else patch
    return plane.reshape(-1)[sites.flat_index]
