"""What opens, changes and closes an alert."""

from dataclasses import replace

import pytest

from service.alerts.alert import AlertState, ChangeKind
from service.alerts.explained import Known
from service.alerts.persistence import watch_pass
from service.alerts.watch import Watch
from tests.scored_looks import RULE, is_same, on, scored, watched


def kinds(scores: list[float], *, is_weak: bool = False) -> list[str]:
    _, changes = watched(scores, is_weak=is_weak)
    return [change.kind.value for change in changes]


@pytest.mark.parametrize(
    "scores",
    [[3.0, 3.0], [3.0, 0.0, 3.0], [0.0, 9.0], [1.0, 1.0, 1.0, 5.0, 2.0, 3.0]],
)
def test_two_departing_looks_of_three_or_one_far_out_open_an_alert(scores: list[float]) -> None:
    assert kinds(scores) == ["opened"]
    assert kinds(scores[:-1]) == [], "not before the last of them"


@pytest.mark.parametrize("scores", [[3.0, 0.0, 0.0, 3.0], [8.9], [2.9] * 10])
def test_fewer_open_none(scores: list[float]) -> None:
    assert kinds(scores) == []


def test_in_a_small_cohort_a_single_look_opens_nothing() -> None:
    assert kinds([12.0], is_weak=True) == []
    _, (change,) = watched([12.0, 12.0], is_weak=True)
    assert change.alert.is_weak


def test_an_alert_closes_after_two_looks_that_have_returned() -> None:
    watch, changes = watched([4.0, 4.0, 1.4, 1.6, 1.4, 1.4])
    assert [change.kind for change in changes] == [ChangeKind.OPENED, ChangeKind.CLOSED]
    alert = changes[-1].alert
    assert (alert.state, alert.closed_at, alert.closed_by) == (AlertState.CLOSED, on(25), "return")
    assert watch.open == {}


def test_closing_clears_the_window() -> None:
    # In a window of five the looks before the closing would still be there.
    wide = replace(RULE, looks_window=5)
    _, changes = watched([4.0, 4.0, 0.0, 0.0, 4.0], rule=wide)
    assert [change.kind.value for change in changes] == ["opened", "closed"]
    _, changes = watched([4.0, 4.0, 0.0, 0.0, 4.0, 4.0], rule=wide)
    assert changes[-1].alert.first_departure_at == on(20)


def test_an_alert_tells_its_looks_and_the_worst_of_them() -> None:
    watch, _ = watched([0.0, 5.0, 2.0, 4.0, 6.0])
    alert = watch.open["A"]
    assert (alert.first_departure_at, alert.opened_at) == (on(5), on(15))
    assert (alert.looks, alert.scenes) == (3, ("scene-5", "scene-15", "scene-20"))
    assert (alert.score, alert.worst_at, alert.last_observed_at) == (6.0, on(20), on(20))
    assert (alert.index, alert.direction) == ("ndvi", "below")
    assert alert.expected + alert.shortfall == pytest.approx(alert.observed)
    assert (alert.basis, alert.baseline, alert.low_power) == ("own", "v1", False)


def test_a_look_that_returns_counts_as_observed_but_not_as_a_look_of_the_alert() -> None:
    watch, _ = watched([4.0, 4.0, 0.0])
    alert = watch.open["A"]
    assert (alert.looks, alert.last_observed_at, alert.score) == (2, on(10), 4.0)


def test_a_worse_look_raises_severity_and_is_told() -> None:
    # What grew is a decline from then on, though the last look is a better one.
    _, changes = watched([3.5, 3.5, 9.5, 4.0])
    assert [(change.kind.value, change.what) for change in changes] == [
        ("opened", ()),
        ("changed", ("cause", "severity")),
    ]
    assert changes[-1].alert.severity == "high"


def test_a_departure_that_comes_at_once_is_sudden() -> None:
    # NDVI falls short by a twentieth of the score: before it 0.01 and 0.00, then 0.20:
    # u = (0.20 - 0.005) / 0.20.
    watch, _ = watched([0.2, 0.0, 4.0, 5.0])
    assert watch.open["A"].suddenness == pytest.approx(0.195 / 0.20)


def test_a_departure_that_creeps_in_is_not_sudden() -> None:
    watch, _ = watched([2.0, 2.8, 3.0, 3.0])
    assert watch.open["A"].suddenness == pytest.approx((0.15 - 0.12) / 0.15)


def test_after_a_long_gap_nobody_knows() -> None:
    watch, _ = watched([0.0, 0.0])
    sudden, _ = watched([4.0, 4.0], watch=watch, first_day=25)
    unknown, _ = watched([4.0, 4.0], watch=watch, first_day=26)
    assert sudden.open["A"].suddenness is not None
    assert unknown.open["A"].suddenness is None
    first, _ = watched([4.0, 4.0])
    assert first.open["A"].suddenness is None, "no look before"


DRYING = {"ndvi": -0.05, "ndmi": -0.2, "swir16": 0.08}
FLOODED = {"ndvi": -0.3, "ndmi": 0.2, "ndwi": 0.4, "nir": -0.2, "swir16": -0.18}
UNCLEAR = {"ndvi": -0.05}


def labels(*shortfalls: dict[str, float]) -> list[str]:
    watch, found = Watch.nothing(RULE), []
    for at, short in enumerate(shortfalls):
        looks = scored(5 * at, {"A": 4.0}, shortfalls=short)
        after = watch_pass(watch, looks, RULE, Known())
        watch = after.watch
        found += [change.alert.cause.kind for change in after.changes]
    return found


def test_a_cause_is_revised_when_later_looks_speak_for_another() -> None:
    assert labels(UNCLEAR, UNCLEAR, DRYING, DRYING) == ["undetermined", "moisture_stress"]


def test_a_flood_keeps_its_label() -> None:
    assert labels(FLOODED, FLOODED, DRYING, DRYING, DRYING) == ["flood"]


def test_judging_a_pass_leaves_the_memory_before_it_alone() -> None:
    watch, _ = watched([4.0, 4.0])
    before = watch.to_arrays()
    watch_pass(watch, scored(10, {"A": 0.0, "B": 12.0}), RULE, Known())
    assert is_same(watch.to_arrays(), before)
