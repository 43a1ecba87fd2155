"""Where an edge runs: its curve, and a first, straight one from the pixels."""

from dataclasses import dataclass

import numpy as np

from sweep.measure.linear import Floats


@dataclass(frozen=True, slots=True)
class EdgeCurve:
    """Where an edge runs: position across = c0 + c1 t + c2 t^2, with t from -1 to 1 along it.

    `across_x`: the normal is near the x axis (else near y); `polarity` +1: light at the larger coordinate.
    """

    across_x: bool
    polarity: int
    coefficients: tuple[float, float, float]
    middle_px: float
    half_px: float

    @property
    def tilt(self) -> float:
        """Cosine of the angle between the normal and the axis."""
        return float(1.0 / np.hypot(1.0, self.coefficients[1] / self.half_px))

    @property
    def angle_deg(self) -> float:
        """Tilt of the edge from the nearest axis."""
        return float(np.degrees(np.arccos(self.tilt)))

    @property
    def direction_deg(self) -> float:
        """Direction of the normal from the x axis towards y, 0 to 180."""
        lean = float(np.degrees(np.arctan2(-self.coefficients[1] / self.half_px, 1.0)))
        return (lean if self.across_x else 90.0 - lean) % 180.0

    def along(self, x: Floats, y: Floats) -> Floats:
        """t of the points x, y (px)."""
        return ((y if self.across_x else x) - self.middle_px) / self.half_px

    def distance(self, x: Floats, y: Floats) -> Floats:
        """Signed distance from the edge along its normal, positive on the light side, px."""
        t = self.along(x, y)
        c0, c1, c2 = self.coefficients
        return np.asarray(self.polarity * self.tilt * ((x if self.across_x else y) - c0 - t * (c1 + t * c2)))

    def moved(self, c0: float, c1: float, c2: float) -> "EdgeCurve":
        """The curve with other coefficients."""
        return EdgeCurve(self.across_x, self.polarity, (c0, c1, c2), self.middle_px, self.half_px)


def find_line(x: Floats, y: Floats, mean: Floats) -> EdgeCurve | None:
    """A first, straight line through an edge, from the row by row crossing of the middle level; None where none is.

    x, y: (k,) sample positions, px; mean: (k,) light, NaN where there is none.
    """
    grid = _cell_grid(x, y, mean)
    if grid is None or min(grid[0].shape) < 8:
        return None
    image, cell = grid
    smooth = _box3(image)
    across_x = bool(np.abs(np.diff(smooth, axis=1)).mean() >= np.abs(np.diff(smooth, axis=0)).mean())
    rows = image if across_x else image.T
    lo, hi = np.percentile(rows, [8, 92])
    if not hi > lo:
        return None
    profile = rows.mean(axis=0)
    side = max(2, rows.shape[1] // 4)
    polarity = 1 if profile[-side:].mean() > profile[:side].mean() else -1
    crossing = _row_crossings(rows if polarity > 0 else (hi + lo) - rows, 0.5 * (lo + hi))
    t = np.arange(rows.shape[0], dtype=np.float64)
    line = _robust_line((t + 0.5) * cell - 0.5, (crossing * cell) + 0.5 * (cell - 1), cell)
    if line is None:
        return None
    offset, slope = line
    along = y if across_x else x
    middle, half = 0.5 * float(along.min() + along.max()), max(0.5 * float(np.ptp(along)), 1.0)
    return EdgeCurve(across_x, polarity, (offset + slope * middle, slope * half, 0.0), middle, half)


def _robust_line(t: Floats, where: Floats, cell: int) -> tuple[float, float] | None:
    """Offset and slope of a line through most of the rows' crossings, NaN where a row has none; None without a line."""
    found = np.isfinite(where)
    if found.sum() < max(6, 0.7 * len(t)):
        return None
    keep = found.copy()
    offset, slope = 0.0, 0.0
    for _ in range(4):
        offset, slope = (float(c) for c in np.polynomial.polynomial.polyfit(t[keep], where[keep], 1))
        off = np.abs(where - (offset + slope * t))
        keep = found & (off < max(1.5 * cell, 3.0 * float(np.median(off[keep]))))
        if keep.sum() < max(6, 0.6 * len(t)):
            return None
    return offset, slope


def _cell_grid(x: Floats, y: Floats, mean: Floats) -> tuple[Floats, int] | None:
    """The samples as an image: as they lie, or in cells of 2 x 2 pixels where every other one is missing."""
    width, height = int(x.max()) + 1, int(y.max()) + 1
    cell = 1 if len(x) > 0.75 * width * height else 2
    columns, rows = width // cell, height // cell
    if columns < 1 or rows < 1:
        return None
    cx, cy = (x // cell).astype(int), (y // cell).astype(int)
    inside = (cx < columns) & (cy < rows) & np.isfinite(mean)
    flat = cy[inside] * columns + cx[inside]
    count = np.bincount(flat, minlength=rows * columns)
    total = np.bincount(flat, weights=mean[inside], minlength=rows * columns)
    fill = float(np.median(mean[inside])) if inside.any() else 0.0
    return np.where(count > 0, total / np.maximum(count, 1), fill).reshape(rows, columns), cell


def _box3(image: Floats) -> Floats:
    padded = np.pad(image, 1, mode="edge")
    rows, columns = image.shape
    return np.asarray(sum(padded[i : i + rows, j : j + columns] for i in range(3) for j in range(3)) / 9.0)


def _row_crossings(rows: Floats, middle: float) -> Floats:
    """Where each row, smoothed over its neighbours, rises through `middle` once in effect; else NaN."""
    kernel = np.ones(3) / 3.0
    smooth = np.apply_along_axis(lambda r: np.convolve(np.pad(r, 1, mode="edge"), kernel, "valid"), 1, rows)
    step = np.cumsum(smooth - middle, axis=1)
    lowest = np.argmin(step, axis=1)
    out = np.full(len(rows), np.nan)
    for i, j in enumerate(lowest):
        if 0 <= j < rows.shape[1] - 1 and smooth[i, j + 1] > smooth[i, j]:
            out[i] = j + np.clip((middle - smooth[i, j]) / (smooth[i, j + 1] - smooth[i, j]), 0.0, 1.0)
    return out
