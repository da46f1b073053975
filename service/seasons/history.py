"""The looks of finished seasons, as one flat table."""

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.medians import Counts, Figures, Rows

HAZE: Final = "hot"
"""Measure of haze: blue - 0.5 red (after Zhang, Guindon and Cihlar 2002)."""
UNLABELLED: Final = ""
"""The crop of looks that carry none: compared with the parcel's own past alone."""
Flags = NDArray[np.bool_]
_CHUNK: Final = 65_536


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class History:
    """Looks of finished seasons, one row each, in any order.

    Attributes
    ----------
    parcels, crops, measures
        Names that the codes and columns stand for.
    parcel, crop
        Codes into the names, shape (looks,); crop -1 = unlabelled.
    season
        Crop year by the year it ends in, shape (looks,).
    day
        Day of season from 0, shape (looks,).
    pass_at
        The pass of each look: numbers, equal within a pass, that ascend with acquisition,
        such as seconds since 1970; shape (looks,).
    values
        Means of the measures, shape (looks, measures), NaN = unknown.
    shapes
        Whether a look shapes baselines; where it does not, something was wrong then, shape
        (looks,).
    is_known
        Whether a person said that the departure of a look was real: alarms of a replay do
        not count there, shape (looks,).
    without_label
        Parcels whose looks also make the baseline that a look without a crop is compared
        with.
    """

    parcels: tuple[str, ...]
    crops: tuple[str, ...]
    measures: tuple[str, ...]
    parcel: Counts
    crop: Counts
    season: Counts
    day: Counts
    pass_at: Counts
    values: Rows
    shapes: Flags
    is_known: Flags
    without_label: frozenset[str] = frozenset()

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
        shapes: Sequence[bool] | Flags | None = None,
        is_known: Sequence[bool] | Flags | None = None,
        without_label: Collection[str] = (),
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
            shapes=_flags(shapes, len(parcel), default=True),
            is_known=_flags(is_known, len(parcel), default=False),
            without_label=frozenset(without_label),
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
        """Return the looks by crop, season, pass and parcel, names sorted, haze added.

        Looks without a crop carry `UNLABELLED`, as does a second copy of all labelled looks
        of the parcels `without_label`. Values are float32, as observed means are. The same
        looks in another order, under other codes, give the same table: sums over it round
        alike.
        """
        parcel_names, parcel = _sorted_names(self.parcels, self.parcel)
        crop_names, crop = _sorted_names(self.crops, self.crop)
        row = np.arange(crop.size)
        again = np.flatnonzero(np.isin(parcel, self._codes_without(parcel_names)) & (crop >= 0))
        if again.size or (crop < 0).any():
            # The empty name comes before all others.
            crop_names = (UNLABELLED, *crop_names)
            crop = np.concatenate([crop + 1, np.zeros(again.size, dtype=np.int64)])
            row = np.concatenate([row, again])
        order = np.lexsort((parcel[row], self.pass_at[row], self.season[row], crop))
        row = row[order]
        measures, values = _gathered(self.measures, self.values, row)
        return replace(
            self,
            parcels=parcel_names,
            crops=crop_names,
            measures=measures,
            parcel=parcel[row],
            crop=crop[order],
            season=self.season[row],
            day=self.day[row],
            pass_at=self.pass_at[row],
            values=values,
            shapes=self.shapes[row],
            is_known=self.is_known[row],
        )

    def _codes_without(self, names: Sequence[str]) -> list[int]:
        return [code for code, name in enumerate(names) if name in self.without_label]


def _gathered(measures: Sequence[str], values: Rows, rows: Counts) -> tuple[tuple[str, ...], Rows]:
    """Return some rows of values as float32, haze added, without a copy of all of them."""
    names, _ = with_haze(measures, values[:1])
    found = np.empty((rows.size, len(names)), dtype=np.float32)
    for first in range(0, rows.size, _CHUNK):
        some = slice(first, first + _CHUNK)
        _, found[some] = with_haze(measures, np.asarray(values[rows[some]], dtype=np.float64))
    return names, found


def with_haze(measures: Sequence[str], values: Rows) -> tuple[tuple[str, ...], Rows]:
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


def _flags(given: Sequence[bool] | Flags | None, size: int, *, default: bool) -> Flags:
    return np.full(size, default) if given is None else np.asarray(given, dtype=bool)
