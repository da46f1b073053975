"""Stands day by day: each parcel's crops with its own soil, variety and sowing dates."""

from collections.abc import Sequence
from dataclasses import dataclass, fields
from typing import Final

import numpy as np

from benchmarks.histories.crops import (
    CROPS,
    GROWTH,
    HARVEST,
    MOWINGS,
    MOWN_LAI,
    REGROWS_DAYS,
    RIPENING,
    SOWING,
    Places,
)
from benchmarks.histories.optics import Figures, Stands, soil_of
from benchmarks.histories.weather import Weather, patches, wandering

_TILLED_LITTER: Final = 0.12
_SPRING_DAY: Final = 160.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Land:
    """What is a parcel's own, lasting or drawn for each season.

    Attributes
    ----------
    places
        Kilometres east and north of the region's corner, shape (parcels, 2).
    crop
        Places in `CROPS`, shape (parcels, seasons).
    season_starts
        Day on which each season begins, shape (seasons,).
    shifts
        Days by which sowing, growth, ripening and harvest come late, shape (parcels,
        seasons, 4).
    vigour
        Factor on leaf area, shape (parcels, seasons).
    brightness, thirst
        Of the ground: factor on its reflectance; exponent on the region's wetness.
    mowings
        Days of season, shape (parcels, seasons, mowings).
    litter_left, tilled_after
        Share of stubble behind a harvest, days to tillage, shape (parcels, seasons).
    catch_lai
        Leaf area of a catch crop or volunteers behind a harvest, if the field lies idle until
        spring; 0 = none; shape (parcels, seasons).
    """

    places: Figures
    crop: Places
    season_starts: Places
    shifts: Figures
    vigour: Figures
    brightness: Figures
    thirst: Figures
    mowings: Figures
    litter_left: Figures
    tilled_after: Figures
    catch_lai: Figures


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Days:
    """Stands of parcels over days; every member has shape (parcels, days).

    Members are those of `optics.Stands`, with the ground's `wetness` in place of its soil.
    """

    lai: Figures
    chlorophyll: Figures
    leaf_water: Figures
    brown: Figures
    flowers: Figures
    litter: Figures
    water: Figures
    char: Figures
    wetness: Figures

    def of(self, parcels: Sequence[int]) -> "Days":
        """Return copies of some parcels' rows."""
        return Days(**{each.name: getattr(self, each.name)[list(parcels)] for each in fields(self)})

    def copied(self) -> "Days":
        """Return copies of all rows."""
        return Days(**{each.name: getattr(self, each.name).copy() for each in fields(self)})


def land_of(
    rng: np.random.Generator, crop: Places, season_starts: Places, *, spacing_km: float
) -> Land:
    """Draw what is each parcel's own, and the weather of whole seasons on their calendars."""
    parcels, seasons = crop.shape
    places = _places(rng, parcels, spacing_km)
    return Land(
        places=places,
        crop=crop,
        season_starts=season_starts,
        shifts=_shifts(rng, crop, places),
        vigour=_vigour(rng, crop),
        brightness=np.exp(rng.normal(0.0, 0.16, parcels)),
        thirst=np.exp(rng.normal(0.0, 0.35, parcels)),
        mowings=np.array(MOWINGS)
        + rng.normal(0.0, 4.0, (1, seasons, 1))
        + rng.normal(0.0, 3.5, (parcels, 1, 1))
        + rng.normal(0.0, 2.0, (parcels, seasons, len(MOWINGS))),
        litter_left=rng.uniform(0.45, 0.9, (parcels, seasons)),
        tilled_after=rng.uniform(4.0, 45.0, (parcels, seasons)),
        catch_lai=_catch_lai(rng, parcels, seasons),
    )


def days_of(
    land: Land, weather: Weather, own: "OwnWeather", *, late: Figures | None = None
) -> Days:
    """Return the stands of all parcels over all days of the weather.

    `late` adds days to the shifts (parcels, seasons, 4): a sowing that came up late.
    """
    parcels, seasons = land.crop.shape
    shape = (parcels, weather.wetness.size)
    names = ("lai", "chlorophyll", "brown", "leaf_water", "flowers")
    grown = {name: np.zeros(shape) for name in (*names, "litter")}
    grown["litter"][:] = _TILLED_LITTER
    grown["chlorophyll"][:], grown["leaf_water"][:] = 30.0, 0.01
    shifts = land.shifts if late is None else land.shifts + late
    for parcel in range(parcels):
        for season in range(seasons):
            _catch(grown, land, parcel, season)
            _grow(grown, land, shifts, parcel, season, names)
    region = _growth(land, weather)
    return Days(
        lai=grown["lai"] * np.exp(region + own.growth),
        chlorophyll=grown["chlorophyll"] * np.exp(weather.greening + own.greening),
        leaf_water=grown["leaf_water"] * np.exp(weather.leaf_water + own.leaf_water),
        brown=grown["brown"],
        flowers=grown["flowers"],
        litter=grown["litter"],
        water=np.zeros(shape),
        char=np.zeros(shape),
        wetness=np.clip(weather.wetness ** land.thirst[:, None] + own.showers, 0.0, 1.0),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OwnWeather:
    """What departs from the region's weather at each parcel, shape (parcels, days)."""

    growth: Figures
    greening: Figures
    leaf_water: Figures
    showers: Figures


def own_weather_of(rng: np.random.Generator, places: Figures, days: int) -> OwnWeather:
    """Draw weather by place, and the ups and downs of single parcels."""
    parcels = len(places)
    drift = wandering(rng, 2, days, memory_days=30, spread=0.025)
    fields_at = np.stack([patches(rng, places, size_km=9.0) for _ in range(2)])
    showers = np.zeros((parcels, days))
    for day in np.flatnonzero(rng.random(days) < 0.10):
        fallen = np.clip(0.25 * patches(rng, places, size_km=4.0), 0.0, None)
        lasts = min(8, days - int(day))
        showers[:, day : day + lasts] += fallen[:, None] * np.exp(-np.arange(lasts) / 4.0)
    return OwnWeather(
        growth=wandering(rng, parcels, days, memory_days=30, spread=0.045) + fields_at.T @ drift,
        greening=wandering(rng, parcels, days, memory_days=40, spread=0.04),
        leaf_water=wandering(rng, parcels, days, memory_days=20, spread=0.04),
        showers=showers,
    )


def seen_at(
    days: Days, land: Land, row: Places, day: Places, sun_zenith: Figures, parcel: Places
) -> Stands:
    """Return the stands of looks: rows of `days`, days, and whose ground it is, (looks,)."""
    at = {each.name: getattr(days, each.name)[row, day] for each in fields(days)}
    wetness = at.pop("wetness")
    return Stands(**at, soil=soil_of(wetness, land.brightness[parcel]), sun_zenith=sun_zenith)


def emerges_on(land: Land, parcel: int, season: int) -> float:
    """Return the day of the season on which a parcel's stand emerges."""
    crop = CROPS[land.crop[parcel, season]]
    return crop.emergence + float(land.shifts[parcel, season, SOWING])


def ripens_on(land: Land, parcel: int, season: int) -> float:
    """Return the day of the season on which a parcel's stand begins to ripen."""
    crop = CROPS[land.crop[parcel, season]]
    mover = HARVEST if crop.ripens == crop.harvest else RIPENING
    return crop.ripens + float(land.shifts[parcel, season, mover])


def harvest_on(land: Land, parcel: int, season: int) -> float:
    """Return the day of the season on which a parcel is harvested, within the season."""
    crop = CROPS[land.crop[parcel, season]]
    return min(crop.harvest + float(land.shifts[parcel, season, HARVEST]), 363.0)


def _places(rng: np.random.Generator, parcels: int, spacing_km: float) -> Figures:
    side = int(np.ceil(np.sqrt(parcels)))
    cells = rng.permutation(side * side)[:parcels]
    grid = np.stack([cells % side, cells // side], axis=1)
    return spacing_km * (grid + rng.uniform(0.15, 0.6, (parcels, 2)))


def _shifts(rng: np.random.Generator, crop: Places, places: Figures) -> Figures:
    parcels, seasons = crop.shape
    every = (1, seasons)
    region = rng.normal(0.0, 1.0, every)  # A warm season is early from spring on.
    by_crop = rng.normal(0.0, 2.5, (len(CROPS), seasons, 4))
    shifts = by_crop[crop, np.arange(seasons)]
    lasting = rng.normal(0.0, 3.0, (parcels, 1)) + 1.5 * patches(rng, places, size_km=12.0)[:, None]
    sown = rng.normal(0.0, 4.0, every) + rng.normal(0.0, 3.5, (parcels, seasons))
    variety = rng.normal(0.0, 1.5, (parcels, seasons))
    shifts[..., SOWING] += lasting + sown
    shifts[..., GROWTH] += lasting + 6.0 * region + 0.3 * sown + variety
    shifts[..., RIPENING] += lasting + 5.5 * region + 0.2 * sown + 1.5 * variety
    shifts[..., HARVEST] += (
        lasting + 5.5 * region + variety + rng.normal(0.0, 2.0, (parcels, seasons))
    )
    return np.clip(shifts, -24.0, 24.0)


def _vigour(rng: np.random.Generator, crop: Places) -> Figures:
    parcels, seasons = crop.shape
    by_crop = rng.normal(0.0, 0.08, (len(CROPS), seasons))[crop, np.arange(seasons)]
    lasting = rng.normal(0.0, 0.09, (parcels, 1))
    factor: Figures = np.exp(by_crop + lasting + rng.normal(0.0, 0.06, (parcels, seasons)))
    return factor


def _growth(land: Land, weather: Weather) -> Figures:
    """Return the region's weather on growth for the crop that stands, (parcels, days)."""
    days = weather.wetness.size
    season = np.searchsorted(land.season_starts, np.arange(days), side="right") - 1
    season = np.clip(season, 0, land.crop.shape[1] - 1)
    growth: Figures = weather.growth[land.crop[:, season], np.arange(days)]
    return growth


def _grow(
    grown: dict[str, Figures],
    land: Land,
    shifts: Figures,
    parcel: int,
    season: int,
    names: Sequence[str],
) -> None:
    """Let one season's crop stand on one parcel."""
    crop = CROPS[land.crop[parcel, season]]
    start = int(land.season_starts[season])
    knots = np.array(crop.knots)
    at = knots[:, 0] + shifts[parcel, season, knots[:, 6].astype(int)] * (not crop.is_grass)
    at = np.maximum.accumulate(at + 0.01 * np.arange(at.size))
    at[-1] = at[-1] if crop.is_grass else min(at[-1], 363.0)
    at = np.minimum(at, at[-1])
    first, last = max(0, start + int(np.ceil(at[0]))), start + int(at[-1])
    last = min(last, grown["lai"].shape[1])
    days = np.arange(first, last)
    for column, name in enumerate(names, start=1):
        grown[name][parcel, days] = np.interp(days - start, at, knots[:, column])
    grown["lai"][parcel, days] *= land.vigour[parcel, season]
    grown["litter"][parcel, days] = 0.3 if crop.is_grass else _TILLED_LITTER
    if crop.is_grass:
        _mow(grown, land, parcel, season, days - start, days)
    else:
        _leave_stubble(grown, land, parcel, season, last)


def _mow(
    grown: dict[str, Figures],
    land: Land,
    parcel: int,
    season: int,
    on: Places,
    days: Places,
) -> None:
    for mowing in land.mowings[parcel, season]:
        since = (on - mowing) / REGROWS_DAYS
        regrown = np.clip(since, 0.0, 1.0)
        stands = grown["lai"][parcel, days]
        cut = MOWN_LAI + regrown * (stands - MOWN_LAI)
        grown["lai"][parcel, days] = np.where(since >= 0.0, np.minimum(cut, stands), stands)
        pale = np.where((since >= 0.0) & (since < 1.0), 0.25 * (1.0 - regrown), 0.0)
        grown["brown"][parcel, days] += pale


def _leave_stubble(
    grown: dict[str, Figures], land: Land, parcel: int, season: int, harvested: int
) -> None:
    tilled = harvested + int(land.tilled_after[parcel, season])
    grown["litter"][parcel, harvested:tilled] = land.litter_left[parcel, season]
    grown["litter"][parcel, tilled : tilled + 60] = _TILLED_LITTER + 0.1


def _catch_lai(rng: np.random.Generator, parcels: int, seasons: int) -> Figures:
    """Draw who sows catch crops: mostly a lasting habit."""
    does = (rng.random((parcels, 1)) < 0.3) ^ (rng.random((parcels, seasons)) < 0.06)
    return np.where(
        does,
        rng.uniform(1.0, 2.2, (parcels, seasons)),
        rng.uniform(0.0, 0.3, (parcels, seasons)),
    )


def _catch(grown: dict[str, Figures], land: Land, parcel: int, season: int) -> None:
    """Let something grow before a spring crop: from September until frost or the plough."""
    crop = CROPS[land.crop[parcel, season]]
    if crop.is_grass or crop.emergence < _SPRING_DAY:
        return
    start = int(land.season_starts[season])
    days = np.arange(max(0, start - 30), start + int(_SPRING_DAY))
    course = np.interp(days - start, (-30.0, -22.0, 35.0, 75.0, 130.0), (0.0, 0.0, 1.0, 1.0, 0.1))
    idle = grown["lai"][parcel, days] == 0.0
    grown["lai"][parcel, days[idle]] = land.catch_lai[parcel, season] * course[idle]
