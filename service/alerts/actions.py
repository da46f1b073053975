"""What a person did with an alert, as a dated event among the looks."""

from dataclasses import dataclass, replace
from datetime import datetime
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from service.alerts.alert import Alert, AlertState, Change, ChangeKind
from service.alerts.rules import Rule
from service.alerts.watch import Watch


class ActionKind(StrEnum):
    """What a person may do with an alert."""

    ACKNOWLEDGE = "acknowledge"
    CLOSE = "close"
    REOPEN = "reopen"


@dataclass(frozen=True, slots=True, kw_only=True)
class Action:
    """A person's action on the alert of a parcel.

    `at` is the acquisition time of the newest look that the alert rested on when the person
    acted, not the time on the wall: looks up to it had been seen. Should judging anew open
    the alert at another look, the action still holds for the parcel.
    """

    kind: ActionKind
    parcel: str
    rule: str
    at: datetime
    verdict: str | None = None


def act(watch: Watch, action: Action, rule: Rule) -> tuple[Watch, list[Change]]:
    """Return the memory after a person's action, and what it did to alerts."""
    watch = watch.with_places([action.parcel])
    if action.kind is ActionKind.CLOSE:
        return _close(watch, action, rule)
    if action.kind is ActionKind.REOPEN:
        return _reopen(watch, action)
    return _acknowledge(watch, action)


def _close(watch: Watch, action: Action, rule: Rule) -> tuple[Watch, list[Change]]:
    alert = watch.open.get(action.parcel)
    row = watch.places[action.parcel]
    # A parcel that has returned meanwhile needs no quiet.
    is_quiet = bool(watch.below[row] < rule.looks_to_close)
    watch = replace(watch, quiet=_set(watch.quiet, row, value=is_quiet))
    if alert is None:
        return watch, []
    closed = replace(
        alert,
        state=AlertState.CLOSED,
        closed_at=action.at,
        closed_by="person",
        verdict=action.verdict,
    )
    return replace(
        watch,
        open={parcel: each for parcel, each in watch.open.items() if parcel != action.parcel},
        closed={**watch.closed, action.parcel: closed},
    ), [_change(ChangeKind.CLOSED, action, closed)]


def _reopen(watch: Watch, action: Action) -> tuple[Watch, list[Change]]:
    row = watch.places[action.parcel]
    watch = replace(watch, quiet=_set(watch.quiet, row, value=False))
    alert = watch.closed.get(action.parcel)
    if alert is None or action.parcel in watch.open:
        return watch, []
    reopened = replace(alert, state=AlertState.OPEN, closed_at=None, closed_by=None, verdict=None)
    below = watch.below.copy()
    below[row] = 0
    return replace(
        watch,
        below=below,
        open={**watch.open, action.parcel: reopened},
        closed={parcel: each for parcel, each in watch.closed.items() if parcel != action.parcel},
    ), [_change(ChangeKind.CHANGED, action, reopened, "state")]


def _acknowledge(watch: Watch, action: Action) -> tuple[Watch, list[Change]]:
    alert = watch.open.get(action.parcel)
    if alert is None:
        return watch, []
    seen = replace(alert, state=AlertState.ACKNOWLEDGED)
    return replace(watch, open={**watch.open, action.parcel: seen}), [
        _change(ChangeKind.CHANGED, action, seen, "state")
    ]


def _change(kind: ChangeKind, action: Action, alert: Alert, *what: str) -> Change:
    return Change(kind=kind, at=action.at, alert=alert, what=what)


def _set(flags: NDArray[np.bool_], row: int, *, value: bool) -> NDArray[np.bool_]:
    changed = flags.copy()
    changed[row] = value
    return changed
