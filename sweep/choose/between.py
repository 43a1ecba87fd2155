"""The optimum between the engraved marks, from the lens model's curve of worst contrast over the f-number.

A ring without clicks can stand anywhere. Rings are close to even in stops from mark to mark (common practice, no
source), so a place on the ring is given as a fraction of the way in log2 of light.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sweep.choose.candidates import Candidate
from sweep.choose.chances import TIE, motion_transfer
from sweep.choose.evidence import Outlook
from sweep.choose.settings import Setting, setting_for
from sweep.result import CameraNoise
from sweep.station import Station

_FRACTIONS = {"a quarter": 1 / 4, "a third": 1 / 3, "half": 1 / 2, "two thirds": 2 / 3, "three quarters": 3 / 4}


@dataclass(frozen=True, slots=True)
class Between:
    """A ring position between two marks that beats the best mark by more than a tie.

    `fraction` is the way from the wider mark, `light` the share of that mark's light, `gain` the relative gain in
    worst contrast over the best mark, `chance` its probability to be more than a tie (None without draws).
    """

    wider: str
    narrower: str
    f_number: float
    fraction: float
    light: float
    contrast: float
    gain: float
    chance: float | None

    @property
    def way(self) -> str:
        """The place on the ring in words."""
        word = min(_FRACTIONS, key=lambda k: abs(_FRACTIONS[k] - self.fraction))
        if abs(_FRACTIONS[word] - self.fraction) < 0.05:
            return f"{word} of the way" if word != "half" else "half way"
        return f"{100 * self.fraction:.0f} % of the way"


def optimum_f_number(outlook: Outlook) -> float | None:
    """Where the model's worst contrast peaks when exposure and noise don't matter, refined by a parabola."""
    if outlook.curve_f_numbers is None or outlook.curve is None:
        return None
    worst = np.maximum(outlook.curve, 0.0).min(axis=1)
    if not np.all(np.isfinite(worst)) or worst.max() <= 0:
        return None
    return _peak(np.log(outlook.curve_f_numbers), worst)


def rises_outward(outlook: Outlook, f_number: float, narrower: bool) -> bool:
    """Whether the model's worst contrast still grows beyond an f-number, on the narrower or the wider side."""
    if outlook.curve_f_numbers is None or outlook.curve is None:
        return False
    order = np.argsort(outlook.curve_f_numbers)
    grid, worst = outlook.curve_f_numbers[order], np.maximum(outlook.curve[order], 0.0).min(axis=1)
    at = float(np.interp(f_number, grid, worst))
    outside = worst[grid > f_number] if narrower else worst[grid < f_number]
    if len(outside) and outside.max() > at * (1 + TIE):
        return True
    # Where the curve ends at the sweep's end, its last slope tells: half a stop inward must already be lower.
    inward = float(np.interp(f_number * 2 ** (-0.25 if narrower else 0.25), grid, worst))
    return not len(outside) and at > inward


LEAST_CONTRAST = 0.1
"""Below it a comparison in percent says nothing to a person at the ring."""


def between_marks(
    best: Candidate, candidates: Sequence[Candidate], station: Station, camera: CameraNoise, outlook: Outlook
) -> Between | None:
    """A position between the best mark and a neighbour, within the limits, that beats the mark by more than a tie.

    `candidates` come widest first.
    """
    grid, curve = outlook.curve_f_numbers, outlook.curve
    if grid is None or curve is None or best.evidence.tone_per_ms is None:
        return None
    place = next(k for k, c in enumerate(candidates) if c.index == best.index)
    near = candidates[max(place - 1, 0) : place + 2]
    inside = np.flatnonzero((grid > near[0].f_number) & (grid < near[-1].f_number))
    settings = {int(k): _setting_at(float(grid[k]), best, station, camera) for k in inside}
    kept = [k for k, setting in settings.items() if not setting.fails]
    if best.setting.fails or not kept:
        return None
    blur = np.tile(best.blur, (len(grid), 1))
    for k in kept:
        blur[k] = motion_transfer(station.need, settings[k].exposure_ms, outlook.places)
    worst = np.maximum(curve * blur, 0.0).min(axis=1)
    top = max(kept, key=lambda k: float(worst[k]))
    order = np.argsort(grid)
    at_mark = float(np.interp(best.f_number, grid[order], np.maximum(curve * best.blur, 0.0).min(axis=1)[order]))
    if at_mark < LEAST_CONTRAST or worst[top] <= (1 + TIE) * at_mark:
        return None
    f_number = float(grid[top])
    wider, narrower = (near[0], best) if f_number < best.f_number else (best, near[-1])
    return Between(
        wider=wider.name,
        narrower=narrower.name,
        f_number=f_number,
        fraction=math.log(f_number / wider.f_number) / math.log(narrower.f_number / wider.f_number),
        light=(wider.f_number / f_number) ** 2,
        contrast=float(worst[top]),
        gain=float(worst[top]) / at_mark - 1,
        chance=_chance_better(outlook, blur[top], top, best),
    )


def _setting_at(f_number: float, best: Candidate, station: Station, camera: CameraNoise) -> Setting:
    """The setting at an f-number by light: the light goes as 1 / N^2 from the best mark's."""
    tone = (best.evidence.tone_per_ms or 0.0) * (best.f_number / f_number) ** 2
    return setting_for(replace(best.evidence, tone_per_ms=tone), station, camera)


def _chance_better(outlook: Outlook, blur: NDArray[np.float64], top: int, best: Candidate) -> float | None:
    """The probability that the grid point `top` beats the best mark by more than a tie."""
    if outlook.curve_draws is None or outlook.curve_f_numbers is None:
        return None
    mark = int(np.argmin(np.abs(np.log(outlook.curve_f_numbers / best.f_number))))
    there = np.maximum(outlook.curve_draws[:, top] * blur, 0.0).min(axis=1)
    here = np.maximum(outlook.curve_draws[:, mark] * best.blur, 0.0).min(axis=1)
    return float(np.mean(there > (1 + TIE) * here))


def _peak(x: NDArray[np.float64], y: NDArray[np.float64]) -> float:
    """exp of the abscissa of the highest point, by the parabola through it and its neighbours; an end stays an end."""
    order = np.argsort(x)
    x, y = x[order], y[order]
    k = int(np.argmax(y))
    if 0 < k < len(x) - 1:
        a, b, _ = np.polyfit(x[k - 1 : k + 2] - x[k], y[k - 1 : k + 2], 2)
        if a < 0:
            shift = float(np.clip(-b / (2 * a), x[k - 1] - x[k], x[k + 1] - x[k]))
            return float(math.exp(x[k] + shift))
    return float(math.exp(x[k]))
