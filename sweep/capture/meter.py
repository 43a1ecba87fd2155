"""Light and sharpness of one live frame, from the pixels of the station's patches alone."""

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from sweep.capture.events import Score
from sweep.errors import CaptureError
from sweep.frames import Pixels
from sweep.measure.edge import read_edge
from sweep.measure.linear import Scale, crop, sharpness_sites, sharpness_values
from sweep.station import Station, check_regions

LIGHT_QUANTILE = 0.9  # above the dark side of an edge, inside the brightest channel of a mosaic
CLIPPED_SHARE = 0.001


SHIFT_KINDS = ("edge", "star", "tribar")


@dataclass(frozen=True, slots=True)
class Light:
    """Light of one frame, of full scale less black: its light tone, the mean over all patches; and whether it clips."""

    tone: float
    mean: float
    clipped: bool


class Meter:
    """Measures the patches of live frames of one camera."""

    def __init__(self, station: Station) -> None:
        self._station = station
        self._patches = [(target, patch) for target in station.targets for patch in target.patches]
        self._curve: NDArray[np.float32] | None = None
        self._shift = 0
        self._scale = Scale(0, 255, "linear")

    def light(self, pixels: Pixels) -> Light:
        """Measure one frame. Raises CaptureError where the frame does not hold the station's patches."""
        curve = self._prepared(pixels)
        tones, means, clipped = [], [], []
        for _, patch in self._patches:
            codes = crop(pixels, patch.region) >> self._shift
            values = curve[np.minimum(codes, curve.size - 1)]
            brightest = values.reshape(-1, values.shape[2]).max(axis=1) if values.ndim == 3 else values.ravel()
            tones.append(float(np.quantile(brightest, LIGHT_QUANTILE)))
            means.append(float(values.mean()))
            clipped.append(float(np.mean(codes >= curve.size - 1)))
        return Light(max(tones), float(np.mean(means)), max(clipped) > CLIPPED_SHARE)

    def shift_px(self, pixels: Pixels, reference: Pixels) -> float:
        """How far the whole picture has moved since another frame, px; good for less than about a pixel.

        One step of least squares on brightness differences over all patches with edges (B. D. Lucas and T. Kanade, An
        iterative image registration technique, IJCAI 1981).
        """
        normal, side = np.zeros((2, 2)), np.zeros(2)
        for _, patch in self._patches:
            if patch.kind not in SHIFT_KINDS:
                continue
            now, then = (self._even(crop(frame, patch.region)) for frame in (pixels, reference))
            then *= now.mean() / max(1e-9, float(then.mean()))
            both = (now + then) / 2
            slopes = np.stack([np.gradient(both, axis=axis)[1:-1, 1:-1].ravel() for axis in (1, 0)])
            normal += slopes @ slopes.T
            side += slopes @ (then - now)[1:-1, 1:-1].ravel()
        if np.linalg.cond(normal) > 1e6:
            return 0.0
        across, down = np.linalg.solve(normal, side)
        return float(np.hypot(across, down))

    def _even(self, patch: Pixels) -> NDArray[np.float64]:
        """A patch as one channel, smoothed: mosaics lose their pattern, noise most of its slope."""
        grey = patch.mean(axis=2) if patch.ndim == 3 else patch
        return np.asarray(cv2.blur(np.asarray(grey, dtype=np.float64), (4, 4)), dtype=np.float64)

    def score(self, place: int, pixels: Pixels) -> Score:
        """Contrast at the feature of one target's first edge (by its place in the list), read as in the analysis."""
        target, camera = self._station.targets[place], self._station.camera
        edge = next((patch for patch in target.patches if patch.kind == "edge"), None)
        if edge is None:
            return Score(target.name, None)
        sites = sharpness_sites(camera.layout, edge.region)
        values = self._scale.linear(np.right_shift(sharpness_values(crop(pixels, edge.region), sites), self._shift))
        measure = read_edge(sites.x, sites.y, values[None, :])
        at = None if measure.transfer is None else measure.transfer.at(self._station.feature_cy_px_at(target.depth_mm))
        return Score(target.name, None if at is None else max(0.0, at[0]))

    def _prepared(self, pixels: Pixels) -> NDArray[np.float32]:
        """The table from codes to light, made at the first frame."""
        camera = self._station.camera
        container = 8 * pixels.dtype.itemsize
        depth = min(camera.bit_depth or container, container)
        if self._curve is None:
            self._check(pixels)
            self._scale = Scale(camera.black_level_dn, (1 << depth) - 1, camera.response)
            codes = np.arange(1 << depth)
            self._curve = (self._scale.linear(codes) / self._scale.span_dn).astype(np.float32)
        if self._shift == 0 and depth < container and int(pixels.max()) >> depth:
            self._shift = container - depth  # the camera fills its words from the top
        return self._curve

    def _check(self, pixels: Pixels) -> None:
        height, width = pixels.shape[:2]
        check_regions(self._station, width, height)
        if (pixels.ndim == 3) != (self._station.camera.layout == "bgr"):
            raise CaptureError(
                f"The camera delivers {'colour' if pixels.ndim == 3 else 'single-channel'} frames, but camera.layout "
                f"in the station file is {self._station.camera.layout!r}. Change one of the two."
            )
