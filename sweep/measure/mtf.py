"""Figures of a transfer curve: half-modulation frequency, contrast at a frequency, smallest feature."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Transfer:
    """A signed transfer curve over frequency, with its standard uncertainty.

    `v_cy_px`: (n,) rising, cycles per pixel; `value`: (n,), negative where the contrast is reversed; `u`: (n,).
    """

    v_cy_px: Floats
    value: Floats
    u: Floats

    def at(self, v_cy_px: float) -> tuple[float, float] | None:
        """Transfer and its u at one frequency; None outside of the curve."""
        if not self.v_cy_px[0] <= v_cy_px <= self.v_cy_px[-1]:
            return None
        return float(np.interp(v_cy_px, self.v_cy_px, self.value)), float(np.interp(v_cy_px, self.v_cy_px, self.u))

    def first_fall_to(self, level: float) -> tuple[float, float] | None:
        """The frequency (cycles/pixel) at which the curve first falls to `level`, and its u; None where it does not.

        A curve that starts below the level has no such frequency. u is that of the curve over its slope.
        """
        below = np.flatnonzero(self.value <= level)
        if below.size == 0 or below[0] == 0:
            return None
        i = int(below[0])
        v0, v1 = self.v_cy_px[i - 1], self.v_cy_px[i]
        m0, m1 = self.value[i - 1], self.value[i]
        v = float(v0 + (m0 - level) * (v1 - v0) / (m0 - m1))
        reach = max(2, round(0.02 / float(v1 - v0)))
        lo, hi = max(0, i - reach), min(len(self.value) - 1, i + reach)
        slope = float(self.value[hi] - self.value[lo]) / float(self.v_cy_px[hi] - self.v_cy_px[lo])
        if slope >= 0:
            return v, float(v1 - v0)
        return v, float(np.interp(v, self.v_cy_px, self.u)) / -slope
