"""The columns that carry no penalty: the intercept and those of penalty weight zero.

Under weights w that sum to one, the columns A = [1, U] are replaced by Q = A T with
Q'WQ = I (pivoted QR of sqrt(W) A; Golub and Van Loan, 4th ed., section 5.4.2).  Directions
that A repeats are dropped, so collinear covariates cost nothing but their own coefficients,
which are then zero.  Q is formed on all rows, those of weight zero too: predictions there
are what held-out losses are made of.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import qr, solve_triangular

from sparsesel.engine.design import DesignMatrix, FloatArray

# A direction whose norm falls below this share of its column's, after the earlier ones are
# projected out, repeats them.
_REPEATED = 1e-10


@dataclass(frozen=True)
class Basis:
    """Orthonormal spans of the unpenalised columns, one per problem.

    ``rows`` (B, k, n) holds Q' padded with zero rows; ``columns[b]`` the unpenalised columns
    of problem b in the table; ``back[b]`` maps loads on Q to the coefficients of [1, U].
    """

    rows: FloatArray
    columns: tuple[NDArray[np.int64], ...]
    back: tuple[FloatArray, ...]
    fit_intercept: bool

    def coefficients(self, b: int, load: FloatArray) -> tuple[float, FloatArray]:
        """The intercept (of centred columns) and the unpenalised coefficients."""
        values = self.back[b] @ load[: self.back[b].shape[1]]
        return (float(values[0]), values[1:]) if self.fit_intercept else (0.0, values)


def unpenalised_basis(
    design: DesignMatrix, weights: FloatArray, free: NDArray[np.bool_], fit_intercept: bool
) -> Basis:
    """Build the basis of every problem; ``free`` (B, p) marks the unpenalised columns."""
    n_problems, n_rows = weights.shape
    columns = tuple(np.flatnonzero(row) for row in free)
    if not any(part.size for part in columns):
        rows = np.ones((n_problems, int(fit_intercept), n_rows))
        back = (np.eye(int(fit_intercept)),) * n_problems
        return Basis(rows, columns, back, fit_intercept)
    parts = [
        _orthonormal(_unpenalised(design, part, fit_intercept), w)
        for part, w in zip(columns, weights, strict=True)
    ]
    rows = np.zeros((n_problems, max(q.shape[0] for q, _ in parts), n_rows))
    for b, (q, _) in enumerate(parts):
        rows[b, : q.shape[0]] = q
    return Basis(rows, columns, tuple(back for _, back in parts), fit_intercept)


def _unpenalised(
    design: DesignMatrix, columns: NDArray[np.int64], fit_intercept: bool
) -> FloatArray:
    values = design.gather(columns, centred=fit_intercept).T
    return np.column_stack([np.ones(design.n_rows), values]) if fit_intercept else values


def _orthonormal(values: FloatArray, weights: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Q' (k, n) and the map from loads to coefficients of ``values`` (n, m)."""
    weighted = np.sqrt(weights)[:, None] * values
    norms = np.linalg.norm(weighted, axis=0)
    scale = np.where(norms > 0.0, norms, 1.0)
    _, triangle, pivot = qr(weighted / scale, mode="economic", pivoting=True)
    rank = int(np.count_nonzero(np.abs(np.diag(triangle)) > _REPEATED))
    back = np.zeros((values.shape[1], rank))
    if rank:
        back[pivot[:rank]] = solve_triangular(triangle[:rank, :rank], np.eye(rank))
    back /= scale[:, None]
    return np.ascontiguousarray((values @ back).T), back
