"""A watched folder as a camera: another program drops image files there, whole ones are taken as they come.

A file counts as whole once its size has stayed the same for a moment, and its format's own end is there.
"""

import time
from pathlib import Path
from types import TracebackType
from typing import Self

import cv2
import numpy as np

from sweep.cameras import Facts, Grab, Settings
from sweep.errors import CameraError
from sweep.frames import Pixels

SUFFIXES = {".png", ".bmp", ".pgm", ".tif", ".tiff", ".jpg", ".jpeg"}
ENDS = {".png": b"IEND\xaeB`\x82", ".jpg": b"\xff\xd9", ".jpeg": b"\xff\xd9"}
LOOK_EVERY_S = 0.05
STILL_S = 0.1
PATIENCE_S = 3.0


class FolderCamera:
    """A camera (see sweep.cameras) over a folder; what lies in it already when it is opened is left alone."""

    def __init__(self, folder: Path) -> None:
        """Raises CameraError where the folder is not there."""
        if not folder.is_dir():
            raise CameraError(f"{folder} is no folder that could be watched. Make it, or name another.")
        self._folder = folder
        self._done = {path.name for path in self._files()}
        self._sizes: dict[str, tuple[int, float]] = {}

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def grab(self, timeout_s: float) -> Grab:
        """The next whole file, in the order of their times. Raises CameraError where none comes, or one is damaged."""
        until = time.monotonic() + timeout_s
        while True:
            for path in self._files():
                if path.name not in self._done and (pixels := self._whole(path)) is not None:
                    self._done.add(path.name)
                    return Grab(pixels, time.monotonic())
            if time.monotonic() > until:
                raise CameraError(f"No new picture has come into {self._folder} for {timeout_s:.0f} s.")
            time.sleep(LOOK_EVERY_S)

    def set(self, *, exposure_ms: float | None = None, gain_db: float | None = None) -> Settings:
        """Nothing can be set: whoever fills the folder sets the camera."""
        return Settings(None, None, time.monotonic())

    def facts(self) -> Facts:
        """The folder's name."""
        return {"device": f"folder {self._folder}"}

    def close(self) -> None:
        """Nothing to let go of."""

    def _files(self) -> list[Path]:
        try:
            found = [(path.stat().st_mtime, path) for path in self._folder.iterdir() if path.suffix.lower() in SUFFIXES]
        except OSError as error:
            raise CameraError(f"{self._folder} cannot be looked into: {error.strerror}.") from None
        return [path for _, path in sorted(found)]

    def _whole(self, path: Path) -> Pixels | None:
        """The pixels of a file, None while it is still being written."""
        size, now = path.stat().st_size, time.monotonic()
        before, since = self._sizes.setdefault(path.name, (size, now))
        if size != before:
            self._sizes[path.name] = (size, now)
            return None
        if size == 0 or now - since < STILL_S:
            return None
        data = path.read_bytes()
        frame = None
        if data.rstrip(b"\0").endswith(ENDS.get(path.suffix.lower(), b"")):
            frame = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
        if frame is not None and frame.dtype == np.uint8:
            return frame.astype(np.uint8, copy=False)
        if frame is not None and frame.dtype == np.uint16:
            return frame.astype(np.uint16, copy=False)
        if now - since > PATIENCE_S:
            self._done.add(path.name)
            raise CameraError(f"{path} is no whole picture of 8 or 16 bit; it is left out.")
        return None
