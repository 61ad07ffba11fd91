"""The public face of the engine: one problem along its grid of penalties."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse

from sparsesel.engine.bank import solve_bank, warn_failures
from sparsesel.engine.design import FloatArray, as_design
from sparsesel.engine.inputs import as_grid, as_table, as_vector, check_settings
from sparsesel.engine.problems import Problems


@dataclass(frozen=True)
class PathResult:
    """A regularisation path with the proof of every point.

    Attributes
    ----------
    alphas : ndarray of shape (L,)
        Penalties, decreasing.
    coef : csr_array of shape (L, p)
        Coefficients in the units of X.
    intercept : ndarray of shape (L,)
    gap : ndarray of shape (L,)
        Duality gap relative to the null objective.
    status : ndarray of shape (L,)
        Values of ``Status``.
    n_iter : ndarray of shape (L,)
        Coordinate sweeps spent.
    """

    alphas: FloatArray
    coef: sparse.csr_array
    intercept: FloatArray
    gap: FloatArray
    status: NDArray[np.int8]
    n_iter: NDArray[np.int64]


def penalized_path(
    X: Any,
    y: ArrayLike,
    *,
    loss: str = "squared_error",
    alphas: int | ArrayLike = 100,
    l1_ratio: float = 1.0,
    penalty_weights: ArrayLike | None = None,
    sample_weight: ArrayLike | None = None,
    offset: ArrayLike | None = None,
    fit_intercept: bool = True,
    standardize: bool = False,
    tol: float = 1e-7,
    max_iter: int = 10_000,
) -> PathResult:
    r"""Fit the lasso or the elastic net along a grid of penalties, certified.

    Minimises, over the intercept and the coefficients,

    .. math::

        \frac{\sum_i w_i \ell(y_i, o_i + b_0 + x_i'b)}{\sum_i w_i}
        + \alpha \sum_j \Big[ \rho v_j s_j |b_j| + \frac{1-\rho}{2} v_j s_j^2 b_j^2 \Big]

    with :math:`\ell` half the squared error or the log loss, and :math:`s_j` the weighted
    standard deviations if ``standardize``, else 1. X is never centred, scaled or copied.

    Parameters
    ----------
    X : array or sparse matrix of shape (n, p)
        float32 or float64, dense in either order, a memory map, or sparse (CSC as it is,
        other formats converted); data frames, and integers, which are converted too.
        Finite, the largest absolute value of every column 0 or from 1e-100 to 1e100.
    y : array of shape (n,)
        Numbers of the same magnitudes; 0 and 1 for the log loss.
    loss : {"squared_error", "log_loss"}, default="squared_error"
    alphas : int or array of shape (L,), default=100
        How many points of a geometric grid from the smallest penalty with an empty model
        down to a thousandth of it, or the values themselves, positive and decreasing.
    l1_ratio : float in (0, 1], default=1.0
        :math:`\rho`; 1 is the lasso.
    penalty_weights : array of shape (p,), default=None
        :math:`v_j` from 0 (unpenalised) to inf (left out); None means 1.
    sample_weight : array of shape (n,), default=None
        :math:`w_i \ge 0`, not all zero; None means 1.
    offset : array of shape (n,), default=None
        :math:`o_i`, added to the predictor.
    fit_intercept : bool, default=True
    standardize : bool, default=False
        Penalise columns in units of their own standard deviation. Columns whose standard
        deviation is rounding error are left out.
    tol : float, default=1e-7
        Largest duality gap, relative to the objective of the null model (offset, intercept
        and unpenalised columns only).
    max_iter : int, default=10_000
        Coordinate sweeps that may be spent on one penalty.

    Returns
    -------
    PathResult

    Raises
    ------
    ValueError
        If a value is not a real number, not finite or of a magnitude whose products leave
        double precision, shapes disagree, a weight is negative, all sample weights are zero,
        ``alphas`` is not positive and decreasing, the log loss is given one class or other
        values than 0 and 1, or unpenalised columns separate the classes.

    Warns
    -----
    ConvergenceWarning
        If some gap stays above ``tol``; such points are marked in ``status``.

    References
    ----------
    Tibshirani (1996); Zou and Hastie (2005); duality gap: Boyd and Vandenberghe (2004),
    section 5.1.6; sequential strong rules: Tibshirani et al. (2012), J. R. Statist. Soc. B.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.engine import penalized_path
    >>> X = np.array([[1.0, 1.0], [1.0, -1.0], [-1.0, 1.0], [-1.0, -1.0]])
    >>> path = penalized_path(X, X @ [2.0, 0.5], alphas=[1.0, 0.1])
    >>> path.coef.toarray().round(6)
    array([[1. , 0. ],
           [1.9, 0.4]])
    """
    check_settings(loss, l1_ratio, fit_intercept, standardize)
    table = as_table(X)
    n, p = table.shape
    problems = Problems(
        loss=loss,
        response=as_vector(y, "y", n),
        sample_weight=_optional(sample_weight, "sample_weight", n),
        penalty_weights=_optional(penalty_weights, "penalty_weights", p, "column"),
        offset=_optional(offset, "offset", n),
        l1_ratio=float(l1_ratio),
        fit_intercept=bool(fit_intercept),
        standardize=bool(standardize),
    )
    result = solve_bank(as_design(table), problems, as_grid(alphas), tol=tol, max_iter=max_iter)
    warn_failures(result, tol)
    assert result.coef is not None
    return PathResult(
        alphas=result.alphas[0],
        coef=result.coef[0],
        intercept=result.intercept[0],
        gap=result.gap[0],
        status=result.status[0],
        n_iter=result.n_iter[0],
    )


def _optional(
    values: ArrayLike | None, name: str, length: int, axis: str = "row"
) -> FloatArray | None:
    return None if values is None else as_vector(values, name, length, axis)
