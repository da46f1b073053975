"""From stored numbers to reflectance."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from service.spectral.scaling import Scaling


@pytest.mark.parametrize("dtype", [np.uint8, np.uint16, np.int16, np.int32, np.float32])
def test_reflectance_is_in_double_precision_whatever_the_file_holds(dtype: type) -> None:
    numbers: NDArray[np.integer] = np.array([[0, 40], [100, 120]], dtype=dtype)
    reflectance = Scaling(scale=0.01, offset=-0.1).reflectance(numbers)
    assert reflectance.dtype == np.float64
    np.testing.assert_allclose(reflectance, [[-0.1, 0.3], [0.9, 1.1]], rtol=0, atol=1e-15)


def test_a_large_unsigned_number_does_not_wrap() -> None:
    reflectance = Scaling(scale=1e-4, offset=-0.1).reflectance(np.array([65535], np.uint16))
    assert reflectance[0] == pytest.approx(6.4535, abs=1e-12)


def test_numbers_that_are_not_finite_become_unknown_without_a_warning() -> None:
    numbers = np.array([np.nan, np.inf, -np.inf, 0.25], np.float32)
    with np.errstate(all="raise"):
        reflectance = Scaling(scale=1.0, offset=0.0).reflectance(numbers)
    np.testing.assert_array_equal(reflectance, [np.nan, np.nan, np.nan, 0.25])


def test_the_stored_numbers_stay_as_they_are() -> None:
    numbers = np.array([np.inf, 0.5])
    Scaling(scale=2.0, offset=1.0).reflectance(numbers)
    np.testing.assert_array_equal(numbers, [np.inf, 0.5])


@pytest.mark.parametrize(
    ("scale", "offset"),
    [(0.0, 0.0), (-1e-4, 0.0), (math.nan, 0.0), (math.inf, 0.0), (1e-4, math.nan)],
)
def test_a_scaling_that_cannot_give_reflectance_is_refused(scale: float, offset: float) -> None:
    with pytest.raises(ValueError, match="finite scale above 0"):
        Scaling(scale=scale, offset=offset)
