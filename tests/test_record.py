"""A guided run is kept with how it ended, whatever ends it."""

import json

import pytest
from folders import STATION_TEXT, a_station, noise

import sweep.record
from sweep.capture import Action, Finished
from sweep.errors import CameraError, Interrupted, SourceError
from sweep.frames import Shot
from sweep.recording import open_source


class StillCamera:
    """A camera that is only asked who it is."""

    def facts(self):
        return {"name": "still"}


@pytest.fixture
def run(tmp_path, monkeypatch):
    """Record into a folder with a guided run that takes two frames and then ends as told."""

    def conduct(live, recorder, station, plan, show):
        for k, stop in enumerate((2.0, 2.8)):
            recorder.add(noise(k), Shot("", stop, 1.5, 0.0, "target", k))
        ending = show(None)
        if isinstance(ending, BaseException):
            raise ending
        return Finished(recorder.folder, (2.0, 2.8), (4.0,), ended=ending is Action.END)

    monkeypatch.setattr(sweep.record, "conduct", conduct)
    monkeypatch.setattr(sweep.record, "Live", lambda camera, station, fixed_ms: None)

    def record(ending):
        return sweep.record.record(StillCamera(), a_station(), STATION_TEXT, tmp_path / "run", lambda event: ending)

    return record


def ended(tmp_path):
    return json.loads((tmp_path / "run" / "recording.json").read_text(encoding="utf-8"))


def test_a_run_to_the_end(run, tmp_path):
    assert run(Action.NONE).taken == (2.0, 2.8)
    assert ended(tmp_path)["ended"] == "done"
    assert ended(tmp_path)["device"] == {"name": "still"}
    assert [s.stop for s in open_source(tmp_path / "run").shots] == [2.0, 2.8]


@pytest.mark.parametrize("ending", [Action.END, KeyboardInterrupt()])
def test_a_run_that_the_user_ends_is_kept_and_taken_up_again(run, tmp_path, ending):
    with pytest.raises(Interrupted, match="kept"):
        run(ending)
    assert ended(tmp_path)["ended"] == "interrupted"
    run(Action.NONE)
    assert ended(tmp_path)["ended"] == "done"
    assert len(open_source(tmp_path / "run").shots) == 4


def test_a_fault_is_kept_with_its_reason(run, tmp_path):
    with pytest.raises(CameraError):
        run(CameraError("The camera has stalled."))
    assert (ended(tmp_path)["ended"], ended(tmp_path)["reason"]) == ("fault", "The camera has stalled.")
    assert len(open_source(tmp_path / "run").shots) == 2


def test_a_folder_in_use_is_refused(run, tmp_path):
    (tmp_path / "run").mkdir()
    (tmp_path / "run" / "notes.txt").write_text("mine", encoding="utf-8")
    with pytest.raises(SourceError):
        run(Action.NONE)
    assert [p.name for p in (tmp_path / "run").iterdir()] == ["notes.txt"]
