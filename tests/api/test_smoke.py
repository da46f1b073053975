"""From parcels and pixels to a series."""

from pathlib import Path

import pytest

from tests.serving import SCENE, Service, square, uniform_scene

CANOPY = {"blue": 0.03, "green": 0.06, "red": 0.04, "nir": 0.42, "swir16": 0.22}


def test_a_posted_scene_becomes_a_figure_of_each_parcel(service: Service, tmp_path: Path) -> None:
    assert (
        service.put_parcels(square("A", col=5, row=5), square("B", col=20, row=20)).json()[
            "created"
        ]
        == 2
    )
    answer = service.post_scene(SCENE, uniform_scene(tmp_path / "s", CANOPY))
    assert answer.status_code == 200, answer.text
    assert answer.json()["state"] == "done", answer.text
    assert answer.json()["parcels_measured"] == 2
    series = service.series("A")
    # (0.42 - 0.04) / (0.42 + 0.04); Rouse et al. 1974.
    assert series["mean"] == [pytest.approx(0.826087, abs=1e-6)]
    assert series["scene"] == ["s1"]
