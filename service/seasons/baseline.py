"""What to expect of every parcel on every day of season, fitted from finished seasons."""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.cohort import past_levels
from service.seasons.history import History
from service.seasons.medians import SPREAD_OF_MEDIAN, Counts, Figures, medians
from service.seasons.offsets import OWN_WEIGHT, OwnLooks, offsets_without_own_season
from service.seasons.spread import spreads
from service.seasons.usual import DAYS, usual_course

METHOD: Final = "own-offset-against-cohort/1"
"""Name of the method; part of a baseline's version."""
BAND: Final = 1.645
"""Half width of the band drawn about an expected value, in spreads: nine looks in ten lie in
it if they are normally distributed (the 5 % and 95 % points of the normal distribution)."""
WINSOR: Final = 3.0


class Basis(StrEnum):
    """What an expected value rests on."""

    OWN = "own"
    BLENDED = "blended"
    COHORT = "cohort"


def basis_of(weight: float) -> Basis:
    """Return what an offset with this weight of own looks rests on."""
    if weight >= OWN_WEIGHT:
        return Basis.OWN
    return Basis.BLENDED if weight > 0 else Basis.COHORT


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Baselines:
    """Baselines of all parcels of a season axis.

    Attributes
    ----------
    measures
        What is expected: the measures of the history, and haze where it could be made.
    usual, spread
        Crop → course over the season, shape (DAYS, measures), NaN = unknown.
    seasons
        Crop → the seasons that its course rests on.
    own
        What past looks leave when the crop's level is taken off.
    version
        Hash of method and content: two baselines of one version expect the same.
    """

    measures: tuple[str, ...]
    usual: Mapping[str, Figures]
    spread: Mapping[str, Figures]
    seasons: Mapping[str, tuple[int, ...]]
    own: OwnLooks
    version: str

    def knows(self, crop: str, day: int) -> bool:
        """Whether the crop has history at this time of the season, in any measure."""
        course = self.usual.get(crop)
        return course is not None and bool(np.isfinite(course[day]).any())

    def to_arrays(self) -> dict[str, NDArray[Any]]:
        """Return plain arrays, fit for one npz file, that `from_arrays` reads."""
        return _arrays(self.measures, self.usual, self.spread, self.seasons, self.own)

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, NDArray[Any]]) -> "Baselines":
        """Return the baselines that `to_arrays` wrote."""
        crops = [str(crop) for crop in arrays["crops"]]
        spans = zip(crops, arrays["crop_season_counts"].cumsum(), strict=True)
        seasons: dict[str, tuple[int, ...]] = {}
        first = 0
        for crop, last in spans:
            seasons[crop] = tuple(int(season) for season in arrays["crop_seasons"][first:last])
            first = last
        pairs = zip(arrays["pair_parcels"], arrays["pair_crops"], strict=True)
        return cls(
            measures=tuple(str(measure) for measure in arrays["measures"]),
            usual=dict(zip(crops, arrays["usual"], strict=True)),
            spread=dict(zip(crops, arrays["spread"], strict=True)),
            seasons=seasons,
            own=OwnLooks(
                pairs={(str(parcel), str(crop)): at for at, (parcel, crop) in enumerate(pairs)},
                pair=arrays["own_pair"],
                day=arrays["own_day"],
                season=arrays["own_season"],
                residuals=arrays["own_residuals"],
            ),
            version=_version(arrays),
        )


def fit_baselines(history: History) -> Baselines:
    """Fit the baselines of a season axis from its finished seasons.

    Parameters
    ----------
    history
        Looks, one per parcel and pass, without those that must not shape a baseline.

    Returns
    -------
    Baselines
        The same looks in any order give the same baselines, to the last bit.
    """
    looks = history.arranged()
    values = np.ascontiguousarray(looks.values.T)
    usual = np.stack(_usual(looks, values)) if looks.crops else _no_courses(looks)
    residuals = values - usual[looks.crop, looks.day].T
    residuals -= _levels(looks, residuals)
    kept = _winsorised(looks, residuals)
    pair_names, pair = _pairs(looks)
    shortfalls = residuals - offsets_without_own_season(pair, looks.season, looks.day, kept)
    spread = spreads(looks.crop, looks.day, shortfalls, crops=len(looks.crops))
    by_day = np.argsort(looks.day, kind="stable")
    own = OwnLooks(
        pairs={name: at for at, name in enumerate(pair_names)},
        pair=pair[by_day].astype(np.int32),
        day=looks.day[by_day].astype(np.int32),
        season=looks.season[by_day].astype(np.int32),
        residuals=np.ascontiguousarray(kept.T[by_day]).astype(np.float32),
    )
    seasons = {
        crop: tuple(int(each) for each in np.unique(looks.season[looks.crop == at]))
        for at, crop in enumerate(looks.crops)
    }
    courses = dict(zip(looks.crops, usual, strict=True))
    spread_by_crop = dict(zip(looks.crops, spread, strict=True))
    arrays = _arrays(looks.measures, courses, spread_by_crop, seasons, own)
    return Baselines(
        measures=looks.measures,
        usual=courses,
        spread=spread_by_crop,
        seasons=seasons,
        own=own,
        version=_version(arrays),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Expected:
    """What is expected of one parcel and measure on some days of season.

    `mid`, `low` and `high` have shape (days,), NaN where the crop has no history; `basis` is
    per day. `seasons` are the parcel's own with this crop, `crop_seasons` those of its cohort.
    """

    mid: Figures
    low: Figures
    high: Figures
    basis: tuple[Basis, ...]
    seasons: tuple[int, ...]
    crop_seasons: tuple[int, ...]


def expected_at(
    baselines: Baselines, *, parcel: str, crop: str, measure: str, days: Sequence[int]
) -> Expected:
    """Return what a parcel's baseline expects of a measure, before any look of the season.

    What the crop does this season is not in it: at a look, its cohort moves the expected
    value further.
    """
    code = baselines.own.codes([parcel], [crop])
    if crop not in baselines.usual or measure not in baselines.measures:
        unknown = np.full(len(days), np.nan)
        nothing = (Basis.COHORT,) * len(days)
        return Expected(
            mid=unknown, low=unknown, high=unknown, basis=nothing, seasons=(), crop_seasons=()
        )
    at = baselines.measures.index(measure)
    on = np.asarray(days, dtype=np.int64)
    own = baselines.own.of_pair(int(code[0]))
    found = [own.offsets_on(int(day), np.minimum(code, 0)) for day in on]
    offset = np.array([offsets[0, at] for offsets, _ in found])
    mid = baselines.usual[crop][on, at] + offset
    half = BAND * baselines.spread[crop][on, at]
    return Expected(
        mid=mid,
        low=mid - half,
        high=mid + half,
        basis=tuple(basis_of(float(weight[0, at])) for _, weight in found),
        seasons=own.seasons(),
        crop_seasons=baselines.seasons[crop],
    )


def _no_courses(looks: History) -> Figures:
    return np.empty((0, DAYS, len(looks.measures)))


def _usual(looks: History, values: Figures) -> list[Figures]:
    courses = []
    for crop in range(len(looks.crops)):
        of_crop = np.flatnonzero(looks.crop == crop)
        by_day = of_crop[np.argsort(looks.day[of_crop], kind="stable")]
        courses.append(usual_course(looks.day[by_day], values[:, by_day]))
    return courses


def _levels(looks: History, shifts: Figures) -> Figures:
    """Return the level of its crop in its pass for every look, shape (measures, looks)."""
    if looks.crop.size == 0:
        return np.zeros_like(shifts)
    is_first = np.ones(looks.crop.size, dtype=bool)
    is_first[1:] = (
        (np.diff(looks.crop) != 0) | (np.diff(looks.season) != 0) | (np.diff(looks.pass_at) != 0)
    )
    starts = np.flatnonzero(is_first)
    _, segment = np.unique(
        np.stack([looks.crop[starts], looks.season[starts]]), axis=1, return_inverse=True
    )
    levels = past_levels(segment, starts, shifts)
    return levels[:, np.cumsum(is_first) - 1]


def _winsorised(looks: History, residuals: Figures) -> Figures:
    kept = np.empty_like(residuals)
    for crop in range(len(looks.crops)):
        of_crop = looks.crop == crop
        some = residuals[:, of_crop]
        typical, _ = medians(np.abs(some))
        limit = (WINSOR * SPREAD_OF_MEDIAN * typical)[:, None]
        kept[:, of_crop] = np.clip(some, -limit, limit)
    return kept


def _pairs(looks: History) -> tuple[list[tuple[str, str]], Counts]:
    """Return (parcel, crop) by code, and the code of each look."""
    number = looks.parcel * max(len(looks.crops), 1) + looks.crop
    known, code = np.unique(number, return_inverse=True)
    parcel, crop = np.divmod(known, max(len(looks.crops), 1))
    return [(looks.parcels[p], looks.crops[c]) for p, c in zip(parcel, crop, strict=True)], code


def _arrays(
    measures: tuple[str, ...],
    usual: Mapping[str, Figures],
    spread: Mapping[str, Figures],
    seasons: Mapping[str, tuple[int, ...]],
    own: OwnLooks,
) -> dict[str, NDArray[Any]]:
    nothing = np.empty((0, DAYS, len(measures)))
    every_season = [season for crop in usual for season in seasons[crop]]
    return {
        "measures": np.array(measures, dtype=np.str_),
        "crops": np.array(list(usual), dtype=np.str_),
        "crop_season_counts": np.array([len(seasons[crop]) for crop in usual], dtype=np.int64),
        "crop_seasons": np.array(every_season, dtype=np.int64),
        "usual": np.stack(list(usual.values())) if usual else nothing,
        "spread": np.stack(list(spread.values())) if usual else nothing,
        "pair_parcels": np.array([parcel for parcel, _ in own.pairs], dtype=np.str_),
        "pair_crops": np.array([crop for _, crop in own.pairs], dtype=np.str_),
        "own_pair": own.pair,
        "own_day": own.day,
        "own_season": own.season,
        "own_residuals": own.residuals,
    }


def _version(arrays: Mapping[str, NDArray[Any]]) -> str:
    digest = hashlib.sha256(METHOD.encode())
    for name in sorted(arrays):
        array = arrays[name]
        digest.update(f"{name}{array.dtype.str}{array.shape}".encode())
        digest.update(np.ascontiguousarray(array).tobytes())
    return digest.hexdigest()[:16]
