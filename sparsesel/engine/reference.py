r"""The engine's problems, and the knockoff semidefinite program, stated in cvxpy.

One problem has sample weights :math:`w_i \ge 0`, response :math:`y`, offset :math:`o`, penalty
weights :math:`v_j \in [0, \infty]`, a penalty :math:`\alpha \ge 0`, an l1_ratio
:math:`\rho \in [0, 1]` and scales :math:`s_j`, which are 1, or the problem's own weighted
standard deviations when it standardises:

.. math::

    \min_{b_0, b} \; \frac{\sum_i w_i \, \ell(y_i, o_i + b_0 + x_i' b)}{\sum_i w_i}
    + \alpha \sum_j \Bigl[ \rho \, v_j s_j |b_j|
    + \frac{1 - \rho}{2} \, v_j s_j^2 b_j^2 \Bigr]

with :math:`\ell(y, \eta) = (y - \eta)^2 / 2` for the squared error and
:math:`\ell(y, \eta) = \log(1 + e^\eta) - y \eta`, :math:`y \in \{0, 1\}`, for the log loss.
A column with :math:`v_j = 0` is unpenalised, one with :math:`v_j = \infty` is left out, and so is
a penalised column that standardising would divide by a standard deviation below rounding.

Nothing here is shared with the solvers: an audit in which both sides call the same function for
the scales or the objective cannot find an error in that function. For the same reason the
problem goes to a general interior-point solver as it stands, with two changes of variable that
are exact and leave the optimum where it is. Rows of weight zero are dropped. The response of
the squared error and every column are measured in their own root mean square, because the
solver stops at tolerances that are absolute for objectives below one.

cvxpy is imported when a problem is solved, never before; it comes with the extra ``reference``.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

_LOSSES = ("squared_error", "log_loss")

# A penalised column whose standard deviation is at most this fraction of its largest absolute
# value is constant to the accuracy of its numbers; keyed on whether X holds single precision.
_BELOW_ROUNDING = {True: 1e-5, False: 1e-10}

# Clarabel reaches these on well-posed problems of a few thousand columns. The reduced ones are
# what it may call "almost solved"; its own default, 5e-5, is no use to an audit.
_CLARABEL = {
    "tol_gap_abs": 1e-11,
    "tol_gap_rel": 1e-11,
    "tol_feas": 1e-10,
    "reduced_tol_gap_abs": 1e-8,
    "reduced_tol_gap_rel": 1e-8,
    "reduced_tol_feas": 1e-8,
    "max_iter": 500,
}
_SCS = {"eps_abs": 1e-9, "eps_rel": 1e-9, "max_iters": 200_000}
_SOLVERS: tuple[tuple[str, dict[str, Any]], ...] = (("CLARABEL", _CLARABEL), ("SCS", _SCS))


@dataclass(frozen=True)
class ReferenceSolution:
    """An optimum found by a general-purpose convex solver.

    Attributes
    ----------
    coef : ndarray of shape (p,)
        Coefficients in the units of X; exactly 0 for columns left out. An interior-point
        solver leaves other zeros at the size of its tolerance, not at exactly 0.
    intercept : float
        The intercept; 0 without one.
    objective : float
        The objective of this module at (`intercept`, `coef`), computed by
        `objective_value` and not taken from the solver: an upper bound on the optimum.
    solver : str
        The solver that answered.
    status : str
        cvxpy's word for the answer: "optimal", or "optimal_inaccurate" when no solver reached
        its full tolerance.
    """

    coef: np.ndarray
    intercept: float
    objective: float
    solver: str
    status: str


@dataclass(frozen=True)
class _Terms:
    """What the objective needs beside X and y: weights, offset and penalty factors per column."""

    weight: np.ndarray  # (n,), sums to 1
    offset: np.ndarray  # (n,)
    absolute: np.ndarray  # (p,), rho v s; 0 where left out
    square: np.ndarray  # (p,), (1 - rho) v s^2; 0 where left out
    allowed: np.ndarray  # (p,) bool, False where the coefficient must be 0


def _as_double(X: Any) -> Any:
    if sp.issparse(X):
        return sp.csc_array(X).astype(np.float64)
    return np.asarray(X, dtype=np.float64)


def _largest(X: Any) -> np.ndarray:
    """Largest |x_ij| of every column, over all rows."""
    largest = abs(X).max(axis=0)
    return largest.toarray().ravel() if sp.issparse(X) else largest


def _standard_deviations(X: Any, weight: np.ndarray) -> np.ndarray:
    """Weighted standard deviation of every column about its weighted mean."""
    mean = weight @ X
    if not sp.issparse(X):
        return np.sqrt(weight @ (X - mean) ** 2)
    entries = sp.coo_array(X)
    row, column = entries.row, entries.col
    # The entries that are not stored are zeros, each at distance |mean| from the mean. Where all
    # are stored, one minus the sum of the weights would be a rounding error, not zero.
    absent = np.maximum(1.0 - np.bincount(column, weight[row], X.shape[1]), 0.0)
    absent[np.bincount(column, minlength=X.shape[1]) == X.shape[0]] = 0.0
    near = np.bincount(column, weight[row] * (entries.data - mean[column]) ** 2, X.shape[1])
    return np.sqrt(near + absent * mean**2)


def _terms(
    X: Any,
    *,
    l1_ratio: float,
    penalty_weights: Any,
    sample_weight: Any,
    offset: Any,
    standardize: bool,
) -> _Terms:
    n, p = X.shape
    w = np.ones(n) if sample_weight is None else np.asarray(sample_weight, dtype=np.float64)
    v = np.ones(p) if penalty_weights is None else np.asarray(penalty_weights, dtype=np.float64)
    o = np.zeros(n) if offset is None else np.asarray(offset, dtype=np.float64)
    w = w / w.sum()
    s, allowed = np.ones(p), ~np.isinf(v)
    if standardize:
        values = _as_double(X)
        s = _standard_deviations(values[w > 0], w[w > 0])
        constant = s <= _BELOW_ROUNDING[X.dtype == np.float32] * _largest(values)
        allowed &= ~(constant & (v > 0))
    v = np.where(allowed, v, 0.0)
    return _Terms(w, o, l1_ratio * v * s, (1.0 - l1_ratio) * v * s**2, allowed)


def _data_term(response: np.ndarray, prediction: np.ndarray, w: np.ndarray, loss: str) -> float:
    """The weighted mean loss; rows of weight zero don't count, whatever they hold."""
    seen = w > 0
    y, eta = response[seen], prediction[seen]
    if loss == "squared_error":
        return float(w[seen] @ (0.5 * (y - eta) ** 2))
    return float(w[seen] @ (np.logaddexp(0.0, eta) - y * eta))


def objective_value(
    X: Any,
    y: Any,
    coef: Any,
    intercept: float,
    *,
    loss: str,
    alpha: float,
    l1_ratio: float = 1.0,
    penalty_weights: Any = None,
    sample_weight: Any = None,
    offset: Any = None,
    fit_intercept: bool = True,
    standardize: bool = False,
) -> float:
    """Value of the objective at a given point, in plain numpy.

    Parameters
    ----------
    X : {ndarray, sparse array or matrix} of shape (n, p)
        The table.
    y : array-like of shape (n,)
        The response; 0 or 1 for the log loss.
    coef : array-like of shape (p,)
        Coefficients, in the units of X.
    intercept : float
        The intercept.
    loss : {"squared_error", "log_loss"}
        The loss of one row; the squared error carries one half.
    alpha : float
        The penalty, at least 0.
    l1_ratio : float, default=1.0
        Share of the absolute-value term, from 0 (ridge) to 1 (lasso).
    penalty_weights : array-like of shape (p,), optional
        v, from 0 (unpenalised) to infinity (left out). One for every column by default.
    sample_weight : array-like of shape (n,), optional
        w, at least 0, not all 0. Equal by default.
    offset : array-like of shape (n,), optional
        o, added to every prediction. Zero by default.
    fit_intercept : bool, default=True
        Whether the problem has an intercept.
    standardize : bool, default=False
        Whether s are the weighted standard deviations instead of 1.

    Returns
    -------
    float
        The objective; infinity for a point the problem does not allow, which is a coefficient
        other than 0 on a column left out, or an intercept in a problem without one.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.engine.reference import objective_value
    >>> X, y = np.array([[1.0], [-1.0]]), np.array([3.0, -3.0])
    >>> objective_value(X, y, [2.0], 0.0, loss="squared_error", alpha=1.0)
    2.5
    """
    terms = _terms(
        X,
        l1_ratio=l1_ratio,
        penalty_weights=penalty_weights,
        sample_weight=sample_weight,
        offset=offset,
        standardize=standardize,
    )
    b = np.asarray(coef, dtype=np.float64)
    if np.any(b[~terms.allowed] != 0) or (not fit_intercept and intercept != 0):
        return float("inf")
    eta = terms.offset + intercept + _as_double(X) @ b
    data = _data_term(np.asarray(y, dtype=np.float64), eta, terms.weight, loss)
    penalty = terms.absolute @ np.abs(b) + 0.5 * terms.square @ b**2
    return data + alpha * float(penalty)


def reference_solution(
    X: Any,
    y: Any,
    *,
    loss: str,
    alpha: float,
    l1_ratio: float = 1.0,
    penalty_weights: Any = None,
    sample_weight: Any = None,
    offset: Any = None,
    fit_intercept: bool = True,
    standardize: bool = False,
) -> ReferenceSolution:
    """Solve one penalised regression with a general-purpose convex solver.

    Parameters
    ----------
    X : {ndarray, sparse array or matrix} of shape (n, p)
        The table.
    y : array-like of shape (n,)
        The response; 0 or 1 for the log loss.
    loss : {"squared_error", "log_loss"}
        The loss of one row; the squared error carries one half.
    alpha : float
        The penalty, at least 0.
    l1_ratio : float, default=1.0
        Share of the absolute-value term, from 0 (ridge) to 1 (lasso).
    penalty_weights : array-like of shape (p,), optional
        v, from 0 (unpenalised) to infinity (left out). One for every column by default.
    sample_weight : array-like of shape (n,), optional
        w, at least 0, not all 0. Equal by default.
    offset : array-like of shape (n,), optional
        o, added to every prediction. Zero by default.
    fit_intercept : bool, default=True
        Whether the problem has an intercept.
    standardize : bool, default=False
        Whether s are the weighted standard deviations instead of 1.

    Returns
    -------
    ReferenceSolution
        Coefficients, intercept, objective, and which solver said what.

    Raises
    ------
    ImportError
        Without cvxpy.
    ValueError
        For an unknown loss, a negative alpha, an l1_ratio outside [0, 1], or a response of the
        log loss other than 0 and 1.
    RuntimeError
        When no solver finds an optimum.

    Notes
    -----
    Where the unpenalised columns separate the two classes there is no optimum, only an infimum,
    and a solver may report a point near it as "optimal". Its coefficients then mean nothing;
    the engine refuses such a problem.

    Examples
    --------
    For orthogonal columns with X'X = nI the optimum is X'y/n, soft-thresholded at alpha.

    >>> import numpy as np
    >>> from sparsesel.engine.reference import reference_solution
    >>> X = np.array([[1.0, 1.0], [1.0, -1.0], [-1.0, 1.0], [-1.0, -1.0]])
    >>> y = X @ [2.0, 0.5]
    >>> solution = reference_solution(X, y, loss="squared_error", alpha=1.0)
    >>> print(solution.coef.round(6) + 0.0, solution.status)
    [1. 0.] optimal
    """
    return reference_path(
        X,
        y,
        loss=loss,
        alphas=[alpha],
        l1_ratio=l1_ratio,
        penalty_weights=penalty_weights,
        sample_weight=sample_weight,
        offset=offset,
        fit_intercept=fit_intercept,
        standardize=standardize,
    )[0]


def reference_path(
    X: Any,
    y: Any,
    *,
    loss: str,
    alphas: Sequence[float] | np.ndarray,
    l1_ratio: float = 1.0,
    penalty_weights: Any = None,
    sample_weight: Any = None,
    offset: Any = None,
    fit_intercept: bool = True,
    standardize: bool = False,
) -> tuple[ReferenceSolution, ...]:
    """Solve one problem at several penalties, translated to the solver's form only once.

    Parameters
    ----------
    X, y, loss
        As in `reference_solution`.
    alphas : array-like of shape (L,)
        The penalties, each at least 0, in any order. Every one is solved from scratch.
    l1_ratio, penalty_weights, sample_weight, offset, fit_intercept, standardize
        As in `reference_solution`.

    Returns
    -------
    tuple of L ReferenceSolution
        In the order of `alphas`.

    Raises
    ------
    ImportError, ValueError, RuntimeError
        As in `reference_solution`.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.engine.reference import reference_path
    >>> X, y = np.array([[1.0], [-1.0]]), np.array([3.0, -3.0])
    >>> path = reference_path(X, y, loss="squared_error", alphas=[2.0, 1.0])
    >>> [round(float(solution.coef[0]), 6) for solution in path]
    [1.0, 2.0]
    """
    _check_reference_input(y, loss, alphas, l1_ratio)
    penalty = {
        "l1_ratio": l1_ratio,
        "penalty_weights": penalty_weights,
        "sample_weight": sample_weight,
        "offset": offset,
        "standardize": standardize,
    }
    response = np.asarray(y, dtype=np.float64)
    stated = _state(X, response, loss, _terms(X, **penalty), fit_intercept)
    solutions = []
    for alpha in alphas:
        (coef, intercept), solver, status = stated.solve(float(alpha))
        value = objective_value(
            X,
            response,
            coef,
            intercept,
            loss=loss,
            alpha=float(alpha),
            fit_intercept=fit_intercept,
            **penalty,
        )
        solutions.append(ReferenceSolution(coef, intercept, value, solver, status))
    return tuple(solutions)


def _check_reference_input(y: Any, loss: str, alphas: Any, l1_ratio: float) -> None:
    if loss not in _LOSSES:
        raise ValueError(
            f"loss is {loss!r}; the reference states {' and '.join(map(repr, _LOSSES))}. "
            "Choose one of these."
        )
    if not np.all(np.asarray(alphas, dtype=np.float64) >= 0):
        raise ValueError(
            f"alpha holds {np.min(alphas)}; a penalty is a number of at least 0, and the problem "
            "is not convex below. Pass the alpha of the fit to check."
        )
    if not 0 <= l1_ratio <= 1:
        raise ValueError(
            f"l1_ratio is {l1_ratio}; it is a share, from 0 (ridge) to 1 (lasso). "
            "Pass the l1_ratio of the fit to check."
        )
    if loss == "log_loss" and not np.isin(y, (0, 1)).all():
        raise ValueError(
            f"the response holds {np.unique(y)[:5]}; the log loss takes 0 and 1 here. "
            "Code the two classes as 0 and 1 first."
        )


@dataclass(frozen=True)
class _StatedProblem:
    """A cvxpy problem with alpha as its parameter, and the way back to the units of X."""

    problem: Any
    alpha: Any
    variables: tuple[Any, Any]
    column_units: np.ndarray
    allowed: np.ndarray
    response_unit: float

    def _answer(self) -> tuple[np.ndarray, float]:
        b, b0 = self.variables
        coef = np.zeros(self.allowed.size)
        if b is not None:
            coef[self.allowed] = b.value * self.response_unit / self.column_units
        return coef, 0.0 if b0 is None else float(b0.value) * self.response_unit

    def solve(self, alpha: float) -> tuple[tuple[np.ndarray, float], str, str]:
        self.alpha.value = alpha
        return _solve(self.problem, self._answer)


def _state(
    X: Any, response: np.ndarray, loss: str, terms: _Terms, fit_intercept: bool
) -> _StatedProblem:
    cp = _cvxpy()
    seen = terms.weight > 0
    w, y, o = terms.weight[seen], response[seen], terms.offset[seen]
    columns = _as_double(X)[seen][:, terms.allowed]
    unit = 1.0
    if loss == "squared_error":
        y, o = y - o, np.zeros(o.size)
        unit = float(_units(w @ (y - (w @ y if fit_intercept else 0.0)) ** 2, np.abs(y).max()))
    units = _units(w @ columns**2, 0.0)
    b = cp.Variable(units.size) if units.size else None
    b0 = cp.Variable() if fit_intercept else None
    alpha = cp.Parameter(nonneg=True)
    scaled = columns @ sp.diags_array(1.0 / units) if sp.issparse(columns) else columns / units
    eta = cp.Constant(o)
    if b is not None:
        eta = eta + sp.csc_matrix(scaled) @ b if sp.issparse(scaled) else eta + scaled @ b
    if b0 is not None:
        eta = eta + b0
    if loss == "squared_error":
        objective = 0.5 * cp.sum_squares(cp.multiply(np.sqrt(w), y / unit - eta))
    else:
        objective = cp.sum(cp.multiply(w, cp.logistic(eta))) - (w * y) @ eta
    if b is not None:
        # In these units a penalty alpha reads alpha * response_unit^k / column_unit^k for the
        # k-th power, and the whole objective is divided by response_unit^2.
        absolute = terms.absolute[terms.allowed] / units / unit
        square = terms.square[terms.allowed] / units**2
        objective = objective + alpha * _penalty(cp, absolute, square, b)
    problem = cp.Problem(cp.Minimize(objective))
    return _StatedProblem(problem, alpha, (b, b0), units, terms.allowed, unit)


def _penalty(cp: Any, absolute: np.ndarray, square: np.ndarray, b: Any) -> Any:
    penalty = cp.sum(cp.multiply(absolute, cp.abs(b)))
    if square.any():
        penalty = penalty + 0.5 * cp.sum_squares(cp.multiply(np.sqrt(square), b))
    return penalty


def _units(mean_square: Any, largest: Any) -> np.ndarray:
    """Root mean squares, and 1 where there is nothing but rounding errors of `largest`."""
    return np.sqrt(np.where(mean_square > (1e-14 * largest) ** 2, mean_square, 1.0))


def _solve(problem: Any, answer: Callable[[], Any]) -> tuple[Any, str, str]:
    """The answer of the first solver that reaches its tolerance, else of the first that is near."""
    cp = _cvxpy()
    near, heard = None, []
    for name, options in _SOLVERS:
        try:
            with warnings.catch_warnings():
                # Said in the status that comes back.
                warnings.filterwarnings("ignore", message="Solution may be inaccurate")
                problem.solve(solver=name, **options)
        except cp.error.SolverError as error:
            heard.append(f"{name}: {error}")
            continue
        heard.append(f"{name}: {problem.status}")
        if problem.status == cp.OPTIMAL:
            return answer(), name, problem.status
        if problem.status == cp.OPTIMAL_INACCURATE and near is None:
            near = answer(), name, problem.status
    if near is not None:
        return near
    raise RuntimeError(
        f"no solver found an optimum ({'; '.join(heard)}). The numbers must be finite, "
        "and their squares too. Check the table for values that overflow, and bring its columns "
        "and the response to ordinary units."
    )


def reference_s_vector(correlation: Any) -> np.ndarray:
    r"""Solve the semidefinite program of the knockoff construction.

    Maximises :math:`\sum_j s_j` subject to :math:`0 \le s_j \le 1` and
    :math:`2\Sigma - \mathrm{diag}(s) \succeq 0` (the SDP knockoffs of Barber and Candès 2015).

    Parameters
    ----------
    correlation : array-like of shape (p, p)
        A correlation matrix: symmetric, ones on the diagonal, no negative eigenvalue.

    Returns
    -------
    ndarray of shape (p,)
        s. The last constraint holds to the tolerance of the solver, about 1e-9, and can be
        missed by that much.

    Raises
    ------
    ImportError
        Without cvxpy.
    ValueError
        When the matrix is not square, symmetric and of unit diagonal.
    RuntimeError
        When no solver finds an optimum.

    References
    ----------
    R. F. Barber and E. J. Candès, "Controlling the false discovery rate via knockoffs",
    Annals of Statistics 43 (2015) 2055-2085.

    Examples
    --------
    Columns that all correlate at 1/4 allow s = 1, at 3/4 only 2 (1 - 3/4).

    >>> import numpy as np
    >>> from sparsesel.engine.reference import reference_s_vector
    >>> sigma = np.full((3, 3), 0.75) + 0.25 * np.eye(3)
    >>> reference_s_vector(sigma).round(6)
    array([0.5, 0.5, 0.5])
    """
    sigma = np.asarray(correlation, dtype=np.float64)
    square = sigma.ndim == 2 and sigma.shape[0] == sigma.shape[1]
    if not square or not np.allclose(sigma, sigma.T) or not np.allclose(np.diag(sigma), 1.0):
        raise ValueError(
            f"correlation is an array of shape {sigma.shape}; it must be square, symmetric, with "
            "ones on its diagonal. Divide a covariance by the standard deviations of its rows "
            "and columns first."
        )
    cp = _cvxpy()
    s = cp.Variable(sigma.shape[0])
    sigma = (sigma + sigma.T) / 2
    problem = cp.Problem(cp.Maximize(cp.sum(s)), [s >= 0, s <= 1, 2 * sigma - cp.diag(s) >> 0])
    value, _, _ = _solve(problem, lambda: np.clip(s.value, 0.0, 1.0))
    return value


def _cvxpy() -> Any:
    try:
        import cvxpy
    except ImportError as error:
        raise ImportError(
            "the reference was asked for and cvxpy is not installed; it is optional, and only "
            "the reference needs it. Install the extra: pip install 'sparsesel[reference]'."
        ) from error
    return cvxpy
