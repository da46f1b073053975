"""Replaying the past gives the alarms that judging it look by look would have given."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.alerts.chance import strength_of
from service.alerts.explained import Known
from service.alerts.persistence import watch_pass
from service.alerts.replay import PastLooks, looks_around, replayed
from service.alerts.rules import RULES, Rule
from service.alerts.watch import Watch
from tests.scored_looks import scored

RULE = replace(RULES["default"], threshold=3.0)
THRESHOLDS = (2.4, 3.0, 4.1)


def past(scores: list[list[float]], *, season: int = 2023) -> PastLooks:
    """Return looks of parcels, one row of scores each, every five days; NaN = not judged."""
    rows = [(p, at, score) for p, row in enumerate(scores) for at, score in enumerate(row)]
    score = np.array([each for _, _, each in rows], dtype=np.float64)
    size = score.size
    return PastLooks(
        parcel=np.array([p for p, _, _ in rows], dtype=np.int64),
        season=np.full(size, season),
        day=np.array([5 * at for _, at, _ in rows], dtype=np.int64),
        order=np.array([5 * at for _, at, _ in rows], dtype=np.int64),
        score=score,
        mirrored=np.where(np.isnan(score), np.nan, 0.0),
        may_open=np.ones(size, dtype=bool),
        is_weak=np.zeros(size, dtype=bool),
        is_known=np.zeros(size, dtype=bool),
    )


def look_by_look(row: list[float], rule: Rule, *, is_weak: bool) -> list[tuple[int, float]]:
    """Return place and strength of the alarms of one parcel, by the fold's own steps."""
    watch, found = Watch.nothing(rule), []
    for at, score in enumerate(row):
        if np.isnan(score):
            continue
        looks = scored(5 * at, {"A": score}, is_weak=is_weak, rule=rule)
        after = watch_pass(watch, looks, rule, Known())
        watch = after.watch
        found += [(at, each.alert.strength) for each in after.changes if each.kind == "opened"]
    return found


SCORES = st.sampled_from([np.nan, 0.0, 1.4, 1.5, 2.0, 2.5, 3.0, 3.5, 4.2, 7.3, 9.0, 12.5])


@settings(max_examples=150)
@given(
    scores=st.lists(st.lists(SCORES, min_size=14, max_size=14), min_size=1, max_size=4),
    needed=st.integers(1, 3),
    extra=st.integers(0, 2),
    is_weak=st.booleans(),
)
def test_a_replay_opens_what_judging_look_by_look_opens(
    *, scores: list[list[float]], needed: int, extra: int, is_weak: bool
) -> None:
    looks = replace(past(scores), is_weak=np.full(14 * len(scores), is_weak))
    rule = replace(RULES["default"], looks_needed=needed, looks_window=needed + extra)
    alarms = replayed(looks, rule, THRESHOLDS)
    for place, threshold in enumerate(THRESHOLDS):
        here = alarms.threshold == place
        found = sorted(zip(alarms.look[here].tolist(), alarms.strength[here].tolist(), strict=True))
        expected = [
            (14 * parcel + at, strength)
            for parcel, row in enumerate(scores)
            for at, strength in look_by_look(row, rule.at(threshold), is_weak=is_weak)
        ]
        assert found == expected


def test_the_order_of_looks_does_not_matter() -> None:
    rng = np.random.default_rng(2)
    looks = past(rng.exponential(2.0, (6, 20)).tolist())
    mixed = rng.permutation(120)
    names = ("parcel", "season", "day", "order", "score", "mirrored", "may_open", "is_weak")
    shuffled = replace(
        looks, **{name: getattr(looks, name)[mixed] for name in (*names, "is_known")}
    )
    first, second = (replayed(each, RULE, THRESHOLDS) for each in (looks, shuffled))
    told = sorted(zip(first.threshold.tolist(), first.look.tolist(), strict=True))
    assert told == sorted(zip(second.threshold.tolist(), mixed[second.look].tolist(), strict=True))


def test_each_season_begins_anew() -> None:
    one, two = past([[0.0, 4.0]], season=2022), past([[4.0, 0.0]], season=2023)
    both = replace(
        one,
        **{
            name: np.concatenate([getattr(one, name), getattr(two, name)])
            for name in PastLooks.__dataclass_fields__
        },
    )
    assert replayed(both, RULE, [3.0]).look.size == 0


def test_alarms_open_only_where_the_rule_lets_them() -> None:
    looks = past([[4.0, 4.0, 4.0, 4.0]])
    limited = replace(looks, may_open=np.array([True, False, False, True]))
    assert replayed(limited, RULE, [3.0]).look.tolist() == [3]


def test_parcel_weeks_run_from_the_first_look_of_a_season_to_its_last() -> None:
    # Looks on days 0 to 65 and 5 to 30: 66 and 26 days.
    row = [1.0] * 14
    short = [np.nan, *[1.0] * 6, *[np.nan] * 7]
    assert past([row, short]).parcel_weeks == pytest.approx((66 + 26) / 7)
    assert past([[np.nan] * 3]).parcel_weeks == 0.0


def test_the_looks_of_an_alarm_end_where_its_parcel_has_returned() -> None:
    looks = past([[0.0, 1.0, 4.0, 4.0, 2.0, np.nan, 1.0, 1.0, 0.0], [4.0] * 9])
    opened = np.array([3], dtype=np.int64)
    found = looks_around(looks, RULE, opened)
    # From the window before the opening look on; the second of two returned looks is out.
    assert np.flatnonzero(found).tolist() == [1, 2, 3, 4, 5, 6]


def test_strength_is_the_second_largest_of_three_or_a_third_of_the_largest() -> None:
    scores = np.array([[3.0, 5.0, 4.0], [np.nan, np.nan, 12.0], [1.0, 18.0, 2.0]])
    assert strength_of(scores).tolist() == [4.0, 4.0, 6.0]
