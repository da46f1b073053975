"""The alert of a parcel: its identity, its figures, and how each look moves them."""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from datetime import datetime
from enum import StrEnum
from typing import Any, Final

from service.alerts.causes import Cause, attribute, keeps_label
from service.alerts.evidence import evidence_of
from service.alerts.instants import instant
from service.alerts.looks import DepartedLook
from service.alerts.rules import Rule

CAUTION: Final = (
    "Screening result from satellite reflectance. Check on the ground before acting; "
    "follow local rules and licensed advice."
)


class AlertState(StrEnum):
    """What has become of an alert."""

    OPEN = "open"
    ACKNOWLEDGED = "acknowledged"
    CLOSED = "closed"


class ChangeKind(StrEnum):
    """What happened to an alert."""

    OPENED = "opened"
    CHANGED = "changed"
    CLOSED = "closed"


@dataclass(frozen=True, slots=True, kw_only=True)
class Alert:
    """That a parcel has departed from its baseline, and all that judging knows of it.

    `index`, `direction`, `observed`, `expected`, `shortfall`, `departure`, `departures`,
    `score`, `severity`, `basis` and `baseline` (a version) are those of the worst look so
    far, taken at `worst_at`; `looks` counts those that reached the threshold since
    `first_departure_at`, and `scenes` names theirs. All instants are acquisition times of
    looks. `growth` is the largest that was seen (`evidence`). `strength` and `chance`, the
    odds of being a false one, are those at opening, `p` that of the worst look. `diary` tells
    what people wrote down for the time of it, which does not explain it. `closed_by` is
    ``return`` when the parcel came back, ``person`` when a person closed it.
    """

    id: str
    rule: str
    parcel: str
    crop: str
    state: AlertState
    first_departure_at: datetime
    opened_at: datetime
    closed_at: datetime | None
    last_observed_at: datetime
    worst_at: datetime
    index: str
    direction: str
    observed: float
    expected: float
    shortfall: float
    departure: float
    departures: Mapping[str, float]
    score: float
    severity: str
    cause: Cause
    suddenness: float | None
    looks: int
    scenes: tuple[str, ...]
    basis: str
    baseline: str
    is_new_crop: bool
    is_weak: bool
    low_power: bool
    closed_by: str | None
    verdict: str | None
    growth: float = 1.0
    strength: float = 0.0
    chance: float | None = None
    p: float | None = None
    diary: tuple[str, ...] = ()

    @property
    def is_closed(self) -> bool:
        """Whether it is closed."""
        return self.state is AlertState.CLOSED

    def as_dict(self) -> dict[str, Any]:
        """Return plain members, fit for JSON; instants as RFC 3339."""
        members = {field.name: getattr(self, field.name) for field in fields(self)}
        for name in _INSTANTS:
            members[name] = None if members[name] is None else members[name].isoformat()
        return members | {
            "state": self.state.value,
            "cause": self.cause.as_dict(),
            "departures": dict(self.departures),
            "scenes": list(self.scenes),
            "diary": list(self.diary),
        }

    @classmethod
    def from_dict(cls, members: Mapping[str, Any]) -> "Alert":
        """Return the alert that `as_dict` wrote."""
        read = dict(members)
        for name in _INSTANTS:
            read[name] = None if read[name] is None else datetime.fromisoformat(read[name])
        read["state"] = AlertState(read["state"])
        read["cause"] = Cause.from_dict(read["cause"])
        read["scenes"] = tuple(read["scenes"])
        read["diary"] = tuple(read.get("diary", ()))
        return cls(**read)


@dataclass(frozen=True, slots=True, kw_only=True)
class Change:
    """Something that happened to an alert; `what` names the members that changed."""

    kind: ChangeKind
    at: datetime
    alert: Alert
    what: tuple[str, ...] = ()


def alert_id(*, parcel: str, rule: str, opening: datetime) -> str:
    """Return the identity of an alert: judging again, in any order, gives the same one.

    `opening` is the acquisition time of the pass that opens it.
    """
    told = "\n".join((parcel, rule, opening.isoformat()))
    return f"alr_{hashlib.sha256(told.encode()).hexdigest()[:24]}"


def opened(
    parcel: str,
    looks: Sequence[DepartedLook],
    *,
    rule: Rule,
    opening: datetime,
    suddenness: float | None,
    strength: float,
) -> Alert:
    """Return the alert that departed looks open, the last of them being the opening one.

    Parameters
    ----------
    looks
        Those in the rule's window, in order of time.
    opening
        Acquisition time of the pass of the last one.
    suddenness
        Share of the leading shortfall that came with the first departing look.
    strength
        Of the alert, by its last three looks.
    """
    departing = [look for look in looks if look.departs]
    worst = max(departing, key=lambda look: look.score)
    last = instant(looks[-1].at)
    evidence = evidence_of(looks, suddenness)
    return Alert(
        id=alert_id(parcel=parcel, rule=rule.id, opening=opening),
        rule=rule.id,
        parcel=parcel,
        state=AlertState.OPEN,
        first_departure_at=instant(departing[0].at),
        opened_at=last,
        closed_at=None,
        last_observed_at=last,
        cause=attribute(evidence),
        suddenness=suddenness,
        growth=evidence.growth,
        looks=len(departing),
        scenes=tuple(look.scene for look in departing),
        closed_by=None,
        verdict=None,
        strength=strength,
        **_figures(worst, rule),
    )


def observed_again(alert: Alert, looks: Sequence[DepartedLook], *, rule: Rule) -> Alert:
    """Return an open alert after another departed look, the last of `looks`."""
    newest = looks[-1]
    evidence = evidence_of(looks, alert.suddenness)
    # What has once grown did not come at once: a cause does not go to and fro.
    evidence = replace(evidence, growth=max(alert.growth, evidence.growth))
    cause = alert.cause if keeps_label(alert.cause.kind) else attribute(evidence)
    at = instant(newest.at)
    moved = replace(alert, cause=cause, growth=evidence.growth, last_observed_at=at)
    if newest.departs:
        moved = replace(moved, looks=alert.looks + 1, scenes=(*alert.scenes, newest.scene))
    if newest.score > alert.score:
        moved = replace(moved, **_figures(newest, rule))
    return moved


def differences(before: Alert, after: Alert) -> tuple[str, ...]:
    """Return which of cause and severity differ: what is worth telling people."""
    differs = {
        "cause": before.cause.kind != after.cause.kind,
        "severity": before.severity != after.severity,
    }
    return tuple(name for name, is_other in differs.items() if is_other)


def _figures(look: DepartedLook, rule: Rule) -> dict[str, Any]:
    index = look.index
    return {
        "crop": look.crop,
        "worst_at": instant(look.at),
        "index": index,
        "direction": rule.direction(index).value,
        "observed": look.observed[index],
        "expected": look.expected[index],
        "shortfall": look.shortfall[index],
        "departure": look.departures[index],
        "departures": dict(look.departures),
        "score": look.score,
        "severity": rule.severities.of(look.score),
        "basis": look.basis,
        "baseline": look.baseline,
        "is_new_crop": look.is_new_crop,
        "is_weak": look.is_weak,
        "low_power": look.low_power,
        "p": look.p,
    }


_INSTANTS: Final = (
    "first_departure_at",
    "opened_at",
    "closed_at",
    "last_observed_at",
    "worst_at",
)
