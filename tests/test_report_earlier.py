"""The lens of an earlier sweep, read by the path that the station file names."""

from dataclasses import replace
from pathlib import Path

import pytest
from results import a_result, a_station

from sweep.errors import SourceError, StationError
from sweep.report import earlier_lens, result_json
from sweep.result import SourceFacts
from sweep.station import Station


def _naming(model: str | None) -> Station:
    station = a_station()
    return station.model_copy(update={"lens": station.lens.model_copy(update={"model": model})})


@pytest.mark.parametrize("name", ["run/result.json", "run", "./run/../run"])
def test_file_and_folder_are_found_beside_the_station_file(tmp_path: Path, name: str) -> None:
    result = a_result(a_station())
    (tmp_path / "run").mkdir()
    (tmp_path / "run" / "result.json").write_bytes(result_json(result))
    assert earlier_lens(_naming(name), tmp_path / "station.toml") == result.model
    assert earlier_lens(_naming(str(tmp_path / name)), Path("elsewhere") / "station.toml") == result.model


def test_without_the_key_nothing_is_read() -> None:
    assert earlier_lens(_naming(None), Path("nowhere") / "station.toml") is None


def test_what_is_not_there_is_named_with_the_key(tmp_path: Path) -> None:
    with pytest.raises(StationError, match=r'station\.toml: lens\.model = "gone\.json": .*gone\.json can\'t be read'):
        earlier_lens(_naming("gone.json"), tmp_path / "station.toml")


def test_what_is_no_result_is_refused(tmp_path: Path) -> None:
    (tmp_path / "result.json").write_text("{}")
    with pytest.raises(SourceError, match="schema"):
        earlier_lens(_naming("."), tmp_path / "station.toml")


def test_a_forecast_is_no_evidence(tmp_path: Path) -> None:
    forecast = replace(a_result(a_station()), source=SourceFacts(0, ""))
    (tmp_path / "result.json").write_bytes(result_json(forecast))
    with pytest.raises(StationError, match="forecast itself"):
        earlier_lens(_naming("result.json"), tmp_path / "station.toml")
