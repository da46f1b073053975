"""Make the demo's invented satellite scene: parcels, band files and the truth behind them.

Run as ``python sample_tiles/generate.py OUT [--seed N]``. The same seed gives the same files.
Nothing here comes from the service: what it measures can be held against what was put in.

Quillmere Growers, their parcels and the land itself are invented; the tile lies over open
sea of UTM zone 33N, so that no real field is shown.
"""

import argparse
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from quillmere.surfaces import CELL_M, CLOUD_REFLECTANCE, ROLES, SHADOW_LIGHT, SURFACES
from quillmere.tile import (
    FINE_M,
    SIDE_M,
    Image,
    averaged,
    cells_inside,
    geometry_of,
    numbers_stored,
    texture,
    write_band,
    write_json,
)
from shapely.geometry import Polygon, box

Point = tuple[float, float]

DEFAULT_SEED: Final = 1106

# Shares of each surface in a cover class; they add up to 1.
COVERS: Final[Mapping[str, Mapping[str, float]]] = {
    "dense": {"canopy": 0.96, "soil": 0.04},
    "closing": {"canopy": 0.65, "soil": 0.35},
    "open": {"canopy": 0.30, "soil": 0.70},
    "bare": {"canopy": 0.02, "soil": 0.98},
    "stubble": {"stubble": 0.90, "soil": 0.10},
    "water": {"water": 1.0},
    "margin": {"canopy": 0.45, "soil": 0.55},
}
TEXTURE: Final = 0.05
LOOK_VALID_SHARE: Final = 0.6
# Classes of the Sentinel-2 scene classification.
SHADOW, VEGETATED, NOT_VEGETATED, WATER, CLOUD_MEDIUM, CLOUD_HIGH = 3, 4, 5, 6, 8, 9
LOST_CLASSES: Final = {"cloud": (CLOUD_MEDIUM, CLOUD_HIGH), "shadow": (SHADOW,)}


@dataclass(frozen=True, slots=True, kw_only=True)
class Parcel:
    """One invented parcel; `outline` and `hole` in metres right of and below the tile's corner."""

    ref: str
    name: str
    holding: str
    crop: str | None
    cover: str
    outline: tuple[Point, ...]
    hole: tuple[Point, ...] = ()
    tags: tuple[str, ...] = ()

    @property
    def shape(self) -> Polygon:
        """The outline without its hole, in metres right of and below the tile's corner."""
        return Polygon(self.outline, [self.hole] if self.hole else [])


@dataclass(frozen=True, slots=True, kw_only=True)
class Cloud:
    """An elliptic cloud and how far its shadow falls; metres right of and below the corner."""

    centre: Point
    radii: Point
    shadow_shift: Point


@dataclass(frozen=True, slots=True, kw_only=True)
class Scene:
    """One acquisition: when, by what, under which clouds."""

    ref: str
    acquired_at: str
    platform: str
    clouds: tuple[Cloud, ...]


HOME, HILL = "nether-quill", "over-quill"
# A yard of bare ground in the middle of a meadow, which must not be charged with it.
YARD: Final[tuple[Point, ...]] = ((640, 990), (800, 980), (810, 1120), (650, 1130))
PARCELS: Final = (
    Parcel(ref="QM-01", name="Long Rise", holding=HOME, crop="winter wheat", cover="dense",
           outline=((60, 80), (420, 60), (440, 330), (90, 350)), tags=("drained",)),
    Parcel(ref="QM-02", name="Teal Piece", holding=HOME, crop="winter barley", cover="closing",
           outline=((490, 70), (790, 60), (800, 350), (620, 370), (500, 340))),
    Parcel(ref="QM-03", name="Shade Field", holding=HOME, crop="sugar beet", cover="closing",
           outline=((960, 430), (1230, 420), (1240, 610), (970, 620))),
    Parcel(ref="QM-04", name="Cloudberry Flat", holding=HILL, crop="potatoes", cover="closing",
           outline=((1210, 850), (1480, 860), (1490, 1040), (1220, 1050))),
    Parcel(ref="QM-05", name="Half Moon", holding=HILL, crop="grain maize", cover="open",
           outline=((1430, 1050), (1760, 1030), (1780, 1320), (1450, 1340))),
    Parcel(ref="QM-06", name="Bee Ley", holding=HILL, crop="lucerne", cover="dense",
           outline=((1430, 80), (1790, 100), (1770, 360), (1480, 380))),
    Parcel(ref="QM-07", name="Bald Knoll", holding=HOME, crop="fallow", cover="bare",
           outline=((60, 430), (390, 420), (400, 760), (240, 800), (70, 750)), tags=("set-aside",)),
    Parcel(ref="QM-08", name="Crake Corner", holding=HOME, crop="grain maize", cover="open",
           outline=((470, 450), (780, 430), (800, 710), (460, 730))),
    Parcel(ref="QM-09", name="Quill Mere", holding=HOME, crop=None, cover="water",
           outline=((180, 900), (320, 880), (400, 970), (380, 1090), (260, 1140), (150, 1040)),
           tags=("pond",)),
    Parcel(ref="QM-10", name="Ringmeadow", holding=HOME, crop="permanent grassland", cover="dense",
           outline=((480, 870), (990, 850), (1010, 1250), (500, 1270)),
           hole=YARD, tags=("grazed",)),
    Parcel(ref="QM-11", name="Sill End", holding=HILL, crop="winter rape", cover="dense",
           outline=((1250, 1560), (1690, 1570), (1700, 2040), (1260, 2040))),
    Parcel(ref="QM-12", name="Trial Bed", holding=HOME, crop="spring barley", cover="dense",
           outline=((903, 1504), (921, 1504), (921, 1522), (903, 1522)), tags=("trial",)),
    Parcel(ref="QM-13", name="Gleaner's Strip", holding=HOME, crop="stubble", cover="stubble",
           outline=((100, 1250), (440, 1230), (460, 1590), (110, 1610))),
    Parcel(ref="QM-14", name="Beet Bottom", holding=HOME, crop="sugar beet", cover="closing",
           outline=((560, 1400), (850, 1390), (870, 1740), (570, 1760))),
)  # fmt: skip
SCENES: Final = (
    Scene(
        ref="quillmere_20240611",
        acquired_at="2024-06-11T10:06:29Z",
        platform="sentinel-2b",
        # The sun stands in the south-east at this hour, so the shadow falls to the north-west.
        clouds=(Cloud(centre=(1350, 950), radii=(270, 210), shadow_shift=(-250, -430)),),
    ),
)


def surface_shares(parcels: Sequence[Parcel], random: np.random.Generator) -> dict[str, Image]:
    """Return the share of each surface in every fine cell; they add up to 1 in each."""
    side = round(SIDE_M / FINE_M)
    drawn = [(parcel.shape, parcel.cover) for parcel in parcels] + [(Polygon(YARD), "bare")]
    shares = {name: np.full((side, side), COVERS["margin"].get(name, 0.0)) for name in SURFACES}
    for shape, cover in drawn:
        inside = cells_inside(shape)
        for name in SURFACES:
            shares[name][inside] = COVERS[cover].get(name, 0.0)
    # Stand density varies within a field, at the expense of bare soil.
    green = shares["canopy"] > 0
    varied = np.clip(shares["canopy"] + TEXTURE * texture(random), 0.0, 1.0)
    shares["canopy"] = np.where(green, varied, 0.0)
    shares["soil"] = np.where(green, 1.0 - varied, shares["soil"])
    return shares


def cloud_cover(clouds: Sequence[Cloud]) -> tuple[Image, Image]:
    """Return opacity of the clouds and depth of their shadows, each 0-1 per fine cell."""
    at = (np.arange(round(SIDE_M / FINE_M)) + 0.5) * FINE_M

    def blob(centre: Point, radii: Point) -> Image:
        away = ((at[None, :] - centre[0]) / radii[0]) ** 2
        away = away + ((at[:, None] - centre[1]) / radii[1]) ** 2
        return np.asarray(np.clip((1.0 - away) / 0.35, 0.0, 1.0), dtype=np.float64)

    opacity, shade = np.zeros((at.size, at.size)), np.zeros((at.size, at.size))
    for cloud in clouds:
        fallen = (
            cloud.centre[0] + cloud.shadow_shift[0],
            cloud.centre[1] + cloud.shadow_shift[1],
        )
        opacity = np.maximum(opacity, blob(cloud.centre, cloud.radii))
        shade = np.maximum(shade, blob(fallen, cloud.radii))
    return opacity, shade


def band_numbers(
    role: str,
    *,
    shares: Mapping[str, Image],
    opacity: Image,
    shade: Image,
    random: np.random.Generator,
) -> NDArray[np.uint16]:
    """Return one band's digital numbers as a product of baseline 05.10 stores them."""
    at = ROLES.index(role)
    ground = sum((SURFACES[name][at] * share for name, share in shares.items()), np.zeros(1))
    lit = ground * (1.0 - shade * (1.0 - SHADOW_LIGHT[at]))
    seen = averaged(lit * (1.0 - opacity) + CLOUD_REFLECTANCE[at] * opacity, CELL_M[role])
    noisy = seen + random.normal(size=seen.shape) * (0.001 + 0.01 * seen)
    return numbers_stored(noisy)


def quality_classes(
    shares: Mapping[str, Image], *, opacity: Image, shade: Image
) -> NDArray[np.uint8]:
    """Return the scene classification on its own 20 m cells."""
    cell_m = CELL_M["quality"]
    canopy, water = averaged(shares["canopy"], cell_m), averaged(shares["water"], cell_m)
    cloud, dark = averaged(opacity, cell_m), averaged(shade, cell_m)
    classes = np.where(canopy > 0.25, VEGETATED, NOT_VEGETATED)
    for where, value in (
        (water > 0.5, WATER),
        (dark > 0.02, SHADOW),
        (cloud > 0.02, CLOUD_MEDIUM),
        (cloud > 0.5, CLOUD_HIGH),
    ):
        classes = np.where(where, value, classes)
    return classes.astype(np.uint8)


def feature_of(parcel: Parcel) -> dict[str, Any]:
    """Return the GeoJSON feature of a parcel, WGS 84, as `PUT /v1/parcels` takes it."""
    properties: dict[str, Any] = {
        "ref": parcel.ref,
        "name": parcel.name,
        "holding": parcel.holding,
        "tags": list(parcel.tags),
    }
    if parcel.crop is not None:
        properties["crop"] = parcel.crop
    return {"type": "Feature", "properties": properties, "geometry": geometry_of(parcel.shape)}


def scene_part(scene: Scene) -> dict[str, Any]:
    """Return the `scene` part of `POST /v1/scenes`."""
    return {
        "ref": scene.ref,
        "sensor": "sentinel-2-l2a",
        "acquired_at": scene.acquired_at,
        "processing_baseline": "05.10",
        "platform": scene.platform,
        "tile": "quillmere",
    }


def ndvi_of(cover: str) -> float:
    """Return the NDVI of a cover class's mean spectrum."""
    red, nir = (
        sum(share * SURFACES[name][ROLES.index(role)] for name, share in COVERS[cover].items())
        for role in ("red", "nir")
    )
    return (nir - red) / (nir + red)


def truth_of(parcel: Parcel, classes: NDArray[np.uint8]) -> dict[str, Any]:
    """Return what was put in: cover, shares lost, whether a look is owed, the range of NDVI.

    The sum of spectra has an NDVI between those of its parts, so a parcel of few cells, all
    of them on its edge, lies between its cover and the margin around it.
    """
    shape = parcel.shape
    inside = cells_inside(shape)
    step = round(CELL_M["quality"] / FINE_M)
    found = np.repeat(np.repeat(classes, step, axis=0), step, axis=1)[inside]
    on_tile = shape.intersection(box(0, 0, SIDE_M, SIDE_M)).area / shape.area
    lost = {
        name: round(on_tile * float(np.isin(found, values).mean()), 3)
        for name, values in LOST_CLASSES.items()
    }
    lost["nodata"] = round(1.0 - on_tile, 3)
    valid_share = round(1.0 - sum(lost.values()), 3)
    is_small = shape.area < 4 * CELL_M["red"] ** 2
    ends = (ndvi_of(parcel.cover), ndvi_of("margin" if is_small else parcel.cover))
    return {
        "cover": parcel.cover,
        "valid_share": valid_share,
        "lost": lost,
        "look": valid_share >= LOOK_VALID_SHARE,
        "clouded": lost["cloud"] + lost["shadow"] > 0,
        "small": is_small,
        "ndvi": [round(min(ends) - 0.08, 3), round(max(ends) + 0.08, 3)],
    }


def write_scene(folder: Path, scene: Scene, parcels: Sequence[Parcel], *, seed: int) -> None:
    """Write one scene: its band files, its `scene` part and its truth."""
    # One stream of numbers for the land and one per band: a band more leaves the others alone.
    land, *noise = (np.random.default_rng([seed, at]) for at in range(1 + len(ROLES)))
    shares = surface_shares(parcels, land)
    opacity, shade = cloud_cover(scene.clouds)
    for role, random in zip(ROLES, noise, strict=True):
        numbers = band_numbers(role, shares=shares, opacity=opacity, shade=shade, random=random)
        write_band(folder / f"{role}.tif", numbers, CELL_M[role])
    classes = quality_classes(shares, opacity=opacity, shade=shade)
    write_band(folder / "quality.tif", classes, CELL_M["quality"])
    write_json(folder / "scene.json", scene_part(scene))
    truth = {parcel.ref: truth_of(parcel, classes) for parcel in parcels}
    write_json(folder / "truth.json", {"scene": scene.ref, "seed": seed, "parcels": truth})


def generate(folder: Path, *, seed: int = DEFAULT_SEED) -> None:
    """Write the parcels and the scene into a folder, which is made if need be."""
    folder.mkdir(parents=True, exist_ok=True)
    features = [feature_of(parcel) for parcel in PARCELS]
    write_json(folder / "parcels.geojson", {"type": "FeatureCollection", "features": features})
    write_scene(folder, SCENES[0], PARCELS, seed=seed)


def main() -> None:
    """Read the command line and generate."""
    parser = argparse.ArgumentParser(description="Write the invented sample scene.")
    parser.add_argument("out", type=Path, help="folder to write into")
    parser.add_argument("--seed", type=int, default=DEFAULT_SEED, help="same seed, same files")
    arguments = parser.parse_args()
    generate(arguments.out, seed=arguments.seed)
    print(f"{len(PARCELS)} parcels and the scene {SCENES[0].ref} written")


if __name__ == "__main__":
    main()
