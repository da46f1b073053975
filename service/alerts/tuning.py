"""A rule's threshold, set by how often it would have alarmed in the finished seasons."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.alerts.chance import Odds, odds_of_false
from service.alerts.replay import Alarms, PastLooks, looks_around, replayed
from service.alerts.rules import Rule

THRESHOLDS: Final = tuple(round(0.1 * step, 1) for step in range(24, 71))
ALARMS_ALLOWED: Final = 0.8
"""Replayed alarms per 1,000 parcel-weeks."""
PARCEL_WEEKS_NEEDED: Final = 1_000.0
"""With less past than this, 0.8 alarms would be fewer than one."""
EVEN_ODDS: Final = 0.75


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Tuned:
    """What replaying the finished seasons says of a rule.

    Attributes
    ----------
    threshold
        The one in use; None = there is too little past, the default holds.
    replayed_rate
        False alarms per 1,000 parcel-weeks that the replay makes likely at the threshold in
        use; None without a past.
    alarm_rate
        All alarms of the replay per 1,000 parcel-weeks, real ones included.
    parcel_weeks, seasons
        How much was replayed.
    odds
        The replayed alarms, by which the chance of an alert is told.
    """

    threshold: float | None
    replayed_rate: float | None
    alarm_rate: float | None
    parcel_weeks: float
    seasons: tuple[int, ...]
    odds: Odds

    def to_dict(self) -> dict[str, Any]:
        """Return plain members, fit for JSON."""
        return {
            "threshold": self.threshold,
            "replayed_rate": self.replayed_rate,
            "alarm_rate": self.alarm_rate,
            "parcel_weeks": self.parcel_weeks,
            "seasons": list(self.seasons),
            "parcels": self.odds.parcels,
            "strength": [round(each, 4) for each in self.odds.strength.tolist()],
            "day": self.odds.day.tolist(),
            "weight": [round(each, 4) for each in self.odds.weight.tolist()],
        }

    @classmethod
    def from_dict(cls, members: Mapping[str, Any]) -> "Tuned":
        """Return what `to_dict` wrote."""
        seasons = tuple(members["seasons"])
        return cls(
            threshold=members["threshold"],
            replayed_rate=members["replayed_rate"],
            alarm_rate=members["alarm_rate"],
            parcel_weeks=members["parcel_weeks"],
            seasons=seasons,
            odds=Odds(
                seasons=len(seasons),
                parcels=members["parcels"],
                strength=np.array(members["strength"], dtype=np.float64),
                day=np.array(members["day"], dtype=np.int64),
                weight=np.array(members["weight"], dtype=np.float64),
            ),
        )

    @classmethod
    def nothing(cls) -> "Tuned":
        """Return what can be said without a past."""
        return cls(
            threshold=None,
            replayed_rate=None,
            alarm_rate=None,
            parcel_weeks=0.0,
            seasons=(),
            odds=Odds(),
        )


def tune(rule: Rule, looks: PastLooks) -> Tuned:
    """Return the smallest threshold with few enough replayed alarms, and what it would have given.

    Each replayed alarm counts by the odds that it was false: those that people confirmed or
    expected not at all, others by how often the better side gave alarms as strong. The
    highest of `THRESHOLDS` is taken where none has few enough. An operator's own threshold is
    replayed as it is.
    """
    weeks = looks.parcel_weeks
    if weeks < PARCEL_WEEKS_NEEDED:
        return Tuned.nothing()
    candidates = THRESHOLDS if rule.is_auto else (rule.thresholds.look,)
    alarms, weight = _weighed(rule, looks, candidates)
    number = np.bincount(alarms.threshold, weight, minlength=len(candidates))
    rates = 1_000.0 * number / weeks
    fitting = np.flatnonzero(rates <= ALARMS_ALLOWED)
    chosen = int(fitting[0]) if fitting.size else len(candidates) - 1
    seasons = tuple(int(each) for each in np.unique(looks.season[np.isfinite(looks.score)]))
    here = alarms.threshold == chosen
    return Tuned(
        threshold=candidates[chosen],
        replayed_rate=float(rates[chosen]),
        alarm_rate=1_000.0 * int(here.sum()) / weeks,
        parcel_weeks=weeks,
        seasons=seasons,
        odds=Odds(
            seasons=len(seasons),
            parcels=looks.parcels_a_season,
            strength=np.round(alarms.strength[here], 4),
            day=looks.day[alarms.look[here]],
            weight=np.round(weight[here], 4),
        ),
    )


def looks_of_events(rule: Rule, looks: PastLooks) -> NDArray[np.bool_]:
    """Return which looks of the past belong to departures that were likely real, shape (looks,).

    By the rule's threshold as it stands: from the departing looks of an alarm that is rather
    real than false to the look at which its parcel has returned.
    """
    alarms, weight = _weighed(rule, looks, (rule.thresholds.look,))
    return looks_around(looks, rule, alarms.look[weight < EVEN_ODDS])


def _weighed(
    rule: Rule, looks: PastLooks, thresholds: Sequence[float]
) -> tuple[Alarms, NDArray[np.float64]]:
    """Return replayed alarms, and the odds that each was a false one."""
    alarms = replayed(looks, rule, thresholds)
    decoys = replayed(replace(looks, score=looks.mirrored), rule, thresholds)
    weight = np.zeros(alarms.look.size)
    for at in range(len(thresholds)):
        here = (alarms.threshold == at) & ~looks.is_known[alarms.look]
        weight[here] = odds_of_false(alarms.strength[here], decoys.strength[decoys.threshold == at])
    return alarms, weight
