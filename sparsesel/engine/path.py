"""The public face of the engine: one problem along its grid of penalties."""

from __future__ import annotations

import numbers
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse
from sklearn.utils.validation import check_array, check_consistent_length, column_or_1d

from sparsesel.engine.bank import Problems, solve_bank, warn_failures
from sparsesel.engine.design import FloatArray, as_design
from sparsesel.engine.losses import LOSSES


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
        other formats converted). Finite.
    y : array of shape (n,)
        Numbers; 0 and 1 for the log loss.
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
        If a value is not finite, shapes disagree, a weight is negative, all sample weights
        are zero, ``alphas`` is not positive and decreasing, the log loss is given one class
        or other values than 0 and 1, or unpenalised columns separate the classes.

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
    _check_options(loss, l1_ratio, tol, max_iter)
    X = check_array(
        X,
        accept_sparse="csc",
        dtype=(np.float64, np.float32),
        input_name="X",
        accept_large_sparse=True,
    )
    n, p = X.shape
    y = _numbers(y, "y", n)
    check_consistent_length(X, y)
    problems = Problems(
        loss=loss,
        response=y,
        sample_weight=_weights(sample_weight, n),
        penalty_weights=_penalty_weights(penalty_weights, p),
        offset=None if offset is None else _numbers(offset, "offset", n),
        l1_ratio=float(l1_ratio),
        fit_intercept=bool(fit_intercept),
        standardize=bool(standardize),
    )
    grid = _grid(alphas)
    result = solve_bank(as_design(X), problems, grid, tol=tol, max_iter=max_iter)
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


def _check_options(loss: str, l1_ratio: float, tol: float, max_iter: int) -> None:
    if loss not in LOSSES:
        raise ValueError(
            f"loss={loss!r} is not known; allowed are {sorted(LOSSES)}. Pass one of these."
        )
    if not (isinstance(l1_ratio, numbers.Real) and 0.0 < l1_ratio <= 1.0):
        raise ValueError(
            f"l1_ratio={l1_ratio!r} is outside (0, 1]. Pass 1 for the lasso or a value between 0 "
            "and 1 for the elastic net; for ridge regression use sklearn.linear_model.Ridge."
        )
    if not (isinstance(tol, numbers.Real) and 0.0 < tol < 1.0):
        raise ValueError(
            f"tol={tol!r} is outside (0, 1): it is a relative duality gap. Pass a value such as "
            "1e-7."
        )
    if not (isinstance(max_iter, numbers.Integral) and max_iter >= 1):
        raise ValueError(
            f"max_iter={max_iter!r} is not a positive integer. Pass how many coordinate sweeps "
            "one penalty may cost, such as 10000."
        )


def _numbers(values: ArrayLike, name: str, length: int) -> FloatArray:
    checked: FloatArray = column_or_1d(
        check_array(values, ensure_2d=False, dtype=np.float64, input_name=name), warn=False
    )
    if checked.size != length:
        raise ValueError(
            f"{name} has {checked.size} values and X has {length} rows; they must match. Pass one "
            f"value of {name} per row of X."
        )
    return checked


def _weights(sample_weight: ArrayLike | None, length: int) -> FloatArray | None:
    if sample_weight is None:
        return None
    values = _numbers(sample_weight, "sample_weight", length)
    if (values < 0.0).any() or not values.sum() > 0.0:
        raise ValueError(
            f"sample_weight holds {np.count_nonzero(values < 0.0)} negative values and sums to "
            f"{values.sum():g}; weights must not be negative and must not all be zero. Drop the "
            "rows that should not count, or give them weight 0."
        )
    return values


def _penalty_weights(penalty_weights: ArrayLike | None, length: int) -> FloatArray | None:
    if penalty_weights is None:
        return None
    values = np.asarray(penalty_weights, dtype=np.float64)
    if values.shape != (length,) or np.isnan(values).any() or (values < 0.0).any():
        raise ValueError(
            f"penalty_weights has shape {values.shape} and holds "
            f"{np.count_nonzero(~(values >= 0.0))} values that are negative or NaN; allowed are "
            f"{length} values, one per column, from 0 (unpenalised) to inf (left out). Pass None "
            "to penalise all columns alike."
        )
    return values


def _grid(alphas: int | ArrayLike) -> int | FloatArray:
    if isinstance(alphas, numbers.Integral) and not isinstance(alphas, bool):
        if alphas < 1:
            raise ValueError(
                f"alphas={alphas} asks for no grid point; allowed is a count of at least 1, or "
                "the penalties themselves. Pass a positive integer."
            )
        return int(alphas)
    values = np.atleast_1d(np.asarray(alphas, dtype=np.float64))
    decreasing = values.ndim == 1 and values.size > 0 and bool((np.diff(values) < 0.0).all())
    if not (decreasing and np.isfinite(values).all() and (values > 0.0).all()):
        raise ValueError(
            f"alphas={values} is not a list of positive, finite, strictly decreasing penalties. "
            "Sort it from large to small and drop repeats and zeros; a column that should carry "
            "no penalty gets penalty_weights 0."
        )
    return values
