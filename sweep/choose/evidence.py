"""What the choice is made from: records that the readings and the lens fit fill."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

Cause = Literal["depth", "aberration", "diffraction", "sampling"]


@dataclass(frozen=True, slots=True)
class StopEvidence:
    """What the light and the readings say of one engraved stop.

    `tone_per_ms` is the light tone at 0 dB, as a fraction of full scale less black, for each millisecond of exposure;
    `sound` says that every target has a sound reading of its own at this stop. `snr_swept_db` is the temporal
    signal-to-noise of one pixel at the light tone as it was measured at `exposure_swept_ms`: it serves where the camera
    has no photon transfer figures. `frames` is the number of frames that were used.
    """

    stop: float
    f_number_by_light: float | None
    f_number_by_light_u: float | None
    tone_per_ms: float | None
    sound: bool
    tone_per_ms_u: float | None = None
    snr_swept_db: float | None = None
    exposure_swept_ms: float | None = None
    frames: int | None = None


@dataclass(frozen=True, slots=True)
class Place:
    """What the choice must serve: a patch of a target, or a depth within `need.depth_range_mm`.

    `target`: its index, -1 for a depth between targets; `direction_deg`: of the frequencies that are judged, None for
    the mean over all.
    """

    name: str
    depth_mm: float
    feature_cy_px: float
    object_um_per_px: float
    target: int = -1
    direction_deg: float | None = 0.0


@dataclass(frozen=True, slots=True)
class Outlook:
    """The best estimate of the transfer at the feature, readings and model together, without motion blur.

    `contrast` (stops, places) is signed: below zero it is reversed and counts as nothing; NaN where nothing is known.
    `draws` (n, stops, places) are draws from the joint uncertainty. `curve_f_numbers` (g,), on the scale of the
    f-number by light, with `curve` (g, places) and `curve_draws` (n, g, places) is the model between the stops.
    """

    places: tuple[Place, ...]
    contrast: NDArray[np.float64]
    draws: NDArray[np.float64]
    curve_f_numbers: NDArray[np.float64] | None = None
    curve: NDArray[np.float64] | None = None
    curve_draws: NDArray[np.float64] | None = None


class LensView(Protocol):
    """The fitted lens with one thing changed: what causes and cures are computed from."""

    def contrast(
        self,
        stop_index: int,
        place: Place,
        *,
        without: Cause | None = None,
        refocus_mm: float = 0.0,
        pixel_scale: float = 1.0,
    ) -> float:
        """Signed transfer at `place.feature_cy_px`, no motion blur.

        `without` takes one cause away: the contrast as fitted, divided by the cause's own factor. Of `diffraction` that
        factor is the transfer of the perfect lens in focus, of `sampling` the pixel box and the sensor's blur;
        `depth` puts the place in focus, `aberration` takes the lens errors away. `refocus_mm` moves the plane of focus
        at the object, positive = away from the camera. `pixel_scale` multiplies the pixel pitch behind the same lens at
        the same magnification; `place.feature_cy_px` stays in cycles per pixel as it is now.
        """


class DepthView(Protocol):
    """The fitted lens over depth and frequency: what the map is computed from. Signed transfers, no motion blur."""

    def over_frequency(
        self, stop_index: int, places: Sequence[Place], v_cy_px: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Transfer (places, n) at frequencies (n,) cycles per pixel."""

    def at_feature(self, stop_index: int, places: Sequence[Place]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Transfer (places,) at each place's own feature, and its u."""
