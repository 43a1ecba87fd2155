"""The fitted lens: parameters with their covariance, and how well they describe the data."""

from dataclasses import dataclass

import numpy as np

from sweep.fit.problem import StopLight, View
from sweep.lens import Bench
from sweep.measure.linear import Floats


@dataclass(frozen=True, slots=True)
class FocusStep:
    """What the data say of a focus that changes from one stop on: its size, in waves at that stop, and in its own u."""

    stop: int
    shift_mm: float
    waves: float
    z: float


@dataclass(frozen=True, slots=True)
class LensFit:
    """The fitted lens.

    `theta`: parameters by `names`, `covariance` of them (already widened where the model does not describe the data),
    `reduced_chi2` of the data, `misfit`: reduced chi-square of each data block, in the order of `views`; `rivals`:
    other solutions that fit nearly as well, each with how much its chi-square is higher.
    """

    bench: Bench
    depths_mm: Floats
    light: StopLight
    names: tuple[str, ...]
    theta: Floats
    covariance: Floats
    reduced_chi2: float
    misfit: Floats
    views: tuple[View, ...]
    focus_steps: tuple[FocusStep, ...] = ()
    rivals: tuple[tuple[float, Floats], ...] = ()

    def value(self, name: str) -> tuple[float, float]:
        """A parameter and its u."""
        i = self.names.index(name)
        return float(self.theta[i]), float(np.sqrt(self.covariance[i, i]))
