"""From the scores of a pass to alerts opened, changed and closed.

Open at two departing looks of the last three, or one far beyond the threshold; close after
two looks in a row that have returned. A look that is not judged leaves no trace here.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.alerts.alert import (
    AlertState,
    Change,
    ChangeKind,
    differences,
    observed_again,
    opened,
)
from service.alerts.instants import DAY, instant
from service.alerts.looks import DepartedLook
from service.alerts.rules import Rule
from service.alerts.watch import LOOKS_BEFORE, Watch

GAP_DAYS: Final = 20
"""After a longer gap before the first departing look nobody knows whether it was sudden."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Scored:
    """The judged looks of one pass.

    Attributes
    ----------
    opening
        Acquisition time of the pass.
    parcels
        One look each.
    at
        Acquisition of each look, microseconds since 1970, shape (looks,).
    score
        Shape (looks,).
    threshold, single_look
        Of each look, shape (looks,); a single look opens nothing where that is infinite.
    cause_from
        Score from which on a look tells of a cause, shape (looks,).
    shortfalls
        In the rule's measures, NaN = unknown, shape (looks, measures).
    describe
        Tells more of the look at a place; asked only for looks that departed.
    """

    opening: datetime
    parcels: Sequence[str]
    at: NDArray[np.int64]
    score: NDArray[np.float64]
    threshold: NDArray[np.float64]
    single_look: NDArray[np.float64]
    cause_from: NDArray[np.float64]
    shortfalls: NDArray[np.float64]
    describe: Callable[[int], DepartedLook]


def watch_pass(watch: Watch, looks: Scored, rule: Rule) -> tuple[Watch, list[Change]]:
    """Return the memory after a pass, and what it did to alerts, by parcel in order of name."""
    watch = watch.with_places(looks.parcels)
    rows = np.fromiter((watch.places[parcel] for parcel in looks.parcels), np.int64)
    watch = _remembered(watch, looks, rows, rule)
    step = _Step(watch=watch, looks=looks, rule=rule)
    for place in _touched(watch, looks, rows, rule):
        step.take(int(place), int(rows[place]))
    step.changes.sort(key=lambda change: change.alert.parcel)
    return replace(watch, trail=step.trail, open=step.open, closed=step.closed), step.changes


def _remembered(watch: Watch, looks: Scored, rows: NDArray[np.int64], rule: Rule) -> Watch:
    """Return a copy with the looks of the pass as the newest."""
    at, departs, shortfalls = watch.at.copy(), watch.departs.copy(), watch.shortfalls.copy()
    for array, newest in (
        (at, looks.at),
        (departs, looks.score >= looks.threshold),
        (shortfalls, looks.shortfalls),
    ):
        array[rows, :-1] = array[rows, 1:]
        array[rows, -1] = newest
    fresh, below = watch.fresh.copy(), watch.below.copy()
    fresh[rows] = np.minimum(fresh[rows] + 1, rule.looks_window)
    below[rows] = np.where(looks.score < rule.close_below, below[rows] + 1, 0)
    return replace(
        watch,
        at=at,
        departs=departs,
        shortfalls=shortfalls,
        fresh=fresh,
        below=below,
        quiet=watch.quiet.copy(),
    )


def _touched(watch: Watch, looks: Scored, rows: NDArray[np.int64], rule: Rule) -> NDArray[np.int64]:
    """Return the places of looks that departed, or whose parcel has an alert or is quiet."""
    is_open = np.fromiter((parcel in watch.open for parcel in looks.parcels), bool)
    returned = watch.quiet[rows] & (watch.below[rows] >= rule.looks_to_close)
    return np.flatnonzero(is_open | returned | (looks.score >= looks.cause_from))


class _Step:
    """One pass over the parcels that need more than arrays; its watch is its own copy."""

    def __init__(self, *, watch: Watch, looks: Scored, rule: Rule) -> None:
        self.watch, self.looks, self.rule = watch, looks, rule
        self.trail, self.open, self.closed = dict(watch.trail), dict(watch.open), dict(watch.closed)
        self.changes: list[Change] = []

    def take(self, place: int, row: int) -> None:
        """Let one look open, change or close the alert of its parcel."""
        parcel = self.looks.parcels[place]
        departed = self.looks.score[place] >= self.looks.cause_from[place]
        if departed:
            kept = (*self.trail.get(parcel, ()), self.looks.describe(place))
            self.trail[parcel] = kept[-self.rule.looks_window :]
        returned = bool(self.watch.below[row] >= self.rule.looks_to_close)
        if parcel in self.open:
            self._observe(parcel, place, departed=bool(departed))
            if returned:
                self._close(parcel, row, place)
        elif returned:
            self.watch.quiet[row] = False
            self._clear(parcel, row)
        elif not self.watch.quiet[row] and self._opens(place, row):
            self._open(parcel, row)

    def _opens(self, place: int, row: int) -> bool:
        window = self.watch.departs[row, -int(self.watch.fresh[row]) :]
        enough = np.count_nonzero(window) >= self.rule.looks_needed and bool(window[-1])
        return bool(enough or self.looks.score[place] >= self.looks.single_look[place])

    def _open(self, parcel: str, row: int) -> None:
        first = self.watch.at[row, -int(self.watch.fresh[row])]
        looks = [look for look in self.trail[parcel] if look.at >= first]
        alert = opened(
            parcel,
            looks,
            rule=self.rule,
            opening=self.looks.opening,
            suddenness=_suddenness(self.watch, row, looks, self.rule),
        )
        self.open[parcel] = alert
        self.changes.append(Change(kind=ChangeKind.OPENED, at=alert.opened_at, alert=alert))

    def _observe(self, parcel: str, place: int, *, departed: bool) -> None:
        before = self.open[parcel]
        at = instant(int(self.looks.at[place]))
        after = replace(before, last_observed_at=at)
        if departed:
            after = observed_again(before, self.trail[parcel], rule=self.rule)
        self.open[parcel] = after
        if what := differences(before, after):
            self.changes.append(Change(kind=ChangeKind.CHANGED, at=at, alert=after, what=what))

    def _close(self, parcel: str, row: int, place: int) -> None:
        at = instant(int(self.looks.at[place]))
        alert = replace(
            self.open.pop(parcel), state=AlertState.CLOSED, closed_at=at, closed_by="return"
        )
        self.closed[parcel] = alert
        self._clear(parcel, row)
        self.changes.append(Change(kind=ChangeKind.CLOSED, at=at, alert=alert))

    def _clear(self, parcel: str, row: int) -> None:
        self.watch.fresh[row] = 0
        self.trail.pop(parcel, None)


def _suddenness(watch: Watch, row: int, looks: Sequence[DepartedLook], rule: Rule) -> float | None:
    """Return the share of the leading shortfall that came with the first departing look.

    (E at it - mean E of the two looks before) / E at it; None without a look at most 20 days
    before it, or where either is unknown.
    """
    departing = [look for look in looks if look.departs]
    worst = max(departing, key=lambda look: look.score)
    measure = [watched.index for watched in rule.measures].index(worst.index)
    place = int(np.searchsorted(watch.at[row], departing[0].at))
    before = [at for at in range(max(place - LOOKS_BEFORE, 0), place) if watch.at[row, at] > 0]
    if not before or watch.at[row, place] - watch.at[row, before[-1]] > GAP_DAYS * DAY:
        return None
    here = float(watch.shortfalls[row, place, measure])
    earlier = watch.shortfalls[row, before, measure]
    earlier = earlier[np.isfinite(earlier)]
    if earlier.size == 0 or not np.isfinite(here) or here == 0.0:
        return None
    return (here - float(earlier.mean())) / here
