"""Strict scoring of alarms against the truth.

An alarm opened before the onset of its parcel's event is false and can't count as detection,
and so is one opened when the event is over. An event counts from the day on which it became
visible: one that comes at once must be opened at the second look of its parcel from that day
on, one that creeps at the fourth. Events that never became visible, or of which fewer than two
looks were had while they were visible, are counted apart: nobody could have seen them twice.
"""

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from math import sqrt
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchmarks.histories.crops import Places
from benchmarks.histories.events import CAUSES, Event
from benchmarks.histories.making import Drought, History

LOOKS_SUDDEN: Final = 2
LOOKS_SLOW: Final = 4
LOOKS_NEEDED: Final = 2
NOTICE_DAYS: Final = 30
NOMINAL: Final = 0.01
SURE: Final = 0.1
"""Alarms of at most this stated chance of being false should nearly all be true."""
CHANCE_EDGES: Final = (0.02, 0.05, 0.1, 0.2, 0.4, 1.0)
STEADY_CAUSES: Final = ("flood", "burn")
DAYS_A_WEEK: Final = 7


@dataclass(frozen=True, slots=True, kw_only=True)
class Alarm:
    """An alarm as it stood when it opened; `cause` and `chance` are None if none was stated."""

    parcel: int
    day: int
    cause: str | None = None
    chance: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Truth:
    """What happened in the judged season, and when parcels were looked at.

    `look_parcel` and `look_day` have shape (looks,), in order of time; `events` are those of
    the season, one to a parcel at most.
    """

    events: Sequence[Event]
    look_parcel: Places
    look_day: Places
    drought: Drought | None = None

    @classmethod
    def of(cls, history: History) -> "Truth":
        """Return the truth of a history's judged season."""
        some = history.is_judged & history.is_look
        days = np.array([one.day for one in history.passes], dtype=np.int64)
        last = len(history.seasons) - 1
        return cls(
            events=[event for event in history.events if event.season == last],
            look_parcel=history.look_parcel[some],
            look_day=days[history.look_pass[some]],
            drought=history.drought,
        )

    @property
    def parcel_weeks(self) -> int:
        """Count the weeks of parcels with a look in them."""
        weeks = np.stack([self.look_parcel, self.look_day // DAYS_A_WEEK])
        return int(np.unique(weeks, axis=1).shape[1])

    def looks_from(self, parcel: int, day: int) -> Places:
        """Return the days of a parcel's looks from a day on."""
        days: Places = self.look_day[(self.look_parcel == parcel) & (self.look_day >= day)]
        return days

    @property
    def is_event_free(self) -> NDArray[np.bool_]:
        """Which looks are of parcels that nothing has befallen by then, shape (looks,)."""
        onset = {event.parcel: event.onset for event in self.events}
        first = np.array([onset.get(int(parcel), np.inf) for parcel in self.look_parcel])
        free: NDArray[np.bool_] = self.look_day < first
        return free


@dataclass(frozen=True, slots=True, kw_only=True)
class Share:
    """So many out of so many."""

    hits: int = 0
    of: int = 0

    def __add__(self, other: "Share") -> "Share":
        return Share(hits=self.hits + other.hits, of=self.of + other.of)

    @property
    def value(self) -> float:
        """Return the share, NaN of nothing."""
        return self.hits / self.of if self.of else float("nan")

    @property
    def interval(self) -> tuple[float, float]:
        """Return the 95 % interval of Wilson (1927), (0, 1) of nothing."""
        if not self.of:
            return 0.0, 1.0
        z2, n = 1.96**2, self.of
        centre = (self.hits + z2 / 2) / (n + z2)
        half = 1.96 * sqrt(self.hits * (n - self.hits) / n + z2 / 4) / (n + z2)
        return max(0.0, centre - half), min(1.0, centre + half)


@dataclass(frozen=True, slots=True, kw_only=True)
class Tally:
    """What came of one or more seasons.

    Attributes
    ----------
    false_alarms, parcel_weeks
        Alarms of nothing; weeks of parcels with a look in them.
    sudden, slow
        Events opened in time, by kind.
    unseen
        Events that were not scored.
    causes
        (kind of event, cause named at opening) → alarms; the kind is ``nothing`` for a false
        alarm. The first true alarm of each event counts.
    chances
        (stated chance of being false, whether the alarm was true), of all alarms with one.
    nominal
        By season: event-free looks with a p-value of at most 1 %; empty if none was stated.
    notices
        Regional notices opened, by season; empty if they were not asked for.
    droughts
        Seasons of drought with a notice within 30 days of showing.
    """

    false_alarms: int = 0
    parcel_weeks: int = 0
    seasons: int = 1
    sudden: dict[str, Share] = field(default_factory=dict)
    slow: dict[str, Share] = field(default_factory=dict)
    unseen: int = 0
    causes: Counter[tuple[str, str]] = field(default_factory=Counter)
    chances: tuple[tuple[float, bool], ...] = ()
    nominal: tuple[Share, ...] = ()
    notices: tuple[int, ...] = ()
    droughts: Share = Share()

    @property
    def false_alarm_rate(self) -> float:
        """Return false alarms per 1,000 parcel-weeks."""
        return 1000.0 * self.false_alarms / self.parcel_weeks if self.parcel_weeks else 0.0

    @property
    def false_alarm_error(self) -> float:
        """Return the standard error of the rate, alarms taken as independent (Poisson)."""
        weeks = max(self.parcel_weeks, 1)
        return 1000.0 * sqrt(max(self.false_alarms, 1)) / weeks

    @property
    def sure_and_true(self) -> Share:
        """Return which of the alarms stated to be sure are true."""
        sure = [true for chance, true in self.chances if chance <= SURE]
        return Share(hits=sum(sure), of=len(sure))

    @property
    def cause_right(self) -> Share:
        """Return of how many true alarms the cause was right at opening."""
        told = {pair: n for pair, n in self.causes.items() if pair[0] != _NOTHING}
        right = sum(n for (kind, cause), n in told.items() if CAUSES[kind] == cause)
        return Share(hits=right, of=sum(told.values()))

    @property
    def steady_precision(self) -> Share:
        """Return how many of the events called flood or burn are what they were called."""
        told = [
            (CAUSES[kind] == cause, n)
            for (kind, cause), n in self.causes.items()
            if kind != _NOTHING and cause in STEADY_CAUSES
        ]
        return Share(hits=sum(n for right, n in told if right), of=sum(n for _, n in told))

    def reliability(self) -> list[tuple[float, Share, float]]:
        """Return by upper edge of stated chance: true alarms, and the mean of what was stated."""
        rows = []
        low = -1.0
        for high in CHANCE_EDGES:
            some = [(chance, true) for chance, true in self.chances if low < chance <= high]
            if some:
                share = Share(hits=sum(true for _, true in some), of=len(some))
                rows.append((high, share, sum(chance for chance, _ in some) / len(some)))
            low = high
        return rows


_NOTHING: Final = "nothing"


def score(
    truth: Truth,
    alarms: Iterable[Alarm],
    *,
    p_values: NDArray[np.float64] | None = None,
    notices: Sequence[int] | None = None,
) -> Tally:
    """Score the alarms of one judged season.

    Parameters
    ----------
    p_values
        Of the looks of `truth`, NaN = not judged; None if the method states none.
    notices
        Days on which regional notices opened; None if the method has none.
    """
    in_order = sorted(alarms, key=lambda alarm: (alarm.day, alarm.parcel))
    events = {event.parcel: event for event in truth.events}
    found: dict[int, Alarm] = {}
    causes: Counter[tuple[str, str]] = Counter()
    chances = []
    false_alarms = 0
    for alarm in in_order:
        event = events.get(alarm.parcel)
        is_true = event is not None and is_of(event, alarm)
        if alarm.chance is not None:
            chances.append((alarm.chance, is_true))
        is_first = alarm.parcel not in found
        kind = event.kind if is_true and event is not None else _NOTHING
        if is_true:
            found.setdefault(alarm.parcel, alarm)
        else:
            false_alarms += 1
        if alarm.cause is not None and (not is_true or is_first):
            causes[kind, alarm.cause] += 1
    sudden, slow, unseen = _detected(truth, found)
    opened = None if notices is None else sorted(notices)
    return Tally(
        false_alarms=false_alarms,
        parcel_weeks=truth.parcel_weeks,
        sudden=sudden,
        slow=slow,
        unseen=unseen,
        causes=causes,
        chances=tuple(chances),
        nominal=() if p_values is None else (_nominal(truth, p_values),),
        notices=() if opened is None else (len(opened),),
        droughts=_warned(truth.drought, opened),
    )


def is_of(event: Event, alarm: Alarm) -> bool:
    """Whether an alarm of its parcel may be of an event: opened from its onset to its end."""
    return event.over is not None and event.onset <= alarm.day <= event.over


def pooled(tallies: Sequence[Tally]) -> Tally:
    """Return what came of several seasons together."""
    causes: Counter[tuple[str, str]] = Counter()
    for tally in tallies:
        causes.update(tally.causes)
    return Tally(
        false_alarms=sum(tally.false_alarms for tally in tallies),
        parcel_weeks=sum(tally.parcel_weeks for tally in tallies),
        seasons=sum(tally.seasons for tally in tallies),
        sudden=_added([tally.sudden for tally in tallies]),
        slow=_added([tally.slow for tally in tallies]),
        unseen=sum(tally.unseen for tally in tallies),
        causes=causes,
        chances=tuple(each for tally in tallies for each in tally.chances),
        nominal=tuple(each for tally in tallies for each in tally.nominal),
        notices=tuple(each for tally in tallies for each in tally.notices),
        droughts=sum((tally.droughts for tally in tallies), Share()),
    )


def total(by_kind: dict[str, Share]) -> Share:
    """Return the shares of all kinds together."""
    return sum(by_kind.values(), Share())


def _detected(
    truth: Truth, found: dict[int, Alarm]
) -> tuple[dict[str, Share], dict[str, Share], int]:
    """Return by kind which events were opened in time, and how many could not be scored."""
    sudden: dict[str, Share] = {}
    slow: dict[str, Share] = {}
    unseen = 0
    for event in truth.events:
        if event.visible is None or event.faded is None:
            unseen += 1
            continue
        days = truth.looks_from(event.parcel, event.visible)
        if int((days <= event.faded).sum()) < LOOKS_NEEDED:
            unseen += 1
            continue
        looks = LOOKS_SUDDEN if event.is_sudden else LOOKS_SLOW
        last = int(days[min(looks, days.size) - 1])
        alarm = found.get(event.parcel)
        hit = alarm is not None and alarm.day <= last
        kinds = sudden if event.is_sudden else slow
        kinds[event.kind] = kinds.get(event.kind, Share()) + Share(hits=int(hit), of=1)
    return sudden, slow, unseen


def _nominal(truth: Truth, p_values: NDArray[np.float64]) -> Share:
    judged = truth.is_event_free & np.isfinite(p_values)
    return Share(hits=int((p_values[judged] <= NOMINAL).sum()), of=int(judged.sum()))


def _warned(drought: Drought | None, notices: Sequence[int] | None) -> Share:
    """Return whether a drought had a notice in time; one from before its onset is no warning."""
    if drought is None or notices is None:
        return Share()
    in_time = [day for day in notices if drought.onset <= day <= drought.visible + NOTICE_DAYS]
    return Share(hits=int(bool(in_time)), of=1)


def _added(shares: Sequence[dict[str, Share]]) -> dict[str, Share]:
    added: dict[str, Share] = {}
    for each in shares:
        for kind, share in each.items():
            added[kind] = added.get(kind, Share()) + share
    return added
