"""From the judgements of a pass to the looks that a rule watches."""

from collections.abc import Mapping, Sequence
from math import isfinite
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.alerts.instants import microseconds
from service.alerts.looks import DepartedLook
from service.alerts.persistence import Scored
from service.alerts.rules import CAUSE_SHARE, Rule, Thresholds
from service.assess.state import Beside
from service.seasons.judgement import Judgements, OnePass

Figures = NDArray[np.float64]
COVER: Final = "ndvi"


def scored_looks(one: OnePass, judgements: Judgements, beside: Beside) -> Scored:
    """Return the judged looks of a pass with the thresholds that a rule has for each."""
    rule = beside.rule
    judged = np.flatnonzero(np.isfinite(judgements.score))
    limits = _limits(judgements, rule)[judged]
    shortfalls = np.full((judged.size, len(rule.measures)), np.nan)
    for at, watched in enumerate(rule.measures):
        if watched.index in judgements.measures:
            column = judgements.measures.index(watched.index)
            shortfalls[:, at] = judgements.shortfall[judged, column]
    cover = column_of(judgements, COVER)
    extra = _extra(one, judgements)

    def describe(at: int) -> DepartedLook:
        return _departed(one, judgements, int(judged[at]), rule, extra)

    return Scored(
        opening=one.acquired_at,
        day=one.day,
        parcels=[one.parcels[int(look)] for look in judged],
        cohorts=[one.crops[int(look)] or "" for look in judged],
        at=np.fromiter(
            (microseconds(one.looked_at[int(look)]) for look in judged), np.int64, judged.size
        ),
        score=judgements.score[judged],
        threshold=limits[:, 0],
        single_look=np.where(judgements.is_weak[judged], np.inf, limits[:, 1]),
        cause_from=CAUSE_SHARE * limits[:, 0],
        may_open=_may_open(one, judged, beside),
        cover=np.full(judged.size, np.nan) if cover is None else judgements.observed[judged, cover],
        shortfalls=shortfalls,
        describe=describe,
    )


def _limits(judgements: Judgements, rule: Rule) -> Figures:
    """Return threshold and single-look threshold of every look, shape (looks, 2)."""
    limits = np.empty((judgements.score.size, 2))
    limits[:] = (rule.thresholds.look, rule.thresholds.single_look)
    limits[judgements.is_new_crop] = (rule.new_crop.look, rule.new_crop.single_look)
    limits[judgements.low_power] = (rule.low_power.look, rule.low_power.single_look)
    return limits


def _may_open(one: OnePass, judged: NDArray[np.int64], beside: Beside) -> NDArray[np.bool_]:
    rule = beside.rule
    if rule.months is not None and one.acquired_at.month not in rule.months:
        return np.zeros(judged.size, dtype=bool)
    return np.fromiter(
        (
            (rule.crops is None or one.grown[int(look)] in rule.crops)
            and (
                rule.holdings is None
                or beside.holdings.get(one.parcels[int(look)]) in rule.holdings
            )
            for look in judged
        ),
        bool,
        judged.size,
    )


def column_of(judgements: Judgements, measure: str) -> int | None:
    """Return the place of a measure in judgements."""
    return judgements.measures.index(measure) if measure in judgements.measures else None


def _extra(one: OnePass, judgements: Judgements) -> Mapping[str, Figures]:
    """Return the measures of a pass that have no baseline."""
    values = np.asarray(one.values)
    return {
        name: values[:, at]
        for at, name in enumerate(one.measures)
        if name not in judgements.measures
    }


def _departed(
    one: OnePass, judgements: Judgements, look: int, rule: Rule, extra: Mapping[str, Figures]
) -> DepartedLook:
    measures = judgements.measures
    index = measures[int(judgements.leading[look])]
    signs, score = rule.signs, float(judgements.score[look])
    departures = _known(measures, judgements.departure[look])
    observed = _known(measures, judgements.observed[look])
    beyond = {name: float(values[look]) for name, values in extra.items()}
    cover = column_of(judgements, COVER)
    rising = np.nan if cover is None else judgements.rising[look, cover]
    return DepartedLook(
        at=microseconds(one.looked_at[look]),
        scene=one.scenes[look],
        crop=one.grown[look] or "",
        score=score,
        departs=bool(score >= _limits_of(judgements, look, rule).look),
        index=index,
        observed=observed | {name: value for name, value in beyond.items() if isfinite(value)},
        expected=_known(measures, judgements.expected[look]),
        shortfall=_known(measures, judgements.shortfall[look]),
        departures={name: z for name, z in departures.items() if name in signs},
        water=_maybe(one.water[look]),
        basis=judgements.basis(look, index).value,
        is_new_crop=bool(judgements.is_new_crop[look]),
        is_weak=bool(judgements.is_weak[look]),
        low_power=bool(judgements.low_power[look]),
        baseline=judgements.baseline,
        rising=_maybe(rising),
        p=_maybe(judgements.p[look]),
    )


def _limits_of(judgements: Judgements, look: int, rule: Rule) -> Thresholds:
    if judgements.low_power[look]:
        return rule.low_power
    return rule.new_crop if judgements.is_new_crop[look] else rule.thresholds


def _maybe(figure: float) -> float | None:
    return float(figure) if isfinite(figure) else None


def _known(measures: Sequence[str], figures: Figures) -> dict[str, float]:
    """Return the known figures by measure."""
    pairs = zip(measures, figures.tolist(), strict=True)
    return {measure: figure for measure, figure in pairs if np.isfinite(figure)}
