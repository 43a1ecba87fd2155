"""Tables of a result: the keys and bytes that others may rely on.

The keys are those of the documented file format (docs/outputs.md); pandas, a reader of its own, reads the CSV files.
"""

import io
import json
import math
import os
import re
import subprocess
import sys
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from results import a_result, a_station

from sweep.errors import SourceError, SweepError
from sweep.report.tables import read_result, readings_csv, result_json, stops_csv
from sweep.result import NOTE_CODES, Note, Reading, Result, Stop

ROOT = Path(__file__).parents[1]
DOCS = (ROOT / "docs" / "outputs.md").read_text(encoding="utf-8")

# Of schema sweep/result/1, by part; keys may be added, none may go.
KEYS = {
    "recommendation": "stop exposure_ms gain_db meets_need limited_by chance_best optimum_f_number reasons shortfalls",
    "stops": "stop f_number_by_light f_number_by_light_u exposure_ms gain_db worst_target worst_contrast "
    "worst_contrast_u snr_db meets_need why_not",
    "readings": "stop target patch kind depth_mm mtf50_cy_px mtf50_cy_px_u contrast_at_feature contrast_at_feature_u "
    "reversed smallest_feature_um smallest_feature_um_u model_contrast model_contrast_u model_mtf50_cy_px "
    "model_mtf50_cy_px_u contrast_at_bars bars_cy_px saturated_fraction ok why_not",
    "camera": "electrons_per_dn read_noise_e black_level_dn full_scale_dn",
    "model": "best_focus_mm spherical_waves blur_px reduced_chi2",
    "depth_map": "part_contrast depths_mm stops",
    "warnings": "code text",
    "source": "frames sha256",
}


@pytest.fixture(scope="module")
def result() -> Result:
    note = Note("frames-saturated", "f/1.4: 31 % of the pixels are clipped (Größe, „Öl“, 瓶). Take it again.")
    return a_result(a_station([('Größe, "Öl"', 6.0), ("瓶\N{BULLET}", -8.0)]), clipped=(1.4,), warnings=[note])


@pytest.fixture(scope="module")
def document(result: Result) -> dict[str, Any]:
    found = json.loads(result_json(result))
    assert isinstance(found, dict)
    return found


def test_the_schema_comes_first_and_every_key_is_there(document: dict[str, Any]) -> None:
    assert list(document) == ["schema", *KEYS]
    assert document["schema"] == "sweep/result/1"
    for part, keys in KEYS.items():
        rows = document[part] if isinstance(document[part], list) else [document[part]]
        assert rows
        assert all(set(keys.split()) <= set(row) for row in rows), part


def test_every_key_of_the_file_stands_in_the_manual(document: dict[str, Any]) -> None:
    for part in KEYS:
        section = DOCS.split(f"### {part}\n")[1].split("\n#")[0]
        row = document[part][0] if isinstance(document[part], list) else document[part]
        assert set(row) == set(re.findall(r"`(\w+)`", section)) & set(row), part


def test_the_map_is_the_same_in_every_stop_and_stands_in_the_manual(document: dict[str, Any]) -> None:
    found, section = document["depth_map"], DOCS.split("### depth_map\n")[1].split("\n#")[0]
    told = set(re.findall(r"`(\w+)`", section))
    assert [row["stop"] for row in found["stops"]] == [stop["stop"] for stop in document["stops"]]
    for row in found["stops"]:
        assert set(row) <= told
        assert all(set(target) <= told for target in row["targets"])
        lists = ("contrast", "contrast_u", "smallest_detected_um", "smallest_at_need_um")
        assert {len(row[key]) for key in lists} == {len(found["depths_mm"])}
        assert [t["target"] for t in row["targets"]] == ['Größe, "Öl"', "瓶\N{BULLET}"]


def test_without_a_lens_model_there_is_no_map() -> None:
    assert json.loads(result_json(a_result(a_station(), model=False)))["depth_map"] is None


def test_one_line_a_stop_reading_warning_and_stop_of_the_map(result: Result, document: dict[str, Any]) -> None:
    text = result_json(result).decode().splitlines()
    lines = [json.loads(line.strip().rstrip(",")) for line in text if line.strip().startswith('{"')]
    assert lines == [
        *document["stops"], *document["readings"], *document["depth_map"]["stops"], *document["warnings"]
    ]  # fmt: skip


def test_the_manual_has_one_line_for_each_code() -> None:
    rows = re.findall(r"^\| `([\w-]+)` \| (.+) \| (.+) \|$", DOCS.split("## Codes")[1], re.MULTILINE)
    assert rows == [(code, kind.meaning, kind.remedy) for code, kind in NOTE_CODES.items()]


def test_numbers_keep_their_kind_and_six_digits(result: Result, document: dict[str, Any]) -> None:
    assert document["camera"]["full_scale_dn"] == 4095
    assert isinstance(document["camera"]["full_scale_dn"], int)
    assert document["stops"][0]["meets_need"] is False
    for row, stop in zip(document["stops"], result.stops, strict=True):
        # Half a unit in the sixth digit is at most 5e-6 of the value.
        assert row["f_number_by_light"] == pytest.approx(stop.f_number_by_light, rel=5.0001e-6)
        assert float(f"{row['f_number_by_light']:.6g}") == row["f_number_by_light"]


def test_what_is_unknown_is_null(document: dict[str, Any]) -> None:
    clipped = [r for r in document["readings"] if r["stop"] == 1.4]
    assert all(r["mtf50_cy_px"] is None and r["ok"] is False for r in clipped)


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_a_number_that_is_none_is_refused_by_its_key(result: Result, value: float) -> None:
    broken = replace(result, readings=(replace(result.readings[0], mtf50_cy_px=value), *result.readings[1:]))
    with pytest.raises(SweepError, match=r"readings\[0\]\.mtf50_cy_px"):
        result_json(broken)
    with pytest.raises(SweepError, match=r"readings\[0\]\.mtf50_cy_px"):
        readings_csv(broken)


def test_minus_zero_is_zero(result: Result) -> None:
    assert b"-0.0" not in result_json(replace(result, model=replace(result.model, best_focus_mm=-0.0)))


def test_the_curve_is_for_the_plot_alone(result: Result) -> None:
    assert result_json(result) == result_json(replace(result, curve=()))


def test_what_was_written_is_read_back(result: Result) -> None:
    again = read_result(result_json(result))
    assert result_json(again) == result_json(result)
    assert again.readings[0] == result.readings[0]
    assert again.warnings == result.warnings


def test_keys_of_later_versions_are_skipped(document: dict[str, Any], result: Result) -> None:
    later = document | {"weather": "fine", "camera": document["camera"] | {"prnu": 0.01}}
    assert result_json(read_result(json.dumps(later).encode())) == result_json(result)


@pytest.mark.parametrize(
    ("data", "told"),
    [
        (b"\x89PNG", "not a JSON file"),
        (b"[" * 100_000, "not a JSON file"),
        (b"[1]", "schema None"),
        (b'{"schema": "other/2"}', "schema 'other/2'"),
        (b'{"schema": "sweep/result/1"}', "damaged at recommendation"),
    ],
)
def test_another_file_is_refused_in_a_sentence(data: bytes, told: str) -> None:
    with pytest.raises(SourceError, match=told) as caught:
        read_result(data, "old.json")
    assert str(caught.value).startswith("old.json ")
    assert "\n" not in str(caught.value)


def test_a_damaged_place_is_named(document: dict[str, Any]) -> None:
    stops = [document["stops"][0] | {"stop": "wide"}, *document["stops"][1:]]
    with pytest.raises(SourceError, match=r"damaged at stops\.0\.stop"):
        read_result(json.dumps(document | {"stops": stops}).encode())


@pytest.mark.parametrize(("write", "part", "record"), [(stops_csv, "stops", Stop), (readings_csv, "readings", Reading)])
def test_the_csv_says_what_the_json_says(
    result: Result, document: dict[str, Any], write: Any, part: str, record: type[Any]
) -> None:
    data = write(result)
    assert data.endswith(b"\n")
    assert b"\r" not in data
    table = pd.read_csv(io.BytesIO(data), encoding="utf-8", dtype=str, keep_default_na=False)
    assert list(table.columns) == [f.name for f in fields(record)]
    for (_, row), wanted in zip(table.iterrows(), document[part], strict=True):
        for key, value in wanted.items():
            if value is None:
                assert row[key] == ""
            elif isinstance(value, bool):
                assert row[key] == str(value).lower()
            elif isinstance(value, list):
                assert row[key].split() == value
            elif isinstance(value, str):
                assert row[key] == value
            else:
                assert float(row[key]) == value


@given(st.text(min_size=1).filter(lambda t: t.strip() and t.isprintable()), st.floats(-1e9, 1e9))
def test_any_name_and_number_survive(name: str, depth_mm: float) -> None:
    reading = Reading(1.4, name, 0, "flat", depth_mm, ok=True)
    one = replace(a_result(a_station(stops=(1.4, 2.0)), model=False), readings=(reading,))
    again = read_result(result_json(one)).readings[0]
    assert again.target == name
    assert again.depth_mm == pytest.approx(depth_mm, rel=5.0001e-6)
    table = pd.read_csv(io.BytesIO(readings_csv(one)), dtype=str, keep_default_na=False)
    assert table["target"].tolist() == [name]


def test_the_bytes_are_the_same_in_any_surroundings(tmp_path: Path) -> None:
    program = (
        "import sys; from results import *; from sweep.report.tables import *; r = a_result(a_station());"
        "sys.stdout.buffer.write(result_json(r) + readings_csv(r) + stops_csv(r))"
    )
    surroundings = (
        {"LC_ALL": "C", "TZ": "UTC", "OMP_NUM_THREADS": "1", "PYTHONHASHSEED": "1"},
        {"LC_ALL": "de_DE.UTF-8", "TZ": "Asia/Tokyo", "OMP_NUM_THREADS": "2", "PYTHONHASHSEED": "2"},
    )
    path = os.pathsep.join([str(ROOT), str(ROOT / "tests")])
    outputs = [
        subprocess.run(
            [sys.executable, "-c", program],
            env=os.environ | more | {"PYTHONPATH": path},
            cwd=folder,
            capture_output=True,
            check=True,
        ).stdout
        for more, folder in zip(surroundings, (ROOT, tmp_path), strict=True)
    ]
    assert outputs[0] == outputs[1]
    assert len(outputs[0]) > 10_000
