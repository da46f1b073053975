"""Invented seasons of parcels for tests of judging: crops, weather, haze, and known events.

Spectra are mixed from end members whose order follows the reference digest (canopy, dry and
wet soil, water, char); no service code is used to make them.
"""

from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta

import numpy as np
from numpy.typing import NDArray

from service.seasons.history import History
from service.seasons.judgement import OnePass

BANDS = ("blue", "green", "red", "nir", "swir16", "swir22")
MEASURES = ("ndvi", "ndmi", "nbr", "ndwi", *BANDS)
FRESH = np.array([0.03, 0.055, 0.03, 0.42, 0.19, 0.09])
DRIED = np.array([0.04, 0.065, 0.05, 0.37, 0.31, 0.20])
DRY_SOIL = np.array([0.10, 0.14, 0.18, 0.25, 0.34, 0.30])
WET_SOIL = np.array([0.06, 0.085, 0.11, 0.16, 0.19, 0.15])
WATER = np.array([0.05, 0.06, 0.05, 0.03, 0.012, 0.008])
CHAR = np.array([0.05, 0.06, 0.07, 0.09, 0.17, 0.19])

# Crop: days of emergence, full cover, ripening and harvest; cover at its fullest.
CROPS = {
    "barley": (20.0, 215.0, 255.0, 285.0, 0.90),
    "maize": (225.0, 285.0, 335.0, 362.0, 0.92),
    "beet": (205.0, 265.0, 350.0, 365.0, 0.95),
    "lucerne": (-30.0, 190.0, 350.0, 390.0, 0.88),
}


@dataclass(frozen=True, kw_only=True)
class Event:
    """What befell a parcel, from a day of the running season on."""

    kind: str
    parcel: str
    day: int


@dataclass(kw_only=True)
class Simulated:
    """Finished seasons, the passes of the running one, and the truth."""

    history: History
    passes: list[OnePass]
    events: list[Event]
    parcel_weeks: float


@dataclass(kw_only=True)
class Land:
    """Parcels with their lasting peculiarities."""

    rng: np.random.Generator
    parcels: list[str]
    crops: list[str]
    shift: NDArray[np.float64] = field(init=False)
    vigour: NDArray[np.float64] = field(init=False)
    brightness: NDArray[np.float64] = field(init=False)

    def __post_init__(self) -> None:
        n = len(self.parcels)
        self.shift = self.rng.normal(0, 4, n)
        self.vigour = self.rng.normal(1, 0.05, n)
        self.brightness = self.rng.normal(1, 0.08, n)


def simulate(
    seed: int,
    *,
    per_crop: int = 10,
    seasons: int = 4,
    every_days: int = 5,
    with_events: bool = True,
    crops: tuple[str, ...] = tuple(CROPS),
) -> Simulated:
    """Return seasons of `per_crop` parcels of each crop; the last one is running."""
    rng = np.random.default_rng(seed)
    names = [crop for crop in crops for _ in range(per_crop)]
    land = Land(rng=rng, parcels=[f"{c}-{i:05d}" for i, c in enumerate(names)], crops=names)
    events = _events(land) if with_events else []
    made = [
        _season(land, year, every_days, events if year == seasons - 1 else [])
        for year in range(seasons)
    ]
    past = [one for season in made[:-1] for one in season]
    looks = sum(len(one.parcels) for one in made[-1])
    return Simulated(
        history=history_of(past),
        passes=made[-1],
        events=events,
        parcel_weeks=looks and len(names) * 52.0,
    )


def history_of(passes: list[OnePass]) -> History:
    """Return the flat table of some passes."""
    return History.of_rows(
        parcels=[parcel for one in passes for parcel in one.parcels],
        crops=[crop for one in passes for crop in one.crops],
        seasons=[one.season for one in passes for _ in one.parcels],
        days=[one.day for one in passes for _ in one.parcels],
        passes=[int(one.acquired_at.timestamp()) for one in passes for _ in one.parcels],
        measures=MEASURES,
        values=np.concatenate([one.values for one in passes]),
    )


def measures_of(bands: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the measures (looks, measures) of reflectances (looks, bands)."""
    _, green, red, nir, swir16, swir22 = bands.T
    ndvi = (nir - red) / (nir + red)
    ndmi = (nir - swir16) / (nir + swir16)
    nbr = (nir - swir22) / (nir + swir22)
    ndwi = (green - nir) / (green + nir)
    return np.column_stack([ndvi, ndmi, nbr, ndwi, bands])


def _events(land: Land) -> list[Event]:
    """Draw one event of each kind at a time when its crop has a cover to lose."""
    kinds = {"flood": "barley", "burn": "barley", "removal": "maize", "moisture_stress": "beet"}
    days = {"flood": (170, 220), "burn": (225, 250), "removal": (285, 315)}
    days["moisture_stress"] = (270, 300)
    taken: set[str] = set()
    events = []
    for kind, crop in kinds.items():
        free = [p for p, c in zip(land.parcels, land.crops, strict=True) if c == crop]
        free = [parcel for parcel in free if parcel not in taken]
        parcel = free[int(land.rng.integers(len(free)))]
        taken.add(parcel)
        events.append(Event(kind=kind, parcel=parcel, day=int(land.rng.integers(*days[kind]))))
    return events


def _season(land: Land, year: int, every_days: int, events: list[Event]) -> list[OnePass]:
    rng, n = land.rng, len(land.parcels)
    early = {crop: rng.normal(0, 5) for crop in CROPS}
    rich = {crop: rng.normal(1, 0.04) for crop in CROPS}
    own = rng.normal(0, 2, n)
    days = np.arange(int(rng.integers(every_days)), 365, every_days)
    start = datetime(2020 + year, 10, 1, 10, 30, tzinfo=UTC)
    passes = []
    wet = 0.5
    for day in days:
        wet = float(np.clip(0.8 * wet + rng.normal(0.1, 0.12), 0, 1))
        late = day - land.shift - own - np.array([early[crop] for crop in land.crops])
        vigour = land.vigour * np.array([rich[crop] for crop in land.crops])
        cover = _cover(land.crops, late) * vigour
        bands = _spectra(land, cover, wet, int(day), events)
        bands *= rng.normal(1, 0.025, bands.shape) * rng.normal(1, 0.02, (n, 1))
        hazy = rng.random(n) < 0.03
        depth = rng.uniform(0.02, 0.09, n) * hazy
        bands += depth[:, None] * np.array([1.0, 0.8, 0.7, 0.4, 0.2, 0.15])
        seen = rng.random(n) > rng.choice([0.05, 0.35, 0.8])
        if seen.any():
            passes.append(
                _pass(land, start + timedelta(days=int(day)), year, int(day), bands, seen)
            )
    return passes


def _pass(
    land: Land,
    at: datetime,
    year: int,
    day: int,
    bands: NDArray[np.float64],
    seen: NDArray[np.bool_],
) -> OnePass:
    rows = np.flatnonzero(seen)
    return OnePass(
        acquired_at=at,
        season=2021 + year,
        day=day,
        parcels=[land.parcels[row] for row in rows],
        crops=[land.crops[row] for row in rows],
        scenes=[f"scene-{at:%Y%m%d}"] * rows.size,
        looked_at=[at] * rows.size,
        measures=MEASURES,
        values=measures_of(bands[rows]),
        valid_share=np.ones(rows.size),
        water=np.zeros(rows.size),
    )


def _cover(crops: list[str], day: NDArray[np.float64]) -> NDArray[np.float64]:
    stages = np.array([CROPS[crop] for crop in crops])
    emergence, full, ripe, harvest, most = stages.T
    rise = 1 / (1 + np.exp(-(day - (emergence + full) / 2) / ((full - emergence) / 9)))
    fall = 1 / (1 + np.exp((day - (ripe + harvest) / 2) / ((harvest - ripe) / 7)))
    cover: NDArray[np.float64] = 0.04 + most * rise * fall
    return cover


def _spectra(
    land: Land, cover: NDArray[np.float64], wet: float, day: int, events: list[Event]
) -> NDArray[np.float64]:
    cover = np.clip(cover, 0.02, 0.99)
    canopy = np.tile(FRESH, (cover.size, 1))
    other, share = np.tile(WATER, (cover.size, 1)), np.zeros(cover.size)
    for event in events:
        at, since = land.parcels.index(event.parcel), day - event.day
        if since < 0:
            continue
        if event.kind == "flood":
            share[at] = 0.8 * max(0.0, 1 - since / 45)
        elif event.kind == "burn":
            other[at], share[at] = CHAR, 0.85
        elif event.kind == "removal":
            cover[at] = min(cover[at], 0.08)
        else:
            dried = min(1.0, since / 30)
            canopy[at] = (1 - dried) * FRESH + dried * DRIED
    soil = (1 - wet) * DRY_SOIL + wet * WET_SOIL
    ground = land.brightness[:, None] * soil
    mixed = cover[:, None] * canopy + (1 - cover[:, None]) * ground
    bands: NDArray[np.float64] = (1 - share[:, None]) * mixed + share[:, None] * other
    return bands
