"""A pulsing lamp, from the levels of strips of rows over frames at odd moments.

The periodogram is the least-squares one of N. R. Lomb, Least-squares frequency analysis of unequally spaced data,
Astrophys. Space Sci. 39, 447-462 (1976), summed over the strips, since a shutter that rolls shows each another phase.
Valid for ripple below half of `MOST_HZ` or above it by folding only: then the frequency is one of several.
"""

import math
from dataclasses import dataclass

import numpy as np

from sweep.measure.linear import Floats

MOST_HZ = 400.0
LEAST_HZ = 1.0
PER_RESOLUTION = 5.0
REFINED = 21
MAINS_HZ = (100.0, 120.0)
MAINS_OFF_HZ = 0.5  # mains wander, and so do the clocks of cameras
AS_GOOD = 1.3  # as much left unexplained, or
ALL_BUT = 0.02
FOLDED_SHARE = 0.5
CLEAR_SHARE = 0.95  # from where on the arrival times are beyond doubt
FALSE_ALARM = 1e-4
ROLLING_TURNS = 0.15


@dataclass(frozen=True, slots=True)
class Ripple:
    """Ripple of the light about its level.

    `amplitude`: relative, median over the strips of rows; `hz`: None where no one frequency explains it; `others_hz`:
    frequencies that would explain it as well; `turns`: periods that pass from the top row to the bottom row;
    `noise`: relative, rms of what is left of a strip's level.
    """

    amplitude: float
    hz: float | None
    others_hz: tuple[float, ...]
    turns: float
    noise: float


def evened(arrived_s: Floats, period_s: float) -> Floats:
    """When frames of one series came, (n,), by the camera's own clock: computers only ever note them late."""
    place = np.rint((arrived_s - arrived_s[0]) / period_s)
    return np.asarray(place * period_s + (arrived_s - place * period_s).min())


def find_ripple(time_s: Floats, bands: Floats, rate_hz: float) -> Ripple | None:
    """The ripple of strips' levels, (frames, strips) black taken off, at times (frames,); None with too few frames.

    rate_hz: the frame rate, at whose multiples frequencies fold onto each other.
    """
    n = len(time_s)
    span_s = float(np.ptp(time_s)) if n else 0.0
    if n < 12 or span_s <= 0 or not (bands.mean(axis=0) > 0).all():
        return None
    time_s = time_s - time_s.mean()
    base = np.linalg.qr(np.column_stack([np.ones(n), time_s]))[0]
    off = bands / bands.mean(axis=0) - 1.0
    off = off - base @ (base.T @ off)
    hz = np.arange(max(LEAST_HZ, 2.0 / span_s), MOST_HZ, 1.0 / (PER_RESOLUTION * span_s))
    share = _explained(time_s, off, hz, base)
    total = float((off**2).sum())
    best = int(np.argmax(share))
    rms = math.sqrt(total / off.size)
    if total <= 0 or share[best] < _chance_level(n, hz.size):
        return Ripple(rms * math.sqrt(2), None, (), 0.0, rms)
    choice, others = _choose(hz, share, best, rate_hz)
    fine = hz[choice] + np.linspace(-1.0, 1.0, REFINED) / (PER_RESOLUTION * span_s)
    best_hz = float(fine[np.argmax(_explained(time_s, off, fine, base))])
    turn = 2 * math.pi * best_hz * time_s
    waves = np.column_stack([np.cos(turn), np.sin(turn)])
    waves = waves - base @ (base.T @ waves)
    part = np.linalg.lstsq(waves, off, rcond=None)[0]
    rest = off - waves @ part
    phase = np.unwrap(np.arctan2(part[1], part[0]))
    strips = len(phase)
    slope = float(np.polynomial.polynomial.polyfit(np.arange(strips), phase, 1)[1]) if strips > 2 else 0.0
    return Ripple(
        amplitude=float(np.median(np.hypot(part[0], part[1]))),
        hz=best_hz,
        others_hz=others,
        turns=abs(slope) * strips / (2 * math.pi),
        noise=float(np.sqrt(np.mean(rest**2))),
    )


def _explained(time_s: Floats, off: Floats, hz: Floats, base: Floats) -> Floats:
    """Part of the strips' variance that a wave of each frequency explains."""
    turn = 2 * math.pi * np.outer(hz, time_s)
    cos, sin = np.cos(turn), np.sin(turn)
    cos -= (cos @ base) @ base.T
    sin -= (sin @ base) @ base.T
    cc, ss, cs = (cos * cos).sum(axis=1), (sin * sin).sum(axis=1), (cos * sin).sum(axis=1)
    c, s = cos @ off, sin @ off
    determinant = cc * ss - cs * cs
    # Near the folding frequency sine and cosine are one: then the larger of the two counts alone.
    sound = determinant > 1e-3 * np.maximum(cc, ss) ** 2
    both = (ss[:, None] * c**2 - 2 * cs[:, None] * c * s + cc[:, None] * s**2).sum(axis=1)
    alone = np.where(cc > ss, (c**2).sum(axis=1), (s**2).sum(axis=1)) / np.maximum(np.maximum(cc, ss), 1e-9)
    power = np.where(sound, both / np.where(sound, determinant, 1.0), alone)
    return np.asarray(power / max(float((off**2).sum()), 1e-30))


def _chance_level(n: int, tried: int) -> float:
    """Share that noise explains at the best of the frequencies with the probability FALSE_ALARM, for one strip.

    The share at one frequency is beta distributed (1, (n - 4) / 2) for normal noise: as Lomb's paper has it for many n.
    """
    independent = tried / PER_RESOLUTION
    return float(1.0 - (FALSE_ALARM / independent) ** (2.0 / max(n - 4, 1)))


def _choose(hz: Floats, share: Floats, best: int, rate_hz: float) -> tuple[int, tuple[float, ...]]:
    """The frequency to name, and a few others as good.

    Lamps on the mains come first among equals, and among frequencies that fold onto one another at the frame rate: late
    arrivals blur the faster ones more, so that a slower one may seem better.
    """
    peaks = np.flatnonzero(1.0 - share <= max(AS_GOOD * (1.0 - share[best]), ALL_BUT))
    groups = np.split(peaks, np.flatnonzero(np.diff(hz[peaks]) > 0.5) + 1)
    tops = [int(group[np.argmax(share[group])]) for group in groups]
    usual = []
    for mains in MAINS_HZ:
        near = np.flatnonzero(np.abs(hz - mains) < MAINS_OFF_HZ)
        if near.size and share[top := int(near[np.argmax(share[near])])] > FOLDED_SHARE * share[best]:
            folded = abs(_folded(hz[top], rate_hz) - _folded(hz[best], rate_hz)) < MAINS_OFF_HZ
            usual += [top] if top in tops or (folded and share[best] < CLEAR_SHARE) else []
    choice = max(usual or [best], key=lambda k: float(share[k]))
    rest = {*tops, best} - {choice}
    others = sorted((k for k in rest if abs(hz[k] - hz[choice]) > MAINS_OFF_HZ), key=lambda k: -float(share[k]))
    return choice, tuple(float(hz[k]) for k in others[:2])


def _folded(hz: float, rate_hz: float) -> float:
    """What a frequency looks like at a frame rate."""
    return abs(hz - rate_hz * round(hz / rate_hz))
