"""What people know to have happened on a parcel, and which causes that explains.

A fitting entry explains instead of alarming: no alert opens. One that falls into the time
of an alert without fitting its cause is written beside it, and no more.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from enum import StrEnum
from typing import Final

DAYS_BEFORE: Final = 3
"""A change may be seen a little before the day that a person wrote down."""


class DiaryKind(StrEnum):
    """What may have happened."""

    SOWING = "sowing"
    HARVEST = "harvest"
    MOWING = "mowing"
    GRAZING = "grazing"
    IRRIGATION = "irrigation"
    PLOUGHING = "ploughing"
    BURNING = "burning"
    OTHER = "other"


@dataclass(frozen=True, slots=True, kw_only=True)
class DiaryEntry:
    """Something that a person knows to have happened on a parcel, both days included."""

    kind: DiaryKind
    parcel: str
    first: date
    last: date

    @property
    def said(self) -> str:
        """What it is and when, for the reader."""
        when = f"{self.first}" if self.first == self.last else f"{self.first} to {self.last}"
        return f"{self.kind.value} {when}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Explains:
    """Which causes a kind of entry explains, and how long after its last day it still does.

    `lasts` = what was done stays visible until the parcel has grown back: an explained
    parcel keeps quiet until it has returned. Otherwise it may alarm after those days.
    """

    causes: frozenset[str]
    days_after: int
    lasts: bool


_COVER_GOES: Final = frozenset({"removal", "partial_loss", "decline", "undetermined"})
EXPLAINED: Final[Mapping[DiaryKind, Explains]] = {
    DiaryKind.HARVEST: Explains(causes=_COVER_GOES, days_after=20, lasts=True),
    DiaryKind.MOWING: Explains(causes=_COVER_GOES, days_after=20, lasts=True),
    DiaryKind.GRAZING: Explains(causes=_COVER_GOES, days_after=20, lasts=True),
    DiaryKind.PLOUGHING: Explains(
        causes=_COVER_GOES | {"residual_cloud"}, days_after=20, lasts=True
    ),
    DiaryKind.SOWING: Explains(causes=_COVER_GOES | {"late_growth"}, days_after=45, lasts=True),
    DiaryKind.IRRIGATION: Explains(
        causes=frozenset({"flood", "undetermined"}), days_after=10, lasts=False
    ),
    DiaryKind.BURNING: Explains(
        causes=frozenset({"burn"}) | _COVER_GOES, days_after=30, lasts=True
    ),
    DiaryKind.OTHER: Explains(
        causes=_COVER_GOES
        | {"flood", "burn", "late_growth", "moisture_stress", "residual_cloud", "snow"},
        days_after=10,
        lasts=False,
    ),
}
"""Which changes follow what is done to a field: common practice. Days leave room for the
looks that it takes to see a change, two of three, under passing cloud."""


class Diary:
    """The entries of a season axis, found by parcel and day."""

    def __init__(self, entries: Iterable[DiaryEntry] = ()) -> None:
        self._of_parcel: dict[str, list[DiaryEntry]] = {}
        for entry in sorted(entries, key=lambda one: (one.first, one.last, one.kind)):
            self._of_parcel.setdefault(entry.parcel, []).append(entry)

    def around(self, parcel: str, first: date, last: date) -> Sequence[DiaryEntry]:
        """Return the entries of a parcel that may be behind a departure of these days."""
        return [
            entry
            for entry in self._of_parcel.get(parcel, ())
            if entry.first - timedelta(days=DAYS_BEFORE) <= last and first <= _until(entry)
        ]

    def explanation(self, parcel: str, cause: str, first: date, last: date) -> DiaryEntry | None:
        """Return the latest entry that explains a departure by a cause.

        Parameters
        ----------
        first, last
            Days of the first departing look and of the newest one. The departure must have
            begun when the entry did or later (but for a few days), and not after its reach.
        """
        fitting = [
            entry
            for entry in self.around(parcel, first, last)
            if cause in EXPLAINED[entry.kind].causes
            and entry.first - timedelta(days=DAYS_BEFORE) <= first <= _until(entry)
        ]
        return fitting[-1] if fitting else None


def _until(entry: DiaryEntry) -> date:
    return entry.last + timedelta(days=EXPLAINED[entry.kind].days_after)
