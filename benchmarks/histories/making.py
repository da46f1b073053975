"""A region's history, drawn from a seed: looks of all parcels, and the truth.

Nothing here comes from the service: what it says can be held against what was put in.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from enum import StrEnum
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchmarks.histories.crops import CROPS, NAMES, Places, rotated
from benchmarks.histories.events import (
    Drawn,
    Event,
    befall,
    draw_events,
    dry_out,
    lateness_of,
    witnessed,
)
from benchmarks.histories.optics import (
    BANDS,
    PASSBANDS,
    Figures,
    measures_of,
    reflectance_of,
    sun_zenith_on,
)
from benchmarks.histories.sky import (
    KEPT_SHARE,
    Pass,
    noise_of,
    passes_of,
    shares_of,
    through,
    veils_of,
)
from benchmarks.histories.stands import (
    Days,
    Land,
    days_of,
    emerges_on,
    land_of,
    own_weather_of,
    seen_at,
)
from benchmarks.histories.weather import weather_of

Flags = NDArray[np.bool_]

LEAD_DAYS: Final = 61
LATITUDE: Final = 55.0
LAST_SEASON: Final = 2025
"""The judged season ends in this year; seasons begin on 1 October."""
SPACING_KM: Final = 1.1
LOOK_SHARE: Final = 0.6
EVENTS_SHARE: Final = 0.12
PAST_EVENTS_SHARE: Final = 0.06


class Scenario(StrEnum):
    """What kind of region a history tells of."""

    ORDINARY = "ordinary"
    DROUGHT = "drought"
    NO_HISTORY = "no-history"


@dataclass(frozen=True, slots=True, kw_only=True)
class CropSeason:
    """What grew on a parcel from one day to another, both included."""

    parcel: int
    crop: str
    from_on: date
    until_on: date


@dataclass(frozen=True, slots=True, kw_only=True)
class Drought:
    """A region's drought: its onset, and the first day on which it shows.

    It shows when the median parcel under a leafy stand has lost 0.05 of NDMI by it.
    """

    onset: int
    visible: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class History:
    """Looks of all parcels, in order of their passes, and the truth.

    Attributes
    ----------
    first_on
        Day 0.
    refs
        The parcels' names.
    places
        Kilometres east and north of the region's corner, shape (parcels, 2).
    crop
        Places in `crops.NAMES`, shape (parcels, seasons).
    seasons
        Years in which the seasons end; the last one is judged.
    season_starts
        Days, shape (seasons,).
    look_pass, look_parcel, look_season
        Places in `passes`, `refs`, `seasons`, shape (looks,).
    valid_share
        Of each look, shape (looks,).
    values
        By `optics.MEASURES`, shape (looks, measures).
    is_residual
        Whether haze, cloud or shadow slipped into a look.
    events
        What befell parcels, in all seasons.
    """

    seed: int
    scenario: Scenario
    first_on: date
    refs: tuple[str, ...]
    places: Figures
    crop: Places
    seasons: tuple[int, ...]
    season_starts: Places
    crop_seasons: tuple[CropSeason, ...]
    passes: tuple[Pass, ...]
    look_pass: Places
    look_parcel: Places
    look_season: Places
    valid_share: Figures
    values: Figures
    is_residual: Flags
    events: tuple[Event, ...]
    drought: Drought | None

    def day_of(self, at: datetime) -> int:
        """Return the day on which an instant lies."""
        return (at.astimezone(UTC).date() - self.first_on).days

    @property
    def is_judged(self) -> Flags:
        """Which looks are of the judged season, shape (looks,)."""
        judged: Flags = self.look_season == len(self.seasons) - 1
        return judged

    @property
    def is_look(self) -> Flags:
        """Which rows show enough of their parcel to be looks."""
        enough: Flags = self.valid_share >= LOOK_SHARE
        return enough


def make(
    seed: int,
    *,
    parcels: int = 400,
    past_seasons: int = 4,
    scenario: Scenario = Scenario.ORDINARY,
) -> History:
    """Draw a region's history; the same arguments give the same one.

    Parameters
    ----------
    past_seasons
        Finished seasons before the judged one; `Scenario.NO_HISTORY` has none.
    """
    rng = np.random.default_rng([seed, list(Scenario).index(scenario), parcels, past_seasons])
    past = 0 if scenario is Scenario.NO_HISTORY else past_seasons
    seasons = tuple(range(LAST_SEASON - past, LAST_SEASON + 1))
    first_on = date(seasons[0] - 1, 10, 1) - timedelta(days=LEAD_DAYS)
    starts = np.array([(date(year - 1, 10, 1) - first_on).days for year in seasons])
    days = (date(LAST_SEASON, 10, 1) - first_on).days
    land = land_of(rng, rotated(rng, parcels, len(seasons)), starts, spacing_km=SPACING_KM)
    stands, events, drought = _stands(rng, land, days, scenario, _sun(first_on, days))
    passes = [one for one in passes_of(rng, first_on, days) if one.day >= starts[0]]
    looks = _looked(rng, land, stands, passes)
    return History(
        seed=seed,
        scenario=scenario,
        first_on=first_on,
        refs=tuple(f"TH-{parcel + 1:04d}" for parcel in range(parcels)),
        places=land.places,
        crop=land.crop,
        seasons=seasons,
        season_starts=starts,
        crop_seasons=tuple(_crop_seasons(land, seasons)),
        passes=tuple(passes),
        look_season=np.searchsorted(starts, looks.day, side="right") - 1,
        look_pass=looks.in_pass,
        look_parcel=looks.parcel,
        valid_share=looks.share,
        values=looks.values,
        is_residual=looks.is_residual,
        events=tuple(events),
        drought=drought,
    )


def _stands(
    rng: np.random.Generator, land: Land, days: int, scenario: Scenario, sun: Figures
) -> tuple[Days, list[Event], Drought | None]:
    """Return stands with all that befell them, and what that was."""
    weather = weather_of(rng, days)
    own = own_weather_of(rng, land.places, days)
    last = land.crop.shape[1] - 1
    drawn: list[Drawn] = []
    for season in range(last + 1):
        share = EVENTS_SHARE if season == last else PAST_EVENTS_SHARE
        drawn += draw_events(rng, land, season, share=share)
    usual = days_of(land, weather, own)
    late = days_of(land, weather, own, late=lateness_of(drawn, land))
    drought = None
    if scenario is Scenario.DROUGHT:
        onset = int(rng.integers(228, 252))
        thirst = np.exp(rng.normal(0.0, 0.18, len(land.crop)))
        before = usual.copied()
        for stands in (usual, late):
            dry_out(stands, land, last, onset=onset, thirst=thirst)
        drought = _drought_of(before, usual, land, land.season_starts[last] + onset, sun)
    befall(late, drawn, land)
    rows = [one.parcel for one in drawn]
    events = witnessed(drawn, late.of(rows), usual.of(rows), land, sun)
    return late, events, drought


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Looks:
    day: Places
    in_pass: Places
    parcel: Places
    share: Figures
    values: Figures
    is_residual: Flags


def _looked(rng: np.random.Generator, land: Land, stands: Days, passes: Sequence[Pass]) -> _Looks:
    """Look at all parcels in all passes, as far as clouds let them be seen."""
    shares = shares_of(rng, list(passes), land.places)
    in_pass, parcel = np.nonzero(shares >= KEPT_SHARE)
    share = shares[in_pass, parcel]
    day = np.array([one.day for one in passes])[in_pass]
    of_year = np.array([one.at.timetuple().tm_yday for one in passes], dtype=np.float64)
    sun = sun_zenith_on(of_year, LATITUDE)[in_pass]
    sensors = np.array([one.sensor for one in passes])[in_pass]
    bands = np.empty((share.size, len(BANDS)))
    for sensor in PASSBANDS:
        some = np.flatnonzero(sensors == sensor)
        seen = seen_at(stands, land, parcel[some], day[some], sun[some], parcel[some])
        bands[some] = reflectance_of(seen, sensor)
    veils = veils_of(rng, share, in_pass)
    is_landsat = (sensors == "landsat-c2-l2").astype(np.float64)
    bands *= noise_of(rng, in_pass, len(passes), len(BANDS), is_landsat=is_landsat)
    bands[:] = np.round(np.clip(through(veils, bands), 0.0005, 1.2), 5)
    return _Looks(
        day=day,
        in_pass=in_pass,
        parcel=parcel,
        share=share,
        values=np.round(measures_of(bands), 5),
        is_residual=veils.is_residual,
    )


def _sun(first_on: date, days: int) -> Figures:
    """Return the sun's zenith angle on every day."""
    of_year = [(first_on + timedelta(days=day)).timetuple().tm_yday for day in range(days)]
    return sun_zenith_on(np.array(of_year, dtype=np.float64), LATITUDE)


def _drought_of(before: Days, after: Days, land: Land, onset: int, sun: Figures) -> Drought:
    """Return when a drought shows in the median leafy stand."""
    days = np.arange(onset, min(onset + 90, sun.size))
    parcels = np.arange(len(land.crop))
    lost = np.zeros(days.size)
    for at, day in enumerate(days):
        leafy = parcels[before.lai[:, day] > 1.5]
        if leafy.size == 0:
            continue
        on, zenith = np.full(leafy.size, day), np.full(leafy.size, sun[day])
        ndmi = [
            measures_of(
                reflectance_of(seen_at(stands, land, leafy, on, zenith, leafy), "sentinel-2-l2a")
            )[:, 1]
            for stands in (before, after)
        ]
        lost[at] = float(np.median(ndmi[0] - ndmi[1]))
    shown = np.flatnonzero(lost >= 0.05)
    return Drought(onset=onset, visible=int(days[shown[0]] if shown.size else days[-1]))


def _crop_seasons(land: Land, seasons: Sequence[int]) -> list[CropSeason]:
    """Return what grew where: a season's crop from its sowing, if that is before October."""
    found = []
    for parcel, grown in enumerate(land.crop):
        sown = [_sown_before(land, parcel, season) for season in range(len(seasons))]
        for season, year in enumerate(seasons):
            ends = date(year, 9, 30)
            if season + 1 < len(seasons):
                ends -= timedelta(days=sown[season + 1])
            begins = date(year - 1, 10, 1) - timedelta(days=sown[season])
            found.append(
                CropSeason(parcel=parcel, crop=NAMES[grown[season]], from_on=begins, until_on=ends)
            )
    return found


def _sown_before(land: Land, parcel: int, season: int) -> int:
    """Return by how many days a crop is sown before its season begins, 0 for later ones."""
    crop = CROPS[land.crop[parcel, season]]
    if crop.is_grass:
        return 0
    return max(0, -int(np.floor(emerges_on(land, parcel, season) - crop.sown_before)))
