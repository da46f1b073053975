"""Baselines as a whole: fitting, reading on any day, and keeping."""

import io

import numpy as np
import pytest

from service.seasons.baseline import BAND, Baselines, Basis, expected_at
from service.seasons.fitting import fit_baselines
from service.seasons.history import HAZE, History, with_haze
from tests.simulated_seasons import simulate


def flat_history(offset: float) -> History:
    """Nine parcels at 0.5 for three seasons of barley; parcel A lies off by a constant."""
    days = list(range(0, 360, 10))
    rows = [
        (parcel, season, day)
        for season in (2021, 2022, 2023)
        for day in days
        for parcel in "ABCDEFGHI"
    ]
    # Steps that alternate keep the median at 0.5 and the spread above zero.
    step = {parcel: 0.02 * (at - 4) for at, parcel in enumerate("BCDEFGHI", start=1)}
    values = [[0.5 + (offset if p == "A" else step[p])] for p, _, _ in rows]
    return History.of_rows(
        parcels=[parcel for parcel, _, _ in rows],
        crops=["barley"] * len(rows),
        seasons=[season for _, season, _ in rows],
        days=[day for _, _, day in rows],
        passes=[season * 1000 + day for _, season, day in rows],
        measures=["ndvi"],
        values=np.array(values),
    )


def test_a_parcels_lasting_offset_is_learned_up_to_its_shrinkage() -> None:
    found = fit_baselines(flat_history(-0.10))
    expected = expected_at(found, parcel="A", crop="barley", measure="ndvi", days=[180])
    # Three seasons, each with looks on the day, ±10 (K = 0.75): ΣK = 3 · 2.5 = 7.5. The
    # crop's median is that of eight steps -0.06 … 0.08 and of A: 0.0.
    usual = found.usual["barley"][180, 0]
    assert usual == pytest.approx(0.5, abs=1e-9)
    assert expected.mid[0] - usual == pytest.approx(-0.10 * 7.5 / 11.5, abs=1e-6)
    assert expected.basis == (Basis.BLENDED,)
    assert (expected.seasons, expected.crop_seasons) == ((2021, 2022, 2023),) * 2


def test_the_band_is_drawn_about_the_expected_value() -> None:
    found = fit_baselines(flat_history(-0.10))
    expected = expected_at(found, parcel="B", crop="barley", measure="ndvi", days=[100, 180])
    spread = found.spread["barley"][[100, 180], 0]
    np.testing.assert_allclose(expected.high - expected.mid, BAND * spread)
    np.testing.assert_allclose(expected.mid - expected.low, BAND * spread)


def test_an_extreme_offset_is_winsorised() -> None:
    far = fit_baselines(flat_history(-0.60))
    further = fit_baselines(flat_history(-0.65))
    of_a = far.own.codes(["A"], ["barley"])
    np.testing.assert_array_equal(
        far.own.offsets_on(180, of_a)[0], further.own.offsets_on(180, of_a)[0]
    )


def test_an_unknown_crop_or_measure_has_no_expected_value() -> None:
    found = fit_baselines(flat_history(0.0))
    for crop, measure in (("oats", "ndvi"), ("barley", "nbr")):
        expected = expected_at(found, parcel="A", crop=crop, measure=measure, days=[1, 2])
        assert np.isnan(expected.mid).all()
        assert expected.basis == (Basis.COHORT,) * 2


def test_unlabelled_looks_shape_no_baseline_of_a_crop() -> None:
    history = flat_history(0.0)
    looks = history.parcel.size
    mixed = History.of_rows(
        parcels=[history.parcels[at] for at in history.parcel] * 2,
        crops=["barley"] * looks + [None] * looks,
        seasons=[*history.season] * 2,
        days=[*history.day] * 2,
        passes=[*history.pass_at] * 2,
        measures=["ndvi"],
        values=np.concatenate([history.values, history.values + 0.3]),
    )
    found, without = fit_baselines(mixed), fit_baselines(history)
    for name in ("usual", "spread"):
        np.testing.assert_array_equal(
            getattr(found, name)["barley"], getattr(without, name)["barley"]
        )
    codes = [each.own.codes(["A"], ["barley"]) for each in (found, without)]
    np.testing.assert_array_equal(
        found.own.offsets_on(180, codes[0])[0], without.own.offsets_on(180, codes[1])[0]
    )


def test_haze_is_blue_less_half_of_red() -> None:
    # Zhang, Guindon and Cihlar 2002, with the slope of 0.5 that the design fixes.
    measures, values = with_haze(("red", "blue"), np.array([[0.08, 0.05]]))
    assert measures == ("red", "blue", HAZE)
    assert values[0, 2] == pytest.approx(0.01)
    assert with_haze(("red",), np.array([[0.08]]))[0] == ("red",)


def test_baselines_are_kept_in_arrays_and_read_again() -> None:
    found = fit_baselines(simulate(1, per_crop=4).history)
    file = io.BytesIO()
    np.savez_compressed(file, **found.to_arrays())
    file.seek(0)
    read = Baselines.from_arrays(np.load(file, allow_pickle=False))
    assert read.version == found.version
    assert (read.measures, read.seasons, read.own.pairs) == (
        found.measures,
        found.seasons,
        found.own.pairs,
    )
    codes = found.own.codes(["barley-00000", "maize-00004"], ["barley", "maize"])
    np.testing.assert_array_equal(
        read.own.offsets_on(200, codes)[0], found.own.offsets_on(200, codes)[0]
    )


def test_baselines_of_no_history_are_kept_too() -> None:
    found = fit_baselines(History.empty(["ndvi", "blue", "red"]))
    read = Baselines.from_arrays(found.to_arrays())
    assert read.version == found.version
    assert read.measures == ("ndvi", "blue", "red", HAZE)
    assert not read.knows("barley", 10)


def test_another_value_makes_another_version() -> None:
    assert fit_baselines(flat_history(0.0)).version != fit_baselines(flat_history(0.01)).version


@pytest.mark.parametrize("seed", [1, 2])
def test_the_order_of_looks_changes_no_bit(seed: int) -> None:
    history = simulate(seed, per_crop=5).history
    order = np.random.default_rng(seed).permutation(history.parcel.size)
    shuffled = History.of_rows(
        parcels=[history.parcels[at] for at in history.parcel[order]],
        crops=[history.crops[at] for at in history.crop[order]],
        seasons=[*history.season[order]],
        days=[*history.day[order]],
        passes=[*history.pass_at[order]],
        measures=history.measures,
        values=history.values[order],
    )
    assert fit_baselines(shuffled).version == fit_baselines(history).version
