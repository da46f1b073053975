"""How the demo holds the alerts that it was told of against what befell the invented land."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from service.cli.demo_receiver import Event
from service.webhooks.events import EventName

_CHANGES: Final = {EventName.ALERT_CHANGED, EventName.ALERT_CLOSED}


@dataclass(frozen=True, slots=True, kw_only=True)
class Befallen:
    """What was put into the scenario: what befell which parcel, and when it can be seen.

    `started_on` is a date (``2024-05-01``), so that it compares with instants as text.
    """

    parcel: str
    title: str
    cause: str
    started_on: str
    first_scene: str

    @classmethod
    def from_truth(cls, members: Mapping[str, Any]) -> "Befallen":
        """Return one event of the scenario's truth file."""
        return cls(
            parcel=members["parcel"],
            title=members["event"],
            cause=members["cause"],
            started_on=members["started_on"],
            first_scene=members["first_scene"],
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class ToldAlert:
    """An alert as the receiver was told of it, and the truth that it may belong to.

    `opened` is the alert at its opening, `later` what it became, in order; `is_first` tells
    the first alert of an event from one that opened again.
    """

    opened: Mapping[str, Any]
    later: Sequence[Mapping[str, Any]]
    truth: Befallen | None
    is_first: bool


def told_alerts(befallen: Sequence[Befallen], events: Sequence[Event]) -> list[ToldAlert]:
    """Return the alerts that events tell of, in order of opening, each with its truth."""
    opened = [event.data for event in events if event.name == EventName.ALERT_OPENED]
    changes = [event for event in events if event.name in _CHANGES]
    alerts: list[ToldAlert] = []
    explained: set[Befallen] = set()
    for alert in sorted(opened, key=lambda each: (each["opened_at"], each["parcel"])):
        later = [event.data for event in changes if event.subject == alert["id"]]
        truth = _truth_of(alert, befallen)
        alerts.append(
            ToldAlert(
                opened=alert,
                # Events may overtake each other on their way.
                later=sorted(later, key=lambda each: int(each["revision"])),
                truth=truth,
                is_first=truth is not None and truth not in explained,
            )
        )
        explained |= {truth} if truth else set()
    return alerts


def _truth_of(alert: Mapping[str, Any], befallen: Sequence[Befallen]) -> Befallen | None:
    for truth in befallen:
        if truth.parcel == alert["parcel"] and alert["opened_at"] >= truth.started_on:
            return truth
    return None


def missed(befallen: Sequence[Befallen], alerts: Sequence[ToldAlert]) -> list[Befallen]:
    """Return what befell a parcel without the receiver's being told."""
    explained = [alert.truth for alert in alerts]
    return [truth for truth in befallen if truth not in explained]


def faults_of(
    befallen: Sequence[Befallen],
    alerts: Sequence[ToldAlert],
    *,
    listed: Sequence[Mapping[str, Any]],
    forged: int,
) -> list[str]:
    """Return in what the job went wrong, in sentences; nothing if it went right.

    Parameters
    ----------
    listed
        Alerts as the service lists them at the end; of each the receiver must know.
    forged
        How many messages arrived with a signature that did not fit.
    """
    return [
        *_not_found(befallen, alerts),
        *_not_true(alerts),
        *_not_told(alerts, listed),
        *([f"Messages with a signature that does not fit: {forged}."] if forged else []),
    ]


def _not_found(befallen: Sequence[Befallen], alerts: Sequence[ToldAlert]) -> Iterator[str]:
    for truth in missed(befallen, alerts):
        yield f"{truth.parcel}: {truth.title} from {truth.started_on}, but no alert arrived."


def _not_true(alerts: Sequence[ToldAlert]) -> Iterator[str]:
    for alert in alerts:
        parcel, kind = alert.opened["parcel"], alert.opened["cause"]["kind"]
        if alert.truth is None:
            day = alert.opened["opened_at"][:10]
            yield f"{parcel}: accused on {day} ({kind}), though nothing had befallen it."
        elif alert.is_first and kind != alert.truth.cause:
            yield f"{parcel}: the alert says {kind}, but it was {alert.truth.cause}."


def _not_told(alerts: Sequence[ToldAlert], listed: Sequence[Mapping[str, Any]]) -> Iterator[str]:
    told = {alert.opened["id"] for alert in alerts}
    for alert in listed:
        if alert["id"] not in told:
            day = alert["opened_at"][:10]
            yield f"{alert['parcel']}: its alert of {day} did not arrive at the receiver."
