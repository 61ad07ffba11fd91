"""How far each copy may move away from its original: the s-vector.

Copies of features with correlation matrix Sigma have

    corr(X_j, X~_k) = Sigma_jk  for j != k,     corr(X_j, X~_j) = 1 - s_j,

which is possible exactly when S = diag(s) >= 0 and D = 2 Sigma - S >= 0 (semidefinite).  The larger
s_j, the easier the original is told from its copy.  Four rules choose s:

equicorrelated   s_j = min(1, 2 lambda_min(Sigma)), one value for all
                 (Barber and Candes 2015, "Controlling the false discovery rate via knockoffs",
                 Annals of Statistics 43, section 2.1.1);
sdp              maximise sum_j s_j with s_j <= 1 (same paper, equation 2.8);
mvr              minimise tr S^-1 + tr D^-1: no feature can be rebuilt from all other columns
                 (Spector and Janson 2022, "Powerful knockoffs via minimizing reconstructability",
                 Annals of Statistics 50; minimum variance-based reconstructability);
max_entropy      maximise log det S + log det D (same paper; Gimenez and Zou 2019).

The SDP minimises the correlation of a feature with its own copy and nothing else, so that its D is
singular: originals can then be rebuilt from the copies, which costs power on correlated tables.
The last two keep D away from singular, and are the better default.

Covariances are handled on the correlation scale, S being multiplied back.  The solvers:

=================  =====================================  ===================================
matrix             mvr, max_entropy                       sdp
=================  =====================================  ===================================
dense              Newton, certified gap                  primal-dual interior point
diagonal + rank k  blocked coordinate ascent, O(p k^2)    the same on a log-barrier
=================  =====================================  ===================================
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import Enum

import numpy as np
from scipy.cluster.hierarchy import fcluster, linkage
from scipy.linalg import eigvalsh
from scipy.spatial.distance import squareform

from sparsesel.knockoffs._coordinate import solve_low_rank
from sparsesel.knockoffs._interior_point import maximize_sum
from sparsesel.knockoffs._linalg import add_diagonal, cholesky
from sparsesel.knockoffs._newton import (
    MaximumEntropy,
    MinimumReconstructability,
    SolverResult,
    minimize_smooth,
)
from sparsesel.knockoffs.group_s import solve_groups
from sparsesel.knockoffs.low_rank import LowRankCovariance, negative_eigenvalues

__all__ = [
    "S_VECTOR_METHODS",
    "SVector",
    "SVectorStatus",
    "block_diagonal_s_vector",
    "s_vector",
    "solve_s_vector",
]

S_VECTOR_METHODS = ("mvr", "max_entropy", "sdp", "equicorrelated")

# The smallest eigenvalue a correlation matrix is used with: below it the inverse of 2 Sigma - S has
# no correct digits left, and a feature that is this close to a combination of others has no power.
SMALLEST_EIGENVALUE = 1e-8

_TOL = {"sdp": 1e-6, "mvr": 1e-10, "max_entropy": 1e-10, "equicorrelated": 0.0}

# S of groups is a dense matrix, found in O(n_features^3) a sweep.
LARGEST_WITH_GROUPS = 5000

# Up to this many features a diagonal-plus-low-rank matrix is solved as a dense one.
_DENSE_ALWAYS = 500


class SVectorStatus(Enum):
    """How a solve ended; the value says what to do."""

    CONVERGED = "the certified gap is at or below tol"
    NOT_CONVERGED = (
        "the certified gap is above tol; the s-vector is valid and may be short of the optimum: "
        "raise max_iter, or accept the gap reported"
    )
    IN_BLOCKS = "solved block by block; the s-vector is valid and no gap is certified"


@dataclass(frozen=True)
class SVector:
    """An s-vector with the proof of what it is.

    Attributes
    ----------
    s : ndarray of shape (n_features,)
        The s-vector, on the scale of the covariance given.
    method : str
        The rule.
    gap : float
        Certified distance from the optimum: relative to the objective for "sdp" and "mvr", per
        feature for "max_entropy" (whose objective has no natural zero), 0 for "equicorrelated".
    n_iter : int
        Iterations (dense) or sweeps (low rank).
    status : SVectorStatus
        How the solve ended.
    shrinkage : float
        The weight of the identity that was mixed into a nearly singular correlation matrix, 0 where
        none was needed.  The s-vector is valid for the mixed matrix.
    matrix : ndarray of shape (n_features, n_features) or None
        With feature groups, the block-diagonal S whose diagonal is ``s``.
    """

    s: np.ndarray
    method: str
    gap: float
    n_iter: int
    status: SVectorStatus
    shrinkage: float
    matrix: np.ndarray | None = None

    @property
    def S(self) -> np.ndarray:
        """What moves the copies: the matrix with groups, the vector without."""
        return self.s if self.matrix is None else self.matrix


def s_vector(covariance: np.ndarray | LowRankCovariance, method: str = "mvr") -> np.ndarray:
    """The s-vector of a covariance matrix.

    Parameters
    ----------
    covariance : ndarray of shape (n_features, n_features) or LowRankCovariance
        Covariance or correlation matrix.  A feature with variance 0 gets s = 0.
    method : {"mvr", "max_entropy", "sdp", "equicorrelated"}, default="mvr"
        The rule, see the module.

    Returns
    -------
    ndarray of shape (n_features,)
        Nonnegative, with ``2 * covariance - diag(s)`` positive semidefinite (for a nearly singular
        matrix, after the shrinkage that `solve_s_vector` reports).

    Raises
    ------
    ValueError
        If the matrix is not square, symmetric and finite, is far from positive semidefinite, or the
        method is unknown.

    References
    ----------
    Barber and Candes 2015, equation 2.8; Spector and Janson 2022.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import s_vector
    >>> s_vector(np.array([[1.0, 0.5], [0.5, 1.0]]), "max_entropy").round(4).tolist()
    [0.634, 0.634]
    """
    return solve_s_vector(covariance, method).s


def solve_s_vector(
    covariance: np.ndarray | LowRankCovariance,
    method: str = "mvr",
    *,
    feature_groups: np.ndarray | None = None,
    tol: float | None = None,
    max_iter: int = 100,
) -> SVector:
    """The s-vector with its certified gap, status and shrinkage; parameters as for `s_vector`.

    Parameters
    ----------
    covariance : ndarray of shape (n_features, n_features) or LowRankCovariance
        Covariance or correlation matrix.
    method : {"mvr", "max_entropy", "sdp", "equicorrelated"}, default="mvr"
        The rule, see the module.
    feature_groups : array-like of shape (n_features,), default=None
        Labels of groups that are told from their copies as a whole: S is then block-diagonal.
    tol : float, default=None
        Largest certified gap, above 0.  None: 1e-6 for "sdp", and 1e-10 for "mvr" and
        "max_entropy", whose gap is the square of the error in s.
    max_iter : int, default=100
        Most iterations or sweeps, at least 1.

    Returns
    -------
    SVector
        The s-vector and its proof.

    Raises
    ------
    ValueError
        As for `s_vector`.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import solve_s_vector
    >>> solution = solve_s_vector(np.array([[1.0, 0.5], [0.5, 1.0]]), "sdp")
    >>> solution.s.round(4).tolist(), solution.gap <= 1e-6
    ([1.0, 1.0], True)
    """
    if method not in S_VECTOR_METHODS:
        raise ValueError(
            f"The s-vector method {method!r} is unknown; allowed are "
            f"{', '.join(map(repr, S_VECTOR_METHODS))}. 'mvr' is the usual choice."
        )
    tol = _TOL[method] if tol is None else tol
    if feature_groups is not None:
        return _solve_groups(covariance, method, np.asarray(feature_groups), tol, max_iter)
    if isinstance(covariance, LowRankCovariance) and covariance.n_features > _DENSE_ALWAYS:
        correlation = covariance.scaled(1.0 / np.sqrt(covariance.variances))
        solution = _solve_low_rank(correlation, method, tol, max_iter)
        return replace(solution, s=solution.s * covariance.variances)
    matrix = _checked(_dense(covariance))
    variances = np.diagonal(matrix)
    varying = variances > 0
    s = np.zeros(len(variances))
    if not varying.any():
        return SVector(s, method, 0.0, 0, SVectorStatus.CONVERGED, 0.0)
    solution = _solve_dense(_to_correlation(matrix, varying), method, tol, max_iter)
    s[varying] = solution.s * variances[varying]
    return replace(solution, s=s)


def _dense(covariance: np.ndarray | LowRankCovariance) -> np.ndarray:
    return covariance.dense() if isinstance(covariance, LowRankCovariance) else covariance


def _to_correlation(covariance: np.ndarray, varying: np.ndarray) -> np.ndarray:
    """Correlation matrix of the features that vary."""
    scale = 1.0 / np.sqrt(np.diagonal(covariance)[varying])
    return covariance[np.ix_(varying, varying)] * scale * scale[:, None]


def _solve_groups(
    covariance: np.ndarray | LowRankCovariance,
    method: str,
    labels: np.ndarray,
    tol: float,
    max_iter: int,
) -> SVector:
    """The block-diagonal S, on the scale of the covariance."""
    if labels.shape != covariance.shape[:1] or covariance.shape[0] > LARGEST_WITH_GROUPS:
        raise ValueError(
            f"{labels.shape} labels of groups were given for {covariance.shape[0]} features; one "
            f"label per feature is needed, for at most {LARGEST_WITH_GROUPS} features. For more, "
            "keep one feature of each group, or leave the groups out."
        )
    matrix = _checked(_dense(covariance))
    varying = np.diagonal(matrix) > 0
    S = np.zeros_like(matrix)
    solution = SVector(np.diagonal(S), method, 0.0, 0, SVectorStatus.CONVERGED, 0.0, S)
    if not varying.any():
        return solution
    correlation, shrinkage = well_conditioned(_to_correlation(matrix, varying))
    assert isinstance(correlation, np.ndarray)
    codes = np.unique(labels[varying], return_inverse=True)[1]
    result = solve_groups(correlation, codes, method, tol=tol, max_iter=max_iter)
    blocks, slack = result.matrix, 1e-13
    while not _is_definite(correlation, blocks):
        blocks, slack = result.matrix * (1.0 - slack), 4.0 * slack
    scale = np.sqrt(np.diagonal(matrix)[varying])
    S[np.ix_(varying, varying)] = blocks * scale * scale[:, None]
    status = _status(result.gap, tol)
    return SVector(np.diagonal(S).copy(), method, result.gap, result.n_iter, status, shrinkage, S)


def block_diagonal_s_vector(
    covariance: np.ndarray, method: str = "mvr", *, largest_block: int = 500
) -> np.ndarray:
    """Approximate s-vector of a large dense covariance: solve blocks apart, then scale once.

    The features are clustered by average linkage on 1 - |correlation|, each cluster of at most
    ``largest_block`` features is solved by itself, and the whole vector is multiplied by the
    largest number up to 1 that keeps 2 Sigma - S positive definite (found by bisection).

    Parameters
    ----------
    covariance : ndarray of shape (n_features, n_features)
        Covariance or correlation matrix.
    method : {"mvr", "max_entropy", "sdp", "equicorrelated"}, default="mvr"
        The rule used inside the blocks.
    largest_block : int, default=500
        Most features in a block, at least 1.

    Returns
    -------
    ndarray of shape (n_features,)
        A valid s-vector, optimal only where the covariance is block-diagonal.

    Raises
    ------
    ValueError
        As for `s_vector`.

    References
    ----------
    Candes, Fan, Janson and Lv 2018, "Panning for gold: model-X knockoffs for high dimensional
    controlled variable selection", Journal of the Royal Statistical Society B 80, section 3.4.2.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import block_diagonal_s_vector
    >>> pairs = np.kron(np.eye(2), np.array([[1.0, 0.5], [0.5, 1.0]]))
    >>> block_diagonal_s_vector(pairs, "max_entropy", largest_block=2).round(4).tolist()
    [0.634, 0.634, 0.634, 0.634]
    """
    matrix = _checked(covariance)
    variances = np.diagonal(matrix)
    scale = 1.0 / np.sqrt(np.where(variances > 0, variances, 1.0))
    correlation = matrix * scale * scale[:, None]
    s = np.zeros(len(variances))
    for members in _blocks(correlation, largest_block):
        s[members] = s_vector(correlation[np.ix_(members, members)], method)
    varying = variances > 0
    inner, _ = well_conditioned(correlation[np.ix_(varying, varying)])
    assert isinstance(inner, np.ndarray)
    s[varying] *= _largest_scaling(inner, s[varying])
    return s * variances


def _blocks(correlation: np.ndarray, largest: int) -> list[np.ndarray]:
    """Clusters of at most ``largest`` features, large clusters cut further down their own tree."""
    size = len(correlation)
    if size <= largest:
        return [np.arange(size)]
    distance = np.clip(1.0 - np.abs(correlation), 0.0, None)
    np.fill_diagonal(distance, 0.0)
    tree = linkage(squareform(distance, checks=False), method="average")
    heights = np.unique(tree[:, 2])[::-1]
    low, high = 0, len(heights)
    while low < high:
        middle = (low + high) // 2
        labels = fcluster(tree, heights[middle], criterion="distance")
        low, high = (low, middle) if np.bincount(labels).max() <= largest else (middle + 1, high)
    cut = heights[low] if low < len(heights) else -1.0
    labels = fcluster(tree, cut, criterion="distance")
    clusters = [np.flatnonzero(labels == label) for label in np.unique(labels)]
    return [
        part
        for members in clusters
        for part in np.array_split(members, -(-len(members) // largest))
    ]


def _largest_scaling(correlation: np.ndarray, s: np.ndarray) -> float:
    """Largest factor up to 1 that keeps 2 Sigma - factor * S positive definite."""
    if _is_definite(correlation, s):
        return 1.0
    low, high = 0.0, 1.0
    while high - low > 1e-6:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if _is_definite(correlation, middle * s) else (low, middle)
    return low


def _checked(covariance: np.ndarray) -> np.ndarray:
    """The covariance as a symmetric C-ordered float64 matrix."""
    matrix = np.array(covariance, dtype=np.float64, order="C")
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1] or matrix.shape[0] == 0:
        raise ValueError(
            f"A covariance of shape {matrix.shape} was given; it must be a square matrix with one "
            "row and column per feature. Pass np.cov(X, rowvar=False), say."
        )
    if not np.isfinite(matrix).all():
        raise ValueError(
            "The covariance holds NaN or infinite values; all must be finite. Compute it from a "
            "table without missing values."
        )
    size = np.abs(matrix).max()
    if np.abs(matrix - matrix.T).max() > 1e-8 * size or (np.diagonal(matrix) < 0).any():
        raise ValueError(
            "The covariance is not symmetric with a nonnegative diagonal; a covariance matrix is. "
            "Pass (C + C.T) / 2 if only rounding made it unsymmetric."
        )
    return 0.5 * (matrix + matrix.T)


def well_conditioned(
    correlation: np.ndarray | LowRankCovariance,
) -> tuple[np.ndarray | LowRankCovariance, float]:
    """A correlation matrix mixed with the identity no further than its smallest eigenvalue needs.

    Parameters
    ----------
    correlation : ndarray of shape (n_features, n_features) or LowRankCovariance
        Correlation matrix.

    Returns
    -------
    mixed : ndarray or LowRankCovariance
        (1 - weight) * correlation + weight * identity; the matrix itself where the weight is 0.
    weight : float
        0 wherever the smallest eigenvalue is at least 1e-8.

    Raises
    ------
    ValueError
        If the matrix has an eigenvalue below -0.01: it is no correlation matrix.
    """
    if isinstance(correlation, LowRankCovariance):
        if correlation.diagonal.min() >= SMALLEST_EIGENVALUE:
            return correlation, 0.0
        weight = SMALLEST_EIGENVALUE
        diagonal = (1.0 - weight) * correlation.diagonal + weight
        return LowRankCovariance(diagonal, np.sqrt(1.0 - weight) * correlation.loadings), weight
    shifted = add_diagonal(correlation.copy(), -SMALLEST_EIGENVALUE)
    if cholesky(shifted, overwrite=True) is not None:
        return correlation, 0.0
    smallest = float(eigvalsh(correlation, subset_by_index=[0, 0])[0])
    if smallest < -1e-2:
        raise ValueError(
            f"The smallest eigenvalue of the correlation matrix is {smallest:.3g}; a covariance is "
            "positive semidefinite up to rounding. Estimate it from complete rows, or shrink it "
            "(sklearn.covariance.LedoitWolf)."
        )
    weight = (2.0 * SMALLEST_EIGENVALUE - smallest) / (1.0 - smallest)
    return add_diagonal((1.0 - weight) * correlation, weight), weight


def _is_definite(correlation: np.ndarray, s: np.ndarray) -> bool:
    """Whether 2 Sigma - S is positive definite beyond the backward error of Cholesky."""
    rounding = 4.0 * len(s) * np.finfo(np.float64).eps
    slack = 2.0 * correlation - s if s.ndim == 2 else add_diagonal(2.0 * correlation, -s)
    return cholesky(add_diagonal(slack, -rounding), overwrite=True) is not None


def _solve_dense(given: np.ndarray, method: str, tol: float, max_iter: int) -> SVector:
    correlation, shrinkage = well_conditioned(given)
    assert isinstance(correlation, np.ndarray)
    if method == "equicorrelated":
        smallest = float(eigvalsh(correlation, subset_by_index=[0, 0])[0])
        result = SolverResult(np.full(len(correlation), min(1.0, 2.0 * smallest)), 0.0, 1)
    elif method == "sdp":
        result = maximize_sum(correlation, tol=tol, max_iter=max_iter)
    else:
        objective = MaximumEntropy() if method == "max_entropy" else MinimumReconstructability()
        result = minimize_smooth(correlation, objective, tol=tol, max_iter=max_iter)
    s, slack = result.s, 1e-13
    while not _is_definite(correlation, s):
        s, slack = result.s * (1.0 - slack), 4.0 * slack
    return _reported(replace(result, s=s), method, tol, shrinkage)


def _solve_low_rank(
    correlation: LowRankCovariance, method: str, tol: float, max_iter: int
) -> SVector:
    mixed, shrinkage = well_conditioned(correlation)
    assert isinstance(mixed, LowRankCovariance)
    correlation = mixed
    if method == "equicorrelated":
        level = min(1.0, 2.0 * correlation.smallest_eigenvalue())
        result = SolverResult(np.full(correlation.n_features, level), 0.0, 1)
    else:
        result = solve_low_rank(correlation, method, tol=tol, max_iter=max_iter)
    loadings = np.sqrt(2.0) * correlation.loadings
    s, slack = result.s, 1e-13
    while negative_eigenvalues(2.0 * correlation.diagonal - s - 1e-14, loadings) > 0:
        s, slack = result.s * (1.0 - slack), 4.0 * slack
    return _reported(replace(result, s=s), method, tol, shrinkage)


def _reported(result: SolverResult, method: str, tol: float, shrinkage: float) -> SVector:
    status = _status(result.gap, tol)
    return SVector(result.s, method, result.gap, result.n_iter, status, shrinkage)


def _status(gap: float, tol: float) -> SVectorStatus:
    return SVectorStatus.CONVERGED if gap <= tol else SVectorStatus.NOT_CONVERGED
