"""The demo's own check passes what agrees with the scenario's truth, and nothing else."""

from dataclasses import replace
from typing import Any

import pytest

from service.cli.demo_receiver import Event
from service.cli.demo_report import event_line, report, scene_line, summary
from service.cli.demo_truth import Befallen, faults_of, told_alerts

FLOOD = Befallen(
    parcel="A",
    title="flooded",
    cause="flood",
    started_on="2024-05-01",
    first_scene="scene_20240503",
)
BURN = replace(FLOOD, parcel="B", title="burnt", cause="burn", started_on="2024-06-01")
NAMES = {"A": "Long Rise", "B": "Teal Piece"}


def alert(parcel: str, cause: str, day: str, **members: Any) -> dict[str, Any]:
    return {
        "id": f"alt_{parcel}_{day}",
        "state": "open",
        "parcel": parcel,
        "crop": "oats",
        "holding": "mere-end",
        "opened_at": f"{day}T10:06:20Z",
        "closed_at": None,
        "first_departure_at": f"{day}T10:06:20Z",
        "last_observed_at": f"{day}T10:06:20Z",
        "index": "ndwi",
        "direction": "above",
        "observed": -0.22,
        "expected": -0.76,
        "departure": 36.04,
        "severity": "high",
        "cause": {"kind": cause, "because": "near-infrared fell", "others": ["removal"]},
        "revision": 1,
        **members,
    }


def event(told: dict[str, Any], name: str = "alert.opened") -> Event:
    return Event(
        id=f"evt_{told['id']}_{told['revision']}", name=name, subject=told["id"], data=told
    )


FLOODED = alert("A", "flood", "2024-05-03")
BURNT = alert("B", "burn", "2024-06-02")
RIGHT = [event(FLOODED), event(BURNT)]


def faults(
    events: list[Event], *, listed: list[dict[str, Any]] | None = None, forged: int = 0
) -> list[str]:
    befallen = [FLOOD, BURN]
    listing = [FLOODED, BURNT] if listed is None else listed
    return faults_of(befallen, told_alerts(befallen, events), listed=listing, forged=forged)


def test_alerts_that_agree_with_the_truth_have_no_faults() -> None:
    assert faults(RIGHT) == []


def test_a_signature_that_does_not_fit_is_a_fault() -> None:
    assert faults(RIGHT, forged=1) == ["Messages with a signature that does not fit: 1."]


def test_an_event_without_an_alert_is_a_fault() -> None:
    assert faults(RIGHT[:1], listed=[FLOODED]) == [
        "B: burnt from 2024-06-01, but no alert arrived."
    ]


def test_an_alert_that_the_service_lists_but_the_receiver_never_saw_is_a_fault() -> None:
    assert faults(RIGHT[:1]) == [
        "B: burnt from 2024-06-01, but no alert arrived.",
        "B: its alert of 2024-06-02 did not arrive at the receiver.",
    ]


@pytest.mark.parametrize("parcel", ["A", "C"])
def test_an_alert_on_another_parcel_or_before_anything_happened_is_a_fault(parcel: str) -> None:
    early = alert(parcel, "removal", "2024-04-20")
    assert faults([event(early), *RIGHT]) == [
        f"{parcel}: accused on 2024-04-20 (removal), though nothing had befallen it."
    ]


def test_an_accusation_counts_even_if_it_was_taken_back() -> None:
    wrong = alert("C", "burn", "2024-06-02")
    taken_back = event({**wrong, "state": "retracted", "revision": 2}, "alert.changed")
    assert len(faults([*RIGHT, event(wrong), taken_back])) == 1


def test_the_cause_counts_as_told_at_the_opening() -> None:
    mistaken = alert("B", "removal", "2024-06-02")
    revised = event({**BURNT, "revision": 2}, "alert.changed")
    assert faults([RIGHT[0], event(mistaken), revised]) == [
        "B: the alert says removal, but it was burn."
    ]
    later = event(alert("B", "removal", "2024-06-20", revision=2), "alert.changed")
    assert faults([*RIGHT, later]) == []


def test_an_alert_that_opens_again_on_its_parcel_is_no_second_accusation() -> None:
    again = event(alert("A", "undetermined", "2024-07-01"))
    alerts = told_alerts([FLOOD, BURN], [again, *RIGHT])
    assert [one.is_first for one in alerts] == [True, True, False]
    assert faults([again, *RIGHT]) == []


def test_the_report_shows_the_alert_beside_the_truth_with_what_became_of_it() -> None:
    closed = {**FLOODED, "state": "closed", "closed_at": "2024-07-02T10:06:20Z", "revision": 3}
    revised = {**FLOODED, "cause": {"kind": "removal"}, "severity": "low", "revision": 2}
    revised["last_observed_at"] = "2024-05-13T10:06:20Z"
    closed |= {"cause": revised["cause"], "severity": "low"}
    # The closing overtook the change.
    events = [*RIGHT, event(closed, "alert.closed"), event(revised, "alert.changed")]
    told = report(told_alerts([FLOOD, BURN], events), [FLOOD, BURN], names=NAMES)
    first, second, caution = told.split("\n\n")
    assert first.splitlines() == [
        "A Long Rise, oats, mere-end: severity high",
        "  opened     2024-05-03, departing since 2024-05-03",
        "  measure    NDWI -0.22 observed, -0.76 expected; it departs by 36.0 spreads (above)",
        "  cause      flood: near-infrared fell",
        "  or else    removal",
        "  later      2024-05-13 cause revised to removal, severity low",
        "  later      2024-07-02 closed",
        "  truth      right: flooded from 2024-05-01 (flood), first shown by scene_20240503",
    ]
    assert "later" not in second
    assert caution.startswith("Caution: Screening result")


def test_the_report_and_the_summary_name_what_was_missed_and_who_was_accused() -> None:
    events = [event(alert("C", "burn", "2024-06-02")), event(alert("B", "removal", "2024-06-02"))]
    alerts = told_alerts([FLOOD, BURN], events)
    told = report(alerts, [FLOOD, BURN], names=NAMES)
    assert "WRONG: nothing had befallen this parcel" in told
    assert "WRONG CAUSE" in told
    assert "A Long Rise: no alert\n  truth      MISSED: flooded from 2024-05-01 (flood)" in told
    words = " ".join(summary(alerts, [FLOOD, BURN], received=7).split())
    assert words == (
        "Of 2 things that befell the land 0 were told with the right cause, 1 missed; "
        "1 other parcels were accused. 7 signed messages arrived."
    )


def test_a_scene_s_line_says_how_many_parcels_were_unseen_and_why() -> None:
    scene = {"ref": "s_1", "parcels_measured": 37, "parcels_unseen": {"cloud": 3, "shadow": 2}}
    assert scene_line(scene).split() == ["s_1", "37", "5", "cloud", "3,", "shadow", "2"]


def test_of_the_messages_only_those_of_alerts_have_a_line() -> None:
    line = event_line(RIGHT[0])
    assert line is not None
    assert " ".join(line.split()) == "> alert.opened A (oats): flood, severity high, open"
    assert event_line(replace(RIGHT[0], name="scene.done")) is None
