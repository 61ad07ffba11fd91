"""s-vectors of diagonal-plus-low-rank correlation matrices by blocked coordinate ascent.

With Sigma = diag(delta) + U U', write D = 2 Sigma - S = diag(a) + V V', a = 2 delta - s,
V = sqrt(2) U, C = (I + V' diag(1/a) V)^-1 and K = D^-1.  For one coordinate, with v its row of V,
t = v'Cv and C_ the matrix C without that coordinate's contribution,

    1/K_jj = a_j + tau_j,     tau_j = v' C_ v = a_j t / (a_j - t),

so D stays definite exactly while s_j < q_j = 2 delta_j + tau_j.  Each objective is minimised along
the coordinate in closed form (Spector and Janson 2022; Askari, Rebjock, d'Aspremont and
El Ghaoui 2021 for the barrier; formulas from memory and checked against the dense solvers):

    maximum entropy             s_j = q_j / 2
    minimum reconstructability  s_j = q_j / (1 + sqrt(h_j)),   h_j = (K^2)_jj / K_jj^2
    SDP, barrier weight m       s_j = min(1, max(0, q_j - m))

and a_j -> a_j' changes C by a rank-one term.  A block of coordinates needs C only through the
small matrix P = V_B C V_B' (and V_B C G C V_B' with G = V' diag(1/a^2) V for minimum
reconstructability), so the kernel works on those, and C and G are updated once a block by matrix
products.  A sweep costs O(p k^2).  C and G are built afresh at every sweep, so rounding does not
pile up.

A coordinate with a_j between -1e-5 tau_j and 1e-5 tau_j is moved to the upper end: at a_j = 0 the
representation breaks although D does not.
"""

from __future__ import annotations

import numpy as np

from sparsesel.engine._jit import kernel
from sparsesel.knockoffs._newton import SolverResult, entropy_gap, reconstructability_gap
from sparsesel.knockoffs.low_rank import LowRankCovariance, capacitance, negative_eigenvalues

_BLOCK = 32
_NEAR_ZERO = 1e-5
_DECAY = 0.7

# Codes of the objectives inside the kernel.
_CODES = {"max_entropy": 0, "mvr": 1, "sdp": 2}


@kernel
def _block_ascent(
    code: int,
    barrier: float,
    twice_delta: np.ndarray,
    s: np.ndarray,
    inner: np.ndarray,
    inner_squared: np.ndarray,
    near_zero: float,
) -> None:
    """One pass over the coordinates of a block; s, P and V_B C G C V_B' change in place."""
    size = s.shape[0]
    column = np.empty(size)
    row = np.empty(size)
    for j in range(size):
        a = twice_delta[j] - s[j]
        t = inner[j, j]
        tau = a * t / (a - t)
        limit = twice_delta[j] + tau
        if code == 0:
            proposal = 0.5 * limit
        elif code == 1:
            share = 1.0 - t / a
            spread = 1.0 + (inner_squared[j, j] - (t / a) ** 2) / (share * share)
            proposal = limit / (1.0 + np.sqrt(max(spread, 1.0)))
        else:
            proposal = min(1.0, max(0.0, limit - barrier))
        moved = twice_delta[j] - proposal
        if abs(moved) < near_zero * tau:
            moved = near_zero * tau
            proposal = twice_delta[j] - moved
        if not (0.0 <= proposal < limit):
            continue
        s[j] = proposal
        theta = 1.0 / moved - 1.0 / a
        phi = theta / (1.0 + theta * t)
        for i in range(size):
            column[i] = inner[i, j]
        if code == 1:
            psi = 1.0 / (moved * moved) - 1.0 / (a * a)
            for i in range(size):
                row[i] = inner_squared[i, j] + psi * t * column[i]
            own = row[j]
            for i in range(size):
                for k in range(size):
                    inner_squared[i, k] += (
                        psi * column[i] * column[k]
                        - phi * (column[i] * row[k] + row[i] * column[k])
                        + phi * phi * own * column[i] * column[k]
                    )
        for i in range(size):
            for k in range(size):
                inner[i, k] -= phi * column[i] * column[k]


def solve_low_rank(
    correlation: LowRankCovariance, method: str, *, tol: float, max_iter: int
) -> SolverResult:
    """Coordinate ascent to a certified relative gap of ``tol``; the gap reached is returned.

    The SDP starts from the maximum entropy vector, where q_j = 2 s_j, and its barrier weight from
    the size of s there: with less, the first coordinates would take what belongs to the later ones.
    It is then cut by ``_DECAY`` after every sweep until its own share of the gap is below a third
    of ``tol``.
    """
    s = np.minimum(correlation.diagonal, 0.9)
    barrier = 0.0
    if method == "sdp":
        s = np.minimum(
            solve_low_rank(correlation, "max_entropy", tol=1e-3, max_iter=max_iter).s, 1.0
        )
        barrier = float(s.mean())
    best = SolverResult(s, np.inf, 0)
    for n_iter in range(1, max_iter + 1):
        s = _sweep(correlation, s, method, barrier)
        gap = _gap(correlation, s, method, barrier)
        if gap < best.gap:
            best = SolverResult(s, gap, n_iter)
        if gap <= tol:
            break
        if method == "sdp" and 3.0 * barrier * len(s) > tol * s.sum():
            barrier *= _DECAY
    return best


def _sweep(
    correlation: LowRankCovariance, s: np.ndarray, method: str, barrier: float
) -> np.ndarray:
    """One pass over all coordinates, block by block."""
    twice_delta = 2.0 * correlation.diagonal
    loadings = np.sqrt(2.0) * correlation.loadings
    s = s.copy()
    slack = twice_delta - s
    middle = np.linalg.inv(capacitance(slack, loadings))
    second = (loadings / slack[:, None] ** 2).T @ loadings
    code = _CODES[method]
    for start in range(0, len(s), _BLOCK):
        block = slice(start, start + _BLOCK)
        rows = loadings[block]
        carried = rows @ middle
        inner = carried @ rows.T
        inner_squared = carried @ second @ carried.T if code == 1 else inner
        before = inner.copy()
        moved = s[block].copy()
        _block_ascent(code, barrier, twice_delta[block], moved, inner, inner_squared, _NEAR_ZERO)
        old, new = slack[block], twice_delta[block] - moved
        theta = 1.0 / new - 1.0 / old
        # C - C V_B' Theta (I + P Theta)^-1 V_B C, the block form of the kernel's rank-one changes
        update = np.linalg.solve(
            np.eye(len(theta)) + theta[:, None] * before, theta[:, None] * carried
        )
        middle -= carried.T @ update
        middle = 0.5 * (middle + middle.T)
        second += (rows * (1.0 / new**2 - 1.0 / old**2)[:, None]).T @ rows
        s[block], slack[block] = moved, new
    return s


def _gap(correlation: LowRankCovariance, s: np.ndarray, method: str, barrier: float) -> float:
    """Certified relative distance from the optimum at s; infinite where D is not definite."""
    slack = 2.0 * correlation.diagonal - s
    loadings = np.sqrt(2.0) * correlation.loadings
    if negative_eigenvalues(slack, loadings) > 0:
        return np.inf
    scaled = loadings / slack[:, None]
    middle = np.linalg.inv(capacitance(slack, loadings))
    carried = scaled @ middle
    diagonal = 1.0 / slack - np.einsum("ij,ij->i", carried, scaled)
    if method == "max_entropy":
        return entropy_gap(s, diagonal)
    if method == "mvr":
        once = np.einsum("ij,ij->i", carried / slack[:, None], scaled)
        twice = np.einsum("ij,ij->i", carried @ (scaled.T @ scaled), carried)
        squared = 1.0 / slack**2 - 2.0 * once + twice
        return reconstructability_gap(s, squared, float((1.0 / s).sum() + diagonal.sum()))
    # Z = m K is semidefinite; scaled so that Z_jj = 1 wherever s_j is inside its bounds, it bounds
    # the optimum up to the square of what is left of the barrier problem
    dual = barrier * diagonal
    inside = (s > 0) & ((s < 1) | (dual > 1))
    weight = np.where(inside, 1.0 / np.sqrt(dual), 1.0)
    cross = (correlation.loadings * weight[:, None]).T @ scaled
    bound = (
        2.0
        * barrier
        * float(
            (weight**2 * correlation.diagonal) @ diagonal
            + (weight**2 / slack) @ (correlation.variances - correlation.diagonal)
            - np.vdot(cross @ middle, cross)
        )
    )
    bound += float(np.maximum(1.0 - weight**2 * dual, 0.0).sum())
    return (bound - float(s.sum())) / float(s.sum())
