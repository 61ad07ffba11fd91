r"""Slow, obvious versions of what the engine does, in numpy and on dense arrays.

The problem, with normalised weights w, penalised columns b, and f = b0 + Xb:

    P(b0, b) = sum_i w_i l(y_i, o_i + f_i) + alpha sum_j [a_j |b_j| + c_j b_j^2 / 2]

where a = rho v s and c = (1 - rho) v s^2. Its Fenchel dual maximises

    D(t) = - sum_i w_i l*(y_i, -t_i / w_i) - o't - sum_j g_j*(x_j't)

over t with sum(t) = 0 (with an intercept) and x_j't = 0 for unpenalised columns, where l* is the
conjugate of the loss in its second argument and g_j* that of a column's penalty: the indicator of
|z| <= alpha a_j for c_j = 0, else (|z| - alpha a_j)_+^2 / (2 alpha c_j). D(t) is a lower bound on
the optimum for every t it allows. From a point (b0, b) comes t = w (y - prediction), once intercept
and unpenalised columns are at their best for that b, shrunk until the indicators hold.

-D is strongly convex: with modulus 1 (squared error) or 4 (log loss) in the norm
|t|^2 = sum t_i^2 / w_i, so that t lies within sqrt(2 gap / modulus) of the optimal one. That
decides most of the support; see `decided_support`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from scipy.special import expit, logit, xlogy

# -D is at least this strongly convex in the norm of the head of the file.
DUAL_MODULUS = {"squared_error": 1.0, "log_loss": 4.0}


@dataclass(frozen=True)
class Problem:
    """One penalised regression without its alpha."""

    X: Any
    y: np.ndarray
    loss: str = "squared_error"
    l1_ratio: float = 1.0
    penalty_weights: np.ndarray | None = None
    sample_weight: np.ndarray | None = None
    offset: np.ndarray | None = None
    fit_intercept: bool = True
    standardize: bool = False

    @property
    def settings(self) -> dict[str, Any]:
        """The keywords that `penalized_path` and the reference share."""
        names = (
            "loss l1_ratio penalty_weights sample_weight offset fit_intercept standardize".split()
        )
        return {name: getattr(self, name) for name in names}

    @cached_property
    def dense(self) -> np.ndarray:
        X = self.X.toarray() if hasattr(self.X, "toarray") else self.X
        return np.asarray(X, dtype=np.float64)

    @cached_property
    def weight(self) -> np.ndarray:
        w = np.ones(len(self.y)) if self.sample_weight is None else self.sample_weight
        return np.asarray(w, dtype=np.float64) / np.sum(w)

    @cached_property
    def shift(self) -> np.ndarray:
        return np.zeros(len(self.y)) if self.offset is None else np.asarray(self.offset)

    @cached_property
    def v(self) -> np.ndarray:
        """Penalty weights, infinite too for columns that can't be standardised."""
        p = self.dense.shape[1]
        v = np.ones(p) if self.penalty_weights is None else self.penalty_weights.astype(float)
        if not self.standardize:
            return v
        rounding = 1e-5 if self.X.dtype == np.float32 else 1e-10
        constant = self.scales <= rounding * np.abs(self.dense).max(axis=0)
        return np.where(constant & (v > 0), np.inf, v)

    @cached_property
    def scales(self) -> np.ndarray:
        if not self.standardize:
            return np.ones(self.dense.shape[1])
        mean = self.weight @ self.dense
        return np.sqrt(self.weight @ (self.dense - mean) ** 2)

    @property
    def penalised(self) -> np.ndarray:
        return (self.v > 0) & np.isfinite(self.v)

    @cached_property
    def absolute(self) -> np.ndarray:
        return self.l1_ratio * np.where(self.penalised, self.v, 0.0) * self.scales

    @cached_property
    def square(self) -> np.ndarray:
        return (1 - self.l1_ratio) * np.where(self.penalised, self.v, 0.0) * self.scales**2

    @cached_property
    def free(self) -> np.ndarray:
        """The intercept's ones and the unpenalised columns."""
        columns = self.dense[:, self.v == 0]
        return np.column_stack([np.ones((len(self.y), int(self.fit_intercept))), columns])

    @cached_property
    def apart(self) -> np.ndarray:
        """Columns times sqrt(w), with what intercept and unpenalised columns explain taken out."""
        root = np.sqrt(self.weight)[:, None]
        return _without(root * self.dense, root * self.free)

    def loss_value(self, f: np.ndarray) -> float:
        eta, seen = self.shift + f, self.weight > 0
        if self.loss == "squared_error":
            rows = 0.5 * (self.y - eta) ** 2
        else:
            rows = np.logaddexp(0, eta) - self.y * eta
        return float(self.weight[seen] @ rows[seen])

    def mean(self, f: np.ndarray) -> np.ndarray:
        """What the model predicts on the scale of the response."""
        eta = self.shift + f
        return eta if self.loss == "squared_error" else expit(eta)

    def objective(self, coef: np.ndarray, intercept: float, alpha: float) -> float:
        if np.any(coef[np.isinf(self.v)] != 0) or (intercept != 0 and not self.fit_intercept):
            return np.inf
        penalty = self.absolute @ np.abs(coef) + 0.5 * self.square @ coef**2
        return self.loss_value(intercept + self.dense @ coef) + alpha * penalty

    def dual(self, t: np.ndarray, alpha: float) -> float:
        """D(t), for a t whose products with the intercept and free columns are zero."""
        seen = self.weight > 0
        w, ti, y = self.weight[seen], t[seen], self.y[seen]
        if self.loss == "squared_error":
            value = ti @ y - 0.5 * np.sum(ti**2 / w)
        else:
            q = y - ti / w
            if np.any((q < -1e-12) | (q > 1 + 1e-12)):
                return -np.inf
            q = np.clip(q, 0, 1)
            value = -w @ (xlogy(q, q) + xlogy(1 - q, 1 - q))
        excess = np.maximum(np.abs(self.dense.T @ t) - alpha * self.absolute, 0)[self.penalised]
        c = alpha * self.square[self.penalised]
        hard = c == 0
        if np.any(excess[hard] > 1e-14 * np.abs(t).sum() * np.abs(self.dense).max()):
            return -np.inf
        return float(value - ti @ self.shift[seen] - np.sum(excess[~hard] ** 2 / (2 * c[~hard])))


def _without(columns: np.ndarray, span: np.ndarray) -> np.ndarray:
    """What least squares on the columns of `span`, possibly none, can't explain."""
    if not span.shape[1]:
        return columns
    return columns - span @ np.linalg.lstsq(span, columns, rcond=None)[0]


def settle_free(problem: Problem, f: np.ndarray) -> np.ndarray:
    """Newton steps on intercept and unpenalised columns; the part of f in their span is free."""
    free, w = problem.free, problem.weight
    for _ in range(100 if free.shape[1] else 0):
        mean = problem.mean(f)
        curvature = w if problem.loss == "squared_error" else w * mean * (1 - mean)
        score = w * (problem.y - mean)
        root = np.sqrt(curvature)[:, None]
        target = np.divide(score, root[:, 0], out=np.zeros_like(score), where=root[:, 0] > 0)
        step = free @ np.linalg.lstsq(root * free, target, rcond=None)[0]
        length = 1.0
        # Near the optimum a full step is right while its gain drowns in rounding.
        ceiling = problem.loss_value(f) * (1 + 1e-14)
        while problem.loss_value(f + length * step) > ceiling and length > 1e-10:
            length /= 2
        f = f + length * step
        if np.abs(length * step).max() <= 1e-13 * max(1.0, np.abs(f).max()):
            break
    return f


def null_fit(problem: Problem) -> np.ndarray:
    """The best fit without penalised columns."""
    return settle_free(problem, np.zeros(len(problem.y)))


def null_objective(problem: Problem) -> float:
    return problem.loss_value(null_fit(problem))


def largest_alpha(problem: Problem, l1_ratio: float | None = None) -> float:
    """The smallest alpha at which every penalised coefficient is zero."""
    rho = problem.l1_ratio if l1_ratio is None else l1_ratio
    score = problem.weight * (problem.y - problem.mean(null_fit(problem)))
    penalised = problem.penalised
    z = np.abs(problem.dense.T @ score)[penalised]
    return float(np.max(z / (problem.v[penalised] * problem.scales[penalised]))) / rho


@dataclass(frozen=True)
class Certificate:
    """A point's objective, a lower bound on the optimum, and the dual point that proves it."""

    objective: float
    bound: float
    dual_point: np.ndarray

    @property
    def gap(self) -> float:
        return self.objective - self.bound


def certify(problem: Problem, coef: np.ndarray, intercept: float, alpha: float) -> Certificate:
    f = settle_free(problem, intercept + problem.dense @ coef)
    t = problem.weight * (problem.y - problem.mean(f))
    # What rounding left of the free columns' score goes the way it would have come: through w.
    root = np.sqrt(problem.weight)
    left = np.divide(t, root, out=np.zeros_like(t), where=root > 0)
    t = root * _without(left, root[:, None] * problem.free)
    hard = problem.penalised & (problem.square * alpha == 0)
    z = np.abs(problem.dense[:, hard].T @ t)
    limit = alpha * problem.absolute[hard]
    beyond = z > limit
    t = t * min(1.0, np.min(limit[beyond] / z[beyond], initial=1.0))
    value = problem.objective(coef, intercept, alpha)
    return Certificate(value, problem.dual(t, alpha), t)


def certified_gap(problem: Problem, coef: np.ndarray, intercept: float, alpha: float) -> float:
    """The duality gap of a point, in units of the objective."""
    return certify(problem, coef, intercept, alpha).gap


def sharpened(
    problem: Problem, coef: np.ndarray, intercept: float, alpha: float
) -> tuple[np.ndarray, float]:
    """The nearby point that solves the smooth problem on the support, where that is better.

    An interior-point answer is as near the optimum as its tolerance, a Newton iteration as near as
    double precision. The certificates say whether the support and its signs were the right ones.
    """
    free = problem.free
    sizes = np.abs(coef) * np.linalg.norm(problem.apart, axis=0)
    held = problem.penalised & (sizes > 1e-6 * sizes.max(initial=0.0))
    columns = np.column_stack([free, problem.dense[:, held]])
    slope = alpha * np.r_[np.zeros(free.shape[1]), (problem.absolute * np.sign(coef))[held]]
    bend = alpha * np.r_[np.zeros(free.shape[1]), problem.square[held]]
    load = np.r_[np.full(int(problem.fit_intercept), intercept), coef[problem.v == 0], coef[held]]
    for _ in range(30):
        mean = problem.mean(columns @ load)
        score = columns.T @ (problem.weight * (problem.y - mean)) - slope - bend * load
        weight = problem.weight * (mean * (1 - mean) if problem.loss == "log_loss" else 1.0)
        hessian = (columns.T * weight) @ columns + np.diag(bend)
        step = np.linalg.lstsq(hessian, score, rcond=1e-12)[0]
        load = load + step
        if np.abs(step).max(initial=0.0) <= 1e-15 * np.abs(load).max(initial=0.0):
            break
    answer = np.zeros_like(coef)
    answer[problem.v == 0] = load[int(problem.fit_intercept) : free.shape[1]]
    answer[held] = load[free.shape[1] :]
    point = answer, float(load[0]) if problem.fit_intercept else 0.0
    better = certified_gap(problem, *point, alpha) < certified_gap(problem, coef, intercept, alpha)
    return point if better else (coef, intercept)


def decided_support(
    problem: Problem, coef: np.ndarray, intercept: float, alpha: float, gap: float
) -> tuple[np.ndarray, np.ndarray]:
    """Penalised columns that a point with duality gap `gap` must hold at zero, and must not.

    The point given here is another one, near the optimum by its own certificate. Both dual points
    are within their radius r of the optimal one, so |x_j't| differs between them by at most
    (r + r')|x_j|, the band. Zero: |x_j't| is below alpha a_j by more than the band. Nonzero, with
    c_j > 0: above by more than that and by what a zero coefficient would cost, since the column's
    own part of the gap is then (|x_j't| - alpha a_j)^2 / (2 alpha c_j). Nonzero, with c_j = 0: with
    the proven zeros set to zero, fits are within a computed distance d of each other, so that
    coefficients are within d over the distance of their column from the span of the other columns
    not proven zero. What none of these decides is a tie.
    """
    proof = certify(problem, coef, intercept, alpha)
    modulus = DUAL_MODULUS[problem.loss]
    radius = np.sqrt(2 * max(proof.gap, 0.0) / modulus) + np.sqrt(2 * gap / modulus)
    band = radius * np.linalg.norm(problem.apart, axis=0) + 1e-13 * np.abs(problem.dense).max()
    slack = alpha * problem.absolute - np.abs(problem.dense.T @ proof.dual_point)
    zero = problem.penalised & (slack > band)
    cost = np.sqrt(2 * alpha * problem.square * gap)
    nonzero = problem.penalised & (problem.square > 0) & (slack < -band - cost)

    cleaned = np.where(zero, 0.0, coef)
    distance = _distance_of_fits(problem, cleaned, intercept, alpha, gap)
    rest = np.flatnonzero(problem.penalised & ~zero)
    for j in rest:
        own = _distance_from_span(problem.apart, j, rest[rest != j])
        nonzero[j] |= np.abs(cleaned[j]) * own > distance
    return zero, nonzero


def _distance_of_fits(
    problem: Problem, coef: np.ndarray, intercept: float, alpha: float, gap: float
) -> float:
    """A bound on the weighted norm of the difference in fit to a point with duality gap `gap`.

    How far a point is above the optimum is at least the weighted sum of the loss's Bregman
    divergences from the optimal fit: half the squared difference of fits, or, for the log loss,
    twice that of probabilities (Pinsker's inequality).
    """
    own = max(certified_gap(problem, coef, intercept, alpha), 0.0)
    if problem.loss == "squared_error":
        return float(np.sqrt(2 * own) + np.sqrt(2 * gap))
    seen = problem.weight > 0
    w = problem.weight[seen]
    q = problem.mean(intercept + problem.dense @ coef)[seen]
    away = (np.sqrt(own) + np.sqrt(gap)) / np.sqrt(2 * w)
    if np.any((q - away <= 0) | (q + away >= 1)):
        return np.inf
    most = np.maximum(logit(q + away) - logit(q), logit(q) - logit(q - away))
    return float(np.sqrt(w @ most**2))


def _distance_from_span(columns: np.ndarray, j: int, others: np.ndarray) -> float:
    column = columns[:, j]
    distance = float(np.linalg.norm(_without(column, columns[:, others])))
    # A column that is in the span leaves rounding errors.
    return distance if distance > 1e-9 * np.linalg.norm(column) else 0.0


def held_out_loss(
    problem: Problem, coef: np.ndarray, intercept: float, weight: np.ndarray
) -> float:
    """The weighted mean of the loss over other rows."""
    return replace(problem, sample_weight=weight).loss_value(intercept + problem.dense @ coef)


def order_of_entry(coefs: np.ndarray, scales: np.ndarray, most: int) -> np.ndarray:
    """Columns by the first grid point with a nonzero coefficient, the larger scaled one first."""
    ever = np.flatnonzero((coefs != 0).any(axis=0))
    first = {j: int(np.argmax(coefs[:, j] != 0)) for j in ever}
    size = {j: abs(coefs[first[j], j]) * scales[j] for j in ever}
    order = sorted(ever, key=lambda j: (first[j], -size[j], j))[:most]
    return np.array(order + [-1] * (most - len(order)), dtype=np.int64)
