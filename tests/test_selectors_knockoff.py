"""The knockoff selector: what it computes, on which rows and copies, what it claims and refuses."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Any

import joblib
import numpy as np
import pandas as pd
import pytest
from scipy import sparse
from sklearn.ensemble import RandomForestClassifier, RandomForestRegressor
from sklearn.exceptions import ConvergenceWarning
from sklearn.linear_model import Ridge

import sparsesel.selectors.knockoff as module
from sparsesel.claim import State
from sparsesel.error_control import (
    derandomized_selection,
    knockoff_e_values,
    knockoff_threshold,
    negatives_for_kfwer,
    selection_frequency,
    stopping_threshold,
)
from sparsesel.knockoffs import CopulaModel, FixedXModel, GaussianModel, PairedTable
from sparsesel.knockoffs.importances import EntryPoint, ImportanceProblem, measure_contrasts
from sparsesel.selectors import KnockoffSelector
from sparsesel.tasks import spawn


def make_data(n=120, p=20, n_true=6, seed=0):
    generator = np.random.default_rng(seed)
    X = generator.standard_normal((n, p))
    y = X[:, :n_true].sum(axis=1) + generator.standard_normal(n)
    return X, y


def fitted(X, y, sample_weight=None, groups=None, **parameters):
    selector = KnockoffSelector(**{"random_state": 0, **parameters})
    return selector.fit(X, y, sample_weight, groups=groups)


def message_of(X, y, groups=None, **parameters):
    with pytest.raises(ValueError) as error:
        fitted(X, y, groups=groups, **parameters)
    return str(error.value)


def note(selector, part):
    (found,) = [text for text in selector.claim_.notes if part in text]
    return found


def stated(selector, part):
    (found,) = [a for a in selector.claim_.assumptions if part in a.statement]
    return found


# --- what it computes -------------------------------------------------------------------------


def test_a_fit_is_a_draw_its_contrasts_and_the_filter():
    """By hand from the seed: the model's copies, the importance, the threshold."""
    X, y = make_data()
    selector = fitted(X, y, feature_model="gaussian", importance="entry", random_state=3)
    model = GaussianModel().fit(X)
    stream = spawn(selector.seed_, 1, module._DRAWS)[0]
    table = model.draw(X, y, stream)
    problem = ImportanceProblem(
        table, "squared_error", model.has_copy, np.arange(20), penalty_weights=np.ones(20)
    )
    contrast = measure_contrasts(EntryPoint(), problem, stream).contrast
    np.testing.assert_array_equal(selector.contrast_, contrast)
    threshold = knockoff_threshold(contrast, 0.2)
    assert selector.threshold_ == threshold
    np.testing.assert_array_equal(selector.selected_, contrast >= threshold)
    assert selector.selected_[:6].all() and selector.selected_.sum() <= 8
    np.testing.assert_array_equal(selector.s_vector_, model.s)
    np.testing.assert_array_equal(selector.get_support(), selector.selected_)
    assert set(selector.units_) == {"unit", "members", "selected", "contrast"}
    assert not hasattr(selector, "selection_probability_")


@pytest.mark.parametrize("plus", [True, False])
@pytest.mark.parametrize("fdr", [0.1, 0.5])
def test_one_draw_at_a_false_discovery_rate(fdr, plus):
    selector = fitted(*make_data(), fdr=fdr, plus=plus)
    threshold = knockoff_threshold(selector.contrast_, fdr, plus)
    np.testing.assert_array_equal(selector.selected_, selector.contrast_ >= threshold)
    claim = selector.claim_
    assert claim.target == claim.bound == fdr and claim.scale == "share"
    assert ("modified" in claim.measure) != plus
    assert ("knockoff+" in claim.method) == plus


def test_draws_combined_by_e_values():
    X, y = make_data(p=40, n_true=12, n=200)
    selector = fitted(X, y, n_draws=6)
    contrasts = selector._contrasts
    assert contrasts.shape == (6, 40) and len(np.unique(contrasts[:, 0])) == 6
    np.testing.assert_array_equal(selector.contrast_, contrasts.mean(axis=0))
    np.testing.assert_array_equal(selector.e_value_, knockoff_e_values(contrasts, 0.1))
    expected = derandomized_selection(contrasts, 0.2)
    np.testing.assert_array_equal(selector.selected_, expected)
    assert expected[:12].all()
    assert selector.threshold_ == 40 / (0.2 * expected.sum())
    np.testing.assert_array_equal(selector.selected_, selector.e_value_ >= selector.threshold_)
    lists = [contrast >= knockoff_threshold(contrast, 0.1) for contrast in contrasts]
    np.testing.assert_array_equal(selector.selection_probability_, np.mean(lists, axis=0))
    assert "6 draws" in selector.claim_.method and "e-values" in selector.claim_.method
    assert selector.claim_.bound == 0.2
    single = selector.set_params(n_draws=1).fit(X, y)
    assert not hasattr(single, "e_value_") and not hasattr(single, "selection_probability_")


def test_draws_combined_by_frequency():
    selector = fitted(*make_data(), pfer=2, n_draws=5)
    shares = selection_frequency(selector._contrasts, 2)
    np.testing.assert_array_equal(selector.selection_probability_, shares)
    np.testing.assert_array_equal(selector.selected_, shares >= 0.5)
    assert selector.threshold_ == 0.5 and not hasattr(selector, "e_value_")
    claim = selector.claim_
    assert claim.bound == 2 and claim.scale == "count"
    # Markov's inequality: three of five votes.
    assert claim.other_bounds == {"without the assumption on frequencies": 2 * 5 / 3}
    assert stated(selector, "law of its frequency").state is State.UNCHECKED


def test_one_draw_at_an_expected_number_of_false_selections():
    selector = fitted(*make_data(), pfer=2)
    threshold = stopping_threshold(selector.contrast_, 2)
    assert selector.threshold_ == threshold
    np.testing.assert_array_equal(selector.selected_, selector.contrast_ >= threshold)
    assert "number 2" in note(selector, "closes at")
    assert "PFER" in selector.claim_.measure


def test_a_target_between_two_whole_numbers_is_drawn():
    """k-FWER (2, 0.1) stops at negative 0.4 on average: at the first in two of five fits."""
    X, y = make_data(n=60, p=8, n_true=3)
    assert negatives_for_kfwer(2, 0.1) == pytest.approx(0.4)
    texts = [
        note(fitted(X, y, k_fwer=(2, 0.1), importance="marginal", random_state=seed), "closes at")
        for seed in range(100)
    ]
    count = sum("number 1" in text for text in texts)
    assert 25 <= count <= 55  # binomial(100, 0.4): three standard deviations
    assert all("number 1" in text or "number 0" in text for text in texts)
    assert "mean 0.4" in texts[0]


def test_a_target_of_k_false_selections():
    selector = fitted(*make_data(), k_fwer=(1, 0.5))  # stops at the first negative, exactly
    threshold = stopping_threshold(selector.contrast_, 1)
    np.testing.assert_array_equal(selector.selected_, selector.contrast_ >= threshold)
    claim = selector.claim_
    assert claim.bound == 0.5 and claim.scale == "probability" and "k = 1" in claim.method


@pytest.mark.parametrize(
    ("parameters", "said"),
    [
        ({"pfer": 1, "k_fwer": (1, 0.1)}, ["both", "One target", "None"]),
        ({"k_fwer": (2, 0.1), "n_draws": 5}, ["one draw", "n_draws=1", "pfer=0.2"]),
        ({"k_fwer": (0, 0.1)}, ["pair (k, level)", "(1, 0.1)"]),
        ({"k_fwer": (1, 2.0)}, ["pair (k, level)", "between 0 and 1"]),
        ({"k_fwer": (1,)}, ["pair (k, level)"]),
        ({"plus": False, "n_draws": 5}, ["knockoff+", "plus=True", "n_draws=1"]),
        ({"feature_model": GaussianModel(), "s_vector": "sdp"}, ["GaussianModel", "'auto'"]),
    ],
)
def test_parameters_that_contradict_each_other(parameters, said):
    message = message_of(*make_data(), **parameters)
    for part in said:
        assert part in message


@pytest.mark.parametrize("loss", ["squared_error", "log_loss"])
@pytest.mark.parametrize("importance", ["lasso", "entry", "ridge", "elastic_net", "marginal"])
def test_every_importance_finds_strong_features(importance, loss):
    X, y = make_data(n=400)
    y = y if loss == "squared_error" else np.where(y > 0, "high", "low")
    selector = fitted(X, y, importance=importance)
    assert selector.loss_ == loss
    assert selector.contrast_[:6].min() > selector.contrast_[6:].max()
    assert selector.selected_[:6].all()
    assert selector.n_iter_ >= 1


@pytest.mark.parametrize(
    ("estimator", "loss"),
    [
        (RandomForestRegressor(n_estimators=30), "squared_error"),
        (RandomForestClassifier(n_estimators=30), "log_loss"),
        (Ridge(), "squared_error"),
    ],
    ids=lambda value: type(value).__name__,
)
def test_importances_of_an_estimator(estimator, loss):
    X, y = make_data(n=300, p=12)
    selector = fitted(X, y if loss == "squared_error" else y > 0, importance=estimator)
    assert selector.selected_[:6].sum() >= 5
    assert type(estimator).__name__ in note(selector, "the contrast is")
    # A rotation of the rows would make a table of nothing but noise of it for a forest.
    assert isinstance(selector.feature_model_, GaussianModel)


# --- which copies -----------------------------------------------------------------------------


def with_few_values(X):
    X = X.copy()
    X[:, 0] = X[:, 0] > 0
    return X


def collinear(X):
    X = X.copy()
    X[:, 4] = X[:, 5] + X[:, 6]
    return X


@pytest.mark.parametrize(
    ("n", "change", "parameters", "expected"),
    [
        (41, None, {}, FixedXModel("mvr", add_rows=False)),
        (40, None, {}, GaussianModel()),
        (41, None, {"covariates": [19]}, FixedXModel("mvr", add_rows=False)),  # 2 * 19 + 1 + 1
        (39, None, {"covariates": [19]}, GaussianModel()),
        (41, with_few_values, {}, FixedXModel("mvr", add_rows=False)),
        (40, with_few_values, {}, CopulaModel()),
        (60, collinear, {}, GaussianModel()),
        (60, None, {"importance": Ridge()}, GaussianModel()),
        (60, None, {"s_vector": "sdp"}, FixedXModel("sdp", add_rows=False)),
        (40, None, {"s_vector": "max_entropy"}, GaussianModel(s_vector="max_entropy")),
        (40, None, {"feature_model": "fixed_x"}, FixedXModel()),
        (60, None, {"feature_model": "gaussian"}, GaussianModel()),
        (60, None, {"feature_model": "copula", "s_vector": "sdp"}, CopulaModel(s_vector="sdp")),
        (60, None, {"feature_model": GaussianModel("oas")}, GaussianModel("oas")),
    ],
)
def test_the_feature_model(n, change, parameters, expected):
    X, y = make_data(n=n)
    X = X if change is None else change(X)
    assert fitted(X, y, **parameters).feature_model_ == expected


def test_classes_have_no_fixed_x_copies():
    X, y = make_data()
    assert isinstance(fitted(X, y > 0).feature_model_, GaussianModel)
    message = message_of(X, y > 0, feature_model="fixed_x")
    for part in ("'fixed_x' with loss 'log_loss'", "squared error", "'copula'"):
        assert part in message


def test_a_known_covariance_of_candidates_and_covariates():
    """In the order of the table, candidates first; a wrong size is refused."""
    generator = np.random.default_rng(0)
    root = np.tril(generator.uniform(0.2, 1, (8, 8)))
    X = generator.standard_normal((100, 8)) @ root.T
    y = X[:, 0] + generator.standard_normal(100)
    order = [0, 1, 2, 4, 5, 6, 7, 3]
    known = (root @ root.T)[np.ix_(order, order)]
    parameters = dict(covariates=[3], importance="marginal", pfer=1)
    selector = fitted(X, y, feature_model=GaussianModel(known), **parameters)
    slope = np.linalg.solve(known[7:, 7:], known[7:, :7])
    given = known[:7, :7] - known[:7, 7:] @ slope
    deviation = np.sqrt(np.diag(given))
    s = module.GaussianModel(given / deviation / deviation[:, None]).fit(X[:, :7]).s
    np.testing.assert_allclose(selector.s_vector_[order[:7]], s, atol=1e-6)
    assert np.isnan(selector.s_vector_[3])
    assert "(7, 7)" in message_of(X, y, feature_model=GaussianModel(known[:7, :7]), **parameters)


@dataclass(frozen=True)
class PermutedRows:
    """Copies by permuting rows, for independent columns."""

    def fit(self, X, *, covariates=None, sample_weight=None, feature_groups=None):
        return self

    @property
    def has_copy(self):
        return np.ones(20, dtype=bool)

    @property
    def s(self):
        return np.ones(20)

    def draw(self, X, y, generator, *, covariates=None, sample_weight=None):
        return PairedTable(X, generator.permuted(X, axis=0), y, covariates, sample_weight)

    def assumptions(self):
        return (("the columns are independent", "can't be checked from the data", ""),)


def test_a_model_of_ones_own():
    X, y = make_data()
    selector = fitted(X, y, feature_model=PermutedRows())
    assert selector.selected_[:6].all()
    assert "those of PermutedRows" in note(selector, "Copies are")
    assert stated(selector, "the columns are independent").state is State.UNCHECKED


# --- columns ----------------------------------------------------------------------------------


def test_covariates_and_columns_left_out_are_not_candidates():
    X, y = make_data()
    weights = np.ones(20)
    weights[9] = np.inf
    selector = fitted(X, y, covariates=[0, 1], penalty_weights=weights)
    np.testing.assert_array_equal(np.isnan(selector.contrast_), np.isin(np.arange(20), [0, 1, 9]))
    np.testing.assert_array_equal(np.isnan(selector.s_vector_), np.isin(np.arange(20), [0, 1, 9]))
    assert selector.claim_.candidates == 17
    assert selector.get_support()[:2].all() and not selector.selected_[:2].any()
    assert "2 covariates" in note(selector, "covariates")
    # They are not copied, but they are in every regression.
    np.testing.assert_array_equal(selector._stated_problems(X, y)[0].design.shape, (120, 2 + 34))


def test_feature_groups_are_selected_as_a_whole():
    X, y = make_data(n=200, p=30)
    y = X[:, [0, 4, 8, 13, 16, 19]].sum(axis=1) + np.random.default_rng(1).standard_normal(200)
    labels = np.arange(30) // 3
    selector = fitted(X, y, feature_groups=labels)
    assert selector.claim_.unit == "feature group" and selector.claim_.candidates == 10
    np.testing.assert_array_equal(selector.selected_, np.repeat(selector.units_["selected"], 3))
    np.testing.assert_array_equal(selector.units_["selected"][:6], [1, 1, 1, 0, 1, 1])
    assert selector.contrast_.shape == (30,)
    alone = fitted(X, y, feature_groups=np.arange(30))
    np.testing.assert_array_equal(alone.contrast_, fitted(X, y).contrast_)


def test_columns_next_to_their_copies_are_named_with_the_remedy():
    X, y = make_data()
    X[:, 7] = X[:, 3] + 0.01 * X[:, 7]
    selector = fitted(X, y, s_vector="sdp")
    frame = pd.DataFrame(X, columns=[f"gene_{j}" for j in range(20)])
    assert "{x3, x7}" in note(selector, "next to no power")
    assert "feature_groups" in note(selector, "next to no power")
    named = fitted(frame, y, s_vector="sdp")
    assert "{gene_3, gene_7}" in note(named, "next to no power")
    # It costs power and not validity: the claim stands.
    assert selector.claim_.guaranteed
    grouped = fitted(X, y, s_vector="sdp", feature_groups={3: "pair", 7: "pair"})
    assert not any("next to no power" in text for text in grouped.claim_.notes)


def test_columns_without_a_copy_have_contrast_zero():
    X, y = make_data()
    X[:, 8], X[:, 9], X[:, 11] = 1.0, X[:, 10], X[:, 19]
    selector = fitted(X, y, covariates=[19])
    np.testing.assert_array_equal(selector.contrast_[8:12], 0.0)
    np.testing.assert_array_equal(selector.s_vector_[8:12], 0.0)
    assert "4 columns" in note(selector, "Without a copy")
    assert selector.selected_[:6].all()


# --- rows -------------------------------------------------------------------------------------


def repeated_rows(size=3, seed=1):
    """Groups of rows around a row of their own, with its outcome."""
    X, y = make_data()
    groups = np.random.default_rng(seed).permutation(np.repeat(np.arange(120), size))
    noise = np.random.default_rng(seed).standard_normal((len(groups), 20))
    return X[groups] + noise, y[groups], groups


@pytest.mark.parametrize("feature_model", ["fixed_x", "gaussian"])
def test_groups_of_one_size_become_their_mean_rows(feature_model):
    X, y, groups = repeated_rows()
    selector = fitted(X, y, groups=groups, feature_model=feature_model, covariates=[19])
    labels, first = np.unique(groups, return_index=True)
    order = np.argsort(first)  # groups are numbered by their first row
    means = np.array([X[groups == label].mean(axis=0) for label in labels[order]])
    by_hand = fitted(means, y[first[order]], feature_model=feature_model, covariates=[19])
    np.testing.assert_allclose(selector.contrast_, by_hand.contrast_, atol=1e-6)
    np.testing.assert_array_equal(selector.selected_, by_hand.selected_)
    assert "120 groups of 3 rows" in stated(selector, "rows are independent").detail


@pytest.mark.parametrize("why", ["sizes", "weights"])
def test_other_groups_become_one_of_their_rows(why):
    X, y, groups = repeated_rows()
    weight = None
    if why == "sizes":
        X, y, groups = X[1:], y[1:], groups[1:]
    else:
        weight = np.linspace(1, 2, len(y))
    gaussian = fitted(X, y, weight, groups, feature_model="gaussian")
    (problem,) = gaussian._stated_problems(X, y, weight, groups)
    # Every row of the widened table holds the features of one row of the table, of its own group.
    assert problem.design.shape == (120, 40)
    used = [np.flatnonzero(np.isin(X, row).all(axis=1)) for row in problem.design]
    assert all(len(rows) == 1 for rows in used)
    assert len({groups[rows[0]] for rows in used}) == 120
    assert "one row of each, drawn at random" in stated(gaussian, "rows are independent").detail


def test_groups_of_single_rows_change_nothing():
    X, y = make_data()
    one, without = fitted(X, y, groups=np.arange(120)[::-1]), fitted(X, y)
    np.testing.assert_array_equal(one.contrast_, without.contrast_)
    assert "every group is one row" in stated(one, "rows are independent").detail
    assert "no groups were given" in stated(without, "rows are independent").detail


def test_an_outcome_that_varies_within_groups_is_refused():
    X, y, groups = repeated_rows()
    y[groups == 7] += [0, 0, 1]
    message = message_of(X, y, groups)
    for part in ("1 of 120 groups", "constant within each", "average", "StabilitySelector"):
        assert part in message
    classes = np.where(y > 0, "a", "b")
    classes[np.flatnonzero(groups == 7)] = ["a", "b", "a"]
    assert "1 of 120 groups" in message_of(X, classes, groups)


@pytest.mark.parametrize("feature_model", ["fixed_x", "gaussian", "copula"])
def test_rows_of_weight_zero_are_absent(feature_model):
    X, y = make_data()
    weight = np.where(np.arange(120) % 5, 1.0, 0.0)
    rows = weight > 0
    groups = np.arange(120)
    with_zeros = fitted(X, y, weight, groups, feature_model=feature_model)
    without = fitted(X[rows], y[rows], weight[rows], groups[rows], feature_model=feature_model)
    np.testing.assert_array_equal(with_zeros.contrast_, without.contrast_)


def test_weights_matter():
    X, y = make_data()
    weight = np.random.default_rng(0).uniform(0.1, 2, 120)
    for feature_model in ("fixed_x", "gaussian"):
        plain, weighted = (
            fitted(X, y, given, feature_model=feature_model) for given in (None, weight)
        )
        assert not np.allclose(plain.contrast_, weighted.contrast_, atol=1e-3)
        scaled = fitted(X, y, 4 * weight, feature_model=feature_model)
        np.testing.assert_allclose(scaled.contrast_, weighted.contrast_, atol=1e-6)
        assert weighted.selected_[:6].all()


# --- tables -----------------------------------------------------------------------------------


@pytest.mark.parametrize("container", [sparse.csr_array, sparse.csc_array, sparse.csc_matrix])
def test_a_sparse_table_is_the_same_fit(container):
    X, y = make_data()
    X = np.where(np.abs(X) < 0.5, 0, X)
    dense = fitted(X, y, covariates=[3])
    thin = fitted(container(X), y, covariates=[3])
    np.testing.assert_allclose(thin.contrast_, dense.contrast_, atol=1e-9)
    assert sparse.issparse(thin.transform(container(X)))


def test_single_precision():
    X, y = make_data()
    double = fitted(X, y, feature_model="gaussian")
    single = fitted(X.astype(np.float32), y, feature_model="gaussian")
    assert single._stated_problems(X.astype(np.float32), y)[0].design.dtype == np.float32
    np.testing.assert_allclose(single.contrast_, double.contrast_, atol=1e-2)
    assert single.transform(X.astype(np.float32)).dtype == np.float32


# --- the seed, workers and memory -------------------------------------------------------------


def test_the_seed_decides_and_draws_are_told_apart():
    X, y = make_data()
    one, again, other = (fitted(X, y, random_state=seed).contrast_ for seed in (1, 1, 2))
    np.testing.assert_array_equal(one, again)
    assert not np.array_equal(one, other)
    few, many = fitted(X, y, n_draws=2)._contrasts, fitted(X, y, n_draws=4)._contrasts
    np.testing.assert_array_equal(few, many[:2])


@pytest.mark.parametrize("importance", ["lasso", RandomForestRegressor(n_estimators=5)])
def test_the_same_bits_with_two_threads(importance):
    X, y = make_data()
    parameters = dict(n_draws=3, pfer=1, importance=importance)
    one = fitted(X, y, **parameters)
    with joblib.parallel_config("threading", n_jobs=2):
        np.testing.assert_array_equal(fitted(X, y, **parameters)._contrasts, one._contrasts)


def test_a_change_of_target_or_more_draws_reuse_the_draws(tmp_path, monkeypatch):
    X, y = make_data(p=40, n_true=12, n=200)
    measured = []

    def counted(draw, generator):
        measured.append(1)
        return original(draw, generator)

    original = module._contrasts_only
    monkeypatch.setattr(module, "_contrasts_only", counted)
    parameters = dict(memory=tmp_path, n_draws=3)
    first = fitted(X, y, **parameters)
    assert len(measured) == 3
    second = fitted(X, y, **{**parameters, "fdr": 0.3})
    third = fitted(X, y, **{**parameters, "pfer": 1.0, "n_draws": 5})
    assert len(measured) == 5
    np.testing.assert_array_equal(first._contrasts, second._contrasts)
    np.testing.assert_array_equal(first._contrasts, third._contrasts[:3])
    fitted(X, y, **{**parameters, "importance": "entry"})
    fitted(X, y, **{**parameters, "s_vector": "sdp"})
    fitted(X, y, **{**parameters, "feature_model": "gaussian"})
    fitted(X, y, **{**parameters, "tol": 1e-6})
    assert len(measured) == 17


def test_failures_of_all_draws_are_one_warning():
    X, y = make_data()
    with pytest.warns(ConvergenceWarning, match=r"solves ended .* duality gap of 1e-14") as caught:
        fitted(X, y, n_draws=3, pfer=1, max_iter=1, tol=1e-14)
    assert len(caught) == 1


# --- what it claims ---------------------------------------------------------------------------


def test_too_few_candidates_are_said_before_anything_is_fitted(monkeypatch):
    X, y = make_data(p=4, n_true=2)

    def stop(*arguments):
        raise AssertionError("fitted")

    monkeypatch.setattr(module, "_independent_rows", stop)
    cases = [
        ({}, 5, ["4 candidate features", "fdr=0.2", "at least 5", "pfer=1.0 with n_draws=31"]),
        ({"fdr": 0.3, "n_draws": 2}, 7, ["fdr=0.3", "at least 7", "with several draws"]),
        ({"feature_groups": [0, 0, 1, 1], "fdr": 0.4}, 3, ["2 candidate feature groups"]),
    ]
    for parameters, _, said in cases:
        with pytest.warns(UserWarning, match="nothing can be selected") as caught:
            with pytest.raises(AssertionError, match="fitted"):
                fitted(X, y, **parameters)
        for part in said:
            assert part in str(caught[0].message)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for parameters in ({"fdr": 0.25}, {"plus": False}, {"pfer": 1}, {"k_fwer": (1, 0.5)}):
            with pytest.raises(AssertionError, match="fitted"):
                fitted(X, y, **parameters)


@pytest.mark.filterwarnings("ignore:There are 4 candidate features")
@pytest.mark.parametrize(
    ("parameters", "reason", "nearest"),
    [
        ({}, "holds at least 5 and there are 4 candidates", "fdr"),
        ({"n_draws": 3}, "3 draws combined by e-values", None),
        ({"pfer": 1}, "closes at negative contrast number 1", "pfer"),
        ({"pfer": 1, "n_draws": 5}, "largest selection frequency is", "threshold"),
    ],
)
def test_an_empty_list_gives_its_reason_and_the_nearest_target(parameters, reason, nearest):
    X, _ = make_data(p=4, n_true=2)
    y = np.random.default_rng(3).standard_normal(120)
    selector = fitted(X, y, importance="marginal", **parameters)
    claim = selector.claim_
    assert not selector.selected_.any() and selector.threshold_ == np.inf
    assert reason in claim.empty_reason
    assert (claim.nearest_target or "").startswith(nearest or "")
    assert "because" in str(claim)


def test_few_rows_for_an_estimated_covariance_are_not_guaranteed():
    X, y = make_data(n=100, p=30)
    claim = fitted(X, y, feature_model="gaussian").claim_
    assert not claim.guaranteed and "Not guaranteed" in str(claim)
    (violated,) = claim.violated
    assert "100 rows, 30 features" in violated.detail and "rehearsal" in violated.detail
    X, y = make_data(n=150, p=30)
    selector = fitted(X, y, feature_model="gaussian")
    assert selector.claim_.guaranteed and "Not guaranteed" not in str(selector.claim_)
    check = stated(selector, "can be swapped on rows that the model has not seen")
    assert check.state is State.HOLDS and "75 held-out rows" in check.detail


def test_a_model_that_held_out_rows_refute_is_not_guaranteed():
    generator = np.random.default_rng(0)
    X = generator.standard_normal((600, 12)) + 1.5 * generator.standard_normal((600, 1))
    y = X[:, 0] + generator.standard_normal(600)
    selector = fitted(X, y, feature_model=GaussianModel(np.eye(12) * X.var(), X.mean(axis=0)))
    check = stated(selector, "can be swapped on rows that the model has not seen")
    assert check.state is State.VIOLATED and "dependence" in check.detail
    assert "Not guaranteed" in str(selector.claim_)


def test_fixed_x_copies_with_added_rows_are_approximate():
    selector = fitted(*make_data(n=35), feature_model="fixed_x")
    assert not selector.claim_.guaranteed
    assert "approximate" in selector.claim_.violated[0].detail
    exact = fitted(*make_data(n=45), feature_model="fixed_x").claim_
    assert exact.guaranteed and "linear" in str(exact)
    assert "fixed-X" in str(exact)


def test_too_few_rows_for_the_held_out_check_leave_it_out():
    X, y = make_data(n=16, p=14)
    selector = fitted(X, y, covariates=slice(8, 14), importance="marginal", pfer=1)
    assert not any("has not seen" in a.statement for a in selector.claim_.assumptions)


def test_the_claim_lists_the_strongest_first():
    selector = fitted(*make_data())
    order = np.argsort(-selector.contrast_)[: len(selector.claim_.selected)]
    assert selector.claim_.selected == tuple(f"x{j}" for j in order)


# --- restated problems ------------------------------------------------------------------------


@pytest.mark.parametrize("loss", ["squared_error", "log_loss"])
@pytest.mark.parametrize("importance", ["lasso", "elastic_net", "entry"])
def test_restated_problems_are_those_of_the_draws(importance, loss):
    X, y = make_data()
    y = y if loss == "squared_error" else y > 0
    weight = np.linspace(1, 2, 120)
    parameters = dict(importance=importance, covariates=[7], n_draws=2, pfer=1)
    selector = fitted(X, y, weight, **parameters)
    problems = selector._stated_problems(X, y, weight)
    assert [problem.label for problem in problems] == ["draw 1", "draw 2"]
    for problem in problems:
        assert problem.design.shape[1] == len(problem.coef) == 1 + 2 * 19
        assert problem.problems.count == 1 and problem.alpha > 0
        assert np.count_nonzero(problem.problems.penalty_weights == 0) == 1
        (place,) = np.flatnonzero(problem.problems.penalty_weights == 0)
        assert problem.coef[place] != 0
    with pytest.raises(ValueError, match=r"Draw 1 on this table has other contrasts .* pass those"):
        selector._stated_problems(X, y, 2 - weight / 2)


def test_at_most_five_draws_are_restated():
    X, y = make_data(n=60, p=6, n_true=3)
    selector = fitted(X, y, n_draws=7, pfer=1, importance="entry")
    assert len(selector._stated_problems(X, y)) == 5


def test_importances_without_a_problem_of_the_engine_are_not_restated():
    X, y = make_data()
    with pytest.raises(
        ValueError, match=r"importance='ridge'.* 'lasso', 'elastic_net' and 'entry'"
    ):
        fitted(X, y, importance="ridge")._stated_problems(X, y)


def test_parameters_are_validated():
    X, y = make_data()
    wrong: list[dict[str, Any]] = [
        {"fdr": 0},
        {"fdr": 1.0},
        {"pfer": 0},
        {"n_draws": 0},
        {"feature_model": "bootstrap"},
        {"s_vector": "largest"},
        {"importance": "lars"},
        {"k_fwer": 1},
    ]
    for parameters in wrong:
        (name,) = parameters
        assert f"'{name}' parameter of KnockoffSelector" in message_of(X, y, **parameters)
