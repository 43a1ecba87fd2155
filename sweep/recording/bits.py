"""Which bits of the samples carry the signal: a 12-bit camera in 16-bit files may fill the low or the high bits."""

from collections.abc import Iterable

import numpy as np

from sweep.errors import FrameError
from sweep.frames import Pixels
from sweep.result import Note


def bits_used(pixels: Pixels) -> int:
    """The bits that any sample has set, as one number."""
    return int(np.bitwise_or.reduce(pixels, axis=None))


class Bits:
    """Sample width and alignment of one source: settled by its first frames, checked on all later ones."""

    def __init__(self, stated: int | None) -> None:
        self.stated, self.depth, self.shift, self.container = stated, 0, 0, 0
        self._by = ""
        self._seen = 0

    def settle(self, container: int, frames: Iterable[tuple[str, int]]) -> None:
        """Settle by (file, bits used) of frames, of which no more are taken than it needs.

        Bits that fit both alignments (a dim frame of high-aligned samples, or an even one of low-aligned samples) leave
        it to the next frame. Raises FrameError where no alignment fits.
        """
        self.container = container
        self.depth = self.stated or container
        for file, used in frames:
            self._by = file
            if container == 8 or self.stated == container:
                break
            if used and self.stated is None:
                self.shift = min(_trailing_zeros(used), 8)
                self.depth = container - self.shift
                break
            low = used & ((1 << (container - self.depth)) - 1)
            if low or used >> self.depth:
                self.shift = 0 if low else container - self.depth
                break
            self.shift = container - self.depth if used else self.shift
        if self.depth > self.container:
            raise FrameError(
                f"{self._by} holds {self.container} bits a sample, but camera.bit_depth is {self.depth}. State "
                f"{self.container}, or save 16-bit files."
            )

    def check(self, used: int, file: str) -> None:
        """See that a frame's bits fit what was settled. Raises FrameError."""
        if used & ((1 << self.shift) - 1):
            raise FrameError(
                f"{file} uses the {self.shift} low bits that are zero in {self._by}. Save all frames in one alignment, "
                "or state camera.bit_depth as they have it."
            )
        if used >> self.shift > (1 << self.depth) - 1:
            raise FrameError(
                f"{file} holds values above {(1 << self.depth) - 1}, full scale by camera.bit_depth = {self.depth}. "
                "State the bits that the camera delivers."
            )
        self._seen |= used >> self.shift

    def align(self, pixels: Pixels, file: str) -> Pixels:
        """The samples moved to the low bits. Raises FrameError where a frame does not fit the others."""
        if 8 * pixels.dtype.itemsize != self.container:
            raise FrameError(
                f"{file} holds {8 * pixels.dtype.itemsize} bits a sample, {self._by} {self.container}. Save all alike."
            )
        self.check(bits_used(pixels), file)
        return np.right_shift(pixels, self.shift, dtype=np.uint16) if self.shift else pixels

    def notes(self, *, all_read: bool) -> list[Note]:
        """What is odd about the bits: moved samples; once all frames are read, bits that never change."""
        if self.shift:
            return [
                Note(
                    "bit-depth",
                    f"The {self.shift} lowest bits of the {self.container}-bit samples are zero: taken as {self.depth} "
                    f"bits and moved down by {self.shift}. State camera.bit_depth as the camera delivers it.",
                )
            ]
        if not all_read or not self._seen:
            return []
        idle, used = _trailing_zeros(self._seen), self._seen.bit_length()
        if idle:
            return [
                Note(
                    "bit-depth",
                    f"The lowest {idle} of {self.depth} bits are zero in every frame: the camera delivers "
                    f"{self.depth - idle} bits. Save what it delivers, and state camera.bit_depth so.",
                )
            ]
        if self.stated is None and self.container == 16 and used <= 14:
            return [
                Note(
                    "bit-depth",
                    f"The 16-bit samples never use more than their lowest {used} bits. State camera.bit_depth if the "
                    "camera delivers fewer than 16; full scale is taken as 65535.",
                )
            ]
        return []


def _trailing_zeros(number: int) -> int:
    return (number & -number).bit_length() - 1
