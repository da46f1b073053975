"""Rules: which measures are watched, and how long and how far they must depart.

A rule is one entry in `RULES`.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum
from typing import Final

CAUSE_SHARE: Final = 0.6
"""Looks from this share of the threshold on tell of the cause of a departure."""


class Direction(StrEnum):
    """The side on which a measure is worse than expected."""

    BELOW = "below"
    ABOVE = "above"

    @property
    def sign(self) -> float:
        """-1 where lower is worse, 1 where higher is worse."""
        return -1.0 if self is Direction.BELOW else 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Watched:
    """A measure that a rule watches, and its worse side."""

    index: str
    direction: Direction


@dataclass(frozen=True, slots=True, kw_only=True)
class Thresholds:
    """Scores from which on a look departs, and from which on one look is enough."""

    look: float
    single_look: float

    @property
    def cause(self) -> float:
        """The score from which on a look tells of the cause."""
        return CAUSE_SHARE * self.look


@dataclass(frozen=True, slots=True, kw_only=True)
class Severities:
    """Scores at which an alert is no longer of low, and no longer of medium severity."""

    medium: float = 4.5
    high: float = 9.0

    def of(self, score: float) -> str:
        """Return ``low``, ``medium`` or ``high``."""
        if score < self.medium:
            return "low"
        return "medium" if score < self.high else "high"


@dataclass(frozen=True, slots=True, kw_only=True)
class Rule:
    """A condition that opens and closes alerts.

    Attributes
    ----------
    thresholds
        For crops with history.
    new_crop
        For crops without: what is usual is known from the same pass alone.
    looks_needed, looks_window
        So many departing looks among the last so many open an alert.
    min_valid
        Valid share that makes a pass a look.
    close_below, looks_to_close
        So many looks in a row below this score close it.
    clear_cohort
        With fewer clear looks of the crop in the pass a single look opens nothing, and the
        judgement is marked weak.
    """

    id: str
    title: str
    measures: tuple[Watched, ...]
    thresholds: Thresholds
    new_crop: Thresholds
    looks_needed: int = 2
    looks_window: int = 3
    min_valid: float = 0.6
    close_below: float = 1.5
    looks_to_close: int = 2
    clear_cohort: int = 3
    severities: Severities = Severities()

    @property
    def signs(self) -> Mapping[str, float]:
        """Sign of the worse side by measure."""
        return {watched.index: watched.direction.sign for watched in self.measures}

    def direction(self, index: str) -> Direction:
        """Return the worse side of a measure of the rule."""
        return next(each.direction for each in self.measures if each.index == index)


RULES: Final[Mapping[str, Rule]] = {
    rule.id: rule
    for rule in (
        Rule(
            id="default",
            title="A parcel departs from its baseline in greenness, moisture, burn or water",
            measures=(
                Watched(index="ndvi", direction=Direction.BELOW),
                Watched(index="ndmi", direction=Direction.BELOW),
                Watched(index="nbr", direction=Direction.BELOW),
                Watched(index="ndwi", direction=Direction.ABOVE),
            ),
            thresholds=Thresholds(look=3.0, single_look=9.0),
            new_crop=Thresholds(look=4.0, single_look=11.0),
        ),
    )
}
