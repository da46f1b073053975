"""Weather that a region shares: growth, leaf water, wet ground, and clouds by place."""

from dataclasses import dataclass
from typing import Final

import numpy as np

from benchmarks.histories.crops import CROPS
from benchmarks.histories.optics import Figures

_WAVES: Final = 6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Weather:
    """Departures from the usual, day by day; logarithms of factors but for `wetness`.

    `growth` on leaf area, shape (crops, days); `leaf_water`, `greening` (chlorophyll) shape
    (days,); `wetness` of the ground 0-1, shape (days,).
    """

    growth: Figures
    leaf_water: Figures
    greening: Figures
    wetness: Figures


def weather_of(rng: np.random.Generator, days: int) -> Weather:
    """Draw the weather of a region."""
    shared = wandering(rng, 1, days, memory_days=25, spread=0.09)
    by_crop = wandering(rng, len(CROPS), days, memory_days=25, spread=0.04)
    return Weather(
        growth=shared + by_crop,
        leaf_water=wandering(rng, 1, days, memory_days=14, spread=0.11)[0],
        greening=wandering(rng, 1, days, memory_days=35, spread=0.06)[0],
        wetness=_wetness(rng, days),
    )


def wandering(
    rng: np.random.Generator, rows: int, days: int, *, memory_days: float, spread: float
) -> Figures:
    """Return stationary first-order autoregressive rows (rows, days) of a standard deviation."""
    kept = np.exp(-1.0 / memory_days)
    steps = rng.normal(0.0, spread * np.sqrt(1.0 - kept**2), (rows, days))
    steps[:, 0] = rng.normal(0.0, spread, rows)
    for day in range(1, days):
        steps[:, day] += kept * steps[:, day - 1]
    return steps


def patches(rng: np.random.Generator, places: Figures, *, size_km: float) -> Figures:
    """Return a smooth random field at places (places, 2) in km: mean 0, deviation about 1."""
    waves = rng.normal(0.0, 1.0 / size_km, (_WAVES, 2))
    phases = rng.uniform(0.0, 2.0 * np.pi, _WAVES)
    field: Figures = np.cos(places @ waves.T + phases).sum(axis=1) * np.sqrt(2.0 / _WAVES)
    return field


def _wetness(rng: np.random.Generator, days: int) -> Figures:
    """Return wet ground as rain fills it and days dry it, faster in summer (day 0 in August)."""
    rains = rng.random(days) < 0.27
    amount = rng.exponential(0.30, days) * rains
    summer = 0.5 + 0.5 * np.cos(2.0 * np.pi * np.arange(days) / 365.25)
    kept = np.exp(-1.0 / (14.0 - 9.0 * summer))
    wetness = np.empty(days)
    held = 0.4
    for day in range(days):
        held = min(1.0, held * kept[day] + amount[day])
        wetness[day] = held
    return wetness
