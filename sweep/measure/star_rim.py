"""A star's rim: where it is, and the mean level across it, from the wedges into the plain surround."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweep.measure.linear import Bools, Floats
from sweep.measure.star_find import RING_PX, Frames, Point, coarse_rings, inner_radius, polar, room

RING_BIN_PX = 0.5
_BLOCK_PX = 3
_BORDER_PX = 2.0


@dataclass(frozen=True, slots=True)
class RadialProfile:
    """Mean level over radius, across the rim: bins of pixels, wedges taken out, unit of the samples.

    `radius_px`, `value`, `u`: (b,); `ring`: (b,) True for whole rings of `RING_BIN_PX`, False for blocks of the
    region's corners; `border`: (b, d) how many of the region's four borders lie at 0, 1, ... pixels, mean of a bin.
    """

    radius_px: Floats
    value: Floats
    u: Floats
    ring: Bools
    border: Floats


def find_rim(frames: Frames, cycles: int, centre: Point) -> tuple[float | None, float]:
    """Radius of the star's outer end and the width of its blur (15 to 85 % of the step), pixels.

    The radius is None where the mean level makes no clear step inside the region.
    """
    inner, outer = inner_radius(cycles), room(centre, frames.size)
    radius, direction = polar(frames, centre)
    # wedges leave more behind in the mean of a narrow ring than noise does
    turn = direction**cycles
    rings = coarse_rings(radius, turn, frames.mean, np.ones_like(radius), 0.0, RING_PX)
    plain = frames.mean - (np.conj(rings.harmonic[rings.ring]) * turn).real
    edges = np.arange(0.0, outer + RING_BIN_PX / 2, RING_BIN_PX)
    slot = np.digitize(radius, edges) - 1
    count = np.bincount(slot, minlength=len(edges))[: len(edges)]
    level = np.bincount(slot, plain, len(edges))[: len(edges)] / np.maximum(count, 1)
    smooth = np.convolve(level, np.ones(3) / 3, "same")
    first, last = int(max(inner + 6, 0.5 * outer) / RING_BIN_PX), len(edges) - 8
    steps = [(abs(float(smooth[i + 4 : i + 7].mean() - smooth[i - 7 : i - 3].mean())), i) for i in range(first, last)]
    if not steps:
        return None, 0.0
    step, at = max(steps)
    begin = int((inner + 2) / RING_BIN_PX)
    plateau = level[begin : max(at - 12, begin + 4)]
    low = float(np.median(plateau))
    scatter = float(np.median(np.abs(plateau - low))) / 0.6745
    if step < max(6 * scatter, 0.04 * abs(low)):
        return None, 0.0
    high = float(smooth[at + 4 : at + 7].mean())
    window = slice(max(0, at - 10), at + 8)
    rise, radii = (level[window] - low) / (high - low), edges[window] + RING_BIN_PX / 2
    return _crossing(radii, rise, 0.5), _crossing(radii, rise, 0.85) - _crossing(radii, rise, 0.15)


def _crossing(radii: Floats, rise: Floats, level: float) -> float:
    """The last radius at which the rise goes through the level."""
    below = np.flatnonzero(rise < level)
    i = int(below[-1]) if below.size else 0
    if i + 1 >= len(rise):
        return float(radii[-1])
    part = (level - float(rise[i])) / max(float(rise[i + 1] - rise[i]), 1e-9)
    return float(radii[i] + (radii[i + 1] - radii[i]) * min(max(part, 0.0), 1.0))


def measure_profile(frames: Frames, cycles: int, centres: Floats, rim: float, noise: float) -> RadialProfile | None:
    """The level in whole rings as far as they fit into the region, then in blocks of its corners.

    frames: with light gradients taken out; centres: (n, 2) of the star in each; noise: rms of a pixel of the mean
    frame. None where the region holds too little of the surround.
    """
    bins = _Bins.of(frames, inner_radius(cycles) + 5, rim, (float(centres[:, 0].mean()), float(centres[:, 1].mean())))
    n, b = len(centres), bins.count
    square, right, far = np.zeros((b, 3, 3)), np.zeros((b, 3)), np.zeros(b)
    for value, weight, centre in zip(frames.values, frames.weight, centres, strict=True):
        radius, direction = polar(frames, (centre[0], centre[1]))
        slot, whole = bins.slot(radius)
        use = np.flatnonzero((slot >= 0) & (weight > 0))
        turn = np.where(whole, direction**cycles, 0.0)[use]
        columns = (np.ones(len(use)), turn.real, turn.imag)
        for i in range(3):
            right[:, i] += np.bincount(slot[use], columns[i] * value[use], b)
            for j in range(3):
                square[:, i, j] += np.bincount(slot[use], columns[i] * columns[j], b)
        far += np.bincount(slot[use], radius[use], b)
    samples = square[:, 0, 0]
    keep = samples >= np.where(np.arange(b) < bins.rings, 20 * n, 6 * n)
    if keep[bins.rings :].sum() < 3 or noise <= 0:
        return None
    inverse = np.linalg.pinv(square[keep], hermitian=True)
    level = np.einsum("ij,ij->i", inverse[:, 0], right[keep])
    u = noise * np.sqrt(n * inverse[:, 0, 0])
    ring = np.flatnonzero(keep) < bins.rings
    sound = ring | _like_most(level, u, ~ring)
    return RadialProfile(
        (far[keep] / samples[keep])[sound],
        level[sound] * frames.unit,
        u[sound] * frames.unit,
        ring[sound],
        bins.borders()[keep][sound],
    )


def _like_most(level: Floats, u: Floats, where: Bools) -> Bools:
    """Which of the marked bins are like most of them: a label or a stain in a corner is not."""
    middle = float(np.median(level[where]))
    spread = 1.4826 * float(np.median(np.abs(level[where] - middle))) + float(np.median(u[where]))
    return np.asarray(where & (np.abs(level - middle) < min(10 * spread, abs(middle) / 3)))


@dataclass(frozen=True, slots=True)
class _Bins:
    """Rings first, then blocks that fold the region's four corners onto one."""

    begin: float
    rings: int
    blocks: int
    block: NDArray[np.intp]
    corner_from: float
    distance: Floats
    radius: Floats

    @classmethod
    def of(cls, frames: Frames, begin: float, rim: float, centre: Point) -> "_Bins":
        width, height = frames.size
        distance = np.stack([frames.x, width - 1 - frames.x, frames.y, height - 1 - frames.y])
        whole_to = room(centre, frames.size) - _BORDER_PX - RING_BIN_PX
        rings = max(0, int((whole_to - begin) / RING_BIN_PX))
        near_x, near_y = np.minimum(distance[0], distance[1]), np.minimum(distance[2], distance[3])
        key = (near_x // _BLOCK_PX) * (max(width, height) + 1) + near_y // _BLOCK_PX
        blocks, block = np.unique(key, return_inverse=True)
        radius, _ = polar(frames, centre)
        return cls(begin, rings, len(blocks), block.reshape(-1), max(whole_to, rim + 1.5), distance, radius)

    @property
    def count(self) -> int:
        return self.rings + self.blocks

    def slot(self, radius: Floats) -> tuple[NDArray[np.intp], Bools]:
        """Bin of each sample, -1 for none, and whether that bin is a ring."""
        whole = (radius >= self.begin) & (radius < self.begin + self.rings * RING_BIN_PX)
        corner = ~whole & (radius >= self.corner_from) & (self.distance.min(axis=0) >= _BORDER_PX)
        slot = np.where(corner, self.rings + self.block, -1)
        slot[whole] = ((radius[whole] - self.begin) / RING_BIN_PX).astype(np.intp)
        return slot, whole

    def borders(self) -> Floats:
        """(b, d): for each bin, how many borders lie at 0, 1, ... pixels, mean over its samples."""
        slot, _ = self.slot(self.radius)
        used = slot >= 0
        d = int(self.distance.max()) + 1
        counts = np.zeros(self.count * d)
        for side in self.distance:
            counts += np.bincount(slot[used] * d + side[used].astype(np.intp), minlength=self.count * d)
        samples = np.maximum(np.bincount(slot[used], minlength=self.count), 1)
        return np.asarray(counts.reshape(self.count, d) / samples[:, None])
