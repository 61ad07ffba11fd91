r"""Knockoffs as a feature selector: false discoveries counted by copies that can't be true.

Letters: n rows; m candidate columns; c covariates; M draws; X~ copies of the candidates X;
:math:`W_g` the contrast of unit g.

Every draw makes copies that are exchangeable with the candidates and carry nothing of the outcome,
measures on the table [A X X~] how much more every unit matters than its copies
(`sparsesel.knockoffs.importances`), and hands the contrasts to a filter
(`sparsesel.error_control`). A feature that the outcome does not depend on, given all others, is as
likely to lose to its copy as to win; the losses that are seen estimate the false wins that are not.

**Which copies.** ``feature_model="auto"`` takes fixed-X copies where they are exact: squared error,
n >= 2 m + 1 + c rows and linearly independent columns. They assume nothing of the features and a
linear model with Gaussian errors of the outcome. Otherwise, and for the importances of estimators,
which a rotation of the rows would make meaningless, it takes model-X copies, which assume nothing
of the outcome and a distribution of the features: a Gaussian copula where a column has few
distinct values (Gaussian copies of a two-valued column would be told from it at sight), a Gaussian
distribution with shrunk covariance elsewhere.

**Rows.** The theory is for independent rows. With `groups` and an outcome that is constant within
each, every group becomes one row: the mean of its rows where all groups are of one size and all
weights equal, so that the new rows have one distribution; otherwise one of its rows at random.

References
----------
Barber, R. F. and Candès, E. J. (2015). Controlling the false discovery rate via knockoffs. *Annals
of Statistics* 43, 2055-2085.

Candès, E., Fan, Y., Janson, L. and Lv, J. (2018). Panning for gold: 'model-X' knockoffs for high
dimensional controlled variable selection. *Journal of the Royal Statistical Society B* 80,
551-577.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass, replace
from functools import partial
from numbers import Integral, Real
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from sparsesel._sklearn_compat import HasMethods, Interval, StrOptions
from sparsesel.claim import Assumption, Claim, State
from sparsesel.engine import BankResult, warn_failures
from sparsesel.knockoffs import (
    FEATURE_MODELS,
    S_VECTOR_METHODS,
    CopulaModel,
    FixedXModel,
    GaussianModel,
    check_exchangeability,
    indistinct_features,
)
from sparsesel.knockoffs._model import FittedModel, count_few_valued
from sparsesel.knockoffs.importances import (
    IMPORTANCES,
    EstimatorDifference,
    Importance,
    ImportanceProblem,
    Measured,
    as_importance,
    measure_contrasts,
)
from sparsesel.resampling import one_row_per_group
from sparsesel.selectors._base import (
    BaseSparseSelector,
    FitInput,
    StatedProblem,
    covariate_notes,
    rows_detail,
    with_common_docs,
)
from sparsesel.selectors._knockoff_filters import Decision, KnockoffFilter, choose_filter
from sparsesel.tasks import one_blas_thread, run_tasks, spawn

__all__ = ["KnockoffSelector"]

FloatArray = NDArray[np.float64]

# Keys of the independent streams of random numbers that one seed serves.
_DRAWS, _ROWS, _FILTER, _CHECK = 0, 1, 2, 3

# Draws that are restated for a check: the widened table of each is held in memory.
_MOST_RESTATED = 5


@dataclass(frozen=True)
class _Candidates:
    """The independent rows of a fit, split into what is copied and what is conditioned on."""

    features: NDArray[Any]  # (n, m)
    covariates: FloatArray  # (n, c)
    response: FloatArray
    sample_weight: FloatArray | None
    rows: str  # how the rows were made from the table's, for the claim

    @property
    def n_rows(self) -> int:
        return len(self.response)


@dataclass(frozen=True)
class _Draw:
    """What every draw needs; shipped once to every worker."""

    model: FittedModel
    importance: Importance
    candidates: _Candidates
    problem: dict[str, Any]  # the settings of ImportanceProblem

    def measure(self, generator: np.random.Generator) -> Measured:
        """Draw copies and measure the contrasts."""
        rows = self.candidates
        table = self.model.draw(
            rows.features,
            rows.response,
            generator,
            covariates=rows.covariates,
            sample_weight=rows.sample_weight,
        )
        problem = ImportanceProblem(table, has_copy=self.model.has_copy, **self.problem)
        return measure_contrasts(self.importance, problem, generator)


@with_common_docs
class KnockoffSelector(BaseSparseSelector):
    """Select features that beat their knockoff copies, with a bound on false discoveries.

    Every candidate gets a copy that has the same relation to the other features and none to the
    outcome. A candidate is selected if it matters so much more than its copy that few copies
    matter as much more than their originals.

    Parameters
    ----------
    fdr : float in (0, 1), default=0.2
        Target: the bound on the false discovery rate, the expected share of false selections in
        the list. A list at this target holds at least 1/fdr units, 2/fdr with several draws.
    plus : bool, default=True
        With `fdr` and one draw: knockoff+. False is the knockoff filter, which can select fewer
        and bounds the modified rate only (false selections over the length of the list plus
        1/fdr).
    pfer : float > 0, default=None
        A target instead of `fdr`: the expected number of false selections. Lists can be short.
        With several draws (31, say; an odd number) a unit is selected if at least half of the
        draws select it.
    k_fwer : (int, float), default=None
        A target instead of `fdr`: k and the probability of k or more false selections. One draw
        only.
    feature_model : {"auto", "fixed_x", "gaussian", "copula"} or FeatureModel, default="auto"
        How copies are made. "fixed_x": for a linear model with Gaussian errors, whatever the
        features are (squared error only). "gaussian": for Gaussian features and any outcome, the
        covariance shrunk. "copula": likewise for monotone functions of Gaussian features,
        two-valued and count columns included. "auto": fixed-X with squared error, rows at least
        twice the candidates plus one plus the covariates, linearly independent columns and an
        importance that is no estimator; otherwise the copula where a candidate has at most ten
        distinct values, Gaussian where none has. A model of `sparsesel.knockoffs` has further
        settings: ``GaussianModel(covariance=...)`` takes a known covariance, candidates first and
        then covariates, both in the order of the table.
    s_vector : {"auto", "mvr", "max_entropy", "sdp", "equicorrelated"}, default="auto"
        How far copies move from their originals. "auto": minimum reconstructability ("mvr"), or
        what a given model has.
    importance : {"auto", "lasso", "entry", "ridge", "elastic_net", "marginal"}, estimator or \
Importance, default="auto"
        How much a column matters, measured on features and copies together. "lasso" (and "auto"):
        coefficient at the cross-validated penalty. "entry": penalty at which it enters the lasso
        path. "ridge", "elastic_net": coefficients. "marginal": association on its own. An
        estimator of scikit-learn with `coef_` or `feature_importances_`: these.
    n_draws : int, default=1
        Draws of copies. Several are combined, which makes the list depend little on the seed: for
        `fdr` by e-values (50 draws are usual), for `pfer` by selection frequency.
    <common parameters>
    tol : float, default=1e-7
        Largest relative duality gap of a solution.
    max_iter : int, default=10000
        Most iterations of one solution.
    <run parameters>

    Attributes
    ----------
    <common attributes>
    contrast_ : ndarray of shape (p,)
        How much more the column's unit matters than its copies, in units of the importance;
        negative where the copies win, NaN for covariates and columns left out. With several draws
        the mean.
    threshold_ : float
        What decides has to reach this: the contrast with one draw; with several the e-value for
        `fdr` and the selection probability for `pfer`. Infinite where nothing is selected.
    selection_probability_ : ndarray of shape (p,)
        With several draws: the share of them that select the column's unit, each by itself.
    e_value_ : ndarray of shape (p,)
        With several draws and `fdr`: the mean e-value of the column's unit.
    s_vector_ : ndarray of shape (p,)
        One minus the correlation of a column with its copy, given the covariates: near 0 there is
        no power. 0 without a copy, NaN for covariates and columns left out.
    feature_model_ : FeatureModel
        The model used, not fitted.
    n_iter_ : int
        Largest number of iterations of any fit.

    Raises
    ------
    ValueError
        For parameters and data outside what is allowed, with what is; for an outcome that varies
        within `groups`.

    Warns
    -----
    UserWarning
        Before anything is fitted, if there are fewer candidates than a list at the target holds.
    ConvergenceWarning
        If a fit did not reach `tol`.

    See Also
    --------
    StabilitySelector : Bounds the expected number of false selections by half-samples.
    NullModelFallback : Next step for a table without columns.

    Notes
    -----
    A selection is false if the outcome does not depend on the feature given all other candidates
    and covariates. The bound holds for copies that are exchangeable with the features; for
    estimated feature models it holds as far as the estimate does, which `claim_` says together
    with what a check on held-out rows found. Highly correlated columns have copies close to
    themselves and no power; `feature_groups` makes the group the unit.

    Three targets share the parameters: `pfer` and `k_fwer`, where given, replace `fdr`, and only
    one may be given. The share of draws that select a unit (0.5) is no parameter: with an odd
    number of draws the bound by frequency is then that of one draw.

    A change of target re-uses every draw kept in `memory`.

    References
    ----------
    Barber, R. F. and Candès, E. J. (2015). Controlling the false discovery rate via knockoffs.
    *Annals of Statistics* 43, 2055-2085. Fixed-X copies and the filters.

    Candès, E., Fan, Y., Janson, L. and Lv, J. (2018). Panning for gold: 'model-X' knockoffs for
    high dimensional controlled variable selection. *Journal of the Royal Statistical Society B*
    80, 551-577.

    Janson, L. and Su, W. (2016). Familywise error rate control via knockoffs. *Electronic Journal
    of Statistics* 10, 960-975. `pfer` and `k_fwer` with one draw.

    Ren, Z. and Barber, R. F. (2024). Derandomised knockoffs: leveraging e-values for false
    discovery rate control. *Journal of the Royal Statistical Society B* 86, 122-154.

    Ren, Z., Wei, Y. and Candès, E. (2023). Derandomizing knockoffs. *Journal of the American
    Statistical Association* 118, 948-958. `pfer` with several draws.

    Spector, A. and Janson, L. (2022). Powerful knockoffs via minimizing reconstructability. *Annals
    of Statistics* 50, 252-276. The default `s_vector`.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.selectors import KnockoffSelector
    >>> X = np.random.default_rng(0).standard_normal((200, 30))
    >>> y = X[:, :6] @ np.ones(6) + np.random.default_rng(1).standard_normal(200)
    >>> selector = KnockoffSelector(random_state=0).fit(X, y)
    >>> selector.get_support(indices=True)
    array([0, 1, 2, 3, 4, 5])
    >>> selector.claim_.bound
    0.2
    """

    _parameter_constraints: ClassVar[dict[str, Any]] = {
        **BaseSparseSelector._parameter_constraints,
        "fdr": [Interval(Real, 0, 1, closed="neither")],
        "plus": ["boolean"],
        "pfer": [None, Interval(Real, 0, None, closed="neither")],
        "k_fwer": [None, tuple, list],
        "feature_model": [StrOptions({"auto", *FEATURE_MODELS}), HasMethods(["fit"])],
        "s_vector": [StrOptions({"auto", *S_VECTOR_METHODS})],
        "importance": [
            StrOptions({"auto", *IMPORTANCES}),
            HasMethods(["fit", "get_params"]),
            Importance,
        ],
        "n_draws": [Interval(Integral, 1, None, closed="left")],
        "tol": [Interval(Real, 0, None, closed="neither")],
        "max_iter": [Interval(Integral, 1, None, closed="left")],
    }

    def __init__(
        self,
        fdr: float = 0.2,
        *,
        plus: bool = True,
        pfer: float | None = None,
        k_fwer: tuple[int, float] | None = None,
        feature_model: Any = "auto",
        s_vector: str = "auto",
        importance: Any = "auto",
        n_draws: int = 1,
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
        self.fdr = fdr
        self.plus = plus
        self.pfer = pfer
        self.k_fwer = k_fwer
        self.feature_model = feature_model
        self.s_vector = s_vector
        self.importance = importance
        self.n_draws = n_draws
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
    ) -> KnockoffSelector:
        """Fit the selector.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            The table: finite numbers. The candidates of a sparse one are made dense, since their
            copies are.
        y : array-like of shape (n,)
            The outcome: numbers, or two classes with any labels.
        sample_weight : array-like of shape (n,), default=None
            Weights of the rows, zero or positive. A row of weight zero is as if absent.
        groups : array-like of shape (n,), default=None
            Labels of rows that belong together and share one outcome; each group becomes one row.

        Returns
        -------
        KnockoffSelector
            The fitted selector.
        """
        data = self._prepare(X, y, sample_weight, groups)
        rule = choose_filter(self.fdr, self.plus, self.pfer, self.k_fwer, self.n_draws)
        _warn_if_hopeless(rule, data)
        draw, model = self._draw(data)
        settings = self._settings(
            data, "draws", model, draw.importance, self.tol, self.max_iter, draw.candidates.rows
        )
        streams = spawn(data.seed, self.n_draws, _DRAWS)
        measured = run_tasks(partial(_contrasts_only, draw), streams, settings)
        n_iter = self._warn_of_failures([result for draw in measured for result in draw.results])
        self._contrasts = np.stack([draw.contrast for draw in measured])
        decision = rule.decide(self._contrasts, spawn(data.seed, 1, _FILTER)[0])
        self._publish(data, draw, decision)
        self.feature_model_ = model
        self.n_iter_ = n_iter
        measures = {"contrast": self._contrasts.mean(axis=0), **decision.measures}
        claim = self._claim(data, draw, model, rule, decision)
        self._conclude(data, decision.selected, measures, claim)
        return self

    def _draw(self, data: FitInput) -> tuple[_Draw, Any]:
        """Everything that the draws share, and the feature model before its fit."""
        candidates = _independent_rows(data)
        columns = data.columns
        importance = as_importance("lasso" if self.importance == "auto" else self.importance)
        units = columns.unit_of[columns.candidates]
        # One BLAS thread, since its number changes the last bits and workers have one.
        with one_blas_thread():
            model, fitted = self._fit_model(data, candidates, importance, _labels(units))
        problem = {
            "loss": data.loss,
            "units": units,
            "penalty_weights": columns.penalty_weights[columns.candidates],
            "standardize": self.standardize,
            "tol": self.tol,
            "max_iter": self.max_iter,
        }
        return _Draw(fitted, importance, candidates, problem), model

    def _fit_model(
        self,
        data: FitInput,
        candidates: _Candidates,
        importance: Importance,
        labels: NDArray[np.int64] | None,
    ) -> tuple[Any, FittedModel]:
        """Fit the feature model asked for, or the first that suits."""
        if self.feature_model != "auto":
            model = self._given_model(data)
            return model, _fitted(model, candidates, labels)
        s_vector = "mvr" if self.s_vector == "auto" else self.s_vector
        n_rows, m = candidates.features.shape
        linear = data.loss == "squared_error" and not isinstance(importance, EstimatorDifference)
        if linear and n_rows >= 2 * m + 1 + candidates.covariates.shape[1]:
            fixed = FixedXModel(s_vector, add_rows=False)
            try:
                return fixed, _fitted(fixed, candidates, labels)
            except ValueError:
                # Columns that follow from others; model-X copies exist nevertheless.
                pass
        few = count_few_valued(candidates.features, np.arange(m)) > 0
        model = CopulaModel(s_vector=s_vector) if few else GaussianModel(s_vector=s_vector)
        return model, _fitted(model, candidates, labels)

    def _given_model(self, data: FitInput) -> Any:
        model = self.feature_model
        if isinstance(model, str):
            s_vector = "mvr" if self.s_vector == "auto" else self.s_vector
            model = FEATURE_MODELS[model](s_vector=s_vector)
        elif self.s_vector != "auto":
            raise ValueError(
                f"s_vector={self.s_vector!r} was given beside a feature model of class "
                f"{type(model).__name__}, which has its own. Set s_vector='auto', and the rule in "
                "the model."
            )
        if isinstance(model, FixedXModel) and data.loss != "squared_error":
            raise ValueError(
                f"feature_model='fixed_x' with loss {data.loss!r}. Fixed-X copies are for a linear "
                "model with Gaussian errors, so for the squared error only: use 'gaussian', "
                "'copula' or 'auto'."
            )
        return model

    def _warn_of_failures(self, results: list[BankResult]) -> int:
        """Warn once of all fits of all draws that failed; give the most iterations."""
        if not results:
            return 1
        names = ("alphas", "gap", "status", "n_iter", "intercept")
        flat: dict[str, Any] = {
            name: np.concatenate([np.ravel(getattr(result, name)) for result in results])[None]
            for name in names
        }
        warn_failures(replace(results[0], **flat), self.tol)
        return max(1, int(flat["n_iter"].max()))

    def _publish(self, data: FitInput, draw: _Draw, decision: Decision) -> None:
        """Write the fitted arrays over the columns."""
        columns = data.columns
        self.threshold_ = float(decision.threshold)
        self.contrast_ = columns.over_columns(self._contrasts.mean(axis=0), np.nan)
        self.s_vector_ = np.full(columns.n_columns, np.nan)
        self.s_vector_[columns.candidates] = draw.model.s
        for name in ("selection_probability", "e_value"):
            self.__dict__.pop(f"{name}_", None)
            if name in decision.measures:
                spread = columns.over_columns(decision.measures[name], np.nan)
                setattr(self, f"{name}_", spread)

    def _claim(
        self,
        data: FitInput,
        draw: _Draw,
        model: Any,
        rule: KnockoffFilter,
        decision: Decision,
    ) -> Claim:
        columns = data.columns
        # e-values of many units tie at their largest; the contrast tells these apart.
        keys = [*decision.measures.values(), self._contrasts.mean(axis=0)]
        order = np.lexsort([-values for values in keys[::-1]])
        reason, nearest = decision.why_none
        return Claim(
            method=rule.method,
            unit=columns.unit,
            candidates=columns.n_units,
            selected=tuple(columns.unit_names[k] for k in order if decision.selected[k]),
            measure=rule.measure,
            target=float(rule.target),
            bound=float(rule.target),
            bound_source=rule.source,
            assumptions=(
                Assumption("the rows are independent", State.UNCHECKED, draw.candidates.rows),
                *_model_assumptions(data, draw, model),
                Assumption(
                    "features and copies are treated alike",
                    State.BY_CONSTRUCTION,
                    "columns permuted at random before every fit, tuned on both together",
                ),
                *rule.assumptions,
            ),
            notes=(
                *decision.notes,
                f"Copies are {_described(model)}; the contrast is {draw.importance.describe()}.",
                *_power_notes(data, draw),
                *covariate_notes(data),
            ),
            other_bounds=rule.other_bounds,
            empty_reason=reason,
            nearest_target=nearest,
            scale=rule.scale,
        )

    def _stated_problems(
        self, X: Any, y: Any, sample_weight: Any = None, groups: Any = None
    ) -> list[StatedProblem]:
        """The last problem of some draws, each on its own widened table."""
        data = self._read(X, y, sample_weight, groups, self.seed_, reset=False)
        draw, _ = self._draw(data)
        streams = spawn(data.seed, self.n_draws, _DRAWS)
        stated = []
        for k in range(min(_MOST_RESTATED, self.n_draws)):
            with one_blas_thread():
                measured = draw.measure(streams[k])
            self._check_restated(measured, k)
            assert measured.fit is not None
            fit = measured.fit
            stated.append(
                StatedProblem(
                    f"draw {k + 1}",
                    fit.problems,
                    fit.alpha,
                    fit.coef,
                    fit.intercept,
                    measured.design,
                )
            )
        return stated

    def _check_restated(self, measured: Measured, k: int) -> None:
        """Refuse to restate what no engine solved, or problems of another table."""
        if not np.array_equal(measured.contrast, self._contrasts[k]):
            raise ValueError(
                f"Draw {k + 1} on this table has other contrasts than in the fit. The problems can "
                "be restated only on the very table, outcome, weights and groups that the selector "
                "was fitted to, with the same parameters: pass those."
            )
        if measured.fit is None:
            raise ValueError(
                f"The contrasts of this selector (importance={self.importance!r}) were not read "
                "off a problem of the engine: there is none to restate. Only the importances "
                "'lasso', 'elastic_net' and 'entry', with an outcome that varies, can be checked "
                "in this way."
            )


def _contrasts_only(draw: _Draw, generator: np.random.Generator) -> Measured:
    """One draw, without the table, which the parent has no use for."""
    return replace(draw.measure(generator), design=None, fit=None)


def _fitted(model: Any, candidates: _Candidates, labels: NDArray[np.int64] | None) -> FittedModel:
    return model.fit(
        candidates.features,
        covariates=candidates.covariates,
        sample_weight=candidates.sample_weight,
        feature_groups=labels,
    )


def _labels(units: NDArray[np.int64]) -> NDArray[np.int64] | None:
    """Group labels of the candidates, None where every one is a unit of its own."""
    return None if units.max() + 1 == len(units) else units


# ---------------------------------------------------------------------------------------------
# Rows
# ---------------------------------------------------------------------------------------------


def _independent_rows(data: FitInput) -> _Candidates:
    """Rows of positive weight, one per group."""
    rows, columns = data.rows, data.columns
    detail = rows_detail(data) if data.groups is None else ""
    features = _columns_of(data, columns.candidates, rows)
    covariates = np.asarray(_columns_of(data, columns.covariates, rows), dtype=np.float64)
    weight = None if data.sample_weight is None else data.sample_weight[rows]
    whole = _Candidates(features, covariates, data.response[rows], weight, detail)
    if data.groups is None:
        return whole
    groups = np.unique(data.groups[rows], return_inverse=True)[1].reshape(-1)
    sizes = np.bincount(groups)
    if (sizes == 1).all():
        return replace(whole, rows="every group is one row")
    _refuse_varying_outcome(data, groups, sizes)
    if (sizes == sizes[0]).all() and (weight is None or (weight == weight[0]).all()):
        return _mean_rows(whole, groups, int(sizes[0]))
    chosen = one_row_per_group(groups, spawn(data.seed, 1, _ROWS)[0])
    return _Candidates(
        features[chosen],
        covariates[chosen],
        whole.response[chosen],
        None if weight is None else weight[chosen],
        f"{len(sizes)} groups were given; one row of each, drawn at random, was used",
    )


def _columns_of(data: FitInput, mask: NDArray[np.bool_], rows: NDArray[np.int64]) -> NDArray[Any]:
    """Some columns of some rows, dense; X itself where that is all of it."""
    if sparse.issparse(data.X):
        return data.X[:, np.flatnonzero(mask)].toarray()[rows]
    X = data.X if mask.all() else data.X[:, mask]
    return X if len(rows) == data.n_rows else X[rows]


def _refuse_varying_outcome(
    data: FitInput, groups: NDArray[np.int64], sizes: NDArray[np.int64]
) -> None:
    y = data.response[data.rows]
    first = np.full(len(sizes), np.nan)
    first[groups[::-1]] = y[::-1]
    varies = np.unique(groups[y != first[groups]])
    if varies.size:
        raise ValueError(
            f"The outcome varies within {varies.size} of {len(sizes)} groups. Knockoffs need "
            "independent rows, so with groups the outcome must be constant within each, and every "
            "group becomes one row. Keep one row of each group or average them before the fit, or "
            "use StabilitySelector, which takes groups whole."
        )


def _mean_rows(whole: _Candidates, groups: NDArray[np.int64], size: int) -> _Candidates:
    """The mean row of every group, all groups being of one size."""
    order = np.argsort(groups, kind="stable")
    n_groups = len(order) // size

    def mean(values: NDArray[Any]) -> NDArray[Any]:
        blocks = values[order].reshape(n_groups, size, -1)
        return blocks.mean(axis=1, dtype=np.float64).astype(values.dtype)

    return _Candidates(
        mean(whole.features),
        mean(whole.covariates),
        whole.response[order[::size]],
        None if whole.sample_weight is None else whole.sample_weight[order[::size]],
        f"{n_groups} groups of {size} rows were given; the mean row of each was used",
    )


# ---------------------------------------------------------------------------------------------
# What is said
# ---------------------------------------------------------------------------------------------


def _warn_if_hopeless(rule: KnockoffFilter, data: FitInput) -> None:
    """Say before the fit that the table has too few candidates for the target."""
    count = data.columns.n_units
    if count >= rule.least:
        return
    warnings.warn(
        f"There {'is' if count == 1 else 'are'} {count} candidate {data.columns.unit}"
        f"{'' if count == 1 else 's'}, and a list at fdr={rule.target:g} "
        f"holds at least {rule.least} of them or is empty"
        f"{', with several draws' if rule.key == 'e_values' else ''}: nothing can be selected, "
        "whatever the outcome. Give more candidates, raise fdr, or ask for short lists by "
        "pfer=1.0 with n_draws=31.",
        UserWarning,
        stacklevel=3,
    )


def _model_assumptions(data: FitInput, draw: _Draw, model: Any) -> list[Assumption]:
    """What the feature model assumes, and for model-X copies the check on held-out rows."""
    found = [Assumption(*stated) for stated in map(_with_state, draw.model.assumptions())]
    candidates = draw.candidates
    # The model is fitted to half of the rows, which must be enough for the covariates.
    enough = candidates.n_rows // 2 >= candidates.covariates.shape[1] + 3
    if isinstance(model, FixedXModel) or not enough:
        return found
    labels = _labels(draw.problem["units"])
    with one_blas_thread():
        check = check_exchangeability(
            model,
            candidates.features,
            int(spawn(data.seed, 1, _CHECK)[0].integers(2**31)),
            covariates=candidates.covariates,
            sample_weight=candidates.sample_weight,
            feature_groups=labels,
        )
    return [*found, Assumption(*_with_state(check.assumption()))]


def _with_state(stated: tuple[str, str, str]) -> tuple[str, State, str]:
    statement, state, detail = stated
    return statement, State(state), detail


def _described(model: Any) -> str:
    """What a claim calls the copies of a feature model."""
    kinds = {FixedXModel: "fixed-X", GaussianModel: "Gaussian", CopulaModel: "Gaussian copula"}
    kind = kinds.get(type(model), f"those of {type(model).__name__}")
    return f"{kind} (s-vector {model.s_vector})" if hasattr(model, "s_vector") else kind


def _power_notes(data: FitInput, draw: _Draw) -> list[str]:
    """Candidates without a copy, and features next to their copies with the groups that help."""
    notes = []
    missing = int(np.sum(~draw.model.has_copy))
    if missing:
        notes.append(
            f"Without a copy, and so without a chance of their own: {missing} "
            f"{'column' if missing == 1 else 'columns'} (constant, repeating another or following "
            "from the covariates)."
        )
    if _labels(draw.problem["units"]) is None:
        names = data.columns.names[data.columns.candidates]
        found = indistinct_features(draw.candidates.features, draw.model.s, draw.model.has_copy)
        if found.n_features:
            notes.append(f"{found.assumption([str(name) for name in names])[2]}.")
    return notes
