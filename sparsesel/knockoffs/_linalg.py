"""Dense symmetric linear algebra shared by the s-vector solvers.

Symmetric matrices are plain C-ordered arrays with both triangles filled.  LAPACK reads the same
memory as a Fortran-ordered matrix, so its "lower" triangle is our upper one; a factor returned by
`cholesky` is Fortran-ordered with rubbish above the diagonal, to be read as lower triangular only.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import blas, lapack
from scipy.sparse.linalg import ArpackNoConvergence, LinearOperator, eigsh

from sparsesel.engine._jit import kernel

_TILE = 64


@kernel
def _mirror(matrix: np.ndarray, tile: int) -> None:
    """Copy the upper triangle onto the lower one, tile by tile to stay in cache."""
    size = matrix.shape[0]
    for row_start in range(0, size, tile):
        for column_start in range(row_start, size, tile):
            for i in range(row_start, min(row_start + tile, size)):
                for j in range(max(column_start, i + 1), min(column_start + tile, size)):
                    matrix[j, i] = matrix[i, j]


@kernel
def _symmetric_part(matrix: np.ndarray, tile: int) -> None:
    """Replace a square matrix by the mean of itself and its transpose."""
    size = matrix.shape[0]
    for row_start in range(0, size, tile):
        for column_start in range(row_start, size, tile):
            for i in range(row_start, min(row_start + tile, size)):
                for j in range(max(column_start, i + 1), min(column_start + tile, size)):
                    mean = 0.5 * (matrix[i, j] + matrix[j, i])
                    matrix[i, j] = mean
                    matrix[j, i] = mean


def symmetrize(matrix: np.ndarray) -> np.ndarray:
    """Replace a C-ordered square matrix by its symmetric part, in place."""
    _symmetric_part(matrix, _TILE)
    return matrix


def add_diagonal(matrix: np.ndarray, values: np.ndarray | float) -> np.ndarray:
    """Add values to the diagonal of a C-ordered square matrix, in place."""
    matrix.reshape(-1)[:: matrix.shape[0] + 1] += values
    return matrix


def cholesky(matrix: np.ndarray, *, overwrite: bool = False) -> np.ndarray | None:
    """Lower Cholesky factor of a symmetric matrix, or None where it is not positive definite.

    NaN in the matrix gives None as well: LAPACK stops at the first pivot that is not positive.
    """
    factor, info = lapack.dpotrf(matrix.T, lower=1, overwrite_a=int(overwrite), clean=0)
    if info != 0 or not np.all(np.isfinite(np.diagonal(factor))):
        return None
    return factor


def inverse_from_factor(factor: np.ndarray) -> np.ndarray:
    """Inverse of the matrix whose Cholesky factor is given; the factor is overwritten."""
    inverse, _ = lapack.dpotri(factor, lower=1, overwrite_c=1)
    result = inverse.T
    _mirror(result, _TILE)
    return result


def squared(matrix: np.ndarray) -> np.ndarray:
    """Square of a symmetric matrix."""
    result = blas.dsyrk(1.0, matrix.T, lower=1).T
    _mirror(result, _TILE)
    return result


def log_determinant(factor: np.ndarray) -> float:
    """Log-determinant of the matrix whose Cholesky factor is given."""
    return 2.0 * float(np.log(np.diagonal(factor)).sum())


class ScaledSolver:
    """Solve with a positive definite matrix after scaling its diagonal to one.

    Near the optimum the systems of the solvers are badly scaled by construction (their diagonals
    spread over many powers of ten); scaling first keeps Cholesky's backward error relative to
    each row.  A ridge of a few roundings lets a numerically semidefinite system through: what it
    perturbs is a search direction, never the objective or the certificate.
    """

    def __init__(self, matrix: np.ndarray, ridge: float = 1e-14) -> None:
        self._scale = 1.0 / np.sqrt(np.diagonal(matrix))
        matrix *= self._scale
        matrix *= self._scale[:, None]
        self._factor = None
        while self._factor is None:
            add_diagonal(matrix, ridge)
            self._factor = cholesky(matrix)
            ridge *= 10.0
            if ridge > 1.0:
                raise np.linalg.LinAlgError("the system of a search direction is not finite")

    def solve(self, right_side: np.ndarray) -> np.ndarray:
        """Solution for one right side."""
        scaled = (self._scale * right_side)[:, None]
        solution, _ = lapack.dpotrs(self._factor, scaled, lower=1, overwrite_b=1)
        return solution[:, 0] * self._scale


def largest_step(factor: np.ndarray, change: np.ndarray) -> float:
    """The largest t for which L L' - t * change stays positive semidefinite.

    ``change`` is a symmetric matrix or, one-dimensional, the diagonal of one.  The reciprocal of
    the top eigenvalue of ``L^-1 change L^-T``, by a short Lanczos run with a fixed start; it is
    an estimate from inside, accurate to about a percent, and the caller verifies the step.
    """
    size = factor.shape[0]
    if size <= 32:
        half = blas.dtrsm(1.0, factor, np.diag(change) if change.ndim == 1 else change, lower=1)
        top = float(np.linalg.eigvalsh(blas.dtrsm(1.0, factor, half.T, lower=1))[-1])
        return 1.0 / top if top > 0 else np.inf

    def product(vector: np.ndarray) -> np.ndarray:
        inner = blas.dtrsv(factor, np.ravel(vector), lower=1, trans=1)
        inner = change * inner if change.ndim == 1 else change @ inner
        return blas.dtrsv(factor, inner, lower=1)

    operator = LinearOperator((size, size), matvec=product, dtype=np.float64)
    start = np.cos(1.0 + np.arange(size, dtype=np.float64) ** 2)
    try:
        top = float(
            eigsh(operator, k=1, which="LA", tol=1e-2, v0=start, return_eigenvectors=False)[0]
        )
    except ArpackNoConvergence:
        return 0.0
    return 1.0 / top if top > 0 else np.inf
