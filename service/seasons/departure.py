"""One pass against the baselines: shortfalls, departures, and looks that are suspect."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.baseline import Baselines
from service.seasons.cohort import Carried, Cohort, known_crop, new_crop
from service.seasons.history import HAZE
from service.seasons.medians import Figures
from service.seasons.spread import spread_in_pass

WORSE: Final[Mapping[str, float]] = {
    "ndvi": -1.0,
    "ndmi": -1.0,
    "nbr": -1.0,
    "ndwi": 1.0,
    "nir": -1.0,
}
"""The measures by which a look is ranked among those of the past: -1 where lower is worse."""
HAZE_LIMIT: Final = 0.02
"""Haze above its expected value by more than this makes a look suspect."""
WATER_HAZE_LIMIT: Final = 0.06
"""Up to this excess of haze, dark infrared bands mean water rather than cloud."""
WATER_FALL: Final = -0.04
SHADOW_FALL: Final = -0.03
SHADOW_FALL_GREEN: Final = -0.01
SHADOW_CHANGE: Final = 0.05
"""A shadow leaves each index within this of its expected value."""
OWN_ALLOWANCE: Final = 2.0
"""What a parcel's own calendar may fall short of the cohort's word without contradicting it."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Departures:
    """What was expected of each look of a pass; figures have shape (looks, measures).

    Attributes
    ----------
    expected
        e = usual value of the crop + level of its cohort + own offset. NaN = unknown.
    shortfall
        E = observed - e.
    own_shortfall
        Observed - usual value - own offset: without this season's level of the cohort.
    spread
        S, the spread of looks about e.
    lower, higher
        By how much the crop's usual value gets lower, and higher, within a few days.
    rising
        By how much it rose over the past 20 days.
    weight
        ΣK: how much the own offset rests on.
    cohorts
        Crop → its cohort in the pass.
    carried
        Crop → what cohorts hand on to the next pass.
    """

    expected: Figures
    shortfall: Figures
    own_shortfall: Figures
    spread: Figures
    lower: Figures
    higher: Figures
    rising: Figures
    weight: Figures
    cohorts: Mapping[str, Cohort]
    carried: Mapping[str, Carried]

    def plain(self, signs: Figures) -> tuple[Figures, Figures]:
        """Return what `adverse` does, without the tolerance in time."""
        return signs * self.shortfall / self.spread, signs * self.own_shortfall / self.spread

    def adverse(self, signs: Figures) -> tuple[Figures, Figures]:
        """Return the departure towards the worse side, and by the parcel's own calendar.

        `signs`, shape (measures,), are -1 where lower is worse, 1 where higher is worse, NaN
        where neither is. A parcel may be a few days ahead or behind: by how much the usual
        value gets worse meanwhile is taken off first.
        """
        relief = np.where(signs < 0, self.lower, self.higher)
        return (
            (signs * self.shortfall - relief) / self.spread,
            (signs * self.own_shortfall - relief) / self.spread,
        )

    def signed(self, signs: Figures) -> Figures:
        """Return departures with the sign of the shortfall, shape (looks, measures).

        On the worse side they are those of `adverse`, where the tolerance in time brings a
        departure to 0 at most; elsewhere, and for measures without a worse side, they are
        shortfall / spread.
        """
        plain = self.shortfall / self.spread
        adverse, _ = self.adverse(signs)
        is_worse = signs * self.shortfall > 0
        signed: Figures = np.where(is_worse, signs * np.maximum(adverse, 0.0), plain)
        return signed


def departures_in(
    baselines: Baselines,
    *,
    parcels: Sequence[str],
    crops: Sequence[str],
    day: int,
    values: Figures,
    carried: Mapping[str, Carried],
) -> Departures:
    """Compare the looks of one pass with their baselines.

    Parameters
    ----------
    baselines
        Of the season axis.
    parcels, crops
        Of each look; every look has a crop.
    day
        Day of season of the pass.
    values
        Observed means in the measures of the baselines, shape (looks, measures), NaN =
        unknown.
    carried
        What earlier passes of the season handed on, by crop.
    """
    names = np.array(crops, dtype=np.str_)
    cohorts: dict[str, Cohort] = {}
    handed_on = dict(carried)
    filled = {name: np.full(values.shape, np.nan) for name in _OF_COHORT}
    for crop in sorted(set(crops)):
        of_crop = names == crop
        before = carried.get(crop) or Carried.nothing(values.shape[1])
        cohorts[crop], handed_on[crop] = _cohort(
            baselines, crop, values[of_crop], day=day, carried=before
        )
        for name, array in filled.items():
            array[of_crop] = getattr(cohorts[crop], name)
    offset, weight = baselines.own.offsets_on(day, baselines.own.codes(parcels, crops))
    is_new = np.array([cohorts[crop].is_new for crop in crops], dtype=bool)
    # Own offsets are about the usual course; a crop without one has none to add to.
    offset[is_new], weight[is_new] = 0.0, 0.0
    own_expected = filled["usual"] + offset
    expected = own_expected + filled["level"]
    shortfall = values - expected
    for crop, cohort in cohorts.items():
        of_crop = names == crop
        # A crop without history has no tail but what the pass shows.
        past = (baselines.middle, baselines.spread)
        middle, whole = (cohort.spread if cohort.is_new else each[crop][day] for each in past)
        filled["spread"][of_crop] = spread_in_pass(shortfall[of_crop], middle=middle, whole=whole)
    return Departures(
        expected=expected,
        shortfall=shortfall,
        own_shortfall=values - own_expected,
        spread=filled["spread"],
        lower=filled["lower"],
        higher=filled["higher"],
        rising=filled["rising"],
        weight=weight,
        cohorts=cohorts,
        carried=handed_on,
    )


def scores(adverse: Figures, own: Figures) -> tuple[Figures, NDArray[np.int64]]:
    """Return the score of each look and the measure that leads it.

    s = min(largest adverse departure, largest by the own calendar + 2): unusual against its
    cohort and not contradicted by its own calendar.

    Parameters
    ----------
    adverse, own
        Shape (looks, measures), NaN = unknown.

    Returns
    -------
    tuple
        Scores, shape (looks,), NaN where no measure is known; places of the leading measures,
        shape (looks,), -1 where there is none.
    """
    low = -np.inf
    known = np.where(np.isnan(adverse), low, adverse)
    largest = known.max(axis=1, initial=low)
    largest_own = np.where(np.isnan(own), low, own).max(axis=1, initial=low)
    score = np.minimum(largest, largest_own + OWN_ALLOWANCE)
    is_known = np.isfinite(score)
    leading = known.argmax(axis=1) if adverse.shape[1] else np.zeros(len(adverse), dtype=np.int64)
    return np.where(is_known, score, np.nan), np.where(is_known, leading, -1)


def suspect_looks(shortfall: Figures, measures: Sequence[str]) -> NDArray[np.bool_]:
    """Return which looks carry haze, cloud or shadow that the quality layer let through.

    Haze above its expected value by more than 0.02, unless near-infrared and 1.6 µm are both
    lower than expected by more than 0.04 and the excess is below 0.06: that is water. Shadow:
    all bands are darker while their ratios stay as they were.

    Parameters
    ----------
    shortfall
        Shape (looks, measures), NaN = unknown; without a blue and a red band no look is
        suspect.
    measures
        What the columns are.
    """
    column = {measure: shortfall[:, at] for at, measure in enumerate(measures)}
    unknown = np.full(len(shortfall), np.nan)
    haze, nir, swir16 = (column.get(name, unknown) for name in (HAZE, "nir", "swir16"))
    is_water = (nir < WATER_FALL) & (swir16 < WATER_FALL) & (haze < WATER_HAZE_LIMIT)
    suspect: NDArray[np.bool_] = ((haze > HAZE_LIMIT) & ~is_water) | _is_shadow(column, unknown)
    return suspect


def _is_shadow(column: Mapping[str, Figures], unknown: Figures) -> NDArray[np.bool_]:
    def short(measure: str) -> Figures:
        return column.get(measure, unknown)

    is_dark = (short("nir") < SHADOW_FALL) & (short("swir16") < SHADOW_FALL)
    is_dark &= short("green") < SHADOW_FALL_GREEN
    ratios = [np.abs(short(measure)) < SHADOW_CHANGE for measure in ("ndvi", "ndmi", "nbr")]
    shadow: NDArray[np.bool_] = is_dark & np.logical_and.reduce(ratios)
    return shadow


_OF_COHORT: Final = ("usual", "level", "spread", "lower", "higher", "rising")


def _cohort(
    baselines: Baselines, crop: str, values: Figures, *, day: int, carried: Carried
) -> tuple[Cohort, Carried]:
    if not baselines.knows(crop, day):
        return new_crop(values, day=day, carried=carried)
    return known_crop(
        values, baselines.usual[crop], baselines.spread[crop], day=day, carried=carried
    )
