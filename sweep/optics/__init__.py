"""Formulas of imaging and diffraction, as plain functions of arrays that broadcast.

Nothing here knows a station, a frame or a fit: `geometry` holds Gaussian imaging and defocus; `pupil` holds the
diffraction cut-off and the transfer function of an aberrated circular pupil.
"""

from sweep.optics.geometry import defocus_waves, image_distance_mm, working_f_number
from sweep.optics.pupil import cutoff_cy_mm, otf

__all__ = ["cutoff_cy_mm", "defocus_waves", "image_distance_mm", "otf", "working_f_number"]
