"""Indices, scaling and scene classes against a table of published formulas and worked examples.

Sources: `indices.csv` names the paper of every formula; `checks.csv` names the source of every
worked example in its columns `source` and `how_verified` (index values: formulas of spyndex
0.12.0 on made-up but typical reflectances; scaling: the agency's format change of baseline
04.00 and the STAC raster extension; classes: the agency's legend of the scene classification).
"""

import csv
import json
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from service.spectral.indices import INDICES, Index
from service.spectral.quality import SCL, Loss
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.spectral.sensors import SENSORS

HERE = Path(__file__).parent
Row = dict[str, str]


def table(name: str) -> list[Row]:
    with (HERE / name).open(newline="", encoding="utf-8") as lines:
        return list(csv.DictReader(lines))


REFERENCE = {row["id"].lower(): row for row in table("indices.csv")}
CHECKS = table("checks.csv")
SURFACES = [row for row in CHECKS if row["group"] == "index"]
SCALINGS = {
    row["id"]: row for row in CHECKS if row["group"] == "scaling" and row["id"].startswith("s2_")
}
LANDSAT_SCALINGS = [
    row for row in CHECKS if row["group"] == "scaling" and row["id"].startswith("ls_")
]
CLASSES = [row for row in CHECKS if row["group"] == "scl"]

every_index = pytest.mark.parametrize("index", INDICES.values(), ids=INDICES)


def given(row: Row) -> dict[str, Any]:
    return dict(json.loads(row["input"]))


def expected(row: Row) -> dict[str, Any]:
    return dict(json.loads(row["expected"]))


def reference_of(index: Index) -> Row:
    assert index.id in REFERENCE, f"{index.id} has no row in tests/reference/indices.csv"
    return REFERENCE[index.id]


def reflectances() -> dict[str, NDArray[np.float64]]:
    random = np.random.default_rng(20260101)
    return {role.value: random.uniform(0.005, 0.6, 20_000) for role in BandRole}


def evaluate(text: str, names: dict[str, Any]) -> NDArray[np.float64]:
    scope = {"__builtins__": {}, "sqrt": np.sqrt, **names}
    # The text is our own or the reference table's, both in this repository.
    return np.asarray(eval(text.replace("^", "**"), scope))  # noqa: S307


def constants_in(row: Row) -> dict[str, float]:
    return {
        name: float(value)
        for name, value in (item.split("=") for item in row["constants"].split(";") if item)
    }


def test_the_catalogue_and_the_reference_table_hold_the_same_indices() -> None:
    assert set(INDICES) == set(REFERENCE)


@every_index
@pytest.mark.parametrize("surface", SURFACES, ids=[row["id"] for row in SURFACES])
def test_an_index_of_a_typical_surface_is_the_worked_example(index: Index, surface: Row) -> None:
    worked = {name.lower(): value for name, value in expected(surface).items()}
    assert index.id in worked, f"{index.id} has no worked example in tests/reference/checks.csv"
    bands = {role: np.array([given(surface)[role]]) for role in index.roles}
    tolerance = float(surface["tolerance"])
    np.testing.assert_allclose(index.compute(**bands), [worked[index.id]], rtol=0, atol=tolerance)


@every_index
def test_the_text_of_a_formula_and_its_function_agree(index: Index) -> None:
    bands = reflectances()
    text = evaluate(index.formula, {**bands, **index.constants})
    function = index.compute(**{role: bands[role] for role in index.roles})
    np.testing.assert_allclose(function, text, rtol=1e-12, atol=1e-15)


@every_index
def test_the_formula_is_the_published_one(index: Index) -> None:
    row = reference_of(index)
    bands = reflectances()
    published = evaluate(row["formula"], {**bands, **constants_in(row)})
    function = index.compute(**{role: bands[role] for role in index.roles})
    np.testing.assert_allclose(function, published, rtol=1e-11, atol=1e-14)


@every_index
def test_the_bands_and_constants_are_the_published_ones(index: Index) -> None:
    row = reference_of(index)
    assert set(index.roles) == set(row["bands"].split())
    assert dict(index.constants) == constants_in(row)
    assert index.domain == row["domain"]


@every_index
def test_the_source_is_the_published_one(index: Index) -> None:
    source = reference_of(index)["source"]
    first_word = source.split()[0].rstrip(",")
    assert first_word in index.source
    assert set(re.findall(r"\b(?:19|20)\d\d\b", index.source)) <= set(
        re.findall(r"\b(?:19|20)\d\d\b", source)
    )


@every_index
def test_the_valid_range_is_the_published_one(index: Index) -> None:
    text = reference_of(index)["valid_range"]
    if text.startswith("unbounded"):
        assert index.valid_range == (None, None)
        return
    for bound, published in zip(index.valid_range, text.split(".."), strict=True):
        assert bound == pytest.approx(float(published), abs=1e-4)


@pytest.mark.parametrize(
    "name",
    [name for name, row in SCALINGS.items() if isinstance(expected(row).get("reflectance"), float)],
)
@pytest.mark.parametrize("role", ["red", "swir22"])
def test_a_stored_number_scales_to_the_worked_reflectance(name: str, role: str) -> None:
    row = SCALINGS[name]
    # The worked examples state the offset in stored numbers, the service takes the baseline.
    baseline = "05.10" if given(row)["BOA_ADD_OFFSET"] == -1000 else "03.01"
    scaling = SENSORS["sentinel-2-l2a"].scaling(BandRole(role), processing_baseline=baseline)
    numbers = np.array([given(row)["dn"]], dtype=np.uint16)
    tolerance = float(row["tolerance"])
    np.testing.assert_allclose(
        scaling.reflectance(numbers), [expected(row)["reflectance"]], rtol=0, atol=tolerance
    )


def test_the_worked_special_numbers_are_the_profile_s() -> None:
    sensor = SENSORS["sentinel-2-l2a"]
    special = {
        given(row)["dn"]: expected(row)["reflectance"].split()[0]
        for row in SCALINGS.values()
        if isinstance(expected(row).get("reflectance"), str)
    }
    assert special == {sensor.nodata: "nodata", sensor.saturated: "saturated"}


@pytest.mark.parametrize("row", LANDSAT_SCALINGS, ids=[row["id"] for row in LANDSAT_SCALINGS])
def test_a_stored_number_of_landsat_scales_to_the_worked_figure(row: Row) -> None:
    sent, worked = given(row), expected(row)
    sensor = SENSORS["landsat-c2-l2"].on("landsat-8")
    role = BandRole.LWIR11 if "kelvin" in worked else BandRole.RED
    scaling = sensor.scaling(role, processing_baseline=None)
    assert scaling == Scaling(scale=sent["scale"], offset=sent["offset"])
    figure = worked.get("kelvin", worked.get("reflectance"))
    if isinstance(figure, str):
        assert figure == "nodata (mask)"
        assert sent["dn"] == sensor.nodata
        return
    numbers = np.array([sent["dn"]], dtype=np.uint16)
    found = scaling.reflectance(numbers)
    if role is BandRole.LWIR11:
        found = found.round(5)  # as the table's kelvins are
    np.testing.assert_allclose(found, [figure], rtol=0, atol=float(row["tolerance"]))
    if "in_valid_range_7273_43636" in worked:
        band = sensor.band(role)
        assert band is not None
        assert band.valid_numbers is not None
        low, high = band.valid_numbers
        assert (low <= sent["dn"] <= high) == worked["in_valid_range_7273_43636"]


def test_the_offset_of_the_catalogue_standard_and_of_the_agency_give_the_same_reflectance() -> None:
    row = SCALINGS["s2_stac_offset_equivalence"]
    sent = given(row)
    scaling = Scaling(scale=sent["raster:scale"], offset=sent["raster:offset"])
    numbers = np.array([sent["dn"]], dtype=np.uint16)
    assert scaling.reflectance(numbers)[0] == pytest.approx(expected(row)["both"], abs=1e-9)
    assert scaling == SENSORS["sentinel-2-l2a"].scaling(BandRole.RED, processing_baseline="04.00")


@pytest.mark.parametrize(
    ("baseline", "member"),
    [("05.10", "NDVI_correct"), ("03.01", "NDVI_if_offset_forgotten")],
)
def test_a_forgotten_offset_moves_ndvi_as_worked(baseline: str, member: str) -> None:
    row = SCALINGS["s2_ndvi_offset_trap"]
    sensor = SENSORS["sentinel-2-l2a"]
    bands = {
        role: sensor.scaling(role, processing_baseline=baseline).reflectance(
            np.array([given(row)[f"{role}_dn"]], dtype=np.uint16)
        )
        for role in (BandRole.RED, BandRole.NIR)
    }
    ndvi = INDICES["ndvi"].compute(**bands)
    np.testing.assert_allclose(ndvi, [expected(row)[member]], rtol=0, atol=float(row["tolerance"]))


def test_the_scene_classes_are_those_of_the_legend() -> None:
    assert sorted(SCL.classes) == sorted(given(row)["value"] for row in CLASSES)


@pytest.mark.parametrize("row", CLASSES, ids=[row["id"] for row in CLASSES])
def test_a_scene_class_is_kept_as_in_the_table(row: Row) -> None:
    value, verdict = given(row)["value"], expected(row)
    assert SCL.classes[value].name == verdict["name"].split()[0]

    def kept(rule: str) -> bool:
        return bool(SCL.judge(np.array([value], dtype=np.uint8), rule).usable[0])

    assert kept("land") == verdict["keep_land_strict"]
    assert kept("water") == verdict["keep_water"]
    assert kept("snow") == verdict["keep_snow"]
    # The service's default is the table's lenient land rule with water kept in view.
    assert kept("clear") == (verdict["keep_land_lenient"] or verdict["keep_water"])
    assert kept("strict") == (verdict["keep_land_strict"] or verdict["keep_water"])


def test_every_reason_of_loss_has_its_scene_classes() -> None:
    # Source of the grouping: the names in the legend.
    values = np.arange(12, dtype=np.uint8)
    lost = SCL.judge(values, "clear").lost
    assert {loss: values[cells].tolist() for loss, cells in lost.items()} == {
        Loss.NODATA: [0],
        Loss.SATURATION: [1],
        Loss.SHADOW: [3],
        Loss.CLOUD: [8, 9, 10],
        Loss.SNOW: [11],
    }
