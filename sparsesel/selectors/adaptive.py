r"""The adaptive lasso as a feature selector.

Letters: n rows, p columns, outcome y, loss :math:`\ell`, penalty :math:`\alpha`, initial estimate
:math:`\hat b`, exponent :math:`\gamma`. Two penalised regressions are chained:

.. math::

    v_j = \Bigl( \frac{\max_k |\hat b_k|}{|\hat b_j|} \Bigr)^{\gamma}, \qquad
    \text{minimise } \frac{\sum_i w_i \ell(y_i, b_0 + x_i'b)}{\sum_i w_i}
    + \alpha \sum_j v_j s_j |b_j|

A column with a small initial coefficient pays a high price, one with :math:`\hat b_j = 0` is left
out, and a column with a large one is shrunk little. That is what makes the selection consistent on
designs where the lasso's is not (Zou 2006, Theorem 2).

Zou's weights are :math:`1/|\hat b_j|^\gamma`. Multiplying them all by :math:`\max_k |\hat
b_k|^\gamma` makes the smallest 1, which changes the problem by a factor of alpha only: alpha keeps
the units of the lasso, and one value of it means the same in every fold.

**Choosing the penalty by cross-validation.** The initial estimate has seen the rows it was made
from, so it is made again on the training rows of every fold; otherwise the held-out rows would
already have had their say in the weights. All folds share one grid of penalties, that of the whole
table, and are one bank of problems.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from numbers import Integral, Real
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray
from sklearn.model_selection import (
    GroupKFold,
    KFold,
    StratifiedGroupKFold,
    StratifiedKFold,
    check_cv,
)

from sparsesel._sklearn_compat import Interval, StrOptions
from sparsesel.claim import Claim
from sparsesel.engine import BankResult, Keep, Problems, as_design, solve_bank, warn_failures
from sparsesel.engine.design import DesignMatrix
from sparsesel.selectors._base import (
    BaseSparseSelector,
    FitInput,
    StatedProblem,
    covariate_notes,
    with_common_docs,
)
from sparsesel.selectors._initial import InitialProblem, choose_initial, initial_sizes
from sparsesel.selectors._tuning import (
    effective_rows,
    extended_bic,
    lowest,
    one_standard_error,
)

FloatArray = NDArray[np.float64]

_RULES = {
    "cv": "the smallest cross-validated loss",
    "one_se": "the largest penalty within one standard error of the smallest cross-validated loss",
    "ebic": "the smallest extended BIC",
}
_DEFAULT_FOLDS = 5
# The smallest penalty of an automatic grid, relative to the largest, as in LassoCV.
_ALPHA_MIN_RATIO = 1e-3


@dataclass(frozen=True)
class _Chosen:
    """The outcome of choosing a penalty."""

    alpha: float
    alphas: FloatArray  # (L,), the grid
    position: int  # of alpha on the grid
    curves: dict[str, FloatArray]  # fitted attributes that show how it was chosen
    n_iter: int


@with_common_docs
class AdaptiveLassoSelector(BaseSparseSelector):
    r"""Select features by the adaptive lasso, penalty given or chosen.

    Minimises over :math:`(b_0, b)`

    .. math::

        \frac{\sum_i w_i \ell(y_i, b_0 + x_i'b)}{\sum_i w_i}
        + \alpha \sum_j \Bigl[ \rho v_j s_j |b_j| + \frac{1-\rho}{2} v_j s_j^2 b_j^2 \Bigr],
        \qquad v_j = \Bigl( \frac{\max_k |\hat b_k|}{|\hat b_j|} \Bigr)^{\gamma}

    with an initial estimate :math:`\hat b`. The selected units are those with a column whose
    coefficient is not zero.

    Parameters
    ----------
    alpha : float > 0 or {"cv", "one_se", "ebic"}, default="cv"
        The penalty, in units of scikit-learn's `Lasso`, or how it is chosen. "cv": the smallest
        cross-validated loss. "one_se": the largest penalty whose cross-validated loss is within
        one standard error of the smallest. "ebic": the smallest extended BIC, without
        cross-validation.
    gamma : float >= 0, default=1.0
        Exponent of the weights. 0 is the lasso, for which no initial estimate is made.
    initial : {"auto", "least_squares", "ridge", "lasso", "marginal"}, default="auto"
        The initial estimate. "least_squares" (log loss: maximum likelihood), "ridge" with the
        penalty of generalised cross-validation, "lasso" with the penalty of the BIC, "marginal"
        one column at a time (given the covariates). "auto": least squares with at least five rows
        per column (not with log loss, where classes may be separated), ridge with at least as
        many rows as columns, the lasso otherwise.
    alphas : int or array-like of positive floats, default=100
        The grid among which to choose: how many penalties, from the smallest one that selects
        nothing down to 0.001 of it, or their values.
    l1_ratio : float in (0, 1], default=1.0
        Share of the absolute-value penalty.
    cv : int, splitter or iterable, default=None
        How rows are split, as in scikit-learn. An int is that many folds, None 5, or fewer where
        the rarer class or the groups do not suffice: stratified with log loss, whole groups where
        `groups` are given. A splitter is passed the groups.
    <common parameters>
    tol : float, default=1e-7
        Largest relative duality gap of a solution.
    max_iter : int, default=10000
        Most iterations of one solution.
    <run parameters>

    Attributes
    ----------
    <common attributes>
        Here the measure is "coefficient_size", the largest |coefficient| of the unit's columns in
        units of their standard deviations; the claim lists units in its order.
    coef_ : ndarray of shape (p,)
        Coefficients, in the units of X.
    intercept_ : float
        Intercept.
    alpha_ : float
        The penalty used.
    alphas_ : ndarray of shape (L,)
        The penalties among which it was chosen, decreasing; `alpha_` alone where it was given.
    loss_path_ : ndarray of shape (L, K)
        Held-out loss per penalty and fold, with "cv" and "one_se": the mean log loss, or half the
        mean squared residual (LassoCV's `mse_path_` is twice this).
    ebic_path_ : ndarray of shape (L,)
        The criterion, with "ebic".
    initial_ : str
        The initial estimate used, "none" with gamma 0.
    weights_ : ndarray of shape (p,)
        The penalty weights of the final fit: adaptive times `penalty_weights`. 0 for covariates,
        infinite for columns left out.
    dual_gap_ : float
        Duality gap of the final fit, relative to the null objective.
    n_iter_ : int
        Largest number of iterations of any fit.

    Raises
    ------
    ValueError
        For parameters and data outside what is allowed, with what is.

    Warns
    -----
    ConvergenceWarning
        If a fit did not reach `tol`.

    See Also
    --------
    StabilitySelector : Bounds the expected number of false selections.
    NullModelFallback : Next step for a table without columns.

    Notes
    -----
    There is no finite-sample guarantee about false selections, and `claim_` says so. Selection
    consistency is asymptotic and needs a consistent initial estimate and a suitable alpha; the
    penalty with the smallest cross-validated loss is tuned for prediction and tends to keep a few
    columns too many, "one_se" and "ebic" keep fewer.

    The initial estimate ignores `penalty_weights` other than infinite ones; they multiply the
    adaptive weights. With the log loss, "ridge" and "marginal" take one Newton step from the model
    with the covariates alone. With `feature_groups` the fit is the same, and a group is selected
    if any of its columns is.

    References
    ----------
    Zou, H. (2006). The adaptive lasso and its oracle properties. *Journal of the American
    Statistical Association* 101, 1418-1429. Equation (4).

    Chen, J. and Chen, Z. (2008). Extended Bayesian information criteria for model selection with
    large model spaces. *Biometrika* 95, 759-771.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.selectors import AdaptiveLassoSelector
    >>> X = np.random.default_rng(0).standard_normal((100, 8))
    >>> y = 2 * X[:, 1] - X[:, 4] + np.random.default_rng(1).standard_normal(100)
    >>> selector = AdaptiveLassoSelector("ebic").fit(X, y)
    >>> selector.get_support(indices=True)
    array([1, 4])
    """

    _parameter_constraints: ClassVar[dict[str, Any]] = {
        **BaseSparseSelector._parameter_constraints,
        "alpha": [Interval(Real, 0, None, closed="neither"), StrOptions(set(_RULES))],
        "gamma": [Interval(Real, 0, None, closed="left")],
        "initial": [StrOptions({"auto", "least_squares", "ridge", "lasso", "marginal"})],
        "alphas": [Interval(Integral, 1, None, closed="left"), "array-like"],
        "l1_ratio": [Interval(Real, 0, 1, closed="right")],
        "cv": ["cv_object"],
        "tol": [Interval(Real, 0, None, closed="neither")],
        "max_iter": [Interval(Integral, 1, None, closed="left")],
    }

    def __init__(
        self,
        alpha: float | str = "cv",
        *,
        gamma: float = 1.0,
        initial: str = "auto",
        alphas: Any = 100,
        l1_ratio: float = 1.0,
        cv: Any = None,
        loss: str = "auto",
        covariates: Any = None,
        feature_groups: Any = None,
        penalty_weights: Any = None,
        standardize: bool = True,
        tol: float = 1e-7,
        max_iter: int = 10_000,
        n_jobs: int | None = None,
        random_state: Any = None,
        memory: Any = None,
        verbose: int = 0,
    ) -> None:
        self.alpha = alpha
        self.gamma = gamma
        self.initial = initial
        self.alphas = alphas
        self.l1_ratio = l1_ratio
        self.cv = cv
        self.loss = loss
        self.covariates = covariates
        self.feature_groups = feature_groups
        self.penalty_weights = penalty_weights
        self.standardize = standardize
        self.tol = tol
        self.max_iter = max_iter
        self.n_jobs = n_jobs
        self.random_state = random_state
        self.memory = memory
        self.verbose = verbose

    def fit(
        self, X: Any, y: Any, sample_weight: Any = None, *, groups: Any = None
    ) -> AdaptiveLassoSelector:
        """Fit the selector.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            The table: finite numbers.
        y : array-like of shape (n,)
            The outcome: numbers, or two classes with any labels.
        sample_weight : array-like of shape (n,), default=None
            Weights of the rows, zero or positive, in the fits and in the held-out loss. Whole
            numbers are the same as repeated rows, except that folds are made of the rows given.
        groups : array-like of shape (n,), default=None
            Labels of rows that stay together when folds are made.

        Returns
        -------
        AdaptiveLassoSelector
            The fitted selector.
        """
        data = self._prepare(X, y, sample_weight, groups)
        design = as_design(data.X)
        by_folds = self.alpha in ("cv", "one_se")
        held_out = self._folds(data) if by_folds else np.zeros((0, data.n_rows), dtype=bool)
        weights = _row_weights(data, held_out)
        initial = self._initial(data, weights)
        penalty_weights = self._penalty_weights(data, design, weights, initial)
        bank = _Bank(self, data, design)
        chosen = self._choose(bank, weights, penalty_weights, held_out)
        path = chosen.alphas[: chosen.position + 1]
        final = bank.solve(weights[:1], penalty_weights[:1], path, Keep(coefficients=True))
        assert final.coef is not None
        self.coef_ = final.coef[0][[-1]].toarray()[0]
        self.intercept_ = float(final.intercept[0, -1])
        self.dual_gap_ = float(final.gap[0, -1])
        self.alpha_ = chosen.alpha
        self.alphas_ = chosen.alphas
        self.initial_ = initial
        self.weights_ = penalty_weights[0]
        self.n_iter_ = max(1, chosen.n_iter, int(final.n_iter.max()))
        for name in ("loss_path_", "ebic_path_"):
            self.__dict__.pop(name, None)
        for name, curve in chosen.curves.items():
            setattr(self, name, curve)
        sizes = _unit_sizes(data, design, self.coef_)
        selected = data.columns.any_over_units(self.coef_ != 0)
        claim = self._claim(data, selected, sizes, len(held_out))
        self._conclude(data, selected, {"coefficient_size": sizes}, claim)
        return self

    def _initial(self, data: FitInput, weights: FloatArray) -> str:
        if self.gamma == 0:
            return "none"
        n_columns = 1 + data.columns.n_covariates + int(data.columns.candidates.sum())
        n_rows = min(map(effective_rows, weights))
        return choose_initial(self.initial, data.loss, n_rows, n_columns)

    def _penalty_weights(
        self, data: FitInput, design: DesignMatrix, weights: FloatArray, initial: str
    ) -> FloatArray:
        """Adaptive weights (B, p) of every problem, times the given penalty weights."""
        given = data.columns.penalty_weights
        if initial == "none":
            return np.broadcast_to(given, (len(weights), len(given)))
        problem = InitialProblem(
            design=design,
            response=data.response,
            weights=weights,
            loss=data.loss,
            penalty_weights=given,
            standardize=self.standardize,
            tol=self.tol,
            max_iter=self.max_iter,
            settings=self._settings(data, "initial fits", "initial", initial, weights, self.tol),
        )
        adaptive = adaptive_weights(initial_sizes(initial, problem), self.gamma)
        adaptive[:, given == 0] = 0.0
        return np.where(given > 0, given, 1.0) * adaptive

    def _choose(
        self,
        bank: _Bank,
        weights: FloatArray,
        penalty_weights: FloatArray,
        held_out: NDArray[np.bool_],
    ) -> _Chosen:
        if isinstance(self.alpha, Real):
            return _Chosen(float(self.alpha), np.array([float(self.alpha)]), 0, {}, 1)
        alphas = self._grid(bank, weights[:1], penalty_weights[:1])
        if self.alpha == "ebic":
            keep = Keep(coefficients=True, held_out=weights[:1])
            result = bank.solve(weights[:1], penalty_weights[:1], alphas, keep)
            curve = self._ebic_path(bank.data, result)
            name, position = "ebic_path_", lowest(curve)
        else:
            keep = Keep(coefficients=False, held_out=held_out * bank.data.weights)
            result = bank.solve(weights[1:], penalty_weights[1:], alphas, keep)
            assert result.held_out_loss is not None
            curve = result.held_out_loss.T
            pick = one_standard_error if self.alpha == "one_se" else _lowest_mean
            name, position = "loss_path_", pick(curve)
        n_iter = int(result.n_iter.max())
        return _Chosen(float(alphas[position]), alphas, position, {name: curve}, n_iter)

    def _grid(self, bank: _Bank, weights: FloatArray, penalty_weights: FloatArray) -> FloatArray:
        """The penalties to choose among: those given, or a geometric grid of the whole table."""
        if not isinstance(self.alphas, Integral):
            alphas = np.array(self.alphas, dtype=np.float64)
            allowed = np.isfinite(alphas) & (alphas > 0)
            if alphas.ndim != 1 or not alphas.size or not allowed.all():
                raise ValueError(
                    f"alphas is {self.alphas!r}. It must hold positive finite numbers in one "
                    "dimension, or be how many to use; 100 is the default."
                )
            return np.sort(alphas)[::-1]
        top = bank.largest_alpha(weights, penalty_weights)
        # Without any association at all every penalty selects nothing; one of them will do.
        return (
            top * np.geomspace(1.0, _ALPHA_MIN_RATIO, int(self.alphas)) if top > 0 else np.ones(1)
        )

    def _ebic_path(self, data: FitInput, result: BankResult) -> FloatArray:
        assert result.coef is not None and result.held_out_loss is not None
        candidates = np.flatnonzero(data.columns.candidates)
        return extended_bic(
            data.loss,
            result.held_out_loss[0],
            np.diff(result.coef[0][:, candidates].indptr),
            effective_rows(data.weights),
            len(candidates),
        )

    def _folds(self, data: FitInput) -> NDArray[np.bool_]:
        """Masks (K, n) of the held-out rows of every fold."""
        if self.cv is None or isinstance(self.cv, Integral):
            n_folds = None if self.cv is None else int(self.cv)
            rows, splits = data.rows, _default_splits(data, n_folds)
        else:
            rows = np.arange(data.n_rows)
            splitter = check_cv(self.cv, data.labels, classifier=data.loss == "log_loss")
            splits = splitter.split(np.zeros((data.n_rows, 1)), data.labels, data.groups)
        tests = [rows[test] for _, test in splits]
        held_out = np.zeros((len(tests), data.n_rows), dtype=bool)
        for fold, test in zip(held_out, tests, strict=True):
            fold[test] = True
        _check_folds(data, held_out)
        return held_out

    def _claim(
        self, data: FitInput, selected: NDArray[np.bool_], sizes: FloatArray, n_folds: int
    ) -> Claim:
        order = np.argsort(-sizes, kind="stable")
        names = tuple(data.columns.unit_names[k] for k in order if selected[k])
        rule = _RULES.get(self.alpha) if isinstance(self.alpha, str) else None
        how = "as given" if rule is None else f"chosen by {rule}"
        notes = [f"The penalty is alpha = {self.alpha_:.4g}, {how}."]
        if n_folds:
            kept = (
                "made without groups of rows, since none were given"
                if data.groups is None
                else "which kept groups of rows whole"
            )
            notes.append(f"The loss was cross-validated in {n_folds} folds, {kept}.")
        if self.initial_ != "none":
            again = ", made again on the training rows of every fold" if n_folds else ""
            notes.append(
                f"The initial estimate is {self.initial_.replace('_', ' ')} with "
                f"gamma = {self.gamma:g}{again}."
            )
        return Claim(
            method="The lasso" if self.initial_ == "none" else "The adaptive lasso",
            unit=data.columns.unit,
            candidates=data.columns.n_units,
            selected=names,
            notes=(*notes, *covariate_notes(data)),
            empty_reason=None if names else f"every coefficient is zero at this penalty, {how}",
        )

    def _stated_problems(
        self, X: Any, y: Any, sample_weight: Any = None, groups: Any = None
    ) -> list[StatedProblem]:
        """The final fit, and at its penalty the fits of the folds."""
        data = self._read(X, y, sample_weight, groups, self.seed_, reset=False)
        design = as_design(data.X)
        by_folds = self.alpha in ("cv", "one_se")
        held_out = self._folds(data) if by_folds else np.zeros((0, data.n_rows), dtype=bool)
        weights = _row_weights(data, held_out)
        penalty_weights = self._penalty_weights(data, design, weights, self.initial_)
        bank = _Bank(self, data, design)
        path = self.alphas_[self.alphas_ >= self.alpha_]
        result = bank.solve(weights, penalty_weights, path, Keep(coefficients=True))
        labels = ["final fit", *(f"fold {k + 1}" for k in range(len(held_out)))]
        assert result.coef is not None
        coef = [path[[-1]].toarray()[0] for path in result.coef]
        intercept = result.intercept[:, -1].copy()
        coef[0], intercept[0] = self.coef_, self.intercept_
        return [
            StatedProblem(
                label,
                bank.problems(weights[[b]], penalty_weights[[b]]),
                self.alpha_,
                coef[b],
                float(intercept[b]),
            )
            for b, label in enumerate(labels)
        ]


@dataclass(frozen=True)
class _Bank:
    """The engine, set up for the problems of one fit, which differ in weights alone."""

    selector: AdaptiveLassoSelector
    data: FitInput
    design: DesignMatrix

    def problems(self, weights: FloatArray, penalty_weights: FloatArray) -> Problems:
        return Problems(
            loss=self.data.loss,
            response=self.data.response,
            sample_weight=weights,
            penalty_weights=penalty_weights,
            l1_ratio=self.selector.l1_ratio,
            standardize=self.selector.standardize,
        )

    def solve(
        self, weights: FloatArray, penalty_weights: FloatArray, alphas: Any, keep: Keep
    ) -> BankResult:
        selector = self.selector
        parts = (weights, penalty_weights, alphas, keep, selector.l1_ratio)
        result = solve_bank(
            self.design,
            self.problems(weights, penalty_weights),
            alphas,
            keep=keep,
            tol=selector.tol,
            max_iter=selector.max_iter,
            settings=selector._settings(self.data, "fits", *parts, selector.tol, selector.max_iter),
        )
        warn_failures(result, selector.tol)
        return result

    def largest_alpha(self, weights: FloatArray, penalty_weights: FloatArray) -> float:
        """The smallest penalty at which every penalised coefficient is zero."""
        keep = Keep(coefficients=False)
        result = solve_bank(
            self.design,
            self.problems(weights, penalty_weights),
            1,
            keep=keep,
            tol=self.selector.tol,
            max_iter=self.selector.max_iter,
        )
        return float(result.alpha_max[0])


def adaptive_weights(sizes: FloatArray, gamma: float) -> FloatArray:
    r"""Weights of the adaptive lasso from the sizes of initial coefficients.

    .. math:: v_j = (\max_k |\hat b_k| / |\hat b_j|)^\gamma

    Parameters
    ----------
    sizes : ndarray of shape (B, p)
        :math:`|\hat b_j|`, at least 0.
    gamma : float
        Exponent, positive.

    Returns
    -------
    ndarray of shape (B, p)
        Weights from 1; infinite where the coefficient is 0.

    References
    ----------
    Zou (2006), equation (4), times the largest initial coefficient to the power gamma.
    """
    largest = sizes.max(axis=1, keepdims=True)
    ratio = np.divide(largest, sizes, out=np.full_like(sizes, np.inf), where=sizes > 0)
    return ratio**gamma


def _unit_sizes(data: FitInput, design: DesignMatrix, coef: FloatArray) -> FloatArray:
    """Largest |coefficient| of every unit's columns, in their standard deviations."""
    used = np.flatnonzero((coef != 0) & data.columns.candidates)
    weight = data.weights / data.weights.sum()
    columns = design.gather(used, centred=True)
    deviation = np.sqrt(np.maximum(columns**2 @ weight - (columns @ weight) ** 2, 0.0))
    sizes = np.zeros(data.columns.n_units)
    np.maximum.at(sizes, data.columns.unit_of[used], np.abs(coef[used]) * deviation)
    return sizes


def _lowest_mean(loss_path: FloatArray) -> int:
    return lowest(loss_path.mean(axis=1))


def _row_weights(data: FitInput, held_out: NDArray[np.bool_]) -> FloatArray:
    """Weights (1 + K, n): of the whole table, then of the training rows of every fold."""
    return np.vstack([data.weights, np.where(held_out, 0.0, data.weights)])


def _default_splits(data: FitInput, n_folds: int | None) -> Any:
    """Splits of the rows with weight into folds, by class with log loss, by group with groups.

    Without a number given there are five folds, or as many as the rarer class or the groups allow.
    """
    rows = data.rows
    labels = data.labels[rows]
    groups = None if data.groups is None else data.groups[rows]
    stratified = data.loss == "log_loss"
    units, what = (len(rows), "rows") if groups is None else (len(np.unique(groups)), "groups")
    if stratified and groups is None:
        rarer = int(min(np.sum(data.response[rows] == value) for value in (0, 1)))
        units, what = rarer, "rows of the rarer class"
    if n_folds is None:
        n_folds = max(2, min(_DEFAULT_FOLDS, units))
    if units < n_folds:
        remedy = f"cv={units}, or " if units >= 2 else ""
        raise ValueError(
            f"cv={n_folds} folds, but the table has {units} {what}. There can be at most as many "
            f"folds as that, and at least 2: use {remedy}a penalty that needs no folds "
            "(alpha='ebic' or a number)."
        )
    if groups is None:
        splitter = StratifiedKFold(n_folds) if stratified else KFold(n_folds)
    else:
        splitter = StratifiedGroupKFold(n_folds) if stratified else GroupKFold(n_folds)
    with warnings.catch_warnings():
        # Folds that end up without a class are refused below, with a reason.
        warnings.filterwarnings("ignore", message="The least populated class")
        return list(splitter.split(np.zeros((len(rows), 1)), labels, groups))


def _check_folds(data: FitInput, held_out: NDArray[np.bool_]) -> None:
    """Refuse folds that can't be fitted or judged."""
    if len(held_out) < 2:
        raise ValueError(
            f"cv gives {len(held_out)} split. At least two are needed to compare penalties."
        )
    weights = data.weights
    for k, fold in enumerate(held_out):
        train = weights * ~fold
        if not (weights * fold).any() or not train.any():
            lacking = "hold out" if train.any() else "fit"
            raise ValueError(
                f"Fold {k + 1} has no row with positive weight to {lacking}. Every fold needs some "
                "of both: use fewer folds."
            )
        if data.classes is not None and len(np.unique(data.response[train > 0])) < 2:
            raise ValueError(
                f"The training rows of fold {k + 1} have one class only. Both are needed: use "
                "fewer folds, or groups that do not hold all rows of a class."
            )


__all__ = ["AdaptiveLassoSelector", "adaptive_weights"]
