"""Columns: specifications, units of selection, penalty weights, clusters by correlation."""

from __future__ import annotations

import functools

import numpy as np
import pandas as pd
import pytest
from scipy import sparse
from scipy.cluster.hierarchy import fcluster, linkage
from scipy.spatial.distance import squareform

from sparsesel.selectors import correlation_groups
from sparsesel.selectors._columns import Table, column_mask, resolve_columns

NAMES = ("age", "tau", "p_tau", "Ab_42", "site_A", "site_B")


def make_table(X=None, named=True, sample_weight=None):
    X = np.random.default_rng(0).standard_normal((30, len(NAMES))) if X is None else X
    names = np.array(NAMES if named else [f"x{j}" for j in range(X.shape[1])], dtype=object)
    original = pd.DataFrame(X, columns=names) if named else X
    return Table(names, named, original, X, sample_weight)


def resolved(table, covariates=None, feature_groups=None, penalty_weights=None):
    return resolve_columns(
        table,
        covariates=covariates,
        feature_groups=feature_groups,
        penalty_weights=penalty_weights,
    )


def same_partition(a, b):
    """Whether two labellings put the same columns together."""
    a, b = np.asarray(a), np.asarray(b)
    return np.array_equal(a[:, None] == a, b[:, None] == b)


# --- specifications ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("spec", "expected"),
    [
        (None, []),
        ([], []),
        ("age", [0]),
        (["tau", "age"], [0, 1]),
        (pd.Index(["tau"]), [1]),
        (2, [2]),
        ([-1, 0], [0, 5]),
        (np.array([3]), [3]),
        (slice(1, 3), [1, 2]),
        (slice("tau", "Ab_42"), [1, 2, 3]),
        (slice(None, "tau"), [0, 1]),
        ([False, True, False, False, False, True], [1, 5]),
        (np.array([True] + [False] * 5), [0]),
        (lambda X: [c for c in X.columns if c.startswith("site")], [4, 5]),
    ],
)
def test_column_specifications(spec, expected):
    mask = column_mask(spec, make_table(), "covariates")
    np.testing.assert_array_equal(np.flatnonzero(mask), expected)


@pytest.mark.parametrize(
    ("spec", "said"),
    [
        ("p-tau", ["'p-tau'", "6 columns", "close to it: 'p_tau'", "set_output", "sparse_output"]),
        ("TAU", ["'TAU'", "close to it: 'tau'", "'p_tau'"]),
        ("site", ["close to it: ", "'site_A'", "'site_B'"]),
        ("zzz", ["none is close to it", "feature_names_in_"]),
        (6, ["position 6", "6 columns", "-6 to 5"]),
        ([True, False], ["mask of length 2", "6 columns"]),
        ([1.5], ["1.5", "float", "convert"]),
    ],
)
def test_wrong_specifications_say_what_to_do(spec, said):
    with pytest.raises(ValueError) as error:
        column_mask(spec, make_table(), "covariates")
    assert str(error.value).startswith("covariates")
    for part in said:
        assert part in str(error.value)


def test_a_name_on_a_table_without_names():
    with pytest.raises(ValueError, match=r"ndarray without column names\. Give positions"):
        column_mask("age", make_table(named=False), "covariates")


def test_a_name_that_two_columns_have():
    table = make_table()
    table.names[3] = "age"
    with pytest.raises(ValueError, match=r"2 columns have that name \(positions 0, 3\)"):
        column_mask("age", table, "covariates")


# --- penalty weights --------------------------------------------------------------------------


def test_penalty_weights_as_array_and_as_dict():
    as_array = resolved(make_table(), penalty_weights=[1, 2, 1, 1, np.inf, 1], covariates="age")
    as_dict = resolved(make_table(), penalty_weights={"tau": 2, "site_A": np.inf}, covariates="age")
    for columns in (as_array, as_dict):
        np.testing.assert_array_equal(columns.penalty_weights, [0, 2, 1, 1, np.inf, 1])
        np.testing.assert_array_equal(columns.unit_of, [-1, 0, 1, 2, -1, 3])
        assert columns.unit_names == ("tau", "p_tau", "Ab_42", "site_B")


@pytest.mark.parametrize(
    ("weights", "said"),
    [
        ([1, 0, 1, 1, 1, 1], ["0.0 for column 'tau'", "positive", "covariates"]),
        ([1, -2, 1, 1, 1, 1], ["-2.0 for column 'tau'", "positive"]),
        ({"tau": np.nan}, ["nan for column 'tau'", "positive"]),
        ([1, 1], ["shape (2,)", "6 columns", "dict"]),
        ({"taw": 1}, ["'taw'", "close to it: 'tau'"]),
        ([np.inf] * 6, ["No column is left to select from", "6 have an infinite penalty weight"]),
    ],
)
def test_wrong_penalty_weights(weights, said):
    with pytest.raises(ValueError) as error:
        resolved(make_table(), penalty_weights=weights)
    for part in said:
        assert part in str(error.value)


def test_only_covariates_leave_nothing_to_select():
    with pytest.raises(ValueError, match="6 are covariates"):
        resolved(make_table(), covariates=slice(None))


# --- units ------------------------------------------------------------------------------------


def test_units_without_groups_are_the_columns():
    columns = resolved(make_table())
    assert columns.unit_names == NAMES
    assert columns.unit == "feature"
    np.testing.assert_array_equal(columns.unit_of, np.arange(6))


@pytest.mark.parametrize(
    "groups",
    [
        ["a", "t", "t", "b", "s", "s"],
        pd.Series(["a", "t", "t", "b", "s", "s"]),
        lambda X: ["s" if c.startswith("site") else "t" if "tau" in c else c for c in X.columns],
        {"tau": "t", "p_tau": "t", "site_A": "s", "site_B": "s"},
        [None, "t", "t", np.nan, "s", "s"],
    ],
)
def test_ways_to_state_groups(groups):
    columns = resolved(make_table(), feature_groups=groups)
    np.testing.assert_array_equal(columns.unit_of, [0, 1, 1, 2, 3, 3])
    assert columns.unit == "feature group"
    assert columns.unit_names[1] == "t" and columns.unit_names[3] == "s"
    assert [list(members) for members in columns.members()] == [[0], [1, 2], [3], [4, 5]]
    np.testing.assert_array_equal(
        columns.over_columns(np.array([0.0, 1.0, 2.0, 3.0]), np.nan), [0, 1, 1, 2, 3, 3]
    )
    marked = columns.any_over_units(np.array([False, False, True, False, True, True]))
    np.testing.assert_array_equal(marked, [False, True, False, True])


def test_groups_give_up_covariates_and_columns_left_out():
    columns = resolved(
        make_table(),
        feature_groups=["t"] * 6,
        covariates=["age"],
        penalty_weights={"site_B": np.inf},
    )
    np.testing.assert_array_equal(columns.unit_of, [-1, 0, 0, 0, 0, -1])
    np.testing.assert_array_equal(
        columns.over_columns(np.array([True]), False), [False, True, True, True, True, False]
    )
    assert columns.n_units == 1


def test_a_group_named_like_a_column_outside_it_stays_apart():
    columns = resolved(make_table(), feature_groups={"tau": "age", "p_tau": "age"})
    assert columns.unit_names == ("age", "age (group)", "Ab_42", "site_A", "site_B")


@pytest.mark.parametrize(
    ("groups", "said"),
    [
        (["a", "b"], ["shape (2,)", "6 columns", "dict"]),
        ({"age": ["x"]}, ["['x']", "hashable"]),
        ({"Age": "x"}, ["feature_groups names 'Age'", "close to it: 'age'"]),
    ],
)
def test_wrong_groups(groups, said):
    with pytest.raises(ValueError) as error:
        resolved(make_table(), feature_groups=groups)
    for part in said:
        assert part in str(error.value)


# --- clusters by correlation ------------------------------------------------------------------


def blocks(n_rows, n_blocks, size, correlation, seed=0):
    rng = np.random.default_rng(seed)
    shared = np.repeat(rng.standard_normal((n_rows, n_blocks)), size, axis=1)
    own = rng.standard_normal((n_rows, n_blocks * size))
    return np.sqrt(correlation) * shared + np.sqrt(1 - correlation) * own


def full_matrix_clusters(X, cut):
    """The definition: average linkage on the whole matrix of distances."""
    distance = 1 - np.abs(np.corrcoef(X, rowvar=False))
    np.fill_diagonal(distance, 0)
    tree = linkage(squareform(distance, checks=False), method="average")
    return fcluster(tree, 1 - cut, criterion="distance")


@pytest.mark.parametrize("cut", [0.3, 0.5, 0.7, 0.9])
@pytest.mark.parametrize(
    "X",
    [
        blocks(60, 12, 7, 0.8),
        blocks(25, 40, 3, 0.6, seed=1),
        # A drifting spectrum: neighbours nearly equal, ends unrelated.
        np.cumsum(np.random.default_rng(2).standard_normal((30, 90)), axis=1),
        # More columns than one block of the computation holds.
        blocks(40, 70, 9, 0.75, seed=3),
    ],
    ids=["blocks", "small", "drift", "wide"],
)
def test_clusters_equal_those_of_the_full_matrix(X, cut):
    assert same_partition(correlation_groups(X, cut), full_matrix_clusters(X, cut))


def test_clusters_do_not_depend_on_the_container():
    X = blocks(50, 10, 4, 0.8)
    X[np.abs(X) < 0.2] = 0
    expected = correlation_groups(X)
    assert 1 < expected.max() < 39
    for other in (np.asfortranarray(X), sparse.csr_array(X), sparse.csc_matrix(X)):
        np.testing.assert_array_equal(correlation_groups(other), expected)
    np.testing.assert_array_equal(correlation_groups(X.astype(np.float32)), expected)


def test_whole_weights_are_repeated_rows():
    X = blocks(40, 10, 4, 0.7)
    weight = np.random.default_rng(1).integers(0, 4, 40)
    repeated = np.repeat(X, weight, axis=0)
    np.testing.assert_array_equal(
        correlation_groups(X, sample_weight=weight), correlation_groups(repeated)
    )
    assert not np.array_equal(correlation_groups(X), correlation_groups(repeated))


def test_copies_and_mirrors_join_and_constants_stay_alone():
    a, b = np.random.default_rng(0).standard_normal((2, 20))
    X = np.column_stack([a, np.full(20, 3.0), -2 * a + 1, b, np.full(20, 3.0)])
    np.testing.assert_array_equal(correlation_groups(X, cut=1.0), [0, 1, 0, 2, 3])


@pytest.mark.parametrize("cut", [0.0, -0.1, 1.1, np.nan])
def test_cut_outside_its_range(cut):
    with pytest.raises(ValueError, match=r"cut is .* above 0 and at most 1"):
        correlation_groups(np.eye(3), cut)


def test_correlation_as_feature_groups():
    X = blocks(80, 3, 2, 0.95)
    X = X[:, [0, 2, 1, 3, 4, 5]]  # blocks {0, 2}, {1, 3}, {4, 5}
    columns = resolved(make_table(X), feature_groups="correlation", covariates="Ab_42")
    np.testing.assert_array_equal(columns.unit_of, [0, 1, 0, -1, 2, 2])
    assert columns.unit_names == ("age + p_tau", "tau", "site_A + site_B")
    by_rule = resolved(
        make_table(X), feature_groups=functools.partial(correlation_groups, cut=0.999)
    )
    assert by_rule.n_units == 6


def test_names_of_clusters():
    X = blocks(80, 2, 5, 0.95)
    table = make_table(X, named=False)
    columns = resolved(table, feature_groups="correlation")
    assert columns.unit_names == ("x0 + x1 + x2 + 2 more", "x5 + x6 + x7 + 2 more")
    # Clusters stay apart where columns have the same name.
    table.names[:] = "x"
    assert resolved(table, feature_groups="correlation").n_units == 2
