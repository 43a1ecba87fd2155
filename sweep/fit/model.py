"""From parameters to transfer curves and their slopes: the pupil of each view, at frequencies of its own."""

from collections.abc import Sequence

import numpy as np

from sweep.fit.fitted import LensFit
from sweep.fit.problem import BLUR2, COLOUR, FOCUS, MARK, W040, W060, Problem, View
from sweep.lens import Bench, Pupil, lens_transfer, lens_transfer_derivatives, pixel_box
from sweep.measure.linear import Floats

NODES = 44
HIGHEST_CY_PX = 2.0


class Optics:
    """The pupil as the parameters say, for a list of views, with the pupil's derivatives.

    A view's target -1 stands for a depth between targets, its stop -1 for an f-number between stops; these are then
    given by `depth_mm` and `ln_f_number` (on the scale of the light), one for each view.
    """

    def __init__(
        self,
        problem_or_fit: Problem | LensFit,
        views: Sequence[View],
        depth_mm: Floats | None = None,
        ln_f_number: Floats | None = None,
    ) -> None:
        self.bench = problem_or_fit.bench
        self.names = problem_or_fit.names
        self.stop = np.array([v.stop for v in views], dtype=int)
        self.target = np.array([v.target for v in views], dtype=int)
        self.twist = np.array(
            [0.0 if v.direction_deg is None else np.cos(2.0 * np.radians(v.direction_deg)) for v in views]
        )
        self.ln_light = np.log(problem_or_fit.light.f_number)[self.stop] if ln_f_number is None else ln_f_number
        self.widest = float(problem_or_fit.light.f_number.min())
        depths = problem_or_fit.depths_mm
        self.depth = depths[self.target] if depth_mm is None else depth_mm
        self.index = {name: i for i, name in enumerate(self.names)}

    def pupil(self, theta: Floats) -> Pupil:
        """The pupil of each view at parameters theta."""
        n = np.exp(self.ln_f_number(theta))
        ratio = self.widest / n
        return Pupil(
            n,
            self.bench.w020_waves(n, self.depth + self._own_focus(theta), theta[FOCUS]),
            theta[W040] * ratio**4,
            theta[W060] * ratio**6,
            theta[COLOUR] * ratio**2,
        )

    def ln_f_number(self, theta: Floats) -> Floats:
        """ln of each view's true f-number."""
        ring = np.array([theta[self.index[f"ring {k}"]] if k >= 0 else 0.0 for k in self.stop])
        return np.asarray(self.ln_light + theta[MARK] + ring)

    def _own_focus(self, theta: Floats) -> Floats:
        shift = np.array([theta[self.index[f"shift {t}"]] if t >= 0 else 0.0 for t in self.target])
        twist = np.array([theta[self.index[f"astigmatism {t}"]] if t >= 0 else 0.0 for t in self.target])
        return np.asarray(shift + self.twist * twist)

    def slopes(self, theta: Floats, pupil: Pupil) -> dict[int, tuple[Floats, ...]]:
        """By parameter index: derivatives of (w020, w040, w060, colour, ln N) of every view, each (views,)."""
        ratio = self.widest / pupil.f_number
        none = np.zeros(len(self.stop))
        h = 1e-4 * (self.bench.focal_length_mm / self.bench.magnification)
        own = self.depth + self._own_focus(theta)
        by_depth = (self.bench.w020_waves(pupil.f_number, own + h, theta[FOCUS]) - pupil.w020) / h
        by_focus = (self.bench.w020_waves(pupil.f_number, own, theta[FOCUS] + h) - pupil.w020) / h
        by_ln = (-2.0 * pupil.w020, -4.0 * pupil.w040, -6.0 * pupil.w060, -2.0 * pupil.colour, none + 1.0)
        out: dict[int, tuple[Floats, ...]] = {
            FOCUS: (by_focus, none, none, none, none),
            W040: (none, ratio**4, none, none, none),
            W060: (none, none, ratio**6, none, none),
            MARK: by_ln,
            COLOUR: (none, none, none, ratio**2, none),
        }
        for name, i in self.index.items():
            word, _, number = name.partition(" ")
            if word == "ring":
                out[i] = tuple(np.where(self.stop == int(number), c, 0.0) for c in by_ln)
            elif word in ("shift", "astigmatism"):
                mine = np.where(self.target == int(number), by_depth, 0.0)
                out[i] = (mine if word == "shift" else mine * self.twist, none, none, none, none)
        return out


class Frequencies:
    """Frequencies (views, n) in cycles per pixel, and the pixel box there."""

    def __init__(self, views: Sequence[View], v_cy_px: Floats) -> None:
        self.v = v_cy_px
        self.box = np.stack([pixel_box(v, view.direction_deg) for v, view in zip(v_cy_px, views, strict=True)])


class Nodes(Frequencies):
    """Chebyshev nodes in frequency for each view, and what the camera does there."""

    def __init__(self, bench: Bench, views: Sequence[View], f_number: Floats, count: int = NODES) -> None:
        grid = 0.5 * (1.0 - np.cos(np.pi * np.arange(count) / (count - 1)))
        top = np.minimum(HIGHEST_CY_PX, 1.03 * bench.cutoff_cy_px(f_number))
        self.top = top
        super().__init__(views, top[:, None] * grid)
        basis = np.polynomial.chebyshev.chebvander(2.0 * grid - 1.0, count - 1)
        self.to_coefficients = np.linalg.inv(basis)

    def interpolation(self, row: int, v: Floats) -> Floats:
        """Matrix (m, nodes): values at frequencies v from those at view `row`'s nodes; nothing beyond the last."""
        inside = np.clip(2.0 * v / self.top[row] - 1.0, -1.0, 1.0)
        matrix = np.polynomial.chebyshev.chebvander(inside, self.v.shape[1] - 1) @ self.to_coefficients
        return np.asarray(np.where((v <= self.top[row])[:, None], matrix, 0.0))


def transfer(optics: Optics, nodes: Frequencies, theta: Floats) -> Floats:
    """Signed transfer of lens and camera (views, nodes)."""
    blur = np.exp(-2.0 * np.pi**2 * theta[BLUR2] * nodes.v**2)
    return np.asarray(lens_transfer(optics.bench, optics.pupil(theta), nodes.v) * nodes.box * blur)


def transfer_slopes(optics: Optics, nodes: Frequencies, theta: Floats) -> tuple[Floats, Floats]:
    """The transfer (views, nodes) and its derivatives (parameters, views, nodes)."""
    pupil = optics.pupil(theta)
    value, *by = lens_transfer_derivatives(optics.bench, pupil, nodes.v)
    camera = nodes.box * np.exp(-2.0 * np.pi**2 * theta[BLUR2] * nodes.v**2)
    slopes = np.zeros((len(theta), *value.shape))
    for i, factors in optics.slopes(theta, pupil).items():
        for slope, factor in zip(by, factors, strict=True):
            if factor.any():
                slopes[i] += slope * factor[:, None]
    slopes *= camera
    slopes[BLUR2] = -2.0 * np.pi**2 * nodes.v**2 * value * camera
    return value * camera, slopes
