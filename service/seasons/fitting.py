"""Fitting baselines from the looks of finished seasons, crop by crop.

Each look is also judged with its own season left out: that gives the spread, the ranking of
scores, and what replaying the past needs.
"""

from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.baseline import Baselines
from service.seasons.cohort import past_levels
from service.seasons.departure import WORSE
from service.seasons.history import Flags, History
from service.seasons.medians import SPREAD_OF_MEDIAN, Counts, Figures, medians
from service.seasons.offsets import OwnLooks, offsets_without_own_season
from service.seasons.past import Past
from service.seasons.ranks import Ranks
from service.seasons.spread import Spreads, past_spreads, spreads
from service.seasons.usual import DAYS, Course, usual_course

WINSOR: Final = 3.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Fitted:
    """Baselines, and the past that they were fitted from as it would have been judged."""

    baselines: Baselines
    past: Past


def fit_baselines(history: History) -> Baselines:
    """Return the baselines of a season axis, fitted from its finished seasons."""
    return fit(history).baselines


def fit(history: History) -> Fitted:
    """Fit the baselines of a season axis from its finished seasons.

    Parameters
    ----------
    history
        Looks, one per parcel and pass.

    Returns
    -------
    Fitted
        The same looks in any order give the same baselines, to the last bit.
    """
    looks = history.arranged()
    fitted = [_fit_crop(looks, at) for at in _spans(looks)]
    measures, size = len(looks.measures), looks.crop.size
    shortfall = np.empty((measures, size), dtype=np.float32)
    level = np.empty((measures, size), dtype=np.float32)
    for each, at in zip(fitted, _spans(looks), strict=True):
        shortfall[:, at], level[:, at] = each.shortfall, each.level
    nothing = np.empty((0, DAYS, measures))
    usual = np.stack([each.usual for each in fitted]) if fitted else nothing
    is_labelled = np.array([bool(name) for name in looks.crops], dtype=bool)
    spread = spreads(looks.crop, looks.day, shortfall, is_pooled=is_labelled)
    starts, group = _passes(looks)
    crop, day = looks.crop[starts], looks.day[starts]
    middle, whole = _stacked(spread, measures)
    past = Past(
        measures=looks.measures,
        crops=looks.crops,
        parcels=looks.parcels,
        parcel=looks.parcel,
        crop=looks.crop,
        season=looks.season,
        day=looks.day,
        pass_at=looks.pass_at,
        shortfall=shortfall,
        level=level,
        spread=past_spreads(
            starts, shortfall, middle=middle[crop, day].T, whole=whole[crop, day].T
        ).astype(np.float32),
        group=group,
        usual=usual,
        is_known=looks.is_known,
    )
    fitted_from = Fitted(
        baselines=Baselines.of(
            measures=looks.measures,
            usual=dict(zip(looks.crops, usual, strict=True)),
            spread=dict(zip(looks.crops, whole, strict=True)),
            middle=dict(zip(looks.crops, middle, strict=True)),
            seasons={name: each.seasons for name, each in zip(looks.crops, fitted, strict=True)},
            own=_own(looks, fitted),
            ranks=Ranks(by_crop={}),
        ),
        past=past,
    )
    nothing_known = np.zeros(size, dtype=bool)
    return replace(fitted_from, baselines=ranked(fitted_from, without=nothing_known))


def ranked(fitted: Fitted, *, without: Flags) -> Baselines:
    """Return baselines that rank looks among those of the past.

    Parameters
    ----------
    without
        Past looks that take no part, as something real befell their parcel, shape (looks,);
        neither do those that a person said to be real.
    """
    past = fitted.past
    scores = past.scores(WORSE, relieved=False)
    scores[past.is_known | without] = np.nan
    return fitted.baselines.with_ranks(Ranks.of(past.crops, past.crop, scores))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Crop:
    """What the looks of one crop give; `kept`, `shortfall`, `level` (measures, looks)."""

    usual: Course
    seasons: tuple[int, ...]
    kept: NDArray[np.float32]
    shortfall: NDArray[np.float32]
    level: NDArray[np.float32]


def _passes(looks: History) -> tuple[Counts, Counts]:
    """Return where the looks of each crop and pass begin, and which they are of each look."""
    keys = np.stack([looks.crop, looks.season, looks.pass_at])
    is_first = np.ones(looks.crop.size, dtype=bool)
    is_first[1:] = (np.diff(keys, axis=1) != 0).any(axis=0)
    return np.flatnonzero(is_first), np.cumsum(is_first) - 1


def _stacked(spread: list[Spreads], measures: int) -> tuple[Figures, Figures]:
    """Return middle and whole spreads by crop, shape (crops, DAYS, measures)."""
    nothing = np.empty((0, DAYS, measures))
    return (
        np.stack([each.middle for each in spread]) if spread else nothing,
        np.stack([each.whole for each in spread]) if spread else nothing,
    )


def _spans(looks: History) -> list[slice]:
    """Return where the looks of each crop stand."""
    ends = np.searchsorted(looks.crop, np.arange(len(looks.crops) + 1))
    return [slice(int(a), int(b)) for a, b in pairwise(ends)]


def _fit_crop(looks: History, at: slice) -> _Crop:
    values = np.ascontiguousarray(looks.values[at].T, dtype=np.float64)
    season, day, shapes = looks.season[at], looks.day[at], looks.shapes[at]
    usual = _course(day, values, shapes)
    shift = values - _usual_without_own_season(season, day, values, shapes, usual)
    level = _levels(season, looks.pass_at[at], shift)
    residuals = shift - level
    kept = _winsorised(residuals, shapes)
    offsets = offsets_without_own_season(looks.parcel[at], season, day, kept)
    return _Crop(
        usual=usual,
        seasons=tuple(int(each) for each in np.unique(season[shapes])),
        kept=kept.astype(np.float32),
        shortfall=(residuals - offsets).astype(np.float32),
        level=level.astype(np.float32),
    )


def _course(day: Counts, values: Figures, chosen: NDArray[np.bool_]) -> Course:
    rows = np.flatnonzero(chosen)
    by_day = rows[np.argsort(day[rows], kind="stable")]
    # Half the bytes to sort; observed means are float32 anyway.
    return usual_course(day[by_day], values[:, by_day].astype(np.float32))


def _usual_without_own_season(
    season: Counts, day: Counts, values: Figures, shapes: NDArray[np.bool_], usual: Course
) -> Figures:
    """Return the usual value of each look as the other seasons give it, (measures, looks).

    Where no other season tells, it is that of all.
    """
    found = np.empty_like(values)
    for each in np.unique(season):
        own = season == each
        others = _course(day, values, shapes & ~own)
        course = np.where(np.isfinite(others), others, usual)
        found[:, own] = course[day[own]].T
    return found


def _levels(season: Counts, pass_at: Counts, shifts: Figures) -> Figures:
    """Return the level of the crop in the pass of every look, shape (measures, looks)."""
    if season.size == 0:
        return np.zeros_like(shifts)
    is_first = np.ones(season.size, dtype=bool)
    is_first[1:] = (np.diff(season) != 0) | (np.diff(pass_at) != 0)
    starts = np.flatnonzero(is_first)
    _, segment = np.unique(season[starts], return_inverse=True)
    return past_levels(segment, starts, shifts)[:, np.cumsum(is_first) - 1]


def _winsorised(residuals: Figures, shapes: NDArray[np.bool_]) -> Figures:
    some = np.where(shapes, residuals, np.nan)
    typical, _ = medians(np.abs(some))
    limit = (WINSOR * SPREAD_OF_MEDIAN * typical)[:, None]
    return np.clip(some, -limit, limit)


def _own(looks: History, crops: list[_Crop]) -> OwnLooks:
    """Return what past looks leave, in order of their day."""
    width = max(len(looks.crops), 1)
    known, pair = np.unique(looks.parcel * width + looks.crop, return_inverse=True)
    parcel, crop = np.divmod(known, width)
    names = [(looks.parcels[p], looks.crops[c]) for p, c in zip(parcel, crop, strict=True)]
    by_day = np.flatnonzero(looks.shapes)
    by_day = by_day[np.argsort(looks.day[by_day], kind="stable")]
    kept = [crop.kept.T for crop in crops]
    nothing = np.empty((0, len(looks.measures)), dtype=np.float32)
    return OwnLooks(
        pairs={name: at for at, name in enumerate(names)},
        pair=pair[by_day].astype(np.int32),
        day=looks.day[by_day].astype(np.int32),
        season=looks.season[by_day].astype(np.int32),
        residuals=np.concatenate([nothing, *kept])[by_day],
    )
