"""Block-diagonal S for groups of features: the group is told from its copy as a whole.

Within a group, features and copies need not be told apart one by one: S = blockdiag(S_1, ..., S_G)
with S >= 0 and D = 2 Sigma - S >= 0 (Dai and Barber 2016, "The knockoff filter for FDR control in
group-sparse and multitask regression", ICML).  Features that are nearly equal but lie in one group
then cost no power.  The rules of `s_vectors`, for groups:

equicorrelated   S_g = c Sigma_gg, c = min(1, 2 lambda_min(Sigma'))  (the same paper)
sdp              S_g = c_g Sigma_gg, 0 <= c_g <= 1, maximise the sum of c_g times the group's size
                 (Katsevich and Sabatti 2019, "Multilayer knockoff filter", Annals of Applied
                 Statistics 13, for one value per group; from memory)
mvr              minimise tr S'^-1 + tr D'^-1 over whole blocks
max_entropy      maximise log det S' + log det D' over whole blocks
                 (Chu, Gu, Chen et al. 2024, "Second-order group knockoffs with applications to
                 genome-wide association studies", Bioinformatics 40, for both; from memory)

with B = blockdiag(Sigma_11, ..., Sigma_GG), Sigma' = B^-1/2 Sigma B^-1/2, and S', D' likewise: in
these coordinates every group is made of uncorrelated features of variance one.  The first two are
then the s-vector rules with one value per group, and maximum entropy is the same in any
coordinates.  Minimum reconstructability is not, and here it departs from the paper, which uses the
features as they are: there, a group of nearly equal features spends all its room on the tiny
difference between them.  For groups of one there is no difference.  From here on all symbols are
without the prime.

The last two are solved block by block.  Write K = D^-1 and Q = K_gg^-1 + S_g, so that D >= 0
exactly while S_g <= Q.  The best block, all others fixed, is closed form:

    max_entropy   S_g = Q / 2
    mvr           S_g = ( Q^-1 + (Q^-1 H Q^-1)^1/2 )^-1,   H = K_gg^-1 (K^2)_gg K_gg^-1         (1)

(1) in words: with T = S_g^-1 the stationarity condition S^-2 = (Q - S)^-1 H (Q - S)^-1 says
(Q T - I)(Q T - I)' = H, of which it is the solution with T symmetric and T > Q^-1.  For groups of
one it is the coordinate step of Spector and Janson 2022.

Both functions of D are convex, so that their tangents bound the distance from the optimum:

    max_entropy   sum_g tr(S_g K_gg) - m_g - log det(S_g K_gg)
    mvr           sum_g tr S_g^-1 + tr(S_g M_g) - 2 tr M_g^1/2,     M_g = (K^2)_gg.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import block_diag, cho_solve, eigh, eigvalsh

from sparsesel.knockoffs._interior_point import Ties, maximize_sum
from sparsesel.knockoffs._linalg import cholesky, inverse_from_factor, symmetrize
from sparsesel.knockoffs._newton import SolverResult, residual_variances


@dataclass(frozen=True)
class GroupResult:
    """Where the solver stopped: the block-diagonal matrix, its certified gap, the sweeps."""

    matrix: np.ndarray
    gap: float
    n_iter: int


def solve_groups(
    correlation: np.ndarray, labels: np.ndarray, method: str, *, tol: float, max_iter: int
) -> GroupResult:
    """Block-diagonal S of a positive definite correlation matrix, for integer labels."""
    order = np.argsort(labels, kind="stable")
    sizes = np.unique(labels, return_counts=True)[1]
    ends = np.cumsum(sizes)
    blocks = [slice(end - size, end) for end, size in zip(ends, sizes, strict=True)]
    inner = correlation[np.ix_(order, order)]
    own = [inner[block, block] for block in blocks]
    whiten, back = (block_diag(*(_power(part, sign * 0.5) for part in own)) for sign in (-1, 1))
    whitened = symmetrize(whiten @ inner @ whiten)
    if method in ("equicorrelated", "sdp"):
        result = _tied(whitened, sizes, method, tol, max_iter)
    else:
        result = _whole_blocks(whitened, blocks, method, tol, max_iter)
    matrix = np.empty_like(inner)
    matrix[np.ix_(order, order)] = symmetrize(back @ result.matrix @ back)
    return GroupResult(matrix, result.gap, result.n_iter)


def _tied(
    correlation: np.ndarray, sizes: np.ndarray, method: str, tol: float, max_iter: int
) -> GroupResult:
    """One value per group."""
    if method == "equicorrelated":
        smallest = float(eigvalsh(correlation, subset_by_index=[0, 0])[0])
        result = SolverResult(np.full(len(sizes), min(1.0, 2.0 * smallest)), 0.0, 1)
    else:
        result = maximize_sum(correlation, tol=tol, max_iter=max_iter, ties=Ties.of(sizes))
    return GroupResult(np.diag(np.repeat(result.s, sizes)), result.gap, result.n_iter)


def _whole_blocks(
    correlation: np.ndarray, blocks: list[slice], method: str, tol: float, max_iter: int
) -> GroupResult:
    """Sweeps of the closed-form block steps until the certified gap is at most ``tol``.

    D^-1 is built afresh at every sweep, so that rounding does not pile up.
    """
    S = np.diag(residual_variances(correlation))
    best = GroupResult(S, np.inf, 0)
    for n_iter in range(max_iter + 1):
        factor = cholesky(2.0 * correlation - S)
        if factor is None:
            break
        inverse = inverse_from_factor(factor)
        gap = _gap(S, inverse, blocks, method)
        if gap < best.gap:
            best = GroupResult(S.copy(), gap, n_iter)
        if gap <= tol:
            break
        for block in blocks:
            moved = _best_block(S[block, block], inverse, block, method)
            _update(inverse, block, moved - S[block, block])
            S[block, block] = moved
    return best


def _best_block(S_g: np.ndarray, inverse: np.ndarray, block: slice, method: str) -> np.ndarray:
    """The best block, all others fixed: equation (1) and the one before it."""
    own = np.linalg.inv(inverse[block, block])
    limit = S_g + 0.5 * (own + own.T)
    if method == "max_entropy":
        return 0.5 * limit
    rows = inverse[block]
    spread = own @ (rows @ rows.T) @ own
    limit_inverse = np.linalg.inv(limit)
    moved = _power(limit_inverse @ spread @ limit_inverse, 0.5)
    found = np.linalg.inv(limit_inverse + moved)
    return 0.5 * (found + found.T)


def _update(inverse: np.ndarray, block: slice, change: np.ndarray) -> None:
    """(D - E change E')^-1 in place: K + K_g change (I - K_gg change)^-1 K_g'."""
    columns = inverse[:, block].copy()
    middle = np.eye(len(change)) - inverse[block, block] @ change
    weight = np.linalg.solve(middle.T, change.T).T
    inverse += columns @ (0.5 * (weight + weight.T)) @ columns.T


def _power(matrix: np.ndarray, exponent: float) -> np.ndarray:
    """Symmetric power of a positive semidefinite matrix."""
    values, vectors = eigh(0.5 * (matrix + matrix.T))
    floor = np.finfo(np.float64).eps * max(float(values[-1]), np.finfo(np.float64).tiny)
    return (vectors * np.maximum(values, floor) ** exponent) @ vectors.T


def _gap(S: np.ndarray, inverse: np.ndarray, blocks: list[slice], method: str) -> float:
    """Certified distance from the optimum: per feature, or relative for "mvr"."""
    total, value = 0.0, float(np.trace(inverse))
    for block in blocks:
        own = S[block, block]
        factor = cholesky(np.ascontiguousarray(own))
        if factor is None:
            return np.inf
        if method == "max_entropy":
            product = own @ inverse[block, block]
            total += float(np.trace(product)) - len(own) - float(np.linalg.slogdet(product)[1])
            continue
        rows = inverse[block]
        square = rows @ rows.T
        trace = float(np.trace(cho_solve((factor, True), np.eye(len(own)))))
        roots = np.sqrt(np.maximum(eigvalsh(square), 0.0)).sum()
        total += trace + float(np.vdot(own, square)) - 2.0 * float(roots)
        value += trace
    return total / (value if method == "mvr" else len(S))
