"""From strips and zones to figures, on scenes that a person can check.

The scenes are ours: a few cells with round reflectances. Index formulas are checked in the
tests of `spectral`; here they are computed by hand from their published definitions.
"""

import dataclasses

import numpy as np
import pytest
import shapely
from affine import Affine

from service.observe import BAND_STATS, INDEX_STATS, LOOK_FIGURES, columns_for, observe
from service.spectral.indices import INDICES
from service.spectral.quality import SCL
from service.spectral.roles import BandRole
from service.zonal.coverage import zones_on
from service.zonal.grid import Grid
from service.zonal.plan import plan_of
from tests.scenes_in_memory import ArrayScene

RED, NIR, SWIR16 = BandRole.RED, BandRole.NIR, BandRole.SWIR16
NDVI, NDMI, EVI = INDICES["ndvi"], INDICES["ndmi"], INDICES["evi"]
VEGETATION, WATER, CLOUD, SHADOW, SNOW, NO_DATA, DEFECTIVE = 4, 6, 9, 3, 11, 0, 1
CLEAR = [[VEGETATION] * 4] * 4
LOST = ("cloud", "shadow", "snow", "nodata", "saturation")


def grid_of(rows, cols):
    return Grid(
        crs="EPSG:32633",
        transform=Affine(10, 0, 500_000.0, 0, -10, 5_400_000.0),
        shape=(rows, cols),
    )


def box(left, top, right, bottom):
    """A rectangle by columns and rows."""
    return shapely.box(
        500_000 + 10 * left, 5_400_000 - 10 * bottom, 500_000 + 10 * right, 5_400_000 - 10 * top
    )


def block(bands, quality=None, **how):
    """A scene of stored numbers: reflectance = number / 10,000 - 0.1 unless said otherwise."""
    if quality is not None:
        quality = np.asarray(quality, dtype=np.uint8)
    return ArrayScene(bands=bands, quality=quality, **how)


def stored(reflectance):
    return np.rint((np.asarray(reflectance) + 0.1) * 10_000).astype(np.uint16)


def four_by_four(reflectance):
    return stored(np.full((4, 4), reflectance))


def plan_on(geometries, rows=4, cols=4):
    grid = grid_of(rows, cols)
    return plan_of(grid, zones_on(grid, geometries))


def observed(scene, geometries, *, roles, indices=(NDVI,), quality=SCL, rule="clear"):
    plan = plan_on(geometries)
    with np.errstate(all="raise"):
        return observe(
            scene.strips(plan), plan, roles=roles, indices=indices, quality=quality, rule=rule
        )


def figures_of(scene, geometries, **how):
    """The figures of each zone by column."""
    seen = observed(scene, geometries, **how)
    return [dict(zip(seen.columns, row.tolist(), strict=True)) for row in seen.figures]


def test_a_clear_parcel_of_one_surface():
    scene = block({RED: four_by_four(0.04), NIR: four_by_four(0.36)}, CLEAR)

    (seen,) = figures_of(scene, [box(0.5, 0.5, 2.5, 2.5)], roles=(RED, NIR))

    assert seen["clear.valid_share"] == 1.0
    assert seen["clear.pixels"] == seen["ndvi.pixels"] == 4.0
    assert all(seen[f"clear.{loss}"] == 0 for loss in LOST)
    for stat in ("mean", "min", "p10", "p50", "p90", "max"):
        assert seen[f"ndvi.{stat}"] == np.float32(0.8)
    assert seen["ndvi.sd"] == 0
    assert seen["red.mean"] == np.float32(0.04)
    assert seen["nir.mean"] == np.float32(0.36)
    assert seen["red.sd"] == pytest.approx(0, abs=1e-9)


def test_the_offset_is_added_before_the_index():
    # The worked example of the reference: red 1400, nir 4400 of baseline 05.10 give 0.7895,
    # and 0.5172 where the offset was forgotten.
    bands = {RED: np.full((4, 4), 1400, np.uint16), NIR: np.full((4, 4), 4400, np.uint16)}

    (right,) = figures_of(block(bands, CLEAR), [box(0, 0, 4, 4)], roles=(RED, NIR))
    (wrong,) = figures_of(block(bands, CLEAR, offset=0), [box(0, 0, 4, 4)], roles=(RED, NIR))

    assert right["ndvi.mean"] == pytest.approx(0.7895, abs=5e-5)
    assert wrong["ndvi.mean"] == pytest.approx(0.5172, abs=5e-5)


def test_cells_weigh_by_their_coverage():
    red = stored([[0.1, 0.3]])
    scene = block({RED: red}, [[VEGETATION] * 2])

    (seen,) = figures_of(scene, [box(0, 0, 1.25, 1)], roles=(RED,), indices=())

    # 1 cell of 0.1 and a quarter of a cell of 0.3.
    assert seen["red.mean"] == pytest.approx((0.1 + 0.25 * 0.3) / 1.25, rel=1e-6)
    assert seen["red.sd"] == pytest.approx(0.2 * np.sqrt(0.8 * 0.2), rel=1e-6)


def test_every_reason_has_its_share_and_they_add_up():
    quality = [
        [VEGETATION, CLOUD, CLOUD, SHADOW],
        [WATER, SNOW, DEFECTIVE, NO_DATA],
        [VEGETATION] * 4,
        [VEGETATION] * 4,
    ]
    scene = block({RED: four_by_four(0.1)}, quality)

    (seen,) = figures_of(scene, [box(0, 0, 4, 2)], roles=(RED,), indices=())

    assert seen["clear.valid_share"] == 2 / 8
    assert seen["clear.pixels"] == 2
    assert [seen[f"clear.{loss}"] for loss in LOST] == [2 / 8, 1 / 8, 1 / 8, 1 / 8, 1 / 8]
    assert seen["clear.water"] == 1 / 8


def test_a_flooded_parcel_is_seen():
    scene = block({RED: four_by_four(0.05)}, [[WATER] * 4] * 4)

    (seen,) = figures_of(scene, [box(0, 0, 4, 4)], roles=(RED,), indices=())

    assert seen["clear.valid_share"] == seen["clear.water"] == 1


def test_a_clear_surface_that_the_rule_drops_is_lost_to_no_reason():
    scene = block({RED: four_by_four(0.05)}, [[WATER] * 4, *[[VEGETATION] * 4] * 3])

    (seen,) = figures_of(scene, [box(0, 0, 4, 4)], roles=(RED,), indices=(), rule="land")

    assert seen["land.valid_share"] == 0.75
    assert seen["land.water"] == 0.25
    assert all(seen[f"land.{loss}"] == 0 for loss in LOST)


@pytest.mark.parametrize(
    ("covered", "reason"),
    [(CLOUD, "cloud"), (SHADOW, "shadow"), (SNOW, "snow"), (NO_DATA, "nodata"),
     (DEFECTIVE, "saturation"), (99, "nodata")],
)  # fmt: skip
def test_a_parcel_without_a_usable_cell_is_unknown_and_never_zero(covered, reason):
    bands = {RED: four_by_four(0.1), NIR: four_by_four(0.3)}

    (seen,) = figures_of(block(bands, [[covered] * 4] * 4), [box(0, 0, 3, 3)], roles=(RED, NIR))

    assert seen["clear.valid_share"] == seen["clear.pixels"] == seen["ndvi.pixels"] == 0
    assert seen[f"clear.{reason}"] == 1
    for column in [*(f"ndvi.{stat}" for stat in INDEX_STATS[:-1]), "red.mean", "nir.sd"]:
        assert np.isnan(seen[column])


def test_one_bands_nodata_is_unknown_for_that_band_only():
    red, nir = four_by_four(0.1), four_by_four(0.3)
    nir[0, 0] = 0
    scene = block({RED: red, NIR: nir}, CLEAR)

    (seen,) = figures_of(scene, [box(0, 0, 2, 1)], roles=(RED, NIR))

    assert seen["clear.valid_share"] == 1
    assert seen["clear.pixels"] == 2
    assert seen["ndvi.pixels"] == 1
    assert seen["ndvi.mean"] == np.float32(0.5)
    assert seen["red.mean"] == np.float32(0.1)


def test_one_bands_saturated_number_is_unknown_for_that_band_only():
    red, nir = four_by_four(0.1), four_by_four(0.3)
    red[0, 0] = 65_535
    scene = block({RED: red, NIR: nir}, CLEAR)

    (seen,) = figures_of(scene, [box(0, 0, 2, 1)], roles=(RED, NIR))

    assert seen["clear.valid_share"] == 1
    assert seen["clear.saturation"] == 0
    assert seen["ndvi.pixels"] == 1
    assert seen["red.mean"] == np.float32(0.1)


def test_a_cell_without_any_number_is_lost_to_saturation_or_to_nodata():
    red, nir = four_by_four(0.1), four_by_four(0.3)
    red[0, :3], nir[0, :3] = [0, 65_535, 0], [0, 65_535, 65_535]
    scene = block({RED: red, NIR: nir}, CLEAR)

    (seen,) = figures_of(scene, [box(0, 0, 4, 1)], roles=(RED, NIR))

    assert seen["clear.valid_share"] == 0.25
    assert seen["clear.nodata"] == 0.25
    assert seen["clear.saturation"] == 0.5


def test_nodata_is_told_from_a_reflectance_of_zero_by_the_stored_number():
    red = np.full((4, 4), 1000, np.uint16)  # reflectance 0
    nir = np.full((4, 4), 1000, np.uint16)

    (seen,) = figures_of(block({RED: red, NIR: nir}, CLEAR), [box(0, 0, 1, 1)], roles=(RED, NIR))

    assert seen["clear.valid_share"] == 1
    assert seen["red.mean"] == 0
    # 0 / 0 has no NDVI.
    assert seen["ndvi.pixels"] == 0
    assert np.isnan(seen["ndvi.mean"])


def test_a_small_negative_reflectance_is_kept():
    bands = {RED: four_by_four(-0.02), NIR: four_by_four(0.3)}

    (seen,) = figures_of(block(bands, CLEAR), [box(0, 0, 1, 1)], roles=(RED, NIR))

    assert seen["red.mean"] == np.float32(-0.02)
    assert seen["ndvi.mean"] == pytest.approx(0.32 / 0.28, rel=1e-6)


def test_what_lies_off_the_grid_is_lost_to_nodata():
    scene = block({RED: four_by_four(0.1)}, CLEAR)

    over_the_edge, outside, empty = figures_of(
        scene,
        [box(-1, 0, 1, 1), box(10, 10, 11, 11), shapely.Polygon()],
        roles=(RED,),
        indices=(),
    )

    assert (over_the_edge["clear.valid_share"], over_the_edge["clear.nodata"]) == (0.5, 0.5)
    assert over_the_edge["clear.pixels"] == 1
    for unseen in (outside, empty):
        assert (unseen["clear.valid_share"], unseen["clear.nodata"]) == (0, 1)
        assert np.isnan(unseen["red.mean"])


def test_a_zone_whose_last_cell_does_not_come_has_no_data():
    scene = block({RED: four_by_four(0.1)}, CLEAR)
    plan = plan_on([box(0, 0, 4, 4)])

    def figures(strips):
        seen = observe(strips, plan, roles=(RED,), indices=(), quality=SCL, rule="clear")
        return dict(zip(seen.columns, seen.figures[0].tolist(), strict=True))

    nothing = figures([])
    half = figures([scene.strip(plan, 0, 8)])

    for seen in (nothing, half):
        assert (seen["clear.valid_share"], seen["clear.nodata"]) == (0, 1)
        assert np.isnan(seen["red.mean"])


def test_a_scene_without_the_promised_quality_layer_has_no_usable_cell():
    scene = block({RED: four_by_four(0.1)})

    (seen,) = figures_of(scene, [box(0, 0, 4, 4)], roles=(RED,), indices=())

    assert (seen["clear.valid_share"], seen["clear.nodata"]) == (0, 1)


def test_the_number_for_what_lies_outside_the_layer_comes_before_its_classes():
    scene = block({RED: four_by_four(0.1)}, [[VEGETATION, WATER, WATER, WATER]] * 4)
    layer = dataclasses.replace(SCL, outside=WATER)

    (seen,) = figures_of(scene, [box(0, 0, 4, 4)], roles=(RED,), indices=(), quality=layer)

    assert (seen["clear.valid_share"], seen["clear.nodata"]) == (0.25, 0.75)
    assert seen["clear.water"] == 0


def test_a_class_without_any_bands_number_is_no_evidence():
    red = four_by_four(0.05)
    red[0] = 0
    scene = block({RED: red}, [[WATER, WATER, CLOUD, CLOUD], *[[VEGETATION] * 4] * 3])

    (seen,) = figures_of(scene, [box(0, 0, 4, 4)], roles=(RED,), indices=())

    assert (seen["clear.water"], seen["clear.cloud"], seen["clear.nodata"]) == (0, 0, 0.25)


def test_without_a_quality_layer_every_number_counts_and_clouds_are_unknown():
    red = four_by_four(0.1)
    red[0, 0] = 0
    scene = block({RED: red})

    (seen,) = figures_of(
        scene, [box(0, 0, 4, 1)], roles=(RED,), indices=(), quality=None, rule="none"
    )

    assert (seen["none.valid_share"], seen["none.nodata"]) == (0.75, 0.25)
    assert seen["none.saturation"] == 0
    for unknown in ("cloud", "shadow", "snow", "water"):
        assert np.isnan(seen[f"none.{unknown}"])


def test_a_band_of_20_m_is_given_at_the_cells_of_10_m():
    nir = stored(np.linspace(0.2, 0.5, 16).reshape(4, 4))
    coarse = stored([[0.1, 0.2], [0.3, 0.4]])
    scene = block({NIR: nir, SWIR16: coarse.repeat(2, axis=0).repeat(2, axis=1)}, CLEAR)

    (seen,) = figures_of(scene, [box(1, 0, 3, 1)], roles=(NIR, SWIR16), indices=(NDMI,))

    # Two cells of 10 m, one in each of the upper cells of 20 m.
    by_cell = [(0.22 - 0.1) / (0.22 + 0.1), (0.24 - 0.2) / (0.24 + 0.2)]
    assert seen["ndmi.mean"] == pytest.approx(np.mean(by_cell), rel=1e-6)
    assert seen["swir16.mean"] == pytest.approx(0.15, rel=1e-6)


def test_a_smaller_band_given_as_floats_is_unknown_where_it_has_no_cell():
    nir = four_by_four(0.3)
    swir = four_by_four(0.1).astype(np.float32)
    swir[:, 2:] = np.nan
    scene = block({NIR: nir, SWIR16: swir}, CLEAR)

    (seen,) = figures_of(scene, [box(0, 0, 4, 1)], roles=(NIR, SWIR16), indices=(NDMI,))

    assert seen["clear.valid_share"] == 1
    assert seen["ndmi.pixels"] == 2
    assert seen["ndmi.mean"] == np.float32(0.5)


@pytest.mark.parametrize("mark", [-9999.0, -3.4028234663852886e38, -1.7e308, 0.1, np.nan])
def test_a_float_files_mark_for_nodata_is_no_number(mark):
    with np.errstate(over="ignore"):
        gone = np.float64(mark).astype(np.float32)
    red = np.full((4, 4), 0.25, np.float32)
    red[0, 0] = gone
    red[0, 1] = np.inf
    scene = block({RED: red}, CLEAR, scale=1.0, offset=0.0, nodata=mark, saturated=None)

    (seen,) = figures_of(scene, [box(0, 0, 4, 1)], roles=(RED,), indices=())

    assert seen["red.mean"] == 0.25
    assert (seen["clear.valid_share"], seen["clear.nodata"]) == (0.5, 0.5)


def test_an_index_without_its_bands_is_skipped_with_the_reason():
    scene = block({NIR: four_by_four(0.3), SWIR16: four_by_four(0.1)}, CLEAR)

    seen = observed(scene, [box(0, 0, 4, 4)], roles=(NIR, SWIR16), indices=(NDVI, NDMI, EVI))

    assert seen.measured == ("ndmi",)
    assert set(seen.skipped) == {"ndvi", "evi"}
    assert "red" in seen.skipped["ndvi"]
    assert "red" in seen.skipped["evi"]
    assert "blue" in seen.skipped["evi"]
    assert not any(column.startswith(("ndvi.", "evi.")) for column in seen.columns)


def test_the_columns_are_look_then_indices_then_bands():
    columns = columns_for((RED, NIR), (NDMI, NDVI), "clear")

    assert columns == (
        *(f"clear.{figure}" for figure in LOOK_FIGURES),
        *(f"ndvi.{stat}" for stat in INDEX_STATS),
        *(f"red.{stat}" for stat in BAND_STATS),
        *(f"nir.{stat}" for stat in BAND_STATS),
    )


def test_the_figures_have_the_columns_that_were_announced():
    zones = [box(0, 0, 4, 4), box(1, 1, 2, 2)]
    scene = block({RED: four_by_four(0.1), NIR: four_by_four(0.3)}, CLEAR)

    seen = observed(scene, zones, roles=(RED, NIR))

    assert seen.columns == columns_for((RED, NIR), (NDVI,), "clear")
    assert seen.figures.shape == (2, len(seen.columns))
    assert seen.figures.dtype == np.float32


def test_no_zones_give_no_rows():
    scene = block({RED: four_by_four(0.1)}, CLEAR)

    seen = observed(scene, [], roles=(RED,), indices=())

    assert seen.figures.shape == (0, len(seen.columns))


def test_parcels_of_more_cells_than_fit_one_batch_are_each_as_alone():
    rows, cols = 300, 900
    numbers = np.random.default_rng(20_260_101)
    red, nir = (numbers.integers(1_100, 6_000, (rows, cols), dtype=np.uint16) for _ in "rn")
    quality = numbers.choice([VEGETATION, CLOUD], size=(rows, cols))
    scene = block({RED: red, NIR: nir}, quality)
    fields = [box(0, 0, 299.5, 300), box(299.5, 0, 600, 300), box(600, 0, 900, 299.5)]

    def figures(some):
        plan = plan_on(some, rows, cols)
        seen = observe(
            scene.strips(plan), plan, roles=(RED, NIR), indices=(NDVI,), quality=SCL, rule="clear"
        )
        return seen.figures

    together = figures(fields)

    assert together[0, 1] > 40_000  # usable cells
    np.testing.assert_array_equal(together, np.concatenate([figures([one]) for one in fields]))


def with_bits(scene, bits, **bit_of):
    """The scene with a layer of saturation bits, and each band's bit in it."""
    own = {BandRole(role): bit for role, bit in bit_of.items()}
    return dataclasses.replace(scene, bits=np.asarray(bits, dtype=np.uint16), bit_of=own)


def test_a_band_whose_bit_is_set_is_unknown_for_that_band_only():
    bits = np.zeros((4, 4), np.uint16)
    # Red in the first cell, near-infrared in the second, both and another in the third.
    bits[0, :3] = 0b00_1000, 0b01_0000, 0b01_1010
    scene = block({RED: four_by_four(0.1), NIR: four_by_four(0.3)}, CLEAR)
    scene = with_bits(scene, bits, red=3, nir=4)

    (seen,) = figures_of(scene, [box(0, 0, 4, 1)], roles=(RED, NIR))

    assert seen["clear.valid_share"] == 0.75
    assert seen["clear.saturation"] == 0.25
    assert seen["ndvi.pixels"] == 1
    assert seen["ndvi.mean"] == np.float32(0.5)
    assert seen["red.mean"] == np.float32(0.1)


def test_a_gap_stays_a_gap_whatever_its_saturation_bit_says():
    red = four_by_four(0.1)
    red[0, 0] = 0
    scene = with_bits(block({RED: red}, CLEAR), np.full((4, 4), 8), red=3)

    (seen,) = figures_of(scene, [box(0, 0, 2, 1)], roles=(RED,), indices=())

    assert seen["clear.nodata"] == seen["clear.saturation"] == 0.5


def test_a_band_without_a_bit_is_not_touched_by_the_layer_of_bits():
    scene = with_bits(block({RED: four_by_four(0.1)}, CLEAR), np.full((4, 4), 0xFFF))

    (seen,) = figures_of(scene, [box(0, 0, 2, 1)], roles=(RED,), indices=())

    assert seen["clear.valid_share"] == 1


def test_a_clear_cell_near_cloud_counts_as_cloud_and_a_lost_one_keeps_its_reason():
    quality = [[CLOUD, VEGETATION, SHADOW, WATER], *[[VEGETATION] * 4] * 3]
    near = np.zeros((4, 4), dtype=bool)
    near[0] = True
    scene = block({RED: four_by_four(0.1)}, quality, near_cloud=near)

    (clear,) = figures_of(scene, [box(0, 0, 4, 1)], roles=(RED,), indices=())
    (land,) = figures_of(scene, [box(0, 0, 4, 1)], roles=(RED,), indices=(), rule="land")

    assert clear["clear.cloud"] == land["land.cloud"] == 0.75
    assert clear["clear.shadow"] == 0.25
    assert clear["clear.valid_share"] == 0
    assert clear["clear.water"] == 0.25


NDSI = INDICES["ndsi"]
GREEN = BandRole.GREEN


def snowy():
    """Bare ground beside snow, (0.1, 0.3) and (0.8, 0.1) in green and 1.6 µm, and a cloud."""
    quality = [[5, 5, SNOW, CLOUD], *[[VEGETATION] * 4] * 3]
    green, swir16 = four_by_four(0.1), four_by_four(0.3)
    green[0, 2:], swir16[0, 2:] = stored([0.8, 0.8]), stored([0.1, 0.1])
    return block({GREEN: green, SWIR16: swir16}, quality)


def test_an_index_of_snow_is_of_snow_cells_too_and_has_a_look_of_its_own():
    (seen,) = figures_of(snowy(), [box(0, 0, 4, 1)], roles=(GREEN, SWIR16), indices=(NDSI,))

    assert seen["clear.valid_share"] == 0.5
    assert seen["clear.snow"] == seen["clear.cloud"] == 0.25
    assert seen["surface.valid_share"] == 0.75
    assert seen["surface.snow"] == 0
    assert seen["surface.cloud"] == 0.25
    # (0.1 - 0.3) / 0.4 twice and (0.8 - 0.1) / 0.9 once; Hall et al. 1995.
    assert seen["ndsi.pixels"] == 3
    assert seen["ndsi.mean"] == pytest.approx((-0.5 - 0.5 + 7 / 9) / 3, rel=1e-6)
    assert seen["ndsi.max"] == np.float32(7 / 9)
    # The bands are of the scene's own rule.
    assert seen["green.mean"] == np.float32(0.1)


def test_an_index_of_the_scene_s_rule_does_not_notice_its_company():
    mndwi = INDICES["mndwi"]
    alone, beside = (
        figures_of(snowy(), [box(0, 0, 4, 1)], roles=(GREEN, SWIR16), indices=indices)[0]
        for indices in ((mndwi,), (NDSI, mndwi))
    )

    assert alone["mndwi.mean"] == np.float32(-0.5)
    assert {column: beside[column] for column in alone} == alone


@pytest.mark.parametrize(
    ("quality", "rule"),
    [
        (None, "none"),
        (dataclasses.replace(SCL, rules={"clear": SCL.rules["clear"]}), "clear"),
        (SCL, "surface"),
    ],
    ids=["no layer", "a layer without that rule", "that rule"],
)
def test_an_index_s_own_rule_needs_a_layer_that_has_it_and_is_not_the_scene_s(quality, rule):
    parcel = [box(0, 0, 4, 1)]

    seen = observed(
        snowy(), parcel, roles=(GREEN, SWIR16), indices=(NDSI,), quality=quality, rule=rule
    )

    assert seen.rules == {}
    assert seen.columns == columns_for((GREEN, SWIR16), (NDSI,), rule)
    assert {column.split(".")[0] for column in seen.columns} == {rule, "ndsi", "green", "swir16"}


def test_what_was_read_by_another_rule_is_told():
    seen = observed(snowy(), [box(0, 0, 4, 1)], roles=(GREEN, SWIR16), indices=(NDSI,))

    assert seen.rules == {"ndsi": "surface"}
    assert seen.columns == columns_for((GREEN, SWIR16), (NDSI,), "clear", seen.rules)
    assert seen.columns[: 2 * len(LOOK_FIGURES)] == (
        *(f"clear.{figure}" for figure in LOOK_FIGURES),
        *(f"surface.{figure}" for figure in LOOK_FIGURES),
    )
