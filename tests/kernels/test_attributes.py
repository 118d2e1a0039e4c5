"""Attributes as columns: dummies, what is missing, and which columns say nothing new."""

from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.kernels.panels import PROPERTY
from tillwright.kernels.attributes import code_attributes, find_basis

WOODS = np.array(["oak", None, "ash", "elm", "oak", ""], dtype=object)
SIZES = np.array([4.0, 5.0, np.nan, 7.0, np.inf, 9.0])


def test_categories_are_the_dummies_of_a_library_less_the_first() -> None:
    woods: NDArray[Any] = np.random.default_rng(0).choice(["oak", "ash", "elm", "fir"], 50)
    found = code_attributes({}, {"wood": woods})
    expected = pd.get_dummies(pd.Series(woods), prefix="wood", prefix_sep="=", drop_first=True)
    assert found.names == tuple(expected.columns)
    np.testing.assert_array_equal(found.columns, expected.to_numpy(dtype=float))


def test_numbers_come_first_and_as_they_are() -> None:
    found = code_attributes({"size": np.array([3.0, 1.0])}, {"wood": np.array(["oak", "ash"])})
    assert found.names == ("size", "wood=oak")
    assert found.columns.tolist() == [[3.0, 1.0], [1.0, 0.0]]


def test_a_missing_category_is_the_last_and_a_missing_number_leaves_its_product_out() -> None:
    found = code_attributes({"size": SIZES}, {"wood": WOODS})
    assert found.names == ("size", "wood=elm", "wood=oak", "wood (missing)")
    assert found.left_out == 2
    assert np.isnan(found.columns[[2, 4]]).all()
    assert found.columns[[0, 1, 3, 5]].tolist() == [[4, 0, 1, 0], [5, 0, 0, 1], [7, 1, 0, 0], [9, 0, 0, 1]]


def test_a_missing_category_may_leave_its_product_out() -> None:
    found = code_attributes({"size": SIZES}, {"wood": WOODS}, missing="leave-out")
    assert found.names == ("size", "wood=elm", "wood=oak")
    assert np.flatnonzero(np.isfinite(found.columns).all(axis=1)).tolist() == [0, 3]
    assert found.left_out == 4


def test_a_category_that_all_products_share_has_no_column() -> None:
    assert code_attributes({}, {"wood": np.array(["oak"] * 3)}).columns.shape == (3, 0)


@PROPERTY
@given(st.integers(0, 10_000), st.integers(1, 6), st.integers(1, 4))
def test_kept_columns_span_all_and_their_number_is_the_rank(seed: int, columns: int, rank: int) -> None:
    rng = np.random.default_rng(seed)
    matrix = rng.normal(0, 1, (20, rank)) @ rng.normal(0, 1, (rank, columns))
    basis = find_basis(matrix, np.sqrt((matrix**2).sum(axis=0)))
    assert len(basis.kept) == np.linalg.matrix_rank(matrix, tol=1e-8) == min(rank, columns)
    assert sorted([*basis.kept, *basis.dropped]) == list(range(columns))
    kept = basis.vectors @ basis.triangle
    np.testing.assert_allclose(kept, matrix[:, basis.kept], atol=tolerances.TWIN)
    np.testing.assert_allclose(basis.vectors.T @ basis.vectors, np.eye(len(basis.kept)), atol=tolerances.EXACT)
    np.testing.assert_allclose(kept @ basis.combined, matrix[:, basis.dropped], atol=tolerances.AXIOM)


@pytest.mark.parametrize("scale", [1e-12, 1.0, 1e12])
def test_the_unit_of_a_column_does_not_decide_whether_it_is_dropped(scale: float) -> None:
    rng = np.random.default_rng(0)
    matrix = rng.normal(0, 1, (20, 3)) * [1.0, scale, 1.0]
    assert find_basis(matrix, np.sqrt((matrix**2).sum(axis=0))).kept.tolist() == [0, 1, 2]
