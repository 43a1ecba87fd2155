"""The camera on the bench: settings, and from each frame the little that the findings need.

Frames are not kept: each leaves its levels, a histogram, a hash, and the pixels of some even blocks.
"""

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from sweep.cameras import Camera, Grab, Settings
from sweep.errors import CameraError
from sweep.frames import Pixels
from sweep.measure.linear import Floats, Scale
from sweep.station import Camera as Stated

Plane = NDArray[np.uint16]

GRAB_S = 3.0
FIRST_S = 10.0
BANDS = 16
BLOCKS = 64
SMALL_PX = 500_000
THIN = 3  # odd, so that every colour of a mosaic is met
TONE = 0.98
PILE_SHARE = 0.002
PILE_OVER_BELOW = 4.0
OLD_FRAMES = 8  # that a driver may still hold when something is set


@dataclass(frozen=True, slots=True)
class Sample:
    """What is kept of one frame, in stored codes moved to the low bits; `level` on linear light, black included.

    `tone`: code that 2 % of the pixels exceed; `piled`: whether the brightest pixels pile up on one code, `top`;
    `zero_share`: part of the bright blocks' pixels at code 0; `bands`: (BANDS,) levels of strips of rows from the top;
    `blocks`: (blocks, side, side) of the even blocks; `digest`: of the pixels.
    """

    arrived_s: float
    level: float
    tone: float
    top: int
    piled: bool
    zero_share: float
    bands: Floats
    blocks: Plane
    digest: bytes


@dataclass(frozen=True, slots=True)
class Series:
    """Frames from one change of settings to the next; the first `skip` of them may still show the settings before."""

    asked_ms: float | None
    exposure_ms: float | None
    asked_db: float
    gain_db: float | None
    set_s: float
    samples: tuple[Sample, ...]
    skip: int

    @property
    def settled(self) -> tuple[Sample, ...]:
        """The frames that show the settings."""
        return self.samples[self.skip :]

    @property
    def levels(self) -> Floats:
        """(n,) levels of all its frames."""
        return np.array([sample.level for sample in self.samples])

    @property
    def level(self) -> float:
        """Mean level of the settled frames."""
        return float(self.levels[self.skip :].mean())


class Bench:
    """One camera with its settings, and what has been seen of its codes."""

    def __init__(self, camera: Camera, stated: Stated, exposure_ms: float) -> None:
        """Sets the camera and waits for its first frame. Raises CameraError."""
        self._camera = camera
        self._stated = stated
        self._settings: Settings = camera.set(exposure_ms=exposure_ms, gain_db=0.0)
        self._asked_ms, self._asked_db = exposure_ms, 0.0
        first = camera.grab(FIRST_S).pixels
        self.container = 8 * first.dtype.itemsize
        self.codes = np.zeros(1 << self.container, np.int64)
        self.shift = 0
        self.frames = 0
        self.skip = 4
        self.height, self.width = first.shape[:2]
        self.blocks: Sequence[tuple[int, int]] = ()
        self.side = 16 if min(self.height, self.width) < 600 else 32
        self._bright = np.zeros(0, np.intp)
        self._scale = Scale(0.0, float((1 << self.container) - 1), "linear")

    @property
    def settable(self) -> bool:
        """Whether the camera says what exposure it is set to."""
        return self._settings.exposure_ms is not None

    @property
    def exposure_ms(self) -> float:
        """The exposure as read back, else as asked."""
        return self._asked_ms if self._settings.exposure_ms is None else self._settings.exposure_ms

    def set(self, exposure_ms: float, gain_db: float = 0.0) -> float | None:
        """Set exposure and gain; the exposure read back. Raises CameraError."""
        self._asked_ms, self._asked_db = exposure_ms, gain_db
        self._settings = self._camera.set(exposure_ms=exposure_ms, gain_db=gain_db)
        return self._settings.exposure_ms

    def align(self, shift: int, full_dn: int) -> None:
        """From now on samples are moved down by `shift` bits; their response is as stated."""
        self.shift = shift
        response, black_dn = self._stated.response, self._stated.black_level_dn
        self._scale = Scale(0.0 if response == "linear" else black_dn, float(full_dn), response)

    def watch(self, blocks: Sequence[tuple[int, int]], bright: Sequence[int]) -> None:
        """From now on keep the pixels of the blocks at (row, column); the level is that of the bright ones."""
        self.blocks = blocks
        self._bright = np.asarray(bright, np.intp)

    def series(
        self, count: int, exposure_ms: float | None = None, gain_db: float = 0.0, skip: int | None = None
    ) -> Series:
        """Set, where an exposure is given, then take `count` frames after those to be skipped. Raises CameraError."""
        if exposure_ms is not None:
            self.set(exposure_ms, gain_db)
        skip = (self.skip if exposure_ms is not None else 0) if skip is None else skip
        samples = tuple(self._sample(self._fresh()) for _ in range(skip + count))
        settings = self._settings
        return Series(
            self._asked_ms, settings.exposure_ms, self._asked_db, settings.gain_db, settings.at_s, samples, skip
        )

    def mean_plane(self, count: int) -> NDArray[np.float32]:
        """The mean of some frames, (rows, columns), green where there are colours. Raises CameraError."""
        total = np.zeros((self.height, self.width), np.float32)
        for _ in range(count):
            cv2.accumulate(self.plane(self._fresh().pixels), total)
        return total / np.float32(count)

    def plane(self, pixels: Pixels) -> Plane:
        """One channel of a frame, moved to the low bits."""
        return np.right_shift(pixels[..., 1] if pixels.ndim == 3 else pixels, self.shift, dtype=np.uint16)

    def _fresh(self) -> Grab:
        """The next frame that arrived after the last change. Raises CameraError."""
        for _ in range(OLD_FRAMES):
            grab = self._camera.grab(GRAB_S + 3 * self.exposure_ms / 1000)
            if grab.arrived_s > self._settings.at_s:
                break
        if grab.pixels.shape[:2] != (self.height, self.width) or 8 * grab.pixels.dtype.itemsize != self.container:
            raise CameraError(
                "The camera changes the size or depth of its frames by itself. Fix both, and probe again."
            )
        self.frames += 1
        return grab

    def _sample(self, grab: Grab) -> Sample:
        plane = self.plane(grab.pixels)
        step = 1 if plane.size < SMALL_PX else THIN
        thin = np.ascontiguousarray(grab.pixels[::step, ::step])
        counts = np.bincount(thin.ravel(), minlength=self.codes.size)
        self.codes += counts
        counts = counts[:: 1 << self.shift] if self.shift else counts
        top, piled = _pile(counts)
        blocks = self._cut(plane)
        return Sample(
            arrived_s=grab.arrived_s,
            level=self._level(blocks),
            tone=float(np.searchsorted(np.cumsum(counts), TONE * thin.size)),
            top=top,
            piled=piled,
            zero_share=float(np.mean(blocks[self._bright] == 0)) if self._bright.size else 0.0,
            bands=self._scale.linear(_bands(plane[::step, ::step])),
            blocks=blocks,
            digest=hashlib.blake2b(thin.tobytes(), digest_size=16).digest(),
        )

    def _cut(self, plane: Plane) -> Plane:
        side = self.side
        if not self.blocks:
            return plane[:0, :0].reshape(0, side, side)
        return np.stack([plane[y : y + side, x : x + side] for y, x in self.blocks])

    def _level(self, blocks: Plane) -> float:
        return float(self._scale.linear(blocks[self._bright]).mean()) if self._bright.size else 0.0

    def linear(self, blocks: Plane | NDArray[np.float32]) -> Floats:
        """Codes on linear light, black included where the response is linear."""
        return self._scale.linear(blocks)


def _pile(counts: NDArray[np.int64]) -> tuple[int, bool]:
    """The highest code that occurs, and whether pixels pile up on it as they do where they clip."""
    used = np.flatnonzero(counts)
    top = int(used[-1])
    below = counts[used[-9:-1]]
    heap = int(counts[top])
    piled = heap > PILE_SHARE * counts.sum() and (not below.size or heap > PILE_OVER_BELOW * float(below.mean()))
    return top, bool(piled)


def _bands(plane: Plane) -> Floats:
    rows = plane.mean(axis=1, dtype=np.float64)
    return np.array([strip.mean() for strip in np.array_split(rows, min(BANDS, rows.size))])
