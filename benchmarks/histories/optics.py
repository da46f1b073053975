"""What a sensor sees of a stand: a canopy model above soil, litter, water or char.

Canopies are those of PROSAIL (Jacquemoud et al. 2009, Remote Sensing of Environment 113,
S56-S66) as packaged in `prosail`. Its spectra are averaged over each band once, for a table
over leaf area, chlorophyll, leaf water, brown pigment and sun; stands are read off between
its nodes. Leaf water and chlorophyll are on the model's own scales.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from itertools import product
from typing import Final

import numpy as np
from numpy.typing import NDArray

Figures = NDArray[np.float64]

BANDS: Final = ("blue", "green", "red", "nir", "swir16", "swir22")
INDICES: Final = ("ndvi", "ndmi", "nbr", "ndwi")
MEASURES: Final = (*INDICES, *BANDS)

# Centre and full width (nm). ESA's tables of Sentinel-2A, USGS's of Landsat 8 OLI.
PASSBANDS: Final[Mapping[str, Sequence[tuple[float, float]]]] = {
    "sentinel-2-l2a": (
        (492.7, 65.0),
        (559.8, 35.0),
        (664.6, 30.0),
        (832.8, 105.0),
        (1613.7, 90.0),
        (2202.4, 174.0),
    ),
    "landsat-c2-l2": (
        (482.0, 60.0),
        (561.4, 57.3),
        (654.6, 37.5),
        (864.7, 28.3),
        (1608.9, 84.7),
        (2200.7, 186.7),
    ),
}

# Means over spectra of `earthlib` 1.1.0 in broad bands: soils, litter and bark, char. Those
# soils were dried and ground; in the field they are darker, hence the factor (common practice).
DRY_SOIL: Final = 0.62 * np.array([0.129, 0.200, 0.288, 0.360, 0.471, 0.422])
LITTER: Final = np.array([0.093, 0.123, 0.168, 0.273, 0.395, 0.284])
CHAR: Final = np.array([0.049, 0.056, 0.068, 0.093, 0.198, 0.227])
# From memory: turbid shallow water; yellow petals of rape.
WATER: Final = np.array([0.055, 0.075, 0.060, 0.035, 0.012, 0.008])
PETALS: Final = np.array([0.050, 0.260, 0.280, 0.450, 0.240, 0.130])
# What wetting leaves of a soil's reflectance, most taken where water absorbs (after Lobell and
# Asner 2002, Soil Sci. Soc. Am. J. 66, 722-727; figures from memory).
WETTED: Final = np.array([0.58, 0.56, 0.55, 0.53, 0.45, 0.38])

_LAI: Final = (0.0, 0.3, 0.7, 1.2, 2.0, 3.0, 4.5, 6.5)
_CHLOROPHYLL: Final = (2.0, 12.0, 28.0, 50.0)
_LEAF_WATER: Final = (0.001, 0.006, 0.014, 0.026)
_BROWN: Final = (0.0, 0.35, 1.0)
_SUN_ZENITH: Final = (30.0, 50.0, 72.0)
_NODES: Final = (_LAI, _CHLOROPHYLL, _LEAF_WATER, _BROWN, _SUN_ZENITH)
_DARK: Final = 0.05
_BRIGHT: Final = 0.35
_FIRST_NM: Final = 400
_SAMPLES: Final = 2101


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Stands:
    """Stands as a sensor meets them; every member has shape (stands,) but `soil` (stands, bands).

    `lai` leaf area index; `chlorophyll`, `leaf_water`, `brown` by the canopy model's scales;
    `flowers`, `litter`, `water`, `char` shares of the area (0-1), litter beneath the canopy;
    `soil` reflectance of the bare ground; `sun_zenith` in degrees.
    """

    lai: Figures
    chlorophyll: Figures
    leaf_water: Figures
    brown: Figures
    flowers: Figures
    litter: Figures
    water: Figures
    char: Figures
    soil: Figures
    sun_zenith: Figures


def reflectance_of(stands: Stands, sensor: str) -> Figures:
    """Return surface reflectance (stands, bands) as a sensor's bands average it, without noise."""
    ground = _mixed(stands.soil, LITTER, stands.litter)
    at = (stands.lai, stands.chlorophyll, stands.leaf_water, stands.brown, stands.sun_zenith)
    canopy = _between_nodes(canopy_table(sensor), at)
    bright = (ground - _DARK) / (_BRIGHT - _DARK)
    # A canopy's reflectance is near enough linear in that of the ground below it.
    seen = canopy[:, :, 0] + bright * (canopy[:, :, 1] - canopy[:, :, 0])
    for member, share in ((PETALS, stands.flowers), (CHAR, stands.char), (WATER, stands.water)):
        seen = _mixed(seen, member, share)
    return seen


def soil_of(wetness: Figures, brightness: Figures) -> Figures:
    """Return the ground's reflectance (..., bands) for its wetness (0-1) and own brightness."""
    kept = 1.0 - wetness[..., None] * (1.0 - WETTED)
    return brightness[..., None] * DRY_SOIL * kept


def sun_zenith_on(day_of_year: Figures, latitude: float, *, hour: float = 10.4) -> Figures:
    """Return the sun's zenith angle in degrees at a solar hour (declination after Cooper 1969)."""
    tilt = np.radians(23.45 * np.sin(np.radians(360.0 * (284.0 + day_of_year) / 365.0)))
    turn, where = np.radians(15.0 * (hour - 12.0)), np.radians(latitude)
    cosine = np.sin(where) * np.sin(tilt) + np.cos(where) * np.cos(tilt) * np.cos(turn)
    zenith: Figures = np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0)))
    return zenith


def measures_of(bands: Figures) -> Figures:
    """Return the measures (looks, measures) of reflectances (looks, bands), by `MEASURES`."""
    _, green, red, nir, swir16, swir22 = bands.T
    pairs = ((nir, red), (nir, swir16), (nir, swir22), (green, nir))
    return np.column_stack([*[(a - b) / (a + b) for a, b in pairs], bands])


@cache
def canopy_table(sensor: str) -> Figures:
    """Return reflectance at the nodes, over dark and bright ground: shape (nodes…, bands, 2)."""
    from prosail import run_prosail  # noqa: PLC0415 - a test dependency, needed here alone

    table = np.empty((*map(len, _NODES), len(BANDS), 2))
    windows = [_window(*passband) for passband in PASSBANDS[sensor]]
    grounds = [np.full(_SAMPLES, ground) for ground in (_DARK, _BRIGHT)]
    for place in product(*(range(len(nodes)) for nodes in _NODES)):
        lai, chlorophyll, water, brown, sun = (
            nodes[i] for nodes, i in zip(_NODES, place, strict=True)
        )
        for side, ground in enumerate(grounds):
            spectrum = run_prosail(
                n=1.5, cab=chlorophyll, car=chlorophyll / 5.0, cbrown=brown, cw=water, cm=0.008,
                lai=max(lai, 1e-4), lidfa=-0.35, lidfb=-0.15, typelidf=1, hspot=0.05, tts=sun,
                tto=5.0, psi=90.0, rsoil0=ground, prospect_version="5",
            )  # fmt: skip
            table[place][:, side] = [spectrum[window].mean() for window in windows]
    return table


def _window(centre_nm: float, width_nm: float) -> slice:
    first = round(centre_nm - width_nm / 2) - _FIRST_NM
    return slice(first, first + round(width_nm) + 1)


def _between_nodes(table: Figures, at: Sequence[Figures]) -> Figures:
    """Interpolate linearly between the nodes; beyond the last node its value holds."""
    lows, shares = [], []
    for nodes, wanted in zip(_NODES, at, strict=True):
        grid = np.asarray(nodes)
        low = np.clip(np.searchsorted(grid, wanted, side="right") - 1, 0, grid.size - 2)
        share = (wanted - grid[low]) / (grid[low + 1] - grid[low])
        lows.append(low)
        shares.append(np.clip(share, 0.0, 1.0))
    found = np.zeros((len(at[0]), *table.shape[len(_NODES) :]))
    for corner in product((0, 1), repeat=len(_NODES)):
        weight = np.ones(len(at[0]))
        for side, share in zip(corner, shares, strict=True):
            weight = weight * (share if side else 1.0 - share)
        place = tuple(low + side for low, side in zip(lows, corner, strict=True))
        found += weight[:, None, None] * table[place]
    return found


def _mixed(seen: Figures, member: Figures, share: Figures) -> Figures:
    mixed: Figures = seen + share[:, None] * (member - seen)
    return mixed
