"""Regional notices: a shift that the crops of a region share, as one event of its own.

When most crops together are drier than they usually are, that is one thing to know, not as
many alerts as there are parcels. Parcels are compared with their crop in the same pass, so
that what all share is taken out of their departures; a notice says what was taken out.
"""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from datetime import datetime
from enum import StrEnum
from math import isnan
from statistics import median
from typing import Any, Final

from service.alerts.instants import DAY, microseconds

KIND: Final = "dry_spell"
MEASURE: Final = "ndmi"
DRYNESS: Final = "swir16"
LOOKS_OF_CROP: Final = 8
GREEN: Final = 0.4
"""A crop that is expected to have less cover than this tells of soil, not of plants."""
HAZE_LIMIT: Final = 0.015
CROPS_NEEDED: Final = 3
OPEN_BELOW: Final = -0.045
CLOSE_ABOVE: Final = 0.5 * OPEN_BELOW
PASSES_NEEDED: Final = 3
PASSES_WINDOW: Final = 4
DAYS_NEEDED: Final = 8
"""The passes below the limit span so many days: what passes sooner is weather."""
RIPENING: Final = -0.1
"""A crop whose expected NDVI fell by this over 20 days is ripening."""
NDMI_OF_DRYNESS: Final = -2.5
"""Change of NDMI for one of 1.6 µm alone: -2 nir / (nir + swir16)² at 0.4 and 0.17."""
EXPLAINED_CAUSES: Final = frozenset({"moisture_stress"})
"""What a parcel's alert may look like to be explained by a notice."""
EXPLAINED_BELOW: Final = 2.0
"""A parcel this many thresholds away from its own crop has a reason of its own."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CropShift:
    """One crop in one pass: how far it is off its usual course, NaN = unknown.

    `looks` counts its parcels, `moisture` is the shift of NDMI, `dryness` that of 1.6 µm,
    `haze` that of blue - 0.5 red; `green` is the NDVI that its course expects on the day, and
    `rising` by how much that rose over the past 20 days.
    """

    crop: str
    looks: int
    moisture: float
    dryness: float
    green: float
    rising: float
    haze: float

    @property
    def shift(self) -> float:
        """The shift of NDMI, no larger than 1.6 µm bears out where that is known.

        A crop that ripens early, or is cut, has less NDMI because it has less cover; one that
        lacks water is also brighter at 1.6 µm (Gao 1996).
        """
        if isnan(self.dryness):
            return self.moisture
        return max(self.moisture, NDMI_OF_DRYNESS * self.dryness)

    @property
    def tells(self) -> bool:
        """Whether the crop says something about the region."""
        is_green = self.green > GREEN and not self.rising <= RIPENING
        is_known = not isnan(self.moisture)
        return self.looks >= LOOKS_OF_CROP and is_green and is_known and self.haze < HAZE_LIMIT


class NoticeState(StrEnum):
    """What has become of a notice."""

    OPEN = "open"
    CLOSED = "closed"


@dataclass(frozen=True, slots=True, kw_only=True)
class Notice:
    """That the crops of a region share a shift.

    `shift` is the largest so far, the median over the crops that told of it; `crops` those of
    them that were themselves below the limit in any pass.
    """

    id: str
    kind: str
    state: NoticeState
    opened_at: datetime
    closed_at: datetime | None
    measure: str
    shift: float
    crops: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """Return plain members, fit for JSON; instants as RFC 3339."""
        closed_at = None if self.closed_at is None else self.closed_at.isoformat()
        return {field.name: getattr(self, field.name) for field in fields(self)} | {
            "state": self.state.value,
            "opened_at": self.opened_at.isoformat(),
            "closed_at": closed_at,
            "crops": list(self.crops),
        }

    @classmethod
    def from_dict(cls, members: Mapping[str, Any]) -> "Notice":
        """Return the notice that `as_dict` wrote."""
        closed_at = members["closed_at"]
        return cls(
            **{
                **members,
                "state": NoticeState(members["state"]),
                "opened_at": datetime.fromisoformat(members["opened_at"]),
                "closed_at": None if closed_at is None else datetime.fromisoformat(closed_at),
                "crops": tuple(members["crops"]),
            }
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Region:
    """What is remembered of a region from pass to pass.

    `recent` are the last passes that told of a shared shift, each with its time
    (microseconds since 1970), the newest last.
    """

    name: str = ""
    recent: tuple[tuple[int, float], ...] = ()
    notice: Notice | None = None

    @property
    def open_id(self) -> str:
        """Identity of the open notice, empty without one."""
        return "" if self.notice is None else self.notice.id

    def explains(self, *, cause: str, crop: str, thresholds_away: float) -> bool:
        """Whether an open notice explains that a parcel has departed."""
        notice = self.notice
        return (
            notice is not None
            and cause in EXPLAINED_CAUSES
            and crop in notice.crops
            and thresholds_away < EXPLAINED_BELOW
        )

    def as_dict(self) -> dict[str, Any]:
        """Return plain members, fit for JSON."""
        notice = self.notice and self.notice.as_dict()
        recent = [list(each) for each in self.recent]
        return {"name": self.name, "recent": recent, "notice": notice}

    @classmethod
    def from_dict(cls, members: Mapping[str, Any]) -> "Region":
        """Return the memory that `as_dict` wrote."""
        notice = members["notice"]
        return cls(
            name=members["name"],
            recent=tuple((at, shift) for at, shift in members["recent"]),
            notice=None if notice is None else Notice.from_dict(notice),
        )


def notice_id(*, region: str, kind: str, opening: datetime) -> str:
    """Return the identity of a notice: judging again gives the same one."""
    told = "\n".join((region, kind, opening.isoformat()))
    return f"ntc_{hashlib.sha256(told.encode()).hexdigest()[:24]}"


def watch_region(
    region: Region, shifts: Sequence[CropShift], *, at: datetime
) -> tuple[Region, list[Notice]]:
    """Return the memory after a pass, and the notice if it was opened, changed or closed by it.

    The shared shift is the median over the crops that tell of it, of which there must be 3.
    Open when it is below -0.045 in 3 of the last 4 passes that have one, at least 8 days
    apart; close when it is above half of that in 3 of them.
    """
    telling = [each for each in shifts if each.tells]
    if len(telling) < CROPS_NEEDED:
        return region, []
    shared = median(each.shift for each in telling)
    below = sorted(each.crop for each in telling if each.shift < OPEN_BELOW)
    recent = (*region.recent, (microseconds(at), shared))
    region = replace(region, recent=recent[-PASSES_WINDOW:])
    if region.notice is None:
        return _maybe_opened(region, shared, below, at)
    return _observed(region, region.notice, shared, below, at)


def season_over(region: Region, *, at: datetime) -> tuple[Region, list[Notice]]:
    """Return the memory as another season begins: what was open closes."""
    after = Region(name=region.name)
    if region.notice is None:
        return after, []
    return after, [replace(region.notice, state=NoticeState.CLOSED, closed_at=at)]


def _maybe_opened(
    region: Region, shared: float, below: Sequence[str], at: datetime
) -> tuple[Region, list[Notice]]:
    dry = [when for when, shift in region.recent if shift < OPEN_BELOW]
    is_lasting = len(dry) >= PASSES_NEEDED and dry[-1] - dry[0] >= DAYS_NEEDED * DAY
    if shared >= OPEN_BELOW or not is_lasting:
        return region, []
    notice = Notice(
        id=notice_id(region=region.name, kind=KIND, opening=at),
        kind=KIND,
        state=NoticeState.OPEN,
        opened_at=at,
        closed_at=None,
        measure=MEASURE,
        shift=shared,
        crops=tuple(below),
    )
    return replace(region, notice=notice), [notice]


def _observed(
    region: Region, notice: Notice, shared: float, below: Sequence[str], at: datetime
) -> tuple[Region, list[Notice]]:
    if sum(shift > CLOSE_ABOVE for _, shift in region.recent) >= PASSES_NEEDED:
        closed = replace(notice, state=NoticeState.CLOSED, closed_at=at)
        return Region(name=region.name), [closed]
    crops = tuple(sorted({*notice.crops, *below}))
    moved = replace(notice, shift=min(notice.shift, shared), crops=crops)
    changed = [moved] if moved != notice else []
    return replace(region, notice=moved), changed
