"""What departed looks show: the figures that causes are told by."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import nan
from typing import Final

from service.alerts.looks import DepartedLook

SUDDEN: Final = 0.5
"""Share of a shortfall that came with its first look, from which on it is sudden."""
HAZE: Final = "hot"
_LOOKS: Final = 2


@dataclass(frozen=True, slots=True, kw_only=True)
class Evidence:
    """Mean figures of the last one or two departed looks; unknown measures are missing.

    Attributes
    ----------
    observed, shortfall, departures
        By measure.
    water
        Share of cells classed as water.
    suddenness
        Share of the leading shortfall that came with the first departing look, None where
        that is unknown.
    rising
        By how much the expected NDVI rose over the past 20 days.
    growth
        How many times larger the leading shortfall is at the last look beyond the threshold
        than at the first: what comes at once stays as it is.
    best
        Highest NDVI that the parcel had in the past 25 days, before the last look.
    """

    observed: Mapping[str, float]
    shortfall: Mapping[str, float]
    departures: Mapping[str, float]
    water: float | None = None
    suddenness: float | None = None
    rising: float | None = None
    best: float | None = None
    growth: float = 1.0

    def short(self, measure: str) -> float:
        """Return the mean shortfall of a measure, NaN where unknown: no limit holds then."""
        return self.shortfall.get(measure, nan)

    def seen(self, measure: str) -> float:
        """Return the mean observed value of a measure, NaN where unknown."""
        return self.observed.get(measure, nan)

    @property
    def may_be_sudden(self) -> bool:
        """Whether the departure was sudden, or it is unknown whether it was."""
        return self.suddenness is None or self.suddenness >= SUDDEN

    @property
    def snow_index(self) -> float:
        """NDSI; where it was not measured, that of the mean reflectances, NaN = unknown.

        The index of means is not the mean of the index, which weighs dark cells more.
        """
        if "ndsi" in self.observed:
            return self.observed["ndsi"]
        green, swir16 = self.seen("green"), self.seen("swir16")
        return (green - swir16) / (green + swir16) if green + swir16 > 0 else nan


def evidence_of(looks: Sequence[DepartedLook], suddenness: float | None) -> Evidence:
    """Return the evidence of the last one or two of some departed looks, in order of time."""
    last = looks[-_LOOKS:]
    water = [look.water for look in last if look.water is not None]
    return Evidence(
        observed=_means([look.observed for look in last]),
        shortfall=_means([look.shortfall for look in last]),
        departures=_means([look.departures for look in last]),
        water=sum(water) / len(water) if water else None,
        suddenness=suddenness,
        rising=last[-1].rising,
        best=last[-1].best,
        growth=_growth(looks),
    )


def _growth(looks: Sequence[DepartedLook]) -> float:
    beyond = [look for look in looks if look.departs] or looks
    index = max(beyond, key=lambda look: look.score).index
    first, last = beyond[0].shortfall.get(index), beyond[-1].shortfall.get(index)
    return 1.0 if not first or last is None else last / first


def _means(figures: Sequence[Mapping[str, float]]) -> dict[str, float]:
    known = {name: [each[name] for each in figures if name in each] for name in figures[-1]}
    return {name: sum(values) / len(values) for name, values in known.items()}
