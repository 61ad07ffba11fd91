"""Covariance matrices that are a diagonal plus low rank, never formed.

    Sigma = diag(delta) + U U',     U of shape (p, k),  k well below p.

A factor model is of this form, and so is a covariance shrunk towards a multiple of the identity
when it was estimated from fewer rows than columns (k is then at most the number of rows).  With
C = (I + U' diag(1/delta) U)^-1, a k x k matrix, the inverse is

    Sigma^-1 = diag(1/delta) - diag(1/delta) U C U' diag(1/delta)                          (1)

(Woodbury), and by Haynsworth's inertia formula, for any nonzero diagonal a, negative entries
allowed,

    #negative eigenvalues of diag(a) + U U'
        = #negative entries of a - #negative eigenvalues of I + U' diag(1/a) U,            (2)

which decides definiteness and, by bisection on a shift, finds the smallest eigenvalue exactly.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class LowRankCovariance:
    """A covariance matrix diag(diagonal) + loadings loadings'.

    Parameters
    ----------
    diagonal : ndarray of shape (n_features,)
        The diagonal part, positive.
    loadings : ndarray of shape (n_features, rank)
        The low-rank part.

    Raises
    ------
    ValueError
        If the shapes disagree, or an entry is not finite, or the diagonal is not positive.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import LowRankCovariance
    >>> covariance = LowRankCovariance(np.full(3, 0.5), np.full((3, 1), np.sqrt(0.5)))
    >>> covariance.dense().round(2).tolist()
    [[1.0, 0.5, 0.5], [0.5, 1.0, 0.5], [0.5, 0.5, 1.0]]
    """

    diagonal: np.ndarray
    loadings: np.ndarray

    def __post_init__(self) -> None:
        diagonal = np.asarray(self.diagonal, dtype=np.float64)
        loadings = np.asarray(self.loadings, dtype=np.float64)
        if diagonal.ndim != 1 or loadings.ndim != 2 or len(loadings) != len(diagonal):
            raise ValueError(
                f"diagonal of shape {diagonal.shape} and loadings of shape {loadings.shape} were "
                "given; a low-rank covariance takes shapes (n_features,) and (n_features, rank). "
                "Transpose the loadings if their features are in columns."
            )
        if not (
            np.isfinite(diagonal).all() and np.isfinite(loadings).all() and (diagonal > 0).all()
        ):
            raise ValueError(
                "The diagonal or the loadings of a low-rank covariance hold values that are not "
                "finite, or a diagonal entry that is not positive; every diagonal entry must be "
                "above 0. Leave constant columns out, or give them a small positive entry."
            )
        object.__setattr__(self, "diagonal", diagonal)
        object.__setattr__(self, "loadings", loadings)

    @property
    def n_features(self) -> int:
        """Number of features."""
        return len(self.diagonal)

    @property
    def shape(self) -> tuple[int, int]:
        """Shape of the matrix."""
        return (self.n_features, self.n_features)

    @property
    def variances(self) -> np.ndarray:
        """Diagonal of the whole matrix, shape (n_features,)."""
        return self.diagonal + np.einsum("ij,ij->i", self.loadings, self.loadings)

    def dense(self) -> np.ndarray:
        """The matrix itself, shape (n_features, n_features)."""
        return np.diag(self.diagonal) + self.loadings @ self.loadings.T

    def scaled(self, scale: np.ndarray) -> LowRankCovariance:
        """The covariance after each feature is multiplied by its entry of ``scale``."""
        return LowRankCovariance(self.diagonal * scale**2, self.loadings * scale[:, None])

    def subset(self, columns: np.ndarray) -> LowRankCovariance:
        """The covariance of some of the features (positions or mask)."""
        return LowRankCovariance(self.diagonal[columns], self.loadings[columns])

    def smallest_eigenvalue(self) -> float:
        """Smallest eigenvalue, by bisection on (2), to 1e-12 of the smallest diagonal entry."""
        low, high = float(self.diagonal.min()), float(self.variances.min())
        precision = 1e-12 * low
        while high - low > max(precision, 1e-15 * high):
            middle = 0.5 * (low + high)
            if negative_eigenvalues(self.diagonal - middle, self.loadings) == 0:
                low = middle
            else:
                high = middle
        return low


def capacitance(diagonal: np.ndarray, loadings: np.ndarray) -> np.ndarray:
    """The k x k matrix I + U' diag(1/a) U."""
    middle = (loadings / diagonal[:, None]).T @ loadings
    middle = 0.5 * (middle + middle.T)
    middle.reshape(-1)[:: len(middle) + 1] += 1.0
    return middle


def negative_eigenvalues(diagonal: np.ndarray, loadings: np.ndarray) -> int:
    """Number of negative eigenvalues of diag(a) + U U', by (2); zero in a counts as 1e-300."""
    safe = np.where(diagonal == 0.0, 1e-300, diagonal)
    below = int((safe < 0).sum())
    if below == 0:
        return 0
    if below > loadings.shape[1]:
        return below - loadings.shape[1]
    return below - int((np.linalg.eigvalsh(capacitance(safe, loadings)) < 0).sum())
