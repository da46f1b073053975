"""What grows: the crops' courses through a year, rotations, and the farmers' habits.

A course is a list of knots: the day of the season (from 1 October), leaf area, chlorophyll,
brown pigment and leaf water by the canopy model's scales, share of flowers, and what moves
the knot in time: sowing, growth, ripening or harvest. The courses are our own, by common
knowledge of these crops in a temperate climate.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

Places = NDArray[np.int64]

SOWING: Final = 0
GROWTH: Final = 1
RIPENING: Final = 2
HARVEST: Final = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class Crop:
    """A crop's usual course.

    `knots` are (day, lai, chlorophyll, brown, leaf water, flowers, mover); the first is the
    emergence, the last the harvest, after which the stand is gone. `sown_before` days before
    its emergence. `drought` is how much a drought takes of it, beside other crops.
    """

    name: str
    knots: tuple[tuple[float, float, float, float, float, float, int], ...]
    sown_before: int
    drought: float
    is_grass: bool = False

    @property
    def emergence(self) -> float:
        """Day of season on which the usual stand emerges."""
        return self.knots[0][0]

    @property
    def ripens(self) -> float:
        """Day of season on which the usual stand begins to ripen."""
        return min((knot[0] for knot in self.knots if knot[6] == RIPENING), default=self.harvest)

    @property
    def harvest(self) -> float:
        """Day of season of the usual harvest."""
        return self.knots[-1][0]


CROPS: Final = (
    Crop(
        name="winter wheat",
        sown_before=13,
        drought=0.8,
        knots=(
            (16, 0.0, 30, 0.0, 0.012, 0.0, SOWING),
            (75, 0.7, 34, 0.0, 0.014, 0.0, SOWING),
            (150, 0.8, 34, 0.05, 0.013, 0.0, GROWTH),
            (200, 2.8, 46, 0.0, 0.017, 0.0, GROWTH),
            (235, 5.0, 50, 0.0, 0.017, 0.0, GROWTH),
            (257, 4.2, 44, 0.05, 0.014, 0.0, RIPENING),
            (280, 2.4, 14, 0.45, 0.007, 0.0, RIPENING),
            (295, 1.7, 3, 0.9, 0.002, 0.0, RIPENING),
            (308, 1.5, 2, 1.0, 0.001, 0.0, HARVEST),
        ),
    ),
    Crop(
        name="winter barley",
        sown_before=11,
        drought=0.7,
        knots=(
            (2, 0.0, 30, 0.0, 0.012, 0.0, SOWING),
            (60, 1.2, 36, 0.0, 0.014, 0.0, SOWING),
            (150, 1.1, 33, 0.08, 0.013, 0.0, GROWTH),
            (188, 2.9, 46, 0.0, 0.017, 0.0, GROWTH),
            (220, 4.6, 48, 0.0, 0.016, 0.0, GROWTH),
            (240, 4.0, 40, 0.05, 0.013, 0.0, RIPENING),
            (258, 2.3, 13, 0.5, 0.006, 0.0, RIPENING),
            (272, 1.6, 3, 0.9, 0.002, 0.0, RIPENING),
            (284, 1.4, 2, 1.0, 0.001, 0.0, HARVEST),
        ),
    ),
    Crop(
        name="winter rape",
        sown_before=10,
        drought=0.6,
        knots=(
            (-25, 0.0, 30, 0.0, 0.015, 0.0, SOWING),
            (40, 2.3, 42, 0.0, 0.020, 0.0, SOWING),
            (130, 1.2, 36, 0.1, 0.017, 0.0, GROWTH),
            (180, 2.6, 46, 0.0, 0.020, 0.0, GROWTH),
            (205, 4.0, 48, 0.0, 0.019, 0.0, GROWTH),
            (213, 4.1, 46, 0.0, 0.018, 0.35, GROWTH),
            (228, 4.1, 46, 0.0, 0.018, 0.30, GROWTH),
            (238, 4.0, 44, 0.0, 0.017, 0.0, GROWTH),
            (258, 3.2, 32, 0.1, 0.013, 0.0, RIPENING),
            (278, 2.0, 10, 0.6, 0.005, 0.0, RIPENING),
            (294, 1.6, 4, 0.9, 0.002, 0.0, HARVEST),
        ),
    ),
    Crop(
        name="spring barley",
        sown_before=14,
        drought=1.0,
        knots=(
            (178, 0.0, 30, 0.0, 0.013, 0.0, SOWING),
            (212, 1.8, 42, 0.0, 0.016, 0.0, SOWING),
            (240, 4.0, 48, 0.0, 0.016, 0.0, GROWTH),
            (258, 3.7, 42, 0.03, 0.014, 0.0, RIPENING),
            (281, 2.1, 12, 0.5, 0.006, 0.0, RIPENING),
            (296, 1.5, 3, 0.9, 0.002, 0.0, RIPENING),
            (310, 1.3, 2, 1.0, 0.001, 0.0, HARVEST),
        ),
    ),
    Crop(
        name="maize",
        sown_before=14,
        drought=0.9,
        knots=(
            (222, 0.0, 32, 0.0, 0.014, 0.0, SOWING),
            (252, 0.8, 40, 0.0, 0.016, 0.0, SOWING),
            (285, 4.0, 50, 0.0, 0.018, 0.0, GROWTH),
            (310, 4.6, 52, 0.0, 0.018, 0.0, GROWTH),
            (330, 4.2, 44, 0.05, 0.016, 0.0, RIPENING),
            (348, 3.0, 26, 0.3, 0.010, 0.0, RIPENING),
            (354, 2.6, 20, 0.4, 0.009, 0.0, HARVEST),
        ),
    ),
    Crop(
        name="sugar beet",
        sown_before=16,
        drought=1.0,
        knots=(
            (200, 0.0, 32, 0.0, 0.018, 0.0, SOWING),
            (238, 1.2, 42, 0.0, 0.022, 0.0, SOWING),
            (268, 4.0, 50, 0.0, 0.024, 0.0, GROWTH),
            (300, 4.4, 50, 0.0, 0.023, 0.0, GROWTH),
            (340, 3.8, 44, 0.05, 0.020, 0.0, GROWTH),
            (356, 3.5, 42, 0.06, 0.019, 0.0, HARVEST),
        ),
    ),
    Crop(
        name="permanent grassland",
        sown_before=0,
        drought=1.1,
        is_grass=True,
        knots=(
            (0, 2.2, 38, 0.08, 0.014, 0.0, GROWTH),
            (60, 1.5, 34, 0.15, 0.012, 0.0, GROWTH),
            (150, 1.2, 32, 0.2, 0.011, 0.0, GROWTH),
            (195, 2.4, 42, 0.05, 0.014, 0.0, GROWTH),
            (225, 4.2, 46, 0.0, 0.015, 0.0, GROWTH),
            (270, 3.6, 42, 0.05, 0.014, 0.0, GROWTH),
            (320, 3.2, 40, 0.08, 0.014, 0.0, GROWTH),
            (365, 2.4, 38, 0.08, 0.014, 0.0, GROWTH),
        ),
    ),
)
NAMES: Final = tuple(crop.name for crop in CROPS)
GRASS: Final = NAMES.index("permanent grassland")

MOWINGS: Final = (232.0, 275.0, 322.0)
"""Usual days of season on which grass is mown."""
MOWN_LAI: Final = 1.1
REGROWS_DAYS: Final = 28.0

# Share of the land, and what follows what.
_ROTATIONS: Final = (
    (0.27, ("winter rape", "winter wheat", "winter barley")),
    (0.20, ("sugar beet", "winter wheat", "spring barley")),
    (0.14, ("maize", "winter wheat")),
    (0.10, ("maize", "maize", "winter wheat", "spring barley")),
    (0.13, ("winter rape", "winter wheat", "spring barley", "maize")),
    (0.16, ("permanent grassland",)),
)
_OUT_OF_TURN: Final = 0.06
_LATE: Final = ("maize", "sugar beet")
_EARLY: Final = ("winter rape", "winter barley")


def rotated(rng: np.random.Generator, parcels: int, seasons: int) -> Places:
    """Return the crop of every parcel and season as its place in `CROPS`, shape (both)."""
    shares = np.array([share for share, _ in _ROTATIONS])
    # Shares are kept as well as they can be, so that few parcels have all crops too.
    chosen = np.searchsorted(shares.cumsum(), (np.arange(parcels) + rng.random()) / parcels)
    grown = np.empty((parcels, seasons), dtype=np.int64)
    for parcel, which in enumerate(rng.permutation(np.minimum(chosen, len(shares) - 1))):
        turn = [NAMES.index(name) for name in _ROTATIONS[which][1]]
        phase = int(rng.integers(len(turn)))
        grown[parcel] = [turn[(phase + season) % len(turn)] for season in range(seasons)]
    swaps = (rng.random(grown.shape) < _OUT_OF_TURN) & (grown != GRASS)
    annual = [place for place in range(len(CROPS)) if place != GRASS]
    grown[swaps] = rng.choice(annual, size=int(swaps.sum()))
    # What is sown early can't follow what leaves the field late.
    late, early = ([NAMES.index(name) for name in names] for names in (_LATE, _EARLY))
    hasty = np.isin(grown[:, 1:], early) & np.isin(grown[:, :-1], late)
    grown[:, 1:][hasty] = NAMES.index("winter wheat")
    return grown
