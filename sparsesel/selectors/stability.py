r"""Stability selection with complementary pairs, and the randomized lasso.

Letters: n rows; p units that can be selected; B complementary pairs, hence 2B halves; q the most
units that one half may pick; :math:`\Pi_k` the share of the 2B halves that pick unit k;
:math:`\tau` the threshold.

Each half-sample picks the first q units that enter its lasso path: the order of entry is the order
of the first penalty of a fine grid at which a column has a nonzero coefficient, ties by the larger
standardised coefficient there, then by position. A half whose path ends earlier picks fewer, never
more. Selected are the units with :math:`\Pi_k \ge \tau`. What the resulting bound is on, and how q
and :math:`\tau` follow from the number of rows and columns alone, is in
`sparsesel.error_control.stability_bounds`.

**Rows.** The halves of a pair are disjoint. Classes are halved for themselves, and groups of rows
go whole into a half. Rows of weight zero are in no half.

**Columns.** A unit can be a group of columns: a half picks it when the first of its columns enters,
and q counts units.

**The randomized lasso** multiplies the penalty of every unit by :math:`v_k`, with
:math:`1/v_k` uniform on [weakness, 1], drawn afresh for every half; halves of a pair that shared
their draw would not be independent, which is what the bounds rest on.

References
----------
Meinshausen, N. and Bühlmann, P. (2010). Stability selection. *Journal of the Royal Statistical
Society B* 72, 417-473. Section 2, and section 3 for the randomized lasso.

Shah, R. D. and Samworth, R. J. (2013). Variable selection with error control: another look at
stability selection. *Journal of the Royal Statistical Society B* 75, 55-80. Complementary pairs.
"""

from __future__ import annotations

from abc import abstractmethod
from dataclasses import dataclass
from functools import partial
from numbers import Integral, Real
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from sklearn.base import clone, is_classifier
from sklearn.utils import get_tags
from sklearn.utils.validation import has_fit_parameter

from sparsesel._sklearn_compat import HasMethods, Interval, StrOptions
from sparsesel.claim import Assumption, Claim, State
from sparsesel.engine import (
    BankResult,
    Keep,
    Problems,
    Status,
    as_design,
    solve_bank,
    warn_failures,
)
from sparsesel.error_control import (
    BOUND_ASSUMPTIONS,
    BOUND_SOURCES,
    NEIGHBOUR_NOTE,
    Calibration,
    bounded_quantity,
    calibrate,
    largest_features_per_fit,
    why_none_stable,
)
from sparsesel.resampling import complementary_pairs, half_size
from sparsesel.selectors._base import (
    BaseSparseSelector,
    FitInput,
    Selector,
    StatedProblem,
    covariate_notes,
    rows_detail,
    with_common_docs,
)
from sparsesel.tasks import run_tasks, spawn

FloatArray = NDArray[np.float64]

# The order of entry is read off this grid, which goes down to 0.001 of the largest penalty: its
# steps of 7% tell entries apart as finely as 30 penalties per decade and a half, and a path stops
# as soon as q units have entered, so that the lower end costs nothing unless it is needed.
_GRID = 100

# Keys of the independent streams of random numbers that one seed serves.
_HALVES, _PENALTIES, _ESTIMATORS = 0, 1, 2

_STABILITY_PARAMETERS = """\
pfer : float > 0, default=1.0
        Target: the bound on the expected number of false selections is at most this.
    threshold : float in (0.5, 1], default=None
        Share of the halves that must pick a unit. None: 0.75, or what `pfer` asks for where
        `features_per_fit` is given or limited by the number of rows, at least 0.6.
    features_per_fit : int, default=None
        The most units that a half may pick. None: the most for which the bound is at most `pfer`,
        and at most four fifths of what a half can determine (its rows less one and the
        covariates; with log loss also its rows of the rarer class).
    bound : {"worst_case", "unimodal", "r_concave"}, default="r_concave"
        Which law of the votes is assumed; "worst_case" assumes nothing and is the largest.
    n_pairs : int, default=50
        Number of complementary pairs.
    l1_ratio : float in (0, 1], default=1.0
        Share of the absolute-value penalty."""

_STABILITY_ATTRIBUTES = """\
selection_probability_ : ndarray of shape (p,)
        Share of the halves that pick the column's unit; NaN for covariates and columns left out.
    threshold_ : float
        The threshold, on the grid of possible shares.
    features_per_fit_ : int
        The most units that a half may pick.
    calibration_ : Calibration
        The settings with the chosen and the worst-case bound.
    n_iter_ : int
        Largest number of iterations of any fit."""


def _with_stability_docs(selector: Selector) -> Selector:
    """Fill the parameters and attributes that both selectors share into the docstring."""
    if selector.__doc__:
        for mark, text in (
            ("<stability parameters>", _STABILITY_PARAMETERS),
            ("<stability attributes>", _STABILITY_ATTRIBUTES),
        ):
            selector.__doc__ = selector.__doc__.replace(mark, text)
    return with_common_docs(selector)


@dataclass(frozen=True)
class _Votes:
    """What the halves picked."""

    picks: NDArray[np.int64]  # (2B, q), units in the order of entry, -1 where fewer entered
    n_iter: int

    def counts(self, n_units: int) -> NDArray[np.int64]:
        """Number of halves that picked each unit."""
        return np.bincount(self.picks[self.picks >= 0], minlength=n_units)


class _HalfSampleSelector(BaseSparseSelector):
    """What stability selection and the randomized lasso share."""

    _parameter_constraints: ClassVar[dict[str, Any]] = {
        **BaseSparseSelector._parameter_constraints,
        "pfer": [Interval(Real, 0, None, closed="neither")],
        "threshold": [None, Interval(Real, 0.5, 1, closed="right")],
        "features_per_fit": [None, Interval(Integral, 1, None, closed="left")],
        "bound": [StrOptions({"worst_case", "unimodal", "r_concave"})],
        "n_pairs": [Interval(Integral, 1, None, closed="left")],
        "l1_ratio": [Interval(Real, 0, 1, closed="right")],
        "tol": [Interval(Real, 0, None, closed="neither")],
        "max_iter": [Interval(Integral, 1, None, closed="left")],
    }

    def fit(self, X: Any, y: Any, sample_weight: Any = None, *, groups: Any = None) -> Any:
        """Fit the selector.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            The table: finite numbers.
        y : array-like of shape (n,)
            The outcome: numbers, or two classes with any labels.
        sample_weight : array-like of shape (n,), default=None
            Weights of the rows, zero or positive. A row of weight zero is as if absent; other
            weights count in every fit, while halves are drawn from the rows as they are.
        groups : array-like of shape (n,), default=None
            Labels of rows that stay together when halves are drawn.

        Returns
        -------
        object
            The fitted selector.
        """
        data = self._prepare(X, y, sample_weight, groups)
        halves = self._halves(data)
        calibration = self._calibrate(data, halves)
        votes = self._vote(data, halves, calibration.features_per_fit)
        counts = votes.counts(data.columns.n_units)
        # In whole votes: a share computed in floating point could miss its own threshold.
        selected = counts >= round(calibration.threshold * len(halves))
        shares = counts / len(halves)
        self.calibration_ = calibration
        self.threshold_ = calibration.threshold
        self.features_per_fit_ = calibration.features_per_fit
        self.selection_probability_ = data.columns.over_columns(shares, np.nan)
        self.n_iter_ = max(1, votes.n_iter)
        self._picks = votes.picks
        claim = self._claim(data, shares, selected)
        self._conclude(data, selected, {"selection_probability": shares}, claim)
        return self

    def _halves(self, data: FitInput) -> NDArray[np.bool_]:
        """Masks (2B, n) of the rows of every half."""
        rows = data.rows
        drawn = complementary_pairs(
            len(rows),
            self.n_pairs,
            spawn(data.seed, 1, _HALVES)[0],
            strata=_strata(data),
            groups=None if data.groups is None else data.groups[rows],
        )
        halves = np.zeros((len(drawn), data.n_rows), dtype=bool)
        halves[:, rows] = drawn
        return halves

    def _calibrate(self, data: FitInput, halves: NDArray[np.bool_]) -> Calibration:
        """q and threshold, from the sizes of the table and its halves."""
        rarer = None
        if data.loss == "log_loss":
            ones = halves @ data.response
            rarer = int(np.minimum(ones, halves.sum(axis=1) - ones).min())
        rows = data.rows
        smallest = half_size(
            len(rows), _strata(data), None if data.groups is None else data.groups[rows]
        )
        largest_fit = largest_features_per_fit(smallest, data.columns.n_covariates, rarer)
        return calibrate(
            self.pfer,
            data.columns.n_units,
            largest_fit,
            self.n_pairs,
            self.bound,
            self.threshold,
            self.features_per_fit,
        )

    def _vote(self, data: FitInput, halves: NDArray[np.bool_], q: int) -> _Votes:
        """Let every half pick its first q units, by the engine."""
        bank = _EntryBank.of(self, data, halves)
        result = bank.solve(Keep(entries=q, entry_units=data.columns.unit_of))
        assert result.entry_order is not None
        return _Votes(result.entry_order, int(result.n_iter.max()))

    @abstractmethod
    def _factors(self, data: FitInput, n_halves: int) -> FloatArray:
        """Penalty weights of the problems of all halves, (p,) or (2B, p)."""

    @abstractmethod
    def _method(self) -> str:
        """What the claim calls the procedure."""

    def _method_notes(self) -> tuple[str, ...]:
        """Further sentences on how halves pick."""
        return ()

    def _claim(self, data: FitInput, shares: FloatArray, selected: NDArray[np.bool_]) -> Claim:
        calibration, columns = self.calibration_, data.columns
        q, p = calibration.features_per_fit, columns.n_units
        order = np.argsort(-shares, kind="stable")
        names = tuple(columns.unit_names[k] for k in order if selected[k])
        reason, nearest = (None, None)
        if not names:
            reason, nearest = why_none_stable(shares.max(), calibration, p, self.n_pairs)
        others = {"worst case over all laws": calibration.worst_case}
        if self.bound == "worst_case":
            others = {}
        return Claim(
            method=self._method(),
            unit=columns.unit,
            candidates=p,
            selected=names,
            measure=bounded_quantity(q, p, columns.unit),
            target=float(self.pfer),
            bound=calibration.value,
            bound_source=BOUND_SOURCES[self.bound],
            assumptions=_assumptions(data, self.bound, q),
            notes=(
                f"Each of the {2 * self.n_pairs} half-samples picked at most {q} {columns.unit}s; "
                f"selected are those that a share of at least {calibration.threshold:.3g} of them "
                "picked.",
                *self._method_notes(),
                NEIGHBOUR_NOTE,
                *covariate_notes(data),
            ),
            other_bounds=others,
            empty_reason=reason,
            nearest_target=nearest,
        )

    def _stated_problems(
        self, X: Any, y: Any, sample_weight: Any = None, groups: Any = None
    ) -> list[StatedProblem]:
        """The problem of every half at the last penalty of its path."""
        data = self._read(X, y, sample_weight, groups, self.seed_, reset=False)
        halves = self._halves(data)
        bank = _EntryBank.of(self, data, halves)
        q = self.features_per_fit_
        keep = Keep(coefficients=True, entries=q, entry_units=data.columns.unit_of)
        result = bank.solve(keep)
        assert result.entry_order is not None and result.coef is not None
        if not np.array_equal(result.entry_order, self._picks):
            raise ValueError(
                "The half-samples of this table do not pick what those of the fit picked. The "
                "problems can be restated only on the very table, outcome, weights and groups that "
                "the selector was fitted to, with the same parameters: pass those."
            )
        stated = []
        for b in range(len(halves)):
            last = int(np.flatnonzero(result.status[b] != Status.NOT_REACHED)[-1])
            stated.append(
                StatedProblem(
                    f"pair {b // 2 + 1}, half {'AB'[b % 2]}",
                    bank.problems(slice(b, b + 1)),
                    float(result.alphas[b, last]),
                    result.coef[b][[last]].toarray()[0],
                    float(result.intercept[b, last]),
                )
            )
        return stated


@dataclass(frozen=True)
class _EntryBank:
    """The engine, set up for the problems of all halves."""

    selector: _HalfSampleSelector
    data: FitInput
    halves: NDArray[np.bool_]
    factors: FloatArray  # penalty weights, (p,) or (2B, p)

    @staticmethod
    def of(selector: _HalfSampleSelector, data: FitInput, halves: NDArray[np.bool_]) -> _EntryBank:
        """The bank of a selector's halves."""
        return _EntryBank(selector, data, halves, selector._factors(data, len(halves)))

    def problems(self, part: slice = slice(None)) -> Problems:
        """The problems of some halves."""
        factors = self.factors
        return Problems(
            loss=self.data.loss,
            response=self.data.response,
            sample_weight=self.halves[part] * self.data.weights,
            penalty_weights=factors if factors.ndim == 1 else factors[part],
            l1_ratio=self.selector.l1_ratio,
            standardize=self.selector.standardize,
        )

    def solve(self, keep: Keep) -> BankResult:
        """The paths of all halves, each until as many units have entered as are kept."""
        selector = self.selector
        problems = self.problems()
        settings = selector._settings(
            self.data,
            "half-samples",
            self.halves,
            problems.penalty_weights,
            (keep, selector.l1_ratio, selector.tol, selector.max_iter),
        )
        result = solve_bank(
            as_design(self.data.X),
            problems,
            _GRID,
            keep=keep,
            tol=selector.tol,
            max_iter=selector.max_iter,
            settings=settings,
        )
        warn_failures(result, selector.tol)
        return result


def _strata(data: FitInput) -> NDArray[Any] | None:
    """What is balanced between the halves: the classes, with log loss."""
    return data.labels[data.rows] if data.loss == "log_loss" else None


def _assumptions(data: FitInput, bound: str, q: int) -> tuple[Assumption, ...]:
    independent, *laws = BOUND_ASSUMPTIONS[bound]
    rows = "rows" if data.groups is None else "groups of rows"
    return (
        Assumption(independent, State.UNCHECKED, rows_detail(data)),
        *(Assumption(law, State.UNCHECKED) for law in laws),
        Assumption(f"the two halves of a pair share no {rows}", State.BY_CONSTRUCTION),
        Assumption(
            f"no half-sample picks more than {q} {data.columns.unit}s", State.BY_CONSTRUCTION
        ),
    )


@_with_stability_docs
class StabilitySelector(_HalfSampleSelector):
    """Select the features that many half-samples pick, with a bound on false selections.

    The table is split into complementary pairs of halves, each half picks its first
    `features_per_fit` features, and the features that a share of at least `threshold` of the
    halves picked are selected. The bound is on the expected number of selected features that a
    half picks with probability at most `features_per_fit` / p; it is stated in `claim_`.

    Parameters
    ----------
    <stability parameters>
    estimator : estimator, default=None
        None: the engine's lasso path decides what a half picks. Otherwise a scikit-learn
        estimator with `coef_` or `feature_importances_`, cloned and fitted to every half, whose
        `features_per_fit` columns of largest importance (|coefficient| times the column's standard
        deviation with `standardize`) other than zero are picked. It sees the covariates as
        ordinary columns, and `l1_ratio`, `tol` and `max_iter` do not reach it.
    <common parameters>
    tol : float, default=1e-7
        Largest relative duality gap of a solution.
    max_iter : int, default=10000
        Most iterations of one solution.
    <run parameters>

    Attributes
    ----------
    <common attributes>
    <stability attributes>

    Raises
    ------
    ValueError
        For parameters and data outside what is allowed, with what is; for a `pfer` that can't be
        met, with the nearest one that can.

    Warns
    -----
    ConvergenceWarning
        If a fit did not reach `tol`.

    See Also
    --------
    RandomizedLassoSelector : The same with randomised penalties.
    KnockoffSelector : Controls the false discovery rate.
    NullModelFallback : Next step for a table without columns.

    Notes
    -----
    Rows must be independent, or `groups` given. The bound is not on every selected feature without
    an effect: one that stands in for a correlated true feature can be picked often, and is then
    outside the count. Where columns are strongly correlated they split their votes;
    `feature_groups` makes the group the unit.

    A change of `pfer`, `threshold` or `bound` that leaves `features_per_fit_` as it was re-uses
    every fit kept in `memory`.

    References
    ----------
    Shah, R. D. and Samworth, R. J. (2013). Variable selection with error control: another look at
    stability selection. *Journal of the Royal Statistical Society B* 75, 55-80. Algorithm in
    section 2, bounds in equations (6) to (8).

    Meinshausen, N. and Bühlmann, P. (2010). Stability selection. *Journal of the Royal Statistical
    Society B* 72, 417-473. Theorem 1.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.selectors import StabilitySelector
    >>> X = np.random.default_rng(0).standard_normal((100, 30))
    >>> y = 2 * X[:, 1] - 2 * X[:, 4] + np.random.default_rng(1).standard_normal(100)
    >>> selector = StabilitySelector(random_state=0).fit(X, y)
    >>> selector.get_support(indices=True)
    array([1, 4])
    >>> bool(selector.claim_.bound <= 1)
    True
    """

    _parameter_constraints: ClassVar[dict[str, Any]] = {
        **_HalfSampleSelector._parameter_constraints,
        "estimator": [None, HasMethods(["fit", "get_params"])],
    }

    def __init__(
        self,
        *,
        pfer: float = 1.0,
        threshold: float | None = None,
        features_per_fit: int | None = None,
        bound: str = "r_concave",
        n_pairs: int = 50,
        l1_ratio: float = 1.0,
        estimator: Any = None,
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
        self.pfer = pfer
        self.threshold = threshold
        self.features_per_fit = features_per_fit
        self.bound = bound
        self.n_pairs = n_pairs
        self.l1_ratio = l1_ratio
        self.estimator = estimator
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

    def __sklearn_tags__(self) -> Any:
        tags = super().__sklearn_tags__()
        if hasattr(self.estimator, "__sklearn_tags__"):
            of_estimator = get_tags(self.estimator).input_tags
            tags.input_tags.sparse = of_estimator.sparse
            tags.input_tags.allow_nan = of_estimator.allow_nan
        return tags

    def _factors(self, data: FitInput, n_halves: int) -> FloatArray:
        return data.columns.penalty_weights

    def _method(self) -> str:
        return f"Stability selection with {self.n_pairs} complementary pairs"

    def _method_notes(self) -> tuple[str, ...]:
        if self.estimator is None:
            return ()
        return (f"Half-samples ranked the columns by {type(self.estimator).__name__}.",)

    def _vote(self, data: FitInput, halves: NDArray[np.bool_], q: int) -> _Votes:
        if self.estimator is None:
            return super()._vote(data, halves, q)
        ranking = _Ranking.of(self.estimator, data, q, self.standardize)
        seeds = [
            int(stream.integers(2**31)) for stream in spawn(data.seed, len(halves), _ESTIMATORS)
        ]
        items = [(np.flatnonzero(half), seed) for half, seed in zip(halves, seeds, strict=True)]
        settings = self._settings(data, "half-samples", halves, q, self.estimator)
        answers = run_tasks(partial(_rank_half, ranking), items, settings)
        picks = np.stack([picked for picked, _ in answers])
        return _Votes(picks, max(n_iter for _, n_iter in answers))

    def _stated_problems(
        self, X: Any, y: Any, sample_weight: Any = None, groups: Any = None
    ) -> list[StatedProblem]:
        if self.estimator is not None:
            raise ValueError(
                "The half-samples of this selector were ranked by "
                f"{type(self.estimator).__name__}, not by the engine: there is no "
                "problem to restate. Only selectors with estimator=None can be checked in this way."
            )
        return super()._stated_problems(X, y, sample_weight, groups)


@_with_stability_docs
class RandomizedLassoSelector(_HalfSampleSelector):
    """Select the features that many half-samples pick under randomised penalties.

    As `StabilitySelector`, but in every half the penalty of each feature is multiplied by v with
    1/v uniform on [`weakness`, 1], drawn anew. A feature that enters only as the stand-in of a
    correlated one loses its place whenever its draw is the worse one, so that true features can be
    told from their neighbours on designs where the lasso's selection is inconsistent.

    Parameters
    ----------
    weakness : float in (0, 1], default=0.5
        The largest penalty factor is 1 / weakness. 1 is stability selection; smaller values
        randomise more. Published practice is between 0.2 and 0.8.
    <stability parameters>
    <common parameters>
    tol : float, default=1e-7
        Largest relative duality gap of a solution.
    max_iter : int, default=10000
        Most iterations of one solution.
    <run parameters>

    Attributes
    ----------
    <common attributes>
    <stability attributes>

    Raises
    ------
    ValueError
        For parameters and data outside what is allowed, with what is; for a `pfer` that can't be
        met, with the nearest one that can.

    Warns
    -----
    ConvergenceWarning
        If a fit did not reach `tol`.

    See Also
    --------
    StabilitySelector : The same without randomised penalties.
    NullModelFallback : Next step for a table without columns.

    Notes
    -----
    The bounds of stability selection hold for any rule by which halves pick, randomised ones
    included, because each half has draws of its own. A feature group has one draw for all its
    columns. The factors multiply `penalty_weights`.

    The lasso selects consistently only if no feature without effect is too well explained by the
    true ones (the irrepresentable condition). With random factors that condition is needed only
    for some of the draws (Meinshausen and Bühlmann 2010, Theorem 2), at the price of
    weaker signals in every single half.

    References
    ----------
    Meinshausen, N. and Bühlmann, P. (2010). Stability selection. *Journal of the Royal Statistical
    Society B* 72, 417-473. Section 3, Theorem 2.

    Shah, R. D. and Samworth, R. J. (2013). Variable selection with error control: another look at
    stability selection. *Journal of the Royal Statistical Society B* 75, 55-80.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.selectors import RandomizedLassoSelector
    >>> X = np.random.default_rng(0).standard_normal((100, 30))
    >>> y = 2 * X[:, 1] - 2 * X[:, 4] + np.random.default_rng(1).standard_normal(100)
    >>> RandomizedLassoSelector(random_state=0).fit(X, y).get_support(indices=True)
    array([1, 4])
    """

    _parameter_constraints: ClassVar[dict[str, Any]] = {
        **_HalfSampleSelector._parameter_constraints,
        "weakness": [Interval(Real, 0, 1, closed="right")],
    }

    def __init__(
        self,
        *,
        weakness: float = 0.5,
        pfer: float = 1.0,
        threshold: float | None = None,
        features_per_fit: int | None = None,
        bound: str = "r_concave",
        n_pairs: int = 50,
        l1_ratio: float = 1.0,
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
        self.weakness = weakness
        self.pfer = pfer
        self.threshold = threshold
        self.features_per_fit = features_per_fit
        self.bound = bound
        self.n_pairs = n_pairs
        self.l1_ratio = l1_ratio
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

    def _factors(self, data: FitInput, n_halves: int) -> FloatArray:
        """Given penalty weights times 1 / uniform[weakness, 1], one draw per half and unit."""
        columns = data.columns
        factors = np.tile(columns.penalty_weights, (n_halves, 1))
        members = columns.unit_of[columns.candidates]
        for half, stream in zip(factors, spawn(data.seed, n_halves, _PENALTIES), strict=True):
            draws = stream.uniform(self.weakness, 1.0, size=columns.n_units)
            half[columns.candidates] /= draws[members]
        return factors

    def _method(self) -> str:
        return (
            f"Stability selection by the randomized lasso with {self.n_pairs} complementary pairs"
        )

    def _method_notes(self) -> tuple[str, ...]:
        return (
            f"Penalties were multiplied by random factors from 1 to {1 / self.weakness:.3g}, drawn "
            "for each half-sample on its own.",
        )


# ---------------------------------------------------------------------------------------------
# Any estimator as the one that ranks
# ---------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Ranking:
    """What every half needs to rank its units by an estimator; shipped once to every worker."""

    estimator: Any
    X: Any  # (n, number of columns used), rows can be taken
    outcome: NDArray[Any]
    sample_weight: FloatArray | None
    unit_of: NDArray[np.int64]  # per column used, -1 for covariates
    q: int
    standardize: bool

    @staticmethod
    def of(estimator: Any, data: FitInput, q: int, standardize: bool) -> _Ranking:
        """Check that the estimator can rank this table, and gather what it needs."""
        columns = data.columns
        _check_estimator(estimator, data)
        used = columns.candidates | columns.covariates
        X = data.X.tocsr() if sparse.issparse(data.X) else data.X
        return _Ranking(
            estimator,
            X if used.all() else X[:, used],
            data.labels if is_classifier(estimator) else data.response,
            data.sample_weight,
            columns.unit_of[used],
            q,
            standardize,
        )


def _check_estimator(estimator: Any, data: FitInput) -> None:
    name = type(estimator).__name__
    weights = data.columns.penalty_weights[data.columns.candidates]
    if not (weights == 1).all():
        raise ValueError(
            f"penalty_weights holds finite weights other than 1, but {name} decides what a "
            "half-sample picks and knows no penalty weights. Allowed with an estimator are 1 and "
            "infinity (left out): leave the others away, or set estimator=None."
        )
    if data.sample_weight is not None and not has_fit_parameter(estimator, "sample_weight"):
        raise ValueError(
            f"sample_weight was given, but {name}.fit does not take it. Fit without weights, or "
            "use an estimator that takes them."
        )
    if is_classifier(estimator) and data.loss != "log_loss":
        raise ValueError(
            f"{name} is a classifier, but the outcome was read as numbers (loss_ is "
            "'squared_error'). Use a regressor, or an outcome with two classes and loss='log_loss'."
        )


def _rank_half(
    ranking: _Ranking, item: tuple[NDArray[np.int64], int]
) -> tuple[NDArray[np.int64], int]:
    """The first q units of one half, padded with -1, and the iterations of its fit."""
    rows, seed = item
    estimator = clone(ranking.estimator)
    _seed_estimator(estimator, seed)
    X = ranking.X[rows]
    weight = None if ranking.sample_weight is None else ranking.sample_weight[rows]
    keywords = {} if weight is None else {"sample_weight": weight}
    estimator.fit(X, ranking.outcome[rows], **keywords)
    importance = _importance(estimator, X, weight, ranking.standardize)
    units = _first_units(importance, ranking.unit_of, ranking.q)
    n_iter = getattr(estimator, "n_iter_", None)
    return units, 1 if n_iter is None else int(np.max(n_iter))


def _seed_estimator(estimator: Any, seed: int) -> None:
    """Set every random_state of the estimator and of what it wraps."""
    names = [
        name
        for name in sorted(estimator.get_params(deep=True))
        if name == "random_state" or name.endswith("__random_state")
    ]
    seeds = np.random.default_rng(seed).integers(2**31, size=len(names))
    estimator.set_params(**dict(zip(names, map(int, seeds), strict=True)))


def _importance(estimator: Any, X: Any, weight: FloatArray | None, standardize: bool) -> FloatArray:
    """Importance of every column: |coef_| (in units of standard deviations), or what is stated."""
    if hasattr(estimator, "coef_"):
        coef = estimator.coef_
        dense = coef.toarray() if sparse.issparse(coef) else np.asarray(coef)
        size = np.abs(dense.reshape(-1, X.shape[1])).sum(axis=0)
        if standardize:
            w = np.ones(X.shape[0]) if weight is None else weight
            size = size * as_design(X).moments((w / w.sum())[None, :]).scale[0]
    elif hasattr(estimator, "feature_importances_"):
        size = np.asarray(estimator.feature_importances_, dtype=np.float64)
    else:
        raise ValueError(
            f"{type(estimator).__name__} has neither coef_ nor feature_importances_ after fit, so "
            "it can't rank columns. Use an estimator with one of them, or estimator=None."
        )
    if not np.isfinite(size).all():
        raise ValueError(
            f"{type(estimator).__name__} gave {int((~np.isfinite(size)).sum())} importances that "
            "are not finite on a half-sample. Importances must be finite: check its parameters, or "
            "use estimator=None."
        )
    return size


def _first_units(importance: FloatArray, unit_of: NDArray[np.int64], q: int) -> NDArray[np.int64]:
    """The first q distinct units by decreasing importance other than zero, padded with -1."""
    order = np.argsort(-importance, kind="stable")
    order = order[(importance[order] != 0) & (unit_of[order] >= 0)]
    units, first = np.unique(unit_of[order], return_index=True)
    picked = units[np.argsort(first, kind="stable")][:q]
    return np.concatenate([picked, np.full(q - len(picked), -1, dtype=np.int64)])
