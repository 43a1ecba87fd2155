"""The writer of recordings: whatever stops it, what counted is whole, and the run can be taken up again."""

import hashlib
import json
import os
import resource
import signal
import subprocess
import sys
import time
from contextlib import contextmanager

import numpy as np
import pytest
from folders import STATION_TEXT, a_folder, a_station, noise

from sweep import __version__
from sweep.errors import CaptureError, FrameError, SourceError
from sweep.frames import Shot
from sweep.recording import Recorder, load_station, open_source, record_into

DEVICE = {"model": "invented", "serial": "7", "bits": 12}


def a_shot(k, stop=2.0, **more):
    return Shot("", stop, 1.5 + k / 3, 0.1, "target", 0, **({"target": "Kappe, Größe 2", "time_s": k / 7} | more))


def a_recording(folder, frames=4, how="done"):
    recorder = Recorder(folder, STATION_TEXT, DEVICE)
    for k in range(frames):
        recorder.add(noise(k, 12), a_shot(k, (2.0, 2.8)[k % 2]))
    recorder.add(noise(99, 4, dtype=np.uint16), Shot("", None, 3, 0, "dark", 0))
    if how:
        recorder.close(how, "as asked")
    return recorder


def the_station():
    return a_station(bit_depth=12)


def test_what_is_written_is_read_back(tmp_path):
    recorder = a_recording(tmp_path / "new" / "run")
    source = open_source(recorder.folder, station=the_station())
    assert source.shots == list(recorder.shots)
    assert [s.file for s in source.shots] == [
        "f2_001.png",
        "f2.8_001.png",
        "f2_002.png",
        "f2.8_002.png",
        "dark_001.png",
    ]
    assert source.shots[1] == Shot("f2.8_001.png", 2.8, 1.5 + 1 / 3, 0.1, "target", 1, "Kappe, Größe 2", 1 / 7)
    for k, shot in enumerate(source.shots[:4]):
        np.testing.assert_array_equal(source.read(shot), noise(k, 12))
    assert source.notes == []
    assert source.station_path is not None
    assert load_station(source.station_path) == a_station(layout="mono")


def test_colour_and_eight_bit_frames_are_kept_bit_for_bit(tmp_path):
    recorder = Recorder(tmp_path / "run", STATION_TEXT, {})
    frames = [noise(k, shape=(40, 60, 3)) for k in range(2)]
    for k, frame in enumerate(frames):
        recorder.add(frame, a_shot(k, (2.0, 2.8)[k]))
    source = open_source(tmp_path / "run", station=a_station(layout="bgr"))
    for shot, frame in zip(source.shots, frames, strict=True):
        np.testing.assert_array_equal(source.read(shot), frame)


def test_the_record_states_version_device_end_and_every_hash(tmp_path):
    a_recording(tmp_path / "run", how="interrupted")
    facts = json.loads((tmp_path / "run" / "recording.json").read_text(encoding="utf-8"))
    assert facts["schema"] == "sweep/recording/1"
    assert (facts["version"], facts["ended"], facts["reason"]) == (__version__, "interrupted", "as asked")
    assert facts["device"] == DEVICE
    files = {p.name for p in (tmp_path / "run").iterdir()} - {"recording.json"}
    assert set(facts["files"]) == files
    for name in files:
        assert facts["files"][name] == hashlib.sha256((tmp_path / "run" / name).read_bytes()).hexdigest()


@pytest.mark.parametrize("how", ["done", None])
def test_a_frame_that_changed_since_is_named(tmp_path, how):
    recorder = a_recording(tmp_path / "run", how=how)
    (tmp_path / "run" / "f2_002.png").write_bytes((tmp_path / "run" / "f2_001.png").read_bytes())
    source = open_source(recorder.folder, station=the_station())
    with pytest.raises(FrameError, match=r"f2_002\.png has changed since it was recorded"):
        [source.read(shot) for shot in source.shots]
    source = open_source(recorder.folder, station=the_station(), leave_out_bad_frames=True)
    assert [note.code for note in source.notes] == ["frame-unreadable"]
    assert len(source.shots) == 4


def test_a_changed_table_or_station_file_is_warned_of(tmp_path):
    a_recording(tmp_path / "run")
    for name in ("shots.csv", "station.toml"):
        path = tmp_path / "run" / name
        path.write_text(path.read_text(encoding="utf-8") + "\n", encoding="utf-8")
    notes = open_source(tmp_path / "run", station=the_station()).notes
    assert [note.code for note in notes] == ["recording-changed"] * 2
    assert "shots.csv" in notes[0].text
    assert "station.toml" in notes[1].text


@pytest.mark.parametrize(
    ("text", "words"),
    [("{", "is damaged"), ("[]", "is damaged"), ("{}", "is damaged"), ('{"files": {}, "schema": "x"}', 'schema "x"')],
)
def test_a_broken_record_is_refused(tmp_path, text, words):
    a_recording(tmp_path / "run")
    (tmp_path / "run" / "recording.json").write_text(text)
    with pytest.raises(SourceError, match=words):
        open_source(tmp_path / "run", station=the_station())


def test_rows_on_disk_are_those_that_count_after_every_frame(tmp_path):
    recorder = Recorder(tmp_path / "run", STATION_TEXT, DEVICE)
    for k in range(4):
        recorder.add(noise(k, 12), a_shot(k, (2.0, 2.8)[k % 2]))
        rows = (tmp_path / "run" / "shots.csv").read_bytes().count(b"\n") - 1
        assert rows == len(recorder.shots) == k + 1


# --- where to


def test_a_folder_in_use_is_not_written_into(tmp_path):
    foreign = a_folder(tmp_path / "foreign")
    (foreign / "station.toml").write_text(STATION_TEXT, encoding="utf-8")
    (tmp_path / "file").write_text("x")
    before = sorted(foreign.iterdir())
    for target in (foreign, tmp_path / "file"):
        for begin in (Recorder, record_into):
            with pytest.raises(SourceError, match="is in use already"):
                begin(target, STATION_TEXT, DEVICE)
    with pytest.raises(SourceError, match="no recording that could be taken up"):
        Recorder.resume(foreign, DEVICE)
    assert sorted(foreign.iterdir()) == before


def test_an_empty_folder_is_taken(tmp_path):
    assert record_into(tmp_path, STATION_TEXT, DEVICE).shots == ()


def test_a_finished_recording_is_not_added_to(tmp_path):
    a_recording(tmp_path / "run")
    with pytest.raises(SourceError, match="finished recording"):
        record_into(tmp_path / "run", STATION_TEXT, DEVICE)


def test_a_run_is_not_taken_up_under_another_station_file(tmp_path):
    a_recording(tmp_path / "run", how=None)
    with pytest.raises(SourceError, match="another station file"):
        record_into(tmp_path / "run", STATION_TEXT + "# changed\n", DEVICE)


def test_a_folder_that_cannot_be_made(tmp_path):
    (tmp_path / "file").write_text("x")
    with pytest.raises(CaptureError, match="cannot be made"):
        Recorder(tmp_path / "file" / "run", STATION_TEXT, DEVICE)


# --- taken up again


@pytest.mark.parametrize("how", ["interrupted", "fault", None])
def test_a_run_that_ended_early_is_taken_up_to_the_same_recording(tmp_path, how):
    whole = a_recording(tmp_path / "whole", frames=6, how=None)
    first = Recorder(tmp_path / "parts", STATION_TEXT, DEVICE)
    for k in range(3):
        first.add(noise(k, 12), a_shot(k, (2.0, 2.8)[k % 2]))
    if how:
        first.close(how)
    second = record_into(tmp_path / "parts", STATION_TEXT, DEVICE)
    assert second.station_text == STATION_TEXT
    assert not (tmp_path / "parts" / "recording.json").exists()
    for k in range(3, 6):
        second.add(noise(k, 12), a_shot(k, (2.0, 2.8)[k % 2]))
    second.add(noise(99, 4, dtype=np.uint16), Shot("", None, 3, 0, "dark", 0))
    assert second.shots == whole.shots
    hashes = [open_source(r.folder, station=the_station()).sha256 for r in (whole, second)]
    assert hashes[0] == hashes[1]


def test_what_did_not_count_is_dropped_and_nothing_else(tmp_path):
    recorder = a_recording(tmp_path / "run", how=None)
    for name in ("f2_003.png", ".f2_004.png.part", "notes.txt", "photo.png"):
        (tmp_path / "run" / name).write_bytes(b"half")
    Recorder.resume(tmp_path / "run", DEVICE)
    left = {p.name for p in (tmp_path / "run").iterdir()}
    assert left == {s.file for s in recorder.shots} | {"station.toml", "shots.csv", "notes.txt", "photo.png"}


def test_a_table_torn_at_any_byte_holds_its_whole_rows(tmp_path):
    whole = a_recording(tmp_path / "run", how=None)
    table = tmp_path / "run" / "shots.csv"
    content = table.read_bytes()
    header = content.index(b"\n") + 1
    for cut in range(header, len(content)):
        table.write_bytes(content[:cut])
        rows = content[: cut + 1].count(b"\n") - 1  # a row counts though its line end is missing
        if rows >= 2:
            assert len(open_source(tmp_path / "run", station=the_station()).shots) == rows
        if cut % 7 == 0:
            # The images stay: a copy is taken up.
            assert len(_taken_up(tmp_path, content[:cut])) == rows
    assert len(whole.shots) == 5


def _taken_up(tmp_path, table):
    copy = tmp_path / "copy"
    copy.mkdir(exist_ok=True)
    for path in (tmp_path / "run").iterdir():
        (copy / path.name).write_bytes(path.read_bytes())
    (copy / "shots.csv").write_bytes(table)
    return Recorder.resume(copy, DEVICE).shots


def test_a_run_torn_before_its_first_frame_is_taken_up(tmp_path):
    (tmp_path / "run").mkdir()
    (tmp_path / "run" / ".station.toml.part").write_text("half")
    assert record_into(tmp_path / "run", STATION_TEXT, DEVICE).shots == ()
    (tmp_path / "run" / "shots.csv").unlink()
    assert record_into(tmp_path / "run", STATION_TEXT, DEVICE).shots == ()
    assert {p.name for p in (tmp_path / "run").iterdir()} == {"station.toml", "shots.csv"}


@pytest.mark.parametrize("damage", ["missing", "changed"])
def test_a_counted_frame_that_is_lost_is_named(tmp_path, damage):
    a_recording(tmp_path / "run", how=None)
    path = tmp_path / "run" / "f2_001.png"
    if damage == "missing":
        path.unlink()
    else:
        path.write_bytes(path.read_bytes()[:-1])
    with pytest.raises(FrameError, match=r"f2_001\.png"):
        Recorder.resume(tmp_path / "run", DEVICE)


def test_frames_can_be_taken_out_again(tmp_path):
    recorder = a_recording(tmp_path / "run", how=None)
    recorder.drop([s for s in recorder.shots if s.stop == 2.0])
    assert [s.file for s in recorder.shots] == ["f2.8_001.png", "f2.8_002.png", "dark_001.png"]
    assert [s.order for s in recorder.shots] == [0, 1, 2]
    again = recorder.add(noise(50, 12), a_shot(9))
    assert again.file == "f2_001.png"
    recorder.close("done")
    source = open_source(tmp_path / "run", station=the_station())
    assert source.shots == list(recorder.shots)
    np.testing.assert_array_equal(source.read(again), noise(50, 12))
    assert not (tmp_path / "run" / "f2_002.png").exists()


def test_a_name_counts_once(tmp_path):
    recorder = Recorder(tmp_path / "run", STATION_TEXT, DEVICE)
    shot = Shot("first.png", 2.0, 1, 0, "target", 0)
    assert recorder.add(noise(0), shot).file == "first.png"
    with pytest.raises(ValueError, match="recorded already"):
        recorder.add(noise(1), shot)


# --- what stops it


@contextmanager
def files_of_at_most(size):
    """A limit on the size of files, to stand for a full disk (setrlimit, POSIX.1-2017)."""
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))


def test_a_full_disk_is_a_sentence_and_keeps_the_frames(tmp_path):
    recorder = a_recording(tmp_path / "run", how=None)
    before = {p.name: p.read_bytes() for p in (tmp_path / "run").iterdir()}
    with files_of_at_most(1000), pytest.raises(CaptureError) as caught:
        recorder.add(noise(7, 12), a_shot(7))
    assert caught.value.exit_status == 3
    assert "f2_003.png cannot be written" in str(caught.value)
    assert "The 5 frames before are kept" in str(caught.value)
    assert {p.name: p.read_bytes() for p in (tmp_path / "run").iterdir()} == before
    assert len(recorder.shots) == 5
    recorder.add(noise(7, 12), a_shot(7))  # once there is room again
    assert len(open_source(tmp_path / "run", station=the_station()).shots) == 6


@pytest.mark.parametrize("room", [0, 10])
def test_a_row_that_does_not_fit_leaves_nothing_of_itself(tmp_path, room):
    recorder = Recorder(tmp_path / "run", STATION_TEXT, DEVICE)
    for k in range(4):
        recorder.add(noise(k, shape=(2, 2)), a_shot(k, (2.0, 2.8)[k % 2]))
    table = tmp_path / "run" / "shots.csv"
    before = table.read_bytes()
    with files_of_at_most(len(before) + room), pytest.raises(CaptureError, match=r"shots\.csv cannot be written"):
        recorder.add(noise(9, shape=(2, 2)), a_shot(9))
    assert table.read_bytes() == before
    assert len(record_into(tmp_path / "run", STATION_TEXT, DEVICE).shots) == 4


RUN = """
import sys
import numpy as np
from folders import STATION_TEXT, noise
from sweep.frames import Shot
from sweep.recording import record_into

recorder = record_into(sys.argv[1], STATION_TEXT, {})
print(len(recorder.shots), flush=True)
while True:
    k = len(recorder.shots)
    recorder.add(noise(k, 12), Shot("", (2.0, 2.8)[k % 2], 1.0, 0.0, "target", 0, None, float(k)))
    print(len(recorder.shots), flush=True)
"""


def test_a_killed_run_keeps_every_frame_that_counted(tmp_path):
    # SIGKILL at uneven moments, at least six times into the same recording, until two stops are in it.
    folder = tmp_path / "run"
    env = os.environ | {"PYTHONPATH": os.pathsep.join([os.path.dirname(__file__), *sys.path])}
    told = 0
    for round_ in range(40):
        if round_ >= 6 and told > 6:
            break
        run = subprocess.Popen([sys.executable, "-c", RUN, str(folder)], stdout=subprocess.PIPE, env=env)
        assert int(run.stdout.readline()) >= told
        time.sleep(0.013 * (round_ + 1))
        run.send_signal(signal.SIGKILL)
        told = int(([str(told), *run.stdout.read().decode().split("\n")[:-1]])[-1])
        run.wait()
        run.stdout.close()
    source = open_source(folder, station=the_station())
    assert told <= len(source.shots) <= told + 1
    for k, shot in enumerate(source.shots):
        np.testing.assert_array_equal(source.read(shot), noise(k, 12))
