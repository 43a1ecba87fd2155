"""One image file: its pixels as stored, or a sentence that names it; nothing from the codecs."""

import io
import struct
import warnings
import zlib

import cv2
import numpy as np
import pytest
import tifffile
from folders import noise
from hypothesis import given
from hypothesis import strategies as st

from sweep.errors import FrameError
from sweep.recording.image import decode, format_of

GREY8, GREY16 = noise(1), noise(2, 16)
COLOUR8, COLOUR16 = noise(3, shape=(40, 60, 3)), noise(4, 16, shape=(40, 60, 3))


def encoded(suffix, pixels, *params):
    return cv2.imencode(suffix, pixels, params)[1].tobytes()


def tiff(pixels, **options):
    file = io.BytesIO()
    tifffile.imwrite(file, pixels, **options)
    return file.getvalue()


def packed_tiff(values, bits, orientation=1):
    """A TIFF file of samples packed without gaps, most significant bit first, rows on whole bytes (TIFF 6.0, p. 39)."""
    height, width = values.shape
    rows = (values[:, :, None] >> np.arange(bits - 1, -1, -1) & 1).astype(np.uint8).reshape(height, -1)
    strip = np.packbits(rows, axis=1).tobytes()
    tags = [(256, width), (257, height), (258, bits), (259, 1), (262, 1), (273, 8), (274, orientation), (277, 1)]
    tags += [(278, height), (279, len(strip))]
    entries = b"".join(struct.pack("<HHII", tag, 4 if tag in (256, 257, 273, 278, 279) else 3, 1, v) for tag, v in tags)
    return struct.pack("<2sHI", b"II", 42, 8 + len(strip)) + strip + struct.pack("<H", len(tags)) + entries + b"\0" * 4


@pytest.mark.parametrize("suffix", [".png", ".bmp", ".pgm", ".tif"])
def test_eight_bit_grey_comes_back_bit_for_bit(suffix):
    np.testing.assert_array_equal(decode(encoded(suffix, GREY8), "a"), GREY8)


@pytest.mark.parametrize("suffix", [".png", ".pgm", ".tif"])
def test_sixteen_bit_grey_comes_back_bit_for_bit(suffix):
    pixels = decode(encoded(suffix, GREY16), "a")
    assert pixels.dtype == np.uint16
    np.testing.assert_array_equal(pixels, GREY16)


@pytest.mark.parametrize(
    ("suffix", "pixels"),
    [(".png", COLOUR8), (".bmp", COLOUR8), (".tif", COLOUR8), (".png", COLOUR16), (".tif", COLOUR16)],
)
def test_colour_comes_back_as_blue_green_red(suffix, pixels):
    np.testing.assert_array_equal(decode(encoded(suffix, pixels), "a"), pixels)


def test_plain_and_binary_grey_maps_are_read():
    assert decode(b"P2\n2 1\n255\n7 200\n", "a").tolist() == [[7, 200]]
    twelve = b"P5 2 1 4095\n" + struct.pack(">2H", 7, 4095)
    assert decode(twelve, "a").tolist() == [[7, 4095]]  # not stretched to 16 bits


def test_jpeg_is_read():
    flat = np.full((40, 60), 77, np.uint8)
    np.testing.assert_array_equal(decode(encoded(".jpg", flat), "a"), flat)
    assert format_of(encoded(".jpg", flat)) == "JPEG"


def test_an_alpha_channel_is_dropped():
    four = np.dstack([COLOUR8, np.full((40, 60), 9, np.uint8)])
    np.testing.assert_array_equal(decode(encoded(".png", four), "a"), COLOUR8)
    rgba = four[..., [2, 1, 0, 3]]
    np.testing.assert_array_equal(decode(tiff(rgba, photometric="rgb", extrasamples=["unassalpha"]), "a"), COLOUR8)


def exif_orientation(png, value):
    """A PNG file with an eXIf chunk that asks for a turn."""
    body = b"eXIf" + b"II*\0\x08\0\0\0\x01\0" + struct.pack("<HHIHH", 274, 3, 1, value, 0) + b"\0\0\0\0"
    chunk = struct.pack(">I", len(body) - 4) + body + struct.pack(">I", zlib.crc32(body))
    return png[:33] + chunk + png[33:]


@pytest.mark.parametrize("turn", [3, 6, 8])
def test_orientation_is_never_applied(turn):
    np.testing.assert_array_equal(decode(exif_orientation(encoded(".png", GREY8), turn), "a"), GREY8)
    tag = [(274, "H", 1, turn, True)]
    np.testing.assert_array_equal(decode(tiff(GREY16, extratags=tag), "a"), GREY16)
    np.testing.assert_array_equal(decode(packed_tiff(GREY16 >> 4, 12, turn), "a"), GREY16 >> 4)


@pytest.mark.parametrize(
    "options",
    [
        {"byteorder": ">"},
        {"bigtiff": True},
        {"compression": "zlib"},
        {"compression": "zlib", "predictor": True},
        {"tile": (16, 16)},
        {"rowsperstrip": 7},
    ],
)
def test_ways_to_write_tiff(options):
    np.testing.assert_array_equal(decode(tiff(GREY16, **options), "a"), GREY16)
    colour = decode(tiff(COLOUR16[..., ::-1], photometric="rgb", **options), "a")
    np.testing.assert_array_equal(colour, COLOUR16)


def test_planes_apart_are_put_together():
    planes = np.moveaxis(COLOUR8[..., ::-1], -1, 0).copy()
    np.testing.assert_array_equal(decode(tiff(planes, photometric="rgb", planarconfig="separate"), "a"), COLOUR8)


@pytest.mark.parametrize("compression", [1, 5, 32773])  # none, LZW, PackBits as OpenCV's encoder writes them
def test_tiff_of_another_writer(compression):
    for pixels in (GREY8, GREY16, COLOUR8):
        data = encoded(".tif", pixels, cv2.IMWRITE_TIFF_COMPRESSION, compression)
        np.testing.assert_array_equal(decode(data, "a"), pixels)


@pytest.mark.parametrize("bits", [10, 12, 14])
@pytest.mark.parametrize("width", [60, 59])
def test_packed_samples_are_unpacked_to_the_low_bits(bits, width):
    values = GREY16[:, :width] >> (16 - bits)
    np.testing.assert_array_equal(decode(packed_tiff(values, bits), "a"), values)


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"", "a.x is empty"),
        (b"This is no image.", "is not a PNG, BMP, PGM, JPEG or TIFF"),
        (encoded(".webp", COLOUR8), "is not a PNG, BMP, PGM, JPEG or TIFF"),
        (b"BM" + b"\0" * 80, "damaged"),
        (b"P5 99999999 99999999 255\n", "damaged"),
        (tiff(GREY16.astype(np.float32)), "float32 samples"),
        (tiff(GREY16.astype(np.uint32)), "uint32 samples"),
        (tiff(GREY8, photometric="miniswhite"), "of the kind MINISWHITE"),
        (tiff(np.stack([GREY8, GREY8]), photometric="minisblack"), "holds 2 images"),
        (tiff(noise(1, shape=(40, 60, 2)), photometric="minisblack", planarconfig="contig"), "2 channels"),
        (encoded(".tif", GREY8, cv2.IMWRITE_TIFF_COMPRESSION, 7), "compressed in a way"),
    ],
)
def test_what_cannot_be_taken_as_stored_is_refused(data, words, capfd):
    with pytest.raises(FrameError, match=r"^a\.x ") as caught:
        decode(data, "a.x")
    assert words in str(caught.value)
    assert capfd.readouterr().err == ""


FILES = {
    "PNG": encoded(".png", GREY8),
    "PNG 16": encoded(".png", GREY16),
    "JPEG": encoded(".jpg", GREY8),
    "JPEG colour": encoded(".jpg", COLOUR8),
    "JPEG progressive": encoded(".jpg", GREY8, cv2.IMWRITE_JPEG_PROGRESSIVE, 1),
    "BMP": encoded(".bmp", GREY8),
    "PGM": encoded(".pgm", GREY16),
    "TIFF": tiff(GREY16),
    "TIFF deflate": tiff(GREY16, compression="zlib"),
    "TIFF tiles": tiff(GREY16, tile=(16, 16)),
    "TIFF LZW": encoded(".tif", GREY16),
    "TIFF packed": packed_tiff(GREY16 >> 4, 12),
}


@pytest.mark.parametrize("kind", FILES)
@pytest.mark.parametrize("share", [0.02, 0.3, 0.5, 0.9, 0.98])
def test_a_file_cut_short_is_found_out(kind, share, capfd):
    data = FILES[kind]
    with pytest.raises(FrameError, match=r"^a "):
        decode(data[: int(share * len(data))], "a")
    assert capfd.readouterr().err == ""


@pytest.mark.parametrize("kind", ["PNG", "PNG 16"])
@pytest.mark.parametrize("at", [20, 30, 50, 500, -10])
def test_one_flipped_bit_in_a_png_file_is_found_out(kind, at, capfd):
    data = bytearray(FILES[kind])
    data[at] ^= 4
    with pytest.raises(FrameError, match="damaged"):
        decode(bytes(data), "a")
    assert capfd.readouterr().err == ""


def test_a_jpeg_whose_end_marker_is_only_that_of_its_thumbnail_is_cut_short():
    jpeg = FILES["JPEG"]
    thumbnail = b"\xff\xe1" + struct.pack(">H", 2 + len(jpeg)) + jpeg
    whole = jpeg[:2] + thumbnail + jpeg[2:]
    np.testing.assert_array_equal(decode(whole, "a"), decode(jpeg, "a"))
    with pytest.raises(FrameError, match="damaged"):
        decode(whole[: len(thumbnail) + len(jpeg) // 2], "a")


def scan_of(jpeg):
    """Where the entropy-coded data begin (ISO/IEC 10918-1, B.2.3)."""
    at = jpeg.index(b"\xff\xda")
    return at + 2 + struct.unpack_from(">H", jpeg, at + 2)[0]


def test_a_jpeg_that_lost_data_within_its_scan_is_found_out_and_what_the_codec_says_is_not_shown(capfd):
    jpeg = FILES["JPEG"]
    start = scan_of(jpeg)
    with pytest.raises(FrameError, match="damaged"):
        decode(jpeg[: start + 300] + jpeg[-2:], "a")
    assert capfd.readouterr().err == ""


def test_a_few_stray_bytes_before_the_end_of_a_jpeg_are_no_damage(capfd):
    # Many USB cameras pad their JPEG data (common practice, no source).
    jpeg = FILES["JPEG"]
    np.testing.assert_array_equal(decode(jpeg[:-2] + b"\0" * 8 + jpeg[-2:], "a"), decode(jpeg, "a"))
    assert capfd.readouterr().err == ""


@given(st.sampled_from(list(FILES)), st.data())
def test_any_damage_gives_pixels_or_a_short_message(kind, data):
    content = bytearray(FILES[kind])
    for at, value in data.draw(st.lists(st.tuples(st.integers(0, 199), st.integers(0, 255)), max_size=4)):
        content[at if data.draw(st.booleans()) else -1 - at] = value
    cut = data.draw(st.integers(0, len(content)) | st.just(len(content)))
    message = "fine"
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        try:
            pixels = decode(bytes(content[:cut]), "a")
        except FrameError as error:
            message = str(error)
        else:
            assert pixels.dtype in (np.uint8, np.uint16)
            assert pixels.ndim in (2, 3)
    assert 1 <= len(message.splitlines()) <= 4
