"""From units of land to the cells of an image, and from cells to figures per parcel.

Past figures and new scenes come from this one model, so that they fit each other.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from shapely.geometry import Polygon

from quillmere.events import Event
from quillmere.growth import FEATURES, Stand
from quillmere.land import FIELDS, MERE, YARD
from quillmere.sky import CELL, USABLE, Sky, classified
from quillmere.surfaces import CELL_M, ROLES, Numbers
from quillmere.tile import FINE_M, SIDE_M, Image, averaged, cells_inside, texture

Places = NDArray[np.int64]

# The land is the same for every seed, and so is where a stand is thin.
LAND_SEED: Final = 1106
TEXTURE: Final = 0.03
SIDE: Final = round(SIDE_M / CELL)
MARGIN_AT: Final = len(FIELDS) + FEATURES.index("margin")
# Spread and ends of what calibration and atmospheric correction leave in a band of a scene.
GAIN_SPREAD, OFFSET_SPREAD = 0.008, 0.001


@dataclass(frozen=True, slots=True, kw_only=True)
class Cover:
    """Which units lie in which 10 m cells: one entry per pair, with the share of the cell.

    `field` is the parcel that an entry belongs to, -1 for ground that is none's.
    """

    cell: Places
    unit: Places
    share: Numbers
    field: Places
    density: Image

    def image(self, values: Numbers, varies: Numbers | None = None) -> Image:
        """Return units' values on 10 m cells, mixed by share and varied by density."""
        mixed = values[self.unit]
        if varies is not None:
            mixed = mixed + self.density.ravel()[self.cell] * varies[self.unit]
        summed = np.bincount(self.cell, self.share * mixed, minlength=SIDE * SIDE)
        return np.asarray(summed.reshape(SIDE, SIDE))


@dataclass(frozen=True, slots=True, kw_only=True)
class Look:
    """One image of the tile: reflectance per band on its own cells, and the classification."""

    bands: Mapping[str, Image]
    quality: Image

    def on_fine_cells(self, role: str) -> Image:
        """Return a band, or `quality`, on 10 m cells; a coarser cell is repeated."""
        image = self.quality if role == "quality" else self.bands[role]
        step = round(CELL_M[role] / CELL)
        return np.repeat(np.repeat(image, step, axis=0), step, axis=1)

    def usable(self) -> NDArray[np.bool_]:
        """Return which 10 m cells show the land."""
        return np.isin(self.on_fine_cells("quality"), USABLE)


def cover_of(events: Sequence[Event]) -> Cover:
    """Return the cover of the tile; each event takes a part of its field as a unit."""
    side = round(SIDE_M / FINE_M)
    units = np.full((side, side), MARGIN_AT)
    shapes = [*(field.shape for field in FIELDS), Polygon(YARD), Polygon(MERE)]
    # In the order of the units; the margin is what is left.
    for at, shape in zip((*range(MARGIN_AT), MARGIN_AT + 1, MARGIN_AT + 2), shapes, strict=True):
        units[cells_inside(shape)] = at
    random = np.random.default_rng([LAND_SEED, 1])
    density, wandering = texture(random, cell_m=CELL), texture(random)
    fields = np.concatenate([np.arange(MARGIN_AT), np.full(len(FEATURES), -1)])
    for event in events:
        # What befalls a field comes in from one side and ends along a wavering line.
        rows, columns = np.nonzero(units == event.at)
        reach = columns + 0.5 * rows + 12.0 * wandering[rows, columns]
        taken = reach <= np.quantile(reach, event.kind.area_share)
        units[rows[taken], columns[taken]] = fields.size
        fields = np.append(fields, event.at)
    step = round(CELL / FINE_M)
    at = np.arange(side) // step
    pairs, counts = np.unique(
        (at[:, None] * SIDE + at[None, :]) * fields.size + units, return_counts=True
    )
    cell, unit = np.divmod(pairs, fields.size)
    return Cover(
        cell=cell, unit=unit, share=counts / step**2, field=fields[unit], density=TEXTURE * density
    )


def look_at(cover: Cover, stand: Stand, sky: Sky, random: np.random.Generator) -> Look:
    """Return the image of a stand under a sky, with a sensor's noise."""
    spectra, varies = stand.spectra()
    bands = {}
    for at, role in enumerate(ROLES):
        ground = cover.image(spectra[:, at], varies[:, at])
        seen = averaged(sky.seen(ground, at), CELL_M[role], from_m=CELL)
        gain, offset = np.clip(random.normal(size=2), -2.0, 2.0) * (GAIN_SPREAD, OFFSET_SPREAD)
        noise = random.standard_normal(seen.shape) * (0.001 + 0.01 * seen)
        bands[role] = seen * (1.0 + gain) + offset + noise
    open_land = (1.0 - stand.water) * (1.0 - stand.char)
    quality = classified(
        sky,
        green=cover.image(stand.cover * stand.greenness * open_land),
        water=cover.image(stand.water),
        char=cover.image(stand.char),
        patches=cover.density / TEXTURE,
    )
    return Look(bands=bands, quality=quality)


@dataclass(frozen=True, slots=True, kw_only=True)
class Zones:
    """The cells of each parcel that are usable in a look, with their weights."""

    cell: Places
    field: Places
    weight: Numbers
    valid_share: Numbers

    def mean_and_sd(self, image: Image) -> tuple[Numbers, Numbers]:
        """Return weighted means and spreads per parcel, NaN where no cell is usable."""
        values = image.ravel()[self.cell]
        count = len(FIELDS)
        with np.errstate(invalid="ignore"):
            total = np.bincount(self.field, self.weight, minlength=count)
            mean = np.bincount(self.field, self.weight * values, minlength=count) / total
            away = (values - mean[self.field]) ** 2
            spread = np.bincount(self.field, self.weight * away, minlength=count) / total
        return mean, np.sqrt(spread)


def zones_in(cover: Cover, usable: NDArray[np.bool_]) -> Zones:
    """Return the parcels' usable cells; the share is of the whole parcel, also off the tile."""
    kept = (cover.field >= 0) & usable.ravel()[cover.cell]
    areas = np.asarray([field.shape.area for field in FIELDS])
    seen = np.bincount(cover.field[kept], cover.share[kept], minlength=len(FIELDS))
    return Zones(
        cell=cover.cell[kept],
        field=cover.field[kept],
        weight=cover.share[kept],
        valid_share=np.minimum(seen * CELL**2 / areas, 1.0),
    )


def measures_of(look: Look) -> dict[str, Image]:
    """Return the images of the measures that past figures are made of, and of every band."""
    blue, green, red, edge, nir, swir16, swir22 = (look.on_fine_cells(role) for role in ROLES)

    def normalised(first: Image, second: Image) -> Image:
        return np.asarray((first - second) / (first + second))

    bare, leafy = swir16 + red, nir + blue
    return {
        "ndvi": normalised(nir, red),
        "evi2": 2.5 * (nir - red) / (nir + 2.4 * red + 1.0),
        "savi": 1.5 * (nir - red) / (nir + red + 0.5),
        "ndre": normalised(nir, edge),
        "ndmi": normalised(nir, swir16),
        "ndwi": normalised(green, nir),
        "mndwi": normalised(green, swir16),
        "nbr": normalised(nir, swir22),
        "nbr2": normalised(swir16, swir22),
        "ndsi": normalised(green, swir16),
        "bsi": normalised(bare, leafy),
        **{role: look.on_fine_cells(role) for role in ROLES},
    }
