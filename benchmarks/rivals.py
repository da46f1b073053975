"""What a method must beat: two plain ones on the same looks, with the same persistence.

Both see NDVI alone. A z-score compares a look with the parcel's own looks of past seasons near
that day of the season, of the same crop if it can; a fixed threshold with the parcel's own
newest looks. The z-score's threshold is the one that gives a stated rate of false alarms on the
very seasons it is scored on, which favours it.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import isnan
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchmarks.histories.making import History
from benchmarks.histories.optics import MEASURES, Figures
from benchmarks.scoring import Alarm, Tally, Truth, pooled, score

FALSE_ALARM_RATE: Final = 2.0
"""Per 1,000 parcel-weeks: what the z-score's threshold is set to."""
DROP: Final = 0.15
"""Fall of NDVI below the parcel's highest of the past 30 days that the fixed threshold takes."""
_DROP_DAYS: Final = 30
_WINDOW_DAYS: Final = 20
_LOOKS_NEEDED: Final = 5
_SPREAD_FLOOR: Final = 0.05
_TWICE: Final = 2
_THRESHOLDS: Final = np.concatenate([np.arange(1.0, 12.0, 0.1), np.arange(12.0, 60.5, 0.5)])
_NDVI: Final = MEASURES.index("ndvi")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ParcelLooks:
    """The judged looks of one parcel in order of time, and how unusual each is."""

    parcel: int
    day: Figures
    unusual: Figures


Scores = Sequence[ParcelLooks]


def z_scores(history: History) -> list[ParcelLooks]:
    """Return how far NDVI lies below the parcel's own past, in its standard deviations.

    Past looks within 20 days of the same day of the season count: those of the same crop where
    there are at least 5 of them, else those of all past seasons; with fewer a look is not
    judged (NaN). Width and floor are those with which it does best.
    """
    day = _days(history)
    of_season = day - history.season_starts[history.look_season]
    crop = history.crop[history.look_parcel, history.look_season]
    ndvi = history.values[:, _NDVI]
    found = []
    for parcel in range(len(history.refs)):
        mine = np.flatnonzero((history.look_parcel == parcel) & history.is_look)
        past, judged = mine[~history.is_judged[mine]], mine[history.is_judged[mine]]
        near = np.abs(of_season[judged][:, None] - of_season[past]) <= _WINDOW_DAYS
        alike = near & (crop[judged][:, None] == crop[past])
        near = np.where(alike.sum(axis=1, keepdims=True) >= _LOOKS_NEEDED, alike, near)
        found.append(
            ParcelLooks(
                parcel=parcel,
                day=day[judged].astype(np.float64),
                unusual=_below(ndvi[judged], ndvi[past], near),
            )
        )
    return found


def _below(seen: Figures, past: Figures, counts: NDArray[np.bool_]) -> Figures:
    """Return how far looks lie below the past ones that count (looks, past), in deviations."""
    count = counts.sum(axis=1)
    known = np.maximum(count, 1)
    mean = (counts * past).sum(axis=1) / known
    spread = np.sqrt((counts * (past - mean[:, None]) ** 2).sum(axis=1) / known)
    z = (mean - seen) / np.maximum(spread, _SPREAD_FLOOR)
    return np.where(count >= _LOOKS_NEEDED, z, np.nan)


def drops(history: History) -> list[ParcelLooks]:
    """Return how far NDVI lies below the parcel's highest look of the 30 days before."""
    day, ndvi = _days(history), history.values[:, _NDVI]
    found = []
    for parcel in range(len(history.refs)):
        mine = np.flatnonzero((history.look_parcel == parcel) & history.is_look & history.is_judged)
        on, seen = day[mine].astype(np.float64), ndvi[mine]
        since = on[:, None] - on
        before = (since > 0) & (since <= _DROP_DAYS)
        highest = np.where(before, seen, -np.inf).max(axis=1, initial=-np.inf)
        drop = np.where(np.isfinite(highest), highest - seen, np.nan)
        found.append(ParcelLooks(parcel=parcel, day=on, unusual=drop))
    return found


def alarms_of(scores: Scores, threshold: float) -> list[Alarm]:
    """Return alarms that open at two of the last three looks above a threshold.

    They close after two looks below half of it, as the service's own do.
    """
    return [alarm for looks in scores for alarm in _alarms(looks, threshold)]


def calibrated(
    histories: Sequence[History],
    scored: Callable[[History], Scores] = z_scores,
    *,
    rate: float = FALSE_ALARM_RATE,
) -> tuple[float, list[Tally]]:
    """Return the lowest threshold with at most this rate of false alarms, and its tallies."""
    scores = [scored(history) for history in histories]
    truths = [Truth.of(history) for history in histories]
    tallies: list[Tally] = []
    for threshold in _THRESHOLDS:
        tallies = [
            score(truth, alarms_of(each, float(threshold)))
            for truth, each in zip(truths, scores, strict=True)
        ]
        if pooled(tallies).false_alarm_rate <= rate:
            return float(threshold), tallies
    return float(_THRESHOLDS[-1]), tallies


def with_threshold(histories: Sequence[History], threshold: float = DROP) -> list[Tally]:
    """Return tallies of the fixed threshold on a fall of NDVI."""
    return [score(Truth.of(each), alarms_of(drops(each), threshold)) for each in histories]


def _days(history: History) -> Figures:
    days: Figures = np.array([one.day for one in history.passes])[history.look_pass]
    return days


def _alarms(looks: ParcelLooks, threshold: float) -> list[Alarm]:
    alarms = []
    window: list[bool] = []
    low = 0
    is_open = False
    for day, unusual in zip(looks.day.tolist(), looks.unusual.tolist(), strict=True):
        if isnan(unusual):
            continue
        window = [*window[-2:], unusual >= threshold]
        low = low + 1 if unusual < threshold / 2 else 0
        if is_open and low >= _TWICE:
            is_open, window = False, []
        elif not is_open and sum(window) >= _TWICE and window[-1]:
            is_open = True
            alarms.append(Alarm(parcel=looks.parcel, day=int(day)))
    return alarms
