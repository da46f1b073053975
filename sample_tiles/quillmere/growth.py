"""How crops grow over a season: calendars, weather, and how fields deviate from both.

Days count from the season's first day (1 October). Every deviation is drawn evenly between
two ends: no field strays without a cause, so whoever accuses another one is wrong.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from quillmere.land import BARLEY, BEET, FIELDS, GRASS, MAIZE, RAPE, WHEAT, YEARS
from quillmere.surfaces import (
    CHAR,
    MUD_WATER,
    SURFACES,
    Numbers,
    mixed,
    plant_spectra,
    soil_spectra,
)

Knots = tuple[tuple[float, float], ...]

# Ground that is no parcel, after the fields in every array of units.
FEATURES: Final = ("margin", "yard", "mere")


@dataclass(frozen=True, slots=True, kw_only=True)
class Calendar:
    """A crop's usual season: cover and greenness by day, and the day of harvest."""

    cover: Knots
    greenness: Knots
    harvest: float | None = None


# Typical of a temperate lowland, from memory. Flowers, lodging and mowing are left out: this
# grassland is grazed, so that it never loses its leaves in a day.
CALENDARS: Final[Mapping[str, Calendar]] = {
    WHEAT: Calendar(
        cover=((20, 0.03), (75, 0.28), (150, 0.30), (212, 0.95), (365, 0.95)),
        greenness=((0, 1.0), (264, 1.0), (292, 0.03)), harvest=308),
    BARLEY: Calendar(
        cover=((15, 0.03), (70, 0.35), (145, 0.36), (204, 0.94), (365, 0.94)),
        greenness=((0, 1.0), (247, 1.0), (272, 0.03)), harvest=286),
    RAPE: Calendar(
        cover=((0, 0.10), (50, 0.58), (145, 0.55), (196, 0.95), (365, 0.95)),
        greenness=((0, 1.0), (255, 1.0), (284, 0.05)), harvest=296),
    BEET: Calendar(
        cover=((196, 0.03), (224, 0.18), (266, 0.94), (365, 0.95)),
        greenness=((0, 1.0), (330, 1.0), (365, 0.92))),
    MAIZE: Calendar(
        cover=((212, 0.03), (238, 0.16), (280, 0.92), (365, 0.93)),
        greenness=((0, 1.0), (325, 1.0), (362, 0.35))),
    GRASS: Calendar(
        cover=((0, 0.80), (60, 0.66), (150, 0.66), (205, 0.92), (270, 0.89), (365, 0.85)),
        greenness=((0, 0.95), (240, 0.97), (290, 0.90), (365, 0.94))),
}  # fmt: skip
# After harvest: volunteers among stubble, which weathers and lets soil through.
AFTER_COVER, AFTER_STUBBLE = 0.05, 0.80


@dataclass(frozen=True, slots=True, kw_only=True)
class Weather:
    """One season's weather over the whole tile: what shifts all fields alike."""

    shift_days: float
    vigour: float
    leaf_dryness: Numbers
    soil_wetness: Numbers


@dataclass(frozen=True, slots=True, kw_only=True)
class Habits:
    """How fields differ, each array of shape (fields,): ground and tiller, and chance."""

    shift_days: Numbers
    cover: Numbers
    leaf_dryness: Numbers
    brightness: Numbers
    drainage: Numbers
    harvest_days: Numbers


@dataclass(frozen=True, slots=True, kw_only=True)
class Stand:
    """What covers each unit of land on one day, arrays of shape (units,), shares 0-1.

    `residue` is the part of the ground between plants under stubble; `water` and `char` lie
    over everything else; `leaf_dryness` 0 is a canopy with its usual water.
    """

    cover: Numbers
    greenness: Numbers
    residue: Numbers
    leaf_dryness: Numbers
    wetness: Numbers
    brightness: Numbers
    water: Numbers
    char: Numbers

    def spectra(self) -> tuple[Numbers, Numbers]:
        """Return each unit's mean spectrum and what denser plants change, (units, roles)."""
        plants = plant_spectra(self.greenness, self.leaf_dryness)
        soil = soil_spectra(self.wetness, self.brightness)
        ground = mixed(self.residue, np.asarray(SURFACES["stubble"]), soil)
        land = mixed(self.cover, plants, ground)
        # A stand varies most where it is half closed; under water or ash nothing of it shows.
        open_land = (1.0 - self.water) * (1.0 - self.char)
        varies = (4.0 * self.cover * (1.0 - self.cover) * open_land)[:, None] * (plants - ground)
        flood = 0.4 * np.asarray(SURFACES["water"]) + 0.6 * np.asarray(MUD_WATER)
        return mixed(self.water, flood, mixed(self.char, np.asarray(CHAR), land)), varies

    def taken(self, units: Sequence[int]) -> "Stand":
        """Return the stand of some units, in their order."""
        at = list(units)
        return Stand(
            cover=self.cover[at],
            greenness=self.greenness[at],
            residue=self.residue[at],
            leaf_dryness=self.leaf_dryness[at],
            wetness=self.wetness[at],
            brightness=self.brightness[at],
            water=self.water[at],
            char=self.char[at],
        )


def eased(days: Numbers, knots: Knots) -> Numbers:
    """Return values between knots, flat at each knot as growth is, level outside them."""
    at, values = np.asarray(knots).T
    place = np.clip(np.searchsorted(at, days, side="right") - 1, 0, at.size - 2)
    part = np.clip((days - at[place]) / (at[place + 1] - at[place]), 0.0, 1.0)
    part = part * part * (3.0 - 2.0 * part)
    return np.asarray(values[place] + part * (values[place + 1] - values[place]))


def weather_of(year: int, *, seed: int) -> Weather:
    """Return a season's weather: early or late, thriving or not, its rain and its drought."""
    random = np.random.default_rng([seed, year, 2])
    day = np.arange(366)
    dry_year = random.uniform(0.0, 1.0)
    rain = random.exponential(0.35, day.size) * (random.random(day.size) < 0.30 - 0.12 * dry_year)
    # Rain fills the topsoil; it dries within days, in summer faster (a bucket with a leak).
    keeps = np.exp(-1.0 / (6.0 - 2.5 * np.exp(-(((day - 280) / 70.0) ** 2))))
    wetness = np.empty(day.size)
    held = 0.4
    for at, fallen in enumerate(rain):
        held = min(held * keeps[at] + fallen, 1.0)
        wetness[at] = held
    return Weather(
        shift_days=random.uniform(-5.0, 5.0),
        vigour=random.uniform(0.97, 1.02),
        leaf_dryness=0.25 * dry_year * np.exp(-(((day - 285) / 45.0) ** 2)),
        soil_wetness=wetness,
    )


def habits_of(year: int, *, seed: int) -> Habits:
    """Return how fields differ in a season: lasting habits and those of the season."""
    lasting = np.random.default_rng([seed, 0, 3])
    of_season = np.random.default_rng([seed, year, 3])
    count = len(FIELDS)

    def between(ends: float, season_ends: float) -> Numbers:
        drawn = lasting.uniform(-ends, ends, count)
        return drawn + of_season.uniform(-season_ends, season_ends, count)

    return Habits(
        shift_days=between(1.5, 1.8),
        cover=between(0.03, 0.015),
        leaf_dryness=between(0.08, 0.04),
        brightness=between(0.08, 0.01),
        drainage=between(0.10, 0.02),
        harvest_days=between(1.0, 3.0),
    )


def fields_on(day: int, crop: str, *, weather: Weather, habits: Habits) -> dict[str, Numbers]:
    """Return cover, greenness and residue of all fields, were they all of one crop."""
    calendar = CALENDARS[crop]
    own_day = day - weather.shift_days - habits.shift_days
    cover = eased(own_day, calendar.cover) * weather.vigour * (1.0 + habits.cover)
    greenness = eased(own_day, calendar.greenness)
    residue = np.full(len(FIELDS), 0.10)
    if calendar.harvest is not None:
        harvested = day - weather.shift_days - habits.harvest_days >= calendar.harvest
        since = day - weather.shift_days - habits.harvest_days - calendar.harvest
        cover = np.where(harvested, AFTER_COVER, cover)
        greenness = np.where(harvested, 1.0, greenness)
        weathered = AFTER_STUBBLE - 0.004 * np.clip(since, 0.0, None)
        residue = np.where(harvested, weathered, residue)
    return {"cover": np.clip(cover, 0.0, 0.985), "greenness": greenness, "residue": residue}


def stand_on(year: int, day: int, *, weather: Weather, habits: Habits, seed: int) -> Stand:
    """Return the stand of every field and feature on a day of a season, without any event."""
    random = np.random.default_rng([seed, year, 4, day])
    crops = np.asarray([field.crop_in(year) for field in FIELDS])
    grown = {
        crop: fields_on(day, crop, weather=weather, habits=habits) for crop in sorted(set(crops))
    }
    states = {
        name: np.choose(
            [sorted(grown).index(crop) for crop in crops],
            [grown[crop][name] for crop in sorted(grown)],
        )
        for name in ("cover", "greenness", "residue")
    }
    count = len(FIELDS)
    # Wind, dew and the angle of view make every look a little different.
    states["cover"] = np.clip(states["cover"] + random.uniform(-0.018, 0.018, count), 0.0, 0.99)
    dryness = weather.leaf_dryness[day] + habits.leaf_dryness + random.uniform(-0.05, 0.05, count)
    wetness = weather.soil_wetness[day] * (1.0 + habits.drainage)
    wetness = np.clip(wetness + random.uniform(-0.05, 0.05, count), 0.0, 1.0)
    grass = eased(np.asarray([day - weather.shift_days]), CALENDARS[GRASS].cover)[0]

    def with_features(values: Numbers, margin: float, yard: float, mere: float) -> Numbers:
        return np.concatenate([values, [margin, yard, mere]])

    return Stand(
        cover=with_features(states["cover"], 0.85 * grass, 0.02, 0.0),
        greenness=with_features(states["greenness"], 0.90, 1.0, 1.0),
        residue=with_features(states["residue"], 0.30, 0.0, 0.0),
        leaf_dryness=with_features(dryness, weather.leaf_dryness[day], 0.0, 0.0),
        wetness=with_features(wetness, weather.soil_wetness[day], 0.1, 1.0),
        brightness=1.0 + with_features(habits.brightness, 0.0, 0.15, 0.0),
        water=with_features(np.zeros(count), 0.0, 0.0, 1.0),
        char=np.zeros(count + len(FEATURES)),
    )


def harvest_day(at: int, year: int, *, weather: Weather, habits: Habits) -> float | None:
    """Return the day on which a field is harvested, None if not within the season."""
    usual = CALENDARS[FIELDS[at].crop_in(year)].harvest
    if usual is None:
        return None
    return float(usual + weather.shift_days + habits.harvest_days[at])


def past_years() -> tuple[int, ...]:
    """Return the finished seasons."""
    return YEARS[:-1]


def joined(first: Stand, second: Stand) -> Stand:
    """Return the units of one stand and then those of another."""
    names = Stand.__dataclass_fields__
    return replace(
        first,
        **{name: np.concatenate([getattr(first, name), getattr(second, name)]) for name in names},
    )
