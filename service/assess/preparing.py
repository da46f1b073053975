"""What judging a season rests on, worked out from the seasons before it."""

import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.alerts.replay import PastLooks
from service.alerts.rules import RULES, Rule
from service.alerts.tuning import Tuned, looks_of_events, tune
from service.assess.state import NO_HOLDINGS, Holdings
from service.seasons.baseline import Baselines
from service.seasons.fitting import fit, ranked
from service.seasons.history import History
from service.seasons.past import Past

BASELINE_MEASURES: Final = (
    "ndvi",
    "ndmi",
    "nbr",
    "ndwi",
    "blue",
    "green",
    "red",
    "nir",
    "swir16",
    "swir22",
)
"""What the default rule, its screen for haze and its causes compare with a baseline."""
LOOK_MEASURES: Final = (*BASELINE_MEASURES, "ndsi")
"""What judging reads of a look: those, and one that tells of snow."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Prepared:
    """What judging a season rests on: baselines, and by rule what replaying the past says."""

    baselines: Baselines
    tuned: Mapping[str, Tuned]

    def to_arrays(self) -> dict[str, NDArray[Any]]:
        """Return plain arrays, fit for one npz file, that `from_arrays` reads."""
        told = json.dumps({rule: each.to_dict() for rule, each in sorted(self.tuned.items())})
        return {
            **self.baselines.to_arrays(),
            "tuned": np.frombuffer(told.encode(), dtype=np.uint8),
        }

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, NDArray[Any]]) -> "Prepared":
        """Return what `to_arrays` wrote."""
        others = {name: array for name, array in arrays.items() if name != "tuned"}
        told = json.loads(arrays["tuned"].tobytes()) if "tuned" in arrays else {}
        return cls(
            baselines=Baselines.from_arrays(others),
            tuned={rule: Tuned.from_dict(each) for rule, each in told.items()},
        )


def prepare(history: History, rules: Iterable[Rule], holdings: Holdings = NO_HOLDINGS) -> Prepared:
    """Fit baselines from finished seasons, and tune rules by replaying them.

    Parameters
    ----------
    rules
        Those that are judged.
    holdings
        Parcel → its holding, for rules that are limited to some.
    """
    fitted = fit(history)
    standard = past_looks(fitted.past, RULES["default"])
    return Prepared(
        baselines=ranked(fitted, without=looks_of_events(RULES["default"], standard)),
        tuned={rule.id: tune(rule, past_looks(fitted.past, rule, holdings)) for rule in rules},
    )


def past_looks(past: Past, rule: Rule, holdings: Holdings = NO_HOLDINGS) -> PastLooks:
    """Return the looks of the past as a rule scores them, each without its own season.

    Looks without a crop are not replayed: they have thresholds of their own.
    """
    score = past.scores(rule.signs, relieved=True)
    clear = past.clear_looks(score)
    labelled = np.array([bool(crop) for crop in past.crops], dtype=bool)
    score[~labelled[past.crop]] = np.nan
    better = {measure: -sign for measure, sign in rule.signs.items()}
    mirrored = past.scores(better, relieved=True)
    mirrored[np.isnan(score)] = np.nan
    return PastLooks(
        parcel=past.parcel,
        season=past.season,
        day=past.day,
        order=past.pass_at,
        score=score,
        mirrored=mirrored,
        may_open=_past_may_open(past, rule, holdings),
        is_weak=clear < rule.clear_cohort,
        is_known=past.is_known,
    )


def _past_may_open(past: Past, rule: Rule, holdings: Holdings) -> NDArray[np.bool_]:
    may_open = np.ones(past.crop.size, dtype=bool)
    if rule.crops is not None:
        may_open &= np.array([crop in rule.crops for crop in past.crops], dtype=bool)[past.crop]
    if rule.holdings is not None:
        own = [holdings.get(parcel) in rule.holdings for parcel in past.parcels]
        may_open &= np.array(own, dtype=bool)[past.parcel]
    if rule.months is not None:
        months = (past.pass_at.astype("datetime64[s]").astype("datetime64[M]").astype(int) % 12) + 1
        may_open &= np.isin(months, sorted(rule.months))
    return may_open
