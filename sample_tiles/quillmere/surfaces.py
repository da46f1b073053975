"""Reflectance spectra of the surfaces of which the land is mixed, and how light gets lost.

Surface reflectance 0-1, one number per band in the order of `ROLES`.
"""

from collections.abc import Mapping
from typing import Final

import numpy as np
from numpy.typing import NDArray

Numbers = NDArray[np.float64]
Spectrum = tuple[float, ...]

ROLES: Final = ("blue", "green", "red", "rededge071", "nir", "swir16", "swir22")
CELL_M: Final = {
    "blue": 10.0, "green": 10.0, "red": 10.0, "nir": 10.0,
    "rededge071": 20.0, "swir16": 20.0, "swir22": 20.0, "quality": 20.0,
}  # fmt: skip

# Canopy: PROSAIL run at leaf area index 3 (Jacquemoud et al. 2009). Soil: mean of 4248
# laboratory spectra, times 0.6 because a field is darker than a sieved sample. Stubble: mean
# of library spectra of litter, bark and wood. Char: mean of library spectra. Water: real
# clear-ish water samples. Cloud: medians of thick cloud in open samples. Mud water (a fresh
# flood carries soil), the red-edge column and the cloud's blue, red-edge and swir22 are from
# memory of typical shapes.
SURFACES: Final[Mapping[str, Spectrum]] = {
    "canopy": (0.030, 0.050, 0.030, 0.092, 0.420, 0.230, 0.100),
    "soil": (0.078, 0.120, 0.174, 0.186, 0.216, 0.282, 0.252),
    "stubble": (0.090, 0.120, 0.170, 0.190, 0.270, 0.390, 0.280),
    "water": (0.024, 0.040, 0.017, 0.016, 0.015, 0.021, 0.020),
}
CHAR: Final[Spectrum] = (0.050, 0.060, 0.070, 0.075, 0.090, 0.200, 0.230)
MUD_WATER: Final[Spectrum] = (0.060, 0.100, 0.100, 0.080, 0.050, 0.010, 0.010)
CLOUD_REFLECTANCE: Final[Spectrum] = (0.640, 0.640, 0.630, 0.650, 0.680, 0.470, 0.350)
# Diffuse light reaches a shadow, more of it in the short wavelengths (typical, from memory).
SHADOW_LIGHT: Final[Spectrum] = (0.55, 0.48, 0.42, 0.40, 0.36, 0.28, 0.26)

# Share of its dry reflectance that soaked soil keeps: darker everywhere, most of all where
# water absorbs (the exponential fall with water of Lobell and Asner 2002; numbers from memory).
WET_SOIL_KEEPS: Final[Spectrum] = (0.58, 0.58, 0.58, 0.58, 0.57, 0.50, 0.46)
# What a canopy gains as its leaves dry out: water absorbs at 1.6 and 2.2 µm, so these rise,
# while pigments and NDVI hardly change (as leaf water does in PROSAIL; sizes are ours).
DRY_LEAF_GAIN: Final[Spectrum] = (0.001, 0.002, 0.004, 0.004, -0.012, 0.100, 0.070)
# Light that thin haze adds at strength 1, and the share of the ground's light it keeps back.
# It scatters blue most, which the haze measure blue - 0.5 red rests on (Zhang et al. 2002).
HAZE_GLOW: Final[Spectrum] = (0.120, 0.090, 0.070, 0.060, 0.045, 0.018, 0.008)
HAZE_LOSS: Final = 0.12


def soil_spectra(wetness: Numbers, brightness: Numbers) -> Numbers:
    """Return bare-soil spectra, shape (..., roles), for wetness 0-1 and a field's brightness."""
    keeps = np.asarray(WET_SOIL_KEEPS) ** wetness[..., None]
    return np.asarray(np.asarray(SURFACES["soil"]) * brightness[..., None] * keeps)


def plant_spectra(greenness: Numbers, dryness: Numbers) -> Numbers:
    """Return plant spectra, shape (..., roles): green leaves, drier ones, and ripe straw."""
    green = np.asarray(SURFACES["canopy"]) + dryness[..., None] * np.asarray(DRY_LEAF_GAIN)
    straw = np.asarray(SURFACES["stubble"])
    return np.asarray(greenness[..., None] * green + (1.0 - greenness[..., None]) * straw)


def mixed(share: Numbers, first: Numbers, second: Numbers) -> Numbers:
    """Return the linear mixture that holds `share` of the first spectra."""
    return np.asarray(share[..., None] * first + (1.0 - share[..., None]) * second)
