"""The looks of finished seasons, as one flat table."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.medians import Counts, Figures

HAZE: Final = "hot"
"""Measure of haze: blue - 0.5 red (after Zhang, Guindon and Cihlar 2002)."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class History:
    """Looks of finished seasons, one row each, in any order.

    Attributes
    ----------
    parcels, crops, measures
        Names that the codes and columns stand for.
    parcel, crop
        Codes into the names, shape (looks,); crop -1 = unlabelled, which no baseline uses.
    season
        Crop year by the year it ends in, shape (looks,).
    day
        Day of season from 0, shape (looks,).
    pass_at
        The pass of each look: numbers, equal within a pass, that ascend with acquisition,
        such as seconds since 1970; shape (looks,).
    values
        Means of the measures, shape (looks, measures), NaN = unknown.
    """

    parcels: tuple[str, ...]
    crops: tuple[str, ...]
    measures: tuple[str, ...]
    parcel: Counts
    crop: Counts
    season: Counts
    day: Counts
    pass_at: Counts
    values: Figures

    @classmethod
    def of_rows(
        cls,
        *,
        parcels: Sequence[str],
        crops: Sequence[str | None],
        seasons: Sequence[int],
        days: Sequence[int],
        passes: Sequence[int],
        measures: Sequence[str],
        values: Figures,
    ) -> "History":
        """Return the table of looks given by name; a crop of None is unlabelled."""
        parcel_names, parcel = _coded(parcels)
        crop_names, crop = _coded(crops)
        return cls(
            parcels=parcel_names,
            crops=crop_names,
            measures=tuple(measures),
            parcel=parcel,
            crop=crop,
            season=np.asarray(seasons, dtype=np.int64),
            day=np.asarray(days, dtype=np.int64),
            pass_at=np.asarray(passes, dtype=np.int64),
            values=np.asarray(values, dtype=np.float64).reshape(len(parcel), len(measures)),
        )

    @classmethod
    def empty(cls, measures: Sequence[str]) -> "History":
        """Return a history without looks."""
        return cls.of_rows(
            parcels=(),
            crops=(),
            seasons=(),
            days=(),
            passes=(),
            measures=measures,
            values=np.empty((0, len(measures))),
        )

    def arranged(self) -> "History":
        """Return the labelled looks by crop, season, pass and parcel, names sorted, haze added.

        The same looks in another order, under other codes, give the same table: sums over it
        round alike.
        """
        parcel_names, parcel = _sorted_names(self.parcels, self.parcel)
        crop_names, crop = _sorted_names(self.crops, self.crop)
        order = np.lexsort((parcel, self.pass_at, self.season, crop))
        order = order[crop[order] >= 0]
        measures, values = with_haze(self.measures, self.values)
        return replace(
            self,
            parcels=parcel_names,
            crops=crop_names,
            measures=measures,
            parcel=parcel[order],
            crop=crop[order],
            season=self.season[order],
            day=self.day[order],
            pass_at=self.pass_at[order],
            values=values[order],
        )


def with_haze(measures: Sequence[str], values: Figures) -> tuple[tuple[str, ...], Figures]:
    """Return measures and values (looks, measures) with the measure of haze behind them.

    Without a blue and a red band they come back as they are.
    """
    names = tuple(measures)
    if HAZE in names or not {"blue", "red"} <= set(names):
        return names, values
    haze = values[:, names.index("blue")] - 0.5 * values[:, names.index("red")]
    return (*names, HAZE), np.column_stack([values, haze])


def _coded(names: Sequence[str | None]) -> tuple[tuple[str, ...], Counts]:
    """Return the sorted names and the code of each; None is -1."""
    known = tuple(sorted({name for name in names if name is not None}))
    place: dict[str | None, int] = {name: at for at, name in enumerate(known)}
    codes = np.fromiter((place.get(name, -1) for name in names), np.int64, len(names))
    return known, codes


def _sorted_names(names: tuple[str, ...], codes: Counts) -> tuple[tuple[str, ...], Counts]:
    order = sorted(range(len(names)), key=names.__getitem__)
    place: NDArray[np.int64] = np.full(len(names) + 1, -1, dtype=np.int64)
    place[order] = np.arange(len(names))
    # Code -1 takes the last place, which stays -1.
    return tuple(names[at] for at in order), place[codes]
