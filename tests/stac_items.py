"""STAC Items that we make up, in the shapes that the published standards define.

STAC Item 1.0.0 with the extensions eo v1.1.0 and raster v1.1.0 (``eo:bands`` and
``raster:bands``, merged by position), and STAC Item 1.1.0 with eo v2.0.0, raster v2.0.0 and
projection v2.0.0 (one array ``bands``). Ids, hosts and numbers are our own.
"""

from collections.abc import Mapping
from typing import Any

HOST = "https://tiles.example/33/"
S2_BANDS = {
    "B02": ("blue", 0.4923, 10),
    "B03": ("green", 0.5589, 10),
    "B04": ("red", 0.6649, 10),
    "B05": ("rededge071", 0.7038, 20),
    "B06": ("rededge075", 0.7391, 20),
    "B07": ("rededge078", 0.7797, 20),
    "B08": ("nir", 0.8329, 10),
    "B8A": ("nir08", 0.864, 20),
    "B11": ("swir16", 1.6104, 20),
    "B12": ("swir22", 2.1857, 20),
}
"""By band its common name, centre wavelength in micrometres and cell size in metres."""
OLI_BANDS = {
    "OLI_B2": ("blue", 0.48, 30),
    "OLI_B4": ("red", 0.65, 30),
    "OLI_B5": ("nir08", 0.87, 30),
    "OLI_B6": ("swir16", 1.61, 30),
}
TM_BANDS = {
    "TM_B3": ("red", 0.66, 30),
    "TM_B4": ("nir08", 0.83, 30),
    "TM_B5": ("swir16", 1.65, 30),
}
S2_SCALING = (0.0001, -0.1)
LANDSAT_SCALING = (0.0000275, -0.2)
Bands = Mapping[str, tuple[str, float, int]]


def asset_1_0(
    name: str, band: tuple[str, float, int], scaling: tuple[float, float] | None, href: str
) -> dict[str, Any]:
    common, centre_um, cell_m = band
    stored: dict[str, Any] = {"nodata": 0, "data_type": "uint16", "spatial_resolution": cell_m}
    if scaling:
        stored |= {"scale": scaling[0], "offset": scaling[1]}
    return {
        "href": href,
        "type": "image/tiff; application=geotiff; profile=cloud-optimized",
        "roles": ["data", "reflectance"],
        "eo:bands": [{"name": name, "common_name": common, "center_wavelength": centre_um}],
        "raster:bands": [stored],
    }


def asset_1_1(
    name: str, band: tuple[str, float, int], scaling: tuple[float, float] | None, href: str
) -> dict[str, Any]:
    common, centre_um, cell_m = band
    told: dict[str, Any] = {
        "name": name,
        "eo:common_name": common,
        "eo:center_wavelength": centre_um,
    }
    asset: dict[str, Any] = {
        "href": href,
        "type": "image/tiff; application=geotiff; profile=cloud-optimized",
        "roles": ["data"],
        "nodata": 0,
        "data_type": "uint16",
        "raster:spatial_resolution": cell_m,
        "bands": [told],
    }
    if scaling:
        asset |= {"raster:scale": scaling[0], "raster:offset": scaling[1]}
    return asset


def item(
    version: str,
    bands: Bands,
    *,
    properties: Mapping[str, Any],
    scaling: tuple[float, float] | None,
    layers: Mapping[str, str],
    ref: str = "made-up-1",
    suffix: str = ".tif",
) -> dict[str, Any]:
    """Return an Item of single-band assets, keyed by band name; layers are name → key."""
    make = asset_1_0 if version == "1.0.0" else asset_1_1
    assets = {
        name: make(name, band, scaling, f"{HOST}{name}{suffix}") for name, band in bands.items()
    }
    for name, key in layers.items():
        assets[key] = {
            "href": f"{HOST}{name}{suffix}",
            "type": "image/tiff; application=geotiff",
            "roles": ["data"],
        }
    return {
        "type": "Feature",
        "stac_version": version,
        "stac_extensions": [],
        "id": ref,
        "geometry": None,
        "properties": dict(properties),
        "links": [{"rel": "self", "href": f"{HOST}item.json"}],
        "assets": assets,
    }


S2_PROPERTIES = {
    "datetime": "2024-06-03T10:10:31Z",
    "platform": "sentinel-2b",
    "constellation": "sentinel-2",
    "instruments": ["msi"],
    "grid:code": "MGRS-33UVR",
    "s2:processing_baseline": "05.10",
}
L9_PROPERTIES = {
    "datetime": "2024-06-04T10:02:11.123456Z",
    "platform": "landsat-9",
    "instruments": ["oli", "tirs"],
    "landsat:wrs_path": "190",
    "landsat:wrs_row": "026",
    "landsat:correction": "L2SP",
    "landsat:collection_number": "02",
}


def sentinel_2(
    version: str = "1.1.0",
    *,
    bands: Bands = S2_BANDS,
    scaling: tuple[float, float] | None = S2_SCALING,
    **properties: Any,
) -> dict[str, Any]:
    """Return an Item of Sentinel-2 Level-2A; a property of None is left out."""
    told = {**S2_PROPERTIES, **{name.replace("__", ":"): v for name, v in properties.items()}}
    told = {name: value for name, value in told.items() if value is not None}
    return item(version, bands, properties=told, scaling=scaling, layers={"SCL": "scl"})


def landsat(
    version: str = "1.0.0",
    *,
    bands: Bands = OLI_BANDS,
    scaling: tuple[float, float] | None = LANDSAT_SCALING,
    **properties: Any,
) -> dict[str, Any]:
    """Return an Item of Landsat Collection 2 Level-2, by default of Landsat 9."""
    told = {**L9_PROPERTIES, **{name.replace("__", ":"): v for name, v in properties.items()}}
    layers = {"QA_PIXEL": "qa_pixel", "QA_RADSAT": "qa_radsat"}
    return item(version, bands, properties=told, scaling=scaling, layers=layers)
