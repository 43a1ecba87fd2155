"""The text files of a folder: `station.toml`, and `shots.csv`, one row a frame.

Every mistake in a table is collected and told with its row and column; rows count as a spreadsheet counts them.
"""

import csv
import io
import math
import re
import unicodedata
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path, PureWindowsPath

from sweep.errors import InputError, SourceError, StationError
from sweep.frames import Role, Shot
from sweep.station import Station, parse_station

SHOTS = "shots.csv"
STATION = "station.toml"
REQUIRED = ("file", "stop", "exposure_ms", "gain_db")
OPTIONAL = ("role", "target", "time_s")
RECORDED = (*REQUIRED, *OPTIONAL, "sha256")  # the header of a recording's table, in this order
LARGEST_STATION_BYTES = 1_000_000


@dataclass(frozen=True, slots=True)
class Row:
    """One row of the table: the shot, where its file is, and the hash that a recording's row carries."""

    shot: Shot
    path: Path
    sha256: str | None


def load_station(path: Path | str) -> Station:
    """Read a station file. Raises StationError where it is missing, unreadable, or wrong."""
    return parse_station(read_text(Path(path), StationError, "station file"), str(path))


def read_text(path: Path, fault: type[InputError], what: str) -> str:
    """The text of a UTF-8 file, with or without byte order mark. Raises `fault` with one sentence."""
    return _text_of(_bytes_of(path, fault, what), path, fault, what)


def _bytes_of(path: Path, fault: type[InputError], what: str) -> bytes:
    try:
        if not path.is_file():
            there = "is not a file" if path.exists() else "is not there"
            raise fault(f"{path} {there}. Put there, or name, a {what}.")
        return path.read_bytes()
    except OSError as error:
        raise fault(f"{path} cannot be read: {error.strerror}. Check the path and its permissions.") from None


def _text_of(data: bytes, path: Path, fault: type[InputError], what: str) -> str:
    if b"\0" in data or (fault is StationError and len(data) > LARGEST_STATION_BYTES):
        raise fault(f"{path} is not a text file. Put there, or name, a {what}.")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise fault(f"{path}, line {line}, is not UTF-8 text. Save the {what} as UTF-8.") from None


def read_table(folder: Path, station: Station | None, *, may_be_empty: bool = False) -> list[Row]:
    """Read a folder's `shots.csv`.

    A last row that a torn run did not write to its end does not count. With a station its stops and target names are
    checked too; that the files are there is not. Raises SourceError with every mistake.
    """
    where = folder / SHOTS
    text = _table_text(where)
    try:
        lines = list(csv.reader(io.StringIO(text, newline=""), strict=True))
    except csv.Error as error:
        raise SourceError(f"{where} is not a sound CSV file: {error}. Mend its quotes.") from None
    rows = [(number, cells) for number, cells in enumerate(lines, start=1) if any(c.strip() for c in cells)]
    if not rows:
        raise SourceError(f"{where} is empty. Give it the columns {','.join((*REQUIRED, 'role'))} and one row a frame.")
    header = _header(rows[0][1], where)
    table = _Table(folder, station, header)
    found = [row for number, cells in rows[1:] if (row := table.row(number, cells)) is not None]
    if table.mistakes:
        raise SourceError(message(table.mistakes, f"{where} has {len(table.mistakes)} mistakes"))
    if not found and not may_be_empty:
        raise SourceError(f"{where} lists no frame. Add one row a frame.")
    return found


def _table_text(where: Path) -> str:
    what = f"table of shots with the columns {','.join((*REQUIRED, 'role'))}"
    data = _bytes_of(where, SourceError, what)
    last = data.rfind(b"\n") + 1
    if data.startswith(f"{','.join(RECORDED)}\n".encode()) and not re.search(rb",[0-9a-f]{64}$", data[last:]):
        data = data[:last]  # a recording that was torn off in its last row
    return _text_of(data, where, SourceError, what)


def message(mistakes: Sequence[str], title: str) -> str:
    """Some mistakes in at most four lines; those that don't fit are counted."""
    if len(mistakes) == 1:
        return mistakes[0]
    if len(mistakes) <= 3:
        return "\n  ".join((f"{title}:", *mistakes))
    return "\n  ".join((f"{title}:", *mistakes[:2], f"and {len(mistakes) - 2} more."))


def shown(text: str) -> str:
    """A text from a file on one line, quoted, cut to a readable length."""
    plain = "".join(c if c.isprintable() else "?" for c in text)
    return f'"{plain}"' if len(plain) <= 80 else f'"{plain[:77]}..."'


def _header(cells: Sequence[str], where: Path) -> list[str]:
    """The columns' names. Raises SourceError where one is missing or there twice."""
    names = [c.strip() for c in cells]
    missing = [name for name in REQUIRED if name not in names]
    twice = [name for name in (*REQUIRED, *OPTIONAL) if names.count(name) > 1]
    other = re.search("[;\t|]", names[0]) if len(names) == 1 else None
    if missing and other:
        mark = "tabs" if other[0] == "\t" else f'"{other[0]}"'
        raise SourceError(f"{where}, row 1: columns are parted by {mark}. Save the table with commas between them.")
    if missing:
        near = get_close_matches(missing[0], [n.lower() for n in names], n=1, cutoff=0.6)
        hint = f" Is it the one called {shown(near[0])}?" if near else ""
        raise SourceError(
            f"{where}, row 1: no column {', '.join(missing)}.{hint} The columns are {','.join((*REQUIRED, 'role'))}."
        )
    if twice:
        raise SourceError(f"{where}, row 1: two columns are called {twice[0]}. Take one out.")
    return names


class _Table:
    """Rows read one by one, and the mistakes found so far."""

    def __init__(self, folder: Path, station: Station | None, header: list[str]) -> None:
        self.folder, self.station, self.header = folder, station, header
        self.root = folder.resolve()
        self.mistakes: list[str] = []
        self.seen: dict[Path, int] = {}

    def row(self, number: int, cells: Sequence[str]) -> Row | None:
        """One row as a record; None, and its mistakes noted, where it is wrong."""
        before = len(self.mistakes)
        if len(cells) > len(self.header) and any(c.strip() for c in cells[len(self.header) :]):
            self._wrong(number, None, f"{len(cells)} cells under {len(self.header)} columns; quote cells with commas")
            return None
        padded = [*cells, *[""] * (len(self.header) - len(cells))]
        values = {name: cell.strip() for name, cell in zip(self.header, padded, strict=False)}
        role = self._role(number, values.get("role", ""))
        path = self._path(number, values["file"])
        exposure_ms = self._number(number, "exposure_ms", values["exposure_ms"], 0.0, 1e9)
        if exposure_ms == 0 and role == "target":
            self._wrong(number, "exposure_ms", "0 is no exposure; write the time in ms, above 0")
        gain_db = self._number(number, "gain_db", values["gain_db"], -200.0, 200.0)
        stop = self._stop(number, values["stop"], role)
        time_s = self._number(number, "time_s", values["time_s"], -1e12, 1e12) if values.get("time_s") else None
        target = self._target(number, values.get("target", ""), role)
        if len(self.mistakes) > before or path is None or exposure_ms is None or gain_db is None:
            return None
        shot = Shot(values["file"], stop, exposure_ms, gain_db, role, number - 2, target, time_s)
        return Row(shot, path, values["sha256"] if tuple(self.header) == RECORDED else None)

    def _wrong(self, number: int, column: str | None, what: str) -> None:
        place = f"{self.folder / SHOTS}, row {number}" + (f", column {column}" if column else "")
        self.mistakes.append(f"{place}: {what}.")

    def _role(self, number: int, text: str) -> Role:
        if text not in ("", "target", "dark"):
            self._wrong(number, "role", f"{shown(text)} is unknown; write target or dark")
        return "dark" if text == "dark" else "target"

    def _number(self, number: int, column: str, text: str, least: float, most: float) -> float | None:
        plain = re.fullmatch(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", text, re.ASCII)
        value = float(text) if plain else math.nan
        if not text:
            self._wrong(number, column, "empty; a number is needed")
        elif not plain:
            hint = " with a decimal point" if "," in text else ""
            self._wrong(number, column, f"{shown(text)} is not a number; write one{hint}, such as 3.9")
        elif not least <= value <= most:
            self._wrong(number, column, f"{shown(text)} is out of range; {least:g} to {most:g} is allowed")
        else:
            return value
        return None

    def _stop(self, number: int, text: str, role: Role) -> float | None:
        if not text and role == "dark":
            return None
        stop = self._number(number, "stop", text, 0.01, 1e6)
        if stop is None or self.station is None or role == "dark":
            return stop
        ring = self.station.lens.stops
        same = [mark for mark in ring if math.isclose(mark, stop, rel_tol=1e-6)]
        if not same:
            marks = ", ".join(f"{mark:g}" for mark in ring)
            self._wrong(number, "stop", f"the ring has no stop {stop:g}; lens.stops lists {marks}")
            return None
        return same[0]

    def _target(self, number: int, text: str, role: Role) -> str | None:
        if not text or role == "dark":
            return None
        if self.station is None:
            return text
        names = [t.name for t in self.station.targets]
        same = [name for name in names if name.strip() == text]
        if not same:
            known = ", ".join(shown(n) for n in names[:6]) + (", ..." if len(names) > 6 else "")
            self._wrong(number, "target", f"the station has no target {shown(text)}; it has {known}")
            return None
        return same[0]

    def _path(self, number: int, text: str) -> Path | None:
        """Where the file is; None, and the mistake noted, where it is not inside the folder or named before."""
        if not text:
            self._wrong(number, "file", "empty; name the image file")
            return None
        windows = PureWindowsPath(text)
        if Path(text).is_absolute() or windows.drive or windows.root:
            self._wrong(number, "file", f"{shown(text)} is an absolute path; name files relative to the folder")
            return None
        try:
            path = _as_stored(self.folder, text)
            inside = path.resolve()
        except (OSError, RuntimeError, ValueError):  # names too long, links in a circle
            self._wrong(number, "file", f"{shown(text)} cannot be followed; name a file in the folder")
            return None
        if ".." in windows.parts or not inside.is_relative_to(self.root):
            self._wrong(number, "file", f"{shown(text)} leads out of the folder; put the file into it")
            return None
        if inside in self.seen:
            self._wrong(number, "file", f"{shown(text)} is in row {self.seen[inside]} too; one row a frame")
            return None
        self.seen[inside] = number
        return path


def _as_stored(folder: Path, text: str) -> Path:
    """The path of a file, its name taken as other systems write it: backslashes, composed or decomposed umlauts."""
    return next((p for p in _spellings(folder, text) if p.exists()), folder / text)


def _spellings(folder: Path, text: str) -> Iterator[Path]:
    slashed = text.replace("\\", "/")
    yield folder / text
    yield folder / slashed
    for form in ("NFC", "NFD"):
        yield folder / unicodedata.normalize(form, slashed)
