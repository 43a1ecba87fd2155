"""Folders of frames, loose ones and recordings: what is read, what is refused and in which words."""

import csv
import json
import re
import shutil
from pathlib import Path

import cv2
import numpy as np
import pytest
import tifffile
from folders import HEADER, HEIGHT, STATION_TEXT, WIDTH, a_folder, a_station, noise, write
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from sweep.errors import FrameError, InputError, SourceError, StationError
from sweep.recording import load_station, open_source

DOCS = Path(__file__).parent.parent / "docs" / "station-file.md"


def refusal(folder, error=SourceError, **options):
    """The message with which a folder is refused, at opening or while it is read."""
    with pytest.raises(error) as caught:
        read_all(open_source(folder, **({"station": a_station()} | options)))
    message = str(caught.value)
    assert 1 <= len(message.splitlines()) <= 4
    return message


def read_all(source):
    return {shot.file: source.read(shot) for shot in source.shots}


def codes(source):
    return [note.code for note in source.notes]


# --- what is read


def test_frames_come_back_as_written_and_rows_as_shots(tmp_path):
    frames = {f"{k}.png": noise(k, 16) for k in range(4)}
    rows = ["0.png,2,1.5,0,target", "1.png,2.8,3e0,-1.5,", "2.png,2.80,3,6,target", "3.png,,3,0,dark"]
    source = open_source(a_folder(tmp_path, frames, rows=rows), station=a_station())
    assert [(s.file, s.stop, s.exposure_ms, s.gain_db, s.role) for s in source.shots] == [
        ("0.png", 2.0, 1.5, 0.0, "target"),
        ("1.png", 2.8, 3.0, -1.5, "target"),
        ("2.png", 2.8, 3.0, 6.0, "target"),
        ("3.png", None, 3.0, 0.0, "dark"),
    ]
    assert [s.order for s in source.shots] == [0, 1, 2, 3]
    assert source.bit_depth == 16
    assert source.frame_size == (WIDTH, HEIGHT)
    assert source.notes == []
    for _ in range(2):  # each as often as wanted
        for name, pixels in read_all(source).items():
            np.testing.assert_array_equal(pixels, frames[name])


def test_the_table_of_the_manual_is_read(tmp_path):
    table = re.search(r"```csv\n(.*?)```", DOCS.read_text(encoding="utf-8"), re.DOTALL)[1]
    names = [row["file"] for row in csv.DictReader(table.splitlines())]
    a_folder(tmp_path, {name: noise(k) for k, name in enumerate(names)})
    (tmp_path / "shots.csv").write_text(table, encoding="utf-8")
    source = open_source(tmp_path, station=a_station())
    assert [s.time_s for s in source.shots] == [0.0, 0.4, 9.1, 9.5, 30.2]
    assert [s.role for s in source.shots] == [*["target"] * 4, "dark"]


def test_optional_and_extra_columns(tmp_path):
    header = "time_s,operator,file,stop,exposure_ms,gain_db,target"
    rows = [
        '0.5,"day, ""late""; 3,5 µm",a.png,2,1,0,"Kappe, Größe 2"',
        ",,b.png,2.8,1,0,",
        "",
        "2e1,,c.png,4,1,0,tray floor",
    ]
    frames = {name: noise(k) for k, name in enumerate(("a.png", "b.png", "c.png"))}
    source = open_source(a_folder(tmp_path, frames, rows=rows, header=header), station=a_station())
    assert [(s.target, s.time_s) for s in source.shots] == [("Kappe, Größe 2", 0.5), (None, None), ("tray floor", 20)]
    assert {s.role for s in source.shots} == {"target"}


@pytest.mark.parametrize(
    "spell",
    [
        lambda t: t.encode(),
        lambda t: t.encode("utf-8-sig"),
        lambda t: t.replace("\n", "\r\n").encode("utf-8-sig"),
        lambda t: t.strip().encode(),
        lambda t: t.replace(",", " , ").encode(),
        lambda t: re.sub(r"[^,\n]+", r'"\g<0>"', t).encode(),
        lambda t: (t + "\n\n,,,,\n").encode(),
    ],
)
def test_ways_to_write_the_table(tmp_path, spell):
    a_folder(tmp_path)
    text = (tmp_path / "shots.csv").read_text(encoding="utf-8")
    plain = open_source(tmp_path, station=a_station())
    (tmp_path / "shots.csv").write_bytes(spell(text))
    other = open_source(tmp_path, station=a_station())
    assert other.shots == plain.shots
    assert other.sha256 == plain.sha256


def test_names_with_spaces_umlauts_commas_quotes_and_folders(tmp_path):
    names = ["Prüfung Blende 2 – Größe 1.png", 'a, "b".png', "sub folder/ß.png", "日本.png"]
    rows = []
    for k, name in enumerate(names):
        quoted = name.replace('"', '""')
        rows.append(f'"{quoted}",{(2, 2.8)[k % 2]},1,0,target')
    frames = {name: noise(k) for k, name in enumerate(names)}
    source = open_source(a_folder(tmp_path, frames, rows=rows), station=a_station())
    read = read_all(source)
    for name in names:
        np.testing.assert_array_equal(read[name], frames[name])


def test_names_as_other_systems_write_them(tmp_path):
    # Decomposed umlauts come from macOS, backslashes from Windows.
    a_folder(tmp_path, {"sub/Gro\u0308ße.png": noise(1), "b.png": noise(2)})
    rows = ["sub\\Größe.png,2,1,0,target", "./b.png,2.8,1,0,target"]
    (tmp_path / "shots.csv").write_text("\n".join([HEADER, *rows]), encoding="utf-8")
    read = read_all(open_source(tmp_path, station=a_station()))
    np.testing.assert_array_equal(read["sub\\Größe.png"], noise(1))
    np.testing.assert_array_equal(read["./b.png"], noise(2))


def test_a_folder_reached_by_a_link_is_read(tmp_path):
    a_folder(tmp_path / "frames")
    (tmp_path / "link").symlink_to(tmp_path / "frames")
    assert len(read_all(open_source(tmp_path / "link", station=a_station()))) == 4


def test_the_stop_is_that_of_the_ring_though_written_otherwise(tmp_path):
    rows = [f"{k}.png,{s},1,0,target" for k, s in enumerate(("2.0", "+2.80", "2.8e0", "4.0000001"))]
    source = open_source(a_folder(tmp_path, rows=rows), station=a_station())
    assert [s.stop for s in source.shots] == [2.0, 2.8, 2.8, 4.0]


def test_the_hash_does_not_depend_on_the_order_of_the_rows(tmp_path):
    rows = [f"{k}.png,{(2, 2.8)[k % 2]},1,0,target" for k in range(4)]
    hashes = {open_source(a_folder(tmp_path, rows=r), station=a_station()).sha256 for r in (rows, rows[::-1])}
    assert len(hashes) == 1


@pytest.mark.parametrize(
    "change",
    [
        lambda f: write(f / "2.png", noise(9)),
        lambda f: (f / "shots.csv").write_text((f / "shots.csv").read_text().replace("1.5,0", "1.6,0", 1)),
        lambda f: (f / "shots.csv").write_text((f / "shots.csv").read_text().replace("2.8,1.5", "4,1.5", 1)),
    ],
)
def test_the_hash_follows_every_shot_and_file(tmp_path, change):
    before = open_source(a_folder(tmp_path), station=a_station()).sha256
    change(tmp_path)
    assert open_source(tmp_path, station=a_station()).sha256 != before


def test_reading_writes_nothing(tmp_path):
    a_folder(tmp_path)
    before = {p: (p.stat().st_mtime_ns, p.read_bytes()) for p in tmp_path.rglob("*") if p.is_file()}
    source = open_source(tmp_path, station=a_station())
    read_all(source)
    assert source.sha256
    assert {p: (p.stat().st_mtime_ns, p.read_bytes()) for p in tmp_path.rglob("*") if p.is_file()} == before


# --- channels


def test_three_equal_channels_count_as_one(tmp_path):
    grey = noise(1)
    frames = {"a.png": cv2.cvtColor(grey, cv2.COLOR_GRAY2BGR), "b.png": grey}
    for layout in ("mono", "rggb"):
        read = read_all(open_source(a_folder(tmp_path, frames), station=a_station(layout=layout)))
        np.testing.assert_array_equal(read["a.png"], grey)


def test_colour_stays_blue_green_red(tmp_path):
    frames = {f"{k}.png": noise(k, shape=(HEIGHT, WIDTH, 3)) for k in range(2)}
    read = read_all(open_source(a_folder(tmp_path, frames), station=a_station(layout="bgr")))
    np.testing.assert_array_equal(read["0.png"], frames["0.png"])


def test_channels_that_are_not_those_of_the_layout(tmp_path):
    colour = {f"{k}.png": noise(k, shape=(HEIGHT, WIDTH, 3)) for k in range(2)}
    message = refusal(a_folder(tmp_path / "colour", colour), FrameError)
    assert 'three channels that differ, but camera.layout is "mono"' in message
    message = refusal(a_folder(tmp_path / "grey"), FrameError, station=a_station(layout="bgr"))
    assert 'one channel, but camera.layout is "bgr"' in message


# --- bits


def twelve_bits(k):
    return noise(k, 12)


def test_a_stated_depth_is_taken_low_aligned_as_it_is(tmp_path):
    frames = {f"{k}.png": twelve_bits(k) for k in range(4)}
    source = open_source(a_folder(tmp_path, frames), station=a_station(bit_depth=12))
    read = read_all(source)
    assert source.bit_depth == 12
    assert source.notes == []
    np.testing.assert_array_equal(read["3.png"], frames["3.png"])


@pytest.mark.parametrize("stated", [{"bit_depth": 12}, {}])
def test_high_aligned_samples_are_moved_down_and_it_is_said(tmp_path, stated):
    frames = {f"{k}.png": twelve_bits(k) << 4 for k in range(4)}
    source = open_source(a_folder(tmp_path, frames), station=a_station(**stated))
    read = read_all(source)
    assert source.bit_depth == 12
    assert codes(source) == ["bit-depth"]
    for k in range(4):
        np.testing.assert_array_equal(read[f"{k}.png"], twelve_bits(k))


def test_a_dim_frame_does_not_decide_the_alignment(tmp_path):
    # 0.png fits both: low-aligned values that happen to be multiples of 16.
    frames = {"0.png": np.full((HEIGHT, WIDTH), 2048, np.uint16), "1.png": twelve_bits(1)}
    source = open_source(a_folder(tmp_path, frames), station=a_station(bit_depth=12))
    assert read_all(source)["0.png"][0, 0] == 2048
    assert source.notes == []
    frames = {"0.png": np.full((HEIGHT, WIDTH), 2048, np.uint16), "1.png": twelve_bits(1) << 4}
    source = open_source(a_folder(tmp_path, frames), station=a_station(bit_depth=12))
    assert read_all(source)["0.png"][0, 0] == 128
    assert codes(source) == ["bit-depth"]


def test_frames_of_two_alignments_are_refused(tmp_path):
    frames = {"0.png": twelve_bits(0) << 4, "1.png": twelve_bits(1)}
    message = refusal(a_folder(tmp_path, frames), FrameError, station=a_station(bit_depth=12))
    assert "1.png uses the 4 low bits that are zero in 0.png" in message


def test_values_above_the_stated_full_scale_are_refused(tmp_path):
    frames = {f"{k}.png": noise(k, 13) for k in range(2)}
    message = refusal(a_folder(tmp_path, frames), FrameError, station=a_station(bit_depth=12))
    assert "0.png holds values above 4095" in message
    assert "State the bits that the camera delivers" in message


def test_eight_bit_files_cannot_hold_twelve_bits(tmp_path):
    message = refusal(a_folder(tmp_path), FrameError, station=a_station(bit_depth=12))
    assert "0.png holds 8 bits a sample, but camera.bit_depth is 12" in message


def test_frames_of_two_widths_are_refused(tmp_path):
    frames = {"0.png": noise(0), "1.png": noise(1, 16)}
    assert "1.png holds 16 bits a sample, 0.png 8" in refusal(a_folder(tmp_path, frames), FrameError)


def test_bits_that_never_change_are_noticed_once_all_is_read(tmp_path):
    frames = {f"{k}.png": noise(k, 6) << 2 for k in range(2)}
    source = open_source(a_folder(tmp_path, frames), station=a_station())
    source.read(source.shots[0])
    assert source.notes == []
    read_all(source)
    assert "lowest 2 of 8 bits are zero" in source.notes[0].text
    frames = {f"{k}.png": twelve_bits(k) for k in range(2)}
    source = open_source(a_folder(tmp_path, frames), station=a_station())
    read_all(source)
    assert "never use more than their lowest 12 bits" in source.notes[0].text
    assert source.bit_depth == 16


def test_black_frames_alone_settle_nothing_and_harm_nothing(tmp_path):
    frames = {f"{k}.png": np.zeros((HEIGHT, WIDTH), np.uint16) for k in range(2)}
    source = open_source(a_folder(tmp_path, frames), station=a_station(bit_depth=12))
    assert not any(pixels.any() for pixels in read_all(source).values())
    assert source.bit_depth == 12
    assert source.notes == []


# --- files and formats


def test_jpeg_is_read_with_one_warning(tmp_path):
    frames = {"a.jpg": noise(1), "b.jpeg": noise(2), "c.png": noise(3)}
    source = open_source(a_folder(tmp_path, frames), station=a_station())
    read_all(source)
    assert codes(source) == ["compressed-source"]
    assert "2 of 3 frames are JPEG files (a.jpg)" in source.notes[0].text


def test_formats_may_be_mixed_and_go_by_content(tmp_path):
    a_folder(tmp_path, {"a.png": noise(1), "b.bmp": noise(2), "c.pgm": noise(3)})
    tifffile.imwrite(tmp_path / "d.tif", noise(4))
    shutil.copy(tmp_path / "a.png", tmp_path / "e.jpg")  # a PNG file with another name
    rows = [f"{n},{(2, 2.8)[k % 2]},1,0,target" for k, n in enumerate(("a.png", "b.bmp", "c.pgm", "d.tif", "e.jpg"))]
    (tmp_path / "shots.csv").write_text("\n".join([HEADER, *rows]))
    source = open_source(tmp_path, station=a_station())
    read = read_all(source)
    for k, name in enumerate(("a.png", "b.bmp", "c.pgm", "d.tif")):
        np.testing.assert_array_equal(read[name], noise(k + 1))
    np.testing.assert_array_equal(read["e.jpg"], noise(1))
    assert source.notes == []


# --- what is refused: the folder and its table


def test_a_folder_that_is_none(tmp_path):
    assert "is not there" in refusal(tmp_path / "none")
    (tmp_path / "file").write_text("x")
    assert "is not a folder" in refusal(tmp_path / "file")
    (tmp_path / "empty").mkdir()
    message = refusal(tmp_path / "empty")
    assert "shots.csv is not there" in message
    assert HEADER in message


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "is empty"),
        (b"\n\n", "is empty"),
        (b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR", "not a text file"),
        (bytes(range(256)) * 4, "not a text file"),
        (b"\xff" * 40, "line 1, is not UTF-8"),
        ("file,stop\nPrüfung".encode("latin-1"), "line 2, is not UTF-8"),
        (HEADER.encode(), "lists no frame"),
        (HEADER.encode() + b'\n"a.png,2,1,0,target\n', "not a sound CSV file"),
        (HEADER.encode() + b"\n" + b"a" * 200_000 + b",2,1,0,", "not a sound CSV file"),
        (b"file,exposure_ms,gain_db\na.png,1,0\n", "no column stop"),
        (b"file,Stop,exposure_ms,gain_db\na.png,2,1,0\n", 'no column stop. Is it the one called "stop"'),
        (b"file;stop;exposure_ms;gain_db;role\na.png;2;1;0;target\n", 'parted by ";"'),
        (b"file\tstop\texposure_ms\tgain_db\na.png\t2\t1\t0\n", "parted by tabs"),
        (b"file,stop,stop,exposure_ms,gain_db\na.png,2,2,1,0\n", "two columns are called stop"),
        (b"a.png,2,1,0,target\n", "no column file, stop, exposure_ms, gain_db"),
    ],
)
def test_a_table_that_is_none(tmp_path, content, words):
    a_folder(tmp_path)
    (tmp_path / "shots.csv").write_bytes(content)
    message = refusal(tmp_path)
    assert words in message
    assert "shots.csv" in message


@pytest.mark.parametrize(
    ("row", "column", "words"),
    [
        ("0.png,2,abc,0,target", "exposure_ms", '"abc" is not a number'),
        ("0.png,2,,0,target", "exposure_ms", "empty"),
        ("0.png,2,-1,0,target", "exposure_ms", "out of range"),
        ("0.png,2,0,0,target", "exposure_ms", "0 is no exposure"),
        ("0.png,2,nan,0,target", "exposure_ms", "not a number"),
        ("0.png,2,1_000,0,target", "exposure_ms", "not a number"),
        ("0.png,2,1e999,0,target", "exposure_ms", "out of range"),
        ('0.png,2,"1,5",0,target', "exposure_ms", "decimal point"),
        ("0.png,2,1.5 ms,0,target", "exposure_ms", "not a number"),
        ("0.png,2,1,inf,target", "gain_db", "not a number"),
        ("0.png,2,1,1e9,target", "gain_db", "out of range"),
        ("0.png,f/2,1,0,target", "stop", "not a number"),
        ("0.png,,1,0,target", "stop", "empty"),
        ("0.png,5.6,1,0,target", "stop", "the ring has no stop 5.6; lens.stops lists 2, 2.8, 4"),
        ("0.png,2,1,0,flat", "role", '"flat" is unknown; write target or dark'),
        (",2,1,0,target", "file", "empty"),
        ("/etc/hostname,2,1,0,target", "file", "absolute path"),
        ("C:\\frames\\a.png,2,1,0,target", "file", "absolute path"),
        ("\\\\server\\a.png,2,1,0,target", "file", "absolute path"),
        ("../0.png,2,1,0,target", "file", "leads out of the folder"),
        ("sub/../../0.png,2,1,0,target", "file", "leads out of the folder"),
        ("..\\0.png,2,1,0,target", "file", "leads out of the folder"),
        ("link.png,2,1,0,target", "file", "leads out of the folder"),
        ("circle.png,2,1,0,target", "file", "cannot be followed"),
        ("x" * 300 + ".png,2,1,0,target", "file", "cannot be followed"),
        ("1.png,2,1,0,target", "file", '"1.png" is in row 2 too'),
        ("./1.png,2,1,0,target", "file", '"./1.png" is in row 2 too'),
        ("0.png,2,1,0,target,more", None, "6 cells under 5 columns"),
        ("a, b.png,2,1,0,target", None, "6 cells under 5 columns"),
    ],
)
def test_a_wrong_row_is_named_with_its_column(tmp_path, row, column, words):
    folder = a_folder(tmp_path / "in", rows=["1.png,2,1,0,target", "2.png,2.8,1,0,target", row])
    write(tmp_path / "outside.png", noise(5))
    (folder / "link.png").symlink_to(tmp_path / "outside.png")
    (folder / "circle.png").symlink_to(folder / "circle.png")
    message = refusal(folder)
    place = "shots.csv, row 4" + (f", column {column}: " if column else ": ")
    assert place in message
    assert words in message
    assert message.endswith(".")


def test_a_dark_row_may_stand_at_no_stop_and_for_no_target(tmp_path):
    rows = ["0.png,2,1,0,target", "1.png,4,1,0,target", "2.png,,0,0,dark", "3.png,22,1,0,dark"]
    source = open_source(a_folder(tmp_path, rows=rows), station=a_station())
    assert [s.stop for s in source.shots] == [2.0, 4.0, None, 22.0]


def test_an_unknown_target_is_refused_with_those_that_are_known(tmp_path):
    rows = ["0.png,2,1,0,target,tray floor", "1.png,2.8,1,0,target,lid"]
    message = refusal(a_folder(tmp_path, rows=rows, header=HEADER + ",target"))
    assert "row 3, column target" in message
    assert 'no target "lid"; it has "tray floor", "Kappe, Größe 2"' in message


def test_all_mistakes_of_a_table_are_told_or_counted(tmp_path):
    rows = ["0.png,2,x,y,z", "1.png,2,1,0,target", "1.png,2,1,0,target"]
    message = refusal(a_folder(tmp_path, rows=rows))
    assert "shots.csv has 4 mistakes" in message
    assert "row 2, column role" in message
    assert "and 2 more" in message


def test_a_sweep_needs_target_frames_of_two_stops(tmp_path):
    rows = [f"{k}.png,2,1,0,target" for k in range(4)]
    assert "of one stop only, f/2" in refusal(a_folder(tmp_path, rows=rows))
    rows = [f"{k}.png,2,1,0,dark" for k in range(4)]
    assert "none with the role target" in refusal(a_folder(tmp_path, rows=rows))


# --- what is refused: frames


def spoilt(folder, name, how):
    path = folder / name
    data = path.read_bytes()
    match how:
        case "missing":
            path.unlink()
        case "empty":
            path.write_bytes(b"")
        case "cut short":
            path.write_bytes(data[: len(data) // 2])
        case "flipped":
            path.write_bytes(data[: len(data) // 2] + bytes([data[len(data) // 2] ^ 1]) + data[len(data) // 2 + 1 :])
        case "text":
            path.write_text("This is no image.")
        case "folder":
            path.unlink()
            path.mkdir()
        case "size":
            write(path, noise(8, shape=(HEIGHT, WIDTH + 1)))


SPOILT = ["missing", "empty", "cut short", "flipped", "text", "folder", "size"]


@pytest.mark.parametrize("how", SPOILT)
@pytest.mark.parametrize("name", ["0.png", "3.png"])
def test_a_bad_frame_refuses_the_sweep_and_is_named(tmp_path, how, name, capfd):
    spoilt(a_folder(tmp_path), name, how)
    message = refusal(tmp_path, FrameError)
    assert name in message
    assert capfd.readouterr().err == ""  # nothing from the codecs


@pytest.mark.parametrize("how", SPOILT)
@pytest.mark.parametrize("name", ["0.png", "5.png"])
def test_a_bad_frame_is_left_out_where_that_is_wanted(tmp_path, how, name):
    a_folder(tmp_path, {f"{k}.png": noise(k) for k in range(6)})
    spoilt(tmp_path, name, how)
    source = open_source(tmp_path, station=a_station(), leave_out_bad_frames=True)
    read = read_all(source)
    assert len(read) == 5
    assert name not in read
    assert codes(source) == ["frame-missing" if how in ("missing", "folder") else "frame-unreadable"]
    assert name in source.notes[0].text
    assert source.sha256


def test_two_sizes_are_both_named(tmp_path):
    spoilt(a_folder(tmp_path), "2.png", "size")
    message = refusal(tmp_path, FrameError)
    assert "2.png is 61 x 40 pixels, 0.png is 60 x 40" in message


def test_what_is_left_must_still_be_a_sweep(tmp_path):
    folder = a_folder(tmp_path)
    for name in ("1.png", "3.png"):
        spoilt(folder, name, "missing")
    assert "one stop only, f/2 after 2 were left out" in refusal(folder, leave_out_bad_frames=True)
    for name in ("0.png", "2.png"):
        spoilt(folder, name, "cut short")
    assert "0.png is damaged" in refusal(folder, FrameError, leave_out_bad_frames=True)


def test_a_layout_that_no_frame_has_is_told_though_bad_frames_are_left_out(tmp_path):
    message = refusal(a_folder(tmp_path), FrameError, station=a_station(layout="bgr"), leave_out_bad_frames=True)
    assert 'camera.layout is "bgr"' in message


@pytest.mark.parametrize("leave_out", [False, True])
def test_a_region_outside_the_frame_is_named(tmp_path, leave_out):
    frames = {f"{k}.png": noise(k, shape=(HEIGHT, 50)) for k in range(4)}
    message = refusal(a_folder(tmp_path, frames), StationError, leave_out_bad_frames=leave_out)
    assert "targets[1].patches[0].region = [40, 4, 20, 30]" in message
    assert "50 x 40 pixels" in message


# --- station files on disk


def test_a_station_file_is_loaded(tmp_path):
    (tmp_path / "station.toml").write_bytes(b"\xef\xbb\xbf" + STATION_TEXT.replace("\n", "\r\n").encode())
    assert load_station(tmp_path / "station.toml") == a_station(layout="mono")
    assert load_station(str(tmp_path / "station.toml")).targets[1].name == "Kappe, Größe 2"


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (None, "is not there"),
        (b"\0\1\2", "is not a text file"),
        (b"a = '\xff'", "line 1, is not UTF-8"),
        (b"# " + b"x" * 2_000_000, "is not a text file"),
        (b"[lens\n", "line 1"),
        (b"", "has 6 mistakes"),
    ],
)
def test_a_station_file_that_is_none(tmp_path, content, words):
    path = tmp_path / "lane.toml"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(StationError) as caught:
        load_station(path)
    assert words in str(caught.value)
    assert "lane.toml" in str(caught.value)
    assert len(str(caught.value).splitlines()) <= 4


def test_a_folder_is_no_station_file(tmp_path):
    with pytest.raises(StationError, match="is not a file"):
        load_station(tmp_path)


# --- any input


SMALL = settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=150)


@SMALL
@given(st.binary(max_size=300) | st.text(max_size=200).map(lambda t: f"{HEADER}\n{t}".encode("utf-8", "replace")))
@example(HEADER.encode() + b"\n0.png,2,1,0,target,\n1.png,4,1,0\n")
def test_any_table_is_read_or_refused_in_a_few_words(tmp_path, content):
    if not (tmp_path / "0.png").exists():
        a_folder(tmp_path)
    (tmp_path / "shots.csv").write_bytes(content)
    message = "fine"
    try:
        read_all(open_source(tmp_path, station=a_station()))
    except InputError as error:
        message = str(error)
    assert 1 <= len(message.splitlines()) <= 4


CELLS = st.sampled_from(["0.png", "1.png", "..", "2", "2.8", "4", "1e5", "-", "dark", "target", '"', "a,b", " ", "é"])


@SMALL
@given(st.lists(st.lists(CELLS | st.text(max_size=6), min_size=3, max_size=6), max_size=4))
def test_any_cells_are_read_or_refused_in_a_few_words(tmp_path, rows):
    if not (tmp_path / "0.png").exists():
        a_folder(tmp_path)
    with (tmp_path / "shots.csv").open("w", encoding="utf-8", errors="replace", newline="") as file:
        csv.writer(file).writerows([HEADER.split(","), *rows])
    message = "fine"
    try:
        read_all(open_source(tmp_path, station=a_station()))
    except InputError as error:
        message = str(error)
    assert 1 <= len(message.splitlines()) <= 4


@SMALL
@given(st.none() | st.integers() | st.text(max_size=9) | st.dictionaries(st.text(max_size=6), st.text(max_size=6)))
def test_any_recording_json_is_read_or_refused(tmp_path, facts):
    if not (tmp_path / "0.png").exists():
        a_folder(tmp_path)
    (tmp_path / "recording.json").write_text(json.dumps(facts))
    with pytest.raises(SourceError, match=r"recording\.json"):
        open_source(tmp_path, station=a_station())
