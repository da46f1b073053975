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
    Alert,
    AlertState,
    Change,
    ChangeKind,
    differences,
    observed_again,
    opened,
)
from service.alerts.chance import strength_of
from service.alerts.explained import Explained, Known
from service.alerts.instants import DAY, instant
from service.alerts.looks import DepartedLook
from service.alerts.rules import Rule
from service.alerts.watch import LOOKS_BEFORE, Watch

GAP_DAYS: Final = 20
"""After a longer gap before the first departing look nobody knows whether it was sudden."""
BEST_DAYS: Final = 25


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Scored:
    """The judged looks of one pass.

    Attributes
    ----------
    opening, day
        Acquisition time of the pass, and its day of season.
    parcels, cohorts
        One look each, and the name of the crop or group that each was compared with.
    at
        Acquisition of each look, microseconds since 1970, shape (looks,).
    score
        Shape (looks,).
    threshold, single_look
        Of each look, shape (looks,); a single look opens nothing where that is infinite.
    cause_from
        Score from which on a look tells of a cause, shape (looks,).
    may_open
        Whether the rule lets an alert open at each look, shape (looks,).
    cover
        Observed NDVI, NaN = unknown, shape (looks,).
    shortfalls
        In the rule's measures, NaN = unknown, shape (looks, measures).
    describe
        Tells more of the look at a place; asked only for looks that departed.
    """

    opening: datetime
    day: int
    parcels: Sequence[str]
    cohorts: Sequence[str]
    at: NDArray[np.int64]
    score: NDArray[np.float64]
    threshold: NDArray[np.float64]
    single_look: NDArray[np.float64]
    cause_from: NDArray[np.float64]
    may_open: NDArray[np.bool_]
    cover: NDArray[np.float64]
    shortfalls: NDArray[np.float64]
    describe: Callable[[int], DepartedLook]


@dataclass(frozen=True, slots=True, kw_only=True)
class Watched:
    """What a pass did: the memory after it, changes of alerts, and alerts held back."""

    watch: Watch
    changes: list[Change]
    explained: list[Explained]


def watch_pass(watch: Watch, looks: Scored, rule: Rule, known: Known) -> Watched:
    """Return the memory after a pass, and what it did to alerts, by parcel in order of name."""
    watch = watch.with_places(looks.parcels)
    rows = np.fromiter(
        (watch.places[parcel] for parcel in looks.parcels), np.int64, len(looks.parcels)
    )
    watch = _remembered(watch, looks, rows, rule)
    step = _Step(watch=watch, looks=looks, rule=rule, known=known)
    for place in _touched(watch, looks, rows, rule):
        step.take(int(place), int(rows[place]))
    step.tell_new()
    step.changes.sort(key=lambda change: change.alert.parcel)
    step.explained.sort(key=lambda each: each.parcel)
    after = replace(
        watch,
        strengths=step.strengths,
        trail=step.trail,
        held=frozenset(step.held),
        open=step.open,
        closed=step.closed,
    )
    return Watched(watch=after, changes=step.changes, explained=step.explained)


def _remembered(watch: Watch, looks: Scored, rows: NDArray[np.int64], rule: Rule) -> Watch:
    """Return a copy with the looks of the pass as the newest."""
    newest = {
        "at": looks.at,
        "cover": looks.cover,
        "score": looks.score,
        "departs": looks.score >= looks.threshold,
        "shortfalls": looks.shortfalls,
    }
    moved = {name: getattr(watch, name).copy() for name in newest}
    for name, array in moved.items():
        array[rows] = np.concatenate([array[rows, 1:], newest[name][:, None]], axis=1)
    fresh, below = watch.fresh.copy(), watch.below.copy()
    fresh[rows] = np.minimum(fresh[rows] + 1, rule.looks_window)
    below[rows] = np.where(looks.score < rule.close_below, below[rows] + 1, 0)
    return replace(watch, **moved, fresh=fresh, below=below, quiet=watch.quiet.copy())


def _touched(watch: Watch, looks: Scored, rows: NDArray[np.int64], rule: Rule) -> NDArray[np.int64]:
    """Return the places of looks that departed, or whose parcel has something to end."""
    busy = watch.open.keys() | watch.held
    is_busy = np.fromiter((p in busy for p in looks.parcels), bool, len(looks.parcels))
    # A window that holds something ends with the return, too.
    ends = (watch.below[rows] >= rule.looks_to_close) & (
        watch.quiet[rows] | watch.departs[rows].any(axis=1)
    )
    return np.flatnonzero(is_busy | ends | (looks.score >= looks.cause_from))


class _Step:
    """One pass over the parcels that need more than arrays; its watch is its own copy."""

    def __init__(self, *, watch: Watch, looks: Scored, rule: Rule, known: Known) -> None:
        self.watch, self.looks, self.rule, self.known = watch, looks, rule, known
        self.trail, self.open, self.closed = dict(watch.trail), dict(watch.open), dict(watch.closed)
        self.held, self.strengths = set(watch.held), watch.strengths
        self.new: list[Alert] = []
        self.changes: list[Change] = []
        self.explained: list[Explained] = []

    def take(self, place: int, row: int) -> None:
        """Let one look open, change or close the alert of its parcel."""
        parcel = self.looks.parcels[place]
        departed = self.looks.score[place] >= self.looks.cause_from[place]
        if departed:
            kept = (*self.trail.get(parcel, ()), self._described(place, row))
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
            self._open(parcel, place, row)

    def tell_new(self) -> None:
        """Open the alerts of the pass, each with its chance among all of the season so far."""
        self.strengths += tuple(sorted(alert.strength for alert in self.new))
        for alert in self.new:
            chance = self.known.odds.chance(
                alert.strength,
                self.strengths,
                day=self.looks.day,
                parcels=len(self.watch.places),
                cause=alert.cause.kind,
            )
            told = replace(alert, chance=chance)
            self.open[alert.parcel] = told
            self.changes.append(Change(kind=ChangeKind.OPENED, at=told.opened_at, alert=told))

    def _described(self, place: int, row: int) -> DepartedLook:
        at, cover = self.watch.at[row, :-1], self.watch.cover[row, :-1]
        recent = cover[(at > 0) & (at >= self.looks.at[place] - BEST_DAYS * DAY)]
        recent = recent[np.isfinite(recent)]
        best = float(recent.max()) if recent.size else None
        return replace(self.looks.describe(place), best=best)

    def _opens(self, place: int, row: int) -> bool:
        if not self.looks.may_open[place]:
            return False
        window = self.watch.departs[row, -int(self.watch.fresh[row]) :]
        enough = np.count_nonzero(window) >= self.rule.looks_needed and bool(window[-1])
        return bool(enough or self.looks.score[place] >= self.looks.single_look[place])

    def _open(self, parcel: str, place: int, row: int) -> None:
        fresh = int(self.watch.fresh[row])
        looks = [look for look in self.trail[parcel] if look.at >= self.watch.at[row, -fresh]]
        alert = opened(
            parcel,
            looks,
            rule=self.rule,
            opening=self.looks.opening,
            suddenness=_suddenness(self.watch, row, looks, self.rule),
            strength=float(strength_of(self.watch.score[row, -self.rule.looks_window :])),
        )
        explained = self.known.explain(
            alert,
            cohort=self.looks.cohorts[place],
            threshold=float(self.looks.threshold[place]),
        )
        if explained is None:
            self.held.discard(parcel)
            self.new.append(replace(alert, diary=self.known.beside(alert)))
            return
        if parcel not in self.held:
            self.explained.append(explained)
        self.held.add(parcel)
        self.watch.quiet[row] = explained.lasts

    def _observe(self, parcel: str, place: int, *, departed: bool) -> None:
        before = self.open[parcel]
        at = instant(int(self.looks.at[place]))
        after = replace(before, last_observed_at=at)
        if departed:
            after = observed_again(before, self.trail[parcel], rule=self.rule)
        self.open[parcel] = after = replace(after, diary=self.known.beside(after))
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
        self.held.discard(parcel)
        self.trail.pop(parcel, None)


def _suddenness(watch: Watch, row: int, looks: Sequence[DepartedLook], rule: Rule) -> float | None:
    """Return the share of the leading shortfall that came with the first departing look.

    (E at it - mean E of the two looks before) / E at it; None without a look at most 20 days
    before it, or where either is unknown.
    """
    departing = [look for look in looks if look.departs]
    worst = max(departing, key=lambda look: look.score)
    measure = [watched.index for watched in rule.measures].index(worst.index)
    at = watch.at[row, -watch.looks :]
    place = int(np.searchsorted(at, departing[0].at))
    before = [each for each in range(max(place - LOOKS_BEFORE, 0), place) if at[each] > 0]
    if not before or at[place] - at[before[-1]] > GAP_DAYS * DAY:
        return None
    here = float(watch.shortfalls[row, place, measure])
    earlier = watch.shortfalls[row, before, measure]
    earlier = earlier[np.isfinite(earlier)]
    if earlier.size == 0 or not np.isfinite(here) or here == 0.0:
        return None
    return (here - float(earlier.mean())) / here
