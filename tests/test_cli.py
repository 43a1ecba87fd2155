"""The command line: exit statuses, messages, and that nothing is left behind by bad input."""

import json
import os
import subprocess
import sys
import types
from dataclasses import replace
from pathlib import Path

import pytest
from folders import HEADER, STATION_TEXT, a_folder, noise, write
from results import a_result, a_station

import sweep.analyse
import sweep.forecast
import sweep.recording
import sweep.screens.answer
from sweep import __version__, cli
from sweep.errors import CameraError, FrameError, Interrupted
from sweep.report import result_json
from sweep.result import Result
from sweep.station import Station

HERE = Path(__file__).parent.parent
HEAVY = ("numpy", "scipy", "cv2", "pandas", "matplotlib", "rich", "pydantic", "typst", "starlette", "uvicorn")


@pytest.fixture
def folder(tmp_path):
    """A source with a station file; what is in it is never read here."""
    source = tmp_path / "sweep 1"
    source.mkdir()
    (source / "station.toml").write_text("", encoding="utf-8")
    return source


@pytest.fixture
def asked(monkeypatch):
    """Stand-ins for reader, analysis and screen; what they were asked is kept."""
    station = a_station()
    seen = types.SimpleNamespace(
        station=None, earlier=None, answered=None, files=None, progress="unset", result=a_result(station)
    )

    def analyse(source, station, progress=None):
        seen.station, seen.progress = station, progress
        if isinstance(seen.result, BaseException):
            raise seen.result
        return seen.result

    def answer(result, station, files):
        seen.answered, seen.files = result, files
        return "the answer"

    monkeypatch.setattr(sweep.recording, "load_station", lambda path: station)
    monkeypatch.setattr(sweep.recording, "open_source", lambda path, **options: options)
    monkeypatch.setattr(sweep.analyse, "analyse", analyse)

    def forecast(station, earlier):
        seen.earlier = earlier
        return analyse(None, station)

    monkeypatch.setattr(sweep.forecast, "forecast", forecast)
    monkeypatch.setattr(sweep.screens.answer, "answer", answer)
    return seen


def with_need(result: Result, met: bool) -> Result:
    return replace(result, recommendation=replace(result.recommendation, meets_need=met))


@pytest.mark.parametrize(("met", "status"), [(True, 0), (False, 1)])
def test_status_says_whether_the_need_is_met(folder, asked, met, status, capsys):
    asked.result = with_need(asked.result, met)
    assert cli.main(["replay", str(folder)]) == status
    assert capsys.readouterr().out == "the answer\n"
    assert cli.main(["plan", str(folder / "station.toml")]) == status


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (FrameError("a.png is not there. Put the file back."), 2),
        (CameraError("The camera has stalled. Plug it in again."), 3),
        (Interrupted("The run was ended early."), 130),
        (KeyboardInterrupt(), 130),
        (ZeroDivisionError("division by zero"), 70),
    ],
)
def test_each_error_has_its_status_and_one_message(folder, asked, error, status, capsys, tmp_path):
    asked.result = error
    assert cli.main(["replay", str(folder), "--out", str(tmp_path / "answer")]) == status
    printed = capsys.readouterr()
    assert printed.out == ""
    assert printed.err.lstrip("\n").startswith("sweep: ")  # click ends the line of the ^C first
    assert 1 <= printed.err.count("\n") <= 4
    assert "Traceback" not in printed.err
    assert not (tmp_path / "answer").exists()


def test_debug_shows_where_a_fault_arose(folder, asked, capsys):
    asked.result = ZeroDivisionError("division by zero")
    assert cli.main(["replay", str(folder), "--debug"]) == 70
    assert "Traceback" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "named"),
    [
        (["replay"], "SOURCE"),
        (["replay", "nowhere"], "nowhere"),
        (["replay", "{source}", "--frobnicate"], "--frobnicate"),
        (["repaly", "{source}"], "repaly"),
        (["replay", "{source}", "--out", "{source}/answer"], "leaves as it is"),
        (["replay", "{source}", "--out", "{source}"], "leaves as it is"),
        (["replay", "{source}", "--out", "{source}/station.toml/x"], "--out"),
        (["replay", "{source}", "--out", "{other}/a file"], "a file"),
        (["replay", "{other}"], "station.toml"),
        (["replay", "{source}", "--set", "need.feature_um"], "KEY=VALUE"),
        (["replay", "{source}", "--set", "need.feature_um.x=1"], "need.feature_um.x"),
        (["replay", "{source}", "--set", "need.featur_um=1"], "feature_um"),
        (["replay", "{source}", "--set", "targets.9.depth_mm=1"], "targets.9.depth_mm"),
        (["replay", "{source}", "--set", "targets.first=1"], "targets.first"),
        (["replay", "{source}", "--set", "need.contrast=much"], "need.contrast"),
        (["record", "{source}/station.toml"], "--into"),
        (["record", "{source}/station.toml", "--into", "{other}/new"], "names no camera"),
        (["demo", "--into", "{other}"], "new folder"),
    ],
)
def test_bad_usage_is_told_in_one_message_that_names_it(folder, asked, words, named, capsys, tmp_path):
    other = tmp_path / "other"
    other.mkdir()
    (other / "a file").write_text("", encoding="utf-8")
    before = sorted(tmp_path.rglob("*"))
    assert cli.main([w.format(source=folder, other=other) for w in words]) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert named in printed.err
    assert printed.err.count("\n") <= 4
    assert asked.answered is None
    assert sorted(tmp_path.rglob("*")) == before


def test_frames_without_any_sound_reading_end_in_an_answer(tmp_path, capsys):
    folder = a_folder(tmp_path / "sweep")
    (folder / "station.toml").write_text(STATION_TEXT, encoding="utf-8")
    assert cli.main(["replay", str(folder), "--json"]) == 1
    assert json.loads(capsys.readouterr().out)["recommendation"]["stop"] is None


def station_text(old: str, new: str):
    def change(folder: Path) -> None:
        assert old in STATION_TEXT
        (folder / "station.toml").write_text(STATION_TEXT.replace(old, new), encoding="utf-8")

    return change


def table(*rows: str, header: str = HEADER):
    def change(folder: Path) -> None:
        (folder / "shots.csv").write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")

    return change


def file(name: str, data: bytes):
    def change(folder: Path) -> None:
        (folder / name).write_bytes(data)

    return change


def truncated(folder: Path) -> None:
    data = (folder / "1.png").read_bytes()
    (folder / "1.png").write_bytes(data[: len(data) // 2])


@pytest.mark.parametrize(
    ("change", "named"),
    [
        (lambda folder: (folder / "station.toml").unlink(), "station.toml"),
        (station_text("[need]", "[need"), "station.toml"),
        (station_text("feature_um", "feature_mu"), "feature_um"),
        (station_text("focal_length_mm = 16", "focal_length_mm = -16"), "lens.focal_length_mm"),
        (station_text("contrast = 0.2", "contrast = nan"), "need.contrast"),
        (station_text("level = 0.7", 'level = "much"'), "need.level"),
        (station_text("region = [4, 4, 30, 30]", "region = [4, 4, 300, 30]"), "targets[0].patches[0].region"),
        (table("0.png,2,1,0,target", "1.png,5.6,1,0,target"), "5.6"),
        (table("0.png,2,0,target", "1.png,2.8,0,target", header="file,stop,gain_db,role"), "exposure_ms"),
        (table("0.png,2,1,0,target", "1.png,2.8,one,0,target"), "one"),
        (table("0.png,2,1,0,target", "1.png,2.8,nan,0,target"), "nan"),
        (table("0.png,2,1,0,target", "1.png,2.8,-1,0,target"), "-1"),
        (table("0.png,2,1,0,target", "../1.png,2.8,1,0,target"), "../1.png"),
        (table("0.png,2,1,0,target", "/etc/hostname,2.8,1,0,target"), "/etc/hostname"),
        (table("0.png,,1,0,dark", "1.png,,1,0,dark"), "target"),
        (table("0.png,2,1,0,target", "1.png,2,1,0,target"), "two"),
        (file("shots.csv", b""), "shots.csv"),
        (file("shots.csv", bytes(range(256))), "shots.csv"),
        (lambda folder: (folder / "shots.csv").unlink(), "shots.csv"),
        (lambda folder: (folder / "1.png").unlink(), "1.png"),
        (truncated, "1.png"),
        (file("1.png", b"no image"), "1.png"),
        (lambda folder: write(folder / "1.png", noise(1, shape=(48, 60))), "1.png"),
    ],
)
def test_bad_input_is_told_in_one_message_and_leaves_nothing_behind(tmp_path, change, named, capsys):
    folder = a_folder(tmp_path / "sweep")
    (folder / "station.toml").write_text(STATION_TEXT, encoding="utf-8")
    change(folder)
    before = sorted(tmp_path.rglob("*"))
    assert cli.main(["replay", str(folder), "--out", str(tmp_path / "answer")]) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert named in printed.err
    assert 1 <= printed.err.count("\n") <= 4
    assert "Traceback" not in printed.err
    assert sorted(tmp_path.rglob("*")) == before


def test_out_holds_the_files_and_the_answer_names_them(folder, asked, tmp_path):
    out = tmp_path / "deep" / "answer"
    assert cli.main(["replay", str(folder), "--out", str(out)]) == 0
    assert sorted(p.name for p in asked.files) == sorted(p.name for p in out.iterdir())
    assert "result.json" in os.listdir(out)
    assert list(folder.iterdir()) == [folder / "station.toml"]


def test_json_prints_the_result_and_nothing_else(folder, asked, capsys):
    assert cli.main(["replay", str(folder), "--json"]) == 0
    printed = capsys.readouterr()
    assert json.loads(printed.out)["schema"] == "sweep/result/1"
    assert printed.err == ""
    assert asked.answered is None


def test_no_progress_bar_in_a_pipe(folder, asked, capsys):
    assert cli.main(["replay", str(folder)]) == 0
    assert asked.progress is None
    assert capsys.readouterr().err == ""


def test_progress_bar_on_a_terminal(folder, asked, monkeypatch):
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True, raising=False)
    assert cli.main(["replay", str(folder)]) == 0
    asked.progress(3, 8)
    asked.progress(8, 8)


def test_plan_takes_the_lens_of_an_earlier_result(folder, asked):
    plain = ["plan", str(folder / "station.toml")]
    assert cli.main(plain) == 0
    assert asked.earlier is None
    (folder.parent / "earlier").mkdir()
    (folder.parent / "earlier" / "result.json").write_bytes(result_json(asked.result))
    assert cli.main([*plain, "--set", "lens.model=../earlier"]) == 0
    assert asked.earlier == asked.result.model
    assert asked.station.lens.model == "../earlier"


def test_a_folder_with_an_answer_is_no_source(folder, asked, capsys):
    (folder / "result.json").write_bytes(result_json(asked.result))
    assert cli.main(["replay", str(folder)]) == 2
    assert "holds an answer, not frames" in capsys.readouterr().err


def test_set_changes_keys_of_the_station(folder, asked):
    changes = ["need.feature_um=140", "need.depth_range_mm=[0, 12]", "station.name=lane 3", "need.flicker_hz = 100"]
    changes.append("targets.1.depth_mm=3.5")
    words = [word for change in changes for word in ("--set", change)]
    assert cli.main(["replay", str(folder), *words]) == 0
    station: Station = asked.station
    assert (station.need.feature_um, station.need.depth_range_mm) == (140.0, (0.0, 12.0))
    assert (station.station.name, station.need.flicker_hz) == ("lane 3", 100.0)
    assert station.targets[1].depth_mm == 3.5
    assert station.need.contrast == a_station().need.contrast


def test_demo_folders_are_numbered_where_one_is_there(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert cli._free("sweep-demo") == Path("sweep-demo")
    Path("sweep-demo").mkdir()
    Path("sweep-demo-2").mkdir()
    assert cli._free("sweep-demo") == Path("sweep-demo-3")


def test_version(capsys):
    assert cli.main(["--version"]) == 0
    assert capsys.readouterr().out == f"sweep {__version__}\n"


def test_help_imports_nothing_heavy():
    code = (
        "import sys; from sweep.cli import main; status = main(['--help']); "
        f"sys.exit(status or [m for m in {HEAVY} if m in sys.modules] or 0)"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=HERE, capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")
    assert "replay" in done.stdout


def test_a_reader_that_goes_away_is_no_fault():
    command = [sys.executable, "-m", "sweep", "--help"]
    with subprocess.Popen(command, cwd=HERE, stdout=subprocess.PIPE, stderr=subprocess.PIPE) as running:
        assert running.stdout is not None
        assert running.stderr is not None
        running.stdout.close()
        assert running.stderr.read() == b""
    assert running.returncode == 0
