"""Agencies' products of invented surfaces, as they are delivered: folders, metadata, files.

The structure of the metadata is the published one, in the parts that a reader needs (ESA,
Sentinel-2 product specification, Level-2A; USGS, Landsat Collection 2 Level-2 data format
control book); names follow the naming conventions. Scenes, times and numbers are our own.
"""

from collections.abc import Iterator, Mapping, Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from affine import Affine
from numpy.typing import NDArray

from tests.serving import ORIGIN, write_band

Surface = Mapping[str, float | NDArray[np.floating]]
"""Reflectance by band role: one for all cells, or (rows, cols) on the finest grid."""

SENSED_AT = datetime(2024, 6, 3, 10, 17, 59, 919_000, tzinfo=UTC)
BANDS = {
    "B01": "coastal",
    "B02": "blue",
    "B03": "green",
    "B04": "red",
    "B05": "rededge071",
    "B06": "rededge075",
    "B07": "rededge078",
    "B08": "nir",
    "B8A": "nir08",
    "B09": "nir09",
    "B11": "swir16",
    "B12": "swir22",
}
PHYSICAL = ("B1", "B2", "B3", "B4", "B5", "B6", "B7", "B8", "B8A", "B9", "B10", "B11", "B12")
"""By band id what the metadata call the bands."""
OTHER_REFLECTANCE = 0.2
"""Of bands of which the surface says nothing."""


def safe_name(
    *,
    baseline: str = "05.10",
    sensed_at: datetime = SENSED_AT,
    platform: str = "2B",
    tile: str = "33UVR",
    level: str = "2A",
) -> str:
    """Return a product's name by the convention; the take began some minutes before the tile."""
    started = _taken_from(sensed_at)
    made = sensed_at + timedelta(hours=4)
    token = baseline.replace(".", "")
    return (
        f"S{platform}_MSIL{level}_{started:%Y%m%dT%H%M%S}_N{token}_R065_T{tile}"
        f"_{made:%Y%m%dT%H%M%S}.SAFE"
    )


def _taken_from(sensed_at: datetime) -> datetime:
    return (sensed_at - timedelta(minutes=2)).replace(microsecond=24_000)


def write_safe(
    folder: Path,
    surface: Surface,
    *,
    cells: int = 60,
    scl: int | NDArray[np.integer] = 4,
    baseline: str = "05.10",
    offset: int | None = None,
    sensed_at: datetime = SENSED_AT,
    platform: str = "2B",
    tile: str = "33UVR",
    origin: tuple[float, float] = ORIGIN,
    crs: str = "EPSG:32633",
) -> Path:
    """Write a Sentinel-2 Level-2A product in a folder; return it.

    Bands are JPEG 2000, without loss. The grid has `cells` cells of 10 m a side, a multiple
    of 6; `scl` is one class or (cells / 2, cells / 2). Numbers carry `offset`, by default
    -1000 from baseline 04.00 on and none before, when the metadata have no list of offsets.
    """
    if offset is None:
        offset = -1000 if baseline >= "04.00" else 0
    name = safe_name(baseline=baseline, sensed_at=sensed_at, platform=platform, tile=tile)
    safe = folder / name
    granule = f"L2A_T{tile}_A012345_{sensed_at:%Y%m%dT%H%M%S}"
    stem = f"T{tile}_{_taken_from(sensed_at):%Y%m%dT%H%M%S}"
    images = []
    for metres, key, numbers in _images(surface, cells, scl, offset, has_b01=baseline >= "04.00"):
        image = f"GRANULE/{granule}/IMG_DATA/R{metres}m/{stem}_{key}_{metres}m"
        write_jp2(safe / f"{image}.jp2", numbers, cell_m=metres, origin=origin, crs=crs)
        images.append(image)
    (safe / "MTD_MSIL2A.xml").write_text(
        product_xml(
            name,
            images,
            baseline=baseline,
            offset=offset,
            sensed_at=sensed_at,
            platform=platform,
            tile=tile,
        ),
        "utf-8",
    )
    (safe / "GRANULE" / granule / "MTD_TL.xml").write_text(_tile_xml(sensed_at, tile), "utf-8")
    return safe


def _images(
    surface: Surface,
    cells: int,
    scl: int | NDArray[np.integer],
    offset: int,
    *,
    has_b01: bool,
) -> Iterator[tuple[int, str, NDArray[Any]]]:
    """Yield resolution, key and numbers of each image of a product."""
    fine = ("B02", "B03", "B04", "B08")
    coarse = ("B02", "B03", "B04", "B05", "B06", "B07", "B8A", "B11", "B12")
    keys = {10: fine, 20: (*(["B01"] if has_b01 else []), *coarse), 60: ("B01", *coarse, "B09")}
    for metres, names in keys.items():
        side = cells * 10 // metres
        for key in names:
            rho = surface.get(BANDS[key], OTHER_REFLECTANCE)
            numbers = np.rint(coarsened(rho, cells, metres // 10) * 10_000) - offset
            # 0 is kept for "no data".
            yield metres, key, np.clip(numbers, 1, 65_534).astype(np.uint16)
        for key in ("AOT", "WVP"):
            yield metres, key, np.full((side, side), 100, dtype=np.uint16)
    classes = np.broadcast_to(np.asarray(scl, dtype=np.uint8), (cells // 2, cells // 2))
    yield 20, "SCL", classes
    yield 60, "SCL", classes[1::3, 1::3]
    yield 10, "TCI", np.full((3, cells, cells), 90, dtype=np.uint8)


def coarsened(rho: float | NDArray[np.floating], cells: int, factor: int) -> NDArray[np.float64]:
    """Return the means of square blocks of `factor` cells a side of a grid of `cells` a side."""
    full = np.broadcast_to(np.asarray(rho, dtype=np.float64), (cells, cells))
    side = cells // factor
    means: NDArray[np.float64] = full.reshape(side, factor, side, factor).mean(axis=(1, 3))
    return means


def write_jp2(
    path: Path,
    numbers: NDArray[Any],
    *,
    cell_m: float,
    origin: tuple[float, float] = ORIGIN,
    crs: str = "EPSG:32633",
) -> Path:
    """Write a JPEG 2000 of one band (rows, cols) or several (bands, rows, cols), without loss."""
    bands = numbers if numbers.ndim == 3 else numbers[np.newaxis]
    path.parent.mkdir(parents=True, exist_ok=True)
    with rasterio.open(
        path,
        "w",
        driver="JP2OpenJPEG",
        count=bands.shape[0],
        height=bands.shape[1],
        width=bands.shape[2],
        dtype=bands.dtype,
        crs=crs,
        transform=Affine(cell_m, 0, origin[0], 0, -cell_m, origin[1]),
        QUALITY="100",
        REVERSIBLE="YES",
        YCBCR420="NO",
    ) as file:
        file.write(bands)
    return path


def product_xml(
    name: str,
    images: Sequence[str],
    *,
    baseline: str,
    offset: int,
    sensed_at: datetime,
    platform: str,
    tile: str,
) -> str:
    """Return the metadata of a Level-2A product."""
    started = _taken_from(sensed_at)
    files = "\n".join(f"            <IMAGE_FILE>{image}</IMAGE_FILE>" for image in images)
    offsets = "\n".join(
        f'        <BOA_ADD_OFFSET band_id="{band}">{offset}</BOA_ADD_OFFSET>'
        for band in range(len(PHYSICAL))
    )
    listed = (
        f"      <BOA_ADD_OFFSET_VALUES_LIST>\n{offsets}\n      </BOA_ADD_OFFSET_VALUES_LIST>\n"
        if offset
        else ""
    )
    bands = "\n".join(
        f'        <Spectral_Information bandId="{number}" physicalBand="{band}"/>'
        for number, band in enumerate(PHYSICAL)
    )
    namespace = "https://psd-15.sentinel2.eo.esa.int/PSD/User_Product_Level-2A.xsd"
    return f"""<?xml version="1.0" encoding="UTF-8" standalone="no"?>
<n1:Level-2A_User_Product xmlns:n1="{namespace}">
  <n1:General_Info>
    <Product_Info>
      <PRODUCT_START_TIME>{written(started)}</PRODUCT_START_TIME>
      <PRODUCT_STOP_TIME>{written(started)}</PRODUCT_STOP_TIME>
      <PRODUCT_URI>{name}</PRODUCT_URI>
      <PROCESSING_LEVEL>Level-2A</PROCESSING_LEVEL>
      <PRODUCT_TYPE>S2MSI2A</PRODUCT_TYPE>
      <PROCESSING_BASELINE>{baseline}</PROCESSING_BASELINE>
      <Datatake datatakeIdentifier="GS{platform}_{started:%Y%m%dT%H%M%S}_012345_N{baseline}">
        <SPACECRAFT_NAME>Sentinel-{platform}</SPACECRAFT_NAME>
        <DATATAKE_TYPE>INS-NOBS</DATATAKE_TYPE>
        <DATATAKE_SENSING_START>{written(started)}</DATATAKE_SENSING_START>
        <SENSING_ORBIT_NUMBER>65</SENSING_ORBIT_NUMBER>
      </Datatake>
      <Product_Organisation>
        <Granule_List>
          <Granule granuleIdentifier="S{platform}_OPER_MSI_L2A_TL_2BPS_A012345_T{tile}_N{baseline}"
                   imageFormat="JPEG2000">
{files}
          </Granule>
        </Granule_List>
      </Product_Organisation>
    </Product_Info>
    <Product_Image_Characteristics>
      <Special_Values>
        <SPECIAL_VALUE_TEXT>NODATA</SPECIAL_VALUE_TEXT>
        <SPECIAL_VALUE_INDEX>0</SPECIAL_VALUE_INDEX>
      </Special_Values>
      <QUANTIFICATION_VALUES_LIST>
        <BOA_QUANTIFICATION_VALUE unit="none">10000</BOA_QUANTIFICATION_VALUE>
        <AOT_QUANTIFICATION_VALUE unit="none">1000.0</AOT_QUANTIFICATION_VALUE>
        <WVP_QUANTIFICATION_VALUE unit="cm">1000.0</WVP_QUANTIFICATION_VALUE>
      </QUANTIFICATION_VALUES_LIST>
{listed}      <Spectral_Information_List>
{bands}
      </Spectral_Information_List>
    </Product_Image_Characteristics>
  </n1:General_Info>
</n1:Level-2A_User_Product>
"""


def _tile_xml(sensed_at: datetime, tile: str) -> str:
    namespace = "https://psd-15.sentinel2.eo.esa.int/PSD/S2_PDI_Level-2A_Tile_Metadata.xsd"
    return f"""<?xml version="1.0" encoding="UTF-8" standalone="no"?>
<n1:Level-2A_Tile_ID xmlns:n1="{namespace}">
  <n1:General_Info>
    <TILE_ID metadataLevel="Brief">S2B_OPER_MSI_L2A_TL_2BPS_A012345_T{tile}_N05.10</TILE_ID>
    <SENSING_TIME metadataLevel="Standard">{written(sensed_at)}</SENSING_TIME>
  </n1:General_Info>
</n1:Level-2A_Tile_ID>
"""


def written(at: datetime) -> str:
    """Return an instant as the metadata write it."""
    return f"{at:%Y-%m-%dT%H:%M:%S}.{at.microsecond // 1000:03}Z"


OLI_NUMBERS = {
    "coastal": 1,
    "blue": 2,
    "green": 3,
    "red": 4,
    "nir": 5,
    "swir16": 6,
    "swir22": 7,
}
TM_NUMBERS = {"blue": 1, "green": 2, "red": 3, "nir": 4, "swir16": 5, "swir22": 7}


def write_landsat(
    folder: Path,
    surface: Surface,
    *,
    cells: int = 20,
    qa: int | NDArray[np.integer] = 21824,
    radsat: int = 0,
    kelvin: float = 296.0,
    number: int = 8,
    level: str = "L2SP",
    sensed_at: datetime = SENSED_AT,
    path_row: tuple[int, int] = (192, 27),
    scaling: tuple[float, float] = (2.75e-05, -0.2),
    origin: tuple[float, float] = ORIGIN,
    crs: str = "EPSG:32633",
) -> Path:
    """Write a Landsat Collection 2 Level-2 bundle in a folder; return it.

    The grid has `cells` cells of 30 m a side; `qa` is one number or (cells, cells). The
    surface temperature is there at level L2SP, and not at L2SR.
    """
    numbers = OLI_NUMBERS if number >= 8 else TM_NUMBERS
    thermal = "ST_B10" if number >= 8 else "ST_B6"
    product = landsat_id(number=number, level=level, sensed_at=sensed_at, path_row=path_row)
    bundle = folder / product
    bundle.mkdir(parents=True)
    grid = (cells, cells)
    scale, offset = scaling
    layers: dict[str, NDArray[Any]] = {
        f"SR_B{band}": stored(surface.get(role, OTHER_REFLECTANCE), grid, scale, offset)
        for role, band in numbers.items()
    }
    if level == "L2SP":
        layers[thermal] = stored(kelvin, grid, 0.00341802, 149.0)
    layers["QA_PIXEL"] = np.broadcast_to(np.asarray(qa, dtype=np.uint16), grid)
    layers["QA_RADSAT"] = np.full(grid, radsat, dtype=np.uint16)
    for name, layer in layers.items():
        write_band(bundle / f"{product}_{name}.TIF", layer, cell_m=30, origin=origin, crs=crs)
    text = mtl(
        product,
        layers,
        number=number,
        level=level,
        sensed_at=sensed_at,
        path_row=path_row,
        scaling=scaling,
    )
    (bundle / f"{product}_MTL.txt").write_text(text, "ascii")
    return bundle


def landsat_id(
    *,
    number: int = 8,
    level: str = "L2SP",
    sensed_at: datetime = SENSED_AT,
    path_row: tuple[int, int] = (192, 27),
) -> str:
    """Return a product's identifier by the convention."""
    instrument = {8: "LC", 9: "LC", 7: "LE"}.get(number, "LT")
    path, row = path_row
    made = sensed_at + timedelta(days=8)
    return (
        f"{instrument}{number:02}_{level}_{path:03}{row:03}_{sensed_at:%Y%m%d}_{made:%Y%m%d}_02_T1"
    )


def stored(
    values: float | NDArray[np.floating], grid: tuple[int, int], scale: float, offset: float
) -> NDArray[np.uint16]:
    """Return the numbers that a scaling stores values as; 0 is kept for fill."""
    full = np.broadcast_to(np.asarray(values, dtype=np.float64), grid)
    return np.clip(np.rint((full - offset) / scale), 1, 65_535).astype(np.uint16)


def mtl(
    product: str,
    layers: Mapping[str, object],
    *,
    number: int,
    level: str,
    sensed_at: datetime,
    path_row: tuple[int, int],
    scaling: tuple[float, float],
) -> str:
    """Return the metadata text of a bundle: Level-1 groups come later, with the same keys."""
    path, row = path_row
    bands = [name.removeprefix("SR_B") for name in layers if name.startswith("SR_B")]
    thermal = [name for name in layers if name.startswith("ST_")]
    contents = {
        "ORIGIN": '"Image of an invented surface"',
        "LANDSAT_PRODUCT_ID": f'"{product}"',
        "PROCESSING_LEVEL": f'"{level}"',
        "COLLECTION_NUMBER": "02",
        "COLLECTION_CATEGORY": '"T1"',
        "OUTPUT_FORMAT": '"GEOTIFF"',
        **{f"FILE_NAME_BAND_{band}": f'"{product}_SR_B{band}.TIF"' for band in bands},
        **{f"FILE_NAME_BAND_{name}": f'"{product}_{name}.TIF"' for name in thermal},
        "FILE_NAME_QUALITY_L1_PIXEL": f'"{product}_QA_PIXEL.TIF"',
        "FILE_NAME_QUALITY_L1_RADIOMETRIC_SATURATION": f'"{product}_QA_RADSAT.TIF"',
        "FILE_NAME_METADATA_ODL": f'"{product}_MTL.txt"',
    }
    attributes = {
        "SPACECRAFT_ID": f'"LANDSAT_{number}"',
        "SENSOR_ID": '"OLI_TIRS"' if number >= 8 else '"TM"',
        "WRS_TYPE": "2",
        "WRS_PATH": str(path),
        "WRS_ROW": str(row),
        "DATE_ACQUIRED": f"{sensed_at:%Y-%m-%d}",
        "SCENE_CENTER_TIME": f'"{sensed_at:%H:%M:%S}.{sensed_at.microsecond:06}0Z"',
        "CLOUD_COVER": "3.50",
    }
    scale, offset = scaling
    reflectance = {
        **{f"REFLECTANCE_MULT_BAND_{band}": f"{scale:g}" for band in bands},
        **{f"REFLECTANCE_ADD_BAND_{band}": f"{offset:g}" for band in bands},
    }
    temperature = {
        **{f"TEMPERATURE_MULT_BAND_{name}": "0.00341802" for name in thermal},
        **{f"TEMPERATURE_ADD_BAND_{name}": "149.0" for name in thermal},
    }
    level_1_contents = {
        **contents,
        "LANDSAT_PRODUCT_ID": f'"{product.replace(level, "L1TP")}"',
        "PROCESSING_LEVEL": '"L1TP"',
        **{f"FILE_NAME_BAND_{band}": f'"{product}_B{band}.TIF"' for band in bands},
    }
    level_1 = {
        **{f"REFLECTANCE_MULT_BAND_{band}": "2.0000E-05" for band in bands},
        **{f"REFLECTANCE_ADD_BAND_{band}": "-0.100000" for band in bands},
    }
    groups = {
        "PRODUCT_CONTENTS": contents,
        "IMAGE_ATTRIBUTES": attributes,
        "LEVEL2_PROCESSING_RECORD": {"PROCESSING_LEVEL": f'"{level}"'},
        "LEVEL2_SURFACE_REFLECTANCE_PARAMETERS": reflectance,
        **({"LEVEL2_SURFACE_TEMPERATURE_PARAMETERS": temperature} if thermal else {}),
        "LEVEL1_PROCESSING_RECORD": level_1_contents,
        "LEVEL1_RADIOMETRIC_RESCALING": level_1,
    }
    lines = ["GROUP = LANDSAT_METADATA_FILE"]
    for group, members in groups.items():
        lines.append(f"  GROUP = {group}")
        lines += [f"    {key} = {value}" for key, value in members.items()]
        lines.append(f"  END_GROUP = {group}")
    return "\n".join([*lines, "END_GROUP = LANDSAT_METADATA_FILE", "END", ""])
