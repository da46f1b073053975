"""The sensors' bands over spectra: published means, and what must rise, fall or be lowest.

Sources, none of them our own: reflectance of canopies by PROSAIL (Jacquemoud et al. 2009) as
packaged in `prosail` 2.0.5; 7,261 spectra of soils, canopies, litter, char and roofs in
`earthlib` 1.1.0; centres of bands in `spyndex` 0.12.0. The worked numbers stand in
`checks.csv`, groups `canopy_model`, `library` and `ordering`.
"""

import csv
import json
import re
from pathlib import Path
from typing import Any

import earthlib
import numpy as np
import prosail
import pytest
import spyndex
from numpy.typing import NDArray

from service.spectral.bands import OLI, SENTINEL_2A, TM, Band
from service.spectral.indices import INDICES
from service.spectral.roles import BandRole
from service.spectral.sensors import SENSORS
from tests.passbands import CANOPY_NM, canopy, through

with (Path(__file__).parent / "checks.csv").open(newline="", encoding="utf-8") as lines:
    CHECKS = {row["id"]: row for row in csv.DictReader(lines)}

MODELS = [row for row in CHECKS.values() if row["group"] == "canopy_model"]
INSTRUMENTS = {
    name: bands for sensor in SENSORS.values() for name, bands in sensor.platforms.items()
}
GROUPS = {
    "lib_soil": ("bare", TM),
    "lib_veg": ("vegetation", TM),
    "lib_npv": ("npv", TM),
    "lib_char": ("burned", TM),
    "lib_built": ("built", TM),
}
PERCENTILES = (5, 50, 95)

every_instrument = pytest.mark.parametrize("bands", INSTRUMENTS.values(), ids=INSTRUMENTS)


def index(name: str, seen: dict[str, Any]) -> NDArray[np.float64]:
    needs = INDICES[name].roles
    bands = {role.value: np.atleast_1d(seen[role.value]) for role in needs}
    return np.asarray(INDICES[name].compute(**bands))


def canopies(bands: tuple[Band, ...], **changed: list[float]) -> dict[str, Any]:
    """The bands over one canopy after the other, one property changed."""
    ((name, values),) = changed.items()
    spectra = np.stack([canopy(**{name: value}) for value in values])
    return through(bands, spectra, CANOPY_NM)


def library(group: str) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Spectra of a group (its rows) and their wavelengths; spectra with empty samples dropped."""
    every = earthlib.full_library
    spectra = np.asarray(every.data, dtype=np.float64)
    chosen = spectra[(every.metadata["LEVEL_2"] == group).to_numpy()]
    wavelengths = 1e3 * np.asarray(every.sensor.band_centers, dtype=np.float64)
    return chosen[(chosen > 0).all(axis=1)], wavelengths


def listed(text: str, name: str) -> list[float]:
    """The numbers that a worked example states after a name: ``NDVI 0.120,0.347``."""
    found = re.search(rf"\b{name} ((?:-?[\d.]+[,/]?)+)", text)
    assert found is not None, name
    return [float(number) for number in re.split("[,/]", found[1].strip(",/"))]


def is_rising(values: NDArray[np.float64]) -> bool:
    return bool((np.diff(values) > 0).all())


@pytest.mark.parametrize("row", MODELS, ids=[row["id"] for row in MODELS])
def test_the_bands_see_of_a_canopy_what_was_worked_out(row: dict[str, str]) -> None:
    worked = json.loads(row["expected"])
    spectrum = canopy(**json.loads(row["input"])["change"])
    seen = through(SENTINEL_2A, spectrum, CANOPY_NM)
    tolerance = float(row["tolerance"])
    assert set(seen) <= set(worked)
    for role, reflectance in seen.items():
        assert reflectance == pytest.approx(worked[role], abs=tolerance)
    for name in ("ndvi", "ndre", "ndmi"):
        assert index(name, seen)[0] == pytest.approx(worked[name.upper()], abs=tolerance)
    ndvi = index("ndvi", through(OLI, spectrum, CANOPY_NM))[0]
    assert ndvi == pytest.approx(worked["NDVI_OLI"], abs=tolerance)


@pytest.mark.parametrize("name", GROUPS)
def test_the_bands_see_of_a_library_of_spectra_what_was_worked_out(name: str) -> None:
    group, bands = GROUPS[name]
    row = CHECKS[name]
    spectra, wavelengths = library(group)
    assert len(spectra) == int(row["input"].split()[0])
    seen = through(bands, spectra, wavelengths)
    tolerance = float(row["tolerance"])
    for role in ("blue", "green", "red", "nir", "swir16", "swir22"):
        (worked,) = listed(row["expected"], role)
        assert seen[role].mean() == pytest.approx(worked, abs=tolerance), role
    spread = re.findall(r"\b([A-Z]+)(?: p5/p50/p95)? (-?\.\d+/-?\.\d+/-?\.\d+)", row["expected"])
    for measure, numbers in spread:
        worked_out = [float(number) for number in numbers.split("/")]
        found = np.percentile(index(measure.lower(), seen), PERCENTILES)
        np.testing.assert_allclose(found, worked_out, rtol=0, atol=tolerance, err_msg=measure)
    assert spread or name == "lib_built"


@every_instrument
def test_more_leaf_area_raises_ndvi_and_saturates(bands: tuple[Band, ...]) -> None:
    seen = canopies(bands, lai=[0.01, 0.5, 1.0, 2.0, 3.0, 4.0, 6.0])
    ndvi = index("ndvi", seen)
    assert is_rising(ndvi)
    assert ndvi[-1] - ndvi[-3] < 0.25 * (ndvi[2] - ndvi[0])
    assert is_rising(-index("ndwi", seen))
    assert is_rising(-index("bsi", seen))
    if bands is SENTINEL_2A:
        np.testing.assert_allclose(
            ndvi, listed(CHECKS["order_lai"]["expected"], "NDVI"), rtol=0, atol=5e-4
        )


def test_more_chlorophyll_raises_the_red_edge_index_while_ndvi_saturates() -> None:
    seen = canopies(SENTINEL_2A, cab=[10.0, 20.0, 40.0, 60.0, 80.0])
    worked = listed(CHECKS["order_cab"]["expected"], "NDRE")
    np.testing.assert_allclose(index("ndre", seen), worked, rtol=0, atol=5e-4)
    assert is_rising(index("ndre", seen))
    ndvi = index("ndvi", seen)
    assert ndvi.max() - ndvi.min() < 0.5 * (worked[-1] - worked[0])
    np.testing.assert_allclose(index("ndmi", seen), index("ndmi", seen)[0], rtol=0, atol=1e-3)


@every_instrument
def test_more_leaf_water_raises_ndmi_and_leaves_ndvi(bands: tuple[Band, ...]) -> None:
    seen = canopies(bands, cw=[0.005, 0.01, 0.02, 0.04])
    assert is_rising(index("ndmi", seen))
    ndvi = index("ndvi", seen)
    assert ndvi.max() - ndvi.min() < 0.004
    if bands is SENTINEL_2A:
        np.testing.assert_allclose(
            index("ndmi", seen), listed(CHECKS["order_cw"]["expected"], "NDMI"), rtol=0, atol=5e-4
        )


@every_instrument
def test_a_canopy_that_ripens_loses_ndvi(bands: tuple[Band, ...]) -> None:
    green, brown = (
        index("ndvi", through(bands, canopy(**changed), CANOPY_NM))[0]
        for changed in ({}, {"cbrown": 1.0, "cab": 5.0})
    )
    assert green > brown + 0.2
    if bands is SENTINEL_2A:
        # "NDVI 0.877 -> 0.619"
        assert (green, brown) == pytest.approx((0.877, 0.619), abs=5e-4)


@every_instrument
def test_wet_soil_is_darker_than_dry_in_every_band(bands: tuple[Band, ...]) -> None:
    # Almost without leaves PROSAIL gives its soil: `psoil` 1 is dry, 0 is wet.
    wet, dry = (through(bands, canopy(lai=0.01, psoil=psoil), CANOPY_NM) for psoil in (0.0, 1.0))
    assert all(wet[role] < dry[role] for role in wet)


@every_instrument
def test_a_healthy_leaf_is_low_in_blue_and_red_higher_in_green_highest_in_near_infrared(
    bands: tuple[Band, ...],
) -> None:
    _, leaf, _ = prosail.run_prospect(1.5, 40.0, 8.0, 0.0, 0.01, 0.009, prospect_version="5")
    seen = through(bands, np.asarray(leaf), CANOPY_NM)
    assert max(seen["blue"], seen["red"]) < seen["green"] < seen["nir"]
    # The plateau of a leaf begins at 0.75 µm; `rededge078` lies on it as well.
    centres = {band.role.value: band.centre_um for band in bands}
    assert 0.75 < centres[max(seen, key=lambda role: seen[role])] < 1.0


@every_instrument
def test_libraries_of_spectra_are_in_the_known_order(bands: tuple[Band, ...]) -> None:
    # Canopies above soils above char in near-infrared, soils rise from blue to 1.6 µm, char
    # is brighter at 2.2 µm than in near-infrared: properties of the spectra, so of any sensor.
    means = {}
    for group in ("bare", "vegetation", "burned"):
        spectra, wavelengths = library(group)
        means[group] = {
            role: seen.mean() for role, seen in through(bands, spectra, wavelengths).items()
        }
    soil, leaves, char = means["bare"], means["vegetation"], means["burned"]
    assert leaves["nir"] > soil["nir"] > char["nir"]
    assert soil["blue"] < soil["green"] < soil["red"] < soil["nir"] < soil["swir16"]
    assert leaves["nir"] > leaves["swir16"] > leaves["swir22"]
    assert char["swir22"] > char["nir"]
    for name, order in (("ndvi", (leaves, soil)), ("nbr", (leaves, char)), ("bsi", (soil, leaves))):
        first, second = (index(name, each)[0] for each in order)
        assert first > second, name


def test_real_water_is_darkest_in_near_infrared() -> None:
    # 120 real Landsat 8 surface reflectances of three classes, in the package `spyndex`.
    samples = spyndex.datasets.open("spectral")
    nir = samples.groupby("class")["SR_B5"].mean()
    assert nir.idxmin() == "Water"
    assert nir["Water"] == pytest.approx(0.0145, abs=0.001)
    water = samples[samples["class"] == "Water"]
    seen = {
        "green": water["SR_B3"].to_numpy(),
        "nir": water["SR_B5"].to_numpy(),
        "swir16": water["SR_B6"].to_numpy(),
    }
    assert (index("ndwi", seen) > 0).all()
    assert (index("mndwi", seen) > 0).all()


SPYNDEX_PLATFORMS = {
    "sentinel-2a": "sentinel2a",
    "sentinel-2b": "sentinel2b",
    "landsat-4": "landsat4",
    "landsat-5": "landsat5",
    "landsat-7": "landsat7",
    "landsat-8": "landsat8",
    "landsat-9": "landsat9",
}


def published_bands(platform: str) -> dict[str, Any]:
    """By common name the bands that the package lists for a platform."""
    attribute = SPYNDEX_PLATFORMS[platform]
    return {
        band.common_name: getattr(band, attribute)
        for band in spyndex.bands.values()
        if hasattr(band, attribute)
    }


@pytest.mark.parametrize("platform", SPYNDEX_PLATFORMS)
def test_the_centres_and_numbers_of_bands_are_those_of_another_table(platform: str) -> None:
    published = published_bands(platform)
    for band in INSTRUMENTS[platform]:
        # The package files the narrow band of OLI under `nir08` and TM's heat under `lwir`.
        others = {BandRole.NIR: "nir08", BandRole.LWIR11: "lwir"}
        listed_as = published.get(band.role.value) or published[others[band.role]]
        number = re.sub(r"^(?:[SR]R_|ST_)?B0?", "B", band.name)
        assert listed_as.band == number
        # The package rounds Landsat's limits to 0.01 µm before it takes the middle.
        nearest = 3.0 if platform.startswith("landsat") else 1.0
        assert 1e3 * band.centre_um == pytest.approx(listed_as.wavelength, abs=nearest)
        assert 1e3 * band.width_um == pytest.approx(listed_as.bandwidth, abs=8.0)
