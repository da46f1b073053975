"""One pass judged: what was expected of each look, and how far it departs.

This says nothing about alerts: a judgement is about one look.
"""

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from service.seasons.baseline import BAND, Baselines, Basis, basis_of
from service.seasons.cohort import Carried, Cohort
from service.seasons.departure import WORSE, Departures, departures_in, scores, suspect_looks
from service.seasons.history import UNLABELLED, with_haze
from service.seasons.medians import Figures

Flags = NDArray[np.bool_]


class Unjudged(StrEnum):
    """Why a look was not judged, in words for the person who reads it."""

    NOT_A_LOOK = "too little of the parcel was usable"
    NO_CROP = "no crop, and no past of its own"
    TOO_FEW = "new crop with fewer than 8 parcels in the pass"
    SUSPECT = "haze or cloud that the quality layer let through"
    NO_MEASURE = "no watched measure with a baseline"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OnePass:
    """The looks of one pass, one per parcel, in any order.

    Attributes
    ----------
    acquired_at
        Of the pass; part of the identity of alerts that it opens.
    season, day
        Crop year, by the year it ends in, and day of season from 0.
    parcels, crops, scenes, looked_at
        Of each look; a crop of None is unlabelled, `looked_at` is when its scene was acquired.
    measures, values
        Means, shape (looks, measures), NaN = unknown.
    valid_share, water
        Shares of the parcel, shape (looks,), NaN = unknown.
    declared
        Crops as their users call them, where `crops` are labels under which small ones are
        compared; None = they are the same.
    """

    acquired_at: datetime
    season: int
    day: int
    parcels: Sequence[str]
    crops: Sequence[str | None]
    scenes: Sequence[str]
    looked_at: Sequence[datetime]
    measures: Sequence[str]
    values: Figures
    valid_share: Figures
    water: Figures
    declared: Sequence[str | None] | None = None

    @property
    def grown(self) -> Sequence[str | None]:
        """What grows on each parcel in its user's own words."""
        return self.crops if self.declared is None else self.declared


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Judgements:
    """What is thought of each look of a pass, in the order of the pass.

    Attributes
    ----------
    measures
        Those of the baselines: the columns of the figures.
    observed, expected, low, high
        Shape (looks, measures), NaN = unknown.
    shortfall, departure
        Observed minus expected; the same in spreads. Same shape.
    weight
        How much own looks the expected values rest on (`basis_of`), same shape.
    rising
        By how much the crop's usual value rose over the past 20 days, same shape.
    score
        Shape (looks,), NaN where a look was not judged.
    p
        Share of past looks that were as far out by the measures of `WORSE`, shape (looks,);
        NaN where a look was not judged or the past does not tell.
    leading
        Column of the measure that leads the score, -1 where there is none, shape (looks,).
    unjudged
        Why a look was not judged, None where it was.
    is_suspect, is_weak, is_new_crop, low_power
        Haze or cloud; a cohort too small for a single look to count; a crop without history;
        no crop, so that the parcel's own past is all there is.
    cohorts
        Crop → its cohort in the pass.
    missing
        Measures of the rule that no look of the pass could be judged by.
    baseline
        Version of the baselines.
    """

    acquired_at: datetime
    parcels: Sequence[str]
    crops: Sequence[str | None]
    measures: tuple[str, ...]
    observed: Figures
    expected: Figures
    low: Figures
    high: Figures
    shortfall: Figures
    departure: Figures
    weight: Figures
    rising: Figures
    score: Figures
    p: Figures
    leading: NDArray[np.int64]
    unjudged: tuple[Unjudged | None, ...]
    is_suspect: Flags
    is_weak: Flags
    is_new_crop: Flags
    low_power: Flags
    cohorts: Mapping[str, Cohort]
    missing: tuple[str, ...]
    baseline: str

    def basis(self, look: int, measure: str) -> Basis:
        """Return what the expected value of a look in a measure rests on."""
        return basis_of(float(self.weight[look, self.measures.index(measure)]))


def judge_looks(
    baselines: Baselines,
    one: OnePass,
    *,
    signs: Mapping[str, float],
    min_valid: float,
    clear_cohort: int,
    carried: Mapping[str, Carried],
) -> tuple[Judgements, Mapping[str, Carried]]:
    """Judge the looks of one pass by the measures that are watched.

    Parameters
    ----------
    signs
        Watched measure → -1 where lower is worse, 1 where higher is worse.
    min_valid
        Valid share that makes a look.
    clear_cohort
        With fewer clear looks of its crop a look is weak.
    carried
        What earlier passes of the season handed on, by crop.

    Returns
    -------
    tuple
        Judgements of all looks; what the cohorts hand on to the next pass.
    """
    crops = [crop or UNLABELLED for crop in one.crops]
    low_power = np.array([crop == UNLABELLED for crop in crops], dtype=bool)
    is_look = np.asarray(one.valid_share) >= min_valid
    compared = np.flatnonzero(is_look & (~low_power | baselines.knows(UNLABELLED, one.day)))
    observed = _aligned(one, baselines.measures)
    departures = departures_in(
        baselines,
        parcels=[one.parcels[int(at)] for at in compared],
        crops=[crops[int(at)] for at in compared],
        day=one.day,
        values=observed[compared],
        carried=carried,
    )
    worse = _signs(baselines.measures, signs)
    adverse, own = departures.adverse(worse)
    score, leading = np.full(len(crops), np.nan), np.full(len(crops), -1, dtype=np.int64)
    score[compared], leading[compared] = scores(adverse, own)
    p = np.full(len(crops), np.nan)
    plain, _ = scores(*departures.plain(_signs(baselines.measures, WORSE)))
    p[compared] = baselines.ranks.p([crops[int(at)] for at in compared], plain)
    is_suspect = np.zeros(len(crops), dtype=bool)
    is_suspect[compared] = suspect_looks(departures.shortfall, baselines.measures)
    has_own_past = np.zeros(len(crops), dtype=bool)
    has_own_past[compared] = (departures.weight > 0).any(axis=1)
    is_new = np.array([_is_new(departures, crop) for crop in crops], dtype=bool)
    unjudged = _reasons(crops, is_look, is_suspect, score, departures, low_power & ~has_own_past)
    is_out = np.array([reason is not None for reason in unjudged], dtype=bool)
    score[is_out], p[is_out | is_new] = np.nan, np.nan
    clear = Counter(crops[int(look)] for look in compared[~is_suspect[compared]])
    figures = _figures(departures, worse, compared, looks=len(crops))
    judgements = Judgements(
        acquired_at=one.acquired_at,
        parcels=one.parcels,
        crops=one.crops,
        measures=baselines.measures,
        observed=observed,
        **figures,
        score=score,
        p=p,
        leading=np.where(np.isfinite(score), leading, -1),
        unjudged=unjudged,
        is_suspect=is_suspect,
        is_weak=np.array([clear[crop] < clear_cohort for crop in crops], dtype=bool),
        is_new_crop=is_new,
        low_power=low_power,
        cohorts=departures.cohorts,
        missing=_missing(signs, baselines.measures, adverse),
        baseline=baselines.version,
    )
    return judgements, departures.carried


def _aligned(one: OnePass, measures: Sequence[str]) -> Figures:
    """Return the values of a pass in the measures of the baselines."""
    given, values = with_haze(one.measures, np.asarray(one.values, dtype=np.float64))
    aligned = np.full((len(one.parcels), len(measures)), np.nan)
    for at, measure in enumerate(measures):
        if measure in given:
            aligned[:, at] = values[:, given.index(measure)]
    return aligned


def _figures(
    departures: Departures, worse: Figures, compared: NDArray[np.int64], *, looks: int
) -> dict[str, Figures]:
    """Return the figures of all looks; those not compared have NaN, and weight 0."""
    half = BAND * departures.spread
    known = {
        "expected": departures.expected,
        "low": departures.expected - half,
        "high": departures.expected + half,
        "shortfall": departures.shortfall,
        "departure": departures.signed(worse),
        "weight": departures.weight,
        "rising": departures.rising,
    }
    figures = {name: np.full((looks, worse.size), np.nan) for name in known}
    figures["weight"] = np.zeros((looks, worse.size))
    for name, array in known.items():
        figures[name][compared] = array
    return figures


def _signs(measures: Sequence[str], signs: Mapping[str, float]) -> Figures:
    return np.array([signs.get(measure, np.nan) for measure in measures])


def _missing(
    signs: Mapping[str, float], measures: Sequence[str], adverse: Figures
) -> tuple[str, ...]:
    is_known: Flags = np.asarray(np.isfinite(adverse).any(axis=0))
    known = {measure for measure, known in zip(measures, is_known, strict=True) if known}
    return tuple(measure for measure in signs if measure not in known)


def _reasons(
    crops: Sequence[str],
    is_look: Flags,
    is_suspect: Flags,
    score: Figures,
    departures: Departures,
    has_nothing: Flags,
) -> tuple[Unjudged | None, ...]:
    small = {crop for crop, cohort in departures.cohorts.items() if cohort.is_too_small}
    ordered: tuple[tuple[Unjudged, Flags], ...] = (
        (Unjudged.NOT_A_LOOK, ~is_look),
        (Unjudged.NO_CROP, has_nothing),
        (Unjudged.TOO_FEW, np.array([crop in small for crop in crops], dtype=bool)),
        (Unjudged.SUSPECT, is_suspect),
        (Unjudged.NO_MEASURE, np.isnan(score)),
    )
    reasons: list[Unjudged | None] = [None] * len(crops)
    for reason, holds in reversed(ordered):
        for look in np.flatnonzero(holds):
            reasons[look] = reason
    return tuple(reasons)


def _is_new(departures: Departures, crop: str) -> bool:
    cohort = departures.cohorts.get(crop)
    return cohort is not None and cohort.is_new
