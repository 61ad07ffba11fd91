r"""Relative duality gaps of any solver's coefficients, so that both sides are judged alike.

With rows i = 1..n, residual :math:`r` of the squared error (centred where there is an intercept):

.. math::

    P(b) = \tfrac{1}{2n}\|r\|^2 + \alpha \|b\|_1, \qquad
    D(\theta) = \tfrac{1}{2n}\left(\|y\|^2 - \|y - \theta\|^2\right), \quad
    \|X'\theta\|_\infty \le n\alpha,

and for the log loss with :math:`\mu = 1/(1+e^{-Xb})`, :math:`r = y - \mu`,

.. math::

    D(\theta) = \tfrac{1}{n} \sum_i h(y_i - \theta_i), \qquad h(u) = -u\log u - (1-u)\log(1-u).

:math:`\theta` is a multiple of :math:`r`: for the squared error the best one that is allowed, for
the log loss the largest up to one. Gaps are relative to the objective at b = 0. Nothing here is
shared with the engine.

References
----------
Boyd and Vandenberghe (2004), *Convex Optimization*, section 5.1.6.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.special import expit, xlogy

FloatArray = NDArray[np.float64]


def largest_penalty(X: Any, y: FloatArray, intercept: bool) -> float:
    """The smallest penalty at which the lasso is empty."""
    response = y - y.mean() if intercept else y
    return float(np.abs(X.T @ response).max() / y.size)


@dataclass(frozen=True, eq=False)
class Lasso:
    """The problems of one table; X (n, p) dense or CSC, y (n,)."""

    X: Any
    y: FloatArray
    intercept: bool

    def grid(self, count: int, ratio: float) -> FloatArray:
        """Penalties, from the smallest one with an empty model down to `ratio` times that."""
        top = largest_penalty(self.X, self.y, self.intercept)
        return top * np.geomspace(1.0, ratio, count)

    def gaps(self, alphas: FloatArray, coefs: Any) -> FloatArray:
        """Gaps (L,) of coefficients (L, p)."""
        y = self.y - self.y.mean() if self.intercept else self.y
        residual = y - _predictions(self.X, coefs)
        if self.intercept:
            residual -= residual.mean(axis=1, keepdims=True)
        limit = alphas / np.maximum(_steepest(self.X, residual), np.finfo(float).tiny)
        square = np.maximum(np.square(residual).sum(axis=1), np.finfo(float).tiny)
        multiple = np.clip(residual @ y / square, -limit, limit)
        dual = 0.5 * (multiple * (2.0 * residual @ y - multiple * square)) / y.size
        primal = 0.5 * square / y.size + alphas * _absolute(coefs)
        return (primal - dual) / (0.5 * np.mean(y**2))


@dataclass(frozen=True, eq=False)
class L1Logistic:
    """The problems of one table without an intercept; y 0 or 1."""

    X: Any
    y: FloatArray

    def grid(self, count: int, ratio: float) -> FloatArray:
        """As `Lasso.grid`; at b = 0 the residual is y - 1/2."""
        return largest_penalty(self.X, self.y - 0.5, False) * np.geomspace(1.0, ratio, count)

    def gaps(self, alphas: FloatArray, coefs: Any) -> FloatArray:
        """Gaps (L,) of coefficients (L, p)."""
        eta = _predictions(self.X, coefs)
        residual = self.y - expit(eta)
        steepest = np.maximum(_steepest(self.X, residual), np.finfo(float).tiny)
        point = self.y - np.minimum(1.0, alphas / steepest)[:, None] * residual
        dual = -(xlogy(point, point) + xlogy(1.0 - point, 1.0 - point)).mean(axis=1)
        loss = (np.logaddexp(0.0, eta) - self.y * eta).mean(axis=1)
        return (loss + alphas * _absolute(coefs) - dual) / np.log(2.0)


def _predictions(X: Any, coefs: Any) -> FloatArray:
    if not sparse.issparse(X):
        return np.asarray(coefs @ X.T)
    return (sparse.csr_array(coefs) @ sparse.csr_array(X.T)).toarray()


def _steepest(X: Any, residual: FloatArray) -> FloatArray:
    """Largest |x_j'r| / n over the columns, for every row of residuals."""
    return np.abs(X.T @ residual.T).max(axis=0) / X.shape[0]


def _absolute(coefs: Any) -> FloatArray:
    return np.asarray(abs(coefs).sum(axis=1)).ravel()
