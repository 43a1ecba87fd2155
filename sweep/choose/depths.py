"""Contrast and the smallest detectable feature over depth and stop: data for a map, and the usable range of depths.

A feature is detected where its contrast-to-noise ratio over its own area reaches 5: the criterion of Rose (The
sensitivity performance of the human eye on an absolute scale, J. Opt. Soc. Am. 38, 196-208, 1948; the value 5 is from
memory). A bar of width w and of the part's own contrast c (Michelson) differs from its gap by 2 c T / (1 + c) of the
light tone, T the transfer at 1 / (2 w); the noise of its w x w area is that of one pixel at the light tone over its
width in pixels.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sweep.choose.chances import NYQUIST_CY_PX, motion_transfer
from sweep.choose.evidence import LensView, Place
from sweep.result import Stop
from sweep.station import Need

ROSE = 5.0
_COARSEST = 0.005  # cycles per pixel: the largest feature looked at, 100 pixels wide
_STEPS = 40


@dataclass(frozen=True, slots=True)
class DepthMap:
    """The model over depth and stop, at each stop's own setting, motion blur included.

    `contrast` (stops, depths) at `need.feature_um`; `smallest_um` (stops, depths), NaN where noise is unknown or
    nothing is detected; `usable_mm`, for each stop, the depths about its best one at which the contrast need is kept.
    """

    depths_mm: NDArray[np.float64]
    stops: tuple[float, ...]
    contrast: NDArray[np.float64]
    smallest_um: NDArray[np.float64]
    usable_mm: tuple[tuple[float, float] | None, ...]


def depth_map(
    need: Need, stops: Sequence[Stop], lens: LensView, places: Sequence[Place], part_contrast: float = 1.0
) -> DepthMap:
    """Contrast at the feature and the smallest detectable feature for each stop at each of `places`, nearest first.

    `part_contrast` is the part's own (Michelson) contrast, 0 to 1: a faint scratch is not a printed bar.
    """
    depths = np.array([p.depth_mm for p in places])
    contrast = np.array(
        [[_contrast(need, lens, k, s, p) for p in places] for k, s in enumerate(stops)], dtype=np.float64
    )
    smallest = np.array(
        [[_smallest_um(need, lens, k, s, p, part_contrast) for p in places] for k, s in enumerate(stops)],
        dtype=np.float64,
    )
    usable = tuple(_usable(depths, row, need.contrast) for row in contrast)
    return DepthMap(depths, tuple(s.stop for s in stops), contrast, smallest, usable)


def contrast_to_noise(transfer: float, snr_db: float, width_px: float, part_contrast: float) -> float:
    """Contrast-to-noise ratio of a bar over an area of its own width squared.

    `snr_db` is that of one pixel at the light tone; `width_px` the bar's width in pixels.
    """
    difference = 2 * part_contrast / (1 + part_contrast) * max(transfer, 0.0)
    return 10 ** (snr_db / 20) * difference * width_px


def _contrast(need: Need, lens: LensView, index: int, stop: Stop, place: Place) -> float:
    blur = float(motion_transfer(need, stop.exposure_ms, [place])[0])
    return max(lens.contrast(index, place), 0.0) * blur


def _smallest_um(need: Need, lens: LensView, index: int, stop: Stop, place: Place, part_contrast: float) -> float:
    """The width, um, down to which every larger bar reaches the criterion; NaN where not even the largest does."""
    snr_db = stop.snr_db
    if snr_db is None:
        return math.nan

    def spare(frequency: float) -> float:
        transfer = _contrast(need, lens, index, stop, replace(place, feature_cy_px=frequency))
        return contrast_to_noise(transfer, snr_db, 0.5 / frequency, part_contrast) - ROSE

    low = _COARSEST
    if spare(low) < 0:
        return math.nan
    for frequency in np.geomspace(_COARSEST, NYQUIST_CY_PX, _STEPS)[1:]:
        if spare(float(frequency)) < 0:
            high = float(frequency)
            while high / low > 1.001:
                middle = math.sqrt(low * high)
                low, high = (middle, high) if spare(middle) >= 0 else (low, middle)
            break
        low = float(frequency)
    return 0.5 / low * place.object_um_per_px


def _usable(depths: NDArray[np.float64], contrast: NDArray[np.float64], wanted: float) -> tuple[float, float] | None:
    """The depths around the best one at which the contrast is kept, the ends by straight lines between the depths."""
    best = int(np.argmax(contrast))
    if contrast[best] < wanted:
        return None
    ends = []
    for step, last in ((-1, 0), (1, len(depths) - 1)):
        k = best
        while k != last and contrast[k + step] >= wanted:
            k += step
        if k == last:
            ends.append(float(depths[k]))
            continue
        share = (contrast[k] - wanted) / (contrast[k] - contrast[k + step])
        ends.append(float(depths[k] + share * (depths[k + step] - depths[k])))
    return ends[0], ends[1]
