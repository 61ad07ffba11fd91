r"""A proof of optimality in plain numpy, for audits: nothing here is shared with the solvers.

Letters are those of `sparsesel.engine.reference`, whose statement of the problem this is about:
weights w that sum to 1, offset o, penalty :math:`\alpha (a_j |b_j| + c_j b_j^2 / 2)` of column j
with :math:`a = \rho v s` and :math:`c = (1 - \rho) v s^2`. With :math:`\ell^*` the conjugate of
the loss in its second argument, every t with :math:`\sum_i w_i t_i = 0` (in a problem with an
intercept) and :math:`\sum_i w_i t_i x_{ij} = 0` for the unpenalised columns gives a lower bound on
the optimum (Fenchel duality; Boyd and Vandenberghe 2004, section 5.7):

.. math::

    D(t) = - \sum_i w_i \ell^*(y_i, -t_i) - \sum_i w_i t_i o_i
    - \sum_j \frac{(|\sum_i w_i t_i x_{ij}| - \alpha a_j)_+^2}{2 \alpha c_j}

where a column with :math:`c_j = 0` must have :math:`|\sum_i w_i t_i x_{ij}| \le \alpha a_j`. The t
used are the residuals r of the point to be judged, once intercept and unpenalised columns are at
their best for its other coefficients, and r shrunk until no column exceeds its limit.

:math:`-D` is strongly convex with modulus m = 1 (squared error) or 4 (log loss) in the norm
:math:`\|t\|^2 = \sum_i w_i t_i^2`, so that t lies within :math:`\sqrt{2\,\mathrm{gap}/m}` of the
optimal one. That is what decides which columns are zero at the optimum.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import expit, logit, xlogy

from sparsesel.engine.reference import _as_double, _data_term, _terms, objective_value
from sparsesel.selectors import StatedProblem

FloatArray = NDArray[np.float64]

_MODULUS = {"squared_error": 1.0, "log_loss": 4.0}
# Newton on the few unpenalised columns converges in a handful of steps; the rest is for safety.
_NEWTON_STEPS, _HALVINGS = 100, 40
_SCORE = 1e-13


@dataclass(frozen=True)
class Certificate:
    """What a point proves about the optimum.

    Attributes
    ----------
    gap : float
        Objective of the point less the lower bound; the optimum is no further away.
    slack : ndarray of shape (p,)
        Limit of every column less the size of its gradient at the dual point; infinite for
        columns without a limit (unpenalised, left out).
    mean : ndarray of shape (n,)
        What the point predicts on the scale of the response, for rows that count.
    """

    gap: float
    slack: FloatArray
    mean: FloatArray


class Audit:
    """One stated problem, read for an audit.

    Parameters
    ----------
    stated : StatedProblem
        The problem with the engine's answer.
    X : ndarray or sparse of shape (n, p)
        The table given to fit.
    """

    def __init__(self, stated: StatedProblem, X: Any) -> None:
        problems = stated.problems
        self.stated = stated
        self.table = X if stated.design is None else stated.design
        self.loss = problems.loss
        self.alpha = stated.alpha
        self.fit_intercept = problems.fit_intercept
        self.y = np.asarray(_only(problems.response), dtype=np.float64)
        self.terms_settings: Mapping[str, Any] = {
            "l1_ratio": problems.l1_ratio,
            "penalty_weights": _only(problems.penalty_weights),
            "sample_weight": _only(problems.sample_weight),
            "offset": problems.offset,
            "standardize": problems.standardize,
        }
        terms = _terms(self.table, **self.terms_settings)
        self.seen = terms.weight > 0
        self.weight, self.offset = terms.weight[self.seen], terms.offset[self.seen]
        self.response = self.y[self.seen]
        self.limit = self.alpha * terms.absolute
        self.square = self.alpha * terms.square
        self.allowed = terms.allowed
        self.penalised = terms.allowed & (self.limit + self.square > 0)
        self.columns = _as_double(self.table)[self.seen]

    @property
    def n_columns(self) -> int:
        """Number of columns p."""
        return self.columns.shape[1]

    @property
    def settings(self) -> dict[str, Any]:
        """The problem as keywords of the reference."""
        return {
            "loss": self.loss,
            "alpha": self.alpha,
            "fit_intercept": self.fit_intercept,
            **self.terms_settings,
        }

    def objective(self, coef: FloatArray, intercept: float) -> float:
        """The objective, by the reference's own statement of it."""
        return objective_value(self.table, self.y, coef, intercept, **self.settings)

    @cached_property
    def null_objective(self) -> float:
        """The optimum with offset, intercept and unpenalised columns only."""
        return self._value(self._best_free(self.offset))

    @cached_property
    def _free(self) -> FloatArray:
        """The intercept's ones and the unpenalised columns."""
        columns = self.columns[:, np.flatnonzero(self.allowed & ~self.penalised)]
        columns = columns.toarray() if hasattr(columns, "toarray") else columns
        ones = np.ones((len(self.weight), int(self.fit_intercept)))
        return np.column_stack([ones, columns])

    def _value(self, eta: FloatArray) -> float:
        return _data_term(self.response, eta, self.weight, self.loss)

    def _mean(self, eta: FloatArray) -> FloatArray:
        return eta if self.loss == "squared_error" else expit(eta)

    def _best_free(self, eta: FloatArray) -> FloatArray:
        """The linear predictor with intercept and unpenalised columns moved to their best.

        By Newton steps in an orthonormal basis, each halved until the loss goes down; the squared
        error needs one.
        """
        basis = _orthonormal(self._free, self.weight)
        value = self._value(eta)
        for _ in range(_NEWTON_STEPS):
            mean = self._mean(eta)
            score = basis.T @ (self.weight * (self.response - mean))
            if np.abs(score).max(initial=0.0) <= _SCORE * np.abs(self.response).max():
                break
            curvature = np.ones_like(mean) if self.loss == "squared_error" else mean * (1 - mean)
            information = basis.T @ ((self.weight * curvature)[:, None] * basis)
            step = basis @ np.linalg.lstsq(information, score, rcond=None)[0]
            for _ in range(_HALVINGS):
                moved = self._value(eta + step)
                if moved <= value:
                    break
                step = step / 2
            else:
                break
            eta, value = eta + step, moved
        return eta

    def certify(self, coef: FloatArray, intercept: float) -> Certificate:
        """The duality gap of a point.

        Parameters
        ----------
        coef : ndarray of shape (p,)
            Coefficients.
        intercept : float
            Intercept.

        Returns
        -------
        Certificate
            The gap and what it was computed from.
        """
        # Next to an optimum Newton steps converge from where they are; from an arbitrary point
        # saturated probabilities could stop them.
        eta = self._best_free(self.offset + intercept + self.columns @ coef)
        residual = self.response - self._mean(eta)
        size = np.abs(self.columns.T @ (self.weight * residual))
        size, limit = size[self.penalised], self.limit[self.penalised]
        excess = max(1.0, float(np.max(size / limit, initial=0.0)))
        bounds = [self._dual(residual / excess)]
        square = self.square[self.penalised]
        if (square > 0).all():
            cost = np.maximum(size - limit, 0.0) ** 2 / (2 * square)
            bounds.append(self._dual(residual) - float(cost.sum()))
        shrink = 1.0 / excess if bounds[0] >= bounds[-1] else 1.0
        slack = np.full(self.n_columns, np.inf)
        slack[self.penalised] = limit - shrink * size
        return Certificate(self.objective(coef, intercept) - max(bounds), slack, self._mean(eta))

    def _dual(self, t: FloatArray) -> float:
        """D(t), for a t that needs no conjugate of a penalty."""
        w, y = self.weight, self.response
        linear = float(w @ (t * self.offset))
        if self.loss == "squared_error":
            return float(w @ (t * y - t**2 / 2)) - linear
        share = np.clip(y - t, 0.0, 1.0)
        return -float(w @ (xlogy(share, share) + xlogy(1 - share, 1 - share))) - linear

    def decided(
        self, coef: FloatArray, certificate: Certificate, gap: float
    ) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
        """Penalised columns that must be zero, and that must not, at a point with a given gap.

        Parameters
        ----------
        coef : ndarray of shape (p,)
            Coefficients of a point near the optimum, the reference's.
        certificate : Certificate
            What that point proves.
        gap : float
            Duality gap of the other point.

        Returns
        -------
        zero, nonzero : ndarray of shape (p,), bool
            Zero: the gradients of both points are within a computed band of one another, and that
            of this one is below its limit by more than the band. Nonzero: the fits of both points
            are within a computed distance, and the column's part of this fit that no other column
            can take over is larger. What neither decides is a tie.
        """
        modulus = _MODULUS[self.loss]
        gaps = np.array([max(certificate.gap, 0.0), max(gap, 0.0)])
        apart = self._apart(np.flatnonzero(self.penalised))
        band = np.full(self.n_columns, np.inf)
        band[self.penalised] = np.sqrt(2 * gaps / modulus).sum() * np.linalg.norm(apart, axis=0)
        zero = self.penalised & (certificate.slack > band)
        nonzero = np.zeros(self.n_columns, dtype=bool)
        rest = np.flatnonzero(self.penalised & ~zero)
        own = _distances_from_spans(self._apart(rest))
        # An interior-point solver leaves small numbers where the optimum is zero.
        left = float(np.linalg.norm(apart @ np.where(zero, coef, 0.0)[self.penalised]))
        distance = self._distance_of_fits(certificate, gaps) + left
        nonzero[rest] = np.abs(coef[rest]) * own > distance
        return zero, nonzero

    def _apart(self, positions: NDArray[np.int64]) -> FloatArray:
        """Columns times the roots of w, without what intercept and unpenalised columns explain."""
        columns = self.columns[:, positions]
        columns = columns.toarray() if hasattr(columns, "toarray") else columns
        basis = _orthonormal(self._free, self.weight)
        inside = basis @ (basis.T @ (self.weight[:, None] * columns))
        return np.sqrt(self.weight)[:, None] * (columns - inside)

    def _distance_of_fits(self, certificate: Certificate, gaps: FloatArray) -> float:
        """Bound on the weighted norm of the difference of two linear predictors with these gaps."""
        if self.loss == "squared_error":
            return float(np.sqrt(2 * gaps).sum())
        # Predicted probabilities differ by less than `radius` in the weighted norm, hence by
        # less than reach_i in row i, where the curvature is least at one end of the interval.
        radius = float(np.sqrt(gaps / 2).sum())
        reach = radius / np.sqrt(self.weight)
        low, high = certificate.mean - reach, certificate.mean + reach
        if low.min() <= 0 or high.max() >= 1:
            return np.inf
        slope = np.minimum(low * (1 - low), high * (1 - high)).min()
        widest = float(np.sqrt(self.weight @ (logit(high) - logit(low)) ** 2))
        return min(radius / slope, widest)


def _only(values: Any) -> Any:
    """The row of the single problem of a bank of one."""
    return values[0] if np.ndim(values) == 2 else values


def _orthonormal(columns: FloatArray, weight: FloatArray) -> FloatArray:
    """A basis of the span of columns, orthonormal under the weights."""
    root = np.sqrt(weight)[:, None]
    left, size, _ = np.linalg.svd(root * columns, full_matrices=False)
    rank = int(np.sum(size > 1e-12 * size.max(initial=0.0)))
    return left[:, :rank] / root


def _distances_from_spans(columns: FloatArray) -> FloatArray:
    """Distance of every column from the span of the others; 0 where that can't be told."""
    n, k = columns.shape
    if k == 0 or k > n:
        return np.zeros(k)
    norm = np.linalg.norm(columns, axis=0)
    scaled = columns / np.where(norm > 0, norm, 1.0)
    _, size, right = np.linalg.svd(scaled, full_matrices=False)
    if size[-1] <= 1e-10 * size[0]:
        return np.zeros(k)
    # The diagonal of the inverse Gram matrix holds the inverse squared distances.
    return norm / np.sqrt(((right.T / size) ** 2).sum(axis=1))
