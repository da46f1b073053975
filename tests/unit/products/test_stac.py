"""STAC Items as scenes: what is read, what is reported, what is refused and where.

The Items are made up in the shapes of the published standards: STAC Item 1.0.0 and 1.1.0,
eo v1.1.0 and v2.0.0, raster v1.1.0 and v2.0.0, projection v1.1.0 and v2.0.0, grid v1.1.0,
processing v1.2.0. Common names of both vocabularies are those of the eo extension's table.
"""

import copy
import json
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import pytest

from service.errors import RejectedInput
from service.products.product import Product
from service.products.stac import product_of, read_item
from tests.stac_items import HOST, OLI_BANDS, S2_BANDS, TM_BANDS, landsat, sentinel_2

VERSIONS = ["1.0.0", "1.1.0"]
Item = dict[str, Any]


def by_part(product: Product[Any]) -> dict[str, tuple[str, str]]:
    return {found.part: (found.source, found.by) for found in product.found}


def refusal(item: object) -> tuple[str, list[str | None]]:
    with pytest.raises(RejectedInput) as caught:
        product_of(item)
    error = caught.value
    assert error.detail.endswith(".")
    return error.code, [fault.pointer for fault in error.faults]


def changed(item: Item, change: Callable[[Item], object]) -> Item:
    other = copy.deepcopy(item)
    change(other)
    return other


def setting(*path: str | int, to: object) -> Callable[[Item], object]:
    """Return a change that sets a member; the last step of the path is its name."""

    def change(item: Item) -> None:
        held: Any = item
        for step in path[:-1]:
            held = held[step]
        held[path[-1]] = to

    return change


def without(*path: str | int) -> Callable[[Item], object]:
    def change(item: Item) -> None:
        held: Any = item
        for step in path[:-1]:
            held = held[step]
        del held[path[-1]]

    return change


@pytest.mark.parametrize("version", VERSIONS)
def test_an_item_of_sentinel_2_is_a_scene_with_all_of_its_bands(version: str) -> None:
    product = product_of(sentinel_2(version))
    assert product.kind == f"STAC Item {version}"
    assert product.scene == {
        "ref": "made-up-1",
        "sensor": "sentinel-2-l2a",
        "platform": "sentinel-2b",
        "acquired_at": "2024-06-03T10:10:31Z",
        "tile": "T33UVR",
        "processing_baseline": "05.10",
    }
    assert by_part(product) == {
        **{role: (name, "common name") for name, (role, _, _) in S2_BANDS.items()},
        "quality": ("scl", "asset key"),
    }
    assert product.files["nir08"] == f"{HOST}B8A.tif"
    assert set(product.files) == set(by_part(product))
    assert product.left_out == {}


@pytest.mark.parametrize("version", VERSIONS)
@pytest.mark.parametrize(("platform", "bands"), [("landsat-9", OLI_BANDS), ("LANDSAT_5", TM_BANDS)])
def test_an_item_of_landsat_has_one_near_infrared_band_whatever_it_is_called(
    version: str, platform: str, bands: Mapping[str, tuple[str, float, int]]
) -> None:
    product = product_of(landsat(version, bands=bands, platform=platform))
    nir = next(name for name, (common, _, _) in bands.items() if common == "nir08")
    assert by_part(product)["nir"] == (nir, "common name")
    assert "nir08" not in product.files
    assert by_part(product)["quality"] == ("qa_pixel", "asset key")
    assert by_part(product)["saturation"] == ("qa_radsat", "asset key")
    assert product.scene["platform"] == platform.lower().replace("_", "-")
    assert product.scene["tile"] == "190026"
    assert {"scaling", "processing_baseline"} & set(product.scene) == set()


def test_a_thermal_band_is_taken_with_its_own_scaling() -> None:
    thermal = landsat()
    thermal["assets"]["lwir11"] = {
        "href": f"{HOST}ST_B10.tif",
        "type": "image/tiff; application=geotiff",
        "roles": ["data", "temperature"],
        "eo:bands": [{"name": "TIRS_B10", "common_name": "lwir11", "center_wavelength": 10.9}],
        "raster:bands": [{"scale": 0.00341802, "offset": 149.0, "nodata": 0, "unit": "kelvin"}],
    }
    product = product_of(thermal)
    assert by_part(product)["lwir11"] == ("lwir11", "common name")
    assert "scaling" not in product.scene


@pytest.mark.parametrize("version", VERSIONS)
def test_three_bands_of_one_common_name_are_told_by_name_and_without_one_by_wavelength(
    version: str,
) -> None:
    """In eo before its vocabulary was refined the three red-edge bands are all `rededge`."""
    old = {
        name: ("rededge" if common.startswith("rededge") else common, centre, cell)
        for name, (common, centre, cell) in S2_BANDS.items()
    }
    named = product_of(sentinel_2(version, bands=old))
    assert by_part(named)["rededge071"] == ("B05", "band name")
    assert by_part(named)["rededge078"] == ("B07", "band name")
    nameless = sentinel_2(version, bands=old)
    for asset in nameless["assets"].values():
        for entry in [*asset.get("bands", []), *asset.get("eo:bands", [])]:
            del entry["name"]
    told = by_part(product_of(nameless))
    assert told["rededge071"] == ("B05", "wavelength")
    assert told["rededge075"] == ("B06", "wavelength")
    assert told["nir"] == ("B08", "common name")
    assert told["nir08"] == ("B8A", "common name")


def test_two_bands_called_nir_are_told_apart_by_their_names() -> None:
    both = sentinel_2("1.0.0")
    both["assets"]["B8A"]["eo:bands"][0]["common_name"] = "nir"
    told = by_part(product_of(both))
    assert (told["nir"], told["nir08"]) == (("B08", "common name"), ("B8A", "band name"))


def test_without_common_names_band_names_tell_then_wavelengths_then_keys() -> None:
    item = sentinel_2("1.1.0")
    for asset in item["assets"].values():
        for entry in asset.get("bands", []):
            del entry["eo:common_name"]
    assert by_part(product_of(item))["red"] == ("B04", "band name")
    for asset in item["assets"].values():
        for entry in asset.get("bands", []):
            del entry["name"]
    assert by_part(product_of(item))["red"] == ("B04", "wavelength")
    for asset in item["assets"].values():
        asset.pop("bands", None)
    product = product_of(item)
    assert by_part(product)["red"] == ("B04", "asset key")
    assert by_part(product)["nir08"] == ("B8A", "asset key")


def test_what_is_no_band_is_left_out_with_its_reason() -> None:
    item = sentinel_2()
    more = {
        "thumbnail": ("image/png", ["thumbnail"]),
        "pvi": ("image/tiff; application=geotiff", ["overview"]),
        "tci": ("image/tiff; application=geotiff", ["data"]),
        "granule": ("application/xml", ["metadata"]),
        "aot": ("image/tiff; application=geotiff", ["data"]),
        "tileinfo": ("application/json", []),
    }
    for key, (media_type, roles) in more.items():
        item["assets"][key] = {"href": f"{HOST}{key}", "type": media_type, "roles": roles}
    product = product_of(item)
    assert product.left_out == {
        "thumbnail": "its role is thumbnail",
        "pvi": "its role is overview",
        "tci": "it is a picture, by its key",
        "granule": "its role is metadata",
        "aot": "no band that a scene of this sensor takes",
        "tileinfo": "it is neither GeoTIFF nor JPEG 2000",
    }
    assert set(product.files) == set(product_of(sentinel_2()).files)


def test_of_two_assets_of_one_band_the_finest_is_taken_and_then_the_geotiff() -> None:
    item = sentinel_2()
    coarse = copy.deepcopy(item["assets"]["B04"])
    coarse |= {"href": f"{HOST}B04_60m.tif", "raster:spatial_resolution": 60}
    jpeg = copy.deepcopy(item["assets"]["B08"])
    jpeg |= {"href": f"{HOST}B08.jp2", "type": "image/jp2"}
    # Before the others, so that it is not the order that decides.
    item["assets"] = {"B04_60m": coarse, "nir-jp2": jpeg, **item["assets"]}
    product = product_of(item)
    assert product.files["red"] == f"{HOST}B04.tif"
    assert product.files["nir"] == f"{HOST}B08.tif"
    assert product.left_out == {
        "B04_60m": "red is taken from B04, which is finer",
        "nir-jp2": "nir is taken from B08, which is as fine and preferred",
    }


def stacked(item: Item, *names: str, key: str = "data") -> Item:
    """Return a 1.1 Item with some of its bands in one file."""
    bands = [item["assets"].pop(name)["bands"][0] for name in names]
    item["assets"][key] = {
        "href": f"{HOST}{key}.tif",
        "type": "image/tiff; application=geotiff",
        "nodata": 0,
        "raster:scale": 0.0001,
        "raster:offset": -0.1,
        "bands": bands,
    }
    return item


def test_an_asset_of_several_bands_is_a_stack_beside_which_others_stand() -> None:
    item = stacked(sentinel_2(), "B02", "B04", "B08")
    item["assets"]["data"]["bands"].insert(1, {"name": "B09", "eo:common_name": "nir09"})
    product = product_of(item)
    assert product.scene["stack"] == ["blue", None, "red", "nir"]
    assert product.files["stack"] == f"{HOST}data.tif"
    assert by_part(product)["red"] == ("data", "common name")
    assert {"red", "nir", "blue"} & set(product.files) == set()
    assert product.files["green"] == f"{HOST}B03.tif"


def test_a_second_asset_of_several_bands_is_refused() -> None:
    item = stacked(stacked(sentinel_2(), "B02", "B04"), "B11", "B12", key="more")
    assert refusal(item) == ("invalid-input", ["/assets/more"])


def test_a_relative_address_is_that_of_the_items_own_place() -> None:
    item = sentinel_2()
    item["assets"]["B04"]["href"] = "./sub/../B04.tif?sig=a%2Fb"
    item["assets"]["B08"]["href"] = "../34/B08.tif"
    files = product_of(item).files
    assert files["red"] == "https://tiles.example/33/B04.tif?sig=a%2Fb"
    assert files["nir"] == "https://tiles.example/34/B08.tif"
    item["links"] = [{"rel": "self", "href": "s3://scenes/33/item.json"}]
    assert product_of(item).files["nir"] == "s3://scenes/34/B08.tif"
    item["links"] = []
    assert product_of(item).files["nir"] == "../34/B08.tif"


def test_an_item_in_a_file_finds_what_lies_beside_it(tmp_path: Path) -> None:
    item = sentinel_2()
    item["assets"]["B04"]["href"] = "./B04%20of%20mine.tif"
    item["assets"]["B08"]["href"] = "B08.tif"
    item["assets"]["scl"]["href"] = (tmp_path / "elsewhere.tif").as_uri()
    beside = tmp_path / "B04 of mine.tif"
    beside.touch()
    path = tmp_path / "item.json"
    path.write_text(json.dumps(item), "utf-8")
    files = read_item(path).files
    assert files["red"] == beside
    assert files["nir"] == f"{HOST}B08.tif"
    assert files["quality"] == tmp_path / "elsewhere.tif"


@pytest.mark.parametrize("version", VERSIONS)
def test_without_a_baseline_the_items_own_scaling_is_sent(version: str) -> None:
    product = product_of(sentinel_2(version, s2__processing_baseline=None))
    assert product.scene["scaling"] == {"scale": 0.0001, "offset": -0.1}


def test_scaling_may_stand_in_the_properties_for_all_bands() -> None:
    item = sentinel_2(
        scaling=None, s2__processing_baseline=None, raster__scale=0.0001, raster__offset=0.0
    )
    assert product_of(item).scene["scaling"] == {"scale": 0.0001, "offset": 0.0}


@pytest.mark.parametrize(
    ("scaling", "baseline", "applied", "sent"),
    [
        ((0.0001, 0.0), "05.10", True, {"scale": 0.0001, "offset": 0.0}),
        (None, "05.10", True, {"scale": 0.0001, "offset": 0.0}),
        (None, None, True, {"scale": 0.0001, "offset": 0.0}),
        (None, "05.10", False, None),
        ((0.0001, -0.1), "05.10", False, None),
        ((0.0001, 0.0), "02.12", None, None),
        ((0.0001, -0.1), "07.00", None, {"scale": 0.0001, "offset": -0.1}),
        # Written by software that holds numbers in 32 bits.
        ((9.999999747378752e-05, -0.10000000149011612), "05.10", None, None),
    ],
)
def test_a_flag_explains_what_the_offset_is(
    *,
    scaling: tuple[float, float] | None,
    baseline: str | None,
    applied: bool | None,
    sent: dict[str, float] | None,
) -> None:
    """Published: offset -1000 before division by 10,000 from baseline 04.00 on (ESA)."""
    item = sentinel_2(
        scaling=scaling, s2__processing_baseline=baseline, some__boa_offset_applied=applied
    )
    assert product_of(item).scene.get("scaling") == sent


def test_landsat_needs_no_scaling_because_its_own_is_the_same_for_all() -> None:
    assert "scaling" not in product_of(landsat(scaling=None)).scene


SCALE_AND_OFFSET = "raster:bands", 0
RED_1_0 = "assets", "B04", *SCALE_AND_OFFSET
UNKNOWN = [f"/assets/{name}" for name in ("B02", "B03", "B08", "B8A")]
BANDS_4 = {name: S2_BANDS[name] for name in ("B02", "B03", "B08", "B8A")}
REFUSED: dict[str, tuple[Item, str, list[str]]] = {
    "no scaling, no flag": (
        sentinel_2(scaling=None, bands=BANDS_4),
        "unknown-offset",
        UNKNOWN,
    ),
    "a scale without an offset": (
        changed(sentinel_2("1.0.0"), without(*RED_1_0, "offset")),
        "unknown-offset",
        ["/assets/B04"],
    ),
    "an offset that the baseline has not": (
        sentinel_2("1.0.0", bands=BANDS_4, s2__processing_baseline="02.12"),
        "item-contradicts",
        ["/assets/B02/raster:bands/0/offset"],
    ),
    "no offset where the baseline has one": (
        sentinel_2(scaling=(0.0001, 0.0), bands=BANDS_4),
        "item-contradicts",
        ["/assets/B02/raster:offset"],
    ),
    "an offset in the numbers that is to be added again": (
        sentinel_2(bands=BANDS_4, some__boa_offset_applied=True),
        "item-contradicts",
        ["/assets/B02/raster:offset"],
    ),
    "no offset although a flag says that it is still in": (
        sentinel_2(scaling=(0.0001, 0.0), bands=BANDS_4, some__boa_offset_applied=False),
        "item-contradicts",
        ["/assets/B02/raster:offset"],
    ),
    "two flags of two minds": (
        sentinel_2(a__boa_offset_applied=True, b__boa_offset_applied=False),
        "item-contradicts",
        ["/properties/b:boa_offset_applied"],
    ),
    "another scale than the published": (
        sentinel_2("1.0.0", scaling=(0.001, -0.1), bands=BANDS_4),
        "item-contradicts",
        ["/assets/B02/raster:bands/0/scale"],
    ),
    "a scale of zero": (
        sentinel_2("1.0.0", scaling=(0.0, -0.1), bands=BANDS_4),
        "invalid-input",
        ["/assets/B02/raster:bands/0/scale"],
    ),
    "bands that scale differently": (
        changed(
            sentinel_2("1.0.0", s2__processing_baseline=None), setting(*RED_1_0, "offset", to=0.0)
        ),
        "item-contradicts",
        ["/assets/B04"],
    ),
    "Landsat numbers on another scale": (
        landsat(scaling=(0.0001, 0.0)),
        "item-contradicts",
        ["/assets/OLI_B2/raster:bands/0/scale"],
    ),
    "two scales for one band": (
        changed(sentinel_2("1.0.0"), setting("assets", "B04", "raster:scale", to=0.001)),
        "item-contradicts",
        ["/assets/B04/raster:scale"],
    ),
    "bands and raster:bands that differ": (
        changed(
            sentinel_2(),
            setting("assets", "B04", "raster:bands", to=[{"scale": 0.0001, "offset": 0.0}]),
        ),
        "item-contradicts",
        ["/assets/B04/raster:offset"],
    ),
    "raster:bands shorter than eo:bands": (
        changed(
            sentinel_2("1.0.0"),
            lambda item: item["assets"]["B04"]["eo:bands"].append({"name": "B09"}),
        ),
        "item-contradicts",
        ["/assets/B04/raster:bands"],
    ),
    "raster:bands longer than bands": (
        changed(sentinel_2(), setting("assets", "B04", "raster:bands", to=[{}, {}])),
        "item-contradicts",
        ["/assets/B04/bands"],
    ),
    "names that differ by position": (
        changed(sentinel_2(), setting("assets", "B04", "eo:bands", to=[{"name": "B03"}])),
        "item-contradicts",
        ["/assets/B04/eo:bands/0/name"],
    ),
    "a common name that is not the band's": (
        changed(sentinel_2(), setting("assets", "B04", "bands", 0, "eo:common_name", to="green")),
        "item-contradicts",
        ["/assets/B04/bands/0/name"],
    ),
    "another nodata": (
        changed(sentinel_2("1.0.0"), setting(*RED_1_0, "nodata", to=65535)),
        "item-contradicts",
        ["/assets/B04/raster:bands/0/nodata"],
    ),
    "nodata that is no number": (
        changed(sentinel_2("1.0.0"), setting(*RED_1_0, "nodata", to="nan")),
        "item-contradicts",
        ["/assets/B04/raster:bands/0/nodata"],
    ),
    "two nodata": (
        changed(sentinel_2("1.0.0"), setting("assets", "B04", "nodata", to=1)),
        "item-contradicts",
        ["/assets/B04/nodata"],
    ),
    "one system of reference per band, 1.1": (
        changed(
            changed(sentinel_2(), setting("properties", "proj:code", to="EPSG:32633")),
            setting("assets", "B08", "proj:code", to="EPSG:32634"),
        ),
        "crs-differs",
        ["/assets/B08/proj:code"],
    ),
    "one system of reference per band, 1.0": (
        changed(
            changed(sentinel_2("1.0.0"), setting("assets", "B02", "proj:epsg", to=32633)),
            setting("assets", "scl", "proj:epsg", to=32632),
        ),
        "crs-differs",
        ["/assets/scl/proj:epsg"],
    ),
    "no quality layer": (
        changed(sentinel_2(), without("assets", "scl")),
        "wrong-quality-layer",
        ["/assets"],
    ),
    "no assets": (
        changed(sentinel_2(), setting("assets", to={})),
        "wrong-quality-layer",
        ["/assets"],
    ),
    "another sensor": (
        sentinel_2(platform="made-up-7"),
        "unknown-sensor",
        ["/properties/platform"],
    ),
    "no platform": (landsat(platform=None), "unknown-sensor", ["/properties/platform"]),
    "top of the atmosphere": (
        sentinel_2(s2__product_type="S2MSI1C"),
        "unknown-sensor",
        ["/properties/s2:product_type"],
    ),
    "Landsat of Level-1": (
        landsat(landsat__correction="L1TP"),
        "unknown-sensor",
        ["/properties/landsat:correction"],
    ),
    "Landsat of Collection 1": (
        landsat(landsat__collection_number="01"),
        "unknown-sensor",
        ["/properties/landsat:collection_number"],
    ),
    "a period": (
        sentinel_2(
            datetime=None,
            start_datetime="2024-06-01T00:00:00Z",
            end_datetime="2024-06-30T00:00:00Z",
        ),
        "invalid-input",
        ["/properties/datetime"],
    ),
    "no time": (sentinel_2(datetime=None), "invalid-input", ["/properties/datetime"]),
    "a baseline that is none": (
        sentinel_2(s2__processing_baseline="5.1"),
        "invalid-input",
        ["/properties/s2:processing_baseline"],
    ),
    "two baselines": (
        sentinel_2(other__processing_baseline="02.12"),
        "item-contradicts",
        ["/properties/other:processing_baseline"],
    ),
    "a collection": ({"type": "FeatureCollection", "features": []}, "invalid-input", ["/type"]),
    "an array": ([], "invalid-input", [""]),
    "null": (None, "invalid-input", [""]),
    "an older version": (
        changed(sentinel_2(), setting("stac_version", to="0.9.0")),
        "invalid-input",
        ["/stac_version"],
    ),
    "assets in a list": (
        changed(sentinel_2(), setting("assets", to=[])),
        "invalid-input",
        ["/assets"],
    ),
    "an asset that is text": (
        changed(sentinel_2(), setting("assets", "B04", to="B04.tif")),
        "invalid-input",
        ["/assets/B04"],
    ),
    "an address that is a number": (
        changed(sentinel_2(), setting("assets", "B04", "href", to=4)),
        "invalid-input",
        ["/assets/B04/href"],
    ),
    "no address": (
        changed(sentinel_2(), without("assets", "B04", "href")),
        "invalid-input",
        ["/assets/B04/href"],
    ),
    "an address over two lines": (
        changed(sentinel_2(), setting("assets", "B04", "href", to="https://a.example/\nb")),
        "invalid-input",
        ["/assets/B04/href"],
    ),
    "bands as numbers": (
        changed(sentinel_2("1.0.0"), setting("assets", "B04", "eo:bands", to=[3])),
        "invalid-input",
        ["/assets/B04/eo:bands/0"],
    ),
    "bands as an object": (
        changed(sentinel_2(), setting("assets", "B04", "bands", to={"0": {}})),
        "invalid-input",
        ["/assets/B04/bands"],
    ),
    "a thousand bands": (
        changed(sentinel_2(), setting("assets", "B04", "bands", to=[{}] * 1_000)),
        "invalid-input",
        ["/assets/B04"],
    ),
    "bands without end": (
        changed(sentinel_2(), setting("assets", "B04", "bands", to=[{}] * 100_000)),
        "invalid-input",
        ["/assets/B04/bands"],
    ),
    "many assets of many bands": (
        changed(
            sentinel_2(),
            lambda item: item["assets"].update(
                {f"x{at}": {"href": "a.tif", "bands": [{}] * 64} for at in range(100)}
            ),
        ),
        "invalid-input",
        ["/assets"],
    ),
    "more assets than any product has": (
        changed(
            sentinel_2(),
            lambda item: item["assets"].update({f"x{at}": {} for at in range(1_000)}),
        ),
        "invalid-input",
        ["/assets"],
    ),
    "links without end": (
        changed(sentinel_2(), setting("links", to=[{}] * 100_000)),
        "invalid-input",
        ["/links"],
    ),
    "a scale that is text": (
        changed(sentinel_2("1.0.0"), setting(*RED_1_0, "scale", to="0.0001")),
        "invalid-input",
        ["/assets/B04/raster:bands/0/scale"],
    ),
    "a scale that is true": (
        changed(sentinel_2("1.0.0"), setting(*RED_1_0, "scale", to=True)),
        "invalid-input",
        ["/assets/B04/raster:bands/0/scale"],
    ),
    "an offset that is no number": (
        changed(sentinel_2("1.0.0"), setting(*RED_1_0, "offset", to=float("nan"))),
        "invalid-input",
        ["/assets/B04/raster:bands/0/offset"],
    ),
    "an offset of three hundred digits": (
        changed(sentinel_2("1.0.0"), setting(*RED_1_0, "offset", to=10**300)),
        "invalid-input",
        ["/assets/B04/raster:bands/0/offset"],
    ),
    "a wavelength that is a list": (
        changed(
            sentinel_2("1.0.0"),
            setting("assets", "B04", "eo:bands", 0, "center_wavelength", to=[0.66]),
        ),
        "invalid-input",
        ["/assets/B04/eo:bands/0/center_wavelength"],
    ),
    "roles that are numbers": (
        changed(sentinel_2(), setting("assets", "B04", "roles", to=[1])),
        "invalid-input",
        ["/assets/B04/roles/0"],
    ),
    "a flag that is text": (
        sentinel_2(some__boa_offset_applied="yes"),
        "invalid-input",
        ["/properties/some:boa_offset_applied"],
    ),
    "a path that is no number": (
        landsat(landsat__wrs_path="../1"),
        "invalid-input",
        ["/properties/landsat:wrs_path"],
    ),
    "links that are text": (
        changed(sentinel_2(), setting("links", to="self")),
        "invalid-input",
        ["/links"],
    ),
    "an asset whose key ends lines": (
        changed(sentinel_2(), setting("assets", "B04\nforged", to={"href": "a"})),
        "invalid-input",
        ["/assets"],
    ),
    "an asset whose key is half a character": (
        changed(sentinel_2(), setting("assets", "\ud800", to={"href": "a"})),
        "invalid-input",
        ["/assets"],
    ),
    "a pointer that has to be escaped": (
        changed(sentinel_2(), setting("assets", "a/b~c", to=1)),
        "invalid-input",
        ["/assets/a~1b~0c"],
    ),
    "properties that are missing": (
        changed(sentinel_2(), without("properties")),
        "invalid-input",
        ["/properties"],
    ),
}


@pytest.mark.parametrize("case", REFUSED)
def test_what_is_wrong_with_an_item_is_refused_at_its_place(case: str) -> None:
    item, code, pointers = REFUSED[case]
    assert refusal(item) == (code, pointers)


def test_a_landsat_flag_of_another_sensor_changes_nothing() -> None:
    """The flag is about Sentinel-2's offset: Landsat's is not in question."""
    product = product_of(landsat(some__boa_offset_applied=True))
    assert "scaling" not in product.scene


@pytest.mark.parametrize(
    ("properties", "tile"),
    [
        ({"grid:code": "MGRS-33UVR"}, "T33UVR"),
        ({"grid:code": "WRS2-190026"}, "190026"),
        ({"grid:code": "own-7"}, "own-7"),
        ({"s2:mgrs_tile": "33UVR"}, "T33UVR"),
        ({"landsat:wrs_path": 9, "landsat:wrs_row": "026"}, "009026"),
        (
            {"mgrs:utm_zone": 5, "mgrs:latitude_band": "Q", "mgrs:grid_square": "KB"},
            "T05QKB",
        ),
        ({}, None),
    ],
)
def test_the_tile_is_named_alike_however_the_item_says_it(
    properties: dict[str, Any], tile: str | None
) -> None:
    item = sentinel_2(grid__code=None)
    item["properties"] |= properties
    assert product_of(item).scene.get("tile") == tile


def test_a_constellation_without_platform_is_enough_where_the_bands_are_the_same() -> None:
    scene = product_of(sentinel_2(platform=None)).scene
    assert (scene["sensor"], "platform" in scene) == ("sentinel-2-l2a", False)


@pytest.mark.parametrize("version", ["05.10", "3.2", 7])
def test_a_processing_version_is_a_baseline_if_it_looks_like_one(version: object) -> None:
    item = sentinel_2(s2__processing_baseline=None, processing__version=version)
    expected = version if version == "05.10" else None
    assert product_of(item).scene.get("processing_baseline") == expected
