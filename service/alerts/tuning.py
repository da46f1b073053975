"""A rule's threshold, set by how often it would have alarmed in the finished seasons."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from service.alerts.chance import Odds
from service.alerts.replay import Alarms, PastLooks, replayed
from service.alerts.rules import Rule

THRESHOLDS: Final = tuple(round(0.1 * step, 1) for step in range(24, 71))
ALARMS_ALLOWED: Final = 0.8
"""Replayed alarms per 1,000 parcel-weeks."""
PARCEL_WEEKS_NEEDED: Final = 1_000.0
"""With less past than this, 0.8 alarms would be fewer than one."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Tuned:
    """What replaying the finished seasons says of a rule.

    Attributes
    ----------
    threshold
        The one in use; None = there is too little past, the default holds.
    replayed_rate
        Replayed alarms per 1,000 parcel-weeks at the threshold in use, without those that
        people confirmed or expected; None without a past.
    parcel_weeks, seasons
        How much was replayed.
    odds
        The replayed alarms, by which the chance of an alert is told.
    """

    threshold: float | None
    replayed_rate: float | None
    parcel_weeks: float
    seasons: tuple[int, ...]
    odds: Odds

    def to_dict(self) -> dict[str, Any]:
        """Return plain members, fit for JSON."""
        return {
            "threshold": self.threshold,
            "replayed_rate": self.replayed_rate,
            "parcel_weeks": self.parcel_weeks,
            "seasons": list(self.seasons),
            "parcels": self.odds.parcels,
            "strength": [round(each, 4) for each in self.odds.strength.tolist()],
            "day": self.odds.day.tolist(),
        }

    @classmethod
    def from_dict(cls, members: Mapping[str, Any]) -> "Tuned":
        """Return what `to_dict` wrote."""
        seasons = tuple(members["seasons"])
        return cls(
            threshold=members["threshold"],
            replayed_rate=members["replayed_rate"],
            parcel_weeks=members["parcel_weeks"],
            seasons=seasons,
            odds=Odds(
                seasons=len(seasons),
                parcels=members["parcels"],
                strength=np.array(members["strength"], dtype=np.float64),
                day=np.array(members["day"], dtype=np.int64),
            ),
        )

    @classmethod
    def nothing(cls) -> "Tuned":
        """Return what can be said without a past."""
        return cls(threshold=None, replayed_rate=None, parcel_weeks=0.0, seasons=(), odds=Odds())


def tune(rule: Rule, looks: PastLooks) -> Tuned:
    """Return the smallest threshold with few enough replayed alarms, and what it would have given.

    The highest of `THRESHOLDS` where none has. An operator's own threshold is replayed as it
    is.
    """
    weeks = looks.parcel_weeks
    if weeks < PARCEL_WEEKS_NEEDED:
        return Tuned.nothing()
    candidates = THRESHOLDS if rule.is_auto else (rule.thresholds.look,)
    alarms = replayed(looks, rule, candidates)
    counts = ~looks.is_known[alarms.look]
    number = np.bincount(alarms.threshold[counts], minlength=len(candidates))
    rates = 1_000.0 * number / weeks
    fitting = np.flatnonzero(rates <= ALARMS_ALLOWED)
    chosen = int(fitting[0]) if fitting.size else len(candidates) - 1
    seasons = tuple(int(each) for each in np.unique(looks.season[np.isfinite(looks.score)]))
    return Tuned(
        threshold=candidates[chosen],
        replayed_rate=float(rates[chosen]),
        parcel_weeks=weeks,
        seasons=seasons,
        odds=_odds(looks, alarms, counts & (alarms.threshold == chosen), len(seasons)),
    )


def _odds(looks: PastLooks, alarms: Alarms, chosen: Any, seasons: int) -> Odds:
    return Odds(
        seasons=seasons,
        parcels=looks.parcels_a_season,
        strength=np.round(alarms.strength[chosen], 4),
        day=looks.day[alarms.look[chosen]],
    )
