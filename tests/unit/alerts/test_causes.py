"""Causes: each entry by a case of its own and its limits, and the order among them."""

from dataclasses import replace

import pytest

from service.alerts.causes import CAUSES, CauseEntry, attribute, keeps_label
from service.alerts.evidence import Evidence, evidence_of
from tests.scored_looks import scored

# Shortfalls as mixtures of canopy, soil, water and char give them (ordering facts of the
# reference digest): water darkens both infrared bands, char lowers NBR most, a cut bares
# soil, drying raises 1.6 µm while the canopy is green.
FLOOD = {"ndvi": -0.30, "ndmi": 0.20, "nbr": 0.1, "ndwi": 0.4, "nir": -0.21, "swir16": -0.18}
BURN = {"ndvi": -0.45, "ndmi": -0.5, "nbr": -0.75, "ndwi": 0.3, "nir": -0.22, "swir16": -0.02}
CUT = {"ndvi": -0.5, "ndmi": -0.5, "nbr": -0.6, "ndwi": 0.35, "nir": -0.16, "swir16": 0.13}
DRY = {"ndvi": -0.08, "ndmi": -0.2, "nbr": -0.2, "ndwi": 0.05, "nir": -0.03, "swir16": 0.08}


DARK = {"ndvi": -0.02, "ndmi": 0.01, "nir": -0.09, "swir16": -0.05, "green": -0.02, "ndwi": 0.02}
HAZY = {"ndvi": -0.2, "ndmi": -0.05, "nir": 0.02, "swir16": 0.01, "hot": 0.03}


def evidence(
    shortfall: dict[str, float],
    ndvi: float,
    suddenness: float | None,
    *,
    rising: float | None = 0.0,
    best: float | None = 0.8,
    **observed: float,
) -> Evidence:
    return Evidence(
        observed={"ndvi": ndvi, **observed},
        shortfall=shortfall,
        departures={name: each / 0.05 for name, each in shortfall.items()},
        water=None,
        suddenness=suddenness,
        rising=rising,
        best=best,
    )


# By the place in the table: two entries tell of residual cloud.
CASES = {
    "snow": evidence({"ndvi": -0.6}, 0.02, 0.9, ndsi=0.6, green=0.5),
    "residual_cloud": evidence(HAZY, 0.5, 0.9),
    "flood": evidence(FLOOD, 0.45, 0.9),
    "residual_cloud (shadow)": evidence(DARK, 0.7, 0.9),
    "burn": evidence(BURN, 0.25, 0.9),
    "late_growth": evidence({"ndvi": -0.15}, 0.35, 0.1, rising=0.2, best=0.33),
    "removal": evidence(CUT, 0.25, None),
    "moisture_stress": evidence(DRY, 0.7, 0.1),
    "undetermined": evidence({"ndvi": -0.06, "nir": -0.01}, 0.7, None),
    "partial_loss": evidence({"ndvi": -0.15, "ndmi": -0.05}, 0.6, 0.9),
    "decline": evidence({"ndvi": -0.15, "ndmi": -0.05}, 0.6, 0.2),
}
WORDS = {
    "snow": ("NDSI is 0.60", "0.50"),
    "residual_cloud": ("haze", "0.03 above"),
    "flood": ("near-infrared is 0.21 below", "short-wave infrared is 0.18 below", "NDWI"),
    "residual_cloud (shadow)": ("near-infrared is 0.09 below", "green is 0.02 below", "shadow"),
    "burn": ("NBR is 0.75 below", "near-infrared"),
    "late_growth": ("NDVI is 0.15 below", "0.20 in 20 days", "0.33 in the past 25 days"),
    "removal": ("NDVI is 0.50 below", "0.25"),
    "moisture_stress": ("NDMI is 0.20 below", "short-wave infrared is 0.08 above", "0.70"),
    "undetermined": ("NDVI is 0.06 below", "too long ago"),
    "partial_loss": ("NDVI is 0.15 below", "90%"),
    "decline": ("NDVI is 0.15 below", "little by little"),
}


def entry_of(name: str) -> CauseEntry:
    return CAUSES[list(CASES).index(name)]


def test_every_cause_has_a_case_here_in_the_order_of_the_table() -> None:
    assert [entry.kind for entry in CAUSES] == [name.split(" ")[0] for name in CASES]
    assert list(CASES) == list(WORDS)


@pytest.mark.parametrize("name", CASES)
def test_every_cause_is_found_and_says_why_in_figures(name: str) -> None:
    cause = attribute(CASES[name])
    assert cause.kind == name.split(" ", maxsplit=1)[0]
    assert [word for word in WORDS[name] if word not in cause.because] == []
    assert entry_of(name).source


@pytest.mark.parametrize(
    ("kind", "measure", "limit"),
    [
        ("flood", "ndwi", 0.06),
        ("flood", "swir16", -0.03),
        ("burn", "nbr", -0.10),
        ("burn", "nir", -0.025),
        ("burn", "swir16", 0.035),
        ("removal", "ndvi", -0.25),
        ("moisture_stress", "ndmi", -0.05),
        ("moisture_stress", "swir16", 0.015),
        ("residual_cloud", "hot", 0.02),
        ("residual_cloud (shadow)", "nir", -0.03),
        ("residual_cloud (shadow)", "swir16", -0.03),
        ("residual_cloud (shadow)", "ndvi", -0.05),
        ("residual_cloud (shadow)", "ndmi", 0.05),
        ("residual_cloud (shadow)", "green", -0.01),
        ("late_growth", "ndvi", -0.08),
        ("partial_loss", "ndvi", -0.04),
        ("decline", "ndvi", -0.04),
    ],
)
def test_at_its_limit_a_cause_no_longer_fits(kind: str, measure: str, limit: float) -> None:
    entry = entry_of(kind)
    case = CASES[kind]
    assert entry.fits(case)
    assert not entry.fits(replace(case, shortfall={**case.shortfall, measure: limit}))
    unknown = {name: each for name, each in case.shortfall.items() if name != measure}
    assert not entry.fits(replace(case, shortfall=unknown))


def test_a_drier_surface_that_is_dark_in_near_infrared_may_still_be_a_flood() -> None:
    entry, case = entry_of("flood"), CASES["flood"]
    shallow = {**case.shortfall, "ndwi": 0.15}
    assert entry.fits(replace(case, shortfall={**shallow, "ndmi": -0.05}))
    assert not entry.fits(replace(case, shortfall={**shallow, "ndmi": -0.06}))
    bright = {**case.shortfall, "nir": 0.0}
    assert entry.fits(replace(case, shortfall=bright)), "wetter is enough"
    assert not entry.fits(replace(case, shortfall={**bright, "ndmi": 0.03}))


def test_water_among_standing_plants_is_a_flood_though_the_plants_look_drier() -> None:
    entry, case = entry_of("flood"), CASES["flood"]
    mixed = {**case.shortfall, "ndmi": -0.13, "nbr": -0.14}
    assert entry.fits(replace(case, shortfall=mixed))
    assert not entry.fits(replace(case, shortfall={**mixed, "ndmi": -0.14}))
    assert not entry.fits(replace(case, shortfall={**mixed, "nbr": -0.16})), "char lowers NBR"


def test_char_takes_the_contrast_of_the_short_wave_pair_away() -> None:
    # A burnt green canopy loses as much NDVI as NBR; what is left has NBR below 0. A thinner
    # canopy has less of both bands alike.
    entry = entry_of("burn")
    green = {**BURN, "ndvi": -0.70, "swir22": 0.10}
    burnt = replace(evidence(green, 0.16, 0.9), observed={"ndvi": 0.16, "nbr": -0.25})
    assert entry.fits(burnt)
    assert not entry.fits(replace(burnt, shortfall={**green, "swir22": 0.03}))
    assert not entry.fits(replace(burnt, observed={"ndvi": 0.16, "nbr": 0.05}))


def test_leaves_that_are_gone_are_no_moisture_stress() -> None:
    # Gao 1996: water in leaves shows in the short-wave infrared, their structure in the near.
    entry, case = entry_of("moisture_stress"), CASES["moisture_stress"]
    assert entry.fits(replace(case, shortfall={**DRY, "nir": -0.08}))
    assert not entry.fits(replace(case, shortfall={**DRY, "nir": -0.09}))


def test_a_dense_canopy_may_lose_light_before_greenness() -> None:
    thinner = replace(CASES["decline"], shortfall={"ndvi": -0.03, "nir": -0.06, "ndmi": -0.05})
    assert attribute(thinner).kind == "decline"
    assert attribute(replace(thinner, shortfall={"ndvi": -0.03})).kind == "undetermined"


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
    assert attribute(replace(CASES["moisture_stress"], observed={"ndvi": 0.3})).kind == "decline"


def test_the_next_candidates_are_the_others_that_fit() -> None:
    burnt = attribute(CASES["burn"])
    assert burnt.others == ("removal", "partial_loss", "decline")


def test_what_fits_nothing_is_undetermined_and_names_the_largest_departures() -> None:
    cause = attribute(evidence({"ndvi": -0.02, "nbr": -0.2, "ndmi": -0.1}, 0.6, 0.9))
    assert (cause.kind, cause.others) == ("undetermined", ())
    assert cause.because.startswith("NBR is 0.20 below what was expected and NDMI is 0.10 below")


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


def test_a_bright_surface_that_is_no_snow() -> None:
    case = CASES["snow"]
    for observed in ({"ndsi": 0.15, "green": 0.5}, {"ndsi": 0.6, "green": 0.18}, {"ndsi": 0.6}):
        assert not entry_of("snow").fits(replace(case, observed=observed))


def test_without_ndsi_snow_is_told_by_the_mean_reflectances_and_says_so() -> None:
    # NDSI (Hall et al. 1995) of 0.5 and 0.1: 0.4 / 0.6.
    case = replace(CASES["snow"], observed={"green": 0.5, "swir16": 0.1})
    cause = attribute(case)
    assert cause.kind == "snow"
    assert "NDSI is 0.67, from the parcel's mean" in cause.because


def test_haze_over_dark_water_is_no_cloud_unless_it_is_thick() -> None:
    dark = {"hot": 0.05, "nir": -0.1, "swir16": -0.1}
    case = replace(CASES["residual_cloud"], shortfall=dark)
    assert not entry_of("residual_cloud").fits(case)
    assert entry_of("residual_cloud").fits(replace(case, shortfall={**dark, "hot": 0.06}))


def test_a_parcel_that_lost_cover_is_not_late() -> None:
    case = CASES["late_growth"]
    assert entry_of("late_growth").fits(replace(case, best=0.42))
    for other in (replace(case, best=0.44), replace(case, rising=0.04), replace(case, best=None)):
        assert not entry_of("late_growth").fits(other)


def test_a_loss_that_came_at_once_is_partial_and_one_that_crept_in_a_decline() -> None:
    case = CASES["partial_loss"]
    assert attribute(replace(case, suddenness=0.81)).kind == "partial_loss"
    assert attribute(replace(case, suddenness=0.80)).kind == "decline"
    assert attribute(replace(case, growth=1.29)).kind == "partial_loss"
    assert attribute(replace(case, growth=1.30)).kind == "decline"


def test_after_a_gap_only_a_large_loss_is_named() -> None:
    case = CASES["undetermined"]
    for shortfall in ({"ndvi": -0.10}, {"ndvi": -0.06, "nir": -0.04}):
        assert attribute(replace(case, shortfall=shortfall)).kind == "partial_loss"


def test_growth_is_told_by_the_looks_beyond_the_threshold() -> None:
    def grown(*scores: float) -> float:
        looks = [scored(5 * at, {"A": score}).describe(0) for at, score in enumerate(scores)]
        return evidence_of(looks, None).growth

    # NDVI falls short by a twentieth of the score; the threshold is 3.
    assert grown(3.0, 4.5) == pytest.approx(1.5)
    assert grown(2.0, 6.0) == 1.0
    assert grown(2.0, 3.0, 6.0) == pytest.approx(2.0)
    assert grown(2.0) == 1.0


def test_after_a_gap_a_large_loss_that_does_not_grow_came_at_once() -> None:
    case = replace(CASES["partial_loss"], suddenness=None)
    cause = attribute(case)
    assert (cause.kind, "in a gap between looks" in cause.because) == ("partial_loss", True)
    assert attribute(replace(case, growth=1.3)).kind == "decline"
