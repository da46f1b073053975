"""The catalogue of indices as the rest of the service reads it."""

import dataclasses
import re

import numpy as np
import pytest

from service.spectral.indices import INDICES, Index, normalised_difference, quotient

every_index = pytest.mark.parametrize("index", INDICES.values(), ids=INDICES)


@every_index
def test_an_entry_says_how_to_read_it(index: Index) -> None:
    for text in (index.title, index.domain, index.typical, index.rise, index.fall, index.source):
        assert text.strip()
    assert index.rise != index.fall


@every_index
def test_an_id_is_lower_case_and_the_key_of_its_entry(index: Index) -> None:
    assert re.fullmatch(r"[a-z][a-z0-9_]*", index.id)
    assert INDICES[index.id] is index


@every_index
def test_a_formula_names_its_bands_and_constants_and_nothing_else(index: Index) -> None:
    names = set(re.findall(r"[A-Za-z]\w*", index.formula)) - {"sqrt"}
    assert names == set(index.roles) | set(index.constants)


@every_index
def test_an_index_refuses_a_missing_band(index: Index) -> None:
    bands = {role: np.array([0.3]) for role in index.roles[1:]}
    with pytest.raises((TypeError, KeyError)):
        index.compute(**bands)


def test_the_indices_watched_by_default_are_those_of_the_contract() -> None:
    # Source: the HTTP contract, "Watched by default".
    assert [index.id for index in INDICES.values() if index.watched] == [
        "ndvi", "evi2", "savi", "ndre", "ndmi", "ndwi", "mndwi", "nbr", "nbr2", "ndsi", "bsi",
    ]  # fmt: skip


def test_the_version_changes_with_the_formula_and_with_a_constant_only() -> None:
    savi = INDICES["savi"]
    assert re.fullmatch(r"savi-[0-9a-f]{8}", savi.version)
    assert dataclasses.replace(savi, title="Another", watched=False).version == savi.version
    assert dataclasses.replace(savi, constants={"L": 1.0}).version != savi.version
    assert dataclasses.replace(savi, formula="nir-red").version != savi.version


def test_no_two_indices_share_a_version() -> None:
    assert len({index.version for index in INDICES.values()}) == len(INDICES)


def test_a_quotient_is_unknown_on_either_side_of_zero_and_not_beyond() -> None:
    denominator = np.array([0.0, -0.0, 9e-7, -9e-7, 1e-5, -1e-5])
    values = quotient(np.ones(6), denominator)
    np.testing.assert_array_equal(np.isnan(values), [True, True, True, True, False, False])


def test_a_quotient_in_half_precision_does_not_overflow() -> None:
    values = quotient(np.array([2.0, 2.0], np.float16), np.array([1e-5, 0.5], np.float16))
    np.testing.assert_array_equal(values, np.array([np.nan, 4.0], np.float16))


def test_a_normalised_difference_of_a_negative_reflectance_is_kept_beyond_1() -> None:
    assert normalised_difference(np.array([0.4]), np.array([-0.02]))[0] == pytest.approx(
        0.42 / 0.38
    )
