"""Where to set the focus for given depths: the shift that is best for the worst place at one stop."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from sweep.choose.evidence import LensView, Place
from sweep.station import Station

_COARSE = 25  # points of the first look
_WAVES = 4.0  # of defocus, looked at beyond the span of the depths


@dataclass(frozen=True, slots=True)
class Refocus:
    """A shift of the plane of focus at the object, positive = away from the camera, and what it gives.

    `contrast` is the model's worst contrast there, `unmoved` the model's worst contrast with the focus as it is.
    """

    stop_index: int
    shift_mm: float
    contrast: float
    unmoved: float


def best_refocus(
    lens: LensView,
    stop_index: int,
    f_number: float,
    places: Sequence[Place],
    blur: NDArray[np.float64],
    station: Station,
) -> Refocus:
    """The shift of focus that maximises the contrast of the worst place at one stop.

    `blur` (places,) is the motion's share of the transfer. The search spans the depths and four waves of defocus
    beyond them; one wave is 8 lambda N_w^2 at the image, and that over m^2 at the object (Hopkins 1955, thin lens).
    """

    def worst(shift_mm: float) -> float:
        transfers = [lens.contrast(stop_index, p, refocus_mm=shift_mm) for p in places]
        return float(min(max(t, 0.0) * b for t, b in zip(transfers, blur, strict=True)))

    reach = _reach_mm(f_number, places, station)
    shifts = np.linspace(-reach, reach, _COARSE)
    coarse = [worst(float(s)) for s in shifts]
    top = int(np.argmax(coarse))
    low, high = shifts[max(top - 1, 0)], shifts[min(top + 1, _COARSE - 1)]
    fine = minimize_scalar(
        lambda s: -worst(float(s)), bounds=(low, high), method="bounded", options={"xatol": reach / 2000}
    )
    unmoved = worst(0.0)
    contrast, shift = max((-float(fine.fun), float(fine.x)), (coarse[top], float(shifts[top])), (unmoved, 0.0))
    return Refocus(stop_index, shift, contrast, unmoved)


def _reach_mm(f_number: float, places: Sequence[Place], station: Station) -> float:
    """How far from the present focus the search looks, mm at the object."""
    magnification = station.camera.pixel_pitch_um / station.scene.object_um_per_px
    working = f_number * (1 + magnification / station.lens.pupil_magnification)
    wave_mm = 8 * station.scene.wavelength_nm * 1e-6 * working**2 / magnification**2
    depths = [p.depth_mm for p in places]
    return max(depths) - min(depths) + _WAVES * wave_mm
