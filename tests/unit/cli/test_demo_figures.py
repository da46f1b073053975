"""The demo's own check passes figures that agree with its truth, and no others."""

from dataclasses import replace
from typing import Any

import pytest

from service.cli.demo_figures import SHOWN, Row, faults_of, table_of

TRUTH: dict[str, dict[str, Any]] = {
    "A": {"cover": "dense", "valid_share": 1.0, "look": True, "small": False, "ndvi": [0.7, 0.9]},
    "B": {"cover": "bare", "valid_share": 0.9, "look": True, "small": False, "ndvi": [0.0, 0.8]},
    "C": {"cover": "water", "valid_share": 1.0, "look": True, "small": False, "ndvi": [-0.2, 0.8]},
    "D": {"cover": "dense", "valid_share": 0.0, "look": False, "small": False, "ndvi": [0.7, 0.9]},
}


def row(ref: str, ndvi: float | None, *, valid_share: float = 1.0, **lost: float) -> Row:
    return Row(
        ref=ref,
        crop="oats",
        valid_share=valid_share,
        pixels=120.0,
        lost=lost,
        means=dict.fromkeys(SHOWN, ndvi),
    )


AGREEING = [
    row("A", 0.8),
    row("B", 0.1, valid_share=0.9, cloud=0.1),
    row("C", -0.1),
    row("D", None, valid_share=0.0, shadow=1.0),
]


def test_figures_that_agree_with_the_truth_have_no_faults() -> None:
    assert faults_of(AGREEING, TRUTH) == []


@pytest.mark.parametrize(
    ("at", "changed", "expected"),
    [
        (0, row("A", 0.95), "A: NDVI 0.950 of dense land lies outside"),
        (0, row("A", None), "A: no ndvi, though the parcel is in clear view."),
        (1, row("B", 0.1), "B: valid share 1.00, but 0.90 is in view."),
        (2, row("C", 0.3), "NDVI of bare cover does not exceed that of water cover."),
        (1, row("B", 0.8, valid_share=0.9), "NDVI of dense cover does not exceed that of bare"),
        (3, row("D", 0.8), "D: valid share 1.00, but 0.00 is in view."),
    ],
)
def test_each_figure_that_disagrees_is_named(at: int, changed: Row, expected: str) -> None:
    rows = [*AGREEING[:at], changed, *AGREEING[at + 1 :]]
    assert any(fault.startswith(expected) for fault in faults_of(rows, TRUTH))


def test_a_parcel_that_did_not_come_back_is_named() -> None:
    assert "D: nothing came back." in faults_of(AGREEING[:3], TRUTH)


def test_a_missing_figure_of_one_index_alone_is_named() -> None:
    lacking = replace(AGREEING[0], means={**AGREEING[0].means, "nbr": None})
    assert faults_of([lacking, *AGREEING[1:]], TRUTH) == [
        "A: no nbr, though the parcel is in clear view."
    ]


def test_the_table_shows_no_figure_of_an_unseen_parcel_but_says_why() -> None:
    lines = table_of([row("D", 0.5, valid_share=0.3, cloud=0.5, nodata=0.2)]).splitlines()
    assert "0.50" not in lines[1]
    assert lines[1].endswith("unseen: 50% cloud, 20% outside the tile")


def test_a_look_of_few_cells_says_so() -> None:
    assert replace(AGREEING[0], pixels=3.24).remark == "only 3.2 cells, all on its edge"
