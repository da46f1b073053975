"""Scored looks by hand, for tests of what opens and closes alerts."""

from collections.abc import Mapping, Sequence
from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.alerts.alert import Change
from service.alerts.explained import Known
from service.alerts.instants import microseconds
from service.alerts.looks import DepartedLook
from service.alerts.persistence import Scored, watch_pass
from service.alerts.rules import RULES, Rule
from service.alerts.watch import Watch

RULE = RULES["default"]
FIRST = datetime(2024, 5, 1, 10, 30, tzinfo=UTC)


def on(day: int) -> datetime:
    """Return the instant of a pass, days after the first."""
    return FIRST + timedelta(days=day)


def scored(
    day: int,
    scores: Mapping[str, float],
    *,
    shortfalls: Mapping[str, float] | None = None,
    is_weak: bool = False,
    rule: Rule = RULE,
) -> Scored:
    """Return looks with given scores, all led by NDVI.

    `shortfalls` by measure hold for every look; without them NDVI falls short by a twentieth of
    the score.
    """
    parcels = list(scores)
    values = np.array([scores[parcel] for parcel in parcels])

    def short(at: int) -> dict[str, float]:
        return dict(shortfalls or {"ndvi": -float(values[at]) / 20})

    def describe(at: int) -> DepartedLook:
        return DepartedLook(
            at=microseconds(on(day)),
            scene=f"scene-{day}",
            crop="barley",
            score=float(values[at]),
            departs=bool(values[at] >= rule.thresholds.look),
            index="ndvi",
            observed={name: 0.8 + each for name, each in short(at).items()},
            expected=dict.fromkeys(short(at), 0.8),
            shortfall=short(at),
            departures={"ndvi": -float(values[at])},
            water=None,
            basis="own",
            is_new_crop=False,
            is_weak=is_weak,
            low_power=False,
            baseline="v1",
        )

    names = [watched.index for watched in rule.measures]
    size = len(parcels)
    return Scored(
        opening=on(day),
        day=200 + day,
        parcels=parcels,
        cohorts=["barley"] * len(parcels),
        at=np.full(size, microseconds(on(day))),
        score=values,
        threshold=np.full(size, rule.thresholds.look),
        single_look=np.full(size, np.inf if is_weak else rule.thresholds.single_look),
        cause_from=np.full(size, rule.thresholds.cause),
        may_open=np.ones(size, dtype=bool),
        cover=0.8 + np.array([short(at).get("ndvi", np.nan) for at in range(size)]),
        shortfalls=np.array([[short(at).get(n, np.nan) for n in names] for at in range(size)]),
        describe=describe,
    )


def watched(
    scores: Sequence[float],
    *,
    watch: Watch | None = None,
    first_day: int = 0,
    is_weak: bool = False,
    rule: Rule = RULE,
    known: Known | None = None,
) -> tuple[Watch, list[Change]]:
    """Return the memory of parcel A, and all changes, after looks every five days."""
    watch = watch or Watch.nothing(rule)
    changes: list[Change] = []
    for at, score in enumerate(scores):
        looks = scored(first_day + at * 5, {"A": score}, is_weak=is_weak, rule=rule)
        after = watch_pass(watch, looks, rule, known or Known())
        watch = after.watch
        changes += after.changes
    return watch, changes


def is_same(first: Mapping[str, NDArray[Any]], second: Mapping[str, NDArray[Any]]) -> bool:
    """Whether two memories hold the same, name by name and bit by bit."""
    return first.keys() == second.keys() and all(
        array.dtype == second[name].dtype
        and array.shape == second[name].shape
        and array.tobytes() == second[name].tobytes()
        for name, array in first.items()
    )
