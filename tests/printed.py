"""Printed patterns as a camera sees them, rendered for the tests of the measurements.

The print is drawn on a grid several times finer than the pixels, with its borders filled in by their
covered part, multiplied in the frequency domain by a transfer function known in closed form, and sampled
at the pixel centres. It shares no code with the package.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import j1

Floats = NDArray[np.float64]
FINER = 8


@dataclass(frozen=True)
class Blur:
    """A transfer function, lengths in pixels, made of factors known in closed form.

    A circular pupil of that cutoff (Born and Wolf, Principles of Optics; from memory), a disc of defocus, a Gaussian,
    the pixel's own box, and a further Gaussian along x alone (each its Fourier transform).
    """

    cutoff_cy_px: float = 1.2
    disc_px: float = 0.0
    gauss_px: float = 0.3
    smear_px: float = 0.0

    def round(self, v: Floats) -> Floats:
        """The part that is the same in all directions, at frequencies in cycles per pixel."""
        s = np.clip(v / self.cutoff_cy_px, 0, 1)
        x = np.maximum(2 * np.pi * v * self.disc_px, 1e-9)
        pupil = 2 / np.pi * (np.arccos(s) - s * np.sqrt(1 - s * s))
        return np.asarray(pupil * 2 * j1(x) / x * np.exp(-2 * (np.pi * self.gauss_px * v) ** 2))

    def along(self, v: Floats, direction_deg: float) -> Floats:
        """Transfer along one direction."""
        t = np.radians(direction_deg)
        return self.drawn(v) * self.crossed(v * np.cos(t), v * np.sin(t))

    def mean(self, v: Floats) -> Floats:
        """Transfer as the mean over directions."""
        v = np.atleast_1d(np.asarray(v, float))
        t = np.linspace(0, np.pi / 2, 91)
        return self.drawn(v) * np.mean(self.crossed(v[:, None] * np.cos(t), v[:, None] * np.sin(t)), axis=1)

    def crossed(self, vx: Floats, vy: Floats) -> Floats:
        """The part that depends on the direction: pixel box and smear."""
        return np.asarray(np.sinc(vx) * np.sinc(vy) * np.exp(-2 * (np.pi * self.smear_px * vx) ** 2))

    def drawn(self, v: Floats) -> Floats:
        """The round part with the small blur of filling in the borders on the finer grid."""
        return self.round(v) * np.sinc(v / FINER)


@dataclass(frozen=True)
class Star:
    """A sector star of `cycles` about `centre`, in the middle of a plain light surround; lengths in pixels."""

    cycles: int = 36
    centre: tuple[float, float] = (51.3, 51.8)
    rim_px: float = 47.8
    light: float = 1000.0
    dark: float = 300.0
    turn_rad: float = 0.3

    @property
    def hub_px(self) -> float:
        """Radius of the dark disc that covers what is too fine."""
        return 0.95 * self.cycles / (2 * np.pi)

    @property
    def half(self) -> float:
        """Light-dark half difference."""
        return (self.light - self.dark) / 2

    def print(self, x: Floats, y: Floats, step: float) -> Floats:
        """Tone at points of a grid of that step."""
        dx, dy = x - self.centre[0], y - self.centre[1]
        r = np.hypot(dx, dy)
        phase = self.cycles * np.arctan2(dy, dx) + self.turn_rad
        to_border = np.mod(phase + np.pi / 2, np.pi)
        distance = np.minimum(to_border, np.pi - to_border) / self.cycles * r * np.sign(np.cos(phase))
        wedge = self.dark + (self.light - self.dark) * _covered(distance, step)
        inside, hub = _covered(self.rim_px - r, step), _covered(self.hub_px - r, step)
        return (self.light * (1 - inside) + wedge * inside) * (1 - hub) + self.dark * hub


@dataclass(frozen=True)
class Bars:
    """Parallel bars of `period_px`, tilted, `count` of them about `centre` (without end where None)."""

    period_px: float = 7.3
    direction_deg: float = 3.0
    count: int | None = None
    centre: tuple[float, float] = (41.0, 27.0)
    length_px: float = 30.0
    light: float = 1000.0
    dark: float = 300.0

    @property
    def half(self) -> float:
        """Light-dark half difference."""
        return (self.light - self.dark) / 2

    def print(self, x: Floats, y: Floats, step: float) -> Floats:
        """Tone at points of a grid of that step."""
        t = np.radians(self.direction_deg)
        dx, dy = x - self.centre[0], y - self.centre[1]
        across, along = dx * np.cos(t) + dy * np.sin(t), -dx * np.sin(t) + dy * np.cos(t)
        inside = np.abs(np.mod(across / self.period_px + 0.5, 1) - 0.5) * self.period_px
        dark = _covered(self.period_px / 4 - inside, step)
        if self.count is not None:
            reach = (self.count - 0.5) * self.period_px / 2
            dark = dark * (np.abs(across) < reach) * _covered(self.length_px / 2 - np.abs(along), step)
        return self.light + (self.dark - self.light) * dark


@dataclass(frozen=True)
class Tribar:
    """Two groups of a 1951 tri-bar target: `width_px` is the bar width of element 1 of the larger one.

    Elements 2 to 6 stand in a row, each set 8.6 of its bar widths from the next and 6.8 from its partner, element 1 at
    the far side; the next group stands at half the size inside (proportions measured on a photograph of a target).
    """

    width_px: float = 9.0
    turn_deg: float = 17.0
    mirrored: bool = False
    centre: tuple[float, float] = (150.0, 150.0)
    light: float = 1000.0
    dark: float = 200.0

    def sets(self) -> list[tuple[int, bool, float, float, float]]:
        """Of each set: number of its element from element 1 of the larger group; bars upright; x, y and bar width."""
        out = []
        for group, (ox, oy) in ((0, (0.0, 0.0)), (1, (-7.0, 6.0))):
            shrink = self.width_px / 2**group
            x = -14.0
            for element in range(1, 6):
                r = 2 ** (-element / 6)
                out += [(6 * group + element, False, ox * self.width_px + x * shrink, oy * self.width_px, r * shrink)]
                out += [
                    (
                        6 * group + element,
                        True,
                        ox * self.width_px + x * shrink,
                        oy * self.width_px - 6.8 * r * shrink,
                        r * shrink,
                    )
                ]
                x += 8.6 * r
            far, low = 12.0 * shrink + (ox + 3 * group) * self.width_px, (5.0 + oy) * self.width_px / (1 + group)
            out += [(6 * group, False, far, low, shrink), (6 * group, True, far, low + 6.8 * shrink, shrink)]
        return [(k, upright, *self.place(x, y), w) for k, upright, x, y, w in out]

    def place(self, x: float, y: float) -> tuple[float, float]:
        """From the target's own coordinates to pixels."""
        t = np.radians(self.turn_deg)
        x = -x if self.mirrored else x
        return (
            float(self.centre[0] + x * np.cos(t) - y * np.sin(t)),
            float(self.centre[1] + x * np.sin(t) + y * np.cos(t)),
        )

    def print(self, x: Floats, y: Floats, step: float) -> Floats:
        """Tone at points of a grid of that step."""
        covered = np.zeros(np.broadcast_shapes(x.shape, y.shape))
        for _, upright, cx, cy, w in self.sets():
            t = np.radians(self.turn_deg + (90 if upright else 0))
            near_x, near_y = np.abs(x[0] - cx) < 4 * w, np.abs(y[:, 0] - cy) < 4 * w
            dx, dy = x[:, near_x] - cx, y[near_y] - cy
            along, across = dx * np.cos(t) + dy * np.sin(t), -dx * np.sin(t) + dy * np.cos(t)
            bars = sum(_covered(w / 2 - np.abs(across - k * w), step) for k in (-2, 0, 2))
            covered[np.ix_(near_y, near_x)] += bars * _covered(2.5 * w - np.abs(along), step)
        return self.light + (self.dark - self.light) * np.minimum(covered, 1)


def _covered(distance: Floats, step: float) -> Floats:
    return np.clip(0.5 + distance / step, 0, 1)


def render(
    pattern: Star | Bars | Tribar,
    size: tuple[int, int],
    blur: Blur,
    shift: tuple[float, float] = (0.0, 0.0),
    beyond: float = 0.5,
) -> Floats:
    """The image, (height, width), of a print, whose surround goes on `beyond` its borders by that part of its size."""
    width, height = size
    pad = (int(beyond * width), int(beyond * height))
    nx, ny = (width + 2 * pad[0]) * FINER, (height + 2 * pad[1]) * FINER
    x = (np.arange(nx) + 0.5) / FINER - 0.5 - pad[0] - shift[0]
    y = (np.arange(ny) + 0.5) / FINER - 0.5 - pad[1] - shift[1]
    drawn = pattern.print(x[None, :], y[:, None], 1 / FINER)
    fx, fy = np.fft.rfftfreq(nx)[None, :] * FINER, np.fft.fftfreq(ny)[:, None] * FINER
    transfer = blur.round(np.hypot(fx, fy)) * blur.crossed(fx, fy)
    # half of a fine step, from the middle of a fine cell to the middle of a pixel
    transfer = transfer * np.exp(-1j * np.pi * (fx + fy) / FINER)
    image = np.fft.irfft2(np.fft.rfft2(drawn) * transfer, (ny, nx))
    rows, columns = (pad[1] + np.arange(height)) * FINER + FINER // 2, (pad[0] + np.arange(width)) * FINER + FINER // 2
    return np.asarray(image[np.ix_(rows, columns)])


def samples(image: Floats, quincunx: bool = False) -> tuple[Floats, Floats, Floats]:
    """x, y and values of all pixels, or of the green ones of a mosaic."""
    rows, columns = np.mgrid[0 : image.shape[-2], 0 : image.shape[-1]]
    keep = (rows + columns) % 2 == 1 if quincunx else np.ones(rows.shape, bool)
    return columns[keep].astype(float), rows[keep].astype(float), np.atleast_2d(image[..., keep])


def noisy(
    image: Floats,
    frames: int,
    rng: np.random.Generator,
    electrons_per_dn: float = 5.0,
    read_dn: float = 3.0,
    pattern: Floats | float = 0.0,
) -> Floats:
    """Frames, (n, ...), with photon noise, read noise and the pixels' own gain pattern."""
    even = image * (1 + pattern)
    electrons = rng.poisson(np.maximum(even, 0) * electrons_per_dn, (frames, *image.shape))
    return np.asarray(electrons / electrons_per_dn + read_dn * rng.standard_normal((frames, *image.shape)))
