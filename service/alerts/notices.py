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
from statistics import median
from typing import Any, Final

KIND: Final = "dry_spell"
MEASURE: Final = "ndmi"
LOOKS_OF_CROP: Final = 8
GREEN: Final = 0.4
"""A crop that is expected to have less cover than this tells of soil, not of plants."""
HAZE_LIMIT: Final = 0.015
CROPS_NEEDED: Final = 3
OPEN_BELOW: Final = -0.045
CLOSE_ABOVE: Final = 0.5 * OPEN_BELOW
PASSES_NEEDED: Final = 3
PASSES_WINDOW: Final = 4
EXPLAINED_CAUSES: Final = frozenset({"moisture_stress"})
"""What a parcel's alert may look like to be explained by a notice."""
EXPLAINED_BELOW: Final = 2.0
"""A parcel this many thresholds away from its own crop has a reason of its own."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CropShift:
    """One crop in one pass: how far it is off its usual course, NaN = unknown.

    `looks` counts its parcels, `shift` is that of NDMI, `haze` that of blue - 0.5 red;
    `green` is the NDVI that its course expects on the day.
    """

    crop: str
    looks: int
    shift: float
    green: float
    haze: float

    @property
    def tells(self) -> bool:
        """Whether the crop says something about the region."""
        return self.looks >= LOOKS_OF_CROP and self.green > GREEN and self.haze < HAZE_LIMIT


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

    `recent` are the shared shifts of the last passes that told of one, the newest last.
    """

    name: str = ""
    recent: tuple[float, ...] = ()
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
        return {"name": self.name, "recent": list(self.recent), "notice": notice}

    @classmethod
    def from_dict(cls, members: Mapping[str, Any]) -> "Region":
        """Return the memory that `as_dict` wrote."""
        notice = members["notice"]
        return cls(
            name=members["name"],
            recent=tuple(members["recent"]),
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
    Open when it is below -0.045 in 3 of the last 4 passes that have one; close when it is
    above half of that in 3 of them.
    """
    telling = [each for each in shifts if each.tells]
    if len(telling) < CROPS_NEEDED:
        return region, []
    shared = median(each.shift for each in telling)
    below = sorted(each.crop for each in telling if each.shift < OPEN_BELOW)
    region = replace(region, recent=(*region.recent, shared)[-PASSES_WINDOW:])
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
    count = sum(each < OPEN_BELOW for each in region.recent)
    if shared >= OPEN_BELOW or count < PASSES_NEEDED:
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
    if sum(each > CLOSE_ABOVE for each in region.recent) >= PASSES_NEEDED:
        closed = replace(notice, state=NoticeState.CLOSED, closed_at=at)
        return Region(name=region.name), [closed]
    crops = tuple(sorted({*notice.crops, *below}))
    moved = replace(notice, shift=min(notice.shift, shared), crops=crops)
    changed = [moved] if moved != notice else []
    return replace(region, notice=moved), changed
