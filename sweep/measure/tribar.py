"""Tri-bar targets of 1951: which of their sets of three bars can be told apart.

A set is three bars, each five times as long as wide, a bar's width apart, and comes twice, with bars along and
across. Element E of group G has 2^(G + (E - 1)/6) line pairs per millimetre (MIL-STD-150A, 1959, cancelled 2006).
The sets are found by their form, at any angle, mirrored or not; those too soft to be found are looked for
where the row of their larger neighbours leads: in a row the sets' places shrink as their sizes do.

The criterion: a set is told apart when both of its gaps are lighter than the bars beside them. By how much,
against the unrest of the set's own surface (noise, dust) and against 1 % of its level, which the eye needs at
least, gives the chance of being told apart: a logistic with its half at a ratio of 3. An element is told apart
when both of its sets are, and so are all larger elements of the region.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter, map_coordinates

from sweep.measure.linear import Bools, Floats
from sweep.measure.tribar_find import Place, find_sets, line_width_um

SATURATED_LIMIT = 0.05
CONTRAST_FLOOR = 0.01
HALF_CHANCE_AT, CHANCE_SPREAD = 3.0, 0.6
_SAMPLES_PER_WIDTH = 8


@dataclass(frozen=True, slots=True)
class TribarSet:
    """One set of three bars: its element's number, counted from element 1 of group 0 in sixths of an octave.

    `across`: whether its bars run across the direction `TribarMeasure.angle_deg`; `centre_px`; `width_px`: of a bar;
    `depth`: by how much the less clear gap is lighter than its bars, part of the level; `depth_u`; `chance`: of being
    told apart, 0 to 1; `seen`: found by its form, not by its neighbours alone.
    """

    number: int
    across: bool
    centre_px: tuple[float, float]
    width_px: float
    depth: float
    depth_u: float
    chance: float
    seen: bool


@dataclass(frozen=True, slots=True)
class TribarElement:
    """One element of the target: `chance` that both of its sets are told apart; `line_um`: width of its bars."""

    group: int
    element: int
    line_um: float
    chance: float


@dataclass(frozen=True, slots=True)
class TribarMeasure:
    """What a tri-bar target says. Without `ok`, `why_not` holds codes and there are no elements.

    `angle_deg`: of the bars' direction, 0 to 90; `um_per_px`: as the sets' sizes have it; `light_bars`: bars lighter
    than their ground; `elements`: those with both sets in the region, from large to small; `smallest`: the last one
    that is told apart, None where none is.
    """

    ok: bool
    why_not: tuple[str, ...] = ()
    angle_deg: float = 0.0
    um_per_px: float = 0.0
    light_bars: bool = False
    sets: tuple[TribarSet, ...] = ()
    elements: tuple[TribarElement, ...] = ()
    smallest: TribarElement | None = None


def read_tribar(
    x: Floats,
    y: Floats,
    values: Floats,
    valid: Bools | None,
    group: int,
    um_per_px: float | None = None,
    near: TribarMeasure | None = None,
) -> TribarMeasure:
    """Find and judge the sets of a tri-bar target over n frames of one stop.

    x, y: (k,) sample positions in pixels from the region's first; values: (n, k) linear light; valid: (n, k), False
    where a sample must not count; group: of the largest set in the region; um_per_px: object pixel, by which that set
    is told from its neighbours; without it the largest set is taken for element 1; near: the same target as seen at
    another stop, best the sharpest one: its sets are judged where they were there. Valid for targets whose larger sets
    are seen clearly, at least once.
    """
    good = np.isfinite(values) if valid is None else valid & np.isfinite(values)
    if (
        good.size < 400
        or np.ptp(x) < 16
        or np.ptp(y) < 16
        or x.min() < 0
        or y.min() < 0
        or max(x.max(), y.max()) > 8192
    ):
        return TribarMeasure(False, ("pattern-not-found",))
    if np.mean(~good) > SATURATED_LIMIT:
        return TribarMeasure(False, ("frames-saturated",))
    level = float(np.mean(values[good] / 1e3)) * 1e3 if good.any() else 0.0
    if not 0 < level < np.inf:
        return TribarMeasure(False, ("low-signal",))
    values = values / level
    image = _image(x, y, values, good)
    if image is None:
        return TribarMeasure(False, ("low-signal",))
    noise = _noise(values, good)
    if near is not None and near.ok:
        places = [Place(s.number, s.across, *s.centre_px, s.width_px, s.seen) for s in near.sets]
        return _measure(image, np.radians(near.angle_deg), places, noise, near.um_per_px, near.light_bars)
    found = find_sets(image, group, um_per_px)
    if found is None:
        return TribarMeasure(False, ("pattern-not-found",))
    return _measure(image, found.angle, found.places, noise, found.um_per_px, found.light_bars)


def _measure(
    image: Floats, angle: float, places: Sequence[Place], noise: float, um_per_px: float, light_bars: bool
) -> TribarMeasure:
    """Every place judged, and what follows for the elements."""
    sets = tuple(_judge(image, angle, place, noise, -1.0 if light_bars else 1.0) for place in places)
    elements = _elements(sets)
    return TribarMeasure(True, (), float(np.degrees(angle)), um_per_px, light_bars, sets, elements, _smallest(elements))


def _image(x: Floats, y: Floats, values: Floats, good: Bools) -> Floats | None:
    """The mean frame on a grid, holes filled by their neighbours; None where it is mostly noise."""
    counts = good.sum(axis=0)
    mean = np.where(good, values, 0.0).sum(axis=0) / np.maximum(counts, 1)
    if np.abs(mean).max() > 1e6 or float(mean[counts > 0].std()) > 3:
        return None
    rows, columns = np.rint(y).astype(int), np.rint(x).astype(int)
    image = np.zeros((int(rows.max()) + 1, int(columns.max()) + 1))
    weight = np.zeros_like(image)
    image[rows, columns], weight[rows, columns] = mean * (counts > 0), counts > 0
    filled = gaussian_filter(image, 0.7) / np.maximum(gaussian_filter(weight, 0.7), 1e-6)
    return np.asarray(np.where(weight > 0, image, filled))


def _noise(values: Floats, good: Bools) -> float:
    """Noise of a pixel of the mean frame, unit of the samples, from the difference of two frames; 0 for one frame."""
    both = good[0] & good[-1]
    if len(values) < 2 or both.sum() < 2:
        return 0.0
    difference = values[0][both] - values[-1][both]
    return float(np.std(difference - difference.mean()) / np.sqrt(2 * len(values)))


def _judge(image: Floats, angle: float, place: Place, noise: float, dark: float) -> TribarSet:
    """Depth of the less clear gap of a set, where the set fits best near its place, and the chance it stands for."""
    direction = angle + np.pi / 2 * place.across
    reach = 0.6 if place.seen else 1.0
    offsets = np.linspace(-reach, reach, 9 if place.seen else 13) * place.width
    depths = [(_gaps(image, direction, place, float(o), dark), float(o)) for o in offsets]
    (depth, u, level), offset = max(depths, key=lambda d: d[0][0])
    total = float(np.hypot(np.hypot(u, noise / place.width * 1.2), CONTRAST_FLOOR * level))
    chance = 1 / (1 + np.exp(-np.clip((depth / total - HALF_CHANCE_AT) / CHANCE_SPREAD, -50, 50)))
    centre = (place.column - offset * np.sin(direction), place.row + offset * np.cos(direction))
    return TribarSet(
        place.number,
        place.across,
        (float(centre[0]), float(centre[1])),
        place.width,
        depth / level,
        total / level,
        float(chance),
        place.seen,
    )


def _gaps(image: Floats, direction: float, place: Place, offset: float, dark: float) -> tuple[float, float, float]:
    """Depth of the less clear gap against the bars beside it, its u from the unrest along, and the level.

    dark: 1 for dark bars, -1 for light ones.
    """
    step = 1 / _SAMPLES_PER_WIDTH
    s = np.arange(-2.5 + step / 2, 2.5, step) * place.width + offset
    t = np.arange(-1.75 + step / 2, 1.75, step) * place.width
    column = place.column + t[:, None] * np.cos(direction) - s * np.sin(direction)
    row = place.row + t[:, None] * np.sin(direction) + s * np.cos(direction)
    across = map_coordinates(image, [row, column], order=1, mode="nearest").reshape(len(t), 5, _SAMPLES_PER_WIDTH)
    inner = across[:, :, 2:-2].mean(axis=2)
    bands = inner.mean(axis=0) * dark
    gaps = [bands[1] - (bands[0] + bands[2]) / 2, bands[3] - (bands[2] + bands[4]) / 2]
    worse = int(np.argmin(gaps))
    along = inner[:, 2 * worse + 1] - (inner[:, 2 * worse] + inner[:, 2 * worse + 2]) / 2
    # neighbouring lines share their pixels: some 3.5 widths hold as many independent ones as pixels
    lines = max(2.0, min(len(t), 3.5 * place.width / 1.5))
    return float(min(gaps)), float(along.std() / np.sqrt(lines)), max(float(abs(bands.mean())), 1e-6)


def _elements(sets: Sequence[TribarSet]) -> tuple[TribarElement, ...]:
    """The elements whose two sets are in the region, from large to small."""
    chances = {(s.number, s.across): s.chance for s in sets}
    numbers = sorted({k for k, across in chances if (k, not across) in chances})
    return tuple(
        TribarElement(k // 6, k % 6 + 1, line_width_um(k), chances[k, False] * chances[k, True]) for k in numbers
    )


def _smallest(elements: Sequence[TribarElement]) -> TribarElement | None:
    """The last element before the first that is not told apart: beyond it bars can turn up again, reversed."""
    last = None
    for element in elements:
        if element.chance < 0.5:
            break
        last = element
    return last
