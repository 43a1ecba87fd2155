"""Sets of parallel bars of known period: their contrast at their own frequency.

The light is fitted, at the pixels where they lie, by a level with gradients and by the harmonics of a
square wave whose frequency vector is fitted too; bars next to the surround and a strip along the
region's borders stay out. Each frame has its own phase, so that a shift between frames blurs nothing.
A sine fitted to a square wave of contrast C reads (4/pi) C times the transfer at the bars' frequency
(J. W. Coltman, The specification of imaging properties by response to a sine wave input, J. Opt. Soc.
Am. 44(6), 468-471, 1954). The print's own contrast C is not in the bars: it is the stated modulation, or
it is had from the third and fifth harmonics by continuing the transfer's logarithm to zero frequency,
pooled over the stops, with an uncertainty to match.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from sweep.measure.bars_fit import LEVEL_TERMS, SQUARE_WAVE, BarsFit, Samples, design_of
from sweep.measure.linear import Bools, Floats

SATURATED_LIMIT = 0.01
PERIOD_TOLERANCE = 0.12
NYQUIST_CY_PX = 0.5
_BORDER_PX = 3.0
_FIRM = 6.0
_MODULATION_U = 0.01
_RATIO_U_LIMIT = 0.12
_CONTINUED_U = 0.005


@dataclass(frozen=True, slots=True)
class BarsMeasure:
    """What one set of bars says at one stop. Without `ok`, `why_not` holds codes and the figures are 0.

    `v_cy_px`: frequency found; `direction_deg`: of the frequency vector, from the x axis; `harmonics`:
    amplitude and u of the fundamental, third and fifth, unit of the samples, the last two positive where they have
    the sense that a square wave seen without reversal has, u infinite where they were not seen; `level`: mean
    level; `phase_rad`: of the fundamental at the region's first pixel; `shift_px`: (n,) of each frame along the
    frequency vector, with `shift_u_px`; `noise`: rms of a pixel of the mean frame about the fit.
    """

    ok: bool
    why_not: tuple[str, ...] = ()
    v_cy_px: float = 0.0
    direction_deg: float = 0.0
    harmonics: tuple[tuple[float, float], ...] = ((0.0, 0.0), (0.0, np.inf), (0.0, np.inf))
    level: float = 0.0
    phase_rad: float = 0.0
    shift_px: Floats = field(default_factory=lambda: np.empty(0))
    shift_u_px: float = 0.0
    noise: float = 0.0

    @property
    def relative(self) -> tuple[float, float]:
        """Amplitude of the fundamental as a part of the mean level, and its u."""
        amplitude, u = self.harmonics[0]
        return (amplitude / self.level, u / self.level) if self.level > 0 else (0.0, 0.0)


@dataclass(frozen=True, slots=True)
class BarsContrast:
    """Transfer at the bars' frequency, negative where reversed.

    `ratio`: light-dark half difference of the print over its mean level, with `ratio_u`, whose error all stops share.
    """

    contrast: float
    contrast_u: float
    bars_cy_px: float
    ratio: float
    ratio_u: float


def read_bars(
    x: Floats,
    y: Floats,
    values: Floats,
    valid: Bools | None,
    period_px: float,
    near: BarsMeasure | None = None,
) -> BarsMeasure:
    """Read one set of bars from n frames of one stop.

    x, y: (k,) sample positions in pixels from the region's first; values: (n, k) linear light; valid: (n, k), False
    where a sample must not count; period_px: as it should be; near: the same bars as seen at another stop, which
    tells frequency and phase of bars that are too soft to be found by themselves.
    Returns levels in the unit of `values`, frequencies in cycles per pixel. Valid for three periods and more, of two
    pixels and more.
    """
    good = np.isfinite(values) if valid is None else valid & np.isfinite(values)
    not_found = BarsMeasure(False, ("pattern-not-found",))
    if good.size < 64 or not 1 / NYQUIST_CY_PX <= period_px < 1e6 or np.ptp(x) < 8 or np.ptp(y) < 8:
        return not_found
    if np.mean(~good) > SATURATED_LIMIT:
        return BarsMeasure(False, ("frames-saturated",))
    shared = good.all(axis=0)
    levels = np.where(good, values, 0.0)[:, shared].mean(axis=1) if shared.any() else np.zeros(1)
    if not np.isfinite(levels).all() or levels.min() <= 0 or levels.min() < 0.2 * levels.max():
        return BarsMeasure(False, ("low-signal",))
    bars = Samples(x[shared], y[shared], values[:, shared] / levels[:, None], float(levels.mean()))
    wave = _strongest_wave(bars, period_px)
    measure = None if wave is None else _read(bars, wave, period_px)
    if measure is None and near is not None and near.ok:
        measure = _read_like(bars, near)
    return measure if measure is not None else not_found


def bars_contrasts(bars: Sequence[BarsMeasure | None], modulation: float = 1.0) -> list[BarsContrast | None]:
    """The contrast of one set of bars at every stop of a sweep.

    bars: one measure a stop, None or not `ok` where there is none; modulation: the print's own, 1 where it is not
    stated. Returns a list of the same length, with None where the print's contrast can't be known.
    """
    sound = [b for b in bars if b is not None and b.ok]
    ratio, ratio_u = _print_ratio(sound, modulation)
    if not sound or ratio_u > _RATIO_U_LIMIT * ratio:
        return [None] * len(bars)
    upright = max(sound, key=lambda b: b.relative[0])
    out: list[BarsContrast | None] = []
    for b in bars:
        if b is None or not b.ok:
            out.append(None)
            continue
        amplitude, u = b.relative
        contrast = amplitude / (SQUARE_WAVE * ratio) * (-1.0 if _opposed(b, upright) else 1.0)
        contrast_u = float(np.hypot(u / (SQUARE_WAVE * ratio), contrast * ratio_u / ratio))
        out.append(BarsContrast(float(contrast), contrast_u, b.v_cy_px, ratio, ratio_u))
    return out


def _opposed(b: BarsMeasure, upright: BarsMeasure) -> bool:
    """Whether light bars stand where dark ones stand in the other measure."""
    along = np.cos(np.radians(b.direction_deg - upright.direction_deg)) >= 0
    return bool(np.cos((b.phase_rad if along else -b.phase_rad) - upright.phase_rad) < 0)


def _print_ratio(sound: Sequence[BarsMeasure], modulation: float) -> tuple[float, float]:
    """Half difference over mean level of the print, and its u."""
    if modulation < 1:
        return modulation, _MODULATION_U * modulation
    logs, variances = [], []
    for b in sound:
        parts = [
            (k * a / (b.level * SQUARE_WAVE), k * u / (b.level * SQUARE_WAVE))
            for k, (a, u) in zip((1, 3, 5), b.harmonics, strict=True)
        ]
        if not all(a > 4 * u for a, u in parts):
            continue
        # the parabola through 1, 3, 5 times the frequency, at zero frequency
        weights = (15 / 8, -5 / 4, 3 / 8)
        logs.append(sum(w * np.log(a) for w, (a, _) in zip(weights, parts, strict=True)))
        noise = sum((w * u / a) ** 2 for w, (a, u) in zip(weights, parts, strict=True))
        variances.append(noise + (_CONTINUED_U / min(parts[2][0], 1.0)) ** 2)
    if not logs:
        return 1.0, 1.0
    w = 1 / np.array(variances)
    mean = float(np.sum(w * np.array(logs)) / np.sum(w))
    # neighbouring stops err alike, so that the best of them says how well it is known
    u = float(np.sqrt(min(variances)))
    return float(min(np.exp(mean), 1.0)), float(min(np.exp(mean), 1.0)) * u


def _strongest_wave(bars: Samples, period_px: float) -> tuple[float, float] | None:
    """The frequency vector of the strongest wave of that period in any direction; None where another is stronger."""
    x, y, mean = bars.x - bars.x.min(), bars.y - bars.y.min(), bars.values.mean(axis=0)
    width, height = int(np.ptp(x)) + 1, int(np.ptp(y)) + 1
    if max(width, height) > 4096:
        return None
    u, w = x / width, y / height
    terms = np.stack([np.ones_like(u), u, w, u * u, u * w, w * w], axis=1)
    image = np.zeros((height, width))
    taper = np.sin(np.pi * (x + 0.5) / width) * np.sin(np.pi * (y + 0.5) / height)
    rest = mean - terms @ np.linalg.lstsq(terms, mean, rcond=None)[0]
    image[np.rint(y).astype(int), np.rint(x).astype(int)] = rest * taper
    size = 1 << int(np.ceil(np.log2(2 * max(width, height))))
    power = np.abs(np.fft.rfft2(image, (size, size))) ** 2
    fx, fy = np.fft.rfftfreq(size)[None, :], np.fft.fftfreq(size)[:, None]
    v = np.hypot(fx, fy)
    wide = PERIOD_TOLERANCE + period_px / max(width, height)
    off = np.abs(v * period_px - 1)
    band = (off < wide) & (v <= NYQUIST_CY_PX)
    others = (off > 2 * wide) & (v * period_px > 0.45) & (v * period_px < 2.2) & (v <= NYQUIST_CY_PX)
    if not band.any():
        return None
    row, column = np.unravel_index(int(np.argmax(np.where(band, power, -1.0))), power.shape)
    if power[row, column] <= 0 or (others.any() and power[row, column] < 1.5 * power[others].max()):
        return None
    return float(fx[0, column]), float(fy[row, 0])


def _read(bars: Samples, wave: tuple[float, float], period_px: float) -> BarsMeasure | None:
    """Frequency vector by Gauss-Newton on the mean frame, then each frame's wave with its own phase."""
    core = _core(bars, wave)
    if core is None:
        return None
    inner = bars.part(core)
    f = np.array(wave)
    mean = inner.values.mean(axis=0)
    scale = max(float(np.ptp(inner.x)), float(np.ptp(inner.y)))
    for _ in range(4):
        design = design_of(inner, f)
        if len(mean) < 3 * design.shape[1]:
            return None
        coefficients = np.linalg.lstsq(design, mean, rcond=None)[0]
        c, s = coefficients[LEVEL_TERMS : LEVEL_TERMS + 2]
        cx, sx, cy, sy = coefficients[LEVEL_TERMS + 2 : LEVEL_TERMS + 6]
        if c * c + s * s <= 0:
            return None
        # a turn of the phase along x or y is a change of the frequency
        step = np.array([s * cx - c * sx, s * cy - c * sy]) / ((c * c + s * s) * 2 * np.pi * scale)
        f = f + step * min(1.0, 0.5 / scale / max(float(np.hypot(*step)), 1e-12))
    v = float(np.hypot(*f))
    if abs(v * period_px - 1) > PERIOD_TOLERANCE or not 0 < v <= NYQUIST_CY_PX:
        return None
    fit = BarsFit.of(inner, f)
    firm = fit is not None and abs(fit.together) > _FIRM * fit.u(0) and not fit.something_else()
    return _record(fit, float(np.angle(fit.together))) if fit is not None and firm else None


def _read_like(bars: Samples, near: BarsMeasure) -> BarsMeasure | None:
    """The wave of another stop's frequency and phase, however weak it is."""
    angle = np.radians(near.direction_deg)
    f = near.v_cy_px * np.array([np.cos(angle), np.sin(angle)])
    border = np.minimum.reduce(
        [
            bars.x - bars.x.min(),
            np.ptp(bars.x) + bars.x.min() - bars.x,
            bars.y - bars.y.min(),
            np.ptp(bars.y) + bars.y.min() - bars.y,
        ]
    )
    inner = bars.part(np.asarray(border >= _BORDER_PX))
    if len(inner.x) < 64:
        return None
    fit = BarsFit.of(inner, f)
    return None if fit is None else _record(fit, near.phase_rad + 2 * np.pi * float(f @ fit.middle))


def _core(bars: Samples, wave: tuple[float, float]) -> Bools | None:
    """The samples inside the set: where the wave is strong along and across, its ends and borders left out."""
    v = float(np.hypot(*wave))
    if v == 0.0:
        return None
    x, y = bars.x, bars.y
    across, along = (x * wave[0] + y * wave[1]) / v, (-x * wave[1] + y * wave[0]) / v
    border = np.minimum.reduce([x - x.min(), x.max() - x, y - y.min(), y.max() - y])
    inside = border >= _BORDER_PX
    for coordinate, step in ((across, 1 / v), (along, max(4.0, 0.5 / v))):
        if inside.sum() < 64:
            return None
        strength, slot = _strength(bars.values.mean(axis=0), across * v, coordinate, step, inside)
        first, last = _longest_run(strength > 0.6 * np.percentile(strength, 75))
        if last - first < 2:
            return None
        # next to the surround the first and last are of another contrast
        first, last = first + (first > 0), last - (last < len(strength) - 1)
        inside = inside & (slot >= first) & (slot <= last)
    return np.asarray(inside) if inside.sum() >= 64 else None


def _strength(
    mean: Floats, cycles: Floats, coordinate: Floats, step: float, inside: Bools
) -> tuple[Floats, NDArray[np.intp]]:
    """Amplitude of the wave in slices of `step` pixels along a coordinate, and the slice of each sample."""
    slot = np.floor((coordinate - float(coordinate[inside].min())) / step).astype(np.intp)
    slot[~inside] = -1
    s, value = slot[inside], mean[inside]
    slices = int(s.max()) + 1
    count = np.maximum(np.bincount(s, minlength=slices), 1)
    turn = np.exp(2j * np.pi * cycles[inside])
    rest = value - (np.bincount(s, value, slices) / count)[s]
    return 2 * np.hypot(
        np.bincount(s, rest * turn.real, slices), np.bincount(s, rest * turn.imag, slices)
    ) / count, slot


def _longest_run(strong: Bools) -> tuple[int, int]:
    """First and last index of the longest run of True."""
    best, start = (0, -1), 0
    for i, on in enumerate([*strong.tolist(), False]):
        if not on:
            if i - start > best[1] - best[0] + 1:
                best = (start, i - 1)
            start = i + 1
    return best


def _record(fit: BarsFit, phase: float) -> BarsMeasure | None:
    """The record; `phase` (rad) at the region's middle is that of the fundamental, to half a turn."""
    n = fit.waves.shape[1]
    if fit.level <= 0:
        return None
    strong = n > 1 and abs(fit.together) > _FIRM * fit.u(0)
    turn = np.exp(1j * np.angle(fit.waves[0] * np.conj(fit.together))) if strong else np.ones(n)
    first, third, fifth = (
        complex(np.mean(wave * np.conj(turn) ** h)) * np.exp(-1j * h * phase)
        for wave, h in zip(fit.waves, (1, 3, 5), strict=True)
    )
    # about a light bar's middle a square wave is cos a - cos 3a / 3 + cos 5a / 5
    parts = (
        (first.real, float(np.hypot(fit.u(0), fit.folded))),
        (-third.real, fit.u(1)),
        (fifth.real, fit.u(2)),
    )
    v = float(np.hypot(*fit.f))
    frame = fit.temporal if fit.temporal is not None else fit.noise
    least = max(abs(first), fit.u(0))
    return BarsMeasure(
        True,
        v_cy_px=v,
        direction_deg=float(np.degrees(np.arctan2(fit.f[1], fit.f[0]))),
        harmonics=tuple((float(a) * fit.unit, u * fit.unit) for a, u in parts),
        level=fit.level * fit.unit,
        phase_rad=float((phase - 2 * np.pi * float(fit.f @ fit.middle)) % (2 * np.pi)),
        shift_px=np.asarray(np.angle(turn / turn.mean()) / (2 * np.pi * v)),
        shift_u_px=frame * float(fit.units[0]) / (least * 2 * np.pi * v),
        noise=fit.noise * fit.unit,
    )
