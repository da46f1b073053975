"""Thresholds set by replaying the past."""

from dataclasses import replace

import numpy as np
import pytest

from service.alerts.chance import Odds, odds_of_false
from service.alerts.rules import RULES
from service.alerts.tuning import Tuned, looks_of_events, tune
from tests.unit.alerts.test_replay import past

RULE = RULES["default"]
LOOKS = 73


def quiet(parcels: int, seed: int, *, scale: float = 1.0) -> np.ndarray:
    """Return scores of a year of looks every five days, without events."""
    return np.random.default_rng(seed).normal(0.0, scale, (parcels, LOOKS))


def test_the_threshold_is_the_smallest_with_few_enough_replayed_alarms() -> None:
    # Where decoys are as many as alarms each alarm counts in full.
    scores = quiet(100, 1, scale=1.6)
    looks = replace(past(scores.tolist()), mirrored=quiet(100, 2, scale=2.5).ravel())
    tuned = tune(RULE, looks)
    assert tuned.threshold is not None
    assert tuned.replayed_rate is not None
    assert tuned.replayed_rate <= 0.8
    below = tune(replace(RULE, threshold=round(tuned.threshold - 0.1, 1)), looks)
    assert below.replayed_rate is not None
    assert below.replayed_rate > 0.8
    assert tuned.alarm_rate == pytest.approx(tuned.replayed_rate)
    assert (tuned.seasons, tuned.parcel_weeks) == ((2023,), pytest.approx(100 * 361 / 7))


def test_noisier_pasts_get_higher_thresholds_up_to_seven() -> None:
    def threshold(scale: float) -> float | None:
        looks = past(quiet(100, 3, scale=scale).tolist())
        return tune(RULE, replace(looks, mirrored=quiet(100, 4, scale=2 * scale).ravel())).threshold

    assert threshold(0.5) == 2.4
    middle = threshold(2.0)
    assert middle is not None
    assert 2.4 < middle < 7.0
    assert threshold(9.0) == 7.0


def struck(parcels: int, events: int) -> np.ndarray:
    """Return quiet scores in which the first parcels departed far for a while."""
    scores = quiet(parcels, 5)
    scores[:events, 30:45] += 12.0
    return scores


def test_departures_that_the_better_side_never_shows_are_taken_for_real() -> None:
    calm = tune(RULE, replace(past(quiet(200, 5).tolist()), mirrored=quiet(200, 6).ravel()))
    looks = replace(past(struck(200, 30).tolist()), mirrored=quiet(200, 6).ravel())
    tuned = tune(RULE, looks)
    assert tuned.threshold == calm.threshold
    assert tuned.alarm_rate is not None
    assert tuned.alarm_rate >= 1_000 * 30 / tuned.parcel_weeks
    marked = looks_of_events(RULE, looks).reshape(200, LOOKS)
    assert marked[:30, 31:45].all()
    assert marked[30:].mean() < 0.01


def test_what_people_confirmed_or_expected_does_not_count() -> None:
    # All on the better side depart as well, so that nothing is taken for real by itself.
    looks = past(struck(60, 20).tolist())
    looks = replace(looks, mirrored=struck(60, 20).ravel())
    assert tune(RULE, looks).threshold == 7.0
    known = np.zeros((60, LOOKS), dtype=bool)
    known[:20, 28:46] = True
    tuned = tune(RULE, replace(looks, is_known=known.ravel()))
    assert tuned.threshold is not None
    assert tuned.threshold < 4.0


def test_too_little_past_sets_no_threshold() -> None:
    looks = past(quiet(19, 7).tolist())
    assert looks.parcel_weeks < 1_000
    tuned = tune(RULE, looks)
    assert (tuned.threshold, tuned.replayed_rate) == (None, None)
    assert tuned.odds.chance(4.0, [4.0], day=100, parcels=19, cause="flood") is None


def test_an_operators_threshold_is_replayed_and_stays() -> None:
    tuned = tune(replace(RULE, threshold=2.0), past(quiet(100, 8).tolist()))
    assert tuned.threshold == 2.0
    assert tuned.replayed_rate is not None
    assert RULE.at(2.9).thresholds.look == 2.9
    assert replace(RULE, threshold=2.0).at(2.9).thresholds.look == 2.0


def test_what_tuning_says_is_kept_and_read_again() -> None:
    tuned = tune(RULE, replace(past(struck(80, 9).tolist()), mirrored=quiet(80, 6).ravel()))
    read = Tuned.from_dict(tuned.to_dict())
    assert read.to_dict() == tuned.to_dict()
    assert Tuned.from_dict(Tuned.nothing().to_dict()).threshold is None


def test_odds_of_being_false_are_those_of_decoys() -> None:
    # 1, 2 and 4 alarms of at least 9, 5 and 3; 0, 1 and 3 decoys, half a one more each.
    strength = np.array([3.0, 9.0, 3.0, 5.0])
    odds = odds_of_false(strength, np.array([3.0, 4.0, 6.0]))
    np.testing.assert_allclose(odds, [3.5 / 4, 0.5, 3.5 / 4, 1.5 / 2])
    assert odds_of_false(np.array([3.0]), np.full(5, 9.0)).tolist() == [1.0]


PAST = Odds(
    seasons=2,
    parcels=100.0,
    strength=np.array([3.0, 3.0, 3.1, 8.0]),
    day=np.array([50, 200, 200, 200]),
    weight=np.array([1.0, 1.0, 1.0, 0.1]),
)


def chance(
    strength: float, so_far: list[float], *, day: int = 100, cause: str = "decline"
) -> float:
    found = PAST.chance(strength, so_far, day=day, parcels=100, cause=cause)
    assert found is not None
    return found


def test_a_chance_by_hand() -> None:
    # One past alarm of strength 8, which was likely real, half a one a season; this one. No
    # other is near (a kernel of 0.3 in the logarithm): 0.05 + 0.25 false of 0.5 + 1 + 0.25.
    near = np.exp(-0.5 * (np.log(np.array([3.0, 3.0, 3.1]) / 8.0) / 0.3) ** 2).sum() / 2
    day_50 = np.exp(-0.5 * (np.log(3.0 / 8.0) / 0.3) ** 2) / 2
    expected = (0.05 + near + day_50 + 0.25) / (0.5 + near + 1.0 + 0.25)
    assert chance(8.0, [8.0]) == pytest.approx(expected, abs=1e-6)


def test_a_chance_falls_as_a_season_brings_more_alerts_than_the_past() -> None:
    found = [chance(3.0, [3.0] * count) for count in (1, 5, 20)]
    assert found[0] > found[1] > found[2]
    assert chance(8.0, [8.0]) < chance(3.0, [3.0])


def test_a_chance_reckons_with_how_many_parcels_there_are() -> None:
    few = PAST.chance(3.0, [3.0], day=100, parcels=50, cause="decline")
    many = PAST.chance(3.0, [3.0], day=100, parcels=400, cause="decline")
    assert few is not None
    assert many is not None
    assert few < many


def test_several_bands_that_agree_lower_a_chance_and_no_cause_raises_it() -> None:
    plain = chance(3.0, [3.0])
    assert chance(3.0, [3.0], cause="flood") < plain < chance(3.0, [3.0], cause="undetermined")
    assert 0.0 < chance(50.0, [50.0], cause="burn") < 1.0
