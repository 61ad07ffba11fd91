"""Drawing Gaussian copies numerically safely, with dense and with low-rank covariances.

For rows e of features with mean 0 and covariance Sigma, copies with s-vector s (S = diag(s), or
block-diagonal for groups) have, given e, the distribution

    mean  e (I - Sigma^-1 S),      covariance  V = 2 S - S Sigma^-1 S                          (1)

(Candes, Fan, Janson and Lv 2018, equation 3.2, written for rows).  V is singular wherever
2 Sigma - S is, as with the SDP; its root is taken after scaling by diag(S)^1/2 and with a ridge of
1e-12 (raised tenfold until Cholesky accepts), which adds that fraction of s_j to the variance of a
copy and nothing to any covariance.

Low rank: with Sigma = diag(delta) + U U', C = (I + U' diag(1/delta) U)^-1 = L L',

    V = diag(e) + F F',   e_j = s_j (2 delta_j - s_j) / delta_j,   F = diag(s/delta) U L.       (2)

Where all e_j >= 0 a copy is the sum of two independent parts.  At most k entries are negative (2
Sigma - S is definite); these coordinates N are drawn given the others R,

    x_R = E_R^1/2 z + F_R w,    x_N | x_R  ~  N( F_N M F_R' E_R^-1 x_R,  E_N + F_N M F_N' ),

with M = (I + F_R' E_R^-1 F_R)^-1, which is exact and needs nothing of size p x p.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import blas, lapack

from sparsesel.knockoffs._linalg import add_diagonal, cholesky
from sparsesel.knockoffs.low_rank import LowRankCovariance, capacitance

_RIDGE = 1e-12


def safe_root(matrix: np.ndarray) -> np.ndarray:
    """Lower triangular root of a positive semidefinite matrix, after scaling its diagonal to one.

    Rows of a nonpositive diagonal entry (rounding of a zero variance) come out as zero.
    """
    variance = np.diagonal(matrix)
    scale = np.sqrt(np.maximum(variance, 0.0))
    inverse = np.divide(1.0, scale, out=np.zeros_like(scale), where=scale > 0)
    unit = matrix * inverse * inverse[:, None]
    add_diagonal(unit, np.where(scale > 0, 0.0, 1.0))
    ridge, factor = 0.0, cholesky(unit)
    while factor is None:
        ridge = 10.0 * ridge if ridge else _RIDGE
        if ridge > 1.0:
            raise np.linalg.LinAlgError("the covariance of the copies is not semidefinite")
        factor = cholesky(add_diagonal(unit.copy(), ridge))
    return np.tril(factor) * scale[:, None]


@dataclass(frozen=True)
class DenseDraws:
    """Copies from a dense covariance: e -> e (I - shift) + z root'."""

    shift: np.ndarray
    root: np.ndarray

    @classmethod
    def prepare(cls, covariance: np.ndarray, s: np.ndarray) -> DenseDraws:
        """From Sigma and S, a vector or a symmetric matrix."""
        factor = cholesky(covariance)
        if factor is None:
            raise np.linalg.LinAlgError("the covariance of the features is not positive definite")
        moved = np.diag(s) if s.ndim == 1 else s
        half = blas.dtrsm(1.0, factor, moved, lower=1)
        shift, _ = lapack.dpotrs(factor, moved, lower=1)
        return cls(shift, safe_root(2.0 * moved - half.T @ half))

    def draw(self, residuals: np.ndarray, generator: np.random.Generator) -> np.ndarray:
        """Copies of the rows given, shape (n_rows, n_features)."""
        noise = generator.standard_normal(residuals.shape)
        return residuals - residuals @ self.shift + noise @ self.root.T


@dataclass(frozen=True)
class LowRankDraws:
    """Copies from a diagonal-plus-low-rank covariance, never forming a p x p matrix."""

    covariance: LowRankCovariance
    s: np.ndarray
    middle: np.ndarray
    spread: np.ndarray
    factor: np.ndarray
    coupled: np.ndarray
    coupled_root: np.ndarray
    coupling: np.ndarray

    @classmethod
    def prepare(cls, covariance: LowRankCovariance, s: np.ndarray) -> LowRankDraws:
        """From Sigma and the s-vector."""
        delta, loadings = covariance.diagonal, covariance.loadings
        middle = np.linalg.inv(capacitance(delta, loadings))
        middle = 0.5 * (middle + middle.T)
        spread = s * (2.0 * delta - s) / delta
        factor = (s / delta)[:, None] * (loadings @ safe_root(middle))
        coupled = np.flatnonzero(spread < 0)
        root = np.empty((0, 0))
        coupling = np.empty((0, factor.shape[1]))
        if len(coupled):
            spread = np.maximum(spread, np.where(spread < 0, -np.inf, 1e-10 * s))
            others = spread > 0
            inner = np.linalg.inv(capacitance(spread[others], factor[others]))
            coupling = factor[coupled] @ inner
            root = safe_root(np.diag(spread[coupled]) + coupling @ factor[coupled].T)
        return cls(covariance, s, middle, spread, factor, coupled, root, coupling)

    def draw(self, residuals: np.ndarray, generator: np.random.Generator) -> np.ndarray:
        """Copies of the rows given, shape (n_rows, n_features)."""
        delta, loadings = self.covariance.diagonal, self.covariance.loadings
        whitened = residuals / delta
        whitened -= (whitened @ loadings @ self.middle) @ (loadings / delta[:, None]).T
        noise = generator.standard_normal(residuals.shape)
        common = generator.standard_normal((len(residuals), self.factor.shape[1]))
        own = np.sqrt(np.maximum(self.spread, 0.0))
        moved = noise * own + common @ self.factor.T
        if len(self.coupled):
            weight = np.divide(1.0, own, out=np.zeros_like(own), where=own > 0)
            carried = (noise * weight) @ self.factor
            carried += common @ ((self.factor * weight[:, None] ** 2).T @ self.factor)
            drawn = noise[:, self.coupled] @ self.coupled_root.T
            moved[:, self.coupled] = carried @ self.coupling.T + drawn
        return residuals - whitened * self.s + moved
