"""What a frame is, and what a source of frames offers to the analysis."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from sweep.result import Note

Pixels = NDArray[np.uint8] | NDArray[np.uint16]
Role = Literal["target", "dark"]


@dataclass(frozen=True, slots=True)
class Shot:
    """One row of the table of shots: what was set when one frame was taken.

    `order` counts rows from 0 and stands for the order in time where `time_s` is None.
    """

    file: str
    stop: float | None
    exposure_ms: float
    gain_db: float
    role: Role
    order: int
    target: str | None = None
    time_s: float | None = None


class Source(Protocol):
    """Frames that can be read one at a time, each as often as wanted."""

    @property
    def shots(self) -> Sequence[Shot]:
        """The usable shots, in the order of the table."""

    @property
    def bit_depth(self) -> int:
        """Significant bits of the pixels that `read` returns."""

    @property
    def sha256(self) -> str:
        """One hash over all shots and files; the order of the rows does not change it."""

    @property
    def notes(self) -> Sequence[Note]:
        """What the reader noticed so far (compressed files, shifted bits, frames left out)."""

    def read(self, shot: Shot) -> Pixels:
        """The pixels as stored: (rows, columns), or (rows, columns, 3) as blue, green, red.

        Samples are low-aligned: full scale is 2**bit_depth - 1.
        Raises FrameError where the file is missing, damaged, or of another size than the first.
        """
