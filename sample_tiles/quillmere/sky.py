"""Clouds, their shadows, and thin haze that the quality layer misses."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from quillmere.surfaces import (
    CELL_M,
    CLOUD_REFLECTANCE,
    HAZE_GLOW,
    HAZE_LOSS,
    SHADOW_LIGHT,
    Numbers,
)
from quillmere.tile import SIDE_M, Image, averaged

CELL: Final = 10.0
# The sun stands in the south-east at this hour, so shadows fall to the north-west.
SHADOW_SHIFT_M: Final = (-250.0, -430.0)
# Classes of the Sentinel-2 scene classification.
DARK, SHADOW, VEGETATED, NOT_VEGETATED, WATER, UNCLASSIFIED, CLOUD_MEDIUM, CLOUD_HIGH = range(2, 10)
USABLE: Final = (DARK, VEGETATED, NOT_VEGETATED, WATER, UNCLASSIFIED)
ATTEMPTS: Final = 200


@dataclass(frozen=True, slots=True, kw_only=True)
class Sky:
    """What stands between land and sensor, 0-1 per 10 m cell."""

    opacity: Image
    shade: Image
    haze: Image

    def seen(self, ground: Image, role: int) -> Image:
        """Return one band's reflectance of the ground through this sky."""
        lit = ground * (1.0 - self.shade * (1.0 - SHADOW_LIGHT[role]))
        hazy = lit * (1.0 - HAZE_LOSS * self.haze) + HAZE_GLOW[role] * self.haze
        return np.asarray(hazy * (1.0 - self.opacity) + CLOUD_REFLECTANCE[role] * self.opacity)


def blob(centre: Numbers, radii: Numbers) -> Image:
    """Return an ellipse that is 1 inside and fades to 0 at its edge, per 10 m cell."""
    at = (np.arange(round(SIDE_M / CELL)) + 0.5) * CELL
    away = ((at[None, :] - centre[0]) / radii[0]) ** 2
    away = away + ((at[:, None] - centre[1]) / radii[1]) ** 2
    return np.asarray(np.clip((1.0 - away) / 0.35, 0.0, 1.0))


def draw_sky(random: np.random.Generator, *, hazy: bool) -> Sky:
    """Draw up to three clouds with their shadows, and a bank of haze if wanted."""
    side = round(SIDE_M / CELL)
    opacity, shade, haze = (np.zeros((side, side)) for _ in range(3))
    for _ in range(random.choice(4, p=(0.35, 0.25, 0.25, 0.15))):
        centre = random.uniform(0.0, SIDE_M, 2)
        radii = random.uniform(110.0, 260.0, 2)
        opacity = np.maximum(opacity, blob(centre, radii))
        shade = np.maximum(shade, blob(centre + SHADOW_SHIFT_M, radii))
    if hazy:
        centre = random.uniform(0.0, SIDE_M, 2)
        haze = random.uniform(0.40, 0.65) * blob(centre, random.uniform(420.0, 620.0, 2))
    return Sky(opacity=opacity, shade=shade, haze=haze)


def draw_fair_sky(
    random: np.random.Generator, *, hazy: bool, is_fair: Callable[[Sky], bool]
) -> Sky:
    """Draw skies until one is fair, a clear one if none is."""
    for _ in range(ATTEMPTS):
        sky = draw_sky(random, hazy=hazy)
        if is_fair(sky):
            return sky
    nothing = np.zeros((round(SIDE_M / CELL),) * 2)
    return Sky(opacity=nothing, shade=nothing, haze=nothing)


def classified(sky: Sky, *, green: Image, water: Image, char: Image, patches: Image) -> Image:
    """Return the scene classification on 20 m cells, blind to haze.

    Fresh scars puzzle it: by patches they pass for dark areas, for nothing known, for soil.
    """
    cell_m = CELL_M["quality"]
    green, water, char, cloud, dark, patches = (
        averaged(image, cell_m, from_m=CELL)
        for image in (green, water, char, sky.opacity, sky.shade, patches)
    )
    classes = np.where(green > 0.25, VEGETATED, NOT_VEGETATED)
    for where, value in (
        ((char > 0.4) & (patches < -0.4), DARK),
        ((char > 0.4) & (patches > 0.4), UNCLASSIFIED),
        (water > 0.5, WATER),
        (dark > 0.02, SHADOW),
        (cloud > 0.02, CLOUD_MEDIUM),
        (cloud > 0.5, CLOUD_HIGH),
    ):
        classes = np.where(where, value, classes)
    return classes
