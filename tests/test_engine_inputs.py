"""What the engine refuses, each with what was received, what is allowed, and what to do next.

And what it must not refuse or copy: the tables that look unusual and are fine.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import polars as pl
import pytest
import scipy.sparse as sp

from sparsesel.engine import Keep, Problems, as_design, penalized_path, solve_bank
from sparsesel.engine.design import DenseDesign
from sparsesel.engine.inputs import as_table, as_vector, check_bank

N, P, B = 30, 6, 3


def refused(*parts):
    """One ValueError whose message holds these patterns in order."""
    return pytest.raises(ValueError, match=".*".join(parts))


def spoil(array, position, value):
    array = np.array(array, dtype=float)
    array[position] = value
    return array


def table():
    return np.random.default_rng(60).standard_normal((N, P))


def call(**change):
    X = table()
    y = X[:, 0] + np.random.default_rng(61).standard_normal(N)
    if change.get("loss") == "log_loss":
        y = (y > 0).astype(float)
    arguments = {"X": X, "y": y, "alphas": 3} | change
    return penalized_path(arguments.pop("X"), arguments.pop("y"), **arguments)


vectors = pytest.mark.parametrize("name", ["y", "offset", "sample_weight"])


class TestTable:
    @pytest.mark.parametrize(
        ("X", "parts"),
        [
            (None, ("X is None", "array of real numbers", "Pass one")),
            (3.0, (r"X has shape \(\)", "two axes", "one row per sample")),
            (np.ones(30), (r"X has shape \(30,\)", "two axes", r"X.reshape\(-1, 1\)")),
            (np.ones((2, 30, 6)), (r"X has shape \(2, 30, 6\)", "two axes", "one row per")),
            pytest.param(
                sp.coo_array(np.arange(30.0)),
                (r"X has shape \(30,\)", "two axes", "one row per"),
                marks=pytest.mark.skipif(
                    sp.coo_array(np.arange(30.0)).ndim == 2,
                    reason="scipy before 1.13 makes this a table of one row",
                ),
            ),
            ([[1, 2], [3]], ("X cannot be made an array", "equal length", "Check that all rows")),
            ("abc", ("X holds text", "real numbers", "Turn them")),
            (np.full((N, P), "1"), ("X holds text", "real numbers", "Turn them")),
            (np.full((N, P), "1", dtype=object), ("X holds text", "real numbers", "Turn them")),
            (np.full((N, P), b"1"), ("X holds text", "real numbers", "Turn them")),
            (np.ones((N, P)) * 1j, ("X holds complex numbers", "real numbers", "Turn them")),
            (np.zeros((N, P), "datetime64[s]"), ("X holds dates", "real numbers", "Turn them")),
            (np.zeros((N, P), "timedelta64[s]"), ("X holds durations", "real numbers", "Turn")),
            (np.zeros((N, P), "f8,f8"), ("X holds records", "real numbers", "Turn them")),
            (np.full((N, P), {}, dtype=object), ("X holds objects", "not 'dict'", "real", "Turn")),
            (np.full((N, P), 10**400, dtype=object), ("objects", "int too large", "real", "Turn")),
            (np.ones((0, P)), ("X has 0 rows and 6 columns", "at least one of each", "Check how")),
            (np.ones((N, 0)), ("X has 30 rows and 0 columns", "at least one of each", "Check how")),
            (sp.csr_array((0, P)), ("X has 0 rows and 6 columns", "at least one", "Check how")),
            (
                np.ma.masked_less(np.eye(N, P), 0.5),
                ("X holds 174 masked values", "without missing values", "Impute them or drop"),
            ),
            (pl.DataFrame({"a": ["x"] * N}), ("X holds text", "real numbers", "Turn them")),
            (
                pd.DataFrame({"a": np.ones(N), "b": pd.date_range("2020", periods=N)}),
                ("X holds objects that are not numbers", "Timestamp", "real numbers", "Turn them"),
            ),
        ],
        ids=lambda value: "" if isinstance(value, tuple) else type(value).__name__,
    )
    def test_what_is_no_table_of_numbers(self, X, parts):
        with refused(*parts):
            call(X=X)

    @pytest.mark.parametrize(
        ("value", "counts"),
        [(np.nan, "2 NaN and 0"), (np.inf, "0 NaN and 2"), (-np.inf, "0 NaN and 2")],
    )
    @pytest.mark.parametrize("wrap", [np.asarray, pd.DataFrame, pl.DataFrame, sp.csc_array])
    def test_numbers_that_are_not_finite(self, wrap, value, counts):
        X = spoil(table(), ([3, 4], [2, 5]), value)
        message = f"X holds {counts} infinite values in 2 columns, the first is column 2"
        with refused(message, "every value must be finite", "Impute them, or drop"):
            call(X=wrap(X))

    def test_both_kinds_in_many_columns_are_counted(self):
        X = np.ones((4, 200))
        X[0], X[1, ::2] = np.nan, -np.inf
        with refused("X holds 200 NaN and 100 infinite values in 200 columns, the first is col"):
            call(X=X, y=np.ones(4))

    def test_missing_values_of_data_frames_are_found(self):
        X = pd.DataFrame(table()).astype("Float64")
        X.iloc[3, 4] = pd.NA
        with refused("X holds 1 NaN and 0 infinite values in 1 columns, the first is column 4"):
            call(X=X)
        with refused("X holds 1 NaN and 0 infinite values in 1 columns, the first is column 0"):
            call(X=pl.DataFrame({"a": [None, *[1.0] * (N - 1)]}))

    def test_a_row_without_weight_may_not_hold_nan(self):
        weight = spoil(np.ones(N), 3, 0.0)
        with refused("X holds 1 NaN"):
            call(X=spoil(table(), (3, 1), np.nan), sample_weight=weight)

    @pytest.mark.parametrize("unit", [1e-150, 1e-101, 1e101, 1e150, 1e308])
    @pytest.mark.parametrize("wrap", [np.asarray, sp.csc_array])
    def test_units_whose_products_leave_double_precision(self, unit, wrap):
        X = np.sign(table())
        X[:, [3, 5]] *= unit
        value = f"{unit:.3g}".replace("+", r"\+")
        message = f"X has 2 columns whose largest .* out of range, the first is column 3 .*{value}"
        with refused(message, "allowed is 0, or 1e-100 to", "Change the units of these columns"):
            call(X=wrap(X))

    @pytest.mark.parametrize("unit", [1e-99, 1e99])
    def test_units_within_it_and_empty_columns_are_fine(self, unit):
        X = table()
        X[:, 1] = 0.0
        there, here = call(X=X * unit, standardize=True), call(X=X, standardize=True)
        np.testing.assert_allclose(there.alphas, here.alphas, rtol=1e-10)

    def sparse(self, change):
        X = getattr(sp, f"{change[0]}_array")(table())
        parts = X.indices.copy(), X.indptr.copy()
        parts[change[1]][change[2]] = change[3]
        X.indices, X.indptr = parts
        return X

    @pytest.mark.parametrize(
        ("change", "why"),
        [
            (("csc", 0, 7, N), f"must be < {N}"),
            (("csr", 0, 7, P), f"must be < {P}"),
            (("csc", 0, 7, -1), "must be >= 0"),
            (("csr", 1, 2, 0), "non-decreasing"),
        ],
    )
    def test_sparse_tables_whose_indices_lead_outside(self, change, why):
        message = r"indices contradict its shape \(30, 6\) \(.*"
        with refused(message + why, "every index must name a row and a column", "Build it again"):
            call(X=self.sparse(change))

    @pytest.mark.parametrize(("dtype", "what"), [("c16", "complex numbers"), (object, "objects")])
    def test_sparse_tables_of_other_values(self, dtype, what):
        X = sp.csr_array(np.eye(N, P))
        X.data = X.data.astype(dtype)
        with refused(f"X is sparse and holds {what}", "allowed are real numbers", "Turn them"):
            call(X=X)

    @pytest.mark.parametrize("order", ["C", "F"])
    @pytest.mark.parametrize("dtype", [np.float32, np.float64])
    def test_floats_are_not_copied(self, dtype, order, tmp_path):
        X = np.array(table(), dtype=dtype, order=order)
        X.flags.writeable = False
        np.save(tmp_path / "X.npy", X)
        mapped = np.load(tmp_path / "X.npy", mmap_mode="r")
        for given in (X, X[::2], X[:, ::-1], mapped, np.ma.masked_array(X, mask=False)):
            taken = as_design(as_table(given)).table
            assert np.shares_memory(taken, given) and taken.dtype == dtype
        columns = sp.csc_array(X)
        taken = as_design(as_table(columns)).table
        assert np.shares_memory(taken.data, columns.data) and taken.dtype == dtype

    def test_a_data_frame_of_one_block_is_not_copied(self):
        X = table()
        assert np.shares_memory(as_table(pd.DataFrame(X, copy=False)), X)

    @pytest.mark.parametrize(
        "dtype", [np.int8, np.uint64, np.bool_, np.float16, np.longdouble, ">f8", object]
    )
    def test_other_numbers_become_double(self, dtype):
        X = (10 * np.abs(table())).astype(dtype)
        taken = as_table(X)
        assert taken.dtype == np.float64 and taken.dtype.isnative
        np.testing.assert_array_equal(taken, X.astype(float))

    @pytest.mark.parametrize("dtype", ["Float64", "Int64", pd.SparseDtype("float64", 0.0)])
    def test_data_frames_of_extension_types(self, dtype):
        if isinstance(dtype, pd.SparseDtype):
            # pandas 3 refuses to build sparse matrices with the oldest scipy that we support.
            pytest.importorskip("scipy", minversion="1.14.1")
        X = pd.DataFrame(np.rint(10 * table())).astype(dtype)
        taken = as_table(X)
        assert sp.issparse(taken) == isinstance(dtype, pd.SparseDtype)
        dense = taken.toarray() if sp.issparse(taken) else taken
        np.testing.assert_array_equal(dense, np.rint(10 * table()))

    def test_a_sparse_table_that_is_longer_than_it_says_is_not_trimmed(self):
        columns = sp.csc_array(table())
        columns.data = np.append(columns.data, 7.0)
        columns.indices = np.append(columns.indices, 0)
        as_table(columns)
        assert columns.data.size == columns.indices.size == N * P + 1


class TestVectors:
    @vectors
    @pytest.mark.parametrize(
        ("value", "counts"),
        [(np.nan, "2 NaN and 0"), (np.inf, "0 NaN and 2"), (-np.inf, "0 NaN and 2")],
    )
    def test_numbers_that_are_not_finite(self, name, value, counts):
        message = f"{name} holds {counts} infinite values, the first in row 3"
        with refused(message, "every value must be finite", "Impute them, or drop"):
            call(**{name: spoil(np.ones(N), [3, 9], value)})

    @vectors
    @pytest.mark.parametrize(
        ("values", "parts"),
        [
            (2.0, (r"has shape \(\)", "one axis with 30 values", r"Pass np.full\(30, value\)")),
            (np.ones((N, 1)), (r"has shape \(30, 1\)", "one axis with 30", r"Pass \w+.ravel\(\)")),
            (np.ones((N, 2)), (r"has shape \(30, 2\)", "one axis with 30", "Pass one column")),
            (np.ones(29), ("has 29 values and X has 30 rows", "must match", "Pass one value of")),
            ([], ("has 0 values and X has 30 rows", "must match", "Pass one value of")),
            ("text", ("holds text", "real numbers", "Turn them")),
            (["1"] * N, ("holds text", "real numbers", "Turn them")),
            (np.ones(N) * 1j, ("holds complex numbers", "real numbers", "Turn them")),
            (sp.csr_array(np.ones((1, N))), (r"is sparse \(csr_array\)", "real", "toarray")),
            (np.ma.masked_equal(np.arange(N), 2), ("holds 1 masked", "without", "Impute")),
        ],
        ids=str,
    )
    def test_what_is_no_vector_of_numbers(self, name, values, parts):
        with refused(name, *parts):
            call(**{name: values})

    def test_no_response(self):
        with refused("y is None", "allowed is an array of real numbers", "Pass one"):
            call(y=None)

    @pytest.mark.parametrize("unit", [1e-101, 1e101, 1e300])
    @pytest.mark.parametrize("name", ["y", "offset"])
    def test_units_whose_products_leave_double_precision(self, name, unit):
        values = np.tile([0.0, -unit, unit / 2], N // 3)
        value = f"{unit:.3g}".replace("+", r"\+")
        with refused(f"{name} has the largest absolute value {value}", "0, or 1e-100", "Change"):
            call(**{name: values})

    def test_a_response_or_offset_of_zeros_is_fine(self):
        assert not call(y=np.zeros(N), offset=np.zeros(N)).coef.nnz

    @pytest.mark.parametrize(
        ("weight", "message"),
        [
            (spoil(np.ones(N), 4, -1), "sample_weight holds 1 negative values and sums to 28"),
            (np.zeros(N), "sample_weight holds 0 negative values and sums to 0"),
            (-np.ones(N), "sample_weight holds 30 negative values and sums to -30"),
        ],
    )
    def test_sample_weights_that_weigh_nothing(self, weight, message):
        with refused(message, "weights must not be", "Drop the rows"):
            call(sample_weight=weight)

    @pytest.mark.parametrize("unit", [1e-101, 1e101, 1e308])
    def test_sample_weights_whose_sums_leave_double_precision(self, unit):
        value = f"{unit:.3g}".replace("+", r"\+")
        with refused(f"sample_weight has the largest value {value}", "1e-100 to", "Divide"):
            call(sample_weight=np.full(N, unit))

    @pytest.mark.parametrize(
        ("weights", "parts"),
        [
            (spoil(np.ones(P), [1, 3], -0.1), ("2 values that are negative or NaN", "column 1")),
            (spoil(np.ones(P), 4, np.nan), ("1 values that are negative or NaN", "column 4")),
        ],
    )
    def test_penalty_weights_that_are_none(self, weights, parts):
        allowed = r"allowed is from 0 \(unpenalised\) to inf \(left out\)"
        with refused("penalty_weights holds", *parts, allowed, "Pass None"):
            call(penalty_weights=weights)

    @pytest.mark.parametrize(
        ("weights", "parts"),
        [
            (np.ones(5), ("has 5 values and X has 6 columns", "must match", "one value of")),
            (2.0, (r"has shape \(\)", "6 values, one per column", r"np.full\(6, value\)")),
            (["a"] * P, ("holds text", "real numbers", "Turn them")),
            (np.ones(P) * 1j, ("holds complex numbers", "real numbers", "Turn them")),
        ],
        ids=str,
    )
    def test_penalty_weights_of_another_shape_or_kind(self, weights, parts):
        with refused("penalty_weights", *parts):
            call(penalty_weights=weights)

    @pytest.mark.parametrize("value", [1e-101, 1e101])
    def test_penalty_weights_whose_products_leave_double_precision(self, value):
        with refused("penalty_weights range from", "allowed are 0, 1e-100", "Pass 0", "inf"):
            call(penalty_weights=spoil(np.ones(P), 2, value))

    def test_vectors_are_not_copied(self):
        y = np.ones(N)
        y.flags.writeable = False
        assert np.shares_memory(as_vector(y, "y", N), y)
        assert np.shares_memory(as_vector(pd.Series(y, copy=False), "y", N), y)


class TestSettings:
    @pytest.mark.parametrize(
        "alphas",
        [[0.1, 0.2], [0.1, 0.1], [0.1, -0.1], [0.1, 0.0], [np.inf], [np.nan], []],
    )
    def test_penalties_that_do_not_decrease_or_are_not_positive(self, alphas):
        with refused("alphas=", "is not a list of positive, finite, strictly decr", "Sort it"):
            call(alphas=alphas)

    @pytest.mark.parametrize(
        "alphas",
        ["cv", "0.5", True, np.True_, None, 2.5, 1j, {"a": 1}, [True], ["0.5"], [[1], [2, 3]]],
        ids=str,
    )
    def test_what_is_neither_a_count_nor_penalties(self, alphas):
        with refused("alphas=", "is neither an integer count nor a list", "allowed", "Pass a cou"):
            call(alphas=alphas)

    @pytest.mark.parametrize("alphas", [0, -3, np.int64(0)])
    def test_grids_of_no_point(self, alphas):
        with refused("alphas=.*asks for no grid point", "at least 1", "Pass a positive integer"):
            call(alphas=alphas)

    def test_a_path_has_one_grid(self):
        with refused(r"alphas has shape \(1, 2\)", r"allowed is \(L,\)", "Pass one list"):
            call(alphas=[[0.2, 0.1]])

    def test_penalties_that_cannot_be_doubled(self):
        with refused(r"alphas begin at 1e\+308", r"up to 1e\+300", "Pass smaller"):
            call(alphas=[1e308, 1.0])

    @pytest.mark.parametrize("l1_ratio", [0, -0.1, 1.1, np.nan, "half", None, True])
    def test_an_l1_ratio_out_of_range(self, l1_ratio):
        message = f"l1_ratio={l1_ratio!r} is not a number in \\(0, 1\\]"
        with refused(message, "Pass 1 for", "ridge regression use"):
            call(l1_ratio=l1_ratio)

    def test_an_l1_ratio_for_which_no_penalty_empties_the_model(self):
        with refused("l1_ratio=1e-60 times", "1e-50 is below 1e-100", "Pass a larger l1_ratio"):
            call(l1_ratio=1e-60, penalty_weights=np.full(P, 1e-50))

    @pytest.mark.parametrize("tol", [0, -1e-3, 1, np.nan, "small", True, None])
    def test_tolerances(self, tol):
        with refused(f"tol={tol!r} is not a number between 0 and 1", "relative dual", "Pass a"):
            call(tol=tol)

    @pytest.mark.parametrize("max_iter", [0, -1, 2.5, "many", True, None])
    def test_limits_of_sweeps(self, max_iter):
        with refused(f"max_iter={max_iter!r} is not a positive integer", "Pass how many"):
            call(max_iter=max_iter)

    @pytest.mark.parametrize("name", ["fit_intercept", "standardize"])
    @pytest.mark.parametrize("value", ["no", None, 1, [True]])
    def test_switches(self, name, value):
        received = repr(value).replace("[", r"\[")
        with refused(f"{name}={received} is not a boolean", "True and False", "Pass one"):
            call(**{name: value})

    @pytest.mark.parametrize("loss", ["hinge", None, ["log_loss"]])
    def test_an_unknown_loss(self, loss):
        with refused("loss=", "is not known; allowed are", "log_loss", "squared_error", "Pass"):
            call(loss=loss)

    def test_numpy_scalars_are_numbers(self):
        path = call(
            alphas=np.int64(3),
            l1_ratio=np.float32(0.5),
            tol=np.float64(1e-7),
            max_iter=np.int32(10_000),
            fit_intercept=np.True_,
        )
        np.testing.assert_array_equal(path.alphas, call(l1_ratio=0.5).alphas)


class TestClasses:
    @pytest.mark.parametrize(
        ("response", "message"),
        [
            (np.arange(30.0), r"holds 30 distinct values, among them \[0.0, 1.0, 2.0\]"),
            (np.tile([-1.0, 1.0], 15), r"holds 2 distinct values, among them \[-1.0, 1.0\]"),
        ],
    )
    def test_labels_other_than_0_and_1(self, response, message):
        with refused(f"{message}; only 0 and 1 are allowed. Code"):
            call(loss="log_loss", y=response)

    @pytest.mark.parametrize("label", [0.0, 1.0])
    def test_one_class_only(self, label):
        y = np.tile([0.0, 1.0], 15)
        match = f"one class only \\({label:g}\\) among the rows", "both 0 and 1 must", "Check"
        with refused(*match):
            call(loss="log_loss", y=np.full(N, label))
        with refused(*match):
            call(loss="log_loss", y=y, sample_weight=(y == label).astype(float))

    @pytest.mark.parametrize("overlap", [0, 1])
    def test_classes_separated_by_unpenalised_columns(self, overlap):
        """With a shared value separation is only quasi-complete; there is no optimum either."""
        X = table()
        X[:, 2] = np.where(np.arange(N) < 15, -1.0, 1.0)
        X[:overlap, 2] = 0.0
        X[15 : 15 + overlap, 2] = 0.0
        y = (np.arange(N) >= 15).astype(float)
        v = np.array([1, 1, 0, 1, 1, 1.0])
        with refused("1 unpenalised columns.*separates the two classes", "must leave", "Give a"):
            call(loss="log_loss", X=X, y=y, penalty_weights=v)
        path = call(loss="log_loss", X=X, y=y, alphas=[0.05])
        assert path.gap[0] <= 1e-7


class TestBank:
    """The parent refuses a bank before any of it is solved."""

    @staticmethod
    def bank(**change):
        rng = np.random.default_rng(62)
        problems = Problems(
            "squared_error",
            rng.standard_normal((B, N)),
            sample_weight=rng.uniform(0.5, 1.5, (B, N)),
            penalty_weights=np.ones((B, P)),
            offset=np.ones(N),
        )
        return replace(problems, **change)

    @staticmethod
    def solve(problems, alphas=3, keep=None, **settings):
        return solve_bank(as_design(table()), problems, alphas, keep=keep, **settings)

    def test_what_is_no_design(self):
        with refused("design is of type ndarray", "a DesignMatrix", r"Pass as_design\(X\)"):
            solve_bank(table(), self.bank(), 3)

    def test_an_empty_table(self):
        with refused("X has 0 rows and 6 columns", "at least one of each", "Check"):
            solve_bank(as_design(np.ones((0, P))), self.bank(), 3)

    def test_a_table_that_is_not_finite(self):
        with refused("X holds 1 NaN and 0 infinite", "first is column 4", "must be", "Impute"):
            solve_bank(as_design(spoil(table(), (2, 4), np.nan)), self.bank(), 3)

    @pytest.mark.parametrize(
        ("change", "parts"),
        [
            ({"loss": "hinge"}, ("loss='hinge' is not known", "allowed are", "Pass")),
            ({"l1_ratio": 0.0}, ("l1_ratio=0.0 is not", r"\(0, 1\]", "Pass 1 for")),
            ({"standardize": 1}, ("standardize=1 is not a boolean", "True and False", "Pass")),
        ],
        ids=str,
    )
    def test_settings(self, change, parts):
        with refused(*parts):
            self.solve(self.bank(**change))

    @pytest.mark.parametrize("ratio", [0.0, 1.0, -1.0, np.nan, "small"])
    def test_the_end_of_a_grid(self, ratio):
        with refused("alpha_min_ratio=", "not a number between 0 and 1", "last pen", "Pass"):
            self.solve(self.bank(), alpha_min_ratio=ratio)

    @pytest.mark.parametrize(
        ("name", "length", "each"),
        [("response", N, "row"), ("sample_weight", N, "row"), ("penalty_weights", P, "column")],
    )
    def test_arrays_of_another_shape(self, name, length, each):
        for shape in ((length - 1,), (B, length + 1), (1, B, length), (), (0, length)):
            received = str(shape).replace("(", r"\(").replace(")", r"\)")
            allowed = rf"allowed is shape \({length},\) or \(B, {length}\)"
            with refused(f"{name} has shape {received}", allowed, f"Pass one value per {each}"):
                self.solve(self.bank(**{name: np.ones(shape)}))

    @pytest.mark.parametrize("shape", [(N - 1,), (B, N), ()])
    def test_an_offset_belongs_to_all_problems(self, shape):
        with refused("offset has shape", r"allowed is shape \(30,\)", "Pass one value per row"):
            self.solve(self.bank(offset=np.ones(shape)))

    @pytest.mark.parametrize("name", ["response", "sample_weight", "penalty_weights", "offset"])
    @pytest.mark.parametrize(
        ("values", "what"),
        [
            ([1.0, 2.0], "is of type list"),
            (np.array(["a"]), "is an array of <U1"),
            (np.ones(2, complex), "is an array of complex128"),
            (np.ones(2, object), "is an array of object"),
        ],
        ids=str,
    )
    def test_what_is_no_numeric_array(self, name, values, what):
        with refused(f"{name} {what}", "allowed is a numeric array", "Convert it"):
            self.solve(self.bank(**{name: values}))

    def test_no_response(self):
        with refused("response is of type NoneType", "numeric array", "Convert"):
            self.solve(self.bank(response=None))

    def test_different_numbers_of_problems(self):
        with refused(r"have \[2, 3\] rows", "must have one row per problem", "Give each"):
            self.solve(self.bank(penalty_weights=np.ones((2, P))))

    @pytest.mark.parametrize(
        ("name", "values", "parts"),
        [
            (
                "response",
                spoil(np.ones((B, N)), (1, 4), np.nan),
                ("response y of problem 1 holds 1 NaN and 0 inf", "in row 4", "must be", "Impute"),
            ),
            (
                "response",
                spoil(np.ones((B, N)), 2, 1e120),
                (r"response y of problem 2 has .* 1e\+120", "allowed is 0, or", "Change its"),
            ),
            (
                "sample_weight",
                spoil(np.ones((B, N)), (2, 5), np.inf),
                ("sample_weight of problem 2 holds 0 NaN and 1 inf", "row 5", "must", "Impute"),
            ),
            (
                "sample_weight",
                spoil(np.ones((B, N)), (2, 5), -1.0),
                ("sample_weight of problem 2 holds 1 negative", "must not be", "Drop the rows"),
            ),
            (
                "sample_weight",
                spoil(np.ones((B, N)), 1, 0.0),
                ("sample_weight of problem 1 holds 0 neg.*sums to 0", "must not", "Drop the rows"),
            ),
            (
                "sample_weight",
                spoil(np.ones((B, N)), 1, 1e-120),
                ("sample_weight of problem 1 has the largest value 1e-120", "allowed", "Divide"),
            ),
            (
                "penalty_weights",
                spoil(np.ones((B, P)), (1, 3), np.nan),
                ("penalty_weights of problem 1 holds 1 values", "column 3", "allowed", "Pass"),
            ),
            (
                "penalty_weights",
                spoil(np.ones((B, P)), (2, 3), -2.0),
                ("penalty_weights of problem 2 holds 1 values", "column 3", "allowed", "Pass"),
            ),
            (
                "offset",
                spoil(np.ones(N), 8, np.nan),
                ("offset holds 1 NaN and 0 infinite values", "row 8", "must be", "Impute"),
            ),
        ],
    )
    def test_numbers_out_of_range(self, name, values, parts):
        with refused(*parts):
            self.solve(self.bank(**{name: values}))

    def test_labels_other_than_0_and_1(self):
        with refused("log loss holds", "only 0 and 1 are allowed", "Code"):
            self.solve(self.bank(loss="log_loss"))

    @pytest.mark.parametrize(
        ("alphas", "parts"),
        [
            ([0.1, 0.2], ("not a list of positive", "strictly decreasing", "Sort it")),
            (
                np.array([[0.3, 0.2], [0.3, 0.2], [0.2, 0.3]]),
                ("not a list of positive", "strictly decreasing", "Sort it"),
            ),
            (
                np.array([[0.3, 0.2], [0.3, 0.2]]),
                (r"alphas has shape \(2, 2\)", r"\(L,\) or \(3, L\)", "Pass one list", "every"),
            ),
            (True, ("alphas=True is neither", "allowed", "Pass a count")),
            (0, ("alphas=0 asks for no grid point", "at least 1", "Pass a positive")),
        ],
        ids=str,
    )
    def test_penalties(self, alphas, parts):
        with refused(*parts):
            self.solve(self.bank(), alphas)

    @pytest.mark.parametrize("entries", [-1, 2.0, True, None])
    def test_counts_of_entries(self, entries):
        with refused(f"entries={entries!r} is not a count", "integers from 0", "Pass how many"):
            self.solve(self.bank(), keep=Keep(entries=entries))

    @pytest.mark.parametrize(
        ("units", "parts"),
        [
            (np.arange(P - 1), (r"shape \(5,\) and type int64", "6 integers", "Pass None")),
            (np.zeros(P), (r"shape \(6,\) and type float64", "6 integers", "Pass None")),
            (np.arange(P) - 1, ("range from -1 to 4", "0 to 5", "Number the units")),
            (np.arange(P) + 1, ("range from 1 to 6", "0 to 5", "Number the")),
            (list(range(P)), ("entry_units is of type list", "numeric array", "Convert it")),
        ],
        ids=str,
    )
    def test_units_of_entry(self, units, parts):
        with refused(*parts):
            self.solve(self.bank(), keep=Keep(entries=2, entry_units=units))

    @pytest.mark.parametrize("never_enters", [0.0, np.inf])
    def test_a_column_that_never_enters_needs_no_unit(self, never_enters):
        weights = np.ones((B, P))
        weights[:, 3] = never_enters
        units = np.array([0, 1, 2, -1, 2, 1])
        keep = Keep(entries=3, entry_units=units)
        result = self.solve(self.bank(penalty_weights=weights), 20, keep)
        np.testing.assert_array_equal(np.sort(result.entry_order, axis=1), [[0, 1, 2]] * B)

    @pytest.mark.parametrize(
        ("held_out", "parts"),
        [
            (np.ones(N), (r"held_out has shape \(30,\)", r"allowed is \(3, 30\)", "Pass")),
            (np.ones((B, N - 1)), (r"has shape \(3, 29\)", r"allowed is \(3, 30\)", "Pass")),
            (np.ones((B + 1, N)), (r"has shape \(4, 30\)", r"allowed is \(3, 30\)", "Pass")),
            ([[1.0] * N] * B, ("held_out is of type list", r"shape \(3, 30\)", "Convert it")),
            (
                spoil(np.ones((B, N)), 2, 0.0),
                ("held_out of problem 2 holds 0 negative.*sums to 0", "must not", "Drop the rows"),
            ),
            (
                spoil(np.ones((B, N)), (0, 1), -1.0),
                ("held_out of problem 0 holds 1 negative", "must not be", "Drop the rows"),
            ),
            (
                spoil(np.ones((B, N)), (1, 2), np.nan),
                ("held_out of problem 1 holds 1 NaN", "must be finite", "Impute"),
            ),
        ],
    )
    def test_held_out_rows(self, held_out, parts):
        with refused(*parts):
            self.solve(self.bank(), keep=Keep(held_out=held_out))

    def test_the_table_is_read_once(self):
        read = []

        class Counted(DenseDesign):
            def _dense(self, columns):
                values = super()._dense(columns)
                read.append(values.shape[1])
                return values

        design = Counted(table())
        for _ in range(2):
            check_bank(design, self.bank(), 3, Keep())
        design.centres.sum()
        assert sum(read) == P
