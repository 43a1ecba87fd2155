"""The choice as a whole: its order, ties, chances, and sweeps whose answer is known."""

import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from choosing import CAMERA, STOPS, PlainLens, a_station, an_outlook, places_of, some_evidence
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from sweep.choose import Outlook, Place, StopEvidence, choose
from sweep.result import CameraNoise
from sweep.station import Station

SWEEPS = json.loads((Path(__file__).parents[1] / "fixtures" / "choice" / "sweeps.json").read_text())
CLIPPED = 0.05  # share of clipped pixels from which a patch is no sound reading
LIMITS = {"exposure", "noise"}


class KnownLosses:
    """A lens of which only the losses at the best stop's worst place are known."""

    def __init__(self, contrast, places, losses):
        self.transfer, self.places, self.losses = contrast, places, losses

    def contrast(self, stop_index, place, *, without=None, refocus_mm=0.0, pixel_scale=1.0):
        same = next(k for k, p in enumerate(self.places) if p.name == place.name)
        fitted = float(self.transfer[stop_index, same])
        return fitted if without is None else fitted / (1 - self.losses[without])


def chosen(sweep):
    station = Station.model_validate(sweep["station"])
    rows = sweep["stops"]
    evidence = [
        StopEvidence(r["stop"], r["f_number_by_light"], 0.01, r["tone_per_ms"], r["saturated_fraction"] <= CLIPPED)
        for r in rows
    ]
    places = tuple(
        Place(t.name, t.depth_mm, sweep["feature_cy_px"][t.name], sweep["object_um_per_px"][t.name])
        for t in station.targets
    )
    contrast = np.array([r["contrast"] for r in rows])
    outlook = Outlook(
        places, contrast, contrast + 1e-6 * np.random.default_rng(1).standard_normal((50, *contrast.shape))
    )
    lens = KnownLosses(contrast, places, sweep["answer"]["losses"])
    return choose(station, evidence, CameraNoise(**sweep["camera"]), outlook, lens)


@pytest.mark.parametrize("sweep", SWEEPS, ids=lambda s: s["name"])
def test_known_sweeps(sweep):
    # Answers of an independent simulation: fixtures/choice/README.md.
    found, stops, _ = chosen(sweep)
    answer = sweep["answer"]
    by_stop = {r["stop"]: r["answer"] for r in sweep["stops"]}
    tied = 0.99 * by_stop[answer["stop"]]["worst_contrast"]
    assert by_stop[found.stop]["worst_contrast"] >= tied
    assert not by_stop[found.stop]["ruled_out_by"]
    proven = found.meets_need or stops[[s.stop for s in stops].index(found.stop)].why_not == ("unproven",)
    assert proven == answer["meets_need"]
    costliest = max(answer["losses"], key=answer["losses"].get)
    assert found.limited_by == ("exposure" if answer["limits_bind"] else costliest)


@pytest.mark.parametrize("sweep", SWEEPS, ids=lambda s: s["name"])
def test_settings_of_known_sweeps(sweep):
    _, stops, _ = chosen(sweep)
    for stop, row in zip(stops, sweep["stops"], strict=True):
        expected = row["answer"]
        assert_allclose(stop.exposure_ms, expected["exposure_ms"], atol=1e-5)
        assert_allclose(stop.gain_db, expected["gain_db"], atol=1e-5)
        assert_allclose(stop.worst_contrast, expected["worst_contrast"], atol=2e-6)
        assert LIMITS & set(stop.why_not) == set(expected["ruled_out_by"])
        if expected["worst_contrast"] > 0.001:
            assert stop.worst_target == expected["worst_target"]
        if stop.snr_db is not None:
            gamma = sweep["station"]["camera"]["response"] != "linear"
            assert_allclose(stop.snr_db, expected["snr_db"], atol=0.19 if gamma else 1e-4)


def test_the_sharpest_stop_is_chosen_and_reported_as_is():
    station = a_station()
    found, stops, warned = choose(
        station,
        some_evidence((2.8, 4.0, 5.6), tone_at_first=2.0),
        CAMERA,
        an_outlook(station, [[0.3, 0.3, 0.25], [0.5, 0.45, 0.4], [0.4, 0.38, 0.36]]),
        None,
    )
    assert (found.stop, found.meets_need, found.limited_by) == (4.0, True, None)
    assert found.chance_best == 1.0
    assert [s.worst_target for s in stops] == ["step 2"] * 3
    assert [s.worst_contrast for s in stops] == [0.25, 0.4, 0.36]
    assert found.shortfalls == ()
    assert warned == ()
    assert "f/4" in found.reasons[0]
    assert "0.400" in found.reasons[0]


def test_limits_rule_out_a_sharper_stop():
    station = a_station(max_exposure_ms=1.0)
    contrast = [[0.3] * 3, [0.5] * 3]
    found, stops, _ = choose(
        station,
        some_evidence((2.8, 4.0), tone_at_first=0.8),
        CAMERA,
        an_outlook(station, contrast),
        PlainLens((2.8, 4.0)),
    )
    assert found.stop == 2.8
    assert found.limited_by == "exposure"
    assert stops[1].why_not == ("exposure",)
    assert any("f/4 would be sharper (0.500)" in r and "1.79 times the light" in r for r in found.reasons)


def test_noise_rules_out_a_sharper_stop():
    station = a_station(max_exposure_ms=1.0, max_gain_db=24.0, min_snr_db=38.0)
    found, stops, _ = choose(
        station,
        some_evidence((2.8, 4.0), tone_at_first=1.0),
        CAMERA,
        an_outlook(station, [[0.3] * 3, [0.5] * 3]),
        None,
    )
    assert (found.stop, found.limited_by) == (2.8, "noise")
    assert stops[1].why_not == ("noise",)


def test_a_tie_goes_to_the_shorter_exposure_and_is_said():
    station = a_station(max_exposure_ms=50.0)
    contrast = [[0.300] * 3, [0.498] * 3, [0.500] * 3]
    outlook = Outlook(places_of(station), np.array(contrast), np.repeat([contrast], 50, axis=0))
    found, _, _ = choose(station, some_evidence((2.8, 4.0, 5.6)), CAMERA, outlook, None)
    assert found.stop == 4.0
    assert found.chance_best == 1.0
    told = next(r for r in found.reasons if "can't be told apart" in r)
    assert "f/4 and f/5.6" in told
    assert "f/5.6 gives more depth" in told


def test_a_tie_goes_first_to_the_higher_chance_to_meet_the_need():
    station = a_station(max_exposure_ms=50.0, contrast=0.45)
    contrast = np.array([[0.498] * 3, [0.500] * 3])
    spread = np.array([0.04, 0.001])[:, None] * np.linspace(-1.5, 1.5, 201)[:, None, None]
    found, _, _ = choose(
        station, some_evidence((4.0, 5.6)), CAMERA, Outlook(places_of(station), contrast, contrast + spread), None
    )
    assert found.stop == 5.6


def test_a_contrast_that_is_likely_but_not_proven():
    # 0.21 with u = 0.01 against 0.20: a probability of 0.84 by the normal distribution; 0.95 is wanted (JCGM 106).
    station = a_station()
    outlook = an_outlook(station, [[0.21, 0.9, 0.9]], u=0.01)
    found, stops, _ = choose(station, some_evidence((2.8,), frames=4), CAMERA, outlook, None)
    assert (found.stop, found.meets_need, stops[0].why_not) == (2.8, False, ("unproven",))
    assert 0.75 < stops[0].chance_meets < 0.92
    # The spread of a mean goes as 1 / sqrt(n): (1.645 x 0.01 / 0.01)^2 = 2.7 times the frames.
    assert any(
        "(11 instead of 4)" in s or "(10 instead of 4)" in s or "(12 instead of 4)" in s for s in found.shortfalls
    )


def test_less_confidence_is_enough_where_it_is_asked():
    station = a_station(confidence=0.6)
    found, _, _ = choose(station, some_evidence((2.8,)), CAMERA, an_outlook(station, [[0.21, 0.9, 0.9]], u=0.01), None)
    assert found.meets_need


def test_a_proven_stop_is_named_beside_a_sharper_unproven_one():
    station = a_station()
    contrast = np.array([[0.21] * 3, [0.25] * 3])
    spread = np.array([0.001, 0.1])[:, None] * np.linspace(-1, 1, 101)[:, None, None]
    found, stops, _ = choose(
        station, some_evidence((2.8, 4.0)), CAMERA, Outlook(places_of(station), contrast, contrast + spread), None
    )
    assert (found.stop, found.meets_need) == (4.0, False)
    assert stops[0].meets_need
    assert any(s.startswith("f/2.8 is less sharp") for s in found.shortfalls)


def test_no_sound_reading_at_all():
    station = a_station()
    evidence = some_evidence((2.8, 4.0), sound=(False, False))
    found, stops, warned = choose(station, evidence, CAMERA, an_outlook(station, np.full((2, 3), math.nan)), None)
    assert (found.stop, found.exposure_ms, found.meets_need) == (None, None, False)
    assert all("no-reading" in s.why_not for s in stops)
    assert [n.code for n in warned] == ["no-reading"]
    assert "f/2.8" in warned[0].text


def test_a_stop_without_sound_reading_that_would_win_is_to_be_taken_again():
    station = a_station(max_exposure_ms=50.0)
    evidence = some_evidence((2.8, 4.0), sound=(True, False))
    found, _, warned = choose(station, evidence, CAMERA, an_outlook(station, [[0.3] * 3, [0.5] * 3]), None)
    assert found.stop == 2.8
    assert found.chance_best == 1.0
    assert [n.code for n in warned] == ["no-reading"]
    # 70 % of full scale at (4 / 2.8)^2 = 2.04 times the exposure of f/2.8, which has one full scale a millisecond.
    assert "Take f/4 again at about 1.43 ms" in warned[0].text


def test_a_stop_without_light_or_reading_borrows_its_exposure_from_the_marks():
    station = a_station(max_exposure_ms=50.0)
    known, lost = some_evidence((2.8, 4.0), sound=(True, False))
    evidence = (known, replace(lost, tone_per_ms=None))
    _, stops, warned = choose(station, evidence, CAMERA, an_outlook(station, [[0.3] * 3, [0.5] * 3]), None)
    assert stops[1].exposure_ms is None
    assert "Take f/4 again at about 1.43 ms" in warned[0].text


def test_a_feature_beyond_nyquist_is_not_met():
    station = a_station(feature_um=50.0)
    found, stops, _ = choose(
        station, some_evidence((2.8, 4.0)), CAMERA, an_outlook(station, [[0.5] * 3, [0.4] * 3]), None
    )
    assert (found.stop, found.meets_need) == (2.8, False)
    assert all(s.why_not == ("beyond-nyquist",) for s in stops)
    assert all(s.chance_meets == 0 for s in stops)
    assert any(
        "object pixels of at most 50 um (now 58 um), or a feature of at least 58 um" in s.lower()
        for s in found.shortfalls
    )


def test_every_stop_breaks_the_limits():
    station = a_station(max_exposure_ms=0.1)
    found, stops, _ = choose(
        station, some_evidence((2.8, 4.0)), CAMERA, an_outlook(station, [[0.3] * 3, [0.5] * 3]), None
    )
    assert (found.stop, found.meets_need, found.limited_by) == (4.0, False, "exposure")
    assert all(s.why_not == ("exposure",) for s in stops)


def test_a_noise_need_that_cannot_be_checked_is_unproven():
    station = a_station(min_snr_db=30.0)
    found, stops, _ = choose(
        station, some_evidence((2.8,)), CameraNoise(None, None, 0.0, 255), an_outlook(station, [[0.5] * 3]), None
    )
    assert (found.meets_need, stops[0].why_not) == (False, ("unproven",))
    assert any("signal-to-noise" in s for s in found.shortfalls)


def test_exposures_shorter_than_a_ripple_period_are_warned_of():
    station = a_station(flicker_hz=100, max_exposure_ms=50.0, max_gain_db=6.0)
    _, _, warned = choose(
        station,
        some_evidence((2.8, 11.0), tone_at_first=1.0),
        CAMERA,
        an_outlook(station, [[0.3] * 3, [0.5] * 3]),
        None,
    )
    assert [n.code for n in warned] == ["ripple-not-averaged"]
    assert "f/2.8 (0.7 ms)" in warned[0].text
    assert "f/11" not in warned[0].text


def test_a_level_that_gives_way_to_ripple_is_said():
    station = a_station(flicker_hz=100, max_exposure_ms=18.5, stops=(2.8,))
    evidence = some_evidence((2.8,), tone_at_first=0.7 / 18)
    found, stops, warned = choose(station, evidence, CAMERA, an_outlook(station, [[0.5] * 3]), None)
    assert found.meets_need
    assert stops[0].exposure_ms == 10.0
    assert [n.code for n in warned] == ["gain-spent"]
    assert any("39 % instead of 70 %" in r for r in found.reasons)


def test_motion_blur_counts_in_the_choice():
    # f/4 is sharper at rest; its longer exposure blurs it more.
    station = a_station(speed_mm_s=500.0, feature_um=180.0)
    contrast = [[0.40] * 3, [0.45] * 3]
    found, stops, _ = choose(
        station, some_evidence((2.8, 4.0), tone_at_first=2.8), CAMERA, an_outlook(station, contrast), None
    )
    v_b = [500 * t / (2 * 180) for t in (0.25, 0.25 * (4 / 2.8) ** 2)]
    assert_allclose([s.worst_contrast for s in stops], [0.40 * np.sinc(v_b[0]), 0.45 * np.sinc(v_b[1])], rtol=1e-9)
    assert found.stop == 2.8
    assert any("pixels during the exposure" in r for r in found.reasons)


def test_the_best_stop_at_the_end_of_the_sweep_is_warned_of():
    lens = PlainLens(stops=(1.4, 2.0, 2.8))
    station = a_station()
    outlook = lens.outlook(station, grid=np.geomspace(1.4, 2.8, 40))
    found, _, warned = choose(station, some_evidence(lens.stops), CAMERA, outlook, lens)
    assert found.stop == 2.8
    assert [n.code for n in warned] == ["optimum-outside"]
    assert "take f/4 as well" in warned[0].text


def test_a_best_stop_within_the_sweep_is_not():
    lens = PlainLens()
    station = a_station(max_exposure_ms=500.0)
    _, _, warned = choose(station, some_evidence(), CAMERA, lens.outlook(station, grid=np.geomspace(1.4, 16, 90)), lens)
    assert warned == ()


def test_rows_must_match_the_stops():
    station = a_station()
    with pytest.raises(ValueError):
        choose(station, some_evidence((2.8, 4.0)), CAMERA, an_outlook(station, [[0.5] * 3]), None)


CONTRASTS = st.lists(st.tuples(*[st.floats(-0.3, 1.0)] * 3), min_size=len(STOPS), max_size=len(STOPS))
SOUND = st.lists(st.booleans(), min_size=len(STOPS), max_size=len(STOPS))


def a_choice(transfer, sound=None, *, order=None, **need):
    station = a_station(**need)
    evidence = some_evidence(sound=sound)
    outlook = an_outlook(station, transfer, u=0.01)
    if order is not None:
        evidence = tuple(evidence[k] for k in order)
        outlook = Outlook(outlook.places, outlook.contrast[order], outlook.draws[:, order])
    return choose(station, evidence, CAMERA, outlook, None)


@settings(max_examples=50)
@given(CONTRASTS, SOUND, st.floats(0.3, 60.0))
def test_a_stop_that_breaks_limits_is_never_recommended_where_one_keeps_them(contrast, sound, limit_ms):
    found, stops, _ = a_choice(contrast, sound, max_exposure_ms=limit_ms)
    able = [s for s in stops if not {"exposure", "noise", "no-reading"} & set(s.why_not)]
    picked = next((s for s in stops if s.stop == found.stop), None)
    if able:
        assert picked in able
        assert picked.worst_contrast >= 0.99 * max(s.worst_contrast for s in able)
        assert sum(s.chance_best for s in able) >= 1 - 1e-9
    if picked is not None:
        assert "no-reading" not in picked.why_not
        assert found.meets_need == (picked.why_not == ())
        assert found.meets_need or found.shortfalls
    else:
        assert not any(sound)


@settings(max_examples=50)
@given(CONTRASTS, SOUND, st.permutations(range(len(STOPS))))
def test_the_order_of_the_stops_does_not_matter(contrast, sound, order):
    order = list(order)
    found, stops, warned = a_choice(contrast, sound, max_exposure_ms=20.0)
    again, reordered, warned_again = a_choice(contrast, sound, order=order, max_exposure_ms=20.0)
    assert again == found
    assert warned_again == warned
    assert tuple(stops[k] for k in order) == reordered


@settings(max_examples=50)
@given(CONTRASTS, st.floats(0.05, 0.9), st.floats(0.05, 0.9))
def test_a_harder_need_is_never_met_more_easily(contrast, one, other):
    easy, hard = min(one, other), max(one, other)
    _, at_easy, _ = a_choice(contrast, contrast=easy)
    _, at_hard, _ = a_choice(contrast, contrast=hard)
    assert all(a.meets_need or not b.meets_need for a, b in zip(at_easy, at_hard, strict=True))


@settings(max_examples=50)
@given(CONTRASTS, st.floats(0.3, 60.0), st.floats(1.0, 4.0))
def test_a_longer_exposure_allowed_never_lowers_the_contrast(contrast, limit_ms, times):
    _, short, _ = a_choice(contrast, max_exposure_ms=limit_ms)
    found, long, _ = a_choice(contrast, max_exposure_ms=limit_ms * times)
    kept = [s.worst_contrast for s in short if "exposure" not in s.why_not]
    if kept:
        assert next(s for s in long if s.stop == found.stop).worst_contrast >= 0.99 * max(kept)


@settings(max_examples=20)
@given(CONTRASTS)
def test_the_same_input_gives_the_same_answer(contrast):
    assert a_choice(contrast) == a_choice(contrast)


def test_chances_mean_what_they_say():
    # Repeated sampling: of many sweeps with known truth and known errors, a share equal to the mean chance must be
    # right (frequency interpretation of probability; tolerance 3 binomial standard deviations), and no more than
    # 1 - confidence of the passes may be false.
    rng = np.random.default_rng(11)
    station = a_station(max_exposure_ms=500.0, contrast=0.5)
    stops = (2.8, 4.0, 5.6)
    u, n = 0.01, 500
    chances, right, passes, false_passes = [], 0, 0, 0
    for _ in range(n):
        truth = np.repeat(rng.uniform(0.45, 0.55, (3, 1)), 3, axis=1) + rng.uniform(0, 0.2, (3, 3))
        truth[:, 0] = rng.uniform(0.47, 0.53, 3)
        measured = truth + u * rng.standard_normal((3, 3))
        draws = measured + u * rng.standard_normal((400, 3, 3))
        found, _, _ = choose(station, some_evidence(stops), CAMERA, Outlook(places_of(station), measured, draws), None)
        worst = truth.min(axis=1)
        picked = worst[stops.index(found.stop)]
        chances.append(found.chance_best)
        right += picked >= 0.99 * worst.max()
        passes += found.meets_need
        false_passes += found.meets_need and picked < 0.5
    assert abs(right / n - np.mean(chances)) < 3 * math.sqrt(0.25 / n)
    assert passes > 50
    assert false_passes <= 0.05 * passes
