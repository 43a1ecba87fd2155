"""One thread that owns a device: it alone opens, reads, sets and releases it.

Drivers block, crash when they are released under a blocked read, and never come back by themselves after a loss;
so a device is driven from one thread, frames wait in a short queue with the time of their arrival, every wait
of the caller has an end, and a lost device is opened again until it answers.
"""

import queue
import threading
import time
from collections import deque
from dataclasses import dataclass, field
from types import TracebackType
from typing import Protocol, Self

import numpy as np

from sweep.cameras import Facts, Grab, Settings
from sweep.errors import CameraError
from sweep.frames import Pixels

OPEN_TIMEOUT_S = 15.0
SET_TIMEOUT_S = 8.0
LOST_TIMEOUT_S = 1.0
CLOSE_TIMEOUT_S = 6.0
RETRY_S = 0.5
WAITING_FRAMES = 3


class Device(Protocol):
    """A device as its driver offers it. No call may block much longer than a second or two and an exposure."""

    name: str

    def open(self) -> None:
        """Open it, with everything automatic switched off. Raises CameraError."""

    def read(self) -> Pixels | None:
        """The next frame, None where none came: the device counts as lost. Raises CameraError likewise."""

    def apply(self, exposure_ms: float | None, gain_db: float | None) -> tuple[float | None, float | None]:
        """Set what is not None, and read both back; None for what the device cannot set. Raises CameraError."""

    def facts(self) -> Facts:
        """What is known of it."""

    def close(self) -> None:
        """Release it; called after losses too."""


@dataclass(slots=True)
class _Request:
    """A wish for settings, and its answer."""

    exposure_ms: float | None
    gain_db: float | None
    answered: threading.Event = field(default_factory=threading.Event)
    settings: Settings | None = None
    fault: CameraError | None = None


class OwnedCamera:
    """A camera (see sweep.cameras) over a device that runs in a thread of its own."""

    def __init__(self, device: Device) -> None:
        """Opens the device. Raises CameraError where it does not open within some seconds."""
        self._device = device
        self._frames: deque[Grab] = deque(maxlen=WAITING_FRAMES)
        self._news = threading.Condition()
        self._requests: queue.SimpleQueue[_Request] = queue.SimpleQueue()
        self._stop = threading.Event()
        self._opened = threading.Event()
        self._lost = False
        self._refusal: CameraError | None = None  # why it did not open at all
        self._fault: CameraError | None = None
        self._facts: Facts = {}
        self._last: Pixels | None = None
        self._counts = {"frames_repeated": 0, "frames_overrun": 0, "times_lost": 0}
        self._thread = threading.Thread(target=self._own, name=f"camera {device.name}", daemon=True)
        self._thread.start()
        if not self._opened.wait(OPEN_TIMEOUT_S):
            self._stop.set()
            raise CameraError(f"{device.name} does not answer. Check its cable, power and address.")
        if self._refusal is not None:
            raise self._refusal

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def grab(self, timeout_s: float) -> Grab:
        """The oldest frame that waits, of the latest few. Raises CameraError where none comes in time."""
        with self._news:
            if self._news.wait_for(lambda: bool(self._frames), timeout_s):
                return self._frames.popleft()
            raise self._fault or CameraError(f"{self._device.name} has sent no new picture for {timeout_s:.0f} s.")

    def set(self, *, exposure_ms: float | None = None, gain_db: float | None = None) -> Settings:
        """Set exposure and gain between two frames, and read them back. Raises CameraError."""
        request = _Request(exposure_ms, gain_db)
        self._requests.put(request)
        if not request.answered.wait(LOST_TIMEOUT_S if self._lost else SET_TIMEOUT_S + (exposure_ms or 0) / 1000):
            raise self._fault or CameraError(f"{self._device.name} does not take settings. Check its connection.")
        if request.settings is None:
            raise request.fault or CameraError(f"{self._device.name} does not take settings.")
        return request.settings

    def facts(self) -> Facts:
        """What the device says of itself, and how many frames were repeated (and left out) or missed by us."""
        return {**self._facts, **self._counts}

    def close(self) -> None:
        """Let the thread release the device and end."""
        self._stop.set()
        self._thread.join(CLOSE_TIMEOUT_S)

    def _own(self) -> None:
        """The thread: open, read, answer wishes; after a loss, again."""
        while not self._stop.is_set():
            try:
                self._device.open()
                self._facts = self._device.facts()
                self._lost = False
                self._opened.set()
                self._read_on()
            except CameraError as fault:
                self._fault, self._lost = fault, True
                self._refuse_requests(fault)
            finally:
                self._device.close()
            if not self._opened.is_set():
                self._refusal = self._fault
                self._opened.set()
                return
            self._counts["times_lost"] += 1
            self._stop.wait(RETRY_S)

    def _read_on(self) -> None:
        while not self._stop.is_set():
            self._answer_requests()
            pixels = self._device.read()
            if pixels is None:
                raise CameraError(f"{self._device.name} sends no picture any more. Check its cable and power.")
            self._keep(pixels, time.monotonic())

    def _keep(self, pixels: Pixels, arrived_s: float) -> None:
        """Queue a frame, unless it is the last one again, bit for bit: a sensor's noise never does that."""
        if self._last is not None and np.array_equal(pixels, self._last) and pixels.min() != pixels.max():
            self._counts["frames_repeated"] += 1
            self._fault = CameraError(f"{self._device.name} repeats its last picture. Check the camera.")
            return
        self._last = pixels
        with self._news:
            self._fault = None
            if len(self._frames) == WAITING_FRAMES:
                self._counts["frames_overrun"] += 1
            self._frames.append(Grab(pixels, arrived_s))
            self._news.notify_all()

    def _answer_requests(self) -> None:
        while not self._requests.empty():
            request = self._requests.get()
            try:
                exposure_ms, gain_db = self._device.apply(request.exposure_ms, request.gain_db)
            except CameraError as fault:
                request.fault = fault
                request.answered.set()
                raise
            request.settings = Settings(exposure_ms, gain_db, time.monotonic())
            request.answered.set()

    def _refuse_requests(self, fault: CameraError) -> None:
        while not self._requests.empty():
            request = self._requests.get()
            request.fault = fault
            request.answered.set()
