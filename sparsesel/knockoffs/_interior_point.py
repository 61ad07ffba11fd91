"""The s-vector semidefinite program by a primal-dual interior-point method.

With Sigma a correlation matrix, S = diag(s), D = 2 Sigma - S and u = 1 - s (Barber and Candes 2015,
equation 2.8, in the form that maximises):

    maximise  sum_j s_j    subject to    D >= 0 (semidefinite),  s >= 0,  u >= 0.

Dual variables Z (semidefinite), w, v >= 0 belong to the three constraints.  The dual program is

    minimise  2 tr(Sigma Z) + sum_j v_j    subject to    Z_jj - w_j + v_j = 1,

and the cheapest v, w for a given Z are the positive parts of 1 - Z_jj and Z_jj - 1, so *every*
semidefinite Z certifies

    optimum <= 2 tr(Sigma Z) + sum_j (1 - Z_jj)_+ .                                       (1)

The iterations follow the central path Z D = mu I, s_j w_j = mu, u_j v_j = mu by Newton steps in the
symmetrised direction that keeps D exact (the dual form of the direction of Helmberg, Rendl,
Vanderbei and Wolkowicz 1996).  With K = D^-1 and a step x in s,

    dZ = mu K - Z + sym(Z diag(x) K),    dw = mu/s - w - (w/s) x,    dv = mu/u - v + (v/u) x,

and keeping the dual equation leaves one p x p system:

    [ (Z o K) + diag(w/s + v/u) ] x = 1 - mu (K_jj - 1/s_j + 1/u_j).                      (2)

Each iteration solves (2) twice (Mehrotra 1992): once with mu = 0, and once with the mu that the
last step lengths deserve and the second-order terms sym(dZ diag(x) K), dw x/s, dv x/u of the first.

**Ties.**  For groups of features, s holds one value per group, and sum_j s_j counts each as often
as it has members.  The derivatives with respect to a tied value are sums over its columns: K_jj,
Z_jj and the system (2) are summed over the members of each group, and 1 becomes their number.

Coordinate ascent on a log-barrier, the method of the s-vector literature, is not used here: where
the optimum leaves many s_j at zero or repeats along a chain (autoregressive tables), it stops
moving several percent short of the optimum, without a sign that it did.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from sparsesel.knockoffs._linalg import (
    ScaledSolver,
    add_diagonal,
    cholesky,
    inverse_from_factor,
    largest_step,
    symmetrize,
)
from sparsesel.knockoffs._newton import (
    MaximumEntropy,
    SolverResult,
    entropy_gap,
    minimize_smooth,
    residual_variances,
)

# How far towards the boundary of the cone a step may go.
_FRACTION = 0.93

# How near to the analytic centre the first iterate is, in the gap of maximum entropy.
_CENTRED = 0.3

# Relative gap above which, and mean diagonal of D^-1 below which, products are taken in single
# precision.
_ROUGH = 1e-2
_INSIDE = 30.0

# A step shorter than this makes no progress that rounding would not undo.
_SHORTEST = 1e-5


@dataclass(frozen=True)
class Ties:
    """Columns that share one value: neighbours, ``size`` of them in each group.

    ``starts`` is the first column of each group, None where every column is on its own.
    """

    size: np.ndarray
    starts: np.ndarray | None = None

    @classmethod
    def of(cls, sizes: np.ndarray) -> Ties:
        """From the number of columns in each group."""
        return cls(sizes.astype(np.float64), np.concatenate([[0], np.cumsum(sizes)[:-1]]))

    def spread(self, values: np.ndarray) -> np.ndarray:
        """The value of each column."""
        return values if self.starts is None else np.repeat(values, self.size.astype(np.intp))

    def pooled(self, values: np.ndarray) -> np.ndarray:
        """Sums over the columns of each group."""
        return values if self.starts is None else np.add.reduceat(values, self.starts)

    def pooled_matrix(self, matrix: np.ndarray) -> np.ndarray:
        """Sums over the columns and rows of each pair of groups."""
        if self.starts is None:
            return matrix
        return np.add.reduceat(np.add.reduceat(matrix, self.starts, 0), self.starts, 1)


@dataclass(frozen=True)
class _Iterate:
    """Primal point, factor and inverse of D, dual point with factor, last step lengths."""

    s: np.ndarray
    slack_factor: np.ndarray
    inverse: np.ndarray
    dual: np.ndarray
    dual_factor: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    primal_step: float
    dual_step: float


@dataclass(frozen=True)
class _Direction:
    """A joint step."""

    s: np.ndarray
    dual: np.ndarray
    lower: np.ndarray
    upper: np.ndarray


def maximize_sum(
    correlation: np.ndarray, *, tol: float, max_iter: int, ties: Ties | None = None
) -> SolverResult:
    """Maximise sum(s) to a certified relative gap of ``tol``; with ties, s is per group."""
    ties = Ties(np.ones(len(correlation))) if ties is None else ties
    iterate = _start(correlation, ties)
    best = SolverResult(iterate.s, np.inf, 0)
    for n_iter in range(max_iter + 1):
        gap = certified_gap(correlation, iterate.s, iterate.dual, ties)
        if gap < best.gap:
            best = SolverResult(iterate.s, gap, n_iter)
        if gap <= tol or max(iterate.primal_step, iterate.dual_step) < 2 * _SHORTEST:
            break
        # far from the optimum and well inside the cone the direction needs few digits, and its
        # two products cost most
        rough = gap > _ROUGH and np.trace(iterate.inverse) < _INSIDE * len(correlation)
        precision = np.float32 if rough else np.float64
        iterate = _advance(correlation, iterate, ties, precision)
    return replace(best, n_iter=n_iter)


def certified_gap(correlation: np.ndarray, s: np.ndarray, dual: np.ndarray, ties: Ties) -> float:
    """Distance bound (1), relative to the objective, for a semidefinite dual matrix."""
    bound = 2.0 * float(np.vdot(correlation, dual))
    bound += float(np.maximum(ties.size - ties.pooled(np.diagonal(dual)), 0.0).sum())
    total = float(s @ ties.size)
    return (bound - total) / total


def _start(correlation: np.ndarray, ties: Ties) -> _Iterate:
    """Roughly the analytic centre, with the dual point on the central path through it.

    The size of the dual point is a tenth of the mu at which the Newton decrement of the barrier
    problem is one; smaller and the first steps are cut at the boundary, larger and they are wasted.
    """
    s, factor, inverse = _inside(correlation, residual_variances(correlation), ties)
    if entropy_gap(ties.spread(s), np.diagonal(inverse)) > _CENTRED:
        centre = minimize_smooth(correlation, MaximumEntropy(), tol=_CENTRED, max_iter=50).s
        s, factor, inverse = _inside(correlation, centre, ties)
    curvature = ties.pooled_matrix(inverse * inverse)
    add_diagonal(curvature, 1.0 / s**2 + 1.0 / (1.0 - s) ** 2)
    size = 0.1 * np.sqrt(ties.size @ ScaledSolver(curvature).solve(ties.size))
    return _Iterate(
        s=s,
        slack_factor=factor,
        inverse=inverse,
        dual=size * inverse,
        dual_factor=_definite(size * inverse),
        lower=size / s,
        upper=size / (1.0 - s),
        primal_step=0.5,
        dual_step=0.5,
    )


def _inside(
    correlation: np.ndarray, values: np.ndarray, ties: Ties
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """A point below feasible values, with the factor and the inverse of its slack."""
    s = np.minimum(values, 0.8)
    if ties.starts is not None:
        s = np.minimum.reduceat(s, ties.starts)
    factor = _definite(add_diagonal(2.0 * correlation, -ties.spread(s)))
    return s, factor, inverse_from_factor(factor.copy(order="K"))


def _definite(matrix: np.ndarray) -> np.ndarray:
    """Cholesky factor of a matrix known to be positive definite."""
    factor = cholesky(matrix)
    if factor is None:
        raise np.linalg.LinAlgError("an iterate left the cone of positive definite matrices")
    return factor


def _advance(
    correlation: np.ndarray, at: _Iterate, ties: Ties, precision: type = np.float64
) -> _Iterate:
    """One predictor-corrector iteration."""
    s, upper_slack = at.s, 1.0 - at.s
    products = 2.0 * np.vdot(correlation, at.dual) - s @ ties.pooled(np.diagonal(at.dual))
    products += s @ at.lower + upper_slack @ at.upper
    complementarity = float(products) / (len(correlation) + 2 * len(s))
    centring = max(0.02, (1.0 - min(at.primal_step, at.dual_step)) ** 1.5)
    system = ties.pooled_matrix(at.dual * at.inverse)
    add_diagonal(system, at.lower / s + at.upper / upper_slack)
    solver = ScaledSolver(system)
    direction = _corrected_direction(at, solver, centring * complementarity, ties, precision)

    primal_step, primal = _primal_step(correlation, at, direction, ties)
    dual_step, dual = _dual_step(at, direction)
    return _Iterate(
        s=s + primal_step * direction.s,
        slack_factor=primal,
        inverse=inverse_from_factor(primal.copy(order="K")),
        dual=dual[0],
        dual_factor=dual[1],
        lower=at.lower + dual_step * direction.lower,
        upper=at.upper + dual_step * direction.upper,
        primal_step=primal_step,
        dual_step=dual_step,
    )


def _corrected_direction(
    at: _Iterate, solver: ScaledSolver, target: float, ties: Ties, precision: type
) -> _Direction:
    """Predictor (mu = 0), then the step to ``target`` with the predictor's second-order terms."""
    s, upper_slack, inverse = at.s, 1.0 - at.s, at.inverse
    diagonal = ties.pooled(np.diagonal(inverse))
    first = solver.solve(ties.size)
    other: np.ndarray = inverse.astype(precision, copy=False)
    second = symmetrize((at.dual * ties.spread(first)).astype(precision, copy=False) @ other)
    second = second.astype(np.float64, copy=False)
    second -= at.dual
    second *= ties.spread(first)
    lower = (at.lower + (at.lower / s) * first) * first / s
    upper = (-at.upper + (at.upper / upper_slack) * first) * first / upper_slack
    correction = ties.pooled(np.einsum("ij,ij->i", second, inverse)) - lower + upper
    right_side = ties.size - target * (diagonal - 1.0 / s + 1.0 / upper_slack) - correction
    x = solver.solve(right_side)

    second += at.dual * ties.spread(x)
    dual = symmetrize(second.astype(precision, copy=False) @ other).astype(np.float64, copy=False)
    dual -= at.dual
    dual += target * inverse
    return _Direction(
        s=x,
        dual=dual,
        lower=target / s - at.lower - (at.lower / s) * x + lower,
        upper=target / upper_slack - at.upper + (at.upper / upper_slack) * x + upper,
    )


def _to_boundary(values: np.ndarray, change: np.ndarray) -> float:
    """Largest step that keeps positive values nonnegative."""
    falling = change < 0
    return float(np.min(-values[falling] / change[falling], initial=np.inf))


def _primal_step(
    correlation: np.ndarray, at: _Iterate, direction: _Direction, ties: Ties
) -> tuple[float, np.ndarray]:
    """Step length in s, with the factor of the slack it leads to."""
    step = min(
        _to_boundary(at.s, direction.s),
        _to_boundary(1.0 - at.s, -direction.s),
        largest_step(at.slack_factor, ties.spread(direction.s)),
    )
    step = min(1.0, _FRACTION * step)
    while step > _SHORTEST:
        slack = add_diagonal(2.0 * correlation, -ties.spread(at.s + step * direction.s))
        factor = cholesky(slack, overwrite=True)
        if factor is not None:
            return step, factor
        step *= 0.8
    return 0.0, at.slack_factor


def _dual_step(at: _Iterate, direction: _Direction) -> tuple[float, tuple[np.ndarray, np.ndarray]]:
    """Step length of the dual point, with the dual matrix it leads to and its factor."""
    step = min(
        _to_boundary(at.lower, direction.lower),
        _to_boundary(at.upper, direction.upper),
        largest_step(at.dual_factor, -direction.dual),
    )
    step = min(1.0, _FRACTION * step)
    while step > _SHORTEST:
        dual = at.dual + step * direction.dual
        factor = cholesky(dual)
        if factor is not None:
            return step, (dual, factor)
        step *= 0.8
    return 0.0, (at.dual, at.dual_factor)
