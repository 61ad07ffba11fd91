r"""Choosing a penalty on a path: held-out loss, one standard error, extended BIC.

Letters: L penalties in decreasing order; K folds; N rows; P candidate columns; k of them with a
nonzero coefficient at a penalty; :math:`\ell` the mean loss there (half the mean squared residual,
or the mean log loss).

**Extended BIC.** Up to a constant,

.. math:: -2 \log \hat{L} + k \log N + 2 \gamma \log \binom{P}{k}

where the Gaussian profile likelihood gives :math:`-2 \log \hat{L} = N \log(2 \ell)` and the
binomial one :math:`2 N \ell`. The last term charges for the number of models of size k that were
open, which the ordinary BIC (gamma = 0) takes for one. It is consistent for
:math:`P = O(N^\kappa)` if :math:`\gamma > 1 - 1/(2\kappa)`, hence with gamma = 1 for every kappa.

Departures from the papers: the likelihood is the one of the penalised fit, as is usual on a lasso
path, not of a refit on its support; and, because the likelihood of a saturated model is unbounded
while its theory is about small models, only penalties with :math:`k \le N/2` can be chosen.

References
----------
Schwarz, G. (1978). Estimating the dimension of a model. *Annals of Statistics* 6, 461-464.

Chen, J. and Chen, Z. (2008). Extended Bayesian information criteria for model selection with large
model spaces. *Biometrika* 95, 759-771. The criterion, for linear models.

Chen, J. and Chen, Z. (2012). Extended BIC for small-n-large-P sparse GLM. *Statistica Sinica* 22,
555-574. The same for generalised linear models, log loss included.

Breiman, L., Friedman, J. H., Olshen, R. A. and Stone, C. J. (1984). *Classification and Regression
Trees*. Wadsworth. Section 3.4.3, the one-standard-error rule.

Kish, L. (1965). *Survey Sampling*. Wiley. Section 11.7, the effective number of rows.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

FloatArray = NDArray[np.float64]


def effective_rows(sample_weight: FloatArray) -> float:
    """Number of rows N that weights stand for.

    Weights that are all whole numbers count repetitions, and N is their sum, so that a weight of 3
    is the same as three rows. Any others express precision on a scale without meaning, and N is
    Kish's effective number.

    Parameters
    ----------
    sample_weight : ndarray of shape (n,)
        Weights, not all zero.

    Returns
    -------
    float
        N.
    """
    total = sample_weight.sum()
    if np.array_equal(sample_weight, np.rint(sample_weight)):
        return float(total)
    return float(total**2 / (sample_weight @ sample_weight))


def log_binomial(n: int, k: NDArray[np.int64]) -> FloatArray:
    """Logarithm of the number of subsets of size k of n things."""
    return gammaln(n + 1.0) - gammaln(k + 1.0) - gammaln(n - k + 1.0)


def extended_bic(
    loss: str,
    mean_loss: FloatArray,
    n_nonzero: NDArray[np.int64],
    n_rows: float,
    n_candidates: int,
    gamma: float = 1.0,
) -> FloatArray:
    """Extended BIC along a path; infinite where the model is too large to be judged by it.

    Parameters
    ----------
    loss : {"squared_error", "log_loss"}
        Which loss.
    mean_loss : ndarray of shape (L,)
        Mean loss in sample.
    n_nonzero : ndarray of shape (L,)
        Candidates with a nonzero coefficient.
    n_rows : float
        N.
    n_candidates : int
        P.
    gamma : float, default=1.0
        0 is the ordinary BIC.

    Returns
    -------
    ndarray of shape (L,)
        The criterion; the smallest is the best.

    References
    ----------
    Chen and Chen (2008); Chen and Chen (2012).
    """
    if loss == "squared_error":
        # A perfect fit has no finite likelihood; the floor keeps the criterion ordered by size.
        minus_twice_log = n_rows * np.log(np.maximum(2.0 * mean_loss, np.finfo(float).tiny))
    else:
        minus_twice_log = 2.0 * n_rows * mean_loss
    size = n_nonzero * np.log(n_rows) + 2.0 * gamma * log_binomial(n_candidates, n_nonzero)
    return np.where(n_nonzero <= n_rows / 2.0, minus_twice_log + size, np.inf)


def lowest(criterion: FloatArray) -> int:
    """Position of the smallest value of a criterion; the largest penalty wins ties.

    Parameters
    ----------
    criterion : ndarray of shape (L,)
        Values in the order of decreasing penalty.

    Returns
    -------
    int
        The position.
    """
    return int(np.nanargmin(criterion))


def one_standard_error(loss_path: FloatArray) -> int:
    """Position of the largest penalty within one standard error of the smallest held-out loss.

    Parameters
    ----------
    loss_path : ndarray of shape (L, K)
        Held-out loss per penalty, in decreasing order, and fold; at least two folds.

    Returns
    -------
    int
        The position.

    References
    ----------
    Breiman, Friedman, Olshen and Stone (1984), section 3.4.3.
    """
    mean = loss_path.mean(axis=1)
    best = lowest(mean)
    error = loss_path[best].std(ddof=1) / np.sqrt(loss_path.shape[1])
    return int(np.flatnonzero(mean <= mean[best] + error)[0])
