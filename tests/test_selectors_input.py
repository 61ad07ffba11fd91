"""What selectors accept: outcomes, rows, tables; and one clear error for each bad input."""

from __future__ import annotations

import warnings

import numpy as np
import pandas as pd
import polars as pl
import pytest
from scipy import sparse

from sparsesel.selectors import (
    AdaptiveLassoSelector,
    RandomizedLassoSelector,
    StabilitySelector,
)
from sparsesel.selectors._base import _check_finite, resolve_loss

SELECTORS = [
    AdaptiveLassoSelector(alpha=0.1),
    StabilitySelector(n_pairs=4, features_per_fit=2, pfer=10, random_state=0),
    RandomizedLassoSelector(n_pairs=4, features_per_fit=2, pfer=10, random_state=0),
]
every_selector = pytest.mark.parametrize(
    "selector", SELECTORS, ids=lambda selector: type(selector).__name__
)


def make_data(n=40, p=6, seed=0):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p))
    y = 2 * X[:, 1] - 2 * X[:, 3] + 0.5 * rng.standard_normal(n)
    return X, y


def message_of(selector, X, y, **keywords):
    with pytest.raises((ValueError, TypeError)) as error:
        selector.fit(X, y, **keywords)
    return str(error.value)


# --- the outcome ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("y", "categorical", "loss", "classes"),
    [
        (np.array([True, False, True]), False, "log_loss", [False, True]),
        (np.array(["yes", "no", "no"]), False, "log_loss", ["no", "yes"]),
        (np.array(["yes", "no"], dtype=object), False, "log_loss", ["no", "yes"]),
        (np.array([7, 3, 3]), True, "log_loss", [3, 7]),
        (np.array([0, 1, 1]), False, "log_loss", [0, 1]),
        (np.array([-1.5, 2.5, 2.5]), False, "log_loss", [-1.5, 2.5]),
        (np.array([1, 2, 2], dtype=object), False, "log_loss", [1, 2]),
        (np.linspace(0, 1, 7), False, "squared_error", None),
        (np.arange(11), False, "squared_error", None),
        (np.array([2.0, 2.0]), False, "squared_error", None),
    ],
)
def test_automatic_loss(y, categorical, loss, classes):
    resolved, found = resolve_loss("auto", y, categorical=categorical)
    assert resolved == loss
    assert (classes is None and found is None) or list(found) == classes


@pytest.mark.parametrize("n_values", [3, 10])
def test_a_few_whole_numbers_are_ambiguous(n_values):
    with pytest.warns(UserWarning, match=f"{n_values} distinct whole numbers") as caught:
        assert resolve_loss("auto", np.arange(float(n_values)))[0] == "squared_error"
    message = str(caught[0].message)
    assert "loss='squared_error'" in message and "log loss" in message
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert resolve_loss("squared_error", np.arange(n_values))[0] == "squared_error"


@pytest.mark.parametrize(
    ("loss", "y", "said"),
    [
        ("auto", np.array(["a", "b", "c"]), ["3 classes (a, b, c)", "exactly two", "pair"]),
        ("auto", np.array(["a", "a"]), ["1 class only (a)", "exactly two", "both classes"]),
        ("log_loss", np.arange(6.0), ["6 classes (0.0, 1.0, 2.0, 3.0, 4.0, ...)", "squared_error"]),
        ("squared_error", np.array(["a", "b"]), ["labels (a, b)", "numbers", "log_loss"]),
        ("auto", np.array(["a", 1.0], dtype=object), ["mixes", "float, str", "convert"]),
    ],
)
def test_outcomes_that_no_loss_takes(loss, y, said):
    with pytest.raises(ValueError) as error:
        resolve_loss(loss, y)
    for part in said:
        assert part in str(error.value)


@pytest.mark.parametrize(
    "y",
    [
        pd.Series(["b", "a"] * 20, dtype="category"),
        pd.Series([5, 4] * 20, dtype="category"),
        pd.Series(["b", "a"] * 20),
        pl.Series(["b", "a"] * 20),
        pl.Series(["b", "a"] * 20, dtype=pl.Categorical),
        pl.Series(["b", "a"] * 20, dtype=pl.Enum(["b", "a", "c"])),
        ["b", "a"] * 20,
        np.array([True, False] * 20),
        np.array([2, 1] * 20),
    ],
    ids=lambda y: f"{type(y).__module__.split('.')[0]}-{getattr(y, 'dtype', 'list')}",
)
def test_two_classes_in_any_dress_are_the_same_fit(y):
    X, _ = make_data()
    expected = AdaptiveLassoSelector(alpha=0.02).fit(X, np.array([1, 0] * 20))
    selector = AdaptiveLassoSelector(alpha=0.02).fit(X, y)
    assert selector.loss_ == "log_loss"
    assert list(selector.classes_) == sorted(set(selector.classes_))
    np.testing.assert_array_equal(selector.coef_, expected.coef_)
    assert selector.coef_.any()


def test_a_categorical_outcome_of_numbers_is_classes():
    X, _ = make_data(n=39)
    y = pd.Series([1, 2, 3] * 13, dtype="category")
    assert "3 classes (1, 2, 3)" in message_of(AdaptiveLassoSelector(alpha=0.1), X, y)


def test_classes_of_an_earlier_fit_are_forgotten():
    X, y = make_data()
    selector = AdaptiveLassoSelector(alpha=0.1).fit(X, y > 0)
    assert list(selector.classes_) == [False, True]
    assert not hasattr(selector.fit(X, y), "classes_")


# --- bad tables -------------------------------------------------------------------------------


@every_selector
@pytest.mark.parametrize(
    ("value", "kind"), [(np.nan, "NaN"), (np.inf, "infinity"), (-np.inf, "infinity")]
)
@pytest.mark.parametrize("container", ["array", "frame", "csr", "csc"])
def test_missing_and_infinite_values(selector, value, kind, container):
    X, y = make_data()
    X[[3, 7], 2] = value
    X[5, 4] = value
    wrap = {
        "array": np.asarray,
        "frame": lambda X: pd.DataFrame(X, columns=list("abcdef")),
        "csr": sparse.csr_array,
        "csc": sparse.csc_matrix,
    }[container]
    name = "'c'" if container == "frame" else "'x2'"
    message = message_of(selector, wrap(X), y)
    assert f"X contains {kind}" in message
    assert f"in 2 of 6 columns, the first in column {name}, row 3" in message
    assert "finite numbers" in message and "SimpleImputer" in message


def test_large_finite_values_are_no_infinity():
    X, _ = make_data()
    X[:2, 5] = 1.7e308
    # The sum of the column overflows; its values do not.
    _check_finite(X, np.array(list("abcdef"), dtype=object), "selector")


@every_selector
@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_missing_outcomes(selector, value):
    X, y = make_data()
    y[3] = value
    message = message_of(selector, X, y)
    assert "Input y contains" in message and "leave out the rows" in message


@every_selector
def test_text_in_the_table(selector):
    X, y = make_data()
    frame = pd.DataFrame(X, columns=list("abcdef")).assign(site="north")
    message = message_of(selector, frame, y)
    assert "could not convert string to float" in message
    assert "not numbers: 'site'" in message and "OneHotEncoder" in message


@every_selector
@pytest.mark.parametrize(
    ("X", "y", "said"),
    [
        (np.empty((0, 3)), [], ["0 sample(s)", "minimum of 2", "one row per sample"]),
        (np.ones((1, 3)), [1.0], ["1 sample(s)", "minimum of 2", "one row per sample"]),
        (np.empty((5, 0)), np.arange(5.0), ["0 feature(s)", "at least one column"]),
        (np.ones((5, 2)), np.arange(4.0), ["inconsistent numbers", "one outcome per row"]),
        (np.ones((5, 2)), np.ones((5, 2)), ["1d array", "one selector per outcome"]),
        (np.ones(5), np.arange(5.0), ["1D array", "Reshape your data"]),
    ],
    ids=["no rows", "one row", "no columns", "lengths", "two outcomes", "one dimension"],
)
def test_shapes(selector, X, y, said):
    message = message_of(selector, X, y)
    for part in said:
        assert part in message


# --- rows: weights and groups -----------------------------------------------------------------


@every_selector
@pytest.mark.parametrize(
    ("weight", "said"),
    [
        (-np.arange(40.0), ["39 negative values, the lowest -39", "zero or positive"]),
        (np.zeros(40), ["zero for every row", "must be positive", "None"]),
        (np.ones(39), ["shape (39,)", "40 rows", "one weight per row"]),
        (np.ones((40, 2)), ["shape (40, 2)", "40 rows"]),
        (np.full(40, np.nan), ["sample_weight contains NaN"]),
    ],
    ids=["negative", "zero", "length", "shape", "nan"],
)
def test_wrong_weights(selector, weight, said):
    message = message_of(selector, *make_data(), sample_weight=weight)
    for part in said:
        assert part in message


@every_selector
@pytest.mark.parametrize(
    ("groups", "said"),
    [
        (np.arange(39), ["shape (39,)", "40 rows", "feature_groups"]),
        ([None] + ["a"] * 39, ["no label for row 0", "label of their own"]),
        (np.array([0.0, np.nan] * 20), ["no label for row 1"]),
    ],
)
def test_wrong_groups(selector, groups, said):
    message = message_of(selector, *make_data(), groups=groups)
    for part in said:
        assert part in message


@every_selector
def test_rows_of_weight_zero_are_as_if_absent(selector):
    X, y = make_data(n=44)
    weight = np.ones(44)
    weight[[0, 9, 20, 43]] = 0
    X[20], y[9] = 1e6, 1e6
    kept = weight > 0
    without = type(selector)(**selector.get_params()).fit(X[kept], y[kept])
    with_zero = type(selector)(**selector.get_params()).fit(X, y, sample_weight=weight)
    np.testing.assert_array_equal(with_zero.selected_, without.selected_)
    if isinstance(selector, AdaptiveLassoSelector):
        np.testing.assert_allclose(with_zero.coef_, without.coef_, rtol=1e-6, atol=1e-9)
    else:
        np.testing.assert_array_equal(
            with_zero.selection_probability_, without.selection_probability_
        )
    assert with_zero.selected_.any()


@every_selector
def test_the_claim_says_whether_groups_came(selector):
    if isinstance(selector, AdaptiveLassoSelector):
        selector = AdaptiveLassoSelector(cv=3)
    X, y = make_data()
    assert "no groups were given" in str(selector.fit(X, y).claim_) or (
        "without groups of rows" in str(selector.claim_)
    )
    grouped = str(selector.fit(X, y, groups=np.arange(40) // 4).claim_)
    assert "10 groups were given" in grouped or "kept groups of rows whole" in grouped


# --- containers -------------------------------------------------------------------------------


@every_selector
def test_the_answer_does_not_depend_on_the_container(selector):
    X, y = make_data()
    X[np.abs(X) < 0.3] = 0
    names = list("abcdef")
    expected = selector.fit(X, y)
    assert expected.selected_.any()
    measure = "coef_" if hasattr(expected, "coef_") else "selection_probability_"
    expected_measure = getattr(expected, measure).copy()
    read_only = X.copy()
    read_only.flags.writeable = False
    for other in (
        np.asfortranarray(X),
        read_only,
        X.tolist(),
        X[::1].astype(object),
        pd.DataFrame(X, columns=names),
        pl.DataFrame(X, schema=names),
        sparse.csc_array(X),
        sparse.csc_matrix(X),
        sparse.csr_array(X),
        sparse.csr_matrix(X),
        sparse.coo_array(X),
    ):
        found = type(selector)(**selector.get_params()).fit(other, y)
        np.testing.assert_allclose(getattr(found, measure), expected_measure, rtol=1e-6, atol=1e-8)


@every_selector
def test_a_memory_map_is_fitted_in_place(selector, tmp_path):
    X, y = make_data()
    mapped = np.memmap(tmp_path / "X.bin", dtype=np.float32, mode="w+", shape=X.shape, order="F")
    mapped[:] = X
    mapped.flush()
    mapped = np.memmap(tmp_path / "X.bin", dtype=np.float32, mode="r", shape=X.shape, order="F")
    found = selector.fit(mapped, y)
    np.testing.assert_array_equal(found.selected_, selector.fit(X, y).selected_)


@every_selector
def test_names_and_units(selector):
    X, y = make_data()
    frame = pd.DataFrame(X, columns=["age", "tau", "p_tau", "Ab_42", "b", "c"])
    selector = type(selector)(**selector.get_params()).set_params(
        covariates="age", feature_groups={"tau": "tangles", "p_tau": "tangles"}
    )
    selector.fit(frame, y)
    assert list(selector.units_["unit"]) == ["tangles", "Ab_42", "b", "c"]
    assert list(selector.units_["members"]) == [("tau", "p_tau"), ("Ab_42",), ("b",), ("c",)]
    assert list(selector.units_["selected"][:2]) == [True, True]
    assert set(selector.claim_.selected) >= {"tangles", "Ab_42"}
    assert selector.claim_.unit == "feature group"
    assert selector.claim_.candidates == 4
    # The covariate is kept and not claimed; both members of the group are.
    assert not selector.selected_[0] and selector.get_support()[0]
    assert selector.selected_[[1, 2, 3]].all()
    assert list(selector.get_feature_names_out()[:4]) == ["age", "tau", "p_tau", "Ab_42"]
    assert "1 covariate (age)" in str(selector.claim_)
    assert pd.DataFrame(selector.units_).shape[0] == 4
    assert pl.DataFrame({k: list(v) for k, v in selector.units_.items()}).height == 4


@every_selector
def test_an_unknown_covariate_lists_close_names(selector):
    X, y = make_data()
    frame = pd.DataFrame(X, columns=["age", "tau", "p_tau", "Ab_42", "b", "c"])
    selector = type(selector)(**selector.get_params()).set_params(covariates=["p-tau"])
    message = message_of(selector, frame, y)
    assert "close to it: 'p_tau'" in message and "verbose_feature_names_out=False" in message


@every_selector
def test_text_out_of_range_parameters(selector):
    selector = type(selector)(**selector.get_params()).set_params(loss="hinge")
    assert "'loss' parameter" in message_of(selector, *make_data())


# --- transform --------------------------------------------------------------------------------


@every_selector
@pytest.mark.parametrize("container", ["pandas", "polars"])
@pytest.mark.parametrize("given", ["pandas", "polars"])
def test_columns_keep_their_dtypes(selector, container, given):
    X, y = make_data()
    columns = {
        "age": np.arange(40, dtype=np.int16),
        "tau": X[:, 1].astype(np.float32),
        "Ab_42": X[:, 3],
        "noise": X[:, 5],
    }
    frame = pd.DataFrame(columns) if given == "pandas" else pl.DataFrame(columns)
    selector = type(selector)(**selector.get_params()).set_params(covariates="age")
    kept = selector.set_output(transform=container).fit_transform(frame, y)
    assert type(kept).__module__.startswith(container)
    assert list(kept.columns)[:3] == ["age", "tau", "Ab_42"]
    dtypes = [str(kept[name].dtype).lower() for name in ("age", "tau", "Ab_42")]
    assert dtypes == ["int16", "float32", "float64"]


@pytest.mark.parametrize("kind", ["csr_array", "csr_matrix", "csc_array", "csc_matrix"])
def test_sparse_in_sparse_out(kind):
    X, y = make_data()
    table = getattr(sparse, kind)(X)
    kept = AdaptiveLassoSelector(alpha=0.1).fit(table, y).transform(table)
    assert sparse.issparse(kept) and kept.format == kind[:3]
    np.testing.assert_array_equal(kept.toarray()[:, :2], X[:, [1, 3]])


@pytest.mark.parametrize("container", ["default", "pandas", "polars"])
def test_an_empty_selection_keeps_the_rows(container):
    X, y = make_data()
    frame = pl.DataFrame(X, schema=list("abcdef"))
    selector = AdaptiveLassoSelector(alpha=1e3).set_output(transform=container).fit(frame, y)
    assert selector.claim_.empty_reason
    assert "selected none of 6 candidate features" in str(selector.claim_)
    with pytest.warns(UserWarning, match="No features were selected"):
        assert selector.transform(frame).shape == (40, 0)
