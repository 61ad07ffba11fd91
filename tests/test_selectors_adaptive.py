"""AdaptiveLassoSelector against obvious implementations from scikit-learn's estimators."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import sparse
from scipy.special import expit
from sklearn.linear_model import (
    Lasso,
    LassoCV,
    LinearRegression,
    LogisticRegression,
    lasso_path,
)
from sklearn.model_selection import GroupKFold, KFold, ShuffleSplit, StratifiedKFold

from sparsesel.engine import Keep, Problems, as_design, solve_bank
from sparsesel.selectors import AdaptiveLassoSelector
from sparsesel.selectors._initial import InitialProblem, choose_initial, initial_sizes
from sparsesel.selectors._tuning import effective_rows, extended_bic, one_standard_error
from sparsesel.selectors.adaptive import adaptive_weights
from sparsesel.tasks import TaskSettings


def make_data(n=80, p=12, seed=0):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p)) * rng.uniform(0.2, 5, p) + rng.standard_normal(p)
    X[:, 1] += 0.7 * X[:, 0]
    beta = np.zeros(p)
    beta[:4] = np.array([2.0, -1.5, 1.0, 0.5]) / X[:, :4].std(axis=0)
    y = X @ beta + rng.standard_normal(n) + 3
    return X, y


def make_classes(n=120, p=8, seed=0):
    X, y = make_data(n, p, seed)
    eta = 0.8 * (y - y.mean())
    return X, np.where(np.random.default_rng(seed + 1).random(n) < expit(eta), "yes", "no")


def weighted_deviation(X, weight):
    mean = np.average(X, axis=0, weights=weight)
    return np.sqrt(np.average((X - mean) ** 2, axis=0, weights=weight))


def initial_problem(X, y, weights=None, loss="squared_error", penalty_weights=None, **keywords):
    n, p = X.shape
    return InitialProblem(
        design=as_design(X),
        response=np.asarray(y, dtype=float),
        weights=np.ones((1, n)) if weights is None else np.atleast_2d(weights),
        loss=loss,
        penalty_weights=np.ones(p) if penalty_weights is None else np.asarray(penalty_weights),
        standardize=keywords.get("standardize", True),
        tol=1e-10,
        max_iter=100_000,
        settings=TaskSettings(),
    )


# --- the fit at a given penalty ---------------------------------------------------------------


@pytest.mark.parametrize("gamma", [0.5, 1.0, 2.0])
@pytest.mark.parametrize("standardize", [True, False])
@pytest.mark.parametrize("weighted", [False, True])
def test_equals_the_lasso_on_rescaled_columns(gamma, standardize, weighted):
    X, y = make_data()
    weight = np.random.default_rng(3).uniform(0.2, 2, len(y)) if weighted else np.ones(len(y))
    given = np.ones(X.shape[1])
    given[5] = 3.0
    s = weighted_deviation(X, weight) if standardize else np.ones(X.shape[1])
    initial = np.abs(LinearRegression().fit(X, y, sample_weight=weight).coef_) * s
    v = given * (initial.max() / initial) ** gamma
    lasso = Lasso(alpha=0.05, tol=1e-12, max_iter=100_000)
    lasso.fit(X / (s * v), y, sample_weight=weight)
    selector = AdaptiveLassoSelector(
        alpha=0.05,
        gamma=gamma,
        initial="least_squares",
        penalty_weights=given,
        standardize=standardize,
        tol=1e-10,
    ).fit(X, y, sample_weight=weight if weighted else None)
    np.testing.assert_allclose(selector.weights_, v, rtol=1e-7)
    np.testing.assert_allclose(selector.coef_, lasso.coef_ / (s * v), rtol=1e-4, atol=1e-7)
    assert selector.intercept_ == pytest.approx(lasso.intercept_, rel=1e-5)
    np.testing.assert_array_equal(selector.selected_, selector.coef_ != 0)
    assert 0 < selector.selected_.sum() < X.shape[1]
    assert selector.dual_gap_ <= 1e-10
    assert selector.alpha_ == 0.05 and list(selector.alphas_) == [0.05]


def test_units_are_ranked_by_their_largest_standardised_coefficient():
    X, y = make_data()
    weight = np.random.default_rng(3).uniform(0.2, 2, len(y))
    labels = np.arange(12) // 2
    selector = AdaptiveLassoSelector(0.05, feature_groups=labels, covariates=[7])
    selector.fit(X, y, sample_weight=weight)
    size = np.abs(selector.coef_) * weighted_deviation(X, weight)
    size[7] = 0
    sizes = size.reshape(6, 2).max(axis=1)
    np.testing.assert_allclose(selector.units_["coefficient_size"], sizes, rtol=1e-8)
    np.testing.assert_array_equal(selector.units_["selected"], sizes > 0)
    ranked = [str(k) for k in np.argsort(-sizes) if sizes[k] > 0]
    assert list(selector.claim_.selected) == ranked and len(ranked) > 1


def test_gamma_zero_is_the_lasso():
    X, y = make_data()
    selector = AdaptiveLassoSelector(alpha=0.3, gamma=0, standardize=False, tol=1e-10).fit(X, y)
    lasso = Lasso(alpha=0.3, tol=1e-12).fit(X, y)
    np.testing.assert_allclose(selector.coef_, lasso.coef_, rtol=1e-4, atol=1e-7)
    assert selector.initial_ == "none"
    assert str(selector.claim_).startswith("The lasso selected")


def test_covariates_are_in_the_model_and_not_claimed():
    X, y = make_data()
    # By Frisch, Waugh and Lovell, unpenalised columns can be projected out beforehand.
    A = np.column_stack([np.ones(len(y)), X[:, [0, 6]]])
    project = np.eye(len(y)) - A @ np.linalg.pinv(A)
    keep = np.setdiff1d(np.arange(12), [0, 6])
    s = X.std(axis=0)[keep]
    lasso = Lasso(alpha=0.1, tol=1e-12, fit_intercept=False)
    lasso.fit(project @ X[:, keep] / s, project @ y)
    selector = AdaptiveLassoSelector(alpha=0.1, gamma=0, covariates=[0, 6], tol=1e-10).fit(X, y)
    np.testing.assert_allclose(selector.coef_[keep], lasso.coef_ / s, rtol=1e-4, atol=1e-7)
    assert not selector.selected_[[0, 6]].any()
    assert selector.get_support()[[0, 6]].all()
    assert selector.claim_.candidates == 10
    np.testing.assert_array_equal(selector.weights_[[0, 6]], 0)


@pytest.mark.parametrize("initial", ["auto", "ridge", "marginal", "lasso"])
@pytest.mark.parametrize("make", [make_data, make_classes])
def test_whole_weights_are_repeated_rows(initial, make):
    X, y = make(n=60)
    weight = np.random.default_rng(1).integers(0, 4, len(y))
    selector = AdaptiveLassoSelector(alpha=0.02, initial=initial, tol=1e-11)
    weighted = selector.fit(X, y, sample_weight=weight).coef_.copy()
    repeated = selector.fit(np.repeat(X, weight, axis=0), np.repeat(y, weight)).coef_
    np.testing.assert_allclose(weighted, repeated, rtol=1e-4, atol=1e-7)
    assert weighted.any()


@pytest.mark.parametrize("alpha", [0.05, "cv", "one_se", "ebic"])
def test_a_permuted_table_gives_the_same_named_features(alpha):
    X, y = make_data()
    rng = np.random.default_rng(5)
    columns = rng.permutation(X.shape[1])
    # Folds are made of the rows in their order: they are permuted with them.
    rows = rng.permutation(len(y))
    position = np.argsort(rows)
    folds = [(train, test) for train, test in KFold(5).split(X)]
    permuted_folds = [(position[train], position[test]) for train, test in folds]
    selector = AdaptiveLassoSelector(alpha, cv=folds, tol=1e-10)
    expected = selector.fit(X, y).coef_.copy()
    selector.set_params(cv=permuted_folds).fit(X[rows][:, columns], y[rows])
    np.testing.assert_allclose(selector.coef_, expected[columns], rtol=1e-4, atol=1e-7)
    assert 0 < np.count_nonzero(expected) < X.shape[1]


def test_a_stacked_table_gives_the_same_answer():
    X, y = make_data()
    selector = AdaptiveLassoSelector(alpha=0.05, tol=1e-11)
    once = selector.fit(X, y).coef_.copy()
    twice = selector.fit(np.vstack([X, X]), np.r_[y, y]).coef_
    np.testing.assert_allclose(once, twice, rtol=1e-5, atol=1e-8)


# --- initial estimates ------------------------------------------------------------------------


def test_weights_follow_the_formula():
    sizes = np.array([[2.0, 0.5, 0.0, 1.0], [0.0, 0.0, 0.0, 0.0]])
    weights = adaptive_weights(sizes, 2.0)
    np.testing.assert_array_equal(weights[0], [1, 16, np.inf, 4])
    np.testing.assert_array_equal(weights[1], np.inf)


@pytest.mark.parametrize(
    ("asked", "loss", "n_rows", "n_columns", "chosen"),
    [
        ("auto", "squared_error", 100, 20, "least_squares"),
        ("auto", "squared_error", 99, 20, "ridge"),
        ("auto", "squared_error", 20, 20, "ridge"),
        ("auto", "squared_error", 19, 20, "lasso"),
        ("auto", "log_loss", 100, 20, "ridge"),
        ("auto", "log_loss", 19, 20, "lasso"),
        ("marginal", "squared_error", 19, 20, "marginal"),
        ("least_squares", "log_loss", 20, 20, "least_squares"),
    ],
)
def test_choice_of_the_initial_estimate(asked, loss, n_rows, n_columns, chosen):
    assert choose_initial(asked, loss, n_rows, n_columns) == chosen


def test_least_squares_needs_rows():
    X, y = make_data(n=10)
    with pytest.raises(ValueError, match=r"13 columns .* and 10 rows .* initial='ridge'"):
        AdaptiveLassoSelector(0.1, initial="least_squares").fit(X, y)


def test_separated_classes_have_no_maximum_likelihood_estimate():
    X, _ = make_data(p=5)
    with pytest.raises(ValueError, match=r"initial='least_squares' has no answer.*'ridge'"):
        AdaptiveLassoSelector(0.1, initial="least_squares").fit(X, X[:, 0] > 0)
    assert AdaptiveLassoSelector(0.1).fit(X, X[:, 0] > 0).initial_ == "ridge"


def ridge_by_hand(X, y, weight, covariates, candidates):
    """Ridge with generalised cross-validation, every penalty solved and its trace formed anew."""
    s = weighted_deviation(X, weight)[candidates]
    root = np.sqrt(weight)[:, None]
    A = root * np.column_stack([np.ones(len(y)), X[:, covariates]])
    Z = root * X[:, candidates] / s
    target = root[:, 0] * y
    top = np.linalg.svd(Z - A @ np.linalg.lstsq(A, Z, rcond=None)[0], compute_uv=False)[0] ** 2
    n_rows, best = weight.sum(), (np.inf, None)
    for penalty in top * np.geomspace(1e3, 1e-6, 100):
        M = np.hstack([A, Z])
        gram = M.T @ M + np.diag(np.r_[np.zeros(A.shape[1]), np.full(Z.shape[1], penalty)])
        coef = np.linalg.solve(gram, M.T @ target)
        trace = np.trace(np.linalg.solve(gram, M.T @ M))
        score = np.sum((target - M @ coef) ** 2) / (1 - trace / n_rows) ** 2
        if score < best[0]:
            best = (score, np.abs(coef[A.shape[1] :]))
    return best[1]


@pytest.mark.parametrize(("n", "p"), [(40, 12), (14, 30)], ids=["tall", "wide"])
@pytest.mark.parametrize("as_sparse", [False, True])
def test_ridge_equals_penalties_tried_one_by_one(n, p, as_sparse):
    X, y = make_data(n, p)
    weight = np.random.default_rng(2).integers(1, 4, n).astype(float)
    covariates, candidates = [0, 2], np.setdiff1d(np.arange(p), [0, 2])
    given = np.ones(p)
    given[covariates] = 0
    table = sparse.csc_array(X) if as_sparse else X
    sizes = initial_sizes("ridge", initial_problem(table, y, weight, penalty_weights=given))[0]
    by_hand = ridge_by_hand(X, y, weight, covariates, candidates)
    np.testing.assert_allclose(sizes[candidates], by_hand, rtol=1e-5)
    np.testing.assert_array_equal(sizes[covariates], 0)


def test_marginal_slopes_are_simple_regressions():
    X, y = make_data(30, 50)
    sizes = initial_sizes("marginal", initial_problem(X, y))[0]
    by_hand = [abs(np.polyfit(x, y, 1)[0]) * x.std() for x in X.T]
    np.testing.assert_allclose(sizes, by_hand, rtol=1e-8)
    given = np.ones(50)
    given[7], given[9] = 0, np.inf
    sizes = initial_sizes("marginal", initial_problem(X, y, penalty_weights=given))[0]
    for j in (0, 12):
        A = np.column_stack([X[:, j], np.ones(30), X[:, 7]])
        slope = np.linalg.lstsq(A, y, rcond=None)[0][0]
        assert sizes[j] == pytest.approx(abs(slope) * X[:, j].std(), rel=1e-8)
    assert sizes[7] == sizes[9] == 0


@pytest.mark.parametrize("initial", ["marginal", "ridge"])
def test_log_loss_slopes_are_one_newton_step(initial):
    X, labels = make_classes(n=40, p=60)
    y = (labels == "yes").astype(float)
    # With the intercept alone, mu is the share, h is constant, and the step is least squares.
    share = y.mean()
    working = (y - share) / (share * (1 - share))
    found = initial_sizes(initial, initial_problem(X, y, loss="log_loss"))[0]
    linear = initial_sizes(initial, initial_problem(X, working))[0]
    np.testing.assert_allclose(found, linear, rtol=1e-6)


def test_log_loss_step_with_covariates():
    X, labels = make_classes(n=80, p=5)
    y = (labels == "yes").astype(float)
    given = np.array([0.0, 1, 1, 1, 1])
    null = LogisticRegression(C=np.inf, tol=1e-12, max_iter=1000).fit(X[:, [0]], y)
    mean = null.predict_proba(X[:, [0]])[:, 1]
    h = mean * (1 - mean)
    problem = initial_problem(X, y, loss="log_loss", penalty_weights=given)
    sizes = initial_sizes("marginal", problem)[0]
    for j in range(1, 5):
        A = np.column_stack([X[:, j], np.ones(80), X[:, 0]])
        step = np.linalg.solve(A.T @ (h[:, None] * A), A.T @ (y - mean))[0]
        assert sizes[j] == pytest.approx(abs(step) * X[:, j].std(), rel=1e-5)


def test_maximum_likelihood_as_the_initial_estimate():
    X, labels = make_classes(n=200, p=5)
    y = (labels == "yes").astype(float)
    by_scikit = LogisticRegression(C=np.inf, tol=1e-12, max_iter=10_000).fit(X / X.std(axis=0), y)
    sizes = initial_sizes("least_squares", initial_problem(X, y, loss="log_loss"))[0]
    np.testing.assert_allclose(sizes, np.abs(by_scikit.coef_[0]), rtol=1e-4)


def test_the_initial_lasso_has_the_smallest_bic():
    X, y = make_data(40, 100)
    Z = (X - X.mean(axis=0)) / X.std(axis=0)
    top = np.abs(Z.T @ (y - y.mean())).max() / 40
    _, path, _ = lasso_path(
        Z, y - y.mean(), alphas=top * np.geomspace(1, 1e-3, 100), tol=1e-10, max_iter=100_000
    )
    size = np.count_nonzero(path, axis=0)
    rss = np.sum((y[:, None] - y.mean() - Z @ path) ** 2, axis=0)
    bic = 40 * np.log(rss / 40) + size * np.log(40)
    bic[size > 20] = np.inf
    sizes = initial_sizes("lasso", initial_problem(X, y))[0]
    np.testing.assert_allclose(sizes, np.abs(path[:, np.argmin(bic)]), rtol=1e-3, atol=1e-6)
    assert 4 <= np.count_nonzero(sizes) <= 20


def test_every_problem_has_its_own_initial_estimate():
    X, y = make_data()
    weights = np.random.default_rng(0).integers(1, 3, (3, len(y))).astype(float)
    for initial in ("least_squares", "ridge", "lasso", "marginal"):
        together = initial_sizes(initial, initial_problem(X, y, weights))
        for b in range(3):
            alone = initial_sizes(initial, initial_problem(X, y, weights[b]))
            np.testing.assert_allclose(together[b], alone[0], rtol=1e-6, atol=1e-9)


# --- choosing the penalty ---------------------------------------------------------------------


@pytest.mark.parametrize("weighted", [False, True])
def test_cross_validation_of_the_lasso_is_lasso_cv(weighted):
    X, y = make_data(n=80)
    weight = np.random.default_rng(3).uniform(0.2, 2, len(y)) if weighted else None
    selector = AdaptiveLassoSelector(gamma=0, standardize=False, tol=1e-10)
    selector.fit(X, y, sample_weight=weight)
    by_scikit = LassoCV(alphas=selector.alphas_, cv=5, tol=1e-9, max_iter=100_000)
    by_scikit.fit(X, y, sample_weight=weight)
    np.testing.assert_allclose(2 * selector.loss_path_, by_scikit.mse_path_, rtol=1e-5)
    assert selector.alpha_ == by_scikit.alpha_
    np.testing.assert_allclose(selector.coef_, by_scikit.coef_, rtol=1e-3, atol=1e-6)
    assert selector.loss_path_.shape == (100, 5)


def test_the_grid_is_lasso_cvs():
    X, y = make_data()
    selector = AdaptiveLassoSelector(gamma=0, standardize=False, alphas=30).fit(X, y)
    top = np.abs(X.T @ (y - y.mean())).max() / len(y)
    np.testing.assert_allclose(selector.alphas_, top * np.geomspace(1, 1e-3, 30), rtol=1e-10)


@pytest.mark.parametrize("make", [make_data, make_classes])
def test_the_initial_estimate_is_made_again_in_every_fold(make):
    X, y = make(n=60)
    weight = np.random.default_rng(4).uniform(0.5, 2, 60)
    groups = np.random.default_rng(5).integers(0, 9, 60)
    folds = list(GroupKFold(3).split(X, y, groups))
    selector = AdaptiveLassoSelector("cv", cv=folds, alphas=[0.2, 0.05, 0.01], tol=1e-10)
    loss_path = selector.fit(X, y, sample_weight=weight).loss_path_.copy()
    response = y if y.dtype.kind == "f" else (y == "yes").astype(float)
    for k, (train, test) in enumerate(folds):
        for a, alpha in enumerate([0.2, 0.05, 0.01]):
            selector.set_params(alpha=alpha).fit(X[train], y[train], sample_weight=weight[train])
            eta = X[test] @ selector.coef_ + selector.intercept_
            if y.dtype.kind == "f":
                loss = (response[test] - eta) ** 2 / 2
            else:
                loss = np.logaddexp(0, eta) - response[test] * eta
            expected = np.average(loss, weights=weight[test])
            assert loss_path[a, k] == pytest.approx(expected, rel=1e-5)


def test_folds_keep_groups_whole_and_classes_balanced():
    X, y = make_classes()
    groups = np.repeat(np.arange(24), 5)
    selector = AdaptiveLassoSelector(cv=4)
    data = selector._prepare(X, y, None, groups)
    held_out = selector._folds(data)
    assert held_out.shape == (4, 120)
    np.testing.assert_array_equal(held_out.sum(axis=0), 1)
    per_group = held_out.reshape(4, 24, 5)
    np.testing.assert_array_equal(per_group.all(axis=2), per_group.any(axis=2))
    ungrouped = selector._folds(selector._prepare(X, y, None, None))
    expected = [test for _, test in StratifiedKFold(4).split(X, y)]
    for fold, test in zip(ungrouped, expected, strict=True):
        np.testing.assert_array_equal(np.flatnonzero(fold), test)


def test_the_groups_reach_a_splitter():
    X, y = make_data()
    groups = np.repeat(np.arange(8), 10)
    by_splitter = AdaptiveLassoSelector(cv=GroupKFold(4)).fit(X, y, groups=groups)
    by_number = AdaptiveLassoSelector(cv=4).fit(X, y, groups=groups)
    np.testing.assert_array_equal(by_splitter.loss_path_, by_number.loss_path_)
    with pytest.raises(ValueError, match="groups"):
        AdaptiveLassoSelector(cv=GroupKFold(4)).fit(X, y)


@pytest.mark.parametrize(
    ("keywords", "fit", "said"),
    [
        ({"cv": 5}, {"groups": [0, 1, 2, 3] * 20}, ["4 groups", "cv=4", "ebic"]),
        ({}, {"groups": [0] * 80}, ["1 groups", "at least 2", "ebic"]),
        ({"cv": 90}, {}, ["80 rows", "cv=80"]),
        ({"cv": ShuffleSplit(1, random_state=0)}, {}, ["1 split", "two are needed"]),
        ({"cv": [([0, 1, 2], []), ([3, 4], [5])]}, {}, ["Fold 1 has no row", "hold out"]),
        ({"alphas": [0.1, -1.0]}, {}, ["alphas is [0.1, -1.0]", "positive"]),
        ({"alphas": []}, {}, ["alphas is []", "positive"]),
    ],
)
def test_folds_and_grids_that_cannot_be_used(keywords, fit, said):
    X, y = make_data()
    with pytest.raises(ValueError) as error:
        AdaptiveLassoSelector(**keywords).fit(X, y, **fit)
    for part in said:
        assert part in str(error.value)


def test_a_fold_without_a_class_is_refused():
    X, y = make_classes()
    y[:] = "no"
    y[:30] = "yes"
    with pytest.raises(ValueError, match=r"training rows of fold 1 have one class only"):
        AdaptiveLassoSelector(cv=KFold(4)).fit(X, y)
    y[3:] = "no"
    with pytest.raises(ValueError, match=r"cv=5 folds, but the table has 3 rows of the rarer"):
        AdaptiveLassoSelector(cv=5).fit(X, y)
    assert AdaptiveLassoSelector().fit(X, y).loss_path_.shape == (100, 3)


def test_one_standard_error_rule():
    loss_path = np.array([[4.0, 6.0], [2.0, 3.4], [1.0, 3.0], [1.2, 3.0]])
    # Smallest mean 2 with standard error 1: 2.7 is within, 5 is not.
    assert one_standard_error(loss_path) == 1
    X, y = make_data()
    selector = AdaptiveLassoSelector("one_se").fit(X, y)
    mean = selector.loss_path_.mean(axis=1)
    best = mean.argmin()
    within = mean <= mean[best] + selector.loss_path_[best].std(ddof=1) / math.sqrt(5)
    assert selector.alpha_ == selector.alphas_[within].max()
    assert selector.alpha_ > AdaptiveLassoSelector("cv").fit(X, y).alpha_


def test_extended_bic_of_the_papers():
    # Chen and Chen 2008 and 2012: -2 log L + k log N + 2 gamma log binom(P, k).
    size = np.array([0, 1, 3])
    linear = extended_bic("squared_error", np.array([1.0, 0.5, 0.2]), size, 50.0, 100)
    for value, half_mse, k in zip(linear, [1.0, 0.5, 0.2], size, strict=True):
        expected = 50 * math.log(2 * half_mse) + k * math.log(50) + 2 * math.log(math.comb(100, k))
        assert value == pytest.approx(expected, rel=1e-12)
    logistic = extended_bic("log_loss", np.array([0.6]), size[1:2], 50.0, 100, gamma=0.5)
    assert logistic[0] == pytest.approx(100 * 0.6 + math.log(50) + math.log(100), rel=1e-12)
    assert extended_bic("log_loss", np.array([0.1]), np.array([26]), 50.0, 100)[0] == np.inf


@pytest.mark.parametrize("make", [make_data, make_classes])
def test_the_penalty_of_the_extended_bic(make):
    X, y = make()
    response = y if y.dtype.kind == "f" else (y == "yes").astype(float)
    selector = AdaptiveLassoSelector("ebic", alphas=20).fit(X, y)
    n, p = X.shape
    found = []
    for alpha in selector.alphas_:
        at = AdaptiveLassoSelector(alpha).fit(X, y)
        eta = X @ at.coef_ + at.intercept_
        k = np.count_nonzero(at.coef_)
        if y.dtype.kind == "f":
            fit = n * math.log(np.mean((response - eta) ** 2))
        else:
            fit = 2 * np.sum(np.logaddexp(0, eta) - response * eta)
        found.append(fit + k * math.log(n) + 2 * math.log(math.comb(p, k)))
    np.testing.assert_allclose(selector.ebic_path_, found, rtol=1e-5)
    assert selector.alpha_ == selector.alphas_[np.argmin(found)]


def test_effective_rows():
    assert effective_rows(np.array([0.0, 2.0, 3.0])) == 5
    assert effective_rows(np.full(4, 0.25)) == pytest.approx(4)
    assert effective_rows(np.array([0.5, 1.5])) == pytest.approx(4 / 2.5)


# --- published values -------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("repetitions", "n_alphas"),
    [(60, 60), pytest.param(400, 300, marks=pytest.mark.statistical)],
)
@pytest.mark.parametrize(
    ("n", "sigma", "shares"),
    [
        (60, 9, {0: 0.497, 0.5: 0.586, 1: 0.700, 2: 0.784}),
        (120, 5, {0: 0.491, 0.5: 0.692, 1: 0.915, 2: 0.978}),
        (300, 3, {0: 0.498, 0.5: 0.930, 1: 1.0, 2: 1.0}),
    ],
)
def test_share_of_paths_that_contain_the_true_model(n, sigma, shares, repetitions, n_alphas):
    """Zou 2006, Model 0: the lasso is inconsistent there, the adaptive lasso is not.

    The shares are from 2,000 repetitions of our own; the paper's Table 1, from memory, is within
    0.06 of them.
    """
    covariance = np.full((4, 4), -0.39)
    covariance[3, :] = covariance[:, 3] = 0.23
    np.fill_diagonal(covariance, 1)
    beta = np.array([5.6, 5.6, 5.6, 0.0])
    hits = dict.fromkeys(shares, 0)
    root = np.linalg.cholesky(covariance)
    for rng in np.random.default_rng(20060).spawn(repetitions):
        X = rng.standard_normal((n, 4)) @ root.T
        y = X @ beta + sigma * rng.standard_normal(n)
        sizes = np.abs(np.linalg.lstsq(X, y, rcond=None)[0])[None, :]
        weights = np.vstack([adaptive_weights(sizes, g) if g else np.ones((1, 4)) for g in shares])
        problems = Problems(
            loss="squared_error", response=y, penalty_weights=weights, fit_intercept=False
        )
        result = solve_bank(as_design(X), problems, n_alphas, keep=Keep(coefficients=True))
        for gamma, path in zip(shares, result.coef, strict=True):
            supports = path.toarray() != 0
            hits[gamma] += (supports == (beta != 0)).all(axis=1).any()
    for gamma, share in shares.items():
        error = math.sqrt(share * (1 - share) * (1 / repetitions + 1 / 2000))
        # The last term allows for the point of the path that a grid may step over.
        assert abs(hits[gamma] / repetitions - share) <= 3.5 * error + 0.01


# --- claims and noise -------------------------------------------------------------------------


def test_the_claim_names_selectors_with_a_guarantee():
    X, y = make_data()
    claim = AdaptiveLassoSelector("one_se").fit(X, y, groups=np.arange(80) // 2).claim_
    assert claim.measure is None and not claim.guaranteed
    text = str(claim)
    for part in (
        "no guarantee",
        "StabilitySelector",
        "KnockoffSelector",
        "one standard error",
        "5 folds, which kept groups of rows whole",
        "made again on the training rows of every fold",
    ):
        assert part in text


def test_an_outcome_that_does_not_vary_selects_nothing():
    X, _ = make_data()
    for alpha in ("cv", "ebic", 0.1):
        selector = AdaptiveLassoSelector(alpha).fit(X, np.full(80, 2.5))
        assert not selector.selected_.any()
        assert selector.intercept_ == pytest.approx(2.5)
        assert "every coefficient is zero" in selector.claim_.empty_reason


def test_noise_is_mostly_not_selected_by_the_extended_bic():
    rng = np.random.default_rng(7)
    chosen = 0
    for _ in range(40):
        X, y = rng.standard_normal((60, 200)), rng.standard_normal(60)
        chosen += AdaptiveLassoSelector("ebic").fit(X, y).selected_.any()
    # The extended BIC bounds no error rate; an ordinary BIC selects in nearly every data set.
    assert chosen <= 8


# --- restated problems ------------------------------------------------------------------------


@pytest.mark.parametrize("alpha", [0.05, "cv", "ebic"])
@pytest.mark.parametrize("make", [make_data, make_classes])
def test_stated_problems_are_those_of_the_fit(alpha, make):
    X, y = make()
    selector = AdaptiveLassoSelector(alpha, cv=3, covariates=[2]).fit(X, y)
    stated = selector._stated_problems(X, y)
    assert [problem.label for problem in stated] == ["final fit"] + (
        ["fold 1", "fold 2", "fold 3"] if alpha == "cv" else []
    )
    np.testing.assert_array_equal(stated[0].coef, selector.coef_)
    for problem in stated:
        assert problem.alpha == selector.alpha_
        alone = solve_bank(as_design(X), problem.problems, [problem.alpha], tol=1e-9)
        np.testing.assert_allclose(alone.coef[0].toarray()[0], problem.coef, rtol=1e-2, atol=1e-4)
