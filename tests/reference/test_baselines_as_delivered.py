"""Products of two processing baselines of one surface are one surface, over HTTP.

Source: ESA, Sentinel-2 format change of processing baseline 04.00: reflectance =
(number + BOA_ADD_OFFSET) / BOA_QUANTIFICATION_VALUE, and no such offset before.
"""

from datetime import timedelta
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.products_made import BANDS, SENSED_AT, write_safe
from tests.pushing import pushed
from tests.serving import Service, square

QUANTUM = 1e-4
"""Reflectance of one step of the stored numbers."""
CELLS = 60
# Parcels that end on cells of 60 m, so that the truth is a plain mean at every resolution.
PLACES = {"A": (0, 0), "B": (30, 24)}
SIZE = 12


def surface() -> dict[str, NDArray[np.float64]]:
    """Return a field whose reflectance changes from cell to cell, dark water in its corner."""
    rows, cols = np.mgrid[:CELLS, :CELLS] / CELLS
    rho = {
        role: np.asarray(0.02 * (number + 1) + 0.11 * rows * cols + 0.05 * rows)
        for number, role in enumerate(BANDS.values())
    }
    return {role: np.round(values, 6) for role, values in rho.items()}


def test_a_product_of_05_10_and_one_of_02_12_of_one_surface_have_the_same_figures(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(
        *(square(ref, col=col, row=row, size=SIZE) for ref, (col, row) in PLACES.items())
    )
    truth = surface()
    for baseline, days in (("05.10", 0), ("02.12", 5)):
        sensed_at = SENSED_AT + timedelta(days=days)
        write_safe(tmp_path / "in", truth, baseline=baseline, sensed_at=sensed_at)
    sent = pushed(service, tmp_path, tmp_path / "in", "--wait")
    assert (sent.code, sent.outcomes) == (0, ["sent", "sent"]), sent.told
    assert [line["scene"]["processing_baseline"] for line in sent.lines] == ["05.10", "02.12"]
    assert [line["report"]["parcels_measured"] for line in sent.lines] == [2, 2]
    roles = [role for role in BANDS.values() if role != "nir09"]
    for ref, (col, row) in PLACES.items():
        place = np.s_[row : row + SIZE, col : col + SIZE]
        for role in roles:
            new, old = service.series(ref, role)["mean"]
            # The band of 60 m is delivered at 20 m since 04.00, each rounded by itself.
            assert new == pytest.approx(old, abs=QUANTUM if role == "coastal" else 1e-6), role
            # Each cell is stored with an error of half a step at most, and so is their mean.
            assert new == pytest.approx(truth[role][place].mean(), abs=QUANTUM / 2), role
        for index in ("ndvi", "ndmi", "savi"):
            new, old = service.series(ref, index)["mean"]
            assert new == pytest.approx(old, abs=1e-6)
        wrong = np.mean(
            (truth["nir"][place] - truth["red"][place])
            / (truth["nir"][place] + truth["red"][place] + 0.2)
        )
        assert abs(service.series(ref, "ndvi")["mean"][0] - wrong) > 0.05


def test_a_product_of_an_unknown_baseline_is_refused_and_the_others_are_sent(
    service: Service, tmp_path: Path
) -> None:
    truth = {"red": 0.05, "nir": 0.4}
    write_safe(tmp_path / "in", truth, baseline="99.99", offset=-1000)
    write_safe(tmp_path / "in", truth, sensed_at=SENSED_AT + timedelta(days=5))
    sent = pushed(service, tmp_path, tmp_path / "in")
    assert (sent.code, sent.outcomes) == (3, ["refused", "sent"]), sent.told
    assert sent.lines[0]["detail"].startswith("Processing baseline 99.99 is not known")
    assert len(service.get("/v1/scenes")["scenes"]) == 1


def test_an_offset_of_a_product_s_own_is_believed(service: Service, tmp_path: Path) -> None:
    """The metadata say how these very numbers were stored; the baseline is a rule of thumb."""
    service.put_parcels(square("A", col=0, row=0, size=SIZE))
    write_safe(tmp_path / "in", {"red": 0.05, "nir": 0.4}, baseline="05.10", offset=-2000)
    sent = pushed(service, tmp_path, tmp_path / "in", "--wait")
    assert (sent.code, sent.outcomes) == (0, ["sent"]), sent.told
    assert sent.lines[0]["scene"]["scaling"]["red"] == {"scale": 1e-4, "offset": -0.2}
    assert service.series("A", "red")["mean"] == pytest.approx([0.05], abs=QUANTUM / 2)
