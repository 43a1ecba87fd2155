"""What a camera is to the guided run, and the way to open one by name.

A camera hands over frames as they come, takes exposure and gain, and tells what it is. Every foreign error
becomes a CameraError here, below `cameras`, and nowhere else.
"""

import re
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Protocol, Self

from sweep.errors import CameraError
from sweep.frames import Pixels
from sweep.station import Station

Facts = dict[str, str | int | float | None]

DEVICE = re.compile(r"\d+")
URL = re.compile(r"[a-z][a-z0-9+.-]*://", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class Grab:
    """One frame and when it arrived, in seconds on the camera's own steady clock."""

    pixels: Pixels
    arrived_s: float


@dataclass(frozen=True, slots=True)
class Settings:
    """What the camera says it is set to, None for what it cannot set; and when that was, on its own clock."""

    exposure_ms: float | None
    gain_db: float | None
    at_s: float


class Camera(Protocol):
    """A source of live frames. All calls come from one thread; none waits longer than it is told, or some seconds."""

    def grab(self, timeout_s: float) -> Grab:
        """The next frame not yet handed over; frames may be lost between two calls, never repeated.

        Raises CameraError where none comes in time, or the camera is gone; a later call may find it back.
        """

    def set(self, *, exposure_ms: float | None = None, gain_db: float | None = None) -> Settings:
        """Set exposure, gain, or nothing, and read both back."""

    def facts(self) -> Facts:
        """What is known of the device, and counts of frames lost or repeated so far."""

    def close(self) -> None:
        """Let go of the device."""

    def __enter__(self) -> Self: ...

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None: ...


def open_camera(source: str, station: Station) -> Camera:
    """Open a camera by name.

    source: a device number, a URL, a video file, `folder:PATH`, `genicam:ADDRESS` (empty: the first one found) or
    `simulated`. Raises CameraError where it isn't there or does not answer.
    """
    kind, colon, place = source.partition(":")
    if source == "simulated":
        from sweep.cameras.simulated_camera import open_simulated

        return open_simulated(station)
    if kind == "folder" and colon:
        from sweep.cameras.folder import FolderCamera

        return FolderCamera(Path(place))
    if kind == "genicam":
        from sweep.cameras.genicam import open_genicam

        return open_genicam(place, station)
    from sweep.cameras.opencv import open_opencv

    if DEVICE.fullmatch(source):
        return open_opencv(int(source), station)
    if URL.match(source) or Path(source).is_file():
        return open_opencv(source, station)
    raise CameraError(
        f"There is no camera {source!r}. Name a device number, a URL, a video file, folder:PATH, genicam:ADDRESS or "
        "simulated."
    )
