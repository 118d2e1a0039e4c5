"""Attributes of products as numeric columns, and which of a matrix's columns say nothing new."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from tillwright.kernels.network import Flags
from tillwright.kernels.pairs import Array, Positions

Missing: TypeAlias = Literal["category", "leave-out"]

# Rounding leaves a collinear column some 1e-13 of its length; one that keeps less than this share would
# give a coefficient with fewer than half the digits of a double.
COLLINEAR = 1e-9


@dataclass(frozen=True, slots=True)
class Design:
    """Attributes as columns: (N, K) `columns`, NaN all along the row of a product left out, and K `names`."""

    columns: Array
    names: tuple[str, ...]

    @property
    def left_out(self) -> int:
        """Number of products without a usable value in some attribute."""
        return int(np.count_nonzero(~find_complete(self.columns)))


@dataclass(frozen=True, slots=True)
class Basis:
    """Columns kept and dropped of a matrix, and what rebuilds them.

    `kept` (K',) and `dropped` (D,) are positions. The kept columns are `vectors` (R, K') @ `triangle`
    (K', K'), the vectors orthonormal; the dropped ones are the kept ones @ `combined` (K', D).
    """

    kept: Positions
    dropped: Positions
    vectors: Array
    triangle: Array
    combined: Array


def code_attributes(
    numeric: Mapping[str, Array], categorical: Mapping[str, NDArray[Any]], *, missing: Missing = "category"
) -> Design:
    """Design columns of N products: each numeric attribute as it is, each category but the first as a dummy.

    Parameters
    ----------
    numeric : (N,) arrays by name; a product with a value that is not finite is left out.
    categorical : (N,) arrays of text by name; None or "" = missing. Categories are sorted, and the first
        has no column; a dummy is called `name=category`.
    missing : "category" makes products without a category one of their own, `name (missing)`, the
        last; "leave-out" leaves them out.

    Reference: common practice.
    """
    names = list(numeric)
    columns = [np.where(np.isfinite(values), values, np.nan).astype(np.float64) for values in numeric.values()]
    for name, values in categorical.items():
        dummies, labels = _code_categories(name, values, missing)
        columns += dummies
        names += labels
    products = len(next(iter([*numeric.values(), *categorical.values()]), ()))
    design = np.column_stack(columns) if columns else np.zeros((products, 0))
    absent = np.zeros(products, dtype=bool)
    if missing == "leave-out":
        for values in categorical.values():
            absent |= _find_missing(values)
    design[absent | ~np.isfinite(design).all(axis=1)] = np.nan
    return Design(design, tuple(names))


def find_complete(design: Array) -> Flags:
    """(N,) whether every attribute of a product has a value, from the (N, K) design."""
    return np.asarray(np.isfinite(design).all(axis=1), dtype=bool)


def find_basis(matrix: Array, lengths: Array) -> Basis:
    """Columns of the (R, K) matrix that are no combination of those to their left, and their QR factors.

    Householder QR makes the matrix (K, K); then Gram–Schmidt from the left, each column projected twice: of columns
    that say the same the first is kept. A column is dropped if what is new in it is shorter than `COLLINEAR`
    times its entry in `lengths` (K,), the length that it had before means were taken out of it.

    Reference: Björck (1996), Numerical Methods for Least Squares Problems, §2.4.
    """
    outer, small = np.linalg.qr(matrix / np.where(lengths > 0, lengths, 1.0))
    columns = matrix.shape[1]
    vectors, triangle = np.empty(small.shape), np.zeros((columns, columns))
    kept: list[int] = []
    dropped: list[int] = []
    for position in range(columns):
        rank = len(kept)
        known = vectors[:, :rank]
        new = small[:, position]
        first = known.T @ new
        new = new - known @ first
        second = known.T @ new
        new -= known @ second
        length = float(np.sqrt(new @ new))
        triangle[:rank, position] = first + second
        if length <= COLLINEAR:
            dropped.append(position)
        else:
            triangle[rank, position] = length
            vectors[:, rank] = new / length
            kept.append(position)
    rank = len(kept)
    scaled = triangle[:rank] * lengths
    left, right = scaled[:, kept], scaled[:, dropped]
    combined = np.linalg.solve(left, right).astype(np.float64)
    return Basis(_positions(kept), _positions(dropped), outer @ vectors[:, :rank], left, combined)


def _code_categories(name: str, values: NDArray[Any], missing: Missing) -> tuple[list[Array], list[str]]:
    """Dummies of one attribute, all but the first category's, and their names."""
    absent = _find_missing(values)
    present, codes = np.unique(values[~absent].astype(str), return_inverse=True)
    category = np.full(len(values), len(present))
    category[~absent] = codes
    labels = [f"{name}={label}" for label in present]
    if missing == "category" and absent.any():
        labels.append(f"{name} (missing)")
    return [(category == code).astype(np.float64) for code in range(1, len(labels))], labels[1:]


def _find_missing(values: NDArray[Any]) -> Flags:
    if values.dtype.kind != "O":
        return np.asarray(values.astype(str) == "", dtype=bool)
    return np.fromiter((value is None or value == "" for value in values), dtype=bool, count=len(values))


def _positions(found: Sequence[int]) -> Positions:
    return np.array(found, dtype=np.intp)
