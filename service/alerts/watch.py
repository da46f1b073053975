"""What is remembered of each parcel from look to look."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from math import isnan
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.alerts.alert import Alert
from service.alerts.looks import DepartedLook
from service.alerts.rules import Rule

LOOKS_BEFORE: Final = 2
"""Looks before the first departing one, against which it is sudden or not."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Watch:
    """The memory of one rule over the parcels of a season axis; never changed in place.

    Arrays hold one row per parcel, in the order of `places`, and the last judged looks side
    by side, the newest last.

    Attributes
    ----------
    places
        Parcel → row.
    at
        Acquisition of the last looks, microseconds since 1970, 0 = none; shape (parcels,
        looks).
    departs
        Whether each reached the threshold, shape (parcels, looks).
    shortfalls
        Theirs in the rule's measures, NaN = unknown, shape (parcels, looks, measures).
    fresh
        How many of the last looks the window for opening holds, shape (parcels,).
    below
        Looks in a row below the closing score, shape (parcels,).
    quiet
        Whether a person closed the last alert and the parcel has not returned since.
    trail
        Parcel → its last departed looks, in order of time.
    open, closed
        Parcel → its alert that isn't closed; the last one that is.
    """

    places: Mapping[str, int]
    at: NDArray[np.int64]
    departs: NDArray[np.bool_]
    shortfalls: NDArray[np.float64]
    fresh: NDArray[np.int64]
    below: NDArray[np.int64]
    quiet: NDArray[np.bool_]
    trail: Mapping[str, tuple[DepartedLook, ...]]
    open: Mapping[str, Alert]
    closed: Mapping[str, Alert]

    @classmethod
    def nothing(cls, rule: Rule) -> "Watch":
        """Return the memory before the first look."""
        looks = rule.looks_window + LOOKS_BEFORE
        return cls(
            places={},
            at=np.zeros((0, looks), dtype=np.int64),
            departs=np.zeros((0, looks), dtype=bool),
            shortfalls=np.zeros((0, looks, len(rule.measures))),
            fresh=np.zeros(0, dtype=np.int64),
            below=np.zeros(0, dtype=np.int64),
            quiet=np.zeros(0, dtype=bool),
            trail={},
            open={},
            closed={},
        )

    def with_places(self, parcels: Sequence[str]) -> "Watch":
        """Return a copy with a row for each of the parcels as well."""
        new = [parcel for parcel in parcels if parcel not in self.places]
        rows = len(self.places)
        places = {**self.places, **{parcel: rows + at for at, parcel in enumerate(new)}}
        return replace(
            self,
            places=places,
            at=_longer(self.at, len(new)),
            departs=_longer(self.departs, len(new)),
            shortfalls=_longer(self.shortfalls, len(new), fill=np.nan),
            fresh=_longer(self.fresh, len(new)),
            below=_longer(self.below, len(new)),
            quiet=_longer(self.quiet, len(new)),
        )

    def in_new_season(self, rule: Rule) -> "Watch":
        """Return what outlasts a season: alerts that aren't closed, and nothing else."""
        kept = Watch.nothing(rule).with_places(sorted(self.open))
        trail = {parcel: self.trail[parcel] for parcel in self.open if parcel in self.trail}
        return replace(kept, open=dict(self.open), trail=trail)

    def to_dict(self) -> dict[str, Any]:
        """Return plain members by parcel, fit for JSON, that `from_dict` reads."""
        return {parcel: self._of_parcel(parcel, row) for parcel, row in sorted(self.places.items())}

    @classmethod
    def from_dict(cls, members: Mapping[str, Any], rule: Rule) -> "Watch":
        """Return the memory that `to_dict` wrote for the same rule."""
        watch = cls.nothing(rule).with_places(list(members))
        for row, each in enumerate(members.values()):
            held = len(each["at"])
            if held:
                watch.at[row, -held:] = each["at"]
                watch.departs[row, -held:] = each["departs"]
                # None becomes NaN.
                watch.shortfalls[row, -held:] = np.array(each["shortfalls"], dtype=np.float64)
            watch.fresh[row], watch.below[row] = each["fresh"], each["below"]
            watch.quiet[row] = each["quiet"]
        return replace(
            watch,
            trail={
                parcel: tuple(DepartedLook.from_dict(look) for look in each["trail"])
                for parcel, each in members.items()
                if each["trail"]
            },
            open=_alerts(members, "open"),
            closed=_alerts(members, "closed"),
        )

    def _of_parcel(self, parcel: str, row: int) -> dict[str, Any]:
        held = self.at[row] > 0
        shortfalls: list[list[float]] = self.shortfalls[row][held].tolist()
        alerts = {"open": self.open.get(parcel), "closed": self.closed.get(parcel)}
        return {
            "at": self.at[row][held].tolist(),
            "departs": self.departs[row][held].tolist(),
            "shortfalls": [[None if isnan(each) else each for each in look] for look in shortfalls],
            "fresh": int(self.fresh[row]),
            "below": int(self.below[row]),
            "quiet": bool(self.quiet[row]),
            "trail": [look.as_dict() for look in self._needed(parcel, row)],
            **{name: alert and alert.as_dict() for name, alert in alerts.items()},
        }

    def _needed(self, parcel: str, row: int) -> tuple[DepartedLook, ...]:
        """Return the departed looks that a later one may be put beside."""
        trail = self.trail.get(parcel, ())
        if parcel in self.open:
            return trail
        window = self.at.shape[1] - LOOKS_BEFORE
        return tuple(look for look in trail if look.at >= self.at[row, -window])


def _longer(array: NDArray[Any], rows: int, *, fill: float = 0.0) -> NDArray[Any]:
    added = np.full((rows, *array.shape[1:]), fill).astype(array.dtype)
    return np.concatenate([array, added])


def _alerts(members: Mapping[str, Any], name: str) -> dict[str, Alert]:
    return {
        parcel: Alert.from_dict(each[name])
        for parcel, each in members.items()
        if each[name] is not None
    }
