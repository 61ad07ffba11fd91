"""NullModelFallback: the wrapped estimator, or the intercept alone."""

from __future__ import annotations

import numpy as np
import pandas as pd
import polars as pl
import pytest
import sklearn
from scipy import sparse
from sklearn.base import clone, is_classifier, is_regressor
from sklearn.dummy import DummyClassifier, DummyRegressor
from sklearn.feature_selection import SelectKBest
from sklearn.linear_model import LinearRegression, LogisticRegression, Ridge
from sklearn.model_selection import GridSearchCV, cross_val_predict, cross_val_score
from sklearn.naive_bayes import GaussianNB
from sklearn.pipeline import make_pipeline
from sklearn.svm import LinearSVC, NuSVR

from sparsesel.selectors import NullModelFallback

RNG = np.random.default_rng(0)
X = RNG.standard_normal((30, 3))
Y = X[:, 0] + RNG.standard_normal(30)
LABELS = np.where(Y > 0.5, "high", "low")
WEIGHT = RNG.integers(1, 5, 30).astype(float)
EMPTY = np.empty((30, 0))


@pytest.mark.parametrize(
    ("estimator", "y"),
    [(LogisticRegression(), LABELS), (GaussianNB(), LABELS), (LinearSVC(), LABELS), (Ridge(), Y)],
)
@pytest.mark.parametrize("weight", [None, WEIGHT])
def test_with_columns_it_is_the_estimator(estimator, y, weight):
    wrapped = NullModelFallback(estimator).fit(X, y, sample_weight=weight)
    plain = clone(estimator).fit(X, y, sample_weight=weight)
    assert not wrapped.is_null_
    for method in ("predict", "predict_proba", "predict_log_proba", "decision_function"):
        assert hasattr(wrapped, method) == hasattr(plain, method)
        if hasattr(plain, method):
            np.testing.assert_array_equal(getattr(wrapped, method)(X), getattr(plain, method)(X))
    assert wrapped.score(X, y) == plain.score(X, y)
    assert is_classifier(wrapped) == is_classifier(plain)
    assert is_regressor(wrapped) == is_regressor(plain)
    assert wrapped.n_features_in_ == 3


@pytest.mark.parametrize("weight", [None, WEIGHT])
@pytest.mark.parametrize("labels", [LABELS, np.arange(30) % 3])
def test_without_columns_a_classifier_gives_the_shares(labels, weight):
    null = NullModelFallback(LogisticRegression()).fit(EMPTY, labels, sample_weight=weight)
    # scikit-learn's dummy with the prior is the intercept-only model of a classifier.
    oracle = DummyClassifier(strategy="prior").fit(np.zeros((30, 1)), labels, sample_weight=weight)
    assert null.is_null_
    np.testing.assert_array_equal(null.classes_, oracle.classes_)
    for method in ("predict", "predict_proba", "predict_log_proba"):
        found = getattr(null, method)(EMPTY[:4])
        expected = getattr(oracle, method)(np.zeros((4, 1)))
        if found.dtype.kind == "f":
            np.testing.assert_allclose(found, expected, rtol=1e-14)
        else:
            np.testing.assert_array_equal(found, expected)
    assert null.score(EMPTY, labels) == oracle.score(np.zeros((30, 1)), labels)


def test_without_columns_the_decision_is_the_log_odds():
    null = NullModelFallback(LogisticRegression()).fit(EMPTY, LABELS)
    share = np.mean(LABELS == "low")
    np.testing.assert_allclose(
        null.decision_function(EMPTY[:2]), np.log(share / (1 - share)), rtol=1e-14
    )
    three = NullModelFallback(LogisticRegression()).fit(EMPTY, np.arange(30) % 3)
    np.testing.assert_allclose(three.decision_function(EMPTY[:2]), np.log(np.full((2, 3), 1 / 3)))


@pytest.mark.parametrize("weight", [None, WEIGHT])
def test_without_columns_a_regressor_gives_the_mean(weight):
    null = NullModelFallback(Ridge()).fit(EMPTY, Y, sample_weight=weight)
    oracle = DummyRegressor().fit(np.zeros((30, 1)), Y, sample_weight=weight)
    np.testing.assert_allclose(null.predict(EMPTY[:3]), oracle.predict(np.zeros((3, 1))))
    assert null.score(EMPTY, Y) == pytest.approx(oracle.score(np.zeros((30, 1)), Y), abs=1e-15)
    assert null.score(EMPTY, Y, sample_weight=WEIGHT) == pytest.approx(
        oracle.score(np.zeros((30, 1)), Y, sample_weight=WEIGHT), abs=1e-15
    )


def test_whole_weights_are_repeated_rows():
    repeats = WEIGHT.astype(int)
    weighted = NullModelFallback(Ridge()).fit(EMPTY, Y, sample_weight=WEIGHT)
    repeated = NullModelFallback(Ridge()).fit(np.empty((repeats.sum(), 0)), np.repeat(Y, repeats))
    assert weighted.constant_ == pytest.approx(repeated.constant_, rel=1e-14)


def test_several_outcomes():
    null = NullModelFallback(LinearRegression()).fit(EMPTY, np.column_stack([Y, 2 * Y]))
    np.testing.assert_allclose(null.predict(EMPTY[:3]), np.tile([Y.mean(), 2 * Y.mean()], (3, 1)))
    with pytest.raises(ValueError, match=r"y has shape \(30, 2\).*one model per outcome"):
        NullModelFallback(LogisticRegression()).fit(EMPTY, np.column_stack([LABELS, LABELS]))


@pytest.mark.parametrize(
    "container",
    [
        np.asarray,
        pd.DataFrame,
        sparse.csr_array,
        sparse.csc_matrix,
        lambda X: pl.DataFrame(X, schema=[], orient="row"),
    ],
)
def test_tables_without_columns(container):
    null = NullModelFallback(Ridge()).fit(container(EMPTY), Y)
    assert null.n_features_in_ == 0
    assert null.predict(container(EMPTY)).shape == (30,)
    assert null.predict(EMPTY[:1]).shape == (1,)


def test_the_table_at_prediction_must_be_the_one_of_the_fit():
    null = NullModelFallback(Ridge()).fit(EMPTY, Y)
    with pytest.raises(ValueError, match="3 features, but NullModelFallback is expecting 0"):
        null.predict(X)
    with pytest.raises(ValueError, match="0"):
        null.fit(X, Y).predict(EMPTY)


def test_a_second_fit_forgets_the_first():
    model = NullModelFallback(LogisticRegression()).fit(X, LABELS)
    assert hasattr(model, "estimator_")
    model.fit(EMPTY, LABELS)
    assert not hasattr(model, "estimator_") and model.n_features_in_ == 0
    model.fit(X, LABELS)
    assert not hasattr(model, "class_prior_") and model.n_features_in_ == 3


@pytest.mark.parametrize(
    "weight", [np.zeros(30), -np.ones(30), np.ones(29)], ids=["zero", "negative", "length"]
)
def test_wrong_weights_without_columns(weight):
    with pytest.raises(ValueError, match=r"sample_weight has shape .* zero or positive"):
        NullModelFallback(Ridge()).fit(EMPTY, Y, sample_weight=weight)


def test_only_predictors_are_wrapped():
    with pytest.raises(ValueError, match="'estimator' parameter of NullModelFallback"):
        NullModelFallback(SelectKBest()).fit(X, Y)
    with pytest.raises(ValueError, match="neither a classifier nor a regressor"):
        from sklearn.cluster import KMeans

        NullModelFallback(KMeans()).fit(X, Y)
    with pytest.raises(ValueError, match="Unknown label type"):
        NullModelFallback(LogisticRegression()).fit(EMPTY, Y)


def test_probabilities_are_there_only_if_the_estimator_has_them():
    assert not hasattr(NullModelFallback(LinearSVC()), "predict_proba")
    assert not hasattr(NullModelFallback(Ridge()), "decision_function")
    assert not hasattr(NullModelFallback(LinearSVC()).fit(EMPTY, LABELS), "predict_proba")
    assert hasattr(NullModelFallback(LinearSVC()).fit(EMPTY, LABELS), "decision_function")


def nothing(X, y):
    return np.zeros(X.shape[1])


class KeepNothing(SelectKBest):
    """Keeps no column, as a strict selector on noise does."""

    def __init__(self):
        super().__init__(nothing, k=0)


@pytest.mark.filterwarnings("ignore:No features were selected")
@pytest.mark.parametrize("container", ["default", "pandas", "polars"])
def test_in_a_pipeline_under_cross_validation(container):
    pipeline = make_pipeline(KeepNothing(), NullModelFallback(LogisticRegression()))
    pipeline.set_output(transform=container)
    with sklearn.config_context(transform_output=container):
        table = {"default": X, "pandas": pd.DataFrame(X), "polars": pl.DataFrame(X)}[container]
        probabilities = cross_val_predict(pipeline, table, LABELS, cv=3, method="predict_proba")
        scores = cross_val_score(pipeline, table, LABELS, cv=3, scoring="roc_auc")
    assert probabilities.shape == (30, 2)
    np.testing.assert_array_equal(scores, 0.5)


def test_the_estimator_can_be_searched():
    search = GridSearchCV(NullModelFallback(Ridge()), {"estimator__alpha": [0.1, 10.0]}, cv=3).fit(
        X, Y
    )
    plain = GridSearchCV(Ridge(), {"alpha": [0.1, 10.0]}, cv=3).fit(X, Y)
    np.testing.assert_array_equal(
        search.cv_results_["mean_test_score"], plain.cv_results_["mean_test_score"]
    )


@pytest.mark.parametrize("table", [X, EMPTY], ids=["columns", "no columns"])
def test_weights_reach_both_models_by_routing(table):
    with sklearn.config_context(enable_metadata_routing=True):
        model = NullModelFallback(Ridge().set_fit_request(sample_weight=True))
        routed = make_pipeline(model).fit(table, Y, sample_weight=WEIGHT)
        by_hand = clone(model).fit(table, Y, sample_weight=WEIGHT)
        unweighted = clone(model).fit(table, Y)
        np.testing.assert_array_equal(routed.predict(table), by_hand.predict(table))
        assert not np.allclose(routed.predict(table), unweighted.predict(table))
        with pytest.raises(TypeError, match="unexpected argument"):
            clone(model).fit(table, Y, groups=WEIGHT)
    off = make_pipeline(NullModelFallback(Ridge())).fit(
        table, Y, nullmodelfallback__sample_weight=WEIGHT
    )
    np.testing.assert_array_equal(off.predict(table), by_hand.predict(table))


def test_a_search_object_as_the_estimator():
    model = NullModelFallback(GridSearchCV(NuSVR(), {"C": [0.1, 1.0]}, cv=3))
    assert is_regressor(model)
    assert model.fit(X, Y).predict(X).shape == (30,)
    assert model.fit(EMPTY, Y).predict(EMPTY)[0] == pytest.approx(Y.mean())
