"""Imaging at a finite distance, and the defocus that depth makes, by Gaussian optics.

f-number N = focal length / entrance-pupil diameter. Magnification m > 0 = image size / object size at the plane of
focus.
Pupil magnification P = exit-pupil / entrance-pupil diameter. Depth is counted from the plane of focus, positive
away from the camera.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]


def _floats(value: ArrayLike) -> Floats:
    return np.asarray(value, dtype=np.float64)


def working_f_number(f_number: ArrayLike, magnification: ArrayLike, pupil_magnification: ArrayLike = 1.0) -> Floats:
    """The f-number that diffraction and light see at a finite distance: N_w = N (1 + m / P).

    Source: Greivenkamp, Field Guide to Geometrical Optics, SPIE FG01 (2004), p. 29.
    """
    return np.asarray(_floats(f_number) * (1.0 + _floats(magnification) / _floats(pupil_magnification)))


def image_distance_mm(
    depth_mm: ArrayLike, focal_length_mm: ArrayLike, magnification: ArrayLike, pupil_magnification: ArrayLike = 1.0
) -> Floats:
    """From the exit pupil to where an object at a depth is imaged sharply: z = f (m_c + P), mm.

    m_c = m / (1 + m d / f) is the magnification of that depth if it were refocused (Newton's lens equation), not its
    scale on a sensor that stays put. At depth 0 this is the distance to the sensor. Holds for d > -f / m.
    """
    f, m = _floats(focal_length_mm), _floats(magnification)
    return np.asarray(f * (m / (1.0 + m * _floats(depth_mm) / f) + _floats(pupil_magnification)))


def defocus_waves(
    depth_mm: ArrayLike,
    f_number: ArrayLike,
    *,
    best_focus_mm: ArrayLike = 0.0,
    focal_length_mm: ArrayLike,
    magnification: ArrayLike,
    pupil_magnification: ArrayLike = 1.0,
    wavelength_nm: ArrayLike,
) -> Floats:
    """Defocus W020 of an object at a depth, exact in the distances: (a^2 / 2) (1 / z(b) - 1 / z(d)), in waves.

    a = f P / (2 N) is the exit pupil's radius, z as in `image_distance_mm`, b the depth of best focus; all broadcast.
    Negative for an object beyond the best focus.
    Source: Hopkins, Proc. R. Soc. Lond. A 231 (1955) 91-103; small angles (the sag of a sphere taken as a^2 / 2 z).
    """
    f, m, p = _floats(focal_length_mm), _floats(magnification), _floats(pupil_magnification)
    radius = f * p / (2.0 * _floats(f_number))
    vergence = 1.0 / image_distance_mm(best_focus_mm, f, m, p) - 1.0 / image_distance_mm(depth_mm, f, m, p)
    return np.asarray(radius**2 / 2.0 * vergence * 1e6 / _floats(wavelength_nm))
