"""Importances: the antisymmetry that the filters rest on, each rule against an oracle, folds."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.special import expit
from scipy.stats import norm
from sklearn.base import BaseEstimator
from sklearn.ensemble import RandomForestClassifier, RandomForestRegressor
from sklearn.linear_model import (
    Lasso,
    LinearRegression,
    LogisticRegression,
    Ridge,
    lars_path,
)
from statsmodels.api import GLM, families

from sparsesel.engine import penalized_path
from sparsesel.knockoffs import GaussianModel, PairedTable
from sparsesel.knockoffs.importances import (
    IMPORTANCES,
    EntryPoint,
    EstimatorDifference,
    ImportanceProblem,
    LassoDifference,
    MarginalDifference,
    RidgeDifference,
    WidenedTable,
    as_importance,
    held_out_folds,
    measure_contrasts,
)
from sparsesel.tasks import spawn

LOSSES = ("squared_error", "log_loss")
each_loss = pytest.mark.parametrize("loss", LOSSES)
# Deterministic rules given the folds; an estimator beside those of the registry.
RULES = {**IMPORTANCES, "estimator": EstimatorDifference(Ridge(alpha=1e-3))}
each_rule = pytest.mark.parametrize("name", RULES)


def make_problem(loss="squared_error", n=120, m=8, seed=0, **settings):
    """Correlated features, copies of which two are missing, two covariates and weights."""
    generator = np.random.default_rng(seed)
    covariates = generator.standard_normal((n, 2))
    X = generator.standard_normal((n, m)) + 0.6 * generator.standard_normal((n, 1))
    X += covariates @ generator.standard_normal((2, m)) / 3
    X[:, 2] = 1.5  # constant
    X[:, 5] = covariates @ [1.0, -2.0]  # determined by the covariates
    weight = generator.uniform(0.5, 2.0, n)
    model = GaussianModel().fit(X, covariates=covariates, sample_weight=weight)
    beta = np.array([1.0, 0.5, 0.0, -1.0, 0.4, 0.0, -0.6, 0.0])
    eta = X @ np.resize(beta, m) + covariates @ [1.0, 0.5]
    y = eta + generator.standard_normal(n)
    if loss == "log_loss":
        y = (eta + generator.logistic(size=n) > 0).astype(float)
    table = model.draw(X, y, generator, covariates=covariates, sample_weight=weight)
    settings = {"units": np.arange(m), "penalty_weights": np.linspace(0.5, 2, m), **settings}
    return ImportanceProblem(table, loss, model.has_copy, **settings)


def plain(rule, problem):
    """The problem without what a rule refuses."""
    return replace(problem, penalty_weights=None) if rule == "estimator" else problem


def swapped(problem, features):
    table = problem.table
    originals, copies = table.features.copy(), table.copies.copy()
    originals[:, features], copies[:, features] = copies[:, features], originals[:, features]
    return replace(problem, table=replace(table, features=originals, copies=copies))


def contrast(rule, problem, seed=0):
    return measure_contrasts(RULES.get(rule, rule), problem, np.random.default_rng(seed)).contrast


def solver_error(rule, problem):
    """How far a standardised coefficient can be from the optimum at a relative gap of tol.

    The objective exceeds its optimum by at most tol times the null objective and is strongly convex
    in the standardised coefficients, with modulus the smallest eigenvalue of the columns'
    correlation given intercept and covariates (log loss: times the smallest variance of an
    outcome). The distance is at most sqrt(2 tol null / modulus).
    """
    measured = measure_contrasts(RULES[rule], problem, np.random.default_rng(0))
    w = problem.weights / problem.weights.sum()
    table = problem.table
    fixed = np.column_stack([np.ones(len(w)), table.covariates]) * np.sqrt(w)[:, None]
    has = problem.has_copy
    X = np.column_stack([table.features[:, has], table.copies[:, has]])
    X = (X - w @ X) / np.sqrt(w @ (X - w @ X) ** 2) * np.sqrt(w)[:, None]
    X = X - fixed @ np.linalg.lstsq(fixed, X, rcond=None)[0]
    modulus = np.linalg.eigvalsh(X.T @ X)[0]
    if problem.loss == "log_loss":
        fit = measured.fit
        mean = expit(fit.intercept + measured.design @ fit.coef)
        modulus *= 0.9 * np.min(mean * (1 - mean))  # the other solution is next to this one
    null = max(result.null_objective.max() for result in measured.results)
    return np.sqrt(2 * problem.tol * null / modulus)


def tolerance(rule, problem):
    """Twice the error of a size, for the two fits, and as much for the copy."""
    if rule in ("ridge", "marginal", "estimator"):
        return 1e-8  # closed forms: rounding alone
    return 4 * solver_error(rule, problem) / np.min(problem.penalty_weights)


# --- the contract -----------------------------------------------------------------------------


@each_rule
@each_loss
def test_swapping_a_feature_with_its_copy_flips_its_contrast_and_no_other(name, loss):
    problem = plain(name, make_problem(loss, n=400, tol=1e-12))
    before = contrast(name, problem)
    allowed = tolerance(name, problem)
    assert np.count_nonzero(np.abs(before) > 10 * allowed) >= 3  # otherwise nothing is shown
    for features in ([0], [3], [7], [0, 1, 6]):
        sign = np.ones(8)
        sign[features] = -1
        np.testing.assert_allclose(
            contrast(name, swapped(problem, features)), sign * before, 0, allowed
        )


@each_rule
@each_loss
def test_swapping_a_group_flips_its_contrast_and_no_other(name, loss):
    units = np.array([0, 0, 1, 1, 2, 1, 2, 3])
    problem = plain(name, make_problem(loss, n=400, tol=1e-12, units=units))
    before = contrast(name, problem)
    assert before.shape == (4,)
    allowed = 3 * tolerance(name, problem)
    assert np.max(np.abs(before)) > 10 * allowed
    for unit in range(4):
        sign = np.where(np.arange(4) == unit, -1.0, 1.0)
        after = contrast(name, swapped(problem, np.flatnonzero(units == unit)))
        np.testing.assert_allclose(after, sign * before, 0, allowed)


class LeftmostOfEqualColumns(BaseEstimator):
    """Prefers columns by position: of those that explain the outcome nearly as well as the best,
    the first has importance one and all others none."""

    def fit(self, X, y):
        spread = np.maximum(X.std(0), 1e-9)  # one column is constant
        correlation = np.abs((X - X.mean(0)).T @ (y - y.mean())) / spread
        first = np.argmax(correlation >= 0.4 * correlation.max())
        self.feature_importances_ = (np.arange(X.shape[1]) == first).astype(float)
        return self


@pytest.mark.parametrize(
    ("estimator", "loss"),
    [
        (LeftmostOfEqualColumns(), "squared_error"),
        (RandomForestRegressor(n_estimators=5, max_depth=3), "squared_error"),
        (RandomForestClassifier(n_estimators=5, max_depth=3), "log_loss"),
    ],
    ids=["by position", "forest", "forest of classes"],
)
def test_the_contract_in_distribution_for_random_rules(estimator, loss):
    """Over seeds, the contrasts of a swapped table add up to zero with those of the table.

    The z-values of eight features, two without a copy, are held to a two-sided level of 0.001 for
    all six. Without the random order of columns the rule by position has z-values far beyond.
    """
    rule, repetitions = EstimatorDifference(estimator), 60
    problem = make_problem(loss, penalty_weights=None)
    problem = replace(problem, table=replace(problem.table, sample_weight=None))
    other = swapped(problem, np.arange(8))
    sums = np.array(
        [
            contrast(rule, problem, seed) + contrast(rule, other, 1000 + seed)
            for seed in range(repetitions)
        ]
    )
    spread = sums.std(axis=0, ddof=1) / np.sqrt(repetitions)
    assert np.count_nonzero(spread) >= 2
    z = sums.mean(axis=0) / np.where(spread > 0, spread, 1.0)
    assert np.max(np.abs(z)) < norm.isf(0.001 / 2 / 6)


@each_rule
@each_loss
def test_features_without_a_copy_have_contrast_zero(name, loss):
    problem = plain(name, make_problem(loss))
    np.testing.assert_array_equal(contrast(name, problem)[[2, 5]], 0.0)
    none = replace(problem, has_copy=np.zeros(8, dtype=bool))
    np.testing.assert_array_equal(contrast(name, none), np.zeros(8))


@each_rule
def test_covariates_are_not_penalised(name):
    """What covariates explain of a continuous outcome changes nothing."""
    problem = plain(name, make_problem(tol=1e-11))
    table = problem.table
    moved = replace(table, response=table.response + table.covariates @ [30.0, -20.0] + 4.0)
    allowed = 1e-8 if name == "estimator" else tolerance(name, problem)
    expected = contrast(name, problem)
    if name == "estimator":  # ordinary columns to it, shrunk a little
        allowed = 0.05 * np.abs(expected).max()
    np.testing.assert_allclose(contrast(name, replace(problem, table=moved)), expected, 0, allowed)


@each_rule
@each_loss
def test_rows_of_weight_zero_are_absent(name, loss):
    problem = plain(name, make_problem(loss, tol=1e-11))
    weight = problem.weights.copy()
    weight[::4] = 0
    kept, table = weight > 0, problem.table
    with_zeros = replace(problem, table=replace(table, sample_weight=weight))
    rows = [
        getattr(table, field)[kept] for field in ("features", "copies", "response", "covariates")
    ]
    without = replace(problem, table=PairedTable(*rows, weight[kept]))
    allowed = tolerance(name, without)
    np.testing.assert_allclose(contrast(name, with_zeros), contrast(name, without), 0, allowed)


@pytest.mark.parametrize("name", IMPORTANCES)
@each_loss
def test_scale_of_the_weights_does_not_matter(name, loss):
    problem = make_problem(loss, tol=1e-11)
    table = replace(problem.table, sample_weight=7 * problem.weights)
    np.testing.assert_allclose(
        contrast(name, replace(problem, table=table)),
        contrast(name, problem),
        rtol=0,
        atol=tolerance(name, problem),
    )


@pytest.mark.parametrize("name", IMPORTANCES)
@each_loss
def test_a_penalised_pair_falls_behind(name, loss):
    problem = make_problem(loss, n=400, penalty_weights=None)
    heavy = replace(problem, penalty_weights=np.where(np.arange(8) == 3, 1e9, 1.0))
    before, after = contrast(name, problem), contrast(name, heavy)
    assert abs(before[3]) > 0.05 and abs(after[3]) < 1e-3 * abs(before[3])
    assert abs(after[0]) > 0.05


@pytest.mark.parametrize("name", IMPORTANCES)
def test_units_of_the_columns_do_not_matter_when_standardising(name):
    problem = make_problem(tol=1e-11)
    units = 10.0 ** np.arange(-3, 5)
    table = problem.table
    scaled = replace(table, features=table.features * units, copies=table.copies * units)
    np.testing.assert_allclose(
        contrast(name, replace(problem, table=scaled)),
        contrast(name, problem),
        rtol=0,
        atol=tolerance(name, problem),
    )
    raw = replace(problem, standardize=False)
    if name != "marginal":
        assert not np.allclose(contrast(name, raw), contrast(name, problem), rtol=1e-3)


# --- the widened table ------------------------------------------------------------------------


def test_the_columns_are_permuted_at_random_and_found_again():
    problem = make_problem()
    positions = []
    for stream in spawn(0, 200):
        wide = WidenedTable.of(problem, stream)
        originals, copies = wide.of_pairs(np.arange(wide.table.shape[1]))
        has = problem.has_copy
        np.testing.assert_array_equal(
            wide.table[:, originals.astype(int)], problem.table.features[:, has]
        )
        np.testing.assert_array_equal(
            wide.table[:, copies.astype(int)], problem.table.copies[:, has]
        )
        np.testing.assert_array_equal(wide.table[:, wide.covariates], problem.table.covariates)
        weights = wide.penalty_weights
        np.testing.assert_array_equal(weights[wide.covariates], 0.0)
        np.testing.assert_array_equal(*(weights[part.astype(int)] for part in (originals, copies)))
        positions.append(originals[0] < copies[0])
    assert len(wide.position) == 2 + 2 + 2 * 6  # covariates, features without a copy, pairs
    assert 70 < np.sum(positions) < 130  # binomial(200, 1/2): 4.2 standard deviations


def test_single_precision_stays_single():
    problem = make_problem()
    single = replace(
        problem,
        table=replace(
            problem.table,
            features=problem.table.features.astype(np.float32),
            copies=problem.table.copies.astype(np.float32),
        ),
    )
    assert WidenedTable.of(single, np.random.default_rng(0)).table.dtype == np.float32
    np.testing.assert_allclose(contrast("ridge", single), contrast("ridge", problem), atol=1e-4)


# --- the tuned lasso --------------------------------------------------------------------------


@each_loss
@pytest.mark.parametrize("l1_ratio", [1.0, 0.5])
def test_the_penalty_has_the_smallest_held_out_loss_of_the_whole_grid(loss, l1_ratio):
    """The grid is left early; solving all of it fold by fold finds the same penalty."""
    rule = LassoDifference(l1_ratio)
    for seed in range(4):
        problem = make_problem(loss, seed=seed)
        measured = measure_contrasts(rule, problem, np.random.default_rng(seed))
        generator = np.random.default_rng(seed)
        wide = WidenedTable.of(problem, generator)
        settings = dict(
            loss=loss, l1_ratio=l1_ratio, penalty_weights=wide.penalty_weights, standardize=True
        )
        y, w = problem.table.response, problem.weights
        path = penalized_path(wide.table, y, sample_weight=w, **settings)
        losses = []
        for fold in held_out_folds(problem, 5, generator):
            train = penalized_path(
                wide.table, y, sample_weight=w * ~fold, alphas=path.alphas, **settings
            )
            eta = train.coef @ wide.table.T + train.intercept[:, None]
            row = np.logaddexp(0, eta) - y * eta if loss == "log_loss" else 0.5 * (y - eta) ** 2
            losses.append(row @ (w * fold) / (w @ fold))
        best = int(np.argmin(np.mean(losses, axis=0)))
        assert measured.fit.alpha == pytest.approx(path.alphas[best])
        expected = path.coef[[best]].toarray()[0]
        np.testing.assert_allclose(measured.fit.coef, expected, atol=2e-3)
        assert all(result.gap.max() <= problem.tol for result in measured.results)


def test_coefficients_are_those_of_scikit_learn():
    problem = make_problem(tol=1e-12, penalty_weights=None)
    problem = replace(
        problem, table=replace(problem.table, sample_weight=None, covariates=np.empty((120, 0)))
    )
    measured = measure_contrasts(LassoDifference(), problem, np.random.default_rng(0))
    design = measured.design
    scale = np.where(design.std(0) > 1e-9, design.std(0), 1.0)
    lasso = Lasso(measured.fit.alpha, tol=1e-12, max_iter=100_000)
    lasso.fit((design - design.mean(0)) / scale, problem.table.response)
    wide = WidenedTable.of(problem, np.random.default_rng(0))
    original, copy = wide.of_pairs(np.abs(lasso.coef_))
    np.testing.assert_allclose(measured.contrast[problem.has_copy], original - copy, atol=1e-5)


def test_an_outcome_without_variation_has_contrasts_zero():
    problem = make_problem()
    flat = replace(problem, table=replace(problem.table, response=np.full(120, 3.0)))
    for name in IMPORTANCES:
        np.testing.assert_array_equal(contrast(name, flat), np.zeros(8))


# --- the entry point --------------------------------------------------------------------------


def test_entry_points_are_those_of_the_lars_path():
    """Every column that enters by the end lies within one step of the grid of the exact knot."""
    for seed in range(5):
        problem = make_problem(seed=seed, penalty_weights=None)
        table = replace(problem.table, sample_weight=None, covariates=np.empty((120, 0)))
        problem = replace(problem, table=table)
        generator = np.random.default_rng(seed)
        wide = WidenedTable.of(problem, generator)
        sizes = EntryPoint().sizes(wide, generator).values
        X = wide.table - wide.table.mean(0)
        varies = X.std(0) > 1e-9
        X[:, varies] /= X[:, varies].std(0)
        X[:, ~varies] = 0.0
        alphas, _, coef = lars_path(X, table.response - table.response.mean(), method="lasso")
        knots = np.array(
            [alphas[max(np.argmax(row != 0) - 1, 0)] if row.any() else 0 for row in coef]
        )
        entered = sizes > 0
        assert entered.sum() >= len(wide.position) // 2
        step = 1e-3 ** (1 / 99)
        # A column can leave again between two points of the grid; none does in these tables.
        assert np.all(sizes[entered] <= knots[entered] / step)
        assert np.all(sizes[entered] >= knots[entered] * step)


def test_entry_of_orthonormal_columns_is_their_correlation_with_the_outcome():
    """X'X = nI: column j enters at |x_j'y| / n, and the order is that of these numbers."""
    generator = np.random.default_rng(0)
    Q = np.linalg.qr(np.column_stack([np.ones(64), generator.standard_normal((64, 20))]))[0]
    X = np.sqrt(64) * Q[:, 1:]
    y = X @ generator.standard_normal(20)
    table = PairedTable(X[:, :10], X[:, 10:], y, np.empty((64, 0)), None)
    problem = ImportanceProblem(table, "squared_error", np.ones(10, dtype=bool), np.arange(10))
    exact = np.abs(X.T @ y) / 64
    largest = np.maximum(exact[:10], exact[10:])
    expected = largest * np.sign(exact[:10] - exact[10:])
    found = contrast("entry", problem)
    entered = found != 0
    assert entered.sum() >= 5
    assert largest[entered].min() > np.max(largest[~entered], initial=0)
    step = 1e-3 ** (1 / 99)
    ratio = found[entered] / expected[entered]
    assert np.all((ratio > step) & (ratio < 1 / step))
    np.testing.assert_array_equal(np.argsort(np.abs(found[entered])), np.argsort(largest[entered]))


def test_contrast_of_entries_is_the_signed_maximum():
    problem = make_problem(units=np.array([0, 0, 1, 1, 2, 1, 2, 3]))
    generator = np.random.default_rng(0)
    wide = WidenedTable.of(problem, generator)
    sizes = EntryPoint().sizes(wide, generator).values
    original, copy = (np.zeros(8) for _ in range(2))
    original[problem.has_copy], copy[problem.has_copy] = wide.of_pairs(sizes)
    expected = []
    for unit in range(4):
        a, b = (part[problem.units == unit].max() for part in (original, copy))
        expected.append(max(a, b) * np.sign(a - b))
    np.testing.assert_array_equal(contrast("entry", problem), expected)


# --- closed forms -----------------------------------------------------------------------------


def residuals(columns, fixed, weight):
    root = np.sqrt(weight)[:, None]
    return columns - fixed @ np.linalg.lstsq(fixed * root, columns * root, rcond=None)[0]


@each_loss
def test_marginal_sizes_are_partial_correlations(loss):
    """Squared error: by residuals. Log loss: score statistics of the logistic null model."""
    problem = make_problem(loss)
    table, w = problem.table, problem.weights
    fixed = np.column_stack([np.ones(len(w)), table.covariates])
    if loss == "squared_error":
        omega, working = w, table.response
    else:
        null = GLM(table.response, fixed, family=families.Binomial(), freq_weights=w).fit(tol=1e-12)
        mean = null.fittedvalues
        omega, working = w * mean * (1 - mean), (table.response - mean) / (mean * (1 - mean))
    u = residuals(working[:, None], fixed, omega)[:, 0]
    expected = []
    for columns in (table.features, table.copies):
        z = residuals(columns, fixed, omega)
        length = np.sqrt(omega @ z**2 * (omega @ u**2))
        expected.append(np.abs((omega * u) @ z) / length / problem.penalty_weights)
    difference = np.where(problem.has_copy, expected[0] - expected[1], 0.0)
    np.testing.assert_allclose(contrast("marginal", problem), difference, atol=1e-6)


@pytest.mark.parametrize("m", [8, 90])
def test_ridge_has_the_penalty_of_generalised_cross_validation(m):
    """Against scikit-learn's Ridge and the hat matrix itself, on either side of n = columns."""
    generator = np.random.default_rng(1)
    n = 100
    X, copies = generator.standard_normal((2, n, m))
    y = X[:, 0] + generator.standard_normal(n)
    table = PairedTable(X, copies, y, np.empty((n, 0)), None)
    problem = ImportanceProblem(table, "squared_error", np.ones(m, dtype=bool), np.arange(m))
    wide = np.column_stack([X, copies])
    wide = (wide - wide.mean(0)) / wide.std(0)
    score, ridges = [], []
    penalties = np.linalg.svd(wide, compute_uv=False)[0] ** 2 * np.geomspace(1e3, 1e-6, 100)
    for penalty in penalties:
        hat = wide @ np.linalg.solve(wide.T @ wide + penalty * np.eye(2 * m), wide.T)
        ridge = Ridge(penalty).fit(wide, y)
        left = y - ridge.predict(wide)
        score.append(left @ left / (1 - (1 + np.trace(hat)) / n) ** 2)
        ridges.append(np.abs(ridge.coef_))
    best = ridges[int(np.argmin(score))]
    np.testing.assert_allclose(contrast("ridge", problem), best[:m] - best[m:], atol=1e-8)


def test_ridge_of_classes_is_one_newton_step():
    """The penalised logistic problem's gradient and Hessian at the null model give the step."""
    problem = make_problem("log_loss", penalty_weights=None, standardize=False)
    generator = np.random.default_rng(0)
    wide = WidenedTable.of(problem, generator)
    sizes = RidgeDifference().sizes(wide, generator).values[wide.penalized]
    w, y = problem.weights / problem.weights.sum(), problem.table.response
    fixed = np.column_stack([np.ones(len(w)), problem.table.covariates])
    null = GLM(y, fixed, family=families.Binomial(), freq_weights=problem.weights).fit(tol=1e-12)
    mean = null.fittedvalues
    X = np.column_stack([fixed, wide.table[:, wide.penalized]])
    hessian = X.T @ (X * (w * mean * (1 - mean))[:, None])
    gradient = X.T @ (w * (y - mean))
    errors = []
    for penalty in np.geomspace(1e-6, 1e4, 4000):
        ridge = np.diag(np.r_[np.zeros(3), np.full(len(sizes), penalty)])
        step = np.linalg.lstsq(hessian + ridge, gradient, rcond=None)[0][3:]
        errors.append(np.abs(np.abs(step) - sizes).max())
    assert min(errors) < 2e-3 * sizes.max()  # within the resolution of this grid of penalties


# --- estimators -------------------------------------------------------------------------------


def test_coefficients_of_an_estimator_count_in_standard_deviations():
    problem = make_problem(penalty_weights=None)
    problem = replace(problem, table=replace(problem.table, sample_weight=None))
    table, has = problem.table, problem.has_copy
    X = np.column_stack([table.covariates, table.features[:, has], table.copies[:, has]])
    coef = np.abs(LinearRegression().fit(X, table.response).coef_ * X.std(0))[2:]
    rule = EstimatorDifference(LinearRegression())
    np.testing.assert_allclose(contrast(rule, problem)[has], coef[:6] - coef[6:], atol=1e-9)


def test_a_random_estimator_is_seeded_by_the_generator():
    rule = EstimatorDifference(RandomForestRegressor(n_estimators=3))
    problem = make_problem(penalty_weights=None)
    np.testing.assert_array_equal(contrast(rule, problem, 1), contrast(rule, problem, 1))
    assert not np.array_equal(contrast(rule, problem, 1), contrast(rule, problem, 2))


class NoImportance(BaseEstimator):
    def fit(self, X, y):
        return self


class NotFinite(NoImportance):
    def fit(self, X, y):
        self.coef_ = np.full(X.shape[1], np.nan)
        return self


@pytest.mark.parametrize(
    ("rule", "settings", "said"),
    [
        (Ridge(), {}, ["penalty_weights", "Ridge", "1 and infinity"]),
        (LogisticRegression(), {"penalty_weights": None}, ["classifier", "regressor", "log_loss"]),
        (NoImportance(), {"penalty_weights": None}, ["sample_weight", "NoImportance.fit"]),
    ],
)
def test_what_an_estimator_can_not_be_asked(rule, settings, said):
    with pytest.raises(ValueError) as error:
        contrast(EstimatorDifference(rule), make_problem(**settings))
    for part in said:
        assert part in str(error.value)


@pytest.mark.parametrize(
    ("rule", "said"),
    [
        (NoImportance(), ["neither coef_ nor feature_importances_", "importance='lasso'"]),
        (NotFinite(), ["negative or not finite", "NotFinite", "check"]),
    ],
)
def test_an_estimator_without_usable_importances(rule, said):
    problem = make_problem(penalty_weights=None)
    problem = replace(problem, table=replace(problem.table, sample_weight=None))
    with pytest.raises(ValueError) as error:
        contrast(EstimatorDifference(rule), problem)
    for part in said:
        assert part in str(error.value)


def test_registry_and_names():
    assert list(IMPORTANCES) == ["lasso", "entry", "ridge", "elastic_net", "marginal"]
    assert as_importance("marginal") == MarginalDifference()
    assert isinstance(as_importance(Ridge()), EstimatorDifference)
    rule = LassoDifference(n_folds=3)
    assert as_importance(rule) is rule
    for wrong in ("lars", 3, None):
        with pytest.raises(ValueError, match=r"unknown; allowed are 'lasso', .* usual choice"):
            as_importance(wrong)


# --- folds ------------------------------------------------------------------------------------


def test_folds_hold_every_row_once_keep_groups_and_spread_classes():
    groups = np.repeat(np.arange(40), 3)
    problem = make_problem("log_loss", groups=groups)
    y = (groups % 4 == 0).astype(float)
    weight = problem.weights.copy()
    weight[groups == 7] = 0
    problem = replace(problem, table=replace(problem.table, response=y, sample_weight=weight))
    for stream in spawn(0, 20):
        folds = held_out_folds(problem, 5, stream)
        assert folds.shape == (5, 120)
        np.testing.assert_array_equal(folds.sum(axis=0), weight > 0)
        for fold in folds:
            assert not set(groups[fold]) & set(groups[~fold & (weight > 0)])
            assert y[fold].sum() == 6  # two of the ten groups of the rarer class


def test_folds_are_random_and_few_where_there_is_little():
    problem = make_problem("log_loss")
    first, second = (held_out_folds(problem, 5, stream) for stream in spawn(0, 2))
    assert not np.array_equal(first, second)
    y = np.zeros(120)
    y[[3, 50, 99]] = 1
    rare = replace(problem, table=replace(problem.table, response=y))
    assert len(held_out_folds(rare, 5, np.random.default_rng(0))) == 3
    y[[50, 99]] = 0
    rare = replace(problem, table=replace(problem.table, response=y))
    with pytest.raises(ValueError, match=r"1 row .* at least 2 .* importance='entry'"):
        held_out_folds(rare, 5, np.random.default_rng(0))
