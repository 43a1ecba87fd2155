"""Where the sets of a tri-bar target are, and which element each belongs to, by their form and their order."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import fft
from scipy.ndimage import gaussian_filter, map_coordinates
from scipy.optimize import minimize

from sweep.measure.linear import Floats

_LEAST_WIDTH_PX, _FINEST_WIDTH_PX = 1.5, 1.0
_LIKENESS, _SURE_LIKENESS = 0.72, 0.85
_STEP = 2 ** (1 / 12)
_COARSE_WIDTH_PX = 5.0
_WINDOW = 3.3
_SIMPLEX = np.array([[0.0, 0.0, 0.0], [0.15, 0.0, 0.0], [0.0, 0.15, 0.0], [0.0, 0.0, 0.06]])


@dataclass(frozen=True, slots=True)
class Place:
    """Where one set is: number of its element, bars across the target's angle or along it, centre and bar width in px.

    `seen`: found by its form, not by where its neighbours lead.
    """

    number: int
    across: bool
    column: float
    row: float
    width: float
    seen: bool


@dataclass(frozen=True, slots=True)
class FoundSets:
    """The sets of a target: direction of the bars (rad, 0 to pi/2), object pixel (um), and the places."""

    angle: float
    um_per_px: float
    light_bars: bool
    places: tuple[Place, ...]


def line_width_um(number: int) -> float:
    """Width of a bar (um) of the element with that number: 0 for element 1 of group 0, 6 for element 1 of group 1."""
    return float(500.0 / 2 ** (number / 6))


def find_sets(image: Floats, group: int, um_per_px: float | None) -> FoundSets | None:
    """The sets in an image, (rows, columns), whose largest is of `group`; None where there is none."""
    angle = _angle(image)
    largest = None if um_per_px is None else 1.12 * line_width_um(6 * group) / um_per_px
    found = _best(image, angle, _candidates(image, angle, largest))
    light_bars = False
    if max((c.likeness for c in found), default=0.0) < _SURE_LIKENESS:
        inverted = _best(-image, angle, _candidates(-image, angle, largest))
        light_bars = sum(c.likeness**4 for c in inverted) > sum(c.likeness**4 for c in found)
        found = inverted if light_bars else found
    if not found:
        return None
    numbers, scale = _numbers(found, group, um_per_px)
    return FoundSets(angle, scale, light_bars, tuple(_places(found, numbers, image.shape)))


def _angle(image: Floats) -> float:
    """The direction of the bars, 0 to pi/2: that of most edges, a quarter turn being the same."""
    dx, dy = gaussian_filter(image, 1.5, order=(0, 1)), gaussian_filter(image, 1.5, order=(1, 0))
    return float(np.angle(np.sum((dx + 1j * dy) ** 4 / np.maximum(dx * dx + dy * dy, 1e-12))) / 4 % (np.pi / 2))


@dataclass(frozen=True, slots=True)
class _Candidate:
    """A place that looks like a set: how much (-1 to 1), centre and bar width in pixels, and the bars' direction."""

    likeness: float
    column: float
    row: float
    width: float
    across: bool


def _candidates(image: Floats, angle: float, largest: float | None) -> list[_Candidate]:
    """_places like a set, over all sizes up to `largest` and both directions; large ones on a coarser image."""
    out: list[_Candidate] = []
    width = min(min(image.shape) / 5.5, largest or np.inf)
    while width >= _LEAST_WIDTH_PX:
        coarser = max(1, int(width / _COARSE_WIDTH_PX))
        rows, columns = image.shape[0] // coarser, image.shape[1] // coarser
        small = image[: rows * coarser, : columns * coarser].reshape(rows, coarser, columns, coarser).mean(axis=(1, 3))
        for across, likeness in zip((False, True), _likeness(small, width / coarser, angle), strict=True):
            for row, column in _peaks(likeness, _LIKENESS, max(1, int(2 * width / coarser))):
                middle = (coarser - 1) / 2
                place = (column * coarser + middle, row * coarser + middle)
                out.append(_Candidate(float(likeness[row, column]), place[0], place[1], width, across))
        width /= _STEP
    return out


def _template(along: Floats, across: Floats, width: float) -> Floats:
    """Dark bars, a little soft, at distances along and across them; without mean over the window."""
    inside = 1 / (1 + np.exp(-(2.5 * width - np.abs(along)) / (0.25 * width)))
    bars = sum(1 / (1 + np.exp(-(0.5 * width - np.abs(across - k * width)) / (0.2 * width))) for k in (-2, 0, 2))
    window = (np.abs(along) < _WINDOW * width) & (np.abs(across) < _WINDOW * width)
    shape = -inside * bars * window
    return np.asarray((shape - shape.sum() / max(int(window.sum()), 1)) * window)


def _likeness(image: Floats, width: float, angle: float) -> list[Floats]:
    """Correlation, -1 to 1, of the image with sets of that bar width along and across a direction, at every place."""
    half = int(np.ceil(_WINDOW * width * np.sqrt(2)))
    dy, dx = np.mgrid[-half : half + 1, -half : half + 1]
    along, across = dx * np.cos(angle) + dy * np.sin(angle), -dx * np.sin(angle) + dy * np.cos(angle)
    window = ((np.abs(along) < _WINDOW * width) & (np.abs(across) < _WINDOW * width)).astype(float)
    wide = np.pad(image, half, "edge")
    size = [fft.next_fast_len(n + 2 * half, real=True) for n in wide.shape]
    seen, squared = fft.rfft2(wide, size), fft.rfft2(wide**2, size)
    flat = fft.rfft2(window, size)
    cut = tuple(slice(2 * half, 2 * half + n) for n in image.shape)
    mean = fft.irfft2(seen * flat, size)[cut] / window.sum()
    unrest = np.sqrt(np.maximum(fft.irfft2(squared * flat, size)[cut] - window.sum() * mean**2, 1e-6 * window.sum()))
    out = []
    for shape in (_template(along, across, width), _template(across, along, width)):
        answer = fft.irfft2(seen * fft.rfft2(shape[::-1, ::-1], size), size)[cut]
        likeness = answer / (unrest * np.sqrt(np.sum(shape**2)))
        edge = int(np.ceil(2.6 * width * (abs(np.cos(angle)) + abs(np.sin(angle)))))
        likeness[:edge], likeness[-edge:], likeness[:, :edge], likeness[:, -edge:] = -1, -1, -1, -1
        out.append(likeness)
    return out


def _peaks(likeness: Floats, least: float, apart: int) -> list[tuple[int, int]]:
    """Rows and columns of the highest places, no two nearer than `apart`."""
    rest = likeness.copy()
    out = []
    for _ in range(40):
        row, column = (int(i) for i in np.unravel_index(int(np.argmax(rest)), rest.shape))
        if rest[row, column] < least:
            break
        out.append((row, column))
        rest[max(0, row - apart) : row + apart + 1, max(0, column - apart) : column + apart + 1] = -1
    return out


def _best(image: Floats, angle: float, candidates: Sequence[_Candidate]) -> list[_Candidate]:
    """Of candidates for one place that which is most like a set, refined; none that has sets inside of its bars."""
    kept: list[_Candidate] = []
    for c in sorted(candidates, key=lambda c: -c.likeness):
        if not any(_near(c, k, 3.0) and max(c.width, k.width) < 1.6 * min(c.width, k.width) for k in kept):
            refined = _refined(image, angle + np.pi / 2 * c.across, c)
            if refined.likeness > _LIKENESS:
                kept.append(refined)
    return [c for c in kept if not any(k.width * 1.6 < c.width and _near(c, k, 2.7) for k in kept)]


def _near(a: _Candidate, b: _Candidate, widths: float) -> bool:
    """Whether two candidates are nearer than so many bar widths of the larger one."""
    return float(np.hypot(a.column - b.column, a.row - b.row)) < widths * max(a.width, b.width)


def _refined(image: Floats, direction: float, c: _Candidate) -> _Candidate:
    """The candidate where, and with the bar width with which, it is most like a set."""
    step = c.width / 5
    grid = np.arange(-_WINDOW * c.width, _WINDOW * c.width + step / 2, step)
    along, across = np.meshgrid(grid, grid)
    column = c.column + along * np.cos(direction) - across * np.sin(direction)
    row = c.row + along * np.sin(direction) + across * np.cos(direction)
    seen = map_coordinates(image, [row, column], order=1, mode="nearest")

    def unlike(p: Floats) -> float:
        shape = _template(along - p[0] * c.width, across - p[1] * c.width, c.width * np.exp(p[2]))
        rest = (seen - seen[shape != 0].mean()) * (shape != 0) if (shape != 0).any() else seen
        return -float(np.sum(shape * rest) / np.sqrt(max(float(np.sum(shape**2) * np.sum(rest**2)), 1e-12)))

    best = minimize(unlike, np.zeros(3), method="Nelder-Mead", options={"maxfev": 120, "initial_simplex": _SIMPLEX})
    p = best.x
    if np.abs(p).max() > 0.5:
        return c
    moved = (p[0] * np.cos(direction) - p[1] * np.sin(direction), p[0] * np.sin(direction) + p[1] * np.cos(direction))
    place = (c.column + moved[0] * c.width, c.row + moved[1] * c.width)
    return _Candidate(-float(best.fun), place[0], place[1], c.width * float(np.exp(p[2])), c.across)


def _numbers(found: Sequence[_Candidate], group: int, um_per_px: float | None) -> tuple[list[int], float]:
    """The element number of each set found, and the object pixel (um) that fits them all.

    Soft sets look smaller than they are, so that only the clearest of each family is numbered by its own size.
    """
    sixths = -6 * np.log2([c.width for c in found])
    families = _families(found)
    # what the size of a family's largest sets says of its first number
    heads = np.array([min(float(sixths[i]) - step for i, step in family) for family in families])
    weight = np.array([max(found[i].likeness for i, _ in family) ** 4 for family in families])
    rung = float(np.angle(np.sum(weight * np.exp(2j * np.pi * heads))) / (2 * np.pi))
    firsts = np.rint(heads - rung)
    if um_per_px is None:
        first = 6 * group
    else:
        # the group names the largest set: a stated scale that leads elsewhere is off by that much
        stated = rung + float(firsts.min()) + 6 * np.log2(500.0 / um_per_px)
        first = int(np.rint(min(max(stated, 6 * group), 6 * group + 5)))
    shift = first - firsts.min()
    numbers = [0] * len(found)
    for family, head in zip(families, firsts, strict=True):
        for i, step in family:
            numbers[i] = int(head + shift) + step
    return numbers, float(500.0 / 2 ** ((shift - rung) / 6))


def _families(found: Sequence[_Candidate]) -> list[list[tuple[int, int]]]:
    """Sets that hang together, with their elements counted from the family's largest: rows, and rows side by side."""
    steps: dict[int, tuple[int, int]] = {}
    count = 0
    for root in sorted(range(len(found)), key=lambda i: -found[i].width):
        if root in steps:
            continue
        steps[root], todo = (count, 0), [root]
        while todo:
            i = todo.pop()
            for j in range(len(found)):
                step = _step(found[i], found[j]) if j not in steps else None
                if step is not None:
                    steps[j] = (count, steps[i][1] + step)
                    todo.append(j)
        count += 1
    families: list[list[tuple[int, int]]] = [[] for _ in range(count)]
    for i, (family, step) in steps.items():
        families[family].append((i, step))
    return [[(i, step - min(s for _, s in family)) for i, step in family] for family in families]


def _step(a: _Candidate, b: _Candidate) -> int | None:
    """By how many elements two sets next to each other differ; None for sets that are not next to each other."""
    ratio, distance = b.width / a.width, float(np.hypot(b.column - a.column, b.row - a.row))
    if a.across != b.across:
        return 0 if 0.88 < ratio < 1.14 and 5.8 < distance / max(a.width, b.width) < 8.2 else None
    larger = max(a.width, b.width)
    if not (7.0 < distance / larger < 11.0 and 0.78 < min(ratio, 1 / ratio) < 0.96):
        return None
    return 1 if ratio < 1 else -1


def _places(found: Sequence[_Candidate], numbers: Sequence[int], shape: tuple[int, ...]) -> list[Place]:
    """The sets found, one of each kind, and those that their rows lead to."""
    places: dict[tuple[int, bool], Place] = {}
    for c, k in sorted(zip(found, numbers, strict=True), key=lambda pair: -pair[0].likeness):
        places.setdefault((k, c.across), Place(k, c.across, c.column, c.row, c.width, True))
    fit = np.array([(k, p.width) for (k, _), p in places.items()])
    unit = float(np.exp(np.median(np.log(fit[:, 1] * 2 ** (fit[:, 0] / 6)))))
    for across in (False, True):
        for first in sorted({k // 6 * 6 for k, a in places if a == across}):
            _continue_row(places, first, across, unit, shape)
    return sorted(places.values(), key=lambda p: (p.number, p.across))


def _continue_row(
    places: dict[tuple[int, bool], Place], first: int, across: bool, unit: float, shape: tuple[int, ...]
) -> None:
    """Elements 2 to 6 of a group stand in a row towards a point, each nearer to it as it is smaller."""
    row = [places[k, across] for k in range(first + 1, first + 6) if (k, across) in places]
    partner = [places[k, not across] for k in range(first + 1, first + 6) if (k, not across) in places]
    pairs = [(p, q) for p in row for q in partner if p.number == q.number]
    for k in range(first + 1, first + 6):
        width = unit / 2 ** (k / 6)
        if (k, across) in places or width < _FINEST_WIDTH_PX:
            continue
        guess = None
        other = places.get((k, not across))
        if pairs and other is not None:
            # the two sets of an element keep the same distance in bar widths
            near = min(pairs, key=lambda pair: abs(pair[0].number - k))
            shrunk = width / near[0].width
            guess = (
                other.column + (near[0].column - near[1].column) * shrunk,
                other.row + (near[0].row - near[1].row) * shrunk,
            )
        elif len(row) >= 2:
            size = np.array([2 ** (-p.number / 6) for p in row])
            design = np.stack([np.ones_like(size), size], axis=1)
            to = np.linalg.lstsq(design, np.array([(p.column, p.row) for p in row]), rcond=None)[0]
            guess = tuple(np.array([1, 2 ** (-k / 6)]) @ to)
        if (
            guess is not None
            and 3 * width < guess[0] < shape[1] - 3 * width
            and 3 * width < guess[1] < shape[0] - 3 * width
        ):
            places[k, across] = Place(k, across, float(guess[0]), float(guess[1]), width, False)
