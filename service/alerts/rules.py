"""Rules: which measures are watched, and how long and how far they must depart.

A rule is one entry in `RULES`, or what an operator put. A rule whose threshold is ``auto``
(None here) takes the one that replaying the past gives (`service.alerts.tuning`).
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from enum import StrEnum
from typing import Final

DEFAULT_THRESHOLD: Final = 3.0
"""Threshold while there is too little history to replay."""
SINGLE_LOOK_FACTOR: Final = 3.0
"""One look this many thresholds out opens an alert alone."""
NEW_CROP_EXTRA: Final = 0.3
"""How much further a look of a crop without history must depart; twice that if it is alone."""
LOW_POWER_FACTOR: Final = 2.0
"""How many times further a look without a crop must depart: its own history is all it has."""

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
    threshold
        Score from which on a look departs; None = ``auto``, by replaying the past.
    single_look_threshold
        Score from which on one look is enough; None = three times the threshold.
    looks_needed, looks_window
        So many departing looks among the last so many open an alert.
    min_valid
        Valid share that makes a pass a look.
    crops, holdings, months
        Where and when alerts may open: crops, holdings, calendar months of the opening look
        (1 to 12); None = all. They limit opening alone: what is open goes on and closes.
    enabled
        Whether it is folded at all.
    close_below, looks_to_close
        So many looks in a row below this score close it.
    clear_cohort
        With fewer clear looks of the crop in the pass a single look opens nothing, and the
        judgement is marked weak.
    """

    id: str
    title: str
    measures: tuple[Watched, ...]
    threshold: float | None = None
    single_look_threshold: float | None = None
    looks_needed: int = 2
    looks_window: int = 3
    min_valid: float = 0.6
    crops: frozenset[str] | None = None
    holdings: frozenset[str] | None = None
    months: frozenset[int] | None = None
    enabled: bool = True
    close_below: float = 1.5
    looks_to_close: int = 2
    clear_cohort: int = 3
    severities: Severities = Severities()

    @property
    def is_auto(self) -> bool:
        """Whether the past sets its threshold."""
        return self.threshold is None

    @property
    def thresholds(self) -> Thresholds:
        """For looks of crops with history; before any tuning, those of the default."""
        look = DEFAULT_THRESHOLD if self.threshold is None else self.threshold
        single = self.single_look_threshold
        return Thresholds(
            look=look, single_look=SINGLE_LOOK_FACTOR * look if single is None else single
        )

    @property
    def new_crop(self) -> Thresholds:
        """For crops without history: what is usual is known from the same pass alone."""
        known = self.thresholds
        return Thresholds(
            look=known.look + NEW_CROP_EXTRA, single_look=known.single_look + 2 * NEW_CROP_EXTRA
        )

    @property
    def low_power(self) -> Thresholds:
        """For looks without a crop."""
        known = self.thresholds
        return Thresholds(
            look=LOW_POWER_FACTOR * known.look, single_look=LOW_POWER_FACTOR * known.single_look
        )

    @property
    def signs(self) -> Mapping[str, float]:
        """Sign of the worse side by measure."""
        return {watched.index: watched.direction.sign for watched in self.measures}

    def direction(self, index: str) -> Direction:
        """Return the worse side of a measure of the rule."""
        return next(each.direction for each in self.measures if each.index == index)

    def at(self, threshold: float) -> "Rule":
        """Return the rule with a threshold; one that an operator set stays as it is."""
        return replace(self, threshold=threshold) if self.is_auto else self


RULES: Final[Mapping[str, Rule]] = {
    rule.id: rule
    for rule in (
        Rule(
            id="default",
            title="A parcel departs from its baseline in greenness, moisture, burn, water or light",
            measures=(
                Watched(index="ndvi", direction=Direction.BELOW),
                Watched(index="ndmi", direction=Direction.BELOW),
                Watched(index="nbr", direction=Direction.BELOW),
                Watched(index="ndwi", direction=Direction.ABOVE),
                # Water and char darken it however ripe the crop is.
                Watched(index="nir", direction=Direction.BELOW),
            ),
        ),
    )
}
