"""Formulas of stops, imaging and diffraction, as plain functions of arrays that broadcast.

Nothing here knows a station, a frame or a fit: `geometry` holds stops, Gaussian imaging, defocus and depth of field;
`pupil` holds diffraction and the transfer function of an aberrated circular pupil.
"""

from sweep.optics.geometry import (
    defocus_waves,
    depth_of_field_mm,
    entrance_pupil_distance_mm,
    exact_f_number,
    f_number,
    hyperfocal_mm,
    image_distance_mm,
    light_ratio,
    working_f_number,
)
from sweep.optics.pupil import airy_radius_um, cutoff_cy_mm, diffraction_mtf, otf, strehl

__all__ = [
    "airy_radius_um",
    "cutoff_cy_mm",
    "defocus_waves",
    "depth_of_field_mm",
    "diffraction_mtf",
    "entrance_pupil_distance_mm",
    "exact_f_number",
    "f_number",
    "hyperfocal_mm",
    "image_distance_mm",
    "light_ratio",
    "otf",
    "strehl",
    "working_f_number",
]
