"""Newton's method for the two smooth s-vector objectives.

With Sigma a correlation matrix, S = diag(s) and D = 2 Sigma - S, both objectives are

    minimise over s > 0 with D positive definite:   sum_j f(s_j) + F(D),

    maximum entropy                 f = -log s,   F = -log det D
    minimum reconstructability      f = 1/s,      F = tr D^-1

(Spector and Janson 2022, "Powerful knockoffs via minimizing reconstructability", Annals of
Statistics 50; formulas from memory).  Write K = D^-1.  Moving s_j moves D by -e_j e_j', so

    -log det D:  gradient K_jj,        Hessian (K o K),      o the elementwise product;
    tr D^-1:     gradient (K^2)_jj,    Hessian 2 (K o K^2).

Each iteration therefore costs a Cholesky factorisation, an inverse, for minimum reconstructability
a square, and one more factorisation.  The paper moves one coordinate at a time; the coordinate step
has a closed form but a sweep costs more than one of these iterations (2 p^3 operations), and on
strongly correlated tables it needs tens of sweeps where Newton needs two to ten iterations.

F is convex, so its tangent at D bounds it from below; the minimum of sum_j f + tangent is closed
form, and the difference bounds the distance from the optimum without solving anything:

    maximum entropy:             sum_j  s_j K_jj - 1 - log(s_j K_jj)
    minimum reconstructability:  sum_j  (s_j^-1/2 - (s_j b_j)^1/2)^2,   b_j = (K^2)_jj.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from sparsesel.knockoffs._linalg import (
    ScaledSolver,
    add_diagonal,
    cholesky,
    inverse_from_factor,
    log_determinant,
    squared,
)


@dataclass(frozen=True)
class Evaluation:
    """Everything one iteration needs to know about a feasible point."""

    value: float
    gap: float
    gradient: np.ndarray
    hessian: np.ndarray


class SmoothObjective(Protocol):
    """An objective of the form above."""

    def evaluate(self, s: np.ndarray, factor: np.ndarray) -> Evaluation:
        """Value, gap, gradient and Hessian at s, given the Cholesky factor of D (overwritten)."""


def entropy_gap(s: np.ndarray, inverse_diagonal: np.ndarray) -> float:
    """Distance bound for maximum entropy, per column (the objective has no natural zero)."""
    product = s * inverse_diagonal
    return float(np.mean(product - 1.0 - np.log(product)))


def reconstructability_gap(s: np.ndarray, squared_diagonal: np.ndarray, value: float) -> float:
    """Distance bound for minimum reconstructability, relative to the objective."""
    terms = (1.0 / np.sqrt(s) - np.sqrt(s * squared_diagonal)) ** 2
    return float(terms.sum() / value)


class MaximumEntropy:
    """-log det S - log det D."""

    def evaluate(self, s: np.ndarray, factor: np.ndarray) -> Evaluation:
        """See `SmoothObjective`."""
        value = -float(np.log(s).sum()) - log_determinant(factor)
        inverse = inverse_from_factor(factor)
        diagonal = np.diagonal(inverse).copy()
        hessian = add_diagonal(inverse * inverse, 1.0 / s**2)
        return Evaluation(value, entropy_gap(s, diagonal), diagonal - 1.0 / s, hessian)


class MinimumReconstructability:
    """tr S^-1 + tr D^-1."""

    def evaluate(self, s: np.ndarray, factor: np.ndarray) -> Evaluation:
        """See `SmoothObjective`."""
        inverse = inverse_from_factor(factor)
        square = squared(inverse)
        diagonal = np.diagonal(square).copy()
        value = float((1.0 / s).sum() + np.trace(inverse))
        square *= inverse
        square *= 2.0
        hessian = add_diagonal(square, 2.0 / s**3)
        gap = reconstructability_gap(s, diagonal, value)
        return Evaluation(value, gap, diagonal - 1.0 / s**2, hessian)


def slack_factor(correlation: np.ndarray, s: np.ndarray) -> np.ndarray | None:
    """Cholesky factor of 2 Sigma - diag(s), None where that is not positive definite."""
    slack = 2.0 * correlation
    return cholesky(add_diagonal(slack, -s), overwrite=True)


def residual_variances(correlation: np.ndarray) -> np.ndarray:
    """A strictly feasible start: 1 / (Sigma^-1)_jj, halved until 2 Sigma - S is definite.

    The variance of a column given all others is the natural size of s_j: it follows each column
    where the smallest eigenvalue, the usual start, knows only the worst of them.
    """
    factor = cholesky(correlation)
    if factor is None:
        raise np.linalg.LinAlgError("the correlation matrix is not positive definite")
    s = 1.0 / np.diagonal(inverse_from_factor(factor))
    while slack_factor(correlation, 1.02 * s) is None:
        s = 0.5 * s
    return s


@dataclass(frozen=True)
class SolverResult:
    """Where a solver stopped: the point, its certified relative gap and the iterations used."""

    s: np.ndarray
    gap: float
    n_iter: int


def minimize_smooth(
    correlation: np.ndarray, objective: SmoothObjective, *, tol: float, max_iter: int
) -> SolverResult:
    """Minimise a smooth objective to a relative gap of ``tol``.

    Stops early, with the gap reached, when no step down the Newton direction improves the value:
    the last digits of a nearly singular matrix.
    """
    s = residual_variances(correlation)
    factor = slack_factor(correlation, s)
    assert factor is not None  # residual_variances ends on a feasible point
    point = objective.evaluate(s, factor)
    for n_iter in range(max_iter):
        if point.gap <= tol:
            return SolverResult(s, point.gap, n_iter)
        direction = -ScaledSolver(point.hessian).solve(point.gradient)
        moved = _line_search(correlation, objective, s, point, direction)
        if moved is None:
            return SolverResult(s, point.gap, n_iter)
        s, point = moved
    return SolverResult(s, point.gap, max_iter)


def _line_search(
    correlation: np.ndarray,
    objective: SmoothObjective,
    s: np.ndarray,
    point: Evaluation,
    direction: np.ndarray,
) -> tuple[np.ndarray, Evaluation] | None:
    """First of a halving sequence of steps that is feasible and descends (Armijo)."""
    slope = float(point.gradient @ direction)
    shrinking = direction < 0
    step = min(1.0, 0.95 * float(np.min(-s[shrinking] / direction[shrinking], initial=np.inf)))
    rounding = 1e-13 * abs(point.value)
    while step > 1e-6:
        trial = s + step * direction
        factor = slack_factor(correlation, trial)
        if factor is not None:
            moved = objective.evaluate(trial, factor)
            if moved.value <= point.value + 1e-4 * step * slope + rounding:
                return trial, moved
        step *= 0.5
    return None
