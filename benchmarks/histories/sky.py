"""Passes of two satellites' kinds, the clouds of each, and what of them slips through."""

from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from typing import Final

import numpy as np

from benchmarks.histories.crops import Places
from benchmarks.histories.optics import Figures
from benchmarks.histories.weather import patches

KEPT_SHARE: Final = 0.4
"""Figures of less of a parcel are left out, as by whoever measured them."""
# Added light of thin cloud and haze by band, and what a thick cloud reflects (from memory).
_HAZE: Final = np.array([1.0, 0.80, 0.66, 0.45, 0.20, 0.14])
_CLOUD: Final = np.array([0.48, 0.48, 0.50, 0.54, 0.38, 0.28])
# What a cloud's shadow leaves: skylight is blue (common practice).
_SHADE: Final = np.array([0.62, 0.52, 0.46, 0.40, 0.38, 0.38])


@dataclass(frozen=True, slots=True, kw_only=True)
class Pass:
    """One pass: its day of the history, its instant, its sensor and platform."""

    day: int
    at: datetime
    sensor: str
    platform: str


def passes_of(rng: np.random.Generator, first: date, days: int) -> list[Pass]:
    """Draw irregular passes: Sentinel-2 about every 5 days, Landsat about every 8."""
    made: dict[int, Pass] = {}
    for sensor, platforms, every, minute in (
        ("landsat-c2-l2", ("landsat-8", "landsat-9"), 8, 605),
        ("sentinel-2-l2a", ("sentinel-2a", "sentinel-2b"), 5, 621),
    ):
        start = int(rng.integers(every))
        for number, day in enumerate(range(start, days, every)):
            if rng.random() < 0.04:
                continue
            clock = timedelta(minutes=minute + float(rng.uniform(-4, 4)))
            at = datetime.combine(first, datetime.min.time(), UTC) + timedelta(days=day) + clock
            at = at.replace(microsecond=0)
            # On a day of both, Sentinel-2 stands.
            made[day] = Pass(day=day, at=at, sensor=sensor, platform=platforms[number % 2])
    return [made[day] for day in sorted(made)]


def shares_of(rng: np.random.Generator, passes: list[Pass], places: Figures) -> Figures:
    """Return the usable share of each parcel in each pass, shape (passes, parcels)."""
    shares = np.empty((len(passes), len(places)))
    fair = 0.5
    for row, one in enumerate(passes):
        summer = 0.5 - 0.5 * np.cos(2.0 * np.pi * (one.at.timetuple().tm_yday - 10) / 365.25)
        # Fair spells last: clouds of a pass depend on those of the one before.
        fair = 0.55 * fair + 0.45 * float(rng.random()) + 0.05 * (summer - 0.5)
        cover = float(np.clip(2.02 - 2.9 * fair + rng.normal(0.0, 0.25), -0.3, 1.4))
        field = patches(rng, places, size_km=5.0) + rng.normal(0.0, 0.25, len(places))
        clear = 1.0 / (1.0 + np.exp(-(field - 2.6 * (cover - 0.5)) / 0.18))
        shares[row] = np.where(clear > 0.97, 1.0, np.round(clear, 3))
    return shares


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Veils:
    """What slips through the mask, by look: haze's depth, shares of cloud and of shadow."""

    haze: Figures
    cloud: Figures
    shade: Figures

    @property
    def is_residual(self) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
        """Whether a look is touched by more than a trace."""
        touched = (self.haze > 0.012) | (self.cloud > 0.03) | (self.shade > 0.06)
        return np.asarray(touched, dtype=np.bool_)


def veils_of(rng: np.random.Generator, share: Figures, in_pass: Places) -> Veils:
    """Draw what slips through: rarely under a clear sky, oftener beside clouds.

    `share` and `in_pass` (number of the pass) are those of the looks, shape (looks,).
    """
    beside = share < 0.999
    which = rng.random(share.size)
    rates = np.where(beside[:, None], (0.036, 0.013, 0.018), (0.010, 0.002, 0.004))
    edges = rates.cumsum(axis=1)
    haze = np.where(which < edges[:, 0], rng.exponential(0.035, share.size), 0.0)
    cloud = np.where(
        (which >= edges[:, 0]) & (which < edges[:, 1]), rng.uniform(0.03, 0.30, share.size), 0.0
    )
    shade = np.where(
        (which >= edges[:, 1]) & (which < edges[:, 2]), rng.uniform(0.10, 0.70, share.size), 0.0
    )
    passes = int(in_pass.max(initial=0)) + 1
    # Thin cirrus lies over a whole pass now and then.
    cirrus = np.where(rng.random(passes) < 0.05, rng.uniform(0.004, 0.02, passes), 0.0)
    return Veils(haze=haze + cirrus[in_pass], cloud=cloud, shade=shade)


def through(veils: Veils, bands: Figures) -> Figures:
    """Return reflectance (looks, bands) as it is seen through what slipped in."""
    haze, cloud, shade = (each[:, None] for each in (veils.haze, veils.cloud, veils.shade))
    dimmed = bands * (1.0 - shade * (1.0 - _SHADE))
    hazed = dimmed * (1.0 - 0.9 * haze * _HAZE) + haze * _HAZE
    veiled: Figures = hazed + cloud * (_CLOUD - hazed)
    return veiled


def noise_of(
    rng: np.random.Generator, in_pass: Places, passes: int, bands: int, *, is_landsat: Figures
) -> Figures:
    """Return factors on reflectance (looks, bands): of the pass, of the look, of the band.

    The air is corrected for imperfectly and alike over a pass; the view's angle differs
    between orbits; what is left is a parcel's own.
    """
    looks = in_pass.size
    spread = np.array([0.035, 0.025, 0.022, 0.014, 0.012, 0.015])
    of_pass = rng.normal(0.0, 1.0, (passes, 1)) * 0.012 + rng.normal(0.0, 0.7, (passes, bands)) * (
        spread
    )
    of_look = rng.normal(0.0, 0.014, (looks, 1)) + rng.normal(0.0, 0.5, (looks, bands)) * spread
    of_sensor = is_landsat[:, None] * np.array([0.012, -0.004, 0.006, 0.010, -0.006, -0.008])
    factors: Figures = np.exp(of_pass[in_pass] + of_look + of_sensor)
    return factors
