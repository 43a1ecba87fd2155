"""The answer in few words."""

from dataclasses import replace

import pytest
from results import STOPS, a_result, a_station

from sweep.result import NOTE_CODES, Note, SourceFacts
from sweep.verdict import LIMITED_BY, WHY_NOT, chance_line, headline, setting, stop_verdict, told, with_u

# The codes of the documented file format (docs/outputs.md, stops and recommendation).
STOP_CODES = {"exposure", "noise", "contrast", "beyond-nyquist", "no-reading", "unproven"}
LIMITS = {"depth", "aberration", "diffraction", "sampling", "exposure", "noise"}


def test_every_code_has_its_words() -> None:
    assert set(WHY_NOT) == STOP_CODES
    assert set(NOTE_CODES) >= STOP_CODES
    assert set(LIMITED_BY) == LIMITS


@pytest.mark.parametrize(
    ("targets", "need", "words"),
    [
        (1, {}, "f/4, 2 ms, 0 dB: meets the need at target 0"),
        (2, {}, "f/4, 2 ms, 0 dB: meets the need at both targets"),
        (3, {}, "f/4, 2 ms, 0 dB: meets the need at all three targets"),
        (12, {}, "f/4, 2 ms, 0 dB: meets the need at all 12 targets"),
        (1, {"depth_range_mm": [0, 12]}, "f/5.6, 3.92 ms, 0 dB: meets the need at all depths from 0 to 12 mm"),
        (1, {"contrast": 0.9}, "No stop meets the need; the best is f/4, 2 ms, 0 dB (too little contrast)"),
    ],
)
def test_the_headline_says_stop_setting_and_verdict(targets: int, need: dict[str, object], words: str) -> None:
    station = a_station([(f"target {i}", 1.0 + 0.01 * i) for i in range(targets)], **need)
    assert headline(a_result(station), station) == words


def test_an_unproven_stop_is_not_said_to_fail() -> None:
    station = a_station([("cap", 1.0)])
    result = a_result(station)
    stops = tuple(replace(s, meets_need=False, why_not=("unproven",)) for s in result.stops)
    found = replace(result, stops=stops, recommendation=replace(result.recommendation, meets_need=False))
    assert headline(found, station) == "f/4, 2 ms, 0 dB: not proven to meet the need"
    assert stop_verdict(stops[0]) == "not proven"


@pytest.mark.parametrize(
    ("contrast", "words"),
    [
        (0.3, "Forecast, nothing measured yet: f/4 should meet the need at cap"),
        (0.9, "Forecast, nothing measured yet: no stop should meet the need; the best is f/4 (too little contrast)"),
    ],
)
def test_a_forecast_is_called_one(contrast: float, words: str) -> None:
    station = a_station([("cap", 1.0)], contrast=contrast)
    result = replace(a_result(station), readings=(), source=SourceFacts(0, ""))
    assert headline(result, station) == words


def test_without_a_stop_there_is_no_chance_to_state() -> None:
    station = a_station()
    result = a_result(station, clipped=STOPS)
    assert headline(result, station).startswith("No stop can be recommended")
    assert chance_line(result, station) == ""


def test_settings_are_short_and_never_minus_zero() -> None:
    assert setting(3.9157, 0.0) == "3.92 ms, 0 dB"
    assert setting(4.0, 5.84) == "4 ms, 5.8 dB"
    assert setting(4.0, -0.001) == "4 ms, 0 dB"
    assert setting(None, None) == "exposure unknown"


def test_uncertainty_is_shown_with_k_2() -> None:
    assert with_u(0.4412, 0.0041) == "0.441 ± 0.008"
    assert with_u(0.4412, 0.0001) == "0.441 ± 0.001"
    assert with_u(2.0, 0.0, 2) == "2.00"
    assert with_u(5.626, None, 2) == "5.63"
    assert with_u(None, None) == "–"


def test_a_warning_says_once_what_to_do() -> None:
    kind = NOTE_CODES["vibration"]
    assert told(Note("vibration", f"It shakes. {kind.remedy}")) == f"It shakes. {kind.remedy}"
    assert told(Note("vibration", "It shakes at f/4.")) == f"It shakes at f/4. {kind.remedy}"
