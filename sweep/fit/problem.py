"""What the fit is asked: the data of one sweep, the parameters, and what is known of them beforehand."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sweep.lens import Bench
from sweep.measure.linear import Floats
from sweep.measure.mtf import Transfer

FIRST_NAMES = ("focus", "w040", "w060", "blur2", "mark", "colour")
FOCUS, W040, W060, BLUR2, MARK, COLOUR = range(len(FIRST_NAMES))
OWN_FOCUS_WAVES = 0.3
MARK_TOLERANCE = 0.03
"""Relative standard deviation of an engraved f-number (ISO 517 tolerances are of this order; value from memory)."""


@dataclass(frozen=True, slots=True)
class View:
    """One stop seen through one patch: which stop and target, and the direction of the frequencies (None: all)."""

    stop: int
    target: int
    direction_deg: float | None


@dataclass(frozen=True, slots=True)
class EdgeData:
    """A spread function to be met: distances (px), values, u, all (m,), and the light-gradient column.

    `width_px`: (m,) of the bins; `ratio` with `ratio_u`: dark over light level of the print, common to the patch's
    stops; `transfer`: the reading's own, for a first look.
    """

    view: View
    distance_px: Floats
    width_px: Floats
    value: Floats
    u: Floats
    gradient: Floats
    ratio: float
    ratio_u: float
    transfer: Transfer


@dataclass(frozen=True, slots=True)
class AmplitudeData:
    """Modulation at frequencies (m,) cycles per pixel, up to a scale that belongs to print `scale` (an index).

    `ln_scale`, `ln_scale_u`: what is known of it beforehand.
    """

    view: View
    v_cy_px: Floats
    value: Floats
    u: Floats
    scale: int
    ln_scale: float
    ln_scale_u: float


@dataclass(frozen=True, slots=True)
class StopLight:
    """What the light says of the stops, (k,): f-numbers, the reference stop as engraved, and u of ln N."""

    f_number: Floats
    ln_u: Floats


@dataclass(frozen=True, slots=True)
class Problem:
    """All data of one sweep. `names` and `prior` (mean, standard deviation) give the parameters in their order.

    focus: depth (mm) of paraxial focus; w040, w060: waves at the widest stop; blur2: sensor blur squared (px^2); mark:
    ln of the true over the engraved f-number of the reference stop; colour: waves of defocus at the widest stop for
    each standard deviation of the spectrum; ring K: what remains of ln N at stop K beside the light; shift T,
    astigmatism T: of target T's focus (mm); scale S: ln of a print's scale.
    """

    bench: Bench
    depths_mm: Floats
    light: StopLight
    edges: tuple[EdgeData, ...]
    amplitudes: tuple[AmplitudeData, ...]
    names: tuple[str, ...]
    prior: tuple[tuple[float, float], ...]

    @classmethod
    def of(
        cls,
        bench: Bench,
        depths_mm: Floats,
        light: StopLight,
        edges: Sequence[EdgeData],
        amplitudes: Sequence[AmplitudeData],
    ) -> "Problem":
        """The problem with its parameters and priors; a target's focus may wander by a part of a wave, wide open."""
        widest = float(light.f_number.min())
        step = 1e-3 * bench.focal_length_mm / bench.magnification
        at = float(np.mean(depths_mm))
        per_mm = abs(float(bench.w020_waves(np.array(widest), np.array(at + step), at)) / step)
        wander = OWN_FOCUS_WAVES / per_mm
        names = [*FIRST_NAMES]
        prior = [(at, 1e3 * wander), (0.0, 3.0), (0.0, 0.5), (0.09, 0.15), (0.0, MARK_TOLERANCE), (0.0, 0.3)]
        for k, u in enumerate(light.ln_u):
            names.append(f"ring {k}")
            prior.append((0.0, float(u)))
        for t in range(len(depths_mm)):
            names += [f"shift {t}", f"astigmatism {t}"]
            prior += [(0.0, wander), (0.0, wander)]
        for k, known in sorted({a.scale: (a.ln_scale, a.ln_scale_u) for a in amplitudes}.items()):
            names.append(f"scale {k}")
            prior.append(known)
        return cls(bench, depths_mm, light, tuple(edges), tuple(amplitudes), tuple(names), tuple(prior))

    @property
    def views(self) -> tuple[View, ...]:
        """The views of all data blocks: edges first, then amplitudes."""
        return (*(e.view for e in self.edges), *(a.view for a in self.amplitudes))
