"""A TIFF file's bytes -> its pixels as stored, by tifffile: OpenCV would turn it and rescale packed samples."""

import io
import logging
import math
import struct
import zlib

import numpy as np
import tifffile
from numpy.typing import NDArray

from sweep.errors import FrameError
from sweep.recording.image import decode_by_opencv

MOST_EXPANSION = 1500  # deflate and LZW cannot expand by more: 1032 and some 1400 times
KINDS = (tifffile.PHOTOMETRIC.MINISBLACK, tifffile.PHOTOMETRIC.RGB, tifffile.PHOTOMETRIC.CFA)
# A wrong tag or offset may surface in tifffile as any of these.
_FAULTS = (
    tifffile.TiffFileError, ArithmeticError, AssertionError, AttributeError, ImportError, LookupError, MemoryError,
    OSError, RuntimeError, TypeError, ValueError, struct.error, zlib.error,
)  # fmt: skip

logging.getLogger("tifffile").addHandler(logging.NullHandler())


def decode_tiff(data: bytes, file: str) -> NDArray[np.generic] | None:
    """The one page of a TIFF file as stored, None where it is damaged. Raises FrameError for other kinds."""
    try:
        with tifffile.TiffFile(io.BytesIO(data)) as tiff:
            page = _only_page(tiff, file)
            if not _tiff_is_whole(page, len(data)):
                return None
            if page.compression == tifffile.COMPRESSION.LZW or page.bitspersample in (10, 12, 14):
                return _decode_tiff_by_opencv(data, page)
            pixels = page.asarray()
            if page.samplesperpixel > 1:
                pixels = np.moveaxis(pixels, 0, -1) if page.planarconfig == tifffile.PLANARCONFIG.SEPARATE else pixels
                pixels = pixels[..., [2, 1, 0]] if page.samplesperpixel >= 3 else pixels
            return pixels
    except _FAULTS as error:
        if "imagecodecs" in str(error):
            raise FrameError(f"{file} is compressed in a way that is not read: save TIFF plain or deflated.") from None
        return None


def _only_page(tiff: tifffile.TiffFile, file: str) -> tifffile.TiffPage:
    """The one page that is no thumbnail. Raises FrameError where there are more, or where it is of another kind."""
    pages = [page for each in tiff.pages if not (page := each.aspage()).is_reduced]
    if len(pages) != 1:
        raise FrameError(f"{file} holds {len(pages)} images: save one frame a file.")
    if pages[0].photometric not in KINDS:
        kind = getattr(pages[0].photometric, "name", pages[0].photometric)
        raise FrameError(f"{file} is a TIFF file of the kind {kind}: save grey or RGB without a palette.")
    return pages[0]


def _tiff_is_whole(page: tifffile.TiffPage, size: int) -> bool:
    """Whether all strips or tiles that the page's size calls for lie inside the file, and can hold its pixels."""
    ends = [at + n for at, n in zip(page.dataoffsets, page.databytecounts, strict=True)]
    whole = len(ends) == math.prod(page.chunked) and min(page.databytecounts, default=0) > 0 and max(ends) <= size
    return whole and page.nbytes <= MOST_EXPANSION * size


def _decode_tiff_by_opencv(data: bytes, page: tifffile.TiffPage) -> NDArray[np.generic] | None:
    """LZW, and samples packed without gaps, which tifffile alone cannot take apart.

    OpenCV would turn the picture by its orientation tag, so that is set to 1 first; it moves packed samples to the high
    bits, which is undone.
    """
    plain = bytearray(data)
    tag = page.tags.get("Orientation")
    if tag is not None:
        struct.pack_into(f"{page.parent.byteorder}H", plain, tag.valueoffset, 1)
    pixels = decode_by_opencv(bytes(plain))
    unused = 16 - page.bitspersample if page.bitspersample in (10, 12, 14) else 0
    return pixels if pixels is None or not unused else np.right_shift(pixels, unused, dtype=np.uint16)
