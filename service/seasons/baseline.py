"""What to expect of every parcel on every day of season."""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from enum import StrEnum
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.medians import Figures
from service.seasons.offsets import OWN_WEIGHT, OwnLooks
from service.seasons.ranks import Ranks
from service.seasons.usual import DAYS

METHOD: Final = "own-offset-against-cohort/3"
"""Name of the method; part of a baseline's version."""
BAND: Final = 1.645
"""Half width of the band drawn about an expected value, in spreads: nine looks in ten lie in
it if they are normally distributed (the 5 % and 95 % points of the normal distribution)."""


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
    usual, spread, middle
        Crop → course over the season, shape (DAYS, measures), NaN = unknown; `middle` is the
        spread as the middle of past shortfalls tells it, `spread` as their tail does.
    seasons
        Crop → the seasons that its course rests on.
    own
        What past looks leave when the crop's level is taken off.
    ranks
        Past scores, by which a look's p is told.
    version
        Hash of method and content: two baselines of one version expect the same.
    """

    measures: tuple[str, ...]
    usual: Mapping[str, Figures]
    spread: Mapping[str, Figures]
    middle: Mapping[str, Figures]
    seasons: Mapping[str, tuple[int, ...]]
    own: OwnLooks
    ranks: Ranks
    version: str

    @classmethod
    def of(
        cls,
        *,
        measures: tuple[str, ...],
        usual: Mapping[str, Figures],
        spread: Mapping[str, Figures],
        middle: Mapping[str, Figures],
        seasons: Mapping[str, tuple[int, ...]],
        own: OwnLooks,
        ranks: Ranks,
    ) -> "Baselines":
        """Return baselines with their version worked out."""
        unnamed = cls(
            measures=measures,
            usual=usual,
            spread=spread,
            middle=middle,
            seasons=seasons,
            own=own,
            ranks=ranks,
            version="",
        )
        return replace(unnamed, version=_version(unnamed.to_arrays()))

    def with_ranks(self, ranks: Ranks) -> "Baselines":
        """Return the same baselines with other past scores."""
        ranked = replace(self, ranks=ranks)
        return replace(ranked, version=_version(ranked.to_arrays()))

    def knows(self, crop: str, day: int) -> bool:
        """Whether the crop has history at this time of the season, in any measure."""
        course = self.usual.get(crop)
        return course is not None and bool(np.isfinite(course[day]).any())

    def to_arrays(self) -> dict[str, NDArray[Any]]:
        """Return plain arrays, fit for one npz file, that `from_arrays` reads."""
        nothing = np.empty((0, DAYS, len(self.measures)))
        crops = list(self.usual)
        counts = [len(self.seasons[crop]) for crop in crops]
        every_season = [season for crop in crops for season in self.seasons[crop]]
        return {
            "measures": np.array(self.measures, dtype=np.str_),
            "crops": np.array(crops, dtype=np.str_),
            "crop_season_counts": np.array(counts, dtype=np.int64),
            "crop_seasons": np.array(every_season, dtype=np.int64),
            "usual": np.stack(list(self.usual.values())) if crops else nothing,
            "spread": np.stack(list(self.spread.values())) if crops else nothing,
            "middle": np.stack(list(self.middle.values())) if crops else nothing,
            "pair_parcels": np.array([parcel for parcel, _ in self.own.pairs], dtype=np.str_),
            "pair_crops": np.array([crop for _, crop in self.own.pairs], dtype=np.str_),
            "own_pair": self.own.pair,
            "own_day": self.own.day,
            "own_season": self.own.season,
            "own_residuals": self.own.residuals,
            **self.ranks.to_arrays(),
        }

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
        pairs = zip(arrays["pair_parcels"].tolist(), arrays["pair_crops"].tolist(), strict=True)
        return cls(
            measures=tuple(str(measure) for measure in arrays["measures"]),
            usual=dict(zip(crops, arrays["usual"], strict=True)),
            spread=dict(zip(crops, arrays["spread"], strict=True)),
            # Older baselines, which are still shown as of their time, know one spread.
            middle=dict(zip(crops, arrays.get("middle", arrays["spread"]), strict=True)),
            seasons=seasons,
            own=OwnLooks(
                pairs={pair: at for at, pair in enumerate(pairs)},
                pair=arrays["own_pair"],
                day=arrays["own_day"],
                season=arrays["own_season"],
                residuals=arrays["own_residuals"],
            ),
            ranks=Ranks.from_arrays(arrays),
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


def _version(arrays: Mapping[str, NDArray[Any]]) -> str:
    digest = hashlib.sha256(METHOD.encode())
    for name in sorted(arrays):
        array = arrays[name]
        digest.update(f"{name}{array.dtype.str}{array.shape}".encode())
        digest.update(np.ascontiguousarray(array).tobytes())
    return digest.hexdigest()[:16]
