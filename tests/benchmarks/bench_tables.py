"""The tables of the benchmarks: AR(0.5) columns, 20 of them true, written block by block.

Column j is 0.5 times column j - 1 plus independent noise, of variance one. It is drawn in blocks of
columns, so that a table in a mapped file is made in little memory; the bits do not depend on where
the table is kept.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.signal import lfilter
from scipy.special import expit

# Noise is in standard deviations of the predictor: the variance of the signal is 20 times as large.
CORRELATION, N_TRUE, NOISE = 0.5, 20, 20**-0.5
_BLOCK_BYTES = 32 << 20


@dataclass(frozen=True, eq=False)
class Table:
    """A table (n, p) with its outcome (n,)."""

    X: Any
    y: NDArray[np.float64]

    @property
    def nbytes(self) -> int:
        if sparse.issparse(self.X):
            return self.X.data.nbytes + self.X.indices.nbytes + self.X.indptr.nbytes
        return self.X.nbytes


def fill_autoregressive(X: NDArray[Any], seed: int) -> None:
    """Fill an array (n, p), in memory or mapped, with AR(0.5) columns."""
    n, p = X.shape
    generator = np.random.default_rng([seed, n, p])
    width = max(1, _BLOCK_BYTES // (8 * n))
    innovation = np.sqrt(1.0 - CORRELATION**2)
    last: Any = generator.standard_normal(n)
    for start in range(0, p, width):
        drawn = innovation * generator.standard_normal((min(width, p - start), n))
        filtered: Any = lfilter(
            [1.0], [1.0, -CORRELATION], drawn, axis=0, zi=CORRELATION * last[None, :]
        )
        columns = filtered[0]
        X[:, start : start + len(columns)] = columns.T
        last = columns[-1]


def _predictor(X: Any, seed: int) -> NDArray[np.float64]:
    """X b, where b is one or minus one at `N_TRUE` random columns."""
    generator = np.random.default_rng([seed, 1])
    true = np.sort(generator.choice(X.shape[1], size=min(N_TRUE, X.shape[1]), replace=False))
    return np.asarray(X[:, true] @ generator.choice([-1.0, 1.0], size=true.size), dtype=np.float64)


def with_numbers(X: Any, seed: int = 0) -> Table:
    """A table with a continuous outcome."""
    noise = np.random.default_rng([seed, 2]).standard_normal(X.shape[0])
    predictor = _predictor(X, seed)
    return Table(X, predictor + NOISE * predictor.std() * noise)


def regression_table(n: int, p: int, seed: int = 0) -> Table:
    """Double precision, in Fortran order, which is the peer's own."""
    X = np.empty((n, p), order="F")
    fill_autoregressive(X, seed)
    return with_numbers(X, seed)


def classification_table(n: int, p: int, seed: int = 0) -> Table:
    """As `regression_table`, with an outcome of 0 and 1 from a logistic model."""
    X = np.empty((n, p), order="F")
    fill_autoregressive(X, seed)
    chance = np.random.default_rng([seed, 3]).random(n)
    return Table(X, (chance < expit(_predictor(X, seed))).astype(np.float64))


def sparse_table(n: int, p: int, density: float, seed: int = 0) -> Table:
    """CSC with normal entries at random places."""
    generator = np.random.default_rng([seed, n, p])
    X = sparse.random(
        n, p, density, format="csc", rng=generator, data_rvs=generator.standard_normal
    )
    return with_numbers(sparse.csc_matrix(X), seed)
