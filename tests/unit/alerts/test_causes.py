"""Causes: each entry by a case of its own and its limits, and the order among them."""

from dataclasses import replace

import pytest

from service.alerts.causes import (
    CAUSES,
    CauseEntry,
    Evidence,
    attribute,
    evidence_of,
    keeps_label,
)
from tests.scored_looks import scored

# Shortfalls as mixtures of canopy, soil, water and char give them (ordering facts of the
# reference digest): water darkens both infrared bands, char lowers NBR most, a cut bares
# soil, drying raises 1.6 µm while the canopy is green.
FLOOD = {"ndvi": -0.30, "ndmi": 0.20, "nbr": 0.1, "ndwi": 0.4, "nir": -0.21, "swir16": -0.18}
BURN = {"ndvi": -0.45, "ndmi": -0.5, "nbr": -0.75, "ndwi": 0.3, "nir": -0.22, "swir16": -0.02}
CUT = {"ndvi": -0.5, "ndmi": -0.5, "nbr": -0.6, "ndwi": 0.35, "nir": -0.16, "swir16": 0.13}
DRY = {"ndvi": -0.08, "ndmi": -0.2, "nbr": -0.2, "ndwi": 0.05, "nir": -0.03, "swir16": 0.08}


def evidence(shortfall: dict[str, float], ndvi: float, suddenness: float | None) -> Evidence:
    return Evidence(
        observed={"ndvi": ndvi},
        shortfall=shortfall,
        departures={name: each / 0.05 for name, each in shortfall.items()},
        water=None,
        suddenness=suddenness,
    )


CASES = {
    "flood": evidence(FLOOD, 0.45, 0.9),
    "burn": evidence(BURN, 0.25, 0.9),
    "removal": evidence(CUT, 0.25, None),
    "moisture_stress": evidence(DRY, 0.7, 0.1),
}
WORDS = {
    "flood": ("near-infrared is 0.21 below", "short-wave infrared is 0.18 below", "NDWI"),
    "burn": ("NBR is 0.75 below", "near-infrared"),
    "removal": ("NDVI is 0.50 below", "0.25"),
    "moisture_stress": ("NDMI is 0.20 below", "short-wave infrared is 0.08 above", "0.70"),
}


def test_every_cause_has_a_case_here() -> None:
    kinds = [entry.kind for entry in CAUSES]
    assert set(kinds) == set(CASES) == set(WORDS)
    assert len(kinds) == len(set(kinds))


@pytest.mark.parametrize("entry", CAUSES, ids=lambda entry: entry.kind)
def test_every_cause_is_found_and_says_why_in_figures(entry: CauseEntry) -> None:
    cause = attribute(CASES[entry.kind])
    assert cause.kind == entry.kind
    assert [word for word in WORDS[entry.kind] if word not in cause.because] == []
    assert entry.source


@pytest.mark.parametrize(
    ("kind", "measure", "limit"),
    [
        ("flood", "ndwi", 0.06),
        ("flood", "swir16", -0.03),
        ("burn", "nbr", -0.10),
        ("burn", "nir", -0.025),
        ("burn", "swir16", 0.012),
        ("removal", "ndvi", -0.25),
        ("moisture_stress", "ndmi", -0.05),
        ("moisture_stress", "swir16", 0.015),
    ],
)
def test_at_its_limit_a_cause_no_longer_fits(kind: str, measure: str, limit: float) -> None:
    entry = next(each for each in CAUSES if each.kind == kind)
    case = CASES[kind]
    assert entry.fits(case)
    assert not entry.fits(replace(case, shortfall={**case.shortfall, measure: limit}))
    unknown = {name: each for name, each in case.shortfall.items() if name != measure}
    assert not entry.fits(replace(case, shortfall=unknown))


def test_a_drier_surface_that_is_dark_in_near_infrared_may_still_be_a_flood() -> None:
    entry = next(each for each in CAUSES if each.kind == "flood")
    case = CASES["flood"]
    assert entry.fits(replace(case, shortfall={**case.shortfall, "ndmi": -0.05}))
    assert not entry.fits(replace(case, shortfall={**case.shortfall, "ndmi": -0.06}))
    bright = {**case.shortfall, "nir": 0.0}
    assert entry.fits(replace(case, shortfall=bright)), "wetter is enough"
    assert not entry.fits(replace(case, shortfall={**bright, "ndmi": 0.03}))


@pytest.mark.parametrize("kind", ["burn", "removal"])
def test_what_comes_slowly_is_neither_fire_nor_cut(kind: str) -> None:
    slow = replace(CASES[kind], suddenness=0.4)
    assert kind not in (attribute(slow).kind, *attribute(slow).others)
    unknown = replace(CASES[kind], suddenness=None)
    assert attribute(unknown).kind == kind


def test_a_burn_must_lower_nbr_more_than_greenness() -> None:
    case = CASES["burn"]
    as_low = replace(case, shortfall={**case.shortfall, "nbr": 1.25 * case.shortfall["ndvi"]})
    assert attribute(as_low).kind != "burn"


def test_dry_leaves_that_are_gone_are_no_moisture_stress() -> None:
    assert (
        attribute(replace(CASES["moisture_stress"], observed={"ndvi": 0.3})).kind == "undetermined"
    )


def test_the_next_candidates_are_the_others_that_fit() -> None:
    burnt = attribute(CASES["burn"])
    assert burnt.others == ("removal",)


def test_what_fits_nothing_is_undetermined_and_names_the_largest_departures() -> None:
    cause = attribute(evidence({"ndvi": -0.12, "nbr": -0.2, "ndmi": 0.0}, 0.6, 0.9))
    assert (cause.kind, cause.others) == ("undetermined", ())
    assert cause.because.startswith("NBR is 0.20 below what was expected and NDVI is 0.12 below")


def test_cells_classed_as_water_support_a_flood() -> None:
    said = attribute(replace(CASES["flood"], water=0.8)).because
    assert "80% of the cells are classed as water" in said
    assert "classed" not in attribute(replace(CASES["flood"], water=0.5)).because


def test_evidence_is_the_mean_of_the_last_two_departed_looks() -> None:
    looks = [
        scored(day, {"A": 3.0}, shortfalls={"ndvi": short}).describe(0)
        for day, short in enumerate((-0.9, -0.2, -0.4))
    ]
    found = evidence_of(looks, None)
    assert found.short("ndvi") == pytest.approx(-0.3)
    assert found.seen("ndvi") == pytest.approx(0.5)
    assert evidence_of(looks[:1], None).short("ndvi") == pytest.approx(-0.9)


def test_flood_and_burn_keep_their_label() -> None:
    assert [entry.kind for entry in CAUSES if keeps_label(entry.kind)] == ["flood", "burn"]
    assert not keeps_label("undetermined")
