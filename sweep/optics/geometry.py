"""Stops, imaging at a finite distance, and depth of field, by Gaussian optics.

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


def f_number(aperture_value: ArrayLike) -> Floats:
    """Exact f-number of an aperture value: N = 2^(AV / 2).

    aperture_value: stops from f/1; whole, half and third values make the series of marks on rings.
    Source: ISO 517:2008, Apertures and related properties pertaining to photographic lenses.
    """
    return np.asarray(np.exp2(_floats(aperture_value) / 2.0))


def exact_f_number(mark: ArrayLike) -> Floats:
    """The exact f-number that a rounded mark stands for (5.6 stands for 5.657): the nearest half or third stop.

    mark: numbers as engraved. Source: ISO 517:2008. The marks 1.2 and 13 occur in both series; the nearer one is taken.
    """
    av = 2.0 * np.log2(_floats(mark))
    half, third = np.round(2.0 * av) / 2.0, np.round(3.0 * av) / 3.0
    return f_number(np.where(np.abs(half - av) <= np.abs(third - av), half, third))


def light_ratio(f_number_from: ArrayLike, f_number_to: ArrayLike) -> Floats:
    """Light on the sensor after a change of f-number, relative to before: (N1 / N2)^2.

    Source: ISO 517:2008. Geometric: equal transmission, no vignetting.
    """
    return np.asarray((_floats(f_number_from) / _floats(f_number_to)) ** 2)


def working_f_number(f_number: ArrayLike, magnification: ArrayLike, pupil_magnification: ArrayLike = 1.0) -> Floats:
    """The f-number that diffraction and light see at a finite distance: N_w = N (1 + m / P).

    Source: Greivenkamp, Field Guide to Geometrical Optics, SPIE FG01 (2004), p. 29.
    """
    return np.asarray(_floats(f_number) * (1.0 + _floats(magnification) / _floats(pupil_magnification)))


def entrance_pupil_distance_mm(
    focal_length_mm: ArrayLike, magnification: ArrayLike, pupil_magnification: ArrayLike = 1.0
) -> Floats:
    """From the entrance pupil to the plane of focus: e = f (1 / P + 1 / m), mm.

    With P = 1 this is the object distance of the thin lens. Source: Greivenkamp, SPIE FG01 (2004), Gaussian imaging,
    applied to the object and to the entrance pupil, whose image is the exit pupil.
    """
    return np.asarray(_floats(focal_length_mm) * (1.0 / _floats(pupil_magnification) + 1.0 / _floats(magnification)))


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


def hyperfocal_mm(focal_length_mm: ArrayLike, f_number: ArrayLike, blur_limit_mm: ArrayLike) -> Floats:
    """Hyperfocal distance for a blur circle of diameter c: H = f^2 / (N c) + f, mm from a thin lens.

    Source: Smith, Modern Optical Engineering, depth of focus.
    """
    f = _floats(focal_length_mm)
    return np.asarray(f**2 / (_floats(f_number) * _floats(blur_limit_mm)) + f)


def depth_of_field_mm(
    object_distance_mm: ArrayLike, focal_length_mm: ArrayLike, f_number: ArrayLike, blur_limit_mm: ArrayLike
) -> tuple[Floats, Floats]:
    """Near and far limit of the geometric depth of field, mm from a thin lens; the far one is inf from s = H on.

    near = s (H - f) / (H + s - 2 f), far = s (H - f) / (H - s), H as in `hyperfocal_mm`. Rays alone, no diffraction.
    Source: Smith, Modern Optical Engineering, depth of focus.
    """
    s, f = _floats(object_distance_mm), _floats(focal_length_mm)
    h = hyperfocal_mm(f, f_number, blur_limit_mm)
    near = s * (h - f) / (h + s - 2.0 * f)
    with np.errstate(divide="ignore"):
        far = s * (h - f) / np.maximum(h - s, 0.0)
    return np.asarray(near), np.asarray(far)
