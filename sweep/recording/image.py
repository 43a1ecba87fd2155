"""One image file's bytes -> its pixels as stored: nothing rescaled, turned, or blended.

PNG, BMP, PGM and JPEG are decoded by OpenCV, TIFF by tifffile (`tiff.py`). Damage is looked for in the bytes first: a
codec would only print a line, and a JPEG's lost rows would come out grey.
"""

import os
import re
import struct
import tempfile
import threading
import zlib
from collections.abc import Iterator
from contextlib import contextmanager

import cv2
import numpy as np
from numpy.typing import NDArray

from sweep.errors import FrameError
from sweep.frames import Pixels
from sweep.station import Layout

MOST_STRAY_BYTES = 64  # many USB cameras pad their JPEG data by a few bytes (common practice, no source)
_SIGNATURES = {
    b"\x89PNG\r\n\x1a\n": "PNG",
    b"\xff\xd8\xff": "JPEG",
    b"BM": "BMP",
    b"P2": "PGM",
    b"P5": "PGM",
    b"II*\0": "TIFF",
    b"MM\0*": "TIFF",
    b"II+\0": "TIFF",
    b"MM\0+": "TIFF",
}

_ONE_AT_A_TIME = threading.Lock()

cv2.utils.logging.setLogLevel(cv2.utils.logging.LOG_LEVEL_SILENT)


def format_of(data: bytes) -> str | None:
    """The image format by the file's first bytes, whatever its name says; None where it is none that is read."""
    return next((name for start, name in _SIGNATURES.items() if data.startswith(start)), None)


def decode(data: bytes, file: str) -> Pixels:
    """Decode one image file.

    Returns (rows, columns) or (rows, columns, 3) as blue, green, red, of 8 or 16 bit; an alpha channel is dropped.
    Raises FrameError that names the file.
    """
    kind = format_of(data)
    if kind is None:
        what = "is empty" if not data else "is not a PNG, BMP, PGM, JPEG or TIFF image"
        raise FrameError(f"{file} {what}. {_REMEDY}")
    if (kind == "PNG" and not _png_is_whole(data)) or (kind == "JPEG" and not _jpeg_is_whole(data)):
        raise FrameError(f"{file} is damaged or cut short. {_REMEDY}")
    if kind == "TIFF":
        from sweep.recording.tiff import decode_tiff  # its import would slow down every other reading

        pixels = decode_tiff(data, file)
    else:
        pixels = _decode_jpeg(data) if kind == "JPEG" else decode_by_opencv(data)
    if pixels is None:
        raise FrameError(f"{file} is damaged or cut short. {_REMEDY}")
    if pixels.dtype not in (np.uint8, np.uint16) or pixels.ndim not in (2, 3) or not pixels.size:
        raise FrameError(f"{file} holds {pixels.dtype} samples: save 8 or 16 bit whole numbers, one or three channels.")
    if pixels.ndim == 3 and pixels.shape[2] == 1:
        pixels = pixels[:, :, 0]
    if pixels.ndim == 3 and pixels.shape[2] not in (3, 4):
        raise FrameError(f"{file} holds {pixels.shape[2]} channels: save one, or blue, green and red.")
    if pixels.ndim == 3 and pixels.shape[2] == 4:
        pixels = pixels[:, :, :3]
    return np.ascontiguousarray(pixels)


def as_layout(pixels: Pixels, layout: Layout, file: str) -> Pixels:
    """The pixels as the station's layout has them: one channel, or blue, green, red; three equal channels are one.

    Raises FrameError that names the file where its channels are not those of the layout.
    """
    if layout == "bgr" and pixels.ndim == 2:
        raise FrameError(f'{file} has one channel, but camera.layout is "bgr". State the layout that the camera has.')
    if layout == "bgr" or pixels.ndim == 2:
        return pixels
    first = pixels[..., 0].copy()
    if not (np.array_equal(first, pixels[..., 1]) and np.array_equal(first, pixels[..., 2])):
        raise FrameError(
            f'{file} has three channels that differ, but camera.layout is "{layout}". State "bgr", or save one channel.'
        )
    return first


_REMEDY = "Copy the file again, take the frame again, or leave it out (--leave-out-bad-frames)."


def decode_by_opencv(data: bytes) -> NDArray[np.generic] | None:
    """The pixels as OpenCV finds them, None where it finds none."""
    try:
        return cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    except cv2.error:  # more pixels than it allows, or a header that makes no sense
        return None


def _png_is_whole(data: bytes) -> bool:
    """Whether every chunk up to IEND is there and carries its right checksum (ISO/IEC 15948, 5.3)."""
    view, at = memoryview(data), 8
    while at + 12 <= len(data):
        (length,) = struct.unpack_from(">I", data, at)
        end = at + 8 + length
        if end + 4 > len(data) or zlib.crc32(view[at + 4 : end]) != struct.unpack_from(">I", data, end)[0]:
            return False
        if data[at + 4 : at + 8] == b"IEND":
            return True
        at = end + 4
    return False


def _jpeg_is_whole(data: bytes) -> bool:
    """Whether the end-of-image marker follows the scan (ISO/IEC 10918-1, B.1.1); those of thumbnails don't count."""
    at = 2
    while at + 4 <= len(data) and data[at] == 0xFF:
        marker = data[at + 1]
        if marker == 0xFF:  # a fill byte
            at += 1
        elif marker == 0xDA:  # start of scan
            return data.find(b"\xff\xd9", at) >= 0
        else:
            at += 2 + int(struct.unpack_from(">H", data, at + 2)[0])
    return False


def _decode_jpeg(data: bytes) -> NDArray[np.generic] | None:
    """A JPEG file's pixels; None where the codec says that data were lost, though it makes up some in their place."""
    with _ONE_AT_A_TIME, _codec_messages() as said:
        pixels = decode_by_opencv(data)
    return None if any(map(_tells_of_damage, said)) else pixels


def _tells_of_damage(line: str) -> bool:
    stray = re.search(r"Corrupt JPEG data: (\d+) extraneous bytes", line)
    if stray:
        return int(stray[1]) > MOST_STRAY_BYTES
    return "Corrupt JPEG data" in line or "Premature end of JPEG" in line


@contextmanager
def _codec_messages() -> Iterator[list[str]]:
    """What a codec prints on the stderr of the process; what others print there meanwhile is passed on."""
    said: list[str] = []
    try:
        stderr = os.dup(2)
    except OSError:  # there is none
        yield said
        return
    with tempfile.TemporaryFile() as caught:
        os.dup2(caught.fileno(), 2)
        try:
            yield said
        finally:
            os.dup2(stderr, 2)
            os.close(stderr)
            caught.seek(0)
            for line in caught.read().splitlines(keepends=True):
                if b"JPEG" in line or b"JFIF" in line:
                    said.append(line.decode(errors="replace"))
                else:
                    os.write(2, line)
