"""The six files that a result is handed out as: all of them, or none.

tables  result.json, readings.csv, stops.csv      plot    plot.png, plot.svg
record  record.pdf, laid out by record.typ, with depth_plot's map on its second page
earlier the way back, for a forecast

drawing, lines, labels and letters help the pictures.
"""

import os
import shutil
import tempfile
from pathlib import Path

from sweep.errors import InputError
from sweep.report.earlier import earlier_lens
from sweep.report.tables import read_result, readings_csv, result_json, stops_csv
from sweep.result import Result
from sweep.station import Station

FILES = ("result.json", "readings.csv", "stops.csv", "plot.png", "plot.svg", "record.pdf")

__all__ = [
    "FILES",
    "check_out",
    "earlier_lens",
    "read_result",
    "readings_csv",
    "result_json",
    "stops_csv",
    "write_report",
]


def write_report(out_dir: Path, result: Result, station: Station) -> tuple[Path, ...]:
    """Write the six files into a folder, new or holding an earlier six; returns their paths.

    Everything is made before the disk is touched, written aside, and then moved into place.
    Raises InputError where the folder holds anything else or can't be written.
    """
    check_out(out_dir)
    # What draws is heavy, and not needed by those who only check a folder or print the JSON.
    from sweep.report.depth_plot import depth_svg
    from sweep.report.plot import png, svg
    from sweep.report.record import record_pdf

    picture = svg(result, station)
    depths = None if result.depth_map is None else depth_svg(result.depth_map, result, station)
    made = (
        result_json(result),
        readings_csv(result),
        stops_csv(result),
        png(result, station),
        picture,
        record_pdf(result, station, picture, depths),
    )
    try:
        _place(out_dir, dict(zip(FILES, made, strict=True)))
    except OSError as error:
        raise InputError(f"{out_dir} can't be written ({error.strerror}). Name another folder.") from None
    return tuple(out_dir / name for name in FILES)


def check_out(out_dir: Path) -> None:
    """See, before any work, that a report may go there. Raises InputError."""
    if not os.path.lexists(out_dir):
        parent = next(p for p in out_dir.absolute().parents if os.path.lexists(p))
        if not parent.is_dir():
            raise InputError(f"{out_dir} can't be made: {parent} is not a folder. Name another folder.")
        if not os.access(parent, os.W_OK | os.X_OK):
            raise InputError(f"{out_dir} can't be made: no right to write in {parent}. Name another folder.")
        return
    if not out_dir.is_dir():
        raise InputError(f"{out_dir} is not a folder. Name a new folder, or one with an earlier report.")
    foreign = sorted(e.name for e in out_dir.iterdir() if e.name not in FILES or not e.is_file() or e.is_symlink())
    if foreign:
        more = f" and {len(foreign) - 1} more" if len(foreign) > 1 else ""
        raise InputError(
            f"{out_dir} holds what is not part of a report ({foreign[0]}{more}). Name a new folder, or clear this one."
        )
    if not os.access(out_dir, os.W_OK | os.X_OK):
        raise InputError(f"{out_dir} can't be written: no right to. Name another folder.")


def _place(out_dir: Path, files: dict[str, bytes]) -> None:
    """A new folder appears with all files at once; in an existing one each file is replaced at once, one by one."""
    fresh = not out_dir.exists()
    if fresh:
        out_dir.parent.mkdir(parents=True, exist_ok=True)
    aside = Path(tempfile.mkdtemp(prefix=".report-", dir=out_dir.parent if fresh else out_dir))
    try:
        whole = aside / "report"
        whole.mkdir()
        for name, data in files.items():
            with (whole / name).open("wb") as file:
                file.write(data)
                file.flush()
                os.fsync(file.fileno())
        if fresh:
            whole.rename(out_dir)
        else:
            for name in files:
                (whole / name).replace(out_dir / name)
    finally:
        shutil.rmtree(aside, ignore_errors=True)
