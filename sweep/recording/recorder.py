"""Writes a recording so that whatever stops it, all frames that were counted are whole.

Each image is safe on disk (written under another name, flushed, renamed) before its row is; the row carries the image's
SHA-256; `recording.json` comes last. So a file without a row never counted, and a torn last row shows.
"""

import csv
import hashlib
import io
import json
import os
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Literal

import cv2

from sweep import __version__
from sweep.errors import CaptureError, FrameError, SourceError
from sweep.frames import Pixels, Shot
from sweep.recording.folder import RECORDING, SCHEMA, recording_facts
from sweep.recording.shots import RECORDED, SHOTS, STATION, Row, read_table, read_text

PART = ".part"
_OWN_NAME = re.compile(r"(?:f[\d.]+|dark)_(\d+)\.png")

Ending = Literal["done", "interrupted", "fault"]


def record_into(folder: Path | str, station_text: str, facts: Mapping[str, object]) -> "Recorder":
    """Begin a recording, or take up one that was broken off under the same station file.

    `facts`: what the camera says of itself, as JSON holds it.
    Raises SourceError where the folder holds anything else; CaptureError where it cannot be written.
    """
    folder = Path(folder)
    if not _begun(folder):
        return Recorder(folder, station_text, facts)
    recorder = Recorder.resume(folder, facts)
    if recorder.station_text != station_text:
        raise SourceError(
            f"{folder} was begun with another station file. Name another folder, or use {folder / STATION}."
        )
    return recorder


class Recorder:
    """A recording that is being written: add frames, then close it."""

    def __init__(self, folder: Path | str, station_text: str, facts: Mapping[str, object]) -> None:
        """Begin a recording in a new or empty folder. Raises SourceError or CaptureError as `record_into` does."""
        self.folder = Path(folder)
        self.station_text = station_text
        self._facts = dict(facts)
        self._shots: list[Shot] = []
        self._hashes: dict[str, str] = {}
        if self.folder.exists() and not (self.folder.is_dir() and _is_empty(self.folder)):
            raise SourceError(f"{self.folder} is in use already. Name a new or empty folder to record into.")
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise CaptureError(f"{self.folder} cannot be made: {error.strerror}. Name another folder.") from None
        self._write(STATION, station_text.encode())
        self._write_table()

    @classmethod
    def resume(cls, folder: Path | str, facts: Mapping[str, object]) -> "Recorder":
        """Take up a recording that was torn off, interrupted, or ended by a fault.

        Frames that were not counted yet (no whole row) are dropped; those that were are compared with their hashes.
        Raises SourceError where the folder is no recording or a finished one, FrameError where a frame has changed.
        """
        folder = Path(folder)
        self = cls.__new__(cls)
        self.folder, self._facts = folder, dict(facts)
        if not _begun(folder):
            raise SourceError(f"{folder} is no recording that could be taken up. Name a new folder to begin one.")
        ended = recording_facts(folder)
        if ended is not None and ended.get("ended") == "done":
            raise SourceError(f"{folder} is a finished recording. Name a new folder to record once more.")
        self.station_text = read_text(folder / STATION, SourceError, "station file")
        rows = _whole_rows(folder)
        for row in rows:
            _compare(folder, row)
        self._shots = [replace(row.shot, order=k) for k, row in enumerate(rows)]
        self._hashes = {row.shot.file: row.sha256 or "" for row in rows}
        self._write_table()
        (folder / RECORDING).unlink(missing_ok=True)
        for path in folder.iterdir():
            if path.name.endswith(PART) or (_OWN_NAME.fullmatch(path.name) and path.name not in self._hashes):
                path.unlink()
        return self

    @property
    def shots(self) -> Sequence[Shot]:
        """The frames that count, in the order in which they were taken."""
        return tuple(self._shots)

    def add(self, pixels: Pixels, shot: Shot) -> Shot:
        """Put one frame on disk; when this returns, it counts.

        `shot.file` may be empty: it is then named after its stop. Returns the shot with its file and its place.
        Raises CaptureError where the disk does not take it; the frames before are kept.
        """
        shot = replace(shot, file=shot.file or self._free_name(shot), order=len(self._shots))
        if shot.file in self._hashes:
            raise ValueError(f"{shot.file} is recorded already")
        data = cv2.imencode(".png", pixels)[1].tobytes()
        self._write(shot.file, data)
        digest = hashlib.sha256(data).hexdigest()
        self._append(_row_text(shot, digest))
        self._shots.append(shot)
        self._hashes[shot.file] = digest
        return shot

    def drop(self, shots: Iterable[Shot]) -> None:
        """Take frames out again, as when a stop is to be taken once more; their rows go before their files."""
        files = {shot.file for shot in shots}
        self._shots = [replace(s, order=k) for k, s in enumerate(s for s in self._shots if s.file not in files)]
        for file in files:
            del self._hashes[file]
        self._write_table()
        for file in files:
            (self.folder / file).unlink()

    def close(self, how: Ending, reason: str = "") -> None:
        """Write `recording.json`: how the run ended, the device, the hash of every file."""
        hashes = {name: hashlib.sha256((self.folder / name).read_bytes()).hexdigest() for name in (STATION, SHOTS)}
        facts = {
            "schema": SCHEMA,
            "version": __version__,
            "ended": how,
            "reason": reason,
            "ended_at": datetime.now(UTC).isoformat(timespec="seconds"),
            "device": self._facts,
            "files": hashes | self._hashes,
        }
        self._write(RECORDING, (json.dumps(facts, indent=2, ensure_ascii=False) + "\n").encode())

    def _free_name(self, shot: Shot) -> str:
        """`f5.6_001.png`, `dark_001.png`: one above the highest number in use."""
        stem = "dark" if shot.role == "dark" or shot.stop is None else f"f{_number(shot.stop)}"
        used = [int(m[1]) for f in self._hashes if f.startswith(f"{stem}_") and (m := _OWN_NAME.fullmatch(f))]
        return f"{stem}_{max(used, default=0) + 1:03d}.png"

    def _write_table(self) -> None:
        rows = [_row_text(shot, self._hashes[shot.file]) for shot in self._shots]
        self._write(SHOTS, "".join([_csv_line(RECORDED), *rows]).encode())

    def _write(self, name: str, data: bytes) -> None:
        """Write a file under another name, flush it to the disk, then give it its name."""
        path, part = self.folder / name, self.folder / f".{name}{PART}"
        try:
            with part.open("wb") as file:
                file.write(data)
                file.flush()
                os.fsync(file.fileno())
            part.replace(path)
            _flush_folder(self.folder)
        except OSError as error:
            part.unlink(missing_ok=True)
            raise self._disk_fault(path, error) from None

    def _append(self, line: str) -> None:
        """Append a row in one piece; where the disk does not take all of it, none of it stays."""
        path = self.folder / SHOTS
        try:
            with path.open("r+b", buffering=0) as file:
                end = file.seek(0, os.SEEK_END)
                try:
                    if file.write(line.encode()) != len(line.encode()):
                        raise OSError(None, "no space left")
                    os.fsync(file.fileno())
                except OSError:
                    file.truncate(end)
                    raise
        except OSError as error:
            raise self._disk_fault(path, error) from None

    def _disk_fault(self, path: Path, error: OSError) -> CaptureError:
        kept = f"The {len(self._shots)} frames before are kept" if self._shots else "No frame had been taken"
        return CaptureError(
            f"{path} cannot be written: {error.strerror}. {kept}; make room, then record into it again."
        )


def _begun(folder: Path) -> bool:
    """Whether the folder is a recording of this tool, however far it came."""
    if not folder.is_dir() or not (folder / STATION).is_file():
        return False
    names = {path.name for path in folder.iterdir() if not path.name.endswith(PART)}
    if SHOTS not in names:
        return names == {STATION}
    return (folder / SHOTS).read_bytes().startswith(_csv_line(RECORDED).encode())


def _is_empty(folder: Path) -> bool:
    return all(path.name.startswith(".") and path.name.endswith(PART) for path in folder.iterdir())


def _whole_rows(folder: Path) -> list[Row]:
    """The rows that were written to their end; none where the run was torn off before its first frame."""
    return read_table(folder, None, may_be_empty=True) if (folder / SHOTS).exists() else []


def _compare(folder: Path, row: Row) -> None:
    try:
        digest = hashlib.sha256(row.path.read_bytes()).hexdigest()
    except OSError:
        raise FrameError(f"{row.path} cannot be read, but it was recorded. Put it back, or take its row out.") from None
    if digest != row.sha256:
        raise FrameError(
            f"{folder / row.shot.file} has changed since it was recorded. Put it back, or take its row out."
        )


def _row_text(shot: Shot, digest: str) -> str:
    stop = "" if shot.stop is None else _number(shot.stop)
    time_s = "" if shot.time_s is None else _number(shot.time_s)
    exposure_ms, gain_db = _number(shot.exposure_ms), _number(shot.gain_db)
    return _csv_line((shot.file, stop, exposure_ms, gain_db, shot.role, shot.target or "", time_s, digest))


def _csv_line(cells: Sequence[str]) -> str:
    text = io.StringIO()
    csv.writer(text, lineterminator="\n").writerow(cells)
    return text.getvalue()


def _number(value: float) -> str:
    """The shortest text that reads back as the same number."""
    return repr(float(value)).removesuffix(".0")


def _flush_folder(folder: Path) -> None:
    """Make a rename last; systems that don't let a folder be opened do so by themselves."""
    if os.name == "posix":
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
