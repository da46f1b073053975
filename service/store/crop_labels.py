"""What grew on many parcels on many days, looked up at once."""

from collections.abc import Collection, Mapping
from dataclasses import dataclass, replace
from datetime import date
from typing import Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import select
from sqlalchemy.orm import Session

from service.store.tables import CropSeason

Numbers = NDArray[np.int64]

UNLABELLED: Final = -1
_DAY_STEP: Final = 10_000_000
"""More than the number of any day, so that parcel and day make one number in order."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CropLabels:
    """Crop seasons by parcel and first day.

    Attributes
    ----------
    crops
        Names that codes stand for, sorted.
    key, until, crop
        Parcel and first day as one number, last day, and code of each season; days are
        counted as `date.toordinal` does. Shape (seasons,).
    """

    crops: tuple[str, ...]
    key: Numbers
    until: Numbers
    crop: Numbers

    def on(self, parcel_ids: Numbers, days: Numbers) -> Numbers:
        """Return the code of what grew on each parcel on its day, `UNLABELLED` for nothing."""
        wanted = parcel_ids * _DAY_STEP + days
        place = np.searchsorted(self.key, wanted, side="right") - 1
        held = np.maximum(place, 0)
        if self.key.size == 0:
            return np.full(wanted.size, UNLABELLED, dtype=np.int64)
        is_held = (
            (place >= 0) & (self.key[held] // _DAY_STEP == parcel_ids) & (self.until[held] >= days)
        )
        return np.where(is_held, self.crop[held], UNLABELLED)

    def under(self, labels: Mapping[str, str]) -> "CropLabels":
        """Return the same with some crops named otherwise, several perhaps alike."""
        if not labels:
            return self
        named = [labels.get(crop, crop) for crop in self.crops]
        crops = tuple(sorted(set(named)))
        code = np.array([crops.index(name) for name in named], dtype=np.int64)
        return replace(self, crops=crops, crop=code[self.crop] if code.size else self.crop)

    def parcels_between(self, first: date, last: date) -> set[int]:
        """Return the parcels that carry a crop on any day of an interval, both included."""
        begins = self.key % _DAY_STEP
        shares = (begins <= last.toordinal()) & (self.until >= first.toordinal())
        return set((self.key[shares] // _DAY_STEP).tolist())


def crop_labels(
    session: Session, parcel_ids: Collection[int], *, since: date | None, until: date
) -> CropLabels:
    """Return the crop seasons of parcels that share days with an interval, both included."""
    query = select(
        CropSeason.parcel_id, CropSeason.crop, CropSeason.from_on, CropSeason.until_on
    ).where(CropSeason.from_on <= until)
    if since is not None:
        query = query.where(CropSeason.until_on >= since)
    known = set(parcel_ids)
    ordinals: dict[date, int] = {}

    def ordinal(day: date) -> int:
        return ordinals.setdefault(day, day.toordinal())

    rows = sorted(
        (parcel_id * _DAY_STEP + ordinal(first), ordinal(last), crop)
        for parcel_id, crop, first, last in session.execute(query)
        if parcel_id in known
    )
    crops = tuple(sorted({crop for _, _, crop in rows}))
    code = {crop: at for at, crop in enumerate(crops)}
    return CropLabels(
        crops=crops,
        key=np.fromiter((key for key, _, _ in rows), np.int64, len(rows)),
        until=np.fromiter((last for _, last, _ in rows), np.int64, len(rows)),
        crop=np.fromiter((code[crop] for _, _, crop in rows), np.int64, len(rows)),
    )
