"""StabilitySelector and RandomizedLassoSelector against slow, obvious loops over half-samples."""

from __future__ import annotations

import math
import warnings

import joblib
import numpy as np
import pytest
from scipy import sparse
from scipy.special import expit
from sklearn.base import BaseEstimator, RegressorMixin, clone
from sklearn.ensemble import RandomForestClassifier, RandomForestRegressor
from sklearn.exceptions import ConvergenceWarning
from sklearn.linear_model import Lasso, LogisticRegression, Ridge, lasso_path
from sklearn.neighbors import KNeighborsRegressor

from sparsesel.engine import as_design, solve_bank
from sparsesel.error_control import calibrate, expected_false_selections, worst_case_bound
from sparsesel.selectors import RandomizedLassoSelector, StabilitySelector
from sparsesel.selectors.stability import _first_units
from sparsesel.tasks import spawn

# The parameter that says "lasso" changed its name in scikit-learn 1.8.
ONLY_L1 = {"l1_ratio": 1.0} if LogisticRegression().l1_ratio is not None else {"penalty": "l1"}


def make_data(n=60, p=25, seed=0):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p)) * rng.uniform(0.2, 5, p) + rng.standard_normal(p)
    X[:, 1] += 0.7 * X[:, 0]
    beta = np.zeros(p)
    beta[:3] = np.array([1.5, -1.0, 0.7]) / X[:, :3].std(axis=0)
    return X, X @ beta + rng.standard_normal(n) + 3


def make_classes(n=80, p=15, seed=0):
    X, y = make_data(n, p, seed)
    eta = 1.5 * (y - np.median(y))
    return X, np.where(np.random.default_rng(seed + 1).random(n) < expit(eta), "yes", "no")


def first_entries(path, q):
    """The first q columns of a path (p, L): by first penalty, then size there, then position."""
    entered = [j for j in range(len(path)) if path[j].any()]
    first = {j: np.flatnonzero(path[j])[0] for j in entered}
    return sorted(entered, key=lambda j: (first[j], -abs(path[j, first[j]]), j))[:q]


def lasso_path_of_half(Z, y, weight=None, v=None):
    """Path on standardised columns divided by v, in standardised units."""
    weight = np.ones(len(y)) if weight is None else weight
    v = np.ones(Z.shape[1]) if v is None else v
    w = weight / weight.sum()
    Z = Z - w @ Z
    scaled = Z / np.sqrt(w @ Z**2) / v
    # Weighted squared error is squared error on rows times the root of their weight.
    root = np.sqrt(w * len(y))
    target = root * (y - w @ y)
    design = root[:, None] * scaled
    top = np.abs(design.T @ target).max() / len(y)
    grid = top * np.geomspace(1, 1e-3, 100)
    _, path, _ = lasso_path(design, target, alphas=grid, tol=1e-11, max_iter=100_000)
    path[np.abs(path) < 1e-9 * top] = 0
    return path / v[:, None]


def picks_of(selector, data):
    """Sets of units that the halves of a fitted selector picked."""
    return [set(picks[picks >= 0]) for picks in selector._picks]


# --- the votes --------------------------------------------------------------------------------


@pytest.mark.parametrize("weighted", [False, True])
def test_votes_equal_a_loop_over_scikit_learns_paths(weighted):
    X, y = make_data()
    weight = np.random.default_rng(3).uniform(0.3, 2, len(y)) if weighted else None
    selector = StabilitySelector(features_per_fit=4, pfer=5, n_pairs=10, random_state=0)
    selector.fit(X, y, sample_weight=weight)
    halves = selector._halves(selector._prepare(X, y, weight, None))
    votes = np.zeros(25)
    for half, picks in zip(halves, selector._picks, strict=True):
        w = None if weight is None else weight[half]
        expected = first_entries(lasso_path_of_half(X[half], y[half], w), 4)
        np.testing.assert_array_equal(picks, expected)
        votes[expected] += 1
    np.testing.assert_array_equal(selector.selection_probability_, votes / 20)
    np.testing.assert_array_equal(selector.selected_, votes / 20 >= selector.threshold_)
    assert selector.selected_.any() and not selector.selected_.all()


def test_randomised_votes_equal_a_loop_with_the_same_factors():
    X, y = make_data()
    selector = RandomizedLassoSelector(
        weakness=0.4, features_per_fit=4, pfer=5, n_pairs=10, random_state=0
    ).fit(X, y)
    data = selector._prepare(X, y, None, None)
    halves, factors = selector._halves(data), selector._factors(data, 20)
    assert factors.min() >= 1 and factors.max() <= 2.5 and factors.max() > 2
    for half, v, picks in zip(halves, factors, selector._picks, strict=True):
        expected = first_entries(lasso_path_of_half(X[half], y[half], v=v), 4)
        np.testing.assert_array_equal(picks, expected)


def test_weakness_one_is_stability_selection():
    X, y = make_data()
    plain = StabilitySelector(n_pairs=5, random_state=0).fit(X, y)
    randomised = RandomizedLassoSelector(weakness=1.0, n_pairs=5, random_state=0).fit(X, y)
    np.testing.assert_array_equal(plain.selection_probability_, randomised.selection_probability_)


def test_random_factors_are_drawn_for_every_half_and_group():
    X, y = make_data()
    labels = np.arange(25) // 5
    selector = RandomizedLassoSelector(weakness=0.2, n_pairs=500, feature_groups=labels)
    selector.set_params(covariates=[24], penalty_weights={0: 2.0, 3: np.inf}, random_state=1)
    factors = selector._factors(selector._prepare(X, y, None, None), 1000)
    np.testing.assert_array_equal(factors[:, 24], 0)
    np.testing.assert_array_equal(factors[:, 3], np.inf)
    np.testing.assert_allclose(factors[:, 0], 2 * factors[:, 1])
    for group in range(5):
        members = [j for j in np.flatnonzero(labels == group) if j not in (0, 3, 24)]
        assert np.ptp(factors[:, members], axis=1).max() == 0
    draws = 1 / factors[:, [1, 5, 10, 15, 20]]
    assert len(np.unique(draws)) == draws.size
    # Uniform on [0.2, 1]: mean 0.6, standard deviation 0.8 / sqrt(12); 5,000 draws.
    assert abs(draws.mean() - 0.6) < 4 * 0.8 / math.sqrt(12 * draws.size)
    # The halves of a pair are not related: a correlation of 2,500 pairs of draws.
    assert abs(np.corrcoef(draws[::2].ravel(), draws[1::2].ravel())[0, 1]) < 4 / math.sqrt(2500)


def test_log_loss_votes_equal_a_loop_over_another_solver():
    X, labels = make_classes()
    y = (labels == "yes").astype(float)
    selector = StabilitySelector(features_per_fit=2, pfer=5, n_pairs=2, random_state=0)
    selector.fit(X, labels)
    halves = selector._halves(selector._prepare(X, labels, None, None))
    for half, picks in zip(halves, selector._picks, strict=True):
        Z = (X[half] - X[half].mean(axis=0)) / X[half].std(axis=0)
        top = np.abs(Z.T @ (y[half] - y[half].mean())).max() / half.sum()
        model = LogisticRegression(
            **ONLY_L1, solver="saga", warm_start=True, tol=1e-9, max_iter=20_000
        )
        path = []
        for alpha in top * np.geomspace(1, 1e-3, 100):
            model.set_params(C=1 / (alpha * half.sum())).fit(Z, y[half])
            path.append(np.where(np.abs(model.coef_[0]) > 1e-6, model.coef_[0], 0))
            if np.count_nonzero(np.any(path, axis=0)) >= 3:
                break
        np.testing.assert_array_equal(picks, first_entries(np.array(path).T, 2))


def test_a_half_picks_at_most_q_and_may_pick_fewer():
    X, y = make_data(p=6)
    X[:, 3:] = 1.0  # constant columns never enter
    selector = StabilitySelector(features_per_fit=5, pfer=20, threshold=1.0, n_pairs=3)
    selector.fit(X, y)
    assert (np.count_nonzero(selector._picks >= 0, axis=1) <= 3).all()
    assert (selector.selection_probability_[3:] == 0).all()


# --- rows -------------------------------------------------------------------------------------


def test_halves_are_complementary_and_keep_groups_and_classes():
    X, y = make_classes(n=84)
    groups = np.repeat(np.arange(28), 3)
    selector = StabilitySelector(n_pairs=6, random_state=0)
    halves = selector._halves(selector._prepare(X, y, None, groups))
    assert not (halves[::2] & halves[1::2]).any()
    per_group = halves.reshape(12, 28, 3)
    np.testing.assert_array_equal(per_group.all(axis=2), per_group.any(axis=2))
    balanced = selector._halves(selector._prepare(X, y, None, None))
    for label in ("yes", "no"):
        counts = balanced[:, y == label].sum(axis=1)
        np.testing.assert_array_equal(counts, (y == label).sum() // 2)


def test_rows_of_a_group_count_as_one_when_they_are_copies():
    # Each row three times, as a group: the same halves of the same rows, so the same votes.
    X, y = make_data(n=40)
    selector = StabilitySelector(features_per_fit=3, pfer=5, n_pairs=8, random_state=0)
    once = selector.fit(X, y).selection_probability_.copy()
    tripled = selector.fit(np.repeat(X, 3, axis=0), np.repeat(y, 3), groups=np.arange(120) // 3)
    np.testing.assert_array_equal(tripled.selection_probability_, once)


def test_too_few_rows_of_a_class():
    X, y = make_classes()
    y[:] = "no"
    y[0] = "yes"
    with pytest.raises(ValueError, match="class yes has a single row"):
        StabilitySelector().fit(X, y)


# --- units and covariates ---------------------------------------------------------------------


@pytest.mark.parametrize("selector_class", [StabilitySelector, RandomizedLassoSelector])
def test_a_group_is_picked_when_a_member_enters(selector_class):
    X, y = make_data()
    labels = np.random.default_rng(1).integers(0, 9, 25)
    selector = selector_class(
        features_per_fit=3, pfer=5, n_pairs=10, feature_groups=labels, random_state=0
    ).fit(X, y)
    data = selector._prepare(X, y, None, None)
    halves, factors = selector._halves(data), selector._factors(data, 20)
    unit_of = data.columns.unit_of
    for b, half in enumerate(halves):
        v = factors if factors.ndim == 1 else factors[b]
        units = unit_of[first_entries(lasso_path_of_half(X[half], y[half], v=v), 25)]
        expected = list(dict.fromkeys(units))[:3]
        np.testing.assert_array_equal(selector._picks[b], expected)
    shares = selector.units_["selection_probability"]
    np.testing.assert_array_equal(selector.selection_probability_, shares[unit_of])
    assert selector.claim_.candidates == len(np.unique(labels))
    assert selector.claim_.unit == "feature group"


def test_groups_of_one_are_no_groups():
    X, y = make_data()
    plain = StabilitySelector(n_pairs=5, random_state=0).fit(X, y)
    single = StabilitySelector(n_pairs=5, random_state=0, feature_groups=np.arange(25)).fit(X, y)
    np.testing.assert_array_equal(plain.selection_probability_, single.selection_probability_)


def test_split_votes_come_together_in_a_cluster():
    rng = np.random.default_rng(2)
    X = rng.standard_normal((100, 40))
    signal = rng.standard_normal(100)
    X[:, :5] = signal[:, None] + 0.3 * rng.standard_normal((100, 5))
    y = signal + 0.7 * rng.standard_normal(100)
    keywords = {"features_per_fit": 2, "pfer": 2, "n_pairs": 20, "random_state": 0}
    alone = StabilitySelector(**keywords).fit(X, y)
    together = StabilitySelector(feature_groups="correlation", **keywords).fit(X, y)
    assert together.units_["unit"][0] == "x0 + x1 + x2 + 2 more"
    assert together.units_["selection_probability"][0] == 1.0
    assert alone.selection_probability_[:5].max() < 1.0
    assert together.get_support()[:5].all()


def test_covariates_are_in_every_model():
    X, y = make_data()
    selector = StabilitySelector(
        features_per_fit=4, pfer=5, n_pairs=6, covariates=[0, 7], random_state=0
    ).fit(X, y)
    halves = selector._halves(selector._prepare(X, y, None, None))
    keep = np.setdiff1d(np.arange(25), [0, 7])
    for half, picks in zip(halves, selector._picks, strict=True):
        Z, target = X[half], y[half]
        A = np.column_stack([np.ones(half.sum()), Z[:, [0, 7]]])
        project = np.eye(half.sum()) - A @ np.linalg.pinv(A)
        # Projected columns in units of the deviation that they had before.
        design = project @ Z[:, keep] / Z[:, keep].std(axis=0)
        top = np.abs(design.T @ (project @ target)).max() / half.sum()
        _, path, _ = lasso_path(
            design,
            project @ target,
            alphas=top * np.geomspace(1, 1e-3, 100),
            tol=1e-11,
            max_iter=100_000,
        )
        path[np.abs(path) < 1e-9 * top] = 0
        np.testing.assert_array_equal(picks, first_entries(path, 4))
    assert np.isnan(selector.selection_probability_[[0, 7]]).all()
    assert selector.get_support()[[0, 7]].all() and not selector.selected_[[0, 7]].any()


def test_columns_left_out_are_no_candidates():
    X, y = make_data()
    selector = StabilitySelector(n_pairs=5, penalty_weights={0: np.inf}, random_state=0)
    selector.fit(X, y)
    without = StabilitySelector(n_pairs=5, random_state=0).fit(X[:, 1:], y)
    np.testing.assert_array_equal(
        selector.selection_probability_[1:], without.selection_probability_
    )
    assert np.isnan(selector.selection_probability_[0])
    assert selector.claim_.candidates == 24


# --- calibration and claim --------------------------------------------------------------------


@pytest.mark.parametrize("bound", ["worst_case", "unimodal", "r_concave"])
def test_the_stated_bound_is_that_of_error_control(bound):
    X, y = make_data(n=100, p=60)
    selector = StabilitySelector(bound=bound, pfer=2.0, n_pairs=20, random_state=0).fit(X, y)
    q, tau = selector.features_per_fit_, selector.threshold_
    claim = selector.claim_
    assert claim.bound == expected_false_selections(bound, q, 60, tau, 20) <= 2.0
    assert claim.target == 2.0
    assert f"{q}/60" in claim.measure
    if bound != "worst_case":
        assert list(claim.other_bounds.values()) == [worst_case_bound(q, 60, tau)]
        assert claim.other_bounds["worst case over all laws"] > claim.bound
    else:
        assert claim.other_bounds == {}
    text = str(claim)
    assert "no groups were given" in text
    assert "stands in for a correlated true one" in text
    assert set(claim.selected) == {f"x{j}" for j in np.flatnonzero(selector.selected_)}


def test_calibration_does_not_look_at_the_outcome():
    X, y = make_data(n=41, p=300)
    rng = np.random.default_rng(0)
    settings = set()
    for outcome in (y, rng.permutation(y), rng.standard_normal(41), np.ones(41)):
        selector = StabilitySelector(n_pairs=4, covariates=[0, 1], random_state=0).fit(X, outcome)
        settings.add(selector.calibration_)
    # Halves of 20 rows, less one for the intercept and two covariates: four fifths of 17.
    assert settings == {calibrate(1.0, 298, 13, 4)}


def test_log_loss_is_limited_by_the_rarer_class():
    rng = np.random.default_rng(0)
    X = rng.standard_normal((60, 2000))
    y = np.arange(60) < 15
    selector = StabilitySelector(n_pairs=3, pfer=30, random_state=0).fit(X, y)
    # Seven rows of the rarer class in a half: four fifths of 7.
    assert selector.features_per_fit_ == 5
    assert selector.calibration_.capped


def test_an_empty_list_says_why_and_what_would_have_filled_it():
    rng = np.random.default_rng(1)
    X, y = rng.standard_normal((50, 200)), rng.standard_normal(50)
    selector = StabilitySelector(pfer=0.5, random_state=0).fit(X, y)
    assert not selector.selected_.any()
    largest = np.nanmax(selector.selection_probability_)
    assert f"{largest:.3g}" in selector.claim_.empty_reason
    assert "selected none of 200 candidate features" in str(selector.claim_)


def test_a_target_out_of_reach_names_the_nearest():
    X, y = make_data()
    with pytest.raises(ValueError, match=r"pfer=0.001 cannot be met .* nearest target"):
        StabilitySelector(pfer=0.001, bound="worst_case").fit(X, y)
    with pytest.raises(ValueError, match=r"largest features_per_fit for this pfer"):
        StabilitySelector(pfer=0.5, features_per_fit=20, threshold=0.8).fit(X, y)


def test_selection_is_counted_in_whole_votes():
    # 0.7 * 100 is 70.00000000000001 in floating point; 70 votes of 100 must pass 0.7.
    X, y = make_data()
    selector = StabilitySelector(threshold=0.7, pfer=30, random_state=0).fit(X, y)
    counts = np.rint(selector.selection_probability_ * 100)
    np.testing.assert_array_equal(selector.selected_, counts >= 70)


# --- other estimators -------------------------------------------------------------------------


def test_first_units():
    importance = np.array([0.5, 2.0, 0.0, 2.0, 1.0, 3.0])
    unit_of = np.array([0, 1, 2, 0, 3, -1])
    np.testing.assert_array_equal(_first_units(importance, unit_of, 2), [1, 0])
    np.testing.assert_array_equal(_first_units(importance, unit_of, 5), [1, 0, 3, -1, -1])


@pytest.mark.parametrize("standardize", [True, False])
def test_an_estimator_with_coefficients(standardize):
    X, y = make_data()
    weight = np.random.default_rng(3).uniform(0.3, 2, len(y))
    selector = StabilitySelector(
        estimator=Ridge(),
        features_per_fit=3,
        pfer=5,
        n_pairs=6,
        standardize=standardize,
        covariates=[0],
        penalty_weights={5: np.inf},
        random_state=0,
    ).fit(X, y, sample_weight=weight)
    data = selector._prepare(X, y, weight, None)
    used = np.setdiff1d(np.arange(25), [5])
    for half, picks in zip(selector._halves(data), selector._picks, strict=True):
        Z, w = X[half][:, used], weight[half]
        size = np.abs(Ridge().fit(Z, y[half], sample_weight=w).coef_)
        if standardize:
            size *= np.sqrt(
                np.average((Z - np.average(Z, axis=0, weights=w)) ** 2, axis=0, weights=w)
            )
        ranked = [j for j in used[np.argsort(-size)] if j != 0][:3]
        np.testing.assert_array_equal(picks, data.columns.unit_of[ranked])
    assert "ranked the columns by Ridge" in str(selector.claim_)


@pytest.mark.parametrize("forest", [RandomForestRegressor, RandomForestClassifier])
def test_a_forest_ranks_by_its_importances(forest):
    X, y = make_classes(p=10) if forest is RandomForestClassifier else make_data(p=10)
    estimator = forest(n_estimators=5, max_depth=2)
    selector = StabilitySelector(
        estimator=estimator, features_per_fit=2, pfer=5, n_pairs=3, random_state=4
    )
    first = selector.fit(X, y)._picks.copy()
    halves = selector._halves(selector._prepare(X, y, None, None))
    for half, stream, picks in zip(halves, spawn(4, 6, 2), first, strict=True):
        seed = np.random.default_rng(int(stream.integers(2**31))).integers(2**31)
        model = clone(estimator).set_params(random_state=int(seed)).fit(X[half], y[half])
        np.testing.assert_array_equal(picks, np.argsort(-model.feature_importances_)[:2])
    np.testing.assert_array_equal(selector.set_params(n_jobs=2).fit(X, y)._picks, first)
    assert not np.array_equal(selector.set_params(random_state=5).fit(X, y)._picks, first)


class Counting(RegressorMixin, BaseEstimator):
    """Ranks columns by absolute covariance, and counts its fits."""

    fits = 0

    def fit(self, X, y):
        type(self).fits += 1
        self.coef_ = (X - X.mean(axis=0)).T @ y
        return self


def test_a_change_of_the_target_uses_the_same_fits(tmp_path):
    X, y = make_data()
    keywords = {"estimator": Counting(), "n_pairs": 5, "random_state": 0, "memory": str(tmp_path)}
    Counting.fits = 0
    first = StabilitySelector(features_per_fit=3, pfer=5, **keywords).fit(X, y)
    assert Counting.fits == 10
    other = StabilitySelector(features_per_fit=3, pfer=9, bound="worst_case", **keywords).fit(X, y)
    third = StabilitySelector(features_per_fit=3, pfer=9, threshold=0.9, **keywords).fit(X, y)
    assert Counting.fits == 10
    np.testing.assert_array_equal(other.selection_probability_, first.selection_probability_)
    assert third.threshold_ == 0.9
    StabilitySelector(features_per_fit=4, pfer=9, **keywords).fit(X, y)
    assert Counting.fits == 20
    StabilitySelector(features_per_fit=3, pfer=9, **keywords).fit(X, y + X[:, 3])
    assert Counting.fits == 30


@pytest.mark.parametrize("selector_class", [StabilitySelector, RandomizedLassoSelector])
def test_fits_of_the_engine_are_kept(selector_class, tmp_path):
    X, y = make_data()
    keywords = {"features_per_fit": 3, "n_pairs": 5, "random_state": 0, "memory": str(tmp_path)}
    first = selector_class(pfer=5, **keywords).fit(X, y)
    kept = sorted(path for path in tmp_path.rglob("*") if path.is_file())
    assert kept
    times = [path.stat().st_mtime_ns for path in kept]
    second = selector_class(pfer=8, threshold=0.9, **keywords).fit(X, y)
    assert sorted(path for path in tmp_path.rglob("*") if path.is_file()) == kept
    assert [path.stat().st_mtime_ns for path in kept] == times
    np.testing.assert_array_equal(first._picks, second._picks)
    selector_class(pfer=5, **{**keywords, "random_state": 1}).fit(X, y)
    assert len([path for path in tmp_path.rglob("*") if path.is_file()]) > len(kept)


class WithoutImportances(RegressorMixin, BaseEstimator):
    def fit(self, X, y):
        return self


@pytest.mark.parametrize(
    ("estimator", "keywords", "said"),
    [
        (WithoutImportances(), {}, ["neither coef_ nor feature_importances_", "estimator=None"]),
        (KNeighborsRegressor(), {"weights": True}, ["does not take it", "without weights"]),
        (Ridge(), {"penalty_weights": {0: 2.0}}, ["finite weights other than 1", "Ridge"]),
        (RandomForestClassifier(), {}, ["is a classifier", "log_loss", "Use a regressor"]),
    ],
)
def test_estimators_that_cannot_rank(estimator, keywords, said):
    X, y = make_data()
    weight = np.ones(60) if keywords.pop("weights", False) else None
    with pytest.raises(ValueError) as error:
        StabilitySelector(estimator=estimator, n_pairs=2, **keywords).fit(
            X, y, sample_weight=weight
        )
    for part in said:
        assert part in str(error.value)


def test_tags_follow_the_estimator():
    tags = StabilitySelector().__sklearn_tags__().input_tags
    assert tags.sparse and not tags.allow_nan
    forest = StabilitySelector(estimator=RandomForestRegressor(n_estimators=3))
    assert forest.__sklearn_tags__().input_tags.allow_nan
    X, y = make_data()
    X[3, 4] = np.nan
    forest.set_params(n_pairs=2, random_state=0).fit(X, y).transform(X)
    lasso = StabilitySelector(estimator=Lasso(), n_pairs=2)
    with pytest.raises(ValueError, match="X contains NaN"):
        lasso.fit(X, y)
    sparse_half = StabilitySelector(estimator=Lasso(0.01), n_pairs=3, random_state=0)
    X, y = make_data()
    dense = sparse_half.fit(X, y).selection_probability_.copy()
    np.testing.assert_array_equal(
        sparse_half.fit(sparse.csc_array(X), y).selection_probability_, dense
    )


# --- the same bits ----------------------------------------------------------------------------


@pytest.mark.parametrize("selector_class", [StabilitySelector, RandomizedLassoSelector])
def test_results_do_not_depend_on_workers(selector_class):
    X, y = make_data(n=80, p=300)
    selector = selector_class(n_pairs=20, random_state=0)
    one = selector.fit(X, y)._picks.copy()
    for backend in ("threading", "loky"):
        with joblib.parallel_config(backend, n_jobs=2):
            np.testing.assert_array_equal(selector.fit(X, y)._picks, one)
    np.testing.assert_array_equal(selector.set_params(n_jobs=2).fit(X, y)._picks, one)


def test_permuted_columns_give_the_same_named_features():
    X, y = make_data()
    order = np.random.default_rng(9).permutation(25)
    selector = StabilitySelector(n_pairs=10, random_state=0)
    expected = selector.fit(X, y).selection_probability_.copy()
    np.testing.assert_array_equal(
        selector.fit(X[:, order], y).selection_probability_, expected[order]
    )


def test_seeds():
    X, y = make_data()
    selector = StabilitySelector(n_pairs=5).fit(X, y)
    again = StabilitySelector(n_pairs=5, random_state=selector.seed_).fit(X, y)
    np.testing.assert_array_equal(again._picks, selector._picks)
    assert again.seed_ == selector.seed_ and isinstance(selector.seed_, int)
    source = np.random.RandomState(0)
    moving = StabilitySelector(n_pairs=5, random_state=source)
    assert moving.fit(X, y).seed_ != moving.fit(X, y).seed_


# --- restated problems ------------------------------------------------------------------------


@pytest.mark.parametrize("make", [make_data, make_classes])
@pytest.mark.parametrize("selector_class", [StabilitySelector, RandomizedLassoSelector])
def test_stated_problems_are_those_of_the_fit(selector_class, make):
    X, y = make()
    weight = np.random.default_rng(1).uniform(0.5, 2, len(y))
    groups = np.arange(len(y)) // 2
    selector = selector_class(n_pairs=3, covariates=[4], random_state=0)
    selector.fit(X, y, sample_weight=weight, groups=groups)
    stated = selector._stated_problems(X, y, weight, groups)
    assert [problem.label for problem in stated][:2] == ["pair 1, half A", "pair 1, half B"]
    data = selector._prepare(X, y, weight, groups)
    halves = selector._halves(data)
    for half, picks, problem in zip(halves, selector._picks, stated, strict=True):
        np.testing.assert_array_equal(problem.problems.sample_weight[0], half * weight)
        picked = np.flatnonzero(data.columns.candidates)[picks[picks >= 0]]
        # A column can enter and leave again before the path ends; nearly all are still there.
        assert np.count_nonzero(problem.coef[picked]) >= 0.8 * len(picked)
        alone = solve_bank(as_design(X), problem.problems, [problem.alpha], tol=1e-9)
        np.testing.assert_allclose(alone.coef[0].toarray()[0], problem.coef, rtol=0.02, atol=1e-3)


def test_problems_cannot_be_stated_on_another_table():
    X, y = make_data()
    selector = StabilitySelector(n_pairs=5, random_state=0).fit(X, y)
    with pytest.raises(ValueError, match="only on the very table"):
        selector._stated_problems(X, np.random.default_rng(0).permutation(y))
    forest = StabilitySelector(estimator=Ridge(), n_pairs=2).fit(X, y)
    with pytest.raises(ValueError, match="ranked by Ridge, not by the engine"):
        forest._stated_problems(X, y)


# --- failures and noise -----------------------------------------------------------------------


def test_failures_are_named_once():
    X, y = make_data()
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        StabilitySelector(n_pairs=3, max_iter=1, tol=1e-14, random_state=0).fit(X, y)
    failures = [w for w in caught if issubclass(w.category, ConvergenceWarning)]
    assert len(failures) == 1


@pytest.mark.statistical
@pytest.mark.parametrize("selector_class", [StabilitySelector, RandomizedLassoSelector])
@pytest.mark.parametrize("loss", ["squared_error", "log_loss"])
def test_false_selections_on_noise_are_within_the_bound(selector_class, loss):
    counts = []
    for rng in np.random.default_rng(11).spawn(200):
        X = rng.standard_normal((60, 200))
        y = rng.standard_normal(60) if loss == "squared_error" else rng.random(60) < 0.5
        selector = selector_class(random_state=rng).fit(X, y)
        counts.append(selector.selected_.sum())
    error = np.std(counts, ddof=1) / math.sqrt(len(counts))
    assert np.mean(counts) <= selector.claim_.bound + 3 * error


def test_a_few_noisy_tables_select_hardly_anything():
    counts = []
    for rng in np.random.default_rng(12).spawn(12):
        X, y = rng.standard_normal((60, 100)), rng.standard_normal(60)
        counts.append(StabilitySelector(n_pairs=20, random_state=rng).fit(X, y).selected_.sum())
    error = np.std(counts, ddof=1) / math.sqrt(12)
    assert np.mean(counts) <= 1.0 + 3 * error
