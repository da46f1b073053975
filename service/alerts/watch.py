"""What is remembered of each parcel from look to look."""

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.alerts.alert import Alert
from service.alerts.looks import DepartedLook
from service.alerts.rules import Rule

LOOKS_BEFORE: Final = 2
"""Looks before the first departing one, against which it is sudden or not."""
LOOKS_OF_COVER: Final = 12
"""Looks whose NDVI is remembered: 25 days of one every other day."""
_BY_ROW: Final = ("at", "cover", "score", "departs", "shortfalls", "fresh", "below", "quiet")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Watch:
    """The memory of one rule over the parcels of a season axis; never changed in place.

    Arrays hold one row per parcel, in the order of `places`, and the last judged looks side
    by side, the newest last.

    Attributes
    ----------
    places
        Parcel → row.
    at, cover
        Acquisition of the last looks, microseconds since 1970, 0 = none, and their NDVI, NaN
        = unknown; shape (parcels, LOOKS_OF_COVER).
    score, departs
        Score of each, NaN = none, and whether it reached the threshold, shape (parcels, looks).
    shortfalls
        Theirs in the rule's measures, NaN = unknown, shape (parcels, looks, measures).
    fresh
        How many of the last looks the window for opening holds, shape (parcels,).
    below
        Looks in a row below the closing score, shape (parcels,).
    quiet
        Whether the parcel raises nothing until it has returned: a person closed its last
        alert, or the diary explains what lasts.
    strengths
        Those of the alerts that the season opened, in the order of opening.
    trail
        Parcel → its last departed looks, in order of time.
    held
        Parcels whose alert is held back because something explains it.
    open, closed
        Parcel → its alert that isn't closed; the last one that is.
    """

    places: Mapping[str, int]
    at: NDArray[np.int64]
    cover: NDArray[np.float64]
    score: NDArray[np.float64]
    departs: NDArray[np.bool_]
    shortfalls: NDArray[np.float64]
    fresh: NDArray[np.int64]
    below: NDArray[np.int64]
    quiet: NDArray[np.bool_]
    strengths: tuple[float, ...]
    trail: Mapping[str, tuple[DepartedLook, ...]]
    held: frozenset[str]
    open: Mapping[str, Alert]
    closed: Mapping[str, Alert]

    @classmethod
    def nothing(cls, rule: Rule) -> "Watch":
        """Return the memory before the first look."""
        looks = rule.looks_window + LOOKS_BEFORE
        return cls(
            places={},
            at=np.zeros((0, max(looks, LOOKS_OF_COVER)), dtype=np.int64),
            cover=np.zeros((0, max(looks, LOOKS_OF_COVER))),
            score=np.zeros((0, looks)),
            departs=np.zeros((0, looks), dtype=bool),
            shortfalls=np.zeros((0, looks, len(rule.measures))),
            fresh=np.zeros(0, dtype=np.int64),
            below=np.zeros(0, dtype=np.int64),
            quiet=np.zeros(0, dtype=bool),
            strengths=(),
            trail={},
            held=frozenset(),
            open={},
            closed={},
        )

    @property
    def looks(self) -> int:
        """How many looks the narrow arrays hold."""
        return int(self.score.shape[1])

    def with_places(self, parcels: Sequence[str]) -> "Watch":
        """Return a copy with a row for each of the parcels as well."""
        new = [parcel for parcel in parcels if parcel not in self.places]
        if not new:
            return self
        rows = len(self.places)
        places = {**self.places, **{parcel: rows + at for at, parcel in enumerate(new)}}
        return replace(
            self,
            places=places,
            at=_longer(self.at, len(new)),
            cover=_longer(self.cover, len(new), fill=np.nan),
            score=_longer(self.score, len(new), fill=np.nan),
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

    def to_arrays(self) -> dict[str, NDArray[Any]]:
        """Return plain arrays that `from_arrays` reads, parcels in order of name."""
        names = sorted(self.places)
        rows = np.fromiter((self.places[name] for name in names), np.int64, len(names))
        told = {
            "trail": {
                parcel: [look.as_dict() for look in kept]
                for parcel in sorted(self.trail)
                if (kept := self._needed(parcel))
            },
            "held": sorted(self.held),
            "open": {parcel: self.open[parcel].as_dict() for parcel in sorted(self.open)},
            "closed": {parcel: self.closed[parcel].as_dict() for parcel in sorted(self.closed)},
        }
        return {
            "parcels": np.array(names, dtype=np.str_),
            **{name: getattr(self, name)[rows] for name in _BY_ROW},
            "strengths": np.array(self.strengths, dtype=np.float64),
            "told": _bytes_of(told),
        }

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, NDArray[Any]]) -> "Watch":
        """Return the memory that `to_arrays` wrote."""
        told = json.loads(arrays["told"].tobytes())
        return cls(
            places={parcel: row for row, parcel in enumerate(arrays["parcels"].tolist())},
            **{name: arrays[name] for name in _BY_ROW},
            strengths=tuple(arrays["strengths"].tolist()),
            trail={
                parcel: tuple(DepartedLook.from_dict(look) for look in looks)
                for parcel, looks in told["trail"].items()
            },
            held=frozenset(told["held"]),
            open={parcel: Alert.from_dict(alert) for parcel, alert in told["open"].items()},
            closed={parcel: Alert.from_dict(alert) for parcel, alert in told["closed"].items()},
        )

    def _needed(self, parcel: str) -> tuple[DepartedLook, ...]:
        """Return the departed looks that a later one may be put beside."""
        trail = self.trail.get(parcel, ())
        if parcel in self.open:
            return trail
        window = self.looks - LOOKS_BEFORE
        return tuple(look for look in trail if look.at >= self.at[self.places[parcel], -window])


def _longer(array: NDArray[Any], rows: int, *, fill: float = 0.0) -> NDArray[Any]:
    added = np.full((rows, *array.shape[1:]), fill).astype(array.dtype)
    return np.concatenate([array, added])


def _bytes_of(told: Mapping[str, Any]) -> NDArray[np.uint8]:
    text = json.dumps(told, separators=(",", ":"), allow_nan=False)
    return np.frombuffer(text.encode(), dtype=np.uint8)
