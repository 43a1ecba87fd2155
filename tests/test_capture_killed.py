"""A guided run that is killed, again and again, loses no frame that counted and comes to its end."""

import csv
import hashlib
import os
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from guided import STOPS, small_station

from sweep.capture import Plan
from sweep.recording import open_source
from sweep.recording.folder import recording_facts

HERE = Path(__file__).parent
KILLS = 6


def started(folder: Path) -> subprocess.Popen:
    path = {"PYTHONPATH": os.pathsep.join([str(HERE.parent), str(HERE)]), "OMP_NUM_THREADS": "1"}
    command = [sys.executable, str(HERE / "guided_record.py"), str(folder)]
    return subprocess.Popen(command, env=os.environ | path)


def rows(folder: Path) -> list[dict[str, str]]:
    """The rows that are whole: those counted."""
    table = folder / "shots.csv"
    if not table.exists():
        return []
    text = table.read_text(encoding="utf-8")
    return list(csv.DictReader(text[: text.rfind("\n") + 1].splitlines()))


def counted(folder: Path) -> int:
    return len(rows(folder))


@pytest.mark.skipif(sys.platform == "win32", reason="SIGKILL is a POSIX thing")
def test_killed_and_taken_up_again(tmp_path):
    rng, number = np.random.default_rng(11), 0
    folder = tmp_path / "run0"
    for _ in range(KILLS):
        if ended(folder):
            check_whole(folder)
            number += 1
            folder = tmp_path / f"run{number}"
        kill_at_random(started(folder), folder, rng)
        for row in rows(folder):
            assert hashlib.sha256((folder / row["file"]).read_bytes()).hexdigest() == row["sha256"]
    if not ended(folder):
        assert started(folder).wait() == 0
    check_whole(folder)


def kill_at_random(run: subprocess.Popen, folder: Path, rng: np.random.Generator) -> None:
    """Let it count a few frames more, and a moment; then end it as hard as can be."""
    until = time.monotonic() + 60
    aim = counted(folder) + int(rng.integers(1, 9))
    while counted(folder) < aim and run.poll() is None and time.monotonic() < until:
        time.sleep(0.01)
    time.sleep(float(rng.uniform(0, 0.05)))
    run.kill()
    run.wait()


def ended(folder: Path) -> bool:
    return folder.is_dir() and (recording_facts(folder) or {}).get("ended") == "done"


def check_whole(folder: Path) -> None:
    """The recording has ended, and holds every stop with all its frames, in the order of time."""
    assert ended(folder)
    shots = open_source(folder, station=small_station()).shots
    for stop in STOPS:
        assert sum(shot.stop == stop for shot in shots) == Plan().frames
    assert sum(shot.role == "dark" for shot in shots) == Plan().darks
    assert [shot.time_s for shot in shots] == sorted(shot.time_s for shot in shots)
