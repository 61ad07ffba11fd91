"""Estimates of a correlation matrix from standardised rows, dense or diagonal plus low rank.

The rows come standardised and multiplied by the square root of n times their weight (weights sum to
one), so that R'R / n is the weighted correlation matrix and every estimator of scikit-learn can be
told that its data are centred.

"ledoit_wolf"       (1 - g) R'R/n + g I, g by Ledoit and Wolf 2004, "A well-conditioned estimator
                    for large-dimensional covariance matrices", J. Multivariate Analysis 88
"oas"               the same form, g by Chen, Wiesel, Eldar and Hero 2010, "Shrinkage algorithms for
                    MMSE covariance estimation", IEEE Trans. Signal Processing 58, equation 23
"graphical_lasso"   sparse precision matrix, penalty by cross-validation (Friedman, Hastie and
                    Tibshirani 2008, Biostatistics 9)
"factor"            maximum likelihood factor model, with as many factors as there are eigenvalues
                    beyond those of independent features (Johnstone 2001, "On the distribution of
                    the largest eigenvalue in principal components analysis", Annals of Statistics
                    29)

The first two are kept as diagonal plus rank n where that is the smaller form (2 n < p), the last
always.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from sklearn.covariance import GraphicalLassoCV, ledoit_wolf_shrinkage
from sklearn.decomposition import FactorAnalysis

from sparsesel.knockoffs._linalg import add_diagonal
from sparsesel.knockoffs.low_rank import LowRankCovariance

Covariance = np.ndarray | LowRankCovariance

# A factor model has no more factors than this.
_MOST_FACTORS = 50


def variances(covariance: Covariance) -> np.ndarray:
    """The diagonal of a covariance of either form."""
    if isinstance(covariance, LowRankCovariance):
        return covariance.variances
    return np.diagonal(covariance).copy()


def dense(covariance: Covariance) -> np.ndarray:
    """The matrix itself."""
    return covariance.dense() if isinstance(covariance, LowRankCovariance) else covariance


def scaled(covariance: Covariance, scale: np.ndarray) -> Covariance:
    """The covariance after each feature is multiplied by its entry of ``scale``."""
    if isinstance(covariance, LowRankCovariance):
        return covariance.scaled(scale)
    return covariance * scale * scale[:, None]


def subset(covariance: Covariance, columns: np.ndarray) -> Covariance:
    """The covariance of some of the features (positions or mask)."""
    if isinstance(covariance, LowRankCovariance):
        return covariance.subset(columns)
    chosen = np.arange(len(covariance))[columns]
    return covariance[np.ix_(chosen, chosen)]


def ledoit_wolf(rows: np.ndarray) -> Covariance:
    """Shrunk towards the identity by the weight of Ledoit and Wolf."""
    return shrunk(rows, float(ledoit_wolf_shrinkage(rows, assume_centered=True)))


def oas(rows: np.ndarray) -> Covariance:
    """Shrunk towards the identity by the oracle approximating weight.

    With T = R'R / n: g = min(1, (tr T^2 + (tr T)^2) / ((n + 1) (tr T^2 - (tr T)^2 / p))) for n rows
    and p features (the paper's equation 23 in the simplified form for large p that scikit-learn
    uses too); tr T^2 comes from the smaller of R'R and RR'.
    """
    n_rows, n_features = rows.shape
    gram = smaller_gram(rows)
    square = float(np.vdot(gram, gram)) / n_features**2
    mean = float(np.trace(gram)) / n_features
    denominator = (n_rows + 1.0) * (square - mean**2 / n_features)
    weight = 1.0 if denominator <= 0 else min(1.0, (square + mean**2) / denominator)
    return shrunk(rows, weight)


def shrunk(rows: np.ndarray, weight: float) -> Covariance:
    """(1 - weight) R'R / n + weight I, in the smaller of the two forms."""
    n_rows, n_features = rows.shape
    if 2 * n_rows < n_features and weight > 0:
        return LowRankCovariance(
            np.full(n_features, weight), np.sqrt((1.0 - weight) / n_rows) * rows.T
        )
    return add_diagonal((1.0 - weight) / n_rows * (rows.T @ rows), weight)


def graphical_lasso(rows: np.ndarray) -> Covariance:
    """Sparse inverse covariance, its penalty by cross-validation."""
    return GraphicalLassoCV(assume_centered=True).fit(rows).covariance_


def factor(rows: np.ndarray) -> Covariance:
    """Maximum likelihood factor model.

    scikit-learn centres the rows itself; weighted rows have another mean, so each is given with its
    negative, which leaves the second moments as they are.
    """
    count = number_of_factors(rows)
    if count == 0:
        return LowRankCovariance(np.ones(rows.shape[1]), np.zeros((rows.shape[1], 0)))
    model = FactorAnalysis(n_components=count, random_state=0).fit(np.vstack([rows, -rows]))
    return LowRankCovariance(np.maximum(model.noise_variance_, 1e-6), model.components_.T)


def smaller_gram(rows: np.ndarray) -> np.ndarray:
    """R'R / n or RR' / n, whichever is smaller; both have the same nonzero eigenvalues."""
    n_rows, n_features = rows.shape
    return (rows.T @ rows if n_features <= n_rows else rows @ rows.T) / n_rows


def number_of_factors(rows: np.ndarray) -> int:
    """Eigenvalues of the correlation matrix beyond those of independent features.

    The largest eigenvalue of n rows of p independent features exceeds

        (n^1/2 + p^1/2)^2 / n  +  0.98 (n^1/2 + p^1/2) (n^-1/2 + p^-1/2)^1/3 / n

    in one table of twenty (Johnstone 2001, theorem 1.1, with the .95 quantile of the Tracy-Widom
    law; for centred rows n - 1 stands for n).
    """
    count, n_features = len(rows) - 1, rows.shape[1]
    values = np.linalg.eigvalsh(smaller_gram(rows))[::-1] * len(rows) / count
    total = np.sqrt(count) + np.sqrt(n_features)
    spread = total * (1.0 / np.sqrt(count) + 1.0 / np.sqrt(n_features)) ** (1.0 / 3.0)
    beyond = int(np.sum(values > (total**2 + 0.98 * spread) / count))
    return min(beyond, _MOST_FACTORS, (min(rows.shape) - 1) // 2)


Estimator = Callable[[np.ndarray], Covariance]

ESTIMATORS: dict[str, Estimator] = {
    "ledoit_wolf": ledoit_wolf,
    "oas": oas,
    "graphical_lasso": graphical_lasso,
    "factor": factor,
}


def estimator(name: str) -> Estimator:
    """The estimate of a name; an unknown name is an error that lists them."""
    if name not in ESTIMATORS:
        raise ValueError(
            f"The covariance estimate {name!r} is unknown; allowed are "
            f"{', '.join(map(repr, ESTIMATORS))}, or, in GaussianModel, a covariance matrix. "
            "'ledoit_wolf' suits most tables."
        )
    return ESTIMATORS[name]
