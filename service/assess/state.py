"""What judging remembers, what it is told beside the looks, and what one step of it gives."""

import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.alerts.alert import Change
from service.alerts.chance import Odds
from service.alerts.diary import Diary, DiaryEntry
from service.alerts.explained import Explained
from service.alerts.notices import Notice, Region
from service.alerts.rules import Rule
from service.alerts.tuning import Tuned
from service.alerts.watch import Watch
from service.seasons.cohort import Carried
from service.seasons.judgement import Judgements

Holdings = Mapping[str, str | None]
"""Parcel → the holding that it belongs to."""
NO_HOLDINGS: Final[Holdings] = {}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class State:
    """All that judging remembers between passes.

    Attributes
    ----------
    season
        Crop year of the last pass, None before the first.
    baseline
        Version of the baselines it was judged by.
    carried
        Crop → what its cohort hands on.
    region
        What is remembered of the region of the parcels.
    watch
        The rule's memory of each parcel.
    """

    season: int | None
    baseline: str | None
    carried: Mapping[str, Carried]
    region: Region
    watch: Watch

    @classmethod
    def start(cls, rule: Rule, *, region: str = "") -> "State":
        """Return the state before the first pass; `region` is part of notices' identity."""
        return cls(
            season=None,
            baseline=None,
            carried={},
            region=Region(name=region),
            watch=Watch.nothing(rule),
        )

    def to_arrays(self) -> dict[str, NDArray[Any]]:
        """Return plain arrays, fit for one npz file, that `from_arrays` reads."""
        told = {
            "season": self.season,
            "baseline": self.baseline,
            "region": self.region.as_dict(),
            "days": {crop: each.day for crop, each in self.carried.items()},
        }
        crops = sorted(self.carried)
        nothing = np.empty((0, 0))
        return {
            "state": np.frombuffer(json.dumps(told).encode(), dtype=np.uint8),
            "crops": np.array(crops, dtype=np.str_),
            "levels": np.stack([self.carried[c].level for c in crops]) if crops else nothing,
            "medians": np.stack([self.carried[c].median for c in crops]) if crops else nothing,
            **{f"watch_{name}": array for name, array in self.watch.to_arrays().items()},
        }

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, NDArray[Any]]) -> "State":
        """Return the state that `to_arrays` wrote, for the same rule."""
        told = json.loads(arrays["state"].tobytes())
        each = zip(arrays["crops"].tolist(), arrays["levels"], arrays["medians"], strict=True)
        watch = {
            name.removeprefix("watch_"): array
            for name, array in arrays.items()
            if name.startswith("watch_")
        }
        return cls(
            season=told["season"],
            baseline=told["baseline"],
            carried={
                crop: Carried(level=level, median=median, day=told["days"][crop])
                for crop, level, median in each
            },
            region=Region.from_dict(told["region"]),
            watch=Watch.from_arrays(watch),
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Step:
    """One step of a fold; `judgements` is None where only persons acted.

    `explained` are alerts that were held back, `notices` those that opened, changed or closed.
    """

    state: State
    judgements: Judgements | None
    changes: Sequence[Change]
    explained: Sequence[Explained] = ()
    notices: Sequence[Notice] = ()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Beside:
    """A rule with its threshold, and all that is known beside the looks."""

    rule: Rule
    odds: Odds
    diary: Diary
    holdings: Holdings

    @classmethod
    def of(
        cls,
        rule: Rule,
        tuned: Tuned | None = None,
        diary: Iterable[DiaryEntry] = (),
        holdings: Holdings = NO_HOLDINGS,
    ) -> "Beside":
        """Return a rule beside what is known."""
        told = tuned or Tuned.nothing()
        return cls(
            rule=rule if told.threshold is None else rule.at(told.threshold),
            odds=told.odds,
            diary=Diary(diary),
            holdings=holdings,
        )
