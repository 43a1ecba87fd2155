"""What OpenCV opens: devices by number, network streams by URL, video files.

OpenCV's settings are per backend, often silent no-ops, and in units of their own; so everything is read back, and the
guided run checks by the light. Devices were not at hand: only streams and files have been tried.
"""

import math
import os
import sys
import time
from collections.abc import Callable
from pathlib import Path

# Read by OpenCV when it starts, or at its first capture: true menu values from V4L2, waits with an end, no slow start
# on Windows, no noise on the terminal.
os.environ.setdefault("OPENCV_VIDEOIO_V4L_RANGE_NORMALIZED", "0")
os.environ.setdefault("OPENCV_VIDEOIO_V4L_SELECT_TIMEOUT", "3")
os.environ.setdefault("OPENCV_VIDEOIO_MSMF_ENABLE_HW_TRANSFORMS", "0")
os.environ.setdefault("OPENCV_FFMPEG_LOGLEVEL", "-8")

import cv2
import numpy as np

from sweep.cameras import Facts
from sweep.cameras.owner import OwnedCamera
from sweep.errors import CameraError, FormatError
from sweep.frames import Pixels
from sweep.station import Layout, Station

OPEN_TIMEOUT_MS = 3000
READ_TIMEOUT_MS = 2000
MANUAL_EXPOSURE_V4L2 = 1
SHUTTER_PRIORITY_V4L2 = 3
BACKENDS = {"linux": cv2.CAP_V4L2, "win32": cv2.CAP_DSHOW, "darwin": cv2.CAP_AVFOUNDATION}
V4L2_EXPOSURES_A_MS = 10  # it counts in 100 us
PLAIN_PICTURE = {  # whatever would change edges, noise or the response
    cv2.CAP_PROP_AUTO_WB: 0,
    cv2.CAP_PROP_SHARPNESS: 0,
    cv2.CAP_PROP_BACKLIGHT: 0,
}


def open_opencv(source: int | str, station: Station) -> OwnedCamera:
    """Open a device number, a URL or a video file. Raises CameraError."""
    silence()
    if isinstance(source, int):
        return OwnedCamera(_Numbered(source, station))
    return OwnedCamera(_Streamed(source, station))


def silence() -> None:
    """Keep OpenCV's own messages off the terminal."""
    cv2.utils.logging.setLogLevel(cv2.utils.logging.LOG_LEVEL_SILENT)


class _Captured:
    """What devices and streams share: one VideoCapture, and frames of the station's layout from it."""

    def __init__(self, name: str, station: Station) -> None:
        self.name = name
        self._layout: Layout = station.camera.layout
        self._bit_depth = station.camera.bit_depth or 8
        self._capture: cv2.VideoCapture | None = None

    def read(self) -> Pixels | None:
        """The next frame; after one failure OpenCV never recovers, so that counts as a loss."""
        if self._capture is None:
            return None
        there, frame = self._capture.read()
        return plain(frame, self._layout, self._bit_depth, self.name) if there else None

    def close(self) -> None:
        """Release the capture."""
        if self._capture is not None:
            self._capture.release()
            self._capture = None

    def facts(self) -> Facts:
        """Name, backend, size, pixel format and rate, as OpenCV tells them."""
        if self._capture is None:
            return {"device": self.name}
        code = int(self._capture.get(cv2.CAP_PROP_FOURCC))
        letters = "".join(chr((code >> shift) & 0xFF) for shift in (0, 8, 16, 24))
        return {
            "device": self.name,
            "backend": self._capture.getBackendName(),
            "width_px": int(self._capture.get(cv2.CAP_PROP_FRAME_WIDTH)),
            "height_px": int(self._capture.get(cv2.CAP_PROP_FRAME_HEIGHT)),
            "pixel_format": letters if letters.isprintable() else "",
            "frame_rate_hz": round(self._capture.get(cv2.CAP_PROP_FPS), 3),
        }


class _Streamed(_Captured):
    """A network stream or a video file: it comes as it comes, nothing can be set."""

    def __init__(self, source: str, station: Station) -> None:
        super().__init__(source, station)
        self._source = source
        self._period_s = 0.0
        self._due_s = 0.0

    def open(self) -> None:
        """Open with both time limits, since without them OpenCV waits for half a minute."""
        parameters = [cv2.CAP_PROP_OPEN_TIMEOUT_MSEC, OPEN_TIMEOUT_MS, cv2.CAP_PROP_READ_TIMEOUT_MSEC, READ_TIMEOUT_MS]
        if self._layout != "bgr":
            parameters += [cv2.CAP_PROP_CONVERT_RGB, 0]
        self._capture = cv2.VideoCapture(self._source, cv2.CAP_FFMPEG, parameters)
        if not self._capture.isOpened():
            raise CameraError(f"{self._source} cannot be opened. Check the address, and that the source is running.")
        if Path(self._source).is_file():
            self._period_s = 1 / max(1.0, self._capture.get(cv2.CAP_PROP_FPS) or 25.0)

    def read(self) -> Pixels | None:
        """The next frame; a file's frames come at its own rate. Raises CameraError at a file's end."""
        if not self._period_s:
            return super().read()
        time.sleep(max(0.0, self._due_s - time.monotonic()))
        self._due_s = max(self._due_s, time.monotonic()) + self._period_s
        pixels = super().read()
        if pixels is None:
            raise CameraError(f"{self.name} has come to its end; it starts again.")
        return pixels

    def apply(self, exposure_ms: float | None, gain_db: float | None) -> tuple[float | None, float | None]:
        """Nothing can be set on a stream."""
        return None, None


class _Numbered(_Captured):
    """A device by number, over the system's own interface; exposure by hand, its gain left at its least."""

    def __init__(self, number: int, station: Station) -> None:
        super().__init__(f"Camera {number}", station)
        self._number = number
        self._to_raw, self._from_raw = _exposure_units()

    def open(self) -> None:
        """Open, choose the plainest pixel format, take one frame, then switch off what is automatic."""
        self._capture = cv2.VideoCapture(self._number, BACKENDS.get(sys.platform, cv2.CAP_ANY))
        if not self._capture.isOpened():
            raise CameraError(f"{self.name} cannot be opened. Is it plugged in, and not in use by another program?")
        if self._layout != "bgr":
            self._single_channel(self._capture)
        if not self._capture.read()[0]:
            raise CameraError(f"{self.name} opens but sends no picture. Close other programs that use it.")
        if sys.platform == "linux":
            for value in (SHUTTER_PRIORITY_V4L2, MANUAL_EXPOSURE_V4L2):  # some need the change to notice
                self._capture.set(cv2.CAP_PROP_AUTO_EXPOSURE, value)
        for what, plain_value in PLAIN_PICTURE.items():
            self._capture.set(what, plain_value)

    def apply(self, exposure_ms: float | None, gain_db: float | None) -> tuple[float | None, float | None]:
        """Set the exposure in the backend's own unit. Gains of such devices have no unit: 0 is their least."""
        assert self._capture is not None
        if exposure_ms is not None and not self._capture.set(cv2.CAP_PROP_EXPOSURE, self._to_raw(exposure_ms)):
            return None, None
        if gain_db is not None:
            self._capture.set(cv2.CAP_PROP_GAIN, 0)
        return self._from_raw(self._capture.get(cv2.CAP_PROP_EXPOSURE)), 0.0

    def _single_channel(self, capture: cv2.VideoCapture) -> None:
        """The first format that the device takes and that carries all bits and no compression."""
        wanted = ["Y16 ", "GREY", "YUYV"] if self._bit_depth > 8 else ["GREY", "YUYV"]
        for letters in wanted:
            code = cv2.VideoWriter.fourcc(*letters)
            if capture.set(cv2.CAP_PROP_FOURCC, code) and int(capture.get(cv2.CAP_PROP_FOURCC)) == code:
                capture.set(cv2.CAP_PROP_CONVERT_RGB, 0)
                return


def _exposure_units() -> tuple[Callable[[float], float], Callable[[float], float]]:
    """From milliseconds to the backend's number, and back."""
    if sys.platform == "win32":
        # DirectShow counts in powers of two of a second, whole ones only.
        return lambda ms: float(round(math.log2(ms / 1000))), lambda raw: 1000 * 2.0**raw
    return lambda ms: max(1.0, round(ms * V4L2_EXPOSURES_A_MS)), lambda raw: raw / V4L2_EXPOSURES_A_MS


def plain(
    frame: np.ndarray[tuple[int, ...], np.dtype[np.generic]], layout: Layout, bit_depth: int, name: str
) -> Pixels:
    """A frame as the station's layout wants it: one channel, or blue, green, red.

    Raises FormatError where the driver delivers something else than the station file says.
    """
    if frame.dtype == np.uint8 and bit_depth > 8:
        raise FormatError(
            f"{name} delivers 8 bits, but camera.bit_depth is {bit_depth}. Set the camera to more bits, or state 8."
        )
    if frame.dtype not in (np.uint8, np.uint16):
        raise FormatError(f"{name} delivers samples of the kind {frame.dtype}; 8 or 16 bit are needed.")
    if frame.ndim == 3 and layout != "bgr":
        channels = frame.shape[2]
        if channels == 3 and not (frame[..., 0] == frame[..., 1]).all():
            raise FormatError(f'{name} delivers colour, but camera.layout is {layout!r}. State "bgr".')
        frame = frame[..., 0]  # grey in three channels, or the brightness of a YUYV pair
    return np.ascontiguousarray(frame)
