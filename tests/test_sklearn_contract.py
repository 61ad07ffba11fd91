"""The contract with scikit-learn: its common checks, and those it does not run by itself.

A new selector is a line in ``SELECTORS``; all tests here then apply to it.
"""

from __future__ import annotations

import pickle

import joblib
import numpy as np
import pandas as pd
import polars as pl
import pytest
import sklearn
from scipy import sparse
from sklearn.base import clone
from sklearn.compose import ColumnTransformer, make_column_selector
from sklearn.linear_model import Lasso, LogisticRegression, Ridge
from sklearn.metrics import get_scorer
from sklearn.model_selection import (
    GridSearchCV,
    GroupKFold,
    KFold,
    cross_val_predict,
    cross_val_score,
    cross_validate,
)
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import OneHotEncoder, StandardScaler
from sklearn.utils import estimator_checks, get_tags
from sklearn.utils.estimator_checks import estimator_checks_generator, parametrize_with_checks

from sparsesel.selectors import (
    AdaptiveLassoSelector,
    KnockoffSelector,
    NullModelFallback,
    RandomizedLassoSelector,
    StabilitySelector,
)

SELECTORS = [
    AdaptiveLassoSelector(alphas=25),
    AdaptiveLassoSelector(0.05, initial="marginal"),
    AdaptiveLassoSelector("ebic", initial="ridge", gamma=0.5),
    AdaptiveLassoSelector("one_se", gamma=0, l1_ratio=0.8, standardize=False),
    StabilitySelector(n_pairs=5),
    StabilitySelector(
        n_pairs=3, features_per_fit=1, pfer=100, bound="worst_case", feature_groups="correlation"
    ),
    StabilitySelector(n_pairs=3, estimator=Lasso(0.01)),
    RandomizedLassoSelector(n_pairs=5),
    RandomizedLassoSelector(n_pairs=6, weakness=0.7, pfer=3, l1_ratio=0.9),
    KnockoffSelector(),
    KnockoffSelector(pfer=4, n_draws=3, importance="entry"),
    KnockoffSelector(0.5, plus=False, s_vector="sdp", importance="marginal"),
    KnockoffSelector(k_fwer=(1, 0.5), importance="ridge", feature_groups="correlation"),
]
FALLBACKS = [NullModelFallback(LogisticRegression()), NullModelFallback(Ridge())]

# One of each kind, in settings that select something from the small tables below.
EACH = [
    AdaptiveLassoSelector("ebic"),
    StabilitySelector(n_pairs=6, features_per_fit=3, pfer=10, random_state=0),
    RandomizedLassoSelector(n_pairs=6, features_per_fit=3, pfer=10, random_state=0),
    KnockoffSelector(pfer=2, n_draws=3, random_state=0),
]
each_selector = pytest.mark.parametrize(
    "selector", EACH, ids=lambda selector: type(selector).__name__
)
RESAMPLE = (StabilitySelector, RandomizedLassoSelector)

# --- scikit-learn's common checks -------------------------------------------------------------


def expected_failures(estimator):
    """Checks that can't hold, with the reason."""
    if isinstance(estimator, RESAMPLE):
        repeated = (
            "halves are drawn from rows: a row of weight 2 is in one half, two equal rows can be "
            "in both. Row by row it holds for a weight of zero, see test_selectors_input"
        )
        return {
            "check_sample_weight_equivalence_on_dense_data": repeated,
            "check_sample_weight_equivalence_on_sparse_data": repeated,
            "check_fit2d_1feature": (
                "its table has ten rows, three of one class: a half would have one of them, which "
                "is refused, and not for the number of features"
            ),
        }
    if isinstance(estimator, KnockoffSelector):
        repeated = (
            "every row has a copy of its own: two equal rows are two draws, a row of weight 2 is "
            "one. Row by row it holds for a weight of zero, see test_selectors_knockoff"
        )
        return {
            "check_sample_weight_equivalence_on_dense_data": repeated,
            "check_sample_weight_equivalence_on_sparse_data": repeated,
        }
    if isinstance(estimator, NullModelFallback):
        return {
            "check_estimators_empty_data_messages": (
                "to accept a table without columns is what the class is for"
            )
        }
    return {}


def common_checks():
    """scikit-learn's decorator; its older versions hold a generator, which pytest refuses."""
    mark = parametrize_with_checks(SELECTORS + FALLBACKS, expected_failed_checks=expected_failures)
    names, checks = mark.args
    return pytest.mark.parametrize(names, list(checks), **mark.kwargs)


@pytest.mark.filterwarnings("ignore:y has .* distinct whole numbers:UserWarning")
@pytest.mark.filterwarnings("ignore:No features were selected:UserWarning")
@pytest.mark.filterwarnings("ignore:There (is|are) . candidate feature:UserWarning")
@common_checks()
def test_common_check(estimator, check):
    check(estimator)


def names_of_checks(estimator):
    checks = estimator_checks_generator(
        estimator, expected_failed_checks=expected_failures(estimator), mark=None
    )
    return [getattr(check, "func", check).__name__ for _, check in checks]


@pytest.mark.parametrize("estimator", SELECTORS, ids=lambda estimator: str(estimator)[:60])
def test_number_of_common_checks(estimator):
    names = names_of_checks(estimator)
    if sklearn.__version__.startswith("1.9."):
        assert len(names) == 56
    assert len(names) >= 50
    # A tag that said too little would silently drop these.
    for name in (
        "check_sample_weight_equivalence_on_sparse_data",
        "check_sample_weights_list",
        "check_transformer_preserve_dtypes",
        "check_requires_y_none",
        "check_n_features_in_after_fitting",
        "check_readonly_memmap_input",
        "check_methods_sample_order_invariance",
    ):
        assert name in names
    assert set(expected_failures(estimator)) <= set(names)


# --- checks that are not among the common ones ------------------------------------------------

NOT_COMMON = [
    "check_set_output_transform",
    "check_set_output_transform_pandas",
    "check_set_output_transform_polars",
    "check_global_output_transform_pandas",
    "check_global_set_output_transform_polars",
    "check_dataframe_column_names_consistency",
    "check_transformer_get_feature_names_out",
    "check_transformer_get_feature_names_out_pandas",
    "check_param_validation",
    "check_inplace_ensure_writeable",
    "check_estimator_cloneable",
]


# The checks of set_output fit to a frame and transform an array, and the other way round.
@pytest.mark.filterwarnings("ignore:X (has|does not have valid) feature names:UserWarning")
@pytest.mark.filterwarnings("ignore:No features were selected:UserWarning")
@pytest.mark.filterwarnings("ignore:There (is|are) . candidate feature:UserWarning")
@pytest.mark.parametrize("name", NOT_COMMON)
@pytest.mark.parametrize("estimator", SELECTORS, ids=lambda estimator: str(estimator)[:60])
def test_check_that_is_not_common(estimator, name):
    if not hasattr(estimator_checks, name):
        pytest.skip(f"scikit-learn {sklearn.__version__} has no {name}")
    getattr(estimator_checks, name)(type(estimator).__name__, clone(estimator))


@pytest.mark.parametrize("estimator", FALLBACKS, ids=str)
@pytest.mark.parametrize(
    "name", ["check_param_validation", "check_dataframe_column_names_consistency"]
)
def test_check_of_the_fallback(estimator, name):
    getattr(estimator_checks, name)(type(estimator).__name__, clone(estimator))


# --- data -------------------------------------------------------------------------------------


def make_data(n=60, p=8, seed=0):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p))
    y = 2 * X[:, 1] - 2 * X[:, 3] + X[:, 5] + 0.5 * rng.standard_normal(n)
    return X, y


def fresh(selector, **parameters):
    return clone(selector).set_params(**parameters)


def groups_for(selector, n, size):
    """Groups of a few rows; of one where the outcome, which varies, may not vary within them."""
    return np.arange(n) // (1 if isinstance(selector, KnockoffSelector) else size)


# --- parameters and attributes ----------------------------------------------------------------


@each_selector
def test_signature(selector):
    with pytest.raises(TypeError):
        selector.fit(*make_data(), None, np.arange(60))  # groups by keyword only
    assert set(selector.get_params()) >= {
        "loss",
        "covariates",
        "feature_groups",
        "penalty_weights",
        "standardize",
        "n_jobs",
        "random_state",
        "memory",
        "verbose",
    }
    assert not hasattr(selector, "predict")
    assert selector.get_params()["standardize"] is True


@each_selector
def test_tags(selector):
    tags = get_tags(selector)
    assert tags.target_tags.required
    assert tags.input_tags.sparse and not tags.input_tags.allow_nan
    assert tags.transformer_tags.preserves_dtype == ["float64", "float32"]
    assert not tags.non_deterministic


@each_selector
def test_clone_and_pickle(selector):
    X, y = make_data()
    fitted = fresh(selector).fit(X, y)
    assert not hasattr(clone(fitted), "claim_")
    again = pickle.loads(pickle.dumps(fitted))
    np.testing.assert_array_equal(again.transform(X), fitted.transform(X))
    assert str(again.claim_) == str(fitted.claim_)
    np.testing.assert_array_equal(clone(fitted).fit(X, y).selected_, fitted.selected_)


@each_selector
def test_fit_does_not_touch_its_arguments(selector):
    X, y = make_data()
    weight, groups = np.ones(60), groups_for(selector, 60, 2)
    copies = [array.copy() for array in (X, y, weight, groups)]
    for array in (X, y, weight, groups):
        array.flags.writeable = False
    fresh(selector).fit(X, y, sample_weight=weight, groups=groups)
    for array, copy in zip((X, y, weight, groups), copies, strict=True):
        np.testing.assert_array_equal(array, copy)


@each_selector
def test_html_view_and_documentation(selector):
    X, y = make_data()
    fitted = fresh(selector).fit(X, y)
    assert type(selector).__name__ in fitted._repr_html_()
    assert selector._doc_link_module == "sparsesel"
    assert isinstance(selector._get_doc_link(), str)
    for name in selector.get_params(deep=False):
        assert f"\n    {name} : " in type(selector).__doc__
    documented = type(selector).__doc__
    for name in vars(fitted):
        if name.endswith("_") and not name.startswith("_"):
            assert f"\n    {name} : " in documented, name
    assert "<" not in documented.replace("< ", "").replace("<=", "")


@each_selector
def test_float32_stays_float32(selector):
    X, y = make_data()
    kept = fresh(selector).fit_transform(X.astype(np.float32), y)
    assert kept.dtype == np.float32 and kept.shape[1] >= 2
    kept = fresh(selector).fit_transform(sparse.csc_array(X.astype(np.float32)), y)
    assert kept.dtype == np.float32


@each_selector
def test_both_precisions_select_alike(selector):
    X, y = make_data()
    double = fresh(selector).fit(X, y)
    single = fresh(selector).fit(np.asfortranarray(X, dtype=np.float32), y)
    np.testing.assert_array_equal(double.selected_, single.selected_)


# --- pipelines and searches -------------------------------------------------------------------


@each_selector
def test_names_survive_a_column_transformer(selector):
    X, y = make_data()
    frame = pd.DataFrame(X, columns=[f"gene_{j}" for j in range(8)])
    frame["site"] = np.where(np.arange(60) % 3, "north", "south")
    preparation = ColumnTransformer(
        [
            ("numbers", StandardScaler(), make_column_selector(dtype_include=float)),
            ("text", OneHotEncoder(sparse_output=False, drop="first"), ["site"]),
        ],
        verbose_feature_names_out=False,
    ).set_output(transform="pandas")
    pipeline = make_pipeline(preparation, fresh(selector, covariates=["site_south"]), Ridge())
    pipeline.set_output(transform="pandas").fit(frame, y)
    kept = pipeline[:-1].get_feature_names_out()
    assert {"gene_1", "gene_3", "site_south"} <= set(kept)
    assert not pipeline[1].selected_[-1]
    assert pipeline.predict(frame).shape == (60,)
    with pytest.raises(ValueError, match=r"names 'site', .* close to it: 'site_south'"):
        fresh(pipeline, **{f"{pipeline.steps[1][0]}__covariates": ["site"]}).fit(frame, y)


@each_selector
def test_search_over_a_parameter_of_the_selector(selector):
    X, y = make_data()
    name, values = {
        AdaptiveLassoSelector: ("alpha", [0.01, 0.5]),
        KnockoffSelector: ("pfer", [1, 4]),
    }.get(type(selector), ("features_per_fit", [1, 3]))
    pipeline = make_pipeline(StandardScaler(), fresh(selector), NullModelFallback(Ridge()))
    step = type(selector).__name__.lower()
    search = GridSearchCV(pipeline, {f"{step}__{name}": values}, cv=3).fit(X, y)
    by_hand = [
        cross_val_score(fresh(pipeline, **{f"{step}__{name}": value}), X, y, cv=KFold(3)).mean()
        for value in values
    ]
    np.testing.assert_array_equal(search.cv_results_["mean_test_score"], by_hand)
    assert search.best_params_[f"{step}__{name}"] == values[int(np.argmax(by_hand))]


@each_selector
def test_as_many_columns_as_rows(selector):
    """Search objects slice every fit argument of length n: column inputs are no fit arguments."""
    X, y = make_data(n=40, p=40)
    weights = np.ones(40)
    weights[5] = np.inf
    configured = fresh(
        selector, feature_groups=np.arange(40) // 2, penalty_weights=weights, covariates=[7]
    )
    pipeline = make_pipeline(configured, NullModelFallback(Ridge()))
    step = type(selector).__name__.lower()
    result = cross_validate(
        pipeline,
        X,
        y,
        cv=GroupKFold(4),
        groups=np.arange(40) // 4,
        params={
            f"{step}__groups": groups_for(selector, 40, 4),
            f"{step}__sample_weight": np.ones(40),
        },
        return_estimator=True,
    )
    for fitted in result["estimator"]:
        chosen = fitted[0]
        assert not chosen.get_support()[5] and chosen.get_support()[7]
        assert chosen.claim_.candidates == 20


@each_selector
def test_cross_validated_labels_and_probabilities(selector):
    X, y = make_data()
    labels = np.where(y > 0, "high", "low")
    pipeline = make_pipeline(
        fresh(selector, **({} if hasattr(selector, "alpha") else {"pfer": 20})),
        NullModelFallback(LogisticRegression()),
    )
    probabilities = cross_val_predict(pipeline, X, labels, cv=3, method="predict_proba")
    assert probabilities.shape == (60, 2)
    scores = cross_val_score(pipeline, X, labels, cv=3, scoring="roc_auc")
    assert scores.min() > 0.8
    fitted = pipeline.fit(X, labels)
    assert list(fitted[0].classes_) == ["high", "low"] == list(fitted.classes_)


class RecordsGroups(AdaptiveLassoSelector):
    """Says which groups and weights reached its fits."""

    seen: list = []  # noqa: RUF012  (shared by clones on purpose)

    def fit(self, X, y, sample_weight=None, *, groups=None):
        self.seen.append((None if groups is None else np.asarray(groups), sample_weight))
        return super().fit(X, y, sample_weight, groups=groups)


def test_groups_are_routed_by_default():
    X, y = make_data()
    groups = np.arange(60) // 3
    RecordsGroups.seen.clear()
    with sklearn.config_context(enable_metadata_routing=True):
        pipeline = make_pipeline(RecordsGroups(0.01), Ridge())
        cross_val_score(pipeline, X, y, cv=GroupKFold(3), params={"groups": groups})
        GridSearchCV(pipeline, {"ridge__alpha": [1.0]}, cv=GroupKFold(3)).fit(X, y, groups=groups)
    seen = [got for got, _ in RecordsGroups.seen]
    assert len(seen) == 7 and all(got is not None for got in seen)
    for (train, _), got in zip(GroupKFold(3).split(X, y, groups), seen, strict=False):
        np.testing.assert_array_equal(got, groups[train])
    np.testing.assert_array_equal(seen[-1], groups)


def test_weights_are_routed_on_request():
    X, y = make_data()
    weight = np.linspace(1, 2, 60)
    RecordsGroups.seen.clear()
    with sklearn.config_context(enable_metadata_routing=True):
        asked = RecordsGroups(0.01).set_fit_request(sample_weight=True)
        make_pipeline(asked, Ridge().set_fit_request(sample_weight=False)).fit(
            X, y, sample_weight=weight
        )
        unasked = make_pipeline(RecordsGroups(0.01), Ridge())
        with pytest.raises(sklearn.exceptions.UnsetMetadataPassedError):
            unasked.fit(X, y, sample_weight=weight)
        refused = make_pipeline(RecordsGroups(0.01).set_fit_request(groups=False), Ridge())
        with pytest.raises(TypeError, match="groups"):
            refused.fit(X, y, groups=weight)
    ((_, got),) = RecordsGroups.seen
    np.testing.assert_array_equal(got, weight)


def test_groups_and_weights_with_routing_off():
    X, y = make_data()
    groups, weight = np.arange(60) // 3, np.linspace(1, 2, 60)
    RecordsGroups.seen.clear()
    pipeline = make_pipeline(RecordsGroups(0.01), Ridge())
    params = {"recordsgroups__groups": groups, "recordsgroups__sample_weight": weight}
    cross_val_score(pipeline, X, y, cv=GroupKFold(3), groups=groups, params=params)
    for (train, _), (got, got_weight) in zip(
        GroupKFold(3).split(X, y, groups), RecordsGroups.seen, strict=True
    ):
        np.testing.assert_array_equal(got, groups[train])
        np.testing.assert_array_equal(got_weight, weight[train])
    # With routing off, groups= alone reaches the splitter and, silently, nobody else.
    RecordsGroups.seen.clear()
    cross_val_score(pipeline, X, y, cv=GroupKFold(3), groups=groups)
    assert all(got is None for got, _ in RecordsGroups.seen)


@each_selector
def test_selection_by_a_scorer_with_weights(selector):
    X, y = make_data()
    with sklearn.config_context(enable_metadata_routing=True):
        scorer = get_scorer("neg_mean_squared_error").set_score_request(sample_weight=True)
        model = make_pipeline(
            fresh(selector).set_fit_request(sample_weight=True),
            NullModelFallback(Ridge().set_fit_request(sample_weight=True)),
        )
        scores = cross_val_score(
            model, X, y, cv=3, scoring=scorer, params={"sample_weight": np.linspace(1, 2, 60)}
        )
    assert scores.shape == (3,)


# --- workers ----------------------------------------------------------------------------------


@each_selector
@pytest.mark.parametrize("loss", ["squared_error", "log_loss"])
def test_the_same_bits_for_any_workers(selector, loss):
    X, y = make_data(n=60, p=120)
    y = y if loss == "squared_error" else y > 0
    if isinstance(selector, AdaptiveLassoSelector):
        selector, measure = AdaptiveLassoSelector("cv"), "coef_"
    elif isinstance(selector, KnockoffSelector):
        measure = "contrast_"
    else:
        selector, measure = fresh(selector, n_pairs=30), "selection_probability_"
    one = getattr(fresh(selector).fit(X, y), measure)
    assert np.count_nonzero(one) > 2
    for backend in ("threading", "loky"):
        with joblib.parallel_config(backend, n_jobs=2):
            np.testing.assert_array_equal(getattr(fresh(selector).fit(X, y), measure), one)
    np.testing.assert_array_equal(getattr(fresh(selector, n_jobs=2).fit(X, y), measure), one)


@each_selector
def test_parallel_search(selector):
    X, y = make_data()
    pipeline = make_pipeline(fresh(selector), NullModelFallback(Ridge()))
    one = cross_val_score(pipeline, X, y, cv=3)
    np.testing.assert_array_equal(cross_val_score(pipeline, X, y, cv=3, n_jobs=2), one)


# --- frames -----------------------------------------------------------------------------------


@each_selector
def test_a_polars_frame_stays_one_without_pandas_between(selector):
    X, y = make_data()
    frame = pl.DataFrame(X, schema=[f"gene_{j}" for j in range(8)]).cast({"gene_1": pl.Float32})
    kept = fresh(selector).set_output(transform="polars").fit_transform(frame, y)
    assert kept.schema["gene_1"] == pl.Float32 and kept.schema["gene_3"] == pl.Float64
    assert kept["gene_1"].equals(frame["gene_1"])
    other = frame.rename({"gene_0": "another"})
    fitted = fresh(selector).set_output(transform="polars").fit(frame, y)
    with pytest.raises(ValueError, match="feature names should match"):
        fitted.transform(other)


# --- nothing leaks ----------------------------------------------------------------------------


def test_selection_inside_the_validation_is_honest_on_noise():
    """On pure noise the pipeline's accuracy is chance; selecting beforehand makes it look good."""
    inside, outside = [], []
    for rng in np.random.default_rng(2).spawn(12):
        X, y = rng.standard_normal((60, 1000)), np.arange(60) % 2 == 0
        selector = AdaptiveLassoSelector(0.05, initial="marginal")
        model = NullModelFallback(LogisticRegression())
        pipeline = make_pipeline(selector, model)
        inside.append(cross_val_score(pipeline, X, y, cv=3, scoring="roc_auc").mean())
        chosen = selector.fit_transform(X, y)
        outside.append(cross_val_score(model, chosen, y, cv=3, scoring="roc_auc").mean())
    error = np.std(inside, ddof=1) / np.sqrt(len(inside))
    assert abs(np.mean(inside) - 0.5) < 3 * error
    assert np.mean(outside) > 0.9
