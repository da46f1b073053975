"""A look that departed, with the figures that an alert and its cause are made of."""

from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any


@dataclass(frozen=True, slots=True, kw_only=True)
class DepartedLook:
    """A look whose score reached the share of the threshold that tells of a cause.

    Attributes
    ----------
    at
        Acquisition of the look, microseconds since 1970.
    departs
        Whether the score reached the threshold itself.
    index
        The measure that leads the score.
    observed, expected, shortfall
        By measure, known figures only.
    departures
        By measure of the rule, with the sign of the shortfall.
    water
        Share of the parcel's cells classed as water; None = unknown.
    rising
        By how much the expected NDVI rose over the past 20 days; None = unknown.
    best
        Highest NDVI of the parcel's looks in the 25 days before; None = there was none.
    p
        Share of past looks that were as far out; None = unknown.
    is_weak
        Whether the cohort was too small to vouch for a single look.
    low_power
        Whether the look has no crop to be compared with.
    """

    at: int
    scene: str
    crop: str
    score: float
    departs: bool
    index: str
    observed: Mapping[str, float]
    expected: Mapping[str, float]
    shortfall: Mapping[str, float]
    departures: Mapping[str, float]
    water: float | None
    basis: str
    is_new_crop: bool
    is_weak: bool
    low_power: bool
    baseline: str
    rising: float | None = None
    best: float | None = None
    p: float | None = None

    def as_dict(self) -> dict[str, Any]:
        """Return plain members, fit for JSON."""
        return {field.name: getattr(self, field.name) for field in fields(self)}

    @classmethod
    def from_dict(cls, members: Mapping[str, Any]) -> "DepartedLook":
        """Return the look that `as_dict` wrote."""
        return cls(**members)
