"""What must hold for every index, whatever the reflectances.

Basis: the algebra of the published formulas.
"""

import re
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from numpy.typing import NDArray

from service.spectral.indices import INDICES, Index, Pixels, quotient
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling

NORMALISED = [index for index in INDICES.values() if index.normalised]
PAIRS = [index for index in NORMALISED if len(index.roles) == 2]
FLOATS = (np.float16, np.float32, np.float64, np.longdouble)

every_index = pytest.mark.parametrize("index", INDICES.values(), ids=INDICES)
every_normalised = pytest.mark.parametrize(
    "index", NORMALISED, ids=[index.id for index in NORMALISED]
)
every_pair = pytest.mark.parametrize("index", PAIRS, ids=[index.id for index in PAIRS])

# Real products hold slightly negative reflectances and some above 1.
legal = st.floats(-0.2, 1.6)
physical = st.floats(0.0, 1.0)
bright = st.floats(0.01, 1.0)


def bands_of(
    index: Index, elements: st.SearchStrategy[float]
) -> st.SearchStrategy[dict[str, NDArray[np.float64]]]:
    pixels = hnp.arrays(np.float64, (2, 3), elements=elements)
    return st.fixed_dictionaries({role.value: pixels for role in index.roles})


def sides(index: Index) -> tuple[list[str], list[str]]:
    """Return the band roles before and after the minus of a normalised difference."""
    first, second = index.formula.split("/")[0].split("-")
    return re.findall(r"[a-z]\w*", first), re.findall(r"[a-z]\w*", second)


@every_index
def test_the_indices_called_normalised_are_those_that_are_bounded_and_free_of_scale(
    index: Index,
) -> None:
    random = np.random.default_rng(20260101)
    bands = {role: random.uniform(0.02, 0.6, 100) for role in index.roles}
    doubled = {role: 2.0 * pixels for role, pixels in bands.items()}
    free = np.allclose(index.compute(**doubled), index.compute(**bands), rtol=1e-12, atol=0)
    assert index.normalised == (free and index.valid_range == (-1.0, 1.0))


@every_normalised
@given(data=st.data())
def test_swapping_the_two_sides_of_a_normalised_difference_flips_its_sign(
    index: Index, data: st.DataObject
) -> None:
    bands = data.draw(bands_of(index, legal))
    first, second = sides(index)
    swap = dict(zip(first + second, second + first, strict=True))
    swapped = {role: bands[swap[role]] for role in bands}
    np.testing.assert_array_equal(index.compute(**swapped), -index.compute(**bands))


@every_normalised
@given(data=st.data(), scale=st.floats(0.01, 100.0))
def test_a_common_scale_leaves_a_normalised_difference(
    index: Index, data: st.DataObject, scale: float
) -> None:
    bands = data.draw(bands_of(index, bright))
    scaled = {role: scale * pixels for role, pixels in bands.items()}
    np.testing.assert_allclose(
        index.compute(**scaled), index.compute(**bands), rtol=1e-12, atol=1e-13
    )


@every_pair
@given(low=bright, rise=st.floats(0.01, 0.5), offset=st.floats(0.01, 0.5))
def test_a_common_offset_does_not_leave_a_normalised_difference(
    index: Index, low: float, rise: float, offset: float
) -> None:
    first, second = index.roles
    bands = {first: np.array([low + rise]), second: np.array([low])}
    moved = {role: pixels + offset for role, pixels in bands.items()}
    assert (index.compute(**bands) - index.compute(**moved))[0] > 1e-6


@pytest.mark.parametrize("name", ["evi", "evi2", "savi", "msavi"])
def test_an_index_with_a_soil_or_canopy_term_is_bound_to_reflectance(name: str) -> None:
    index = INDICES[name]
    typical = {"blue": 0.03, "red": 0.04, "nir": 0.42}
    bands = {role: np.array([typical[role]]) for role in index.roles}
    doubled = {role: 2.0 * pixels for role, pixels in bands.items()}
    assert abs(index.compute(**bands) - index.compute(**doubled))[0] > 0.05


@every_index
@given(data=st.data())
def test_reflectances_between_0_and_1_stay_in_the_valid_range(
    index: Index, data: st.DataObject
) -> None:
    values = index.compute(**data.draw(bands_of(index, physical)))
    low, high = index.valid_range
    known = values[~np.isnan(values)]
    assert low is None or (known >= low - 1e-9).all()
    assert high is None or (known <= high + 1e-9).all()


@every_index
@given(data=st.data())
def test_no_legal_reflectance_gives_an_infinity_or_a_numpy_warning(
    index: Index, data: st.DataObject
) -> None:
    bands = data.draw(bands_of(index, st.one_of(legal, st.sampled_from([0.0, -0.0, 1e-8, -1e-8]))))
    with np.errstate(divide="raise", invalid="raise", over="raise"):
        values = index.compute(**bands)
    assert not np.isinf(values).any()


@every_pair
@given(steps=st.integers(-3000, 3000), scale=st.sampled_from([1e-4, 2e-4, 2.75e-5, 1e-5]))
def test_a_denominator_that_vanishes_gives_unknown_also_where_rounding_moved_it(
    index: Index, steps: int, scale: float
) -> None:
    # Numbers on either side of the one that stands for reflectance 0 add up to nothing.
    scaling = Scaling(scale=scale, offset=-5000 * scale)
    first, second = index.roles
    bands = {
        first: scaling.reflectance(np.array([5000 + steps], dtype=np.int32)),
        second: scaling.reflectance(np.array([5000 - steps], dtype=np.int32)),
    }
    with np.errstate(all="raise"):
        assert np.isnan(index.compute(**bands)).all()


VANISHING: dict[str, Callable[[float], dict[str, float]]] = {
    "evi": lambda red: {"red": red, "nir": 0.5, "blue": (1.5 + 6.0 * red) / 7.5},
    "evi2": lambda red: {"red": red, "nir": -1.0 - 2.4 * red},
    "savi": lambda red: {"red": red, "nir": -0.5 - red},
    "bsi": lambda red: {"red": red, "nir": 0.3, "blue": -0.5 - red, "swir16": 0.2},
}


@pytest.mark.parametrize("name", VANISHING)
@given(red=legal)
def test_the_vanishing_denominator_of_a_longer_formula_gives_unknown(name: str, red: float) -> None:
    bands = {role: np.array([value]) for role, value in VANISHING[name](red).items()}
    with np.errstate(divide="raise", invalid="raise", over="raise"):
        assert np.isnan(INDICES[name].compute(**bands)).all()


@given(red=st.floats(-0.2, -0.01))
def test_msavi_is_unknown_where_its_root_is_of_a_negative_number(red: float) -> None:
    with np.errstate(all="raise"):
        values = INDICES["msavi"].compute(nir=np.array([0.5, 0.9]), red=np.array([red, 0.1]))
    np.testing.assert_array_equal(np.isnan(values), [True, False])


@every_index
@given(data=st.data())
def test_an_unknown_band_gives_an_unknown_index_in_that_cell_only(
    index: Index, data: st.DataObject
) -> None:
    bands = data.draw(bands_of(index, bright))
    role = data.draw(st.sampled_from(index.roles))
    whole = index.compute(**bands)
    holed = {**bands, role: bands[role].copy()}
    holed[role][1, 2] = np.nan
    with np.errstate(all="raise"):
        values = index.compute(**holed)
    assert np.isnan(values[1, 2])
    whole[1, 2] = np.nan
    np.testing.assert_array_equal(values, whole)


@every_index
@pytest.mark.parametrize("dtype", FLOATS)
@settings(max_examples=20)
@given(data=st.data())
def test_the_shape_and_float_type_of_the_bands_are_kept_and_the_bands_untouched(
    index: Index, dtype: type[np.floating], data: st.DataObject
) -> None:
    bands: dict[str, Pixels] = {
        role: pixels.astype(dtype) for role, pixels in data.draw(bands_of(index, legal)).items()
    }
    before = {role: pixels.copy() for role, pixels in bands.items()}
    values = index.compute(**bands)
    assert values.dtype == np.dtype(dtype)
    assert values.shape == (2, 3)
    assert not np.isinf(values).any()
    for role, pixels in bands.items():
        np.testing.assert_array_equal(pixels, before[role])


@every_index
@given(data=st.data())
def test_single_precision_agrees_with_double_on_land(index: Index, data: st.DataObject) -> None:
    # Plant, soil and water reflectances; away from a vanishing denominator.
    bands = data.draw(bands_of(index, st.floats(0.02, 0.6)))
    single = {role: pixels.astype(np.float32) for role, pixels in bands.items()}
    double = {role: pixels.astype(np.float64) for role, pixels in single.items()}
    if index.id == "evi":
        denominator = double["nir"] + 6.0 * double["red"] - 7.5 * double["blue"] + 1.0
        single = {role: np.where(abs(denominator) < 0.1, np.nan, p) for role, p in single.items()}
        double = {role: np.where(abs(denominator) < 0.1, np.nan, p) for role, p in double.items()}
    np.testing.assert_allclose(
        index.compute(**single), index.compute(**double), rtol=1e-4, atol=1e-5
    )


@given(
    numerator=hnp.arrays(np.float64, 5, elements=st.floats(-10, 10)),
    denominator=hnp.arrays(np.float64, 5, elements=st.floats(-10, 10)),
)
def test_a_quotient_is_division_except_where_the_denominator_vanishes(
    numerator: Pixels, denominator: Pixels
) -> None:
    values = quotient(numerator, denominator)
    known = np.abs(denominator) >= 1e-6
    np.testing.assert_array_equal(np.isnan(values), ~known)
    np.testing.assert_array_equal(values[known], numerator[known] / denominator[known])


@given(
    numbers=hnp.arrays(np.uint16, 8),
    scale=st.floats(1e-5, 1.0),
    offset=st.floats(-1.0, 1.0),
)
def test_scaling_is_undone_by_its_inverse(
    numbers: NDArray[np.uint16], scale: float, offset: float
) -> None:
    reflectance = Scaling(scale=scale, offset=offset).reflectance(numbers)
    assert reflectance.dtype == np.float64
    np.testing.assert_array_equal(np.rint((reflectance - offset) / scale), numbers)


def test_band_roles_name_the_arguments_of_every_index() -> None:
    assert {role for index in INDICES.values() for role in index.roles} <= set(BandRole)
