"""Replaying finished seasons: which alarms a rule would have raised, for many thresholds.

The same steps as `persistence` takes look by look, over all parcels and thresholds at once,
without causes: only parcels that ever reached the lowest threshold are walked through.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service.alerts.chance import strength_of
from service.alerts.rules import Rule

Numbers = NDArray[np.int64]
Figures = NDArray[np.float64]
Flags = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PastLooks:
    """Scored looks of finished seasons, in any order; all arrays have shape (looks,).

    Attributes
    ----------
    parcel, season, day, order
        Codes of parcels, seasons, days of season, and numbers that ascend with acquisition.
    score, mirrored
        NaN where a look is not judged; the same with the better side taken for the worse.
    may_open
        Whether the rule lets an alert open there.
    is_weak
        Whether its cohort is too small for a single look to open one.
    is_known
        Whether a person said that the departure was real.
    """

    parcel: Numbers
    season: Numbers
    day: Numbers
    order: Numbers
    score: Figures
    mirrored: Figures
    may_open: Flags
    is_weak: Flags
    is_known: Flags

    @property
    def parcel_weeks(self) -> float:
        """Weeks in which parcels were watched: from first to last look of each season."""
        judged = np.isfinite(self.score) & self.may_open
        _, row = np.unique(self.rows[judged], return_inverse=True)
        day, size = self.day[judged], int(row.max(initial=-1)) + 1
        last, first = np.zeros(size, dtype=np.int64), np.full(size, np.iinfo(np.int64).max)
        np.maximum.at(last, row, day)
        np.minimum.at(first, row, day)
        return float((last - first + 1).sum()) / 7.0

    @property
    def parcels_a_season(self) -> float:
        """Parcels watched in a season, on average."""
        judged = np.isfinite(self.score)
        seasons = np.unique(self.season[judged]).size
        return np.unique(self.rows[judged]).size / seasons if seasons else 0.0

    @property
    def rows(self) -> Numbers:
        """One number for each parcel and season, shape (looks,)."""
        return self.season * (int(self.parcel.max(initial=0)) + 1) + self.parcel


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Alarms:
    """Replayed alarms; all arrays have shape (alarms,).

    `threshold` is the place of the threshold, `look` that of the look which opened it.
    """

    threshold: Numbers
    look: Numbers
    strength: Figures


def replayed(looks: PastLooks, rule: Rule, thresholds: Sequence[float]) -> Alarms:
    """Return the alarms that a rule would have raised at each of some thresholds.

    A single look opens at three times the threshold, or where the rule says.
    """
    table = _table(looks, lowest=min(thresholds))
    by_threshold = np.array(thresholds)
    single = np.array([rule.at(each).thresholds.single_look for each in thresholds])
    found = list(_walk(looks, table, rule, by_threshold, single))
    nothing = np.empty(0, dtype=np.int64)
    return Alarms(
        threshold=np.concatenate([nothing, *(each.threshold for each in found)]),
        look=np.concatenate([nothing, *(each.look for each in found)]),
        strength=np.concatenate([np.empty(0), *(each.strength for each in found)]),
    )


def looks_around(looks: PastLooks, rule: Rule, openings: Numbers) -> Flags:
    """Return which looks belong to alarms opened at some looks, shape (looks,).

    From as many looks before the opening as the rule's window holds to the last one before
    the parcel has returned; suspect looks between them belong to it as well.
    """
    found = np.zeros(looks.score.size, dtype=bool)
    _, row = np.unique(looks.rows, return_inverse=True)
    order = np.lexsort((looks.order, row))
    starts = np.searchsorted(row[order], np.arange(row.max(initial=-1) + 2))
    for opening in openings.tolist():
        own = order[starts[row[opening]] : starts[row[opening] + 1]]
        at = int(np.flatnonzero(own == opening)[0])
        found[own[max(at - rule.looks_window + 1, 0) : at + 1]] = True
        below = 0
        for look in own[at + 1 :].tolist():
            score = looks.score[look]
            if np.isfinite(score):
                below = below + 1 if score < rule.close_below else 0
            if below >= rule.looks_to_close:
                break
            found[look] = True
    return found


def _table(looks: PastLooks, *, lowest: float) -> Numbers:
    """Return the places of looks, a row per parcel and season, in order of time; -1 = none."""
    judged = np.flatnonzero(np.isfinite(looks.score))
    _, row = np.unique(looks.rows[judged], return_inverse=True)
    highest = np.full(row.max(initial=-1) + 1, -np.inf)
    np.maximum.at(highest, row, looks.score[judged])
    kept = highest[row] >= lowest
    judged, row = judged[kept], row[kept]
    order = np.lexsort((looks.order[judged], row))
    judged, row = judged[order], row[order]
    _, row, size = np.unique(row, return_inverse=True, return_counts=True)
    first = np.cumsum(size) - size
    column = np.arange(judged.size) - first[row]
    table = np.full((size.size, int(size.max(initial=0))), -1, dtype=np.int64)
    table[row, column] = judged
    return table


def _walk(
    looks: PastLooks, table: Numbers, rule: Rule, thresholds: Figures, single: Figures
) -> Iterator[Alarms]:
    rows, window = table.shape[0], rule.looks_window
    shape = (rows, thresholds.size)
    below, is_open = np.zeros(rows, dtype=np.int64), np.zeros(shape, dtype=bool)
    departs = np.zeros((window, *shape), dtype=bool)
    recent = np.full((rows, window), np.nan)
    for column in table.T:
        here = np.flatnonzero(column >= 0)
        look = column[here]
        score = looks.score[look]
        recent[here] = np.concatenate([recent[here, 1:], score[:, None]], axis=1)
        below[here] = np.where(score < rule.close_below, below[here] + 1, 0)
        departing = score[:, None] >= thresholds
        departs[:, here] = np.concatenate([departs[1:, here], departing[None]])
        returned = here[below[here] >= rule.looks_to_close]
        is_open[returned], departs[:, returned] = False, False
        enough = (departs[:, here].sum(axis=0) >= rule.looks_needed) & departing
        alone = (score[:, None] >= single) & ~looks.is_weak[look][:, None]
        opens = (enough | alone) & looks.may_open[look][:, None] & ~is_open[here]
        opens[below[here] >= rule.looks_to_close] = False
        at, threshold = np.nonzero(opens)
        is_open[here[at], threshold] = True
        if at.size:
            yield Alarms(threshold=threshold, look=look[at], strength=strength_of(recent[here[at]]))
