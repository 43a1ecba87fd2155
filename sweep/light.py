"""Light per exposure at each ring position: the f-numbers by light, the lamp's drift, the frames that stray.

    ln L(frame, patch) = A(patch) + E(stop) - V(stop) r(patch)^2 + D time(frame) + lamp noise

L is the patch's light per millisecond at 0 dB, r its distance from the frame's middle, V the vignetting, which is
taken to be none at the smallest stop. Light goes as 1 / N^2 (ISO 517), so
N(stop) = N(reference) exp(-(E(stop) - E(reference)) / 2).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweep.measure.linear import Floats
from sweep.readings import CLIPPED_SHARE_FOR_LIGHT, Sighting, Sweep

USUAL_DRIFT = 0.015
"""Relative change of a lamp over a sweep, standard deviation (common practice, no source)."""
LAMP_FLOOR = 0.002
"""Below this a lamp's own wander between stops is not resolved (common practice, no source)."""
USUAL_VIGNETTING = 0.15
"""Relative light lost at the frame's corner, standard deviation (common practice, no source)."""

_ANY_LN_LIGHT = 10.0


@dataclass(frozen=True, slots=True)
class FrameLight:
    """One frame's light against what its stop, patch and drift explain: ln ratio, and its place in time."""

    stop: int
    order: float
    ln_off: float


@dataclass(frozen=True, slots=True)
class Light:
    """What the light says of a sweep's stops.

    `f_number`, `u`: (k,) NaN where the light cannot tell; `reference`: index of the stop taken as engraved, or None;
    `ln_u`: (k,) relative u of each f-number against the reference; `drift`, `drift_u`: relative change of the lamp over
    the whole sweep; `lamp_noise`: relative deviation from frame to frame; `frames`: what each frame was off by.
    """

    f_number: Floats
    u: Floats
    reference: int | None
    ln_u: Floats
    drift: float
    drift_u: float
    lamp_noise: float
    frames: tuple[FrameLight, ...]

    def relative(self, stop: int) -> float | None:
        """Light at a stop over the light at the reference."""
        if self.reference is None or not np.isfinite(self.f_number[stop]):
            return None
        return float((self.f_number[self.reference] / self.f_number[stop]) ** 2)


def light_of(sweep: Sweep) -> Light:
    """Fit the light of all frames at once.

    A stop of which every patch is clipped is left out; the reference is the widest stop with at most 1 % clipped in
    every patch.
    """
    stops = len(sweep.stops)
    nothing = np.full(stops, np.nan)
    usable = [
        s for s in sweep.sightings if s.saturated_fraction <= CLIPPED_SHARE_FOR_LIGHT and (s.frame_light > 0).all()
    ]
    reference = _reference(sweep)
    if reference is None or not usable:
        return Light(nothing, nothing, None, nothing, 0.0, USUAL_DRIFT, 0.0, ())
    rows = _Rows.of(sweep, usable)
    solved, covariance, frames, noise = _solve(rows, stops)
    patches = rows.patch.max() + 1
    e = solved[patches : patches + stops]
    known = np.isin(np.arange(stops), rows.stop)
    pick = np.zeros((stops, len(solved)))
    pick[np.arange(stops), patches + np.arange(stops)] = -0.5
    pick[:, patches + reference] += 0.5
    variance = np.einsum("ij,jk,ik->i", pick, covariance, pick) + np.where(
        np.arange(stops) == reference, 0.0, 0.5 * LAMP_FLOOR**2
    )
    ln_u = np.where(known, np.sqrt(np.maximum(variance, 0.0)), np.nan)
    f_number = np.where(known, sweep.stops[reference] * np.exp(-0.5 * (e - e[reference])), np.nan)
    return Light(
        f_number, f_number * ln_u, reference, ln_u, float(solved[-1]), float(np.sqrt(covariance[-1, -1])), noise, frames
    )


def _reference(sweep: Sweep) -> int | None:
    for k, stop in enumerate(sweep.stops):
        here = sweep.at(stop)
        if here and all(s.saturated_fraction <= CLIPPED_SHARE_FOR_LIGHT for s in here):
            return k
    return None


@dataclass(frozen=True, slots=True)
class _Rows:
    """One row for each frame and patch: indices, ln light, time (-1/2 to 1/2), r^2 (corner = 1)."""

    stop: NDArray[np.intp]
    patch: NDArray[np.intp]
    frame: NDArray[np.intp]
    ln_light: Floats
    time: Floats
    radius2: Floats
    orders: Floats
    span: float

    @classmethod
    def of(cls, sweep: Sweep, usable: Sequence[Sighting]) -> "_Rows":
        sites = {(s.site.target, s.site.patch): s.site for s in usable}
        numbers = {key: i for i, key in enumerate(sorted(sites))}
        height, width = sweep.frame_shape[:2]
        rows = [
            (sweep.stops.index(s.stop), numbers[(s.site.target, s.site.patch)], float(order), float(light))
            for s in usable
            for order, light in zip(s.frame_order, s.frame_light, strict=True)
        ]
        radius2 = np.zeros(len(numbers))
        for key, i in numbers.items():
            x, y, w, h = sites[key].spec.region
            radius2[i] = ((x + w / 2 - width / 2) ** 2 + (y + h / 2 - height / 2) ** 2) / (width**2 + height**2) * 4.0
        stop, patch, order, light = (np.array(c) for c in zip(*rows, strict=True))
        orders, frame = np.unique(order, return_inverse=True)
        span = float(np.ptp(orders)) or 1.0
        time = (order - 0.5 * (orders[0] + orders[-1])) / span
        return cls(stop, patch, frame, np.log(light), time, radius2[patch], orders, span)


def _solve(rows: _Rows, stops: int) -> tuple[Floats, Floats, tuple[FrameLight, ...], float]:
    """Least squares with weak priors on drift and vignetting, and three kinds of noise, estimated along.

    Lamp noise is common to a frame's patches, pair noise to a patch's frames at one stop, the rest is each row's own.
    Parameters: level of each patch, E of each stop, V of each stop, drift. Returns them with their covariance, the
    frames' own deviations, and the lamp's noise.
    """
    patches = int(rows.patch.max()) + 1
    count = patches + 2 * stops + 1
    n = len(rows.stop)
    frames = int(rows.frame.max()) + 1
    pairs, pair = np.unique(rows.stop * patches + rows.patch, return_inverse=True)
    every = count + frames + len(pairs)
    design = np.zeros((n, every))
    at = np.arange(n)
    design[at, rows.patch] = 1.0
    design[at, patches + rows.stop] = 1.0
    design[at, patches + stops + rows.stop] = -rows.radius2
    design[:, count - 1] = rows.time
    design[at, count + rows.frame] = 1.0
    design[at, count + frames + pair] = 1.0
    ln_light = rows.ln_light - rows.ln_light.mean()
    present = np.unique(rows.stop)
    last = int(present[-1])
    frame_slots, pair_slots = slice(count, count + frames), slice(count + frames, every)
    noise, lamp_noise, pair_noise = 0.001, 0.003, 0.003
    solved, covariance = np.zeros(every), np.eye(every)
    for _ in range(40):
        precision = np.zeros(every)
        precision[: patches + stops] = 1.0 / _ANY_LN_LIGHT**2
        precision[patches + stops : patches + 2 * stops] = 1.0 / USUAL_VIGNETTING**2
        precision[patches + stops + last] = 1e6
        precision[count - 1] = 1.0 / USUAL_DRIFT**2
        precision[frame_slots] = 1.0 / lamp_noise**2
        precision[pair_slots] = 1.0 / pair_noise**2
        normal = design.T @ design / noise**2 + np.diag(precision)
        covariance = np.asarray(np.linalg.inv(normal), dtype=np.float64)
        solved = covariance @ (design.T @ ln_light / noise**2)
        rest = ln_light - design @ solved
        used = every - float(np.sum(precision * np.diag(covariance)))
        noise = max(float(np.sqrt(np.sum(rest**2) / max(n - used, 1.0))), 1e-4)
        lamp_noise = max(_deviation(solved[frame_slots], covariance[frame_slots, frame_slots]), 1e-4)
        pair_noise = max(_deviation(solved[pair_slots], covariance[pair_slots, pair_slots]), 1e-4)
    own = solved[frame_slots]
    stop_of = {int(f): int(s) for f, s in zip(rows.frame, rows.stop, strict=True)}
    frame_light = tuple(FrameLight(stop_of[f], float(rows.orders[f]), float(own[f])) for f in range(frames))
    return solved[:count], covariance[:count, :count], frame_light, lamp_noise


def _deviation(values: Floats, covariance: Floats) -> float:
    """Deviation of random effects about zero, from their estimates and what remains uncertain of them."""
    return float(np.sqrt(np.mean(values**2 + np.diag(covariance))))
