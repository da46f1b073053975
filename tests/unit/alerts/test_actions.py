"""What a person's action does to the alert, and to what comes after it."""

import pytest

from service.alerts.actions import Action, ActionKind, act
from service.alerts.alert import AlertState, Change
from service.alerts.watch import Watch
from tests.scored_looks import RULE, on, watched


def action(kind: str, day: int, verdict: str | None = None) -> Action:
    return Action(kind=ActionKind(kind), parcel="A", rule="default", at=on(day), verdict=verdict)


def closed_by_a_person(scores: list[float]) -> tuple[Watch, list[Change]]:
    """Return the memory when looks 0 and 5 opened an alert, a person closed it, others came."""
    watch, _ = watched([4.0, 4.0])
    watch, _ = act(watch, action("close", 5, "expected"), RULE)
    return watched(scores, watch=watch, first_day=10)


def test_closing_is_dated_by_the_newest_look_and_keeps_the_verdict() -> None:
    watch, _ = watched([4.0, 4.0])
    watch, (change,) = act(watch, action("close", 5, "confirmed"), RULE)
    alert = change.alert
    assert (alert.state, alert.closed_at) == (AlertState.CLOSED, on(5))
    assert (alert.closed_by, alert.verdict) == ("person", "confirmed")
    assert watch.open == {}


@pytest.mark.parametrize("scores", [[5.0] * 6, [20.0], [1.4, 5.0, 1.4, 5.0, 5.0]])
def test_after_a_persons_closing_a_parcel_that_still_departs_raises_nothing(
    scores: list[float],
) -> None:
    watch, changes = closed_by_a_person(scores)
    assert changes == []
    assert watch.quiet[watch.places["A"]]


def test_when_it_has_returned_it_may_be_raised_again() -> None:
    _, changes = closed_by_a_person([5.0, 1.4, 1.4, 5.0, 5.0])
    assert [change.kind.value for change in changes] == ["opened"]
    assert changes[0].alert.first_departure_at == on(25)


def test_a_new_season_ends_the_quiet() -> None:
    watch, _ = closed_by_a_person([5.0])
    _, changes = watched([5.0, 5.0], watch=watch.in_new_season(RULE), first_day=15)
    assert [change.kind.value for change in changes] == ["opened"]


def test_an_open_alert_outlasts_its_season() -> None:
    watch, _ = watched([4.0, 4.0])
    kept = watch.in_new_season(RULE)
    assert kept.open == watch.open
    _, changes = watched([1.0, 1.0], watch=kept, first_day=10)
    assert [change.kind.value for change in changes] == ["closed"]


def test_reopening_brings_the_same_alert_back() -> None:
    watch, _ = watched([4.0, 4.0])
    first = watch.open["A"]
    watch, _ = act(watch, action("close", 5), RULE)
    watch, (change,) = act(watch, action("reopen", 5), RULE)
    assert (change.kind.value, change.what) == ("changed", ("state",))
    assert watch.open["A"] == first
    _, changes = watched([1.0, 1.0], watch=watch, first_day=10)
    assert [change.kind.value for change in changes] == ["closed"]


def test_a_reopened_alert_needs_two_new_looks_to_close() -> None:
    watch, _ = watched([4.0, 4.0, 1.0, 1.0])
    watch, _ = act(watch, action("reopen", 15), RULE)
    watch, changes = watched([1.0], watch=watch, first_day=20)
    assert changes == []
    _, changes = watched([1.0], watch=watch, first_day=25)
    assert [change.kind.value for change in changes] == ["closed"]


def test_acknowledging_changes_the_state_alone() -> None:
    watch, _ = watched([4.0, 4.0])
    watch, (change,) = act(watch, action("acknowledge", 5), RULE)
    assert change.alert.state is AlertState.ACKNOWLEDGED
    _, changes = watched([1.0, 1.0], watch=watch, first_day=10)
    assert changes[-1].alert.state is AlertState.CLOSED


def test_a_closing_of_an_alert_that_is_not_there_yet_keeps_it_from_opening() -> None:
    # Judging anew, after a scene was withdrawn, may open it a look later.
    watch, _ = watched([1.0, 4.0])
    watch, changes = act(watch, action("close", 5), RULE)
    assert changes == []
    _, changes = watched([4.0, 4.0], watch=watch, first_day=10)
    assert changes == []


def test_a_closing_of_what_has_returned_already_silences_nothing() -> None:
    watch, _ = watched([1.0, 1.0])
    watch, _ = act(watch, action("close", 5), RULE)
    _, changes = watched([4.0, 4.0], watch=watch, first_day=10)
    assert [change.kind.value for change in changes] == ["opened"]


@pytest.mark.parametrize("kind", ["acknowledge", "reopen"])
def test_an_action_on_no_alert_does_nothing(kind: str) -> None:
    assert act(Watch.nothing(RULE), action(kind, 5), RULE)[1] == []
