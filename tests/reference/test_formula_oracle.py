"""Every index against the formulas of spyndex 0.12, an independent open catalogue (MIT).

Its constants are passed explicitly, as published, because a default can belong to another
index (`L` is 1.0 there, and SAVI wants 0.5). Which of its entries is ours is said by
`indices.csv`; the four of its formulas that are known to differ from their papers are not
among ours. Its table of bands checks the centres and widths of the sensor profile.
"""

import csv
from pathlib import Path

import numpy as np
import pytest
import spyndex

from service.spectral.indices import INDICES, Index
from service.spectral.roles import BandRole
from service.spectral.sensors import SENSORS, Band

ORACLE_BANDS = {
    BandRole.COASTAL: "A",
    BandRole.BLUE: "B",
    BandRole.GREEN: "G",
    BandRole.RED: "R",
    BandRole.REDEDGE071: "RE1",
    BandRole.REDEDGE075: "RE2",
    BandRole.REDEDGE078: "RE3",
    BandRole.NIR: "N",
    BandRole.NIR08: "N2",
    BandRole.SWIR16: "S1",
    BandRole.SWIR22: "S2",
}
# The papers' names of constants that the oracle writes otherwise.
ORACLE_CONSTANTS = {"G": "g"}

with (Path(__file__).parent / "indices.csv").open(newline="", encoding="utf-8") as lines:
    ORACLE_IDS = {row["id"].lower(): row["spyndex_id"] for row in csv.DictReader(lines)}


def oracle_constants(index: Index) -> dict[str, float]:
    """Return our constants by the oracle's names, without those that are literals there."""
    named = {ORACLE_CONSTANTS.get(name, name): value for name, value in index.constants.items()}
    inputs = spyndex.indices[ORACLE_IDS[index.id]].bands
    return {name: value for name, value in named.items() if name in inputs}


@pytest.mark.parametrize("index", INDICES.values(), ids=INDICES)
def test_an_index_equals_the_oracle_on_random_reflectances(index: Index) -> None:
    assert ORACLE_IDS.get(index.id), f"{index.id} has no spyndex_id in tests/reference/indices.csv"
    random = np.random.default_rng(20260101)
    bands = {role: random.uniform(0.005, 0.6, 20_000) for role in index.roles}
    pixels = {ORACLE_BANDS[role]: values for role, values in bands.items()}
    parameters = {**pixels, **oracle_constants(index)}
    # Nothing is left to a default of the oracle.
    assert set(parameters) == set(spyndex.indices[ORACLE_IDS[index.id]].bands)
    oracle = spyndex.computeIndex(ORACLE_IDS[index.id], params=parameters)
    np.testing.assert_allclose(index.compute(**bands), oracle, rtol=1e-9, atol=1e-12)


def test_the_oracle_s_own_constant_would_give_another_savi() -> None:
    # Guards the comparison itself: it must be able to see a wrong constant.
    nir, red = np.array([0.42]), np.array([0.04])
    wrong = spyndex.computeIndex(
        "SAVI", params={"N": nir, "R": red, "L": spyndex.constants.L.value}
    )
    ours = INDICES["savi"].compute(nir=nir, red=red)
    assert abs(ours - wrong)[0] > 0.05


@pytest.mark.parametrize("band", SENSORS["sentinel-2-l2a"].bands, ids=lambda band: band.name)
def test_a_band_s_centre_and_width_agree_with_the_oracle_s_table(band: Band) -> None:
    listed = getattr(spyndex.bands, ORACLE_BANDS[band.role]).sentinel2a
    assert band.name.replace("B0", "B") == listed.band
    assert band.centre_um * 1000 == pytest.approx(listed.wavelength, abs=0.5)
    assert band.width_um * 1000 == pytest.approx(listed.bandwidth, abs=1.01)
