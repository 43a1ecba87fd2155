"""The lens that an earlier sweep has found, for a forecast: `lens.model` of the station file."""

from pathlib import Path

from sweep.errors import StationError
from sweep.report.tables import read_result
from sweep.result import LensModel
from sweep.station import Station


def earlier_lens(station: Station, station_file: Path) -> LensModel | None:
    """The lens model of the result that `lens.model` names, relative to the station file; None where it names none.

    A folder stands for the `result.json` in it. Raises StationError where it can't be read or is no sweep's,
    SourceError where it is no result.
    """
    if station.lens.model is None:
        return None
    path = station_file.parent / station.lens.model
    path = path / "result.json" if path.is_dir() else path
    where = f'{station_file}: lens.model = "{station.lens.model}"'
    try:
        data = path.read_bytes()
    except OSError as error:
        raise StationError(
            f"{where}: {path} can't be read ({error.strerror}). Name the result.json of an earlier sweep, relative to "
            "the station file."
        ) from None
    result = read_result(data, str(path))
    if result.source.frames == 0:
        raise StationError(f"{where} is a forecast itself: name the result.json of a sweep, or take the key out.")
    return result.model
