"""The six files: all of them or none, and never on top of what isn't ours."""

import errno
import os
import subprocess
import sys
from pathlib import Path

import pytest
from results import a_result, a_station

import sweep.report.record
from sweep.errors import InputError
from sweep.report import FILES, check_out, write_report
from sweep.result import Result
from sweep.station import Station

STATION = a_station([("cap rim", 3.0)], stops=(2.8, 5.6, 11.0))
RESULT = a_result(STATION)


def _contents(folder: Path) -> dict[str, bytes]:
    return {p.name: p.read_bytes() for p in folder.iterdir()}


def test_six_files_each_of_its_kind(tmp_path: Path) -> None:
    out = tmp_path / "results" / "lane 2"
    paths = write_report(out, RESULT, STATION)
    assert [p.name for p in paths] == list(FILES)
    found = _contents(out)
    assert set(found) == set(FILES)
    assert found["plot.png"].startswith(b"\x89PNG\r\n\x1a\n")  # W3C PNG (Third Edition), 5.2
    assert found["record.pdf"].startswith(b"%PDF-1.7")
    assert found["plot.svg"].startswith(b"<?xml")
    assert [p.name for p in out.parent.iterdir()] == ["lane 2"]


def test_the_same_bytes_again_over_an_earlier_report(tmp_path: Path) -> None:
    out = tmp_path / "out"
    write_report(out, a_result(STATION, sharpness=0.5), STATION)
    write_report(out, RESULT, STATION)
    first = _contents(out)
    write_report(out, RESULT, STATION)
    assert _contents(out) == first
    write_report(tmp_path / "other", RESULT, STATION)
    assert _contents(tmp_path / "other") == first


def test_an_empty_folder_is_taken(tmp_path: Path) -> None:
    write_report(tmp_path, RESULT, STATION)
    assert set(_contents(tmp_path)) == set(FILES)


@pytest.mark.parametrize("name", ["notes.txt", "f4_0.png", ".hidden"])
def test_a_folder_with_other_files_is_left_alone(tmp_path: Path, name: str) -> None:
    (tmp_path / name).write_text("mine")
    with pytest.raises(InputError, match=name):
        write_report(tmp_path, RESULT, STATION)
    assert _contents(tmp_path) == {name: b"mine"}


def test_a_folder_or_a_link_in_the_place_of_a_file_is_foreign(tmp_path: Path) -> None:
    for name, make in (("a", lambda p: p.mkdir()), ("b", lambda p: p.symlink_to(tmp_path / "elsewhere"))):
        (tmp_path / name).mkdir()
        make(tmp_path / name / "plot.png")
        with pytest.raises(InputError, match=r"plot\.png"):
            write_report(tmp_path / name, RESULT, STATION)


@pytest.mark.parametrize("place", ["file", "file/below", "file/far/below", "link"])
def test_a_place_where_nothing_can_be_made_is_refused(tmp_path: Path, place: str) -> None:
    (tmp_path / "file").write_text("mine")
    (tmp_path / "link").symlink_to(tmp_path / "nowhere")
    with pytest.raises(InputError, match="Name a") as caught:
        check_out(tmp_path / place)
    assert "\n" not in str(caught.value)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["file", "link"]


def test_without_the_right_to_write_it_says_so(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(os, "access", lambda path, mode: Path(path) != tmp_path)
    for place in (tmp_path, tmp_path / "out", tmp_path / "far" / "out"):
        with pytest.raises(InputError, match="no right"):
            check_out(place)


def test_checking_a_folder_loads_nothing_that_draws() -> None:
    program = "import sys, sweep.report; sys.exit(any(m in sys.modules for m in ('matplotlib', 'typst')))"
    assert subprocess.run([sys.executable, "-c", program], cwd=Path(__file__).parents[1], check=False).returncode == 0


def test_a_fault_while_drawing_leaves_the_disk_untouched(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fault(result: Result, station: Station, picture: bytes, depths: bytes | None) -> bytes:
        raise RuntimeError("no page")

    monkeypatch.setattr(sweep.report.record, "record_pdf", fault)
    with pytest.raises(RuntimeError, match="no page"):
        write_report(tmp_path / "new" / "out", RESULT, STATION)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("earlier", [False, True])
def test_a_full_disk_leaves_no_half_report(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, earlier: bool) -> None:
    out = tmp_path / "out"
    if earlier:
        write_report(out, a_result(STATION, sharpness=0.5), STATION)
    before = _contents(out) if earlier else None
    synced = iter(range(4))

    def full(_: int) -> None:
        if next(synced, None) is None:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(InputError, match="No space left"):
        write_report(out, RESULT, STATION)
    assert (_contents(out) if earlier else None) == before
    assert [p.name for p in tmp_path.iterdir()] == (["out"] if earlier else [])
