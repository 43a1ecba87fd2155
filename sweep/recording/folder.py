"""A folder of frames as a source: a loose folder and a recording alike, one frame in memory at a time.

Each file's bytes are read once a visit; the hash and the pixels come from the same bytes. A recording's frames are
checked against the hashes that were written with them.
"""

import hashlib
import json
from collections import Counter
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

from sweep.errors import FrameError, SourceError
from sweep.frames import Pixels, Shot
from sweep.recording.bits import Bits, bits_used
from sweep.recording.image import as_layout, decode, format_of
from sweep.recording.shots import SHOTS, STATION, Row, read_table, read_text, shown
from sweep.result import Note
from sweep.station import Station, check_regions

RECORDING = "recording.json"
SCHEMA = "sweep/recording/1"


def open_source(
    path: Path | str, *, leave_out_bad_frames: bool = False, station: Station | None = None
) -> "FolderSource":
    """Open a loose folder or a recording.

    With a station its stops, target names, layout, bit depth and regions are checked against the frames.
    `leave_out_bad_frames` reads every frame once beforehand, and leaves out with a note what is missing or damaged.
    Raises SourceError for the folder, its table, or what is left of it; FrameError for a file that is not there.
    """
    folder = Path(path)
    if not folder.is_dir():
        there = "is not a folder" if folder.exists() else "is not there"
        raise SourceError(f"{folder} {there}: name a folder with images and {SHOTS}.")
    source = FolderSource(folder, read_table(folder, station), station)
    if leave_out_bad_frames:
        source.leave_out_bad_frames()
    else:
        source.check_files()
    return source


class FolderSource:
    """Frames in a folder; see `sweep.frames.Source`. Made by `open_source`."""

    def __init__(self, folder: Path, rows: Sequence[Row], station: Station | None) -> None:
        self.folder = folder
        self.station_path = folder / STATION if (folder / STATION).is_file() else None
        self.recording = recording_facts(folder)
        self._station = station
        self._rows = {row.shot.file: row for row in rows}
        self._bits = Bits(station.camera.bit_depth if station else None)
        self._size: tuple[int, int] | None = None
        self._size_by = ""
        self._waiting: tuple[str, Pixels] | None = None
        self._digests: dict[str, bytes] = {}
        self._compressed: set[str] = set()
        self._left_out: list[Note] = []
        self._changed = _changed(folder, self.recording)

    @property
    def shots(self) -> Sequence[Shot]:
        """The usable shots, in the order of the table."""
        return [row.shot for row in self._rows.values()]

    @property
    def bit_depth(self) -> int:
        """Significant bits of the pixels that `read` returns."""
        self._settle()
        return self._bits.depth

    @property
    def frame_size(self) -> tuple[int, int]:
        """Width and height of every frame, px."""
        self._settle()
        assert self._size is not None
        return self._size

    @property
    def sha256(self) -> str:
        """One hash over all shots and files; the order of the rows does not change it."""
        for row in self._rows.values():
            if row.shot.file not in self._digests:
                self._bytes(row)
        lines = sorted(f"{_shot_line(shot)} {self._digests[shot.file].hex()}" for shot in self.shots)
        return hashlib.sha256("\n".join(lines).encode()).hexdigest()

    @property
    def notes(self) -> Sequence[Note]:
        """What the reader noticed so far."""
        notes = [*self._left_out, *self._changed]
        if self._compressed:
            count = f"{len(self._compressed)} of {len(self._rows)} frames"
            example = min(self._compressed)
            notes.append(
                Note(
                    "compressed-source",
                    f"{count} are JPEG files ({example}): the compression changes detail and noise, so the figures are "
                    "no linear measurement. Record PNG or TIFF files.",
                )
            )
        return [*notes, *self._bits.notes(all_read=len(self._digests) == len(self._rows))]

    def read(self, shot: Shot) -> Pixels:
        """The pixels as stored, samples low-aligned. Raises FrameError that names the file."""
        self._settle()
        if self._waiting is not None and self._waiting[0] == shot.file:
            pixels, self._waiting = self._waiting[1], None
        else:
            pixels = self._load(self._rows[shot.file])
        self._check_size(pixels, shot.file)
        return self._bits.align(pixels, shot.file)

    def check_files(self) -> None:
        """See that every file of the table is there. Raises FrameError, or SourceError where no sweep is left."""
        missing = [file for file, row in self._rows.items() if not row.path.is_file()]
        if missing:
            more = f" and {len(missing) - 1} more of {SHOTS}" if len(missing) > 1 else f" of {SHOTS}"
            raise FrameError(
                f"{self.folder / missing[0]}{more} cannot be found. Put the file back, take its row out, or leave it "
                "out (--leave-out-bad-frames)."
            )
        self._check_sweep()

    def leave_out_bad_frames(self) -> None:
        """Read every frame once; leave out, with a note, those that are missing, damaged, or unlike most others."""
        kinds, used, faults = self._survey()
        if not kinds:
            raise faults[min(faults)]
        (shape, bits), _ = min(Counter(kinds.values()).items(), key=lambda item: (-item[1], item[0]))
        usual = [file for file in self._order() if kinds.get(file) == (shape, bits)]
        self._size, self._size_by = (shape[1], shape[0]), usual[0]
        self._bits.settle(bits, [(file, used[file]) for file in usual])
        for file, kind in kinds.items():
            try:
                if kind != (shape, bits):
                    raise FrameError(f"{self.folder / file} is not of the size and depth of most other frames.")
                self._bits.check(used[file], file)
            except FrameError as error:
                faults[file] = error
        if not any(row.shot.role == "target" and file not in faults for file, row in self._rows.items()):
            raise faults[min(faults)]
        self._leave_out(faults)
        self._check_sweep()
        if self._station is not None:
            check_regions(self._station, *self._size)

    def _survey(self) -> tuple[dict[str, tuple[tuple[int, ...], int]], dict[str, int], dict[str, FrameError]]:
        """Per file that can be read its (shape, bits a sample) and the bits in use; per other file what is wrong."""
        kinds: dict[str, tuple[tuple[int, ...], int]] = {}
        used: dict[str, int] = {}
        faults: dict[str, FrameError] = {}
        for file, row in self._rows.items():
            try:
                pixels = self._load(row)
            except FrameError as error:
                faults[file] = error
            else:
                kinds[file], used[file] = (pixels.shape, 8 * pixels.dtype.itemsize), bits_used(pixels)
        return kinds, used, faults

    def _leave_out(self, faults: dict[str, FrameError]) -> None:
        for file, fault in sorted(faults.items()):
            row = self._rows.pop(file)
            self._digests.pop(file, None)
            self._compressed.discard(file)
            code = "frame-unreadable" if row.path.is_file() else "frame-missing"
            self._left_out.append(Note(code, f"Left out: {fault}"))

    def _order(self) -> Iterator[str]:
        """The files of target frames, then of dark ones, in an order that does not depend on the table's."""
        yield from sorted(self._rows, key=lambda f: (self._rows[f].shot.role != "target", f))

    def _settle(self) -> None:
        """Look at as many frames as it takes to know size, sample width and alignment."""
        if self._size is not None:
            return
        first, *_ = self._order()
        pixels = self._load(self._rows[first])
        self._size, self._size_by = (pixels.shape[1], pixels.shape[0]), first
        if self._station is not None:
            check_regions(self._station, *self._size)
        self._waiting = (first, pixels)
        self._bits.settle(8 * pixels.dtype.itemsize, self._used_bits(pixels, first))

    def _used_bits(self, pixels: Pixels, first: str) -> Iterator[tuple[str, int]]:
        yield first, bits_used(pixels)
        for file in self._order():
            if file != first:
                yield file, bits_used(self._load(self._rows[file]))

    def _load(self, row: Row) -> Pixels:
        """The pixels of one file, as the station's layout wants them."""
        data = self._bytes(row)
        if format_of(data) == "JPEG":
            self._compressed.add(row.shot.file)
        name = str(self.folder / row.shot.file)
        pixels = decode(data, name)
        return pixels if self._station is None else as_layout(pixels, self._station.camera.layout, name)

    def _bytes(self, row: Row) -> bytes:
        """The bytes of one file; their hash is kept, and compared with that of the recording."""
        file = row.shot.file
        try:
            data = row.path.read_bytes() if row.path.is_file() else None
        except OSError as error:
            raise FrameError(f"{self.folder / file} cannot be read: {error.strerror}. Check its permissions.") from None
        if data is None:
            raise FrameError(f"{self.folder / file} cannot be found. Put the file back, or take its row out.")
        digest = hashlib.sha256(data)
        wanted = self.recording["files"].get(file) if self.recording else row.sha256
        if wanted is not None and wanted != digest.hexdigest():
            raise FrameError(f"{self.folder / file} has changed since it was recorded. Put the recorded file back.")
        self._digests[file] = digest.digest()
        return data

    def _check_size(self, pixels: Pixels, file: str) -> None:
        size = (pixels.shape[1], pixels.shape[0])
        if size != self._size:
            assert self._size is not None
            raise FrameError(
                f"{self.folder / file} is {size[0]} x {size[1]} pixels, {self._size_by} is {self._size[0]} x "
                f"{self._size[1]}. All frames must have one size."
            )

    def _check_sweep(self) -> None:
        """See that what is left is a sweep: target frames of at least two stops."""
        stops = {shot.stop for shot in self.shots if shot.role == "target"}
        if len(stops) < 2:
            found = f"of one stop only, f/{stops.pop():g}" if stops else "none with the role target"
            left_out = f" after {len(self._left_out)} were left out" if self._left_out else ""
            raise SourceError(
                f"{self.folder / SHOTS}: target frames {found}{left_out}. A sweep needs at least two stops."
            )


def _shot_line(shot: Shot) -> str:
    """All of a shot but its place in the table."""
    values = (shot.file, shot.stop, shot.exposure_ms, shot.gain_db, shot.role, shot.target, shot.time_s)
    return json.dumps(values, ensure_ascii=True)


def _changed(folder: Path, recording: dict[str, Any] | None) -> list[Note]:
    """Which of a recording's own texts are no longer those that were recorded."""
    notes = []
    for name in (SHOTS, STATION) if recording else ():
        path, wanted = folder / name, recording["files"].get(name) if recording else None
        if wanted is not None and not (path.is_file() and hashlib.sha256(path.read_bytes()).hexdigest() == wanted):
            notes.append(
                Note(
                    "recording-changed",
                    f"{path} is not as it was recorded. Put the recorded file back, if that is not meant.",
                )
            )
    return notes


def recording_facts(folder: Path) -> dict[str, Any] | None:
    """What `recording.json` says, None where there is none (a loose folder, or a run that was torn off)."""
    path = folder / RECORDING
    if not path.exists():
        return None
    text = read_text(path, SourceError, "record of the recording")
    try:
        facts: dict[str, Any] | None = json.loads(text)
    except (ValueError, RecursionError):
        facts = None
    if not isinstance(facts, dict) or not isinstance(facts.get("files"), dict):
        raise SourceError(f"{path} is damaged. Put it back, or take it away to read the folder as loose frames.")
    if facts.get("schema") != SCHEMA:
        raise SourceError(f"{path} has the schema {shown(str(facts.get('schema')))}; this version reads {SCHEMA}.")
    return facts
