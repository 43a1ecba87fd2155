"""The set-up at a camera: exposure, losses, wishes, and the station file on disk."""

import contextlib
import os
import stat
import threading
import time
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pytest
from test_framing import STATION, edge, picture
from test_page import News, press

from sweep import cli
from sweep.cameras import Grab, Settings
from sweep.errors import CameraError, StationError
from sweep.frame import TONE_RANGE, look, set_up
from sweep.framing import Done, Move, Revert, Save, Sight, Wish
from sweep.screens import page

PERIOD_S = 0.1


@dataclass
class Camera:
    """Frames of one edge, their light in proportion to the exposure; a script says at which grabs it is away."""

    full_at_ms: float = 40.0
    can_be_set: bool = True
    away: range = range(0)
    exposure_ms: float = 10.0
    grabs: int = 0
    sets: list[float | None] = field(default_factory=list)
    pause_s: float = 0.0
    light: np.ndarray = field(default_factory=lambda: edge(59.5, dark=0.2, light=1.0))

    def grab(self, timeout_s: float) -> Grab:
        self.grabs += 1
        time.sleep(self.pause_s)
        if self.grabs in self.away:
            raise CameraError("The camera has gone.")
        return Grab(picture(self.light * self.exposure_ms / self.full_at_ms), self.grabs * PERIOD_S)

    def set(self, *, exposure_ms: float | None = None, gain_db: float | None = None) -> Settings:
        self.sets.append(exposure_ms)
        if not self.can_be_set:
            return Settings(None, None, self.grabs * PERIOD_S)
        self.exposure_ms = exposure_ms or self.exposure_ms
        return Settings(self.exposure_ms, gain_db, self.grabs * PERIOD_S)


@dataclass
class Script:
    """A screen that wishes what it is told to, one entry a sight, and keeps what it saw; then it is done."""

    wishes: list[Sequence[Wish]]
    seen: list[Sight] = field(default_factory=list)

    def __call__(self, sight: Sight) -> Sequence[Wish]:
        self.seen.append(sight)
        return self.wishes.pop(0) if self.wishes else (Done(),)


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "station.toml"
    path.write_text(STATION, encoding="utf-8")
    return path


@pytest.mark.parametrize("full_at_ms", [0.5, 12.0, 40.0, 900.0])
def test_the_exposure_is_brought_to_where_detail_shows(file, full_at_ms):
    sight = look(Camera(full_at_ms), file)
    assert TONE_RANGE[0] <= sight.tone <= TONE_RANGE[1]
    assert sight.trouble == ""
    assert [check.name for check in sight.checks] == ["tray floor 1", "tray floor 2", "cap top"]
    assert sight.checks[0].status == "fine"


@pytest.mark.parametrize(("full_at_ms", "word"), [(1.0, "bright"), (400.0, "dark")])
def test_a_camera_that_cannot_be_set_is_left_alone_and_its_light_told(file, full_at_ms, word):
    camera = Camera(full_at_ms, can_be_set=False)
    sight = look(camera, file)
    assert sight.exposure_ms is None
    assert word in sight.trouble
    assert len(camera.sets) == 1


def test_too_little_light_for_the_longest_exposure_is_told(file):
    assert "dark" in look(Camera(1e6), file).trouble


def test_a_camera_that_goes_is_told_and_set_again_when_it_comes_back(file):
    camera = Camera(away=range(20, 40))
    script = Script([()] * 50)
    set_up(camera, file, script)
    troubles = [sight.trouble for sight in script.seen]
    # Frames come twenty grabs later; a loss is told after some seconds of waiting, not at once.
    assert "The camera has gone." in troubles[30:39]
    assert troubles[20] == troubles[-1] == ""
    assert camera.sets[-1] == camera.exposure_ms
    assert TONE_RANGE[0] <= script.seen[-1].tone <= TONE_RANGE[1]


def test_no_frame_at_all_is_an_error(file):
    with pytest.raises(CameraError):
        set_up(Camera(away=range(1000)), file, Script([]))


def test_a_move_is_shown_checked_and_saved_with_comments_kept(file):
    script = Script([(Move(0, (24, 30, 80, 100)),), (Save(),), ()])
    last = set_up(Camera(), file, script)
    assert [sight.changed for sight in script.seen[:3]] == [False, True, False]
    assert script.seen[1].checks[0].patch.region == (24, 30, 80, 100)
    assert "Saved" in script.seen[2].told
    assert file.read_text(encoding="utf-8") == STATION.replace("[20, 30, 80", "[24, 30, 80")
    assert (file.parent / "station.toml.bak").read_text(encoding="utf-8") == STATION
    assert last.station.targets[0].patches[0].region == (24, 30, 80, 100)
    assert sorted(path.name for path in file.parent.iterdir()) == ["station.toml", "station.toml.bak"]


def test_save_and_done_in_one_breath_saves(file):
    last = set_up(Camera(), file, Script([(Move(2, (20, 160, 101, 80)), Save(), Done())]))
    assert "[20, 160, 101, 80]" in file.read_text(encoding="utf-8")
    assert not last.changed


def test_done_without_save_leaves_the_file(file):
    last = set_up(Camera(), file, Script([(Move(2, (20, 160, 101, 80)), Done())]))
    assert file.read_text(encoding="utf-8") == STATION
    assert last.changed


def test_revert_puts_the_patches_back(file):
    script = Script([(Move(0, (24, 30, 80, 100)), Move(1, (0, 0, 64, 64))), (Revert(),), ()])
    set_up(Camera(), file, script)
    assert script.seen[2].station == script.seen[0].station
    assert not script.seen[2].changed


def test_a_file_that_somebody_else_has_changed_is_not_overwritten(file):
    other = STATION + "# by hand\n"

    def meanwhile(sight: Sight) -> Sequence[Wish]:
        if not sight.told:
            file.write_text(other, encoding="utf-8")
            return (Move(0, (24, 30, 80, 100)), Save())
        assert "changed by somebody else" in sight.told
        return (Done(),)

    assert set_up(Camera(), file, meanwhile).changed
    assert file.read_text(encoding="utf-8") == other


def test_a_file_that_cannot_be_written_is_told_and_left_whole(file, monkeypatch):
    def full(descriptor: int) -> None:
        raise OSError(28, os.strerror(28))

    monkeypatch.setattr(os, "fsync", full)
    script = Script([(Move(0, (24, 30, 80, 100)), Save()), ()])
    set_up(Camera(), file, script)
    assert "cannot be written" in script.seen[1].told
    assert script.seen[1].changed
    assert file.read_text(encoding="utf-8") == STATION
    assert not list(file.parent.glob(".*"))


def test_a_link_stays_a_link_and_permissions_stay(file, tmp_path):
    file.chmod(0o640)
    link = tmp_path / "link.toml"
    link.symlink_to(file)
    set_up(Camera(), link, Script([(Move(0, (24, 30, 80, 100)), Save(), Done())]))
    assert link.is_symlink()
    assert "[24, 30, 80" in file.read_text(encoding="utf-8")
    assert stat.S_IMODE(file.stat().st_mode) == 0o640


def test_a_station_file_that_is_none_is_an_error(tmp_path):
    with pytest.raises(StationError):
        set_up(Camera(), tmp_path / "nowhere.toml", Script([]))


# ---- the command


@pytest.fixture
def camera(monkeypatch: pytest.MonkeyPatch) -> Camera:
    """What `--camera` opens, whatever it names."""
    opened = Camera()
    monkeypatch.setattr("sweep.cameras.open_camera", lambda source, station: contextlib.nullcontext(opened))
    return opened


def test_the_command_prints_a_table_and_what_to_do(file, camera, capsys):
    # One edge runs from top to bottom near the left border.
    file.write_text(STATION.replace("[20, 160, 100, 80]", "[200, 160, 100, 80]"), encoding="utf-8")
    assert cli.main(["frame", str(file), "--camera", "0"]) == 1
    printed = capsys.readouterr().out
    assert "tray floor 1  edge" in printed
    assert "fine" in printed
    assert "cap top: " in printed
    file.write_text(STATION, encoding="utf-8")
    assert cli.main(["frame", str(file), "--camera", "0"]) == 0
    assert "All patches can be read" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("words", "status", "named"),
    [
        ([], 2, "names no camera"),
        (["--camera", "0", "--bind", "elsewhere.example"], 2, "--bind"),
        (["--camera", "0", "--bind", "192.0.2.77"], 3, "cannot listen"),
    ],
)
def test_the_command_refuses_in_one_sentence(file, camera, words, status, named, capsys):
    assert cli.main(["frame", str(file), *words]) == status
    printed = capsys.readouterr()
    assert named in printed.err
    assert printed.out == ""


def test_the_command_serves_a_page_until_it_is_done(file, camera, capsys, monkeypatch):
    camera.pause_s = 0.02
    doors = []
    real = page.open_door
    monkeypatch.setattr(page, "open_door", lambda place: doors.append(real(place)) or doors[0])
    ended: list[int] = []
    thread = threading.Thread(target=lambda: ended.append(cli.main(["frame", str(file), "--camera", "0", "--page"])))
    thread.start()
    while not doors:
        time.sleep(0.05)
    news = News(doors[0])
    state = news.next()[1]["state"]
    while state["mode"] != "frame":
        state = news.next()[1]["state"]
    assert [patch["name"] for patch in state["patches"]] == ["tray floor 1", "tray floor 2", "cap top"]
    for wrong in ([1, 2, 3], [0, 0, 8, 8], [0, 0, 999, 20], [-1, 0, 20, 20], [0, 0, 20.0, 20], "abcd", None):
        assert press(doors[0], action="move", patch=0, region=wrong)[0] == 400
    for wrong in (3, -1, "0", True, None):
        assert press(doors[0], action="move", patch=wrong, region=[0, 0, 20, 20])[0] == 400
    assert press(doors[0], action="move", patch=2, region=[20, 130, 80, 100])[0] == 204
    assert press(doors[0], action="save")[0] == 204
    assert press(doors[0], action="done")[0] == 204
    while True:
        name, data = news.next()
        if name == "farewell":
            break
        state = data["state"] if data else state
    news.close()
    thread.join(30)
    assert ended == [0]
    assert "Saved" in state["told"]
    assert "[20, 130, 80, 100]" in file.read_text(encoding="utf-8")
    printed = capsys.readouterr().out
    assert doors[0].address in printed
    assert "All patches can be read" in printed
