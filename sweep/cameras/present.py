"""Which cameras are there: devices that open by number, and GenICam cameras that answer."""

import re
import sys
import threading
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from sweep.cameras.genicam import found_genicam
from sweep.cameras.opencv import BACKENDS, silence
from sweep.errors import CameraError

OPEN_S = 4.0
NUMBERS = range(4)
"""What is tried where the system has no list of devices."""


@dataclass(frozen=True, slots=True)
class Present:
    """A camera that can be opened by `source`, and what it is."""

    source: str
    what: str


def cameras_present() -> tuple[Sequence[Present], str]:
    """The cameras, and why some kind could not be looked for, if so. Takes a few seconds."""
    found = list(_devices())
    try:
        found += [Present(f"genicam:{address}", what) for address, what in found_genicam()]
    except CameraError as fault:
        return found, str(fault)
    return found, ""


def _devices() -> Iterator[Present]:
    numbers: Sequence[int] = NUMBERS
    if sys.platform == "linux":
        names = [re.fullmatch(r"video(\d+)", path.name) for path in Path("/dev").glob("video*")]
        numbers = sorted(int(name[1]) for name in names if name)
    for number in numbers:
        if what := _opened(number):
            yield Present(str(number), what)


def _opened(number: int) -> str:
    """What a device says of itself, empty where it does not open in time; drivers may block, so in a thread."""
    told: list[str] = []

    def look() -> None:
        import cv2

        capture = cv2.VideoCapture(number, BACKENDS.get(sys.platform, cv2.CAP_ANY))
        if capture.isOpened():
            size = (int(capture.get(what)) for what in (cv2.CAP_PROP_FRAME_WIDTH, cv2.CAP_PROP_FRAME_HEIGHT))
            told.append(f"{' × '.join(str(side) for side in size)} px, by {capture.getBackendName()}")
        capture.release()

    silence()
    thread = threading.Thread(target=look, daemon=True)
    thread.start()
    thread.join(OPEN_S)
    return told[0] if told else ""
