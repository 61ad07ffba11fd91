"""The table, read in place: products, moments and single columns.

A design answers four questions about X (n, p) and copies nothing of it but the columns
it is asked for:

* ``correlate(V)``: V X for a block of row vectors V (B, n), in double;
* ``centres``: the column means of the full table (of its rows that count), in double;
* ``moments(W)``: for weights W (B, n) that sum to one per row, the weighted means m and
  standard deviations s of every column, two-pass about the table's centres c:
  d = W (X - c),  s^2 = W (X - c)^2 - d^2,  m = c + d.
  Where s^2 lost more than half its digits to cancellation (a column that is constant
  under these weights but not in the table) it is formed again about m itself;
* ``gather(columns, centred)``: those columns as contiguous rows, in double.

Tables of float32, sparse tables and memory maps are walked in blocks of columns of a few
megabytes, so private memory stays small whatever their size.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from sparsesel.engine import screening

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Bytes of one block of columns in double: small enough to stay in a second-level cache's
# neighbourhood, large enough that a matrix product over it runs at full speed.
_BLOCK_BYTES = 4 << 20
# Below this share of the second moment about the table's centre a variance has lost half
# of its digits to cancellation.
_CANCELLED = 1e-8


@dataclass(frozen=True)
class Moments:
    """Weighted means and standard deviations, both (B, p)."""

    mean: FloatArray
    scale: FloatArray


class DesignMatrix:
    """What the solvers ask of a table; see the module's head."""

    def __init__(self, table: Any, rows: NDArray[np.bool_] | None = None) -> None:
        self.table = table
        self._rows = rows
        self.n_rows, self.n_columns = table.shape
        self.dtype = table.dtype

    def counting(self, rows: NDArray[np.bool_]) -> DesignMatrix:
        """The same table whose centres and largest values come from these rows only.

        Rows without weight anywhere must have no influence, however large.
        """
        return self if rows.all() else type(self)(self.table, rows)

    @property
    def rounding(self) -> float:
        """The relative size below which a standard deviation counts as rounding error."""
        return 1e-5 if self.dtype == np.float32 else 1e-10

    def _blocks(self) -> list[slice]:
        width = max(1, _BLOCK_BYTES // (8 * max(1, self.n_rows)))
        return [
            slice(start, min(start + width, self.n_columns))
            for start in range(0, self.n_columns, width)
        ]

    def _dense(self, columns: slice | IntArray) -> FloatArray:
        """The named columns (n, m) in double."""
        raise NotImplementedError

    def correlate(self, rows: FloatArray) -> FloatArray:
        """``rows`` (B, n) times X: (B, p)."""
        out = np.empty((rows.shape[0], self.n_columns))
        for block in self._blocks():
            out[:, block] = rows @ self._dense(block)
        return out

    def correlate_found(
        self,
        problems: IntArray,
        weights: FloatArray,
        residual: FloatArray,
        found: IntArray,
        totals: IntArray,
        values: FloatArray,
    ) -> None:
        """Write x_j'W r for the columns found[b, :totals[b]] of every named problem."""
        for b in problems:
            count = totals[b]
            row = weights[b] * residual[b]
            values[b, :count] = row @ self._dense(found[b, :count])

    @cached_property
    def _extremes(self) -> tuple[FloatArray, FloatArray]:
        centres = np.empty(self.n_columns)
        largest = np.empty(self.n_columns)
        for block in self._blocks():
            values = self._dense(block)
            values = values if self._rows is None else values[self._rows]
            centres[block] = values.mean(axis=0)
            largest[block] = np.abs(values).max(axis=0)
        return centres, largest

    @property
    def centres(self) -> FloatArray:
        """Column means of the full table (p,)."""
        return self._extremes[0]

    @property
    def largest(self) -> FloatArray:
        """Largest absolute value of every column (p,)."""
        return self._extremes[1]

    def moments(self, weights: FloatArray) -> Moments:
        """Weighted means and standard deviations of every column, one row per problem."""
        shape = (weights.shape[0], self.n_columns)
        mean, scale = np.empty(shape), np.empty(shape)
        for block in self._blocks():
            values = self._dense(block) - self.centres[block]
            shift = weights @ values
            second = weights @ np.square(values)
            variance = second - np.square(shift)
            lost = np.flatnonzero((variance < _CANCELLED * second).any(axis=0))
            if lost.size:
                variance[:, lost] = _variance_about_own_mean(weights, values[:, lost])
            mean[:, block] = shift + self.centres[block]
            scale[:, block] = np.sqrt(np.maximum(variance, 0.0))
        return Moments(mean, scale)

    def gather(self, columns: IntArray, centred: bool) -> FloatArray:
        """The named columns as rows (m, n), contiguous, in double; less centres or as is."""
        values = self._dense(columns)
        return np.ascontiguousarray((values - self.centres[columns] if centred else values).T)


def read_only(array: NDArray) -> NDArray:
    """A view that kernels take: read-only, so that one specialisation serves every table."""
    view = np.asarray(array).view()
    view.flags.writeable = False
    return view


def _variance_about_own_mean(weights: FloatArray, values: FloatArray) -> FloatArray:
    shift = weights @ values
    return np.stack(
        [row @ np.square(values - centre) for row, centre in zip(weights, shift, strict=True)]
    )


class DenseDesign(DesignMatrix):
    """A float32 or float64 array in C or F order, a memory map included."""

    def _dense(self, columns: slice | IntArray) -> FloatArray:
        return np.asarray(self.table[:, columns], dtype=np.float64)

    def correlate(self, rows: FloatArray) -> FloatArray:
        if self.dtype == np.float64:
            return rows @ self.table
        return super().correlate(rows)

    def correlate_found(
        self,
        problems: IntArray,
        weights: FloatArray,
        residual: FloatArray,
        found: IntArray,
        totals: IntArray,
        values: FloatArray,
    ) -> None:
        if not self.table.flags.f_contiguous:
            super().correlate_found(problems, weights, residual, found, totals, values)
            return
        screening.dense_dots(
            problems, read_only(self.table.T), weights, residual, found, totals, values
        )


class SparseDesign(DesignMatrix):
    """A table in compressed sparse columns."""

    def _dense(self, columns: slice | IntArray) -> FloatArray:
        return self.table[:, columns].toarray().astype(np.float64, copy=False)

    @cached_property
    def _extremes(self) -> tuple[FloatArray, FloatArray]:
        if self._rows is not None:
            return super()._extremes
        table = self.table
        centres, largest = np.empty(self.n_columns), np.empty(self.n_columns)
        screening.sparse_extremes(read_only(table.data), read_only(table.indptr), centres, largest)
        return centres / self.n_rows, largest

    def moments(self, weights: FloatArray) -> Moments:
        """Weighted means and standard deviations of every column, one row per problem."""
        table, shape = self.table, (weights.shape[0], self.n_columns)
        mean, scale = np.empty(shape), np.empty(shape)
        screening.sparse_moments(
            read_only(table.data), read_only(table.indices), read_only(table.indptr), weights,
            mean, scale,
        )  # fmt: skip
        return Moments(mean, scale)

    def correlate(self, rows: FloatArray) -> FloatArray:
        return np.ascontiguousarray((self.table.T @ np.ascontiguousarray(rows.T)).T)

    def correlate_found(
        self,
        problems: IntArray,
        weights: FloatArray,
        residual: FloatArray,
        found: IntArray,
        totals: IntArray,
        values: FloatArray,
    ) -> None:
        table = self.table
        screening.sparse_dots(
            problems, read_only(table.data), read_only(table.indices), read_only(table.indptr),
            weights, residual, found, totals, values,
        )  # fmt: skip


def as_design(X: Any) -> DesignMatrix:
    """Wrap a table that is already validated: two-dimensional, float32 or float64, finite.

    Parameters
    ----------
    X : ndarray, memory map, or scipy sparse matrix or array, (n, p)
        Never copied, except that sparse formats other than CSC are converted to CSC.

    Returns
    -------
    DesignMatrix
    """
    if isinstance(X, DesignMatrix):
        return X
    if sparse.issparse(X):
        return SparseDesign(sparse.csc_array(X))
    return DenseDesign(X)
