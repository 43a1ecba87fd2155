"""A camera's frame as a small picture for a browser."""

import cv2
import numpy as np
from numpy.typing import NDArray

from sweep.frames import Pixels
from sweep.station import Camera, Region

LONGEST_PX = 1280
QUALITY = 80
BAYER = {
    "rggb": cv2.COLOR_BayerRGGB2BGR,
    "grbg": cv2.COLOR_BayerGRBG2BGR,
    "gbrg": cv2.COLOR_BayerGBRG2BGR,
    "bggr": cv2.COLOR_BayerBGGR2BGR,
}
DISPLAY_GAMMA = 2.2


def preview(pixels: Pixels, camera: Camera, region: Region | None = None) -> bytes:
    """A JPEG of a frame, or of one region, no side longer than LONGEST_PX; linear samples get a display's gamma."""
    picture: Pixels = cv2.cvtColor(pixels, BAYER[camera.layout]) if camera.layout in BAYER else pixels  # type: ignore[assignment]
    if region is not None:
        left, top, width, height = region
        picture = picture[max(0, top) : top + height, max(0, left) : left + width]
    height, width = picture.shape[:2]
    shrink = max(width, height) / LONGEST_PX
    if shrink > 1:
        size = (max(1, round(width / shrink)), max(1, round(height / shrink)))
        picture = cv2.resize(picture, size, interpolation=cv2.INTER_AREA)  # type: ignore[assignment]
    container = 8 * picture.dtype.itemsize
    depth = min(camera.bit_depth or container, container)
    if picture.size and int(picture.max()) >> depth:
        depth = container  # the camera fills its words from the top
    shown = _tones(depth, camera)[picture]
    return bytes(cv2.imencode(".jpg", shown, [cv2.IMWRITE_JPEG_QUALITY, QUALITY])[1])


def _tones(depth: int, camera: Camera) -> NDArray[np.uint8]:
    """The table from a sample of so many bits to what a display shows."""
    full = (1 << depth) - 1
    part = np.clip((np.arange(full + 1) - camera.black_level_dn) / (full - camera.black_level_dn), 0, 1)
    if camera.response == "linear":
        part = part ** (1 / DISPLAY_GAMMA)
    return np.asarray(np.rint(255 * part), dtype=np.uint8)
