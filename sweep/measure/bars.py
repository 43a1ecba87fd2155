"""Sets of parallel bars of known period: the amplitude of their fundamental, its frequency and direction.

The light is fitted, at the pixels where they lie, by a level with gradients and by the harmonics of a
square wave whose frequency vector is fitted too; the first and last bars, which see the surround, and a
strip along the region's borders stay out. Each frame has its own phase, so that a shift between frames
blurs nothing. A sine fitted to a square wave of contrast C reads (4/pi) C times the transfer at the
bars' frequency (J. W. Coltman, The specification of imaging properties by response to a sine wave
input, J. Opt. Soc. Am. 44(6), 468-471, 1954).
"""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from sweep.measure.linear import Bools, Floats

Complex = NDArray[np.complex128]

SATURATED_LIMIT = 0.01
PERIOD_TOLERANCE = 0.12
_BORDER_PX = 3.0
_HARMONICS = (1, 2, 3, 5)
_LEVEL_TERMS = 6


@dataclass(frozen=True, slots=True)
class BarsMeasure:
    """What one set of bars says at one stop. Without `ok`, `why_not` holds codes and the figures are 0.

    `v_cy_px`: frequency found, with `v_u`; `direction_deg`: of the frequency vector, from the x axis, -90 to 90;
    `amplitude`, `amplitude_u`: of the fundamental, in the unit of the samples, of which `pattern_u` comes back at
    every stop; `third`, `third_u`: of the third harmonic, positive where it has the sense that a square wave seen
    without reversal has; `level`: mean level; `phase_rad`: of the fundamental at the region's first pixel;
    `shift_px`: (n,) of each frame along the frequency vector, with `shift_u_px`; `noise`: rms of a pixel of the
    mean frame about the fit, of which `temporal_noise` differs from frame to frame.
    """

    ok: bool
    why_not: tuple[str, ...] = ()
    v_cy_px: float = 0.0
    v_u: float = 0.0
    direction_deg: float = 0.0
    amplitude: float = 0.0
    amplitude_u: float = 0.0
    pattern_u: float = 0.0
    third: float = 0.0
    third_u: float = 0.0
    level: float = 0.0
    phase_rad: float = 0.0
    shift_px: Floats = field(default_factory=lambda: np.empty(0))
    shift_u_px: float = 0.0
    noise: float = 0.0
    temporal_noise: float | None = None

    @property
    def relative(self) -> float:
        """Amplitude of the fundamental as a part of the mean level."""
        return self.amplitude / self.level if self.level > 0 else 0.0

    @property
    def relative_u(self) -> float:
        """Standard uncertainty of `relative`."""
        return self.amplitude_u / self.level if self.level > 0 else 0.0


def read_bars(
    x: Floats,
    y: Floats,
    values: Floats,
    valid: Bools | None,
    period_px: float,
    near_cy_px: tuple[float, float] | None = None,
) -> BarsMeasure:
    """Read one set of bars from n frames of one stop.

    x, y: (k,) sample positions in pixels from the region's first; values: (n, k) linear light; valid: (n, k), False
    where a sample must not count; period_px: as it should be; near_cy_px: frequency vector found at other stops, for
    bars that are too soft to be found by themselves. Returns levels in the unit of `values`, frequencies in cycles
    per pixel. Valid for three periods and more of two pixels and more.
    """
    good = np.isfinite(values) if valid is None else valid & np.isfinite(values)
    if values.size < 64 or not period_px >= 2.0 or np.ptp(x) < 8 or np.ptp(y) < 8:
        return BarsMeasure(False, ("pattern-not-found",))
    if np.mean(~good) > SATURATED_LIMIT:
        return BarsMeasure(False, ("frames-saturated",))
    shared = good.all(axis=0)
    levels = np.where(good, values, 0.0)[:, shared].mean(axis=1) if shared.any() else np.zeros(1)
    if not (levels > 0).all() or levels.min() < 0.2 * levels.max():
        return BarsMeasure(False, ("low-signal",))
    scaled = values[:, shared] * (levels.mean() / levels)[:, None]
    x, y = x[shared], y[shared]
    mean = scaled.mean(axis=0)
    wave = near_cy_px if near_cy_px is not None else _strongest_wave(x, y, mean, period_px)
    if wave is None:
        return BarsMeasure(False, ("pattern-not-found",))
    core = _core(x, y, mean, wave)
    if core is None:
        return BarsMeasure(False, ("pattern-not-found",))
    return _fit(x[core], y[core], scaled[:, core], wave, period_px, near_cy_px is not None)


def _strongest_wave(x: Floats, y: Floats, mean: Floats, period_px: float) -> tuple[float, float] | None:
    """The frequency vector of the strongest wave of that period in any direction; None where another is stronger."""
    left, top = x.min(), y.min()
    width, height = int(np.ptp(x)) + 1, int(np.ptp(y)) + 1
    image = np.zeros((height, width))
    rows, columns = np.rint(y - top).astype(int), np.rint(x - left).astype(int)
    taper = np.sin(np.pi * (x - left + 0.5) / width) * np.sin(np.pi * (y - top + 0.5) / height)
    terms = np.stack([np.ones_like(x), x, y, x * x, x * y, y * y], axis=1)
    image[rows, columns] = (mean - terms @ np.linalg.lstsq(terms, mean, rcond=None)[0]) * taper
    size = 1 << int(np.ceil(np.log2(2 * max(width, height))))
    power = np.abs(np.fft.rfft2(image, (size, size))) ** 2
    fy, fx = np.fft.fftfreq(size)[:, None], np.fft.rfftfreq(size)[None, :]
    v = np.hypot(fx, fy) * period_px
    wide = PERIOD_TOLERANCE + period_px / max(width, height)
    band = (v > 1 - wide) & (v < 1 + wide)
    others = (v > 0.45) & (v < 2.2) & ~((v > 1 - 2 * wide) & (v < 1 + 2 * wide)) & (np.hypot(fx, fy) < 0.5)
    if not band.any():
        return None
    at = np.unravel_index(int(np.argmax(np.where(band, power, -1.0))), power.shape)
    if others.any() and power[at] < 1.5 * power[others].max():
        return None
    return float(fx[0, at[1]]), float(fy[at[0], 0])


def _core(x: Floats, y: Floats, mean: Floats, wave: tuple[float, float]) -> Bools | None:
    """The samples inside the set: where the wave is strong along and across, its ends and borders left out."""
    v = float(np.hypot(*wave))
    across, along = (x * wave[0] + y * wave[1]) / v, (-x * wave[1] + y * wave[0]) / v
    border = np.minimum.reduce([x - x.min(), x.max() - x, y - y.min(), y.max() - y])
    inside = border >= _BORDER_PX
    for coordinate, step in ((across, 1 / v), (along, max(4.0, 0.5 / v))):
        strength, slot = _strength(mean, x * wave[0] + y * wave[1], coordinate, step, inside)
        if strength.size < 3:
            return None
        strong = strength > 0.6 * np.percentile(strength, 75)
        best = _longest_run(strong)
        first, last = best[0] + (best[0] > 0), best[1] - (best[1] < len(strong) - 1)
        inside = inside & (slot >= first) & (slot <= last)
        if inside.sum() < 64:
            return None
    return np.asarray(inside)


def _strength(
    mean: Floats, cycles: Floats, coordinate: Floats, step: float, inside: Bools
) -> tuple[Floats, NDArray[np.intp]]:
    """Amplitude of the wave in slices of `step` pixels along a coordinate, and the slice of each sample."""
    begin = float(coordinate[inside].min()) if inside.any() else 0.0
    slot = np.floor((coordinate - begin) / step).astype(np.intp)
    last = int(slot[inside].max()) if inside.any() else 0
    ok = inside & (slot >= 0)
    count = np.maximum(np.bincount(slot[ok], minlength=last + 1), 1)
    level = np.bincount(slot[ok], mean[ok], last + 1) / count
    rest = mean[ok] - level[slot[ok]]
    angle = 2 * np.pi * cycles[ok]
    c = np.bincount(slot[ok], rest * np.cos(angle), last + 1) / count
    s = np.bincount(slot[ok], rest * np.sin(angle), last + 1) / count
    return np.asarray(2 * np.hypot(c, s)), slot


def _longest_run(strong: Bools) -> tuple[int, int]:
    """First and last index of the longest run of True."""
    best, start = (0, -1), 0
    for i, on in enumerate([*strong.tolist(), False]):
        if not on:
            if i - start > best[1] - best[0] + 1:
                best = (start, i - 1)
            start = i + 1
    return best


def _fit(x: Floats, y: Floats, values: Floats, wave: tuple[float, float], period_px: float, given: bool) -> BarsMeasure:
    """Frequency vector by Gauss-Newton on the mean frame, then each frame's wave with its own phase."""
    not_found = BarsMeasure(False, ("pattern-not-found",))
    middle = (float(x.mean()), float(y.mean()))
    dx, dy = x - middle[0], y - middle[1]
    mean = values.mean(axis=0)
    f = np.array(wave)
    design = _design(dx, dy, f)
    if len(x) < 3 * design.shape[1]:
        return not_found
    for _ in range(4):
        coefficients = np.linalg.lstsq(design, mean, rcond=None)[0]
        c, s = coefficients[_LEVEL_TERMS : _LEVEL_TERMS + 2]
        power = c * c + s * s
        if power <= 0:
            return not_found
        if given:
            break
        # a turn of the phase along x or y is a change of the frequency
        cx, sx, cy, sy = coefficients[-4:]
        scale = max(float(np.ptp(x)), float(np.ptp(y)))
        step = np.array([s * cx - c * sx, s * cy - c * sy]) / (power * 2 * np.pi * scale)
        step *= min(1.0, 0.5 / scale / max(float(np.hypot(*step)), 1e-12))
        f = f + step
        design = _design(dx, dy, f)
    v = float(np.hypot(*f))
    if not 1 - PERIOD_TOLERANCE < v * period_px < 1 + PERIOD_TOLERANCE or not 0 < v <= 0.5:
        return not_found
    return _measure(design, values, f, middle, given)


def _design(dx: Floats, dy: Floats, f: Floats) -> Floats:
    """Columns: level with its gradients, the harmonics, and the change of the fundamental along x and y."""
    angle = 2 * np.pi * (dx * f[0] + dy * f[1])
    scale = max(float(np.ptp(dx)), float(np.ptp(dy)), 1.0)
    u, w = dx / scale, dy / scale
    waves = [part for h in _HARMONICS for part in (np.cos(h * angle), np.sin(h * angle))]
    return np.stack(
        [np.ones_like(u), u, w, u * u, u * w, w * w, *waves, u * waves[0], u * waves[1], w * waves[0], w * waves[1]], 1
    )


def _measure(design: Floats, values: Floats, f: Floats, middle: tuple[float, float], given: bool) -> BarsMeasure:
    """Amplitude, phases and noise from the fit of each frame."""
    n, k = values.shape
    square = design.T @ design
    inverse = np.linalg.pinv(square, hermitian=True)
    coefficients = inverse @ (design.T @ values.T)
    rest = values - (design @ coefficients).T
    used = _tame(rest)
    if not used.all():
        design, values = design[used], values[:, used]
        inverse = np.linalg.pinv(design.T @ design, hermitian=True)
        coefficients = inverse @ (design.T @ values.T)
        rest = values - (design @ coefficients).T
        k = len(design)
    mean_rest = rest.mean(axis=0)
    freedom = max(k - design.shape[1], 1)
    noise = float(np.sqrt(np.sum(mean_rest**2) / freedom))
    temporal = float(np.sqrt(np.sum((rest - mean_rest) ** 2) / (freedom * (n - 1)))) if n > 1 else None
    first, third = _LEVEL_TERMS, _LEVEL_TERMS + 4
    unit = float(np.sqrt((inverse[first, first] + inverse[first + 1, first + 1]) / 2))
    unit3 = float(np.sqrt((inverse[third, third] + inverse[third + 1, third + 1]) / 2))
    wave = coefficients[first] - 1j * coefficients[first + 1]
    total = complex(wave.mean())
    turn = np.exp(1j * np.angle(wave * np.conj(total))) if n > 1 and abs(total) > 5 * noise * unit else np.ones(n)
    together = complex(np.mean(wave * np.conj(turn)))
    amplitude = float(np.sqrt(max(abs(together) ** 2 - (noise * unit) ** 2, 0.0)))
    level = float(coefficients[0].mean())
    if level <= 0 or noise <= 0 or (not given and abs(together) < 6 * noise * unit):
        return BarsMeasure(False, ("pattern-not-found",))
    harmonic = complex(np.mean((coefficients[third] - 1j * coefficients[third + 1]) * np.conj(turn) ** 3))
    # a square wave about a bar's middle is cos a - cos 3a / 3 + ...: the third runs against three times the phase
    against = -(harmonic * np.conj(together / abs(together)) ** 3).real if abs(together) > 0 else 0.0
    v = float(np.hypot(*f))
    frame = temporal if temporal is not None else noise
    pattern = float(np.sqrt(max(noise**2 - frame**2 / n, 0.0))) if n > 1 else 0.0
    phase = np.angle(together) - 2 * np.pi * (f[0] * middle[0] + f[1] * middle[1])
    angle = np.degrees(np.arctan2(f[1], f[0]))
    return BarsMeasure(
        True,
        v_cy_px=v,
        v_u=noise * unit * 3.5 / (2 * np.pi * max(amplitude, noise * unit) * np.sqrt(k)),
        direction_deg=float((angle + 90) % 180 - 90),
        amplitude=amplitude,
        amplitude_u=noise * unit,
        pattern_u=pattern * unit,
        third=float(against),
        third_u=noise * unit3,
        level=level,
        phase_rad=float(phase % (2 * np.pi)),
        shift_px=np.angle(turn / turn.mean()) / (2 * np.pi * v) if n > 1 else np.zeros(1),
        shift_u_px=frame * unit / (max(amplitude, noise * unit) * 2 * np.pi * v),
        noise=noise,
        temporal_noise=temporal,
    )


def _tame(rest: Floats) -> Bools:
    """Samples whose mean residual noise can explain: within six times the robust scatter."""
    mean = rest.mean(axis=0)
    return np.asarray(np.abs(mean) <= 6 * 1.4826 * max(float(np.median(np.abs(mean))), 1e-300))
