"""One land, seen by two agencies' instruments and delivered as each delivers it.

The bands are the spectra's means over the passbands of Sentinel-2B and of Landsat 8's OLI;
no harmonisation coefficient, nor its inverse, is in them. Sources of the spectra: PROSAIL
(Jacquemoud et al. 2009) as packaged in `prosail` 2.0.5, and the medians of soils, litter and
char in `earthlib` 1.1.0.
"""

from datetime import timedelta
from itertools import product
from pathlib import Path
from typing import Any

import earthlib
import numpy as np
import pytest
from numpy.typing import NDArray

from service.spectral.bands import OLI, SENTINEL_2B, Band
from service.spectral.indices import INDICES, Index
from tests.passbands import CANOPY_NM, canopy, through
from tests.products_made import SENSED_AT, write_landsat, write_safe
from tests.pushing import pushed
from tests.serving import Service, square

FIELD = 12
"""Cells of 10 m a side of a field: whole cells at 20, 30 and 60 m too."""
SIDE = 5
STEP = {"sentinel-2-l2a": 1e-4, "landsat-c2-l2": 2.75e-5}
"""Reflectance of one step of the stored numbers."""

CANOPIES: dict[str, dict[str, float]] = {
    "sparse": {"lai": 0.5},
    "closing": {"lai": 1.5},
    "closed": {"lai": 3.0},
    "dense": {"lai": 6.0},
    "dry": {"cw": 0.004},
    "pale": {"cab": 15.0},
    "ripe": {"cbrown": 1.0, "cab": 5.0},
}
MEASURED = {"soil": "bare", "litter": "npv", "char": "burned"}


def seen_by(bands: tuple[Band, ...]) -> dict[str, dict[str, float]]:
    """Return by surface and band role what an instrument sees."""
    seen = {
        name: through(bands, canopy(**changed), CANOPY_NM) for name, changed in CANOPIES.items()
    }
    wavelengths = 1e3 * np.asarray(earthlib.full_library.sensor.band_centers, dtype=np.float64)
    spectra = np.asarray(earthlib.full_library.data, dtype=np.float64)
    groups = earthlib.full_library.metadata["LEVEL_2"]
    for name, group in MEASURED.items():
        chosen = spectra[(groups == group).to_numpy()]
        median = np.median(chosen[(chosen > 0).all(axis=1)], axis=0)
        seen[name] = through(bands, median, wavelengths)
    return seen


def land(seen: dict[str, dict[str, float]], cell_m: int) -> dict[str, NDArray[np.float64]]:
    """Return reflectance by band role: a field of each surface, in rows of `SIDE`."""
    side = FIELD * 10 // cell_m
    roles = next(iter(seen.values()))
    laid = {role: np.full((side * SIDE, side * SIDE), 0.2) for role in roles}
    for number, surface in enumerate(seen.values()):
        row, col = divmod(number, SIDE)
        for role, rho in surface.items():
            laid[role][row * side : (row + 1) * side, col * side : (col + 1) * side] = rho
    return laid


def limits(index: Index, surface: dict[str, float], step: float) -> tuple[float, float]:
    """Return between what an index lies if each band is off by half a step at most.

    The indices here rise or fall with each band alone, so that the ends are at corners.
    """
    roles = [role.value for role in index.roles]
    corners = np.array(list(product((-0.5, 0.5), repeat=len(roles)))).T * step
    bands: dict[str, Any] = {
        role: surface[role] + off for role, off in zip(roles, corners, strict=True)
    }
    values = index.compute(**bands)
    # Figures are kept in single precision.
    return float(values.min()) - 1e-6, float(values.max()) + 1e-6


def test_indices_of_two_agencies_differ_by_what_the_spectra_say(
    service: Service, tmp_path: Path
) -> None:
    seen = {"sentinel-2-l2a": seen_by(SENTINEL_2B), "landsat-c2-l2": seen_by(OLI)}
    names = list(seen["landsat-c2-l2"])
    service.put_parcels(
        *(
            square(name, col=FIELD * (number % SIDE), row=FIELD * (number // SIDE), size=FIELD)
            for number, name in enumerate(names)
        )
    )
    write_safe(tmp_path / "in", land(seen["sentinel-2-l2a"], 10), cells=FIELD * SIDE)
    write_landsat(
        tmp_path / "in",
        land(seen["landsat-c2-l2"], 30),
        cells=FIELD * SIDE // 3,
        sensed_at=SENSED_AT + timedelta(days=1),
    )
    sent = pushed(service, tmp_path, tmp_path / "in", "--wait")
    assert (sent.code, sent.outcomes) == (0, ["sent", "sent"]), sent.told

    oli = {band.role for band in OLI}
    shared = [
        index for index in INDICES.values() if index.watched and set(index.roles) <= oli - {"nir08"}
    ]
    assert {"ndvi", "evi2", "savi", "ndmi", "ndwi", "nbr", "nbr2", "bsi"} <= {
        index.id for index in shared
    }
    apart = []
    ids = ",".join(index.id for index in shared)
    for name in names:
        columns = service.get(f"/v1/parcels/{name}/series", params={"index": ids})["indices"]
        for index in shared:
            series = columns[index.id]
            got = dict(zip(series["sensor"], series["mean"], strict=True))
            for sensor, step in STEP.items():
                low, high = limits(index, seen[sensor][name], step)
                assert low <= got[sensor] <= high, (name, index.id, sensor)
            spectra = [
                float(
                    index.compute(**{r.value: np.array([seen[s][name][r]]) for r in index.roles})[0]
                )
                for s in STEP
            ]
            difference = got["sentinel-2-l2a"] - got["landsat-c2-l2"]
            apart.append((difference, spectra[0] - spectra[1]))
    measured, said = np.array(apart).T
    # The instruments do see this land differently, so that mixing up their bands would show.
    assert np.abs(said).max() > 0.02
    assert measured == pytest.approx(said, abs=2e-3)
