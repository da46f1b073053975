"""What anyone could put together from general libraries, for the same figures."""

from collections.abc import Iterator, Mapping, Sequence
from importlib.util import find_spec
from typing import Any, Final

import numpy as np
import rasterio
import shapely
from numpy.typing import NDArray

from benchmarks.engine.ours import TWELVE
from benchmarks.engine.scenes import CRS
from service.errors import Unavailable
from service.spectral.indices import Index
from service.spectral.quality import SCL
from service.tiles.reading import BandSource, SceneSource
from service.zonal.coverage import MIN_COVERAGE

_LEAST: Final = f"min_coverage_frac={MIN_COVERAGE}"
STATISTICS: Final = (
    f"mean({_LEAST})", f"stdev({_LEAST})", f"min({_LEAST})", f"max({_LEAST})",
    f"count({_LEAST})", f"quantile(q=0.1,{_LEAST})", f"quantile(q=0.5,{_LEAST})",
    f"quantile(q=0.9,{_LEAST})",
)  # fmt: skip

Image = NDArray[np.float32]


def check_libraries() -> None:
    """Say what to install if a library to compare with is not there.

    Raises
    ------
    Unavailable
        One of them is missing.
    """
    for name in ("exactextract", "rioxarray"):
        if find_spec(name) is None:
            raise Unavailable(
                "no-library", f"The benchmark compares with {name}; install the extra `bench`."
            )


def features_of(outlines: Sequence[shapely.Polygon]) -> list[dict[str, Any]]:
    """Return parcels as the zonal library takes them."""
    return [
        {"type": "Feature", "properties": {}, "geometry": shapely.geometry.mapping(outline)}
        for outline in outlines
    ]


def index_images(source: SceneSource) -> Iterator[tuple[Index, Image]]:
    """Decode all bands, bring them to one grid, and yield an image of each index."""
    usable, bands = _usable(source), _bands(source)
    for index in TWELVE:
        yield index, _image(index, bands, usable)


def _bands(source: SceneSource) -> dict[str, NDArray[np.uint16]]:
    return {str(band.role): _on_fine_grid(band) for band in source.bands}


def _usable(source: SceneSource) -> NDArray[np.bool_]:
    assert source.quality is not None  # noqa: S101 - the benchmark's scenes have one
    return np.isin(_on_fine_grid(source.quality), sorted(SCL.rules["clear"].keep))


def _on_fine_grid(layer: BandSource) -> NDArray[Any]:
    with rasterio.open(layer.path) as file:
        numbers: NDArray[Any] = file.read(1)
        step = round(file.transform.a / 10.0)
    return numbers if step == 1 else numbers.repeat(step, axis=0).repeat(step, axis=1)


def _image(
    index: Index, bands: Mapping[str, NDArray[np.uint16]], usable: NDArray[np.bool_]
) -> Image:
    reflectances = {}
    for role in index.roles:
        numbers = bands[role.value]
        reflectances[role.value] = (numbers * np.float32(1e-4) - np.float32(0.1)).astype("f4")
    image: Image = index.compute(**reflectances).astype(np.float32)
    image[~usable] = np.nan
    return image


def _raster(image: Image, left: float, top: float, name: str = "image") -> Any:
    from exactextract.raster import NumPyRasterSource  # noqa: PLC0415 - only where it is compared

    rows, cols = image.shape
    return NumPyRasterSource(image, left, top - 10 * rows, left + 10 * cols, top, name=name)


def zonal_by_index(
    images: Sequence[Image], features: list[Any], corner: tuple[float, float]
) -> Any:
    """Return the statistics of every image by the zonal library, one call for each."""
    from exactextract import exact_extract  # noqa: PLC0415
    from exactextract.feature import JSONFeatureSource  # noqa: PLC0415

    for image in images:
        exact_extract(_raster(image, *corner), JSONFeatureSource(features), list(STATISTICS))


def zonal_at_once(images: Sequence[Image], features: list[Any], corner: tuple[float, float]) -> Any:
    """Return the statistics of all images by the zonal library in one call."""
    from exactextract import exact_extract  # noqa: PLC0415
    from exactextract.feature import JSONFeatureSource  # noqa: PLC0415

    rasters = [_raster(image, *corner, f"image {place}") for place, image in enumerate(images)]
    return exact_extract(rasters, JSONFeatureSource(features), list(STATISTICS))


def coverage(features: list[Any], shape: tuple[int, int], corner: tuple[float, float]) -> Any:
    """Return which cells each parcel covers, by the zonal library."""
    from exactextract import exact_extract  # noqa: PLC0415
    from exactextract.feature import JSONFeatureSource  # noqa: PLC0415

    plane = np.broadcast_to(np.zeros((), dtype=np.float32), shape)
    operations = ["cell_id", "coverage"]
    return exact_extract(_raster(plane, *corner), JSONFeatureSource(features), operations)


def clip_each(source: SceneSource, outlines: Sequence[shapely.Polygon]) -> None:
    """Clip every parcel out of the bands of every index, and summarise what is left."""
    import rioxarray  # noqa: PLC0415

    for outline in outlines:
        for index in TWELVE:
            pixels = {}
            for band in source.bands:
                if band.role in index.roles:
                    opened: Any = rioxarray.open_rasterio(band.path)
                    with opened as raster:
                        cut = raster.rio.write_nodata(0).rio.clip([outline], CRS, all_touched=True)
                        pixels[str(band.role)] = cut.to_numpy()[0] * 1e-4 - 0.1
            shapes = {array.shape for array in pixels.values()}
            size = max(shapes)
            values = index.compute(**{role: _fitted(p, size) for role, p in pixels.items()})
            np.nanquantile(values, [0.1, 0.5, 0.9])
            _ = np.nanmean(values), np.nanstd(values), np.nanmin(values), np.nanmax(values)


def _fitted(pixels: NDArray[np.float64], shape: tuple[int, int]) -> NDArray[np.float64]:
    """Bring pixels of a coarser band to the shape of the finer ones."""
    if pixels.shape == shape:
        return pixels
    finer = pixels.repeat(2, axis=0).repeat(2, axis=1)
    room = np.full(shape, np.nan)
    rows, cols = min(shape[0], finer.shape[0]), min(shape[1], finer.shape[1])
    room[:rows, :cols] = finer[:rows, :cols]
    return room
