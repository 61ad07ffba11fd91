"""Relations that hold whatever the data are, every container, and the same bits.

Most relations turn one problem into another whose answer must solve the first. That is what is
tested: the mapped answer's own duality gap in the first problem, computed by the oracle.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import product

import joblib
import numpy as np
import pandas as pd
import polars as pl
import pytest
import scipy.sparse as sp
from oracles import Problem, certified_gap, largest_alpha, null_objective
from sklearn.exceptions import ConvergenceWarning

from sparsesel.engine import (
    Keep,
    Problems,
    Status,
    as_design,
    penalized_path,
    solve_bank,
    warn_failures,
)
from sparsesel.tasks import TaskSettings

LOSSES = ("squared_error", "log_loss")
TOL = 1e-9
# What rounding may add to a gap, relative to the null objective.
ROUNDING = 1e-12
FRACTIONS = np.array([0.7, 0.2, 0.05])


def draw(loss, seed=0, n=60, p=20, **settings):
    rng = np.random.default_rng([seed, LOSSES.index(loss)])
    X = rng.standard_normal((n, p)) + 0.6 * rng.standard_normal((n, 1))
    X = X * rng.uniform(0.4, 2.5, p) + rng.uniform(-2, 2, p)
    y = X[:, :4] @ [1.0, -1.0, 0.5, 1.0] + 1.5 * rng.standard_normal(n)
    y = y if loss == "squared_error" else (y > np.median(y)).astype(float)
    v = rng.uniform(0.5, 2, p)
    v[5], v[6] = 0.0, np.inf
    offset = 0.3 * rng.standard_normal(n)
    return Problem(X, y, loss, penalty_weights=v, offset=offset, **settings)


def solve(problem, alphas, tol=TOL):
    return penalized_path(problem.X, problem.y, alphas=alphas, tol=tol, **problem.settings)


def answers(path):
    return path.coef.toarray(), path.intercept


def solves(problem, alphas, coefs, intercepts, tol=TOL):
    """Points solve a problem as well as the engine promises."""
    null = null_objective(problem)
    for alpha, coef, intercept in zip(alphas, coefs, intercepts, strict=True):
        assert certified_gap(problem, coef, intercept, alpha) <= (tol + ROUNDING) * null


def grid(problem):
    return largest_alpha(problem) * FRACTIONS


SETTINGS = [
    {"l1_ratio": l1_ratio, "standardize": standardize}
    for l1_ratio, standardize in product((1.0, 0.6), (False, True))
]
each_kind = pytest.mark.parametrize(("loss", "settings"), list(product(LOSSES, SETTINGS)))
each_loss = pytest.mark.parametrize("loss", LOSSES)


class TestRows:
    @each_kind
    def test_integer_weights_are_repeated_rows(self, loss, settings):
        problem = draw(loss, 1, **settings)
        count = np.random.default_rng(1).integers(0, 4, len(problem.y))
        weighted = replace(problem, sample_weight=count.astype(float))
        rows = np.repeat(np.arange(len(problem.y)), count)
        repeated = replace(
            problem, X=problem.X[rows], y=problem.y[rows], offset=problem.offset[rows]
        )
        alphas = grid(weighted)
        solves(weighted, alphas, *answers(solve(repeated, alphas)))
        solves(repeated, alphas, *answers(solve(weighted, alphas)))
        np.testing.assert_allclose(largest_alpha(repeated), alphas[0] / FRACTIONS[0], rtol=1e-10)

    @each_kind
    def test_a_table_stacked_twice_has_the_same_answer(self, loss, settings):
        problem = draw(loss, 2, **settings)
        twice = replace(
            problem,
            X=np.vstack([problem.X, problem.X]),
            y=np.tile(problem.y, 2),
            offset=np.tile(problem.offset, 2),
        )
        alphas = grid(problem)
        solves(problem, alphas, *answers(solve(twice, alphas)))

    @each_kind
    def test_the_order_of_rows_and_the_size_of_weights_do_not_matter(self, loss, settings):
        rng = np.random.default_rng(3)
        problem = draw(loss, 3, sample_weight=rng.uniform(0.1, 2, 60), **settings)
        rows = rng.permutation(60)
        other = replace(
            problem,
            X=problem.X[rows],
            y=problem.y[rows],
            offset=problem.offset[rows],
            sample_weight=1e6 * problem.sample_weight[rows],
        )
        alphas = grid(problem)
        solves(problem, alphas, *answers(solve(other, alphas)))

    @each_kind
    def test_rows_of_weight_zero_have_no_influence_however_large(self, loss, settings):
        problem = draw(loss, 4, **settings)
        X, y, offset = problem.X.copy(), problem.y.copy(), problem.offset.copy()
        weight = np.ones(60)
        weight[::7] = 0.0
        X[::7] = 1e6 * np.random.default_rng(4).standard_normal((9, 20))
        offset[::7] = -1e6
        y[::7] = 1e6 if loss == "squared_error" else 1 - y[::7]
        seen = weight > 0
        without = replace(
            problem, X=problem.X[seen], y=problem.y[seen], offset=problem.offset[seen]
        )
        alphas, null = grid(without), null_objective(without)
        huge = replace(problem, X=X, y=y, offset=offset, sample_weight=weight)
        pairs = [zip(*answers(solve(one, alphas)), strict=True) for one in (without, huge)]
        for alpha, of_without, of_huge in zip(alphas, *pairs, strict=True):
            values = [without.objective(*point, alpha) for point in (of_without, of_huge)]
            # Numbers a million times larger cost the certificate digits, not the answer.
            assert abs(values[0] - values[1]) <= (TOL + ROUNDING) * null


class TestColumns:
    @each_kind
    def test_a_permuted_table_gives_the_same_named_answer(self, loss, settings):
        problem = draw(loss, 5, **settings)
        order = np.random.default_rng(5).permutation(20)
        permuted = replace(
            problem, X=problem.X[:, order], penalty_weights=problem.penalty_weights[order]
        )
        alphas = grid(problem)
        coefs, intercepts = answers(solve(permuted, alphas))
        named = np.empty_like(coefs)
        named[:, order] = coefs
        solves(problem, alphas, named, intercepts)
        np.testing.assert_array_equal(named != 0, answers(solve(problem, alphas))[0] != 0)

    @each_loss
    @pytest.mark.parametrize("l1_ratio", [1.0, 0.6])
    def test_standardising_makes_units_irrelevant(self, loss, l1_ratio):
        problem = draw(loss, 6, standardize=True, l1_ratio=l1_ratio)
        units = 10.0 ** np.random.default_rng(6).uniform(-6, 6, 20)
        other = replace(problem, X=problem.X * units)
        alphas = grid(problem)
        coefs, intercepts = answers(solve(other, alphas))
        solves(problem, alphas, coefs * units, intercepts)

    @each_loss
    def test_without_standardising_units_are_penalty_weights(self, loss):
        problem = draw(loss, 7)
        units = 10.0 ** np.random.default_rng(7).uniform(-3, 3, 20)
        other = replace(
            problem, X=problem.X * units, penalty_weights=problem.penalty_weights * units
        )
        alphas = grid(problem)
        coefs, intercepts = answers(solve(other, alphas))
        solves(problem, alphas, coefs * units, intercepts)

    @each_kind
    def test_with_an_intercept_the_origin_of_columns_is_irrelevant(self, loss, settings):
        problem = draw(loss, 8, **settings)
        shift = np.random.default_rng(8).uniform(-1000, 1000, 20)
        other = replace(problem, X=problem.X + shift)
        alphas = grid(problem)
        coefs, intercepts = answers(solve(other, alphas))
        solves(problem, alphas, coefs, intercepts + coefs @ shift)

    @each_kind
    def test_an_infinite_weight_drops_the_column(self, loss, settings):
        problem = draw(loss, 9, **settings)
        kept = np.arange(20) != 6
        dropped = replace(
            problem, X=problem.X[:, kept], penalty_weights=problem.penalty_weights[kept]
        )
        alphas = grid(problem)
        coefs, intercepts = answers(solve(problem, alphas))
        assert not coefs[:, 6].any()
        solves(dropped, alphas, coefs[:, kept], intercepts)

    @pytest.mark.parametrize("l1_ratio", [1.0, 0.6])
    def test_an_unpenalised_column_may_be_regressed_out_first(self, l1_ratio):
        """Frisch, Waugh and Lovell: residuals on [1, u], then no intercept and no u."""
        problem = draw("squared_error", 10, l1_ratio=l1_ratio)
        free = np.column_stack([np.ones(60), problem.X[:, 5]])
        rest = np.delete(np.arange(20), [5, 6])
        table = np.column_stack([problem.y - problem.offset, problem.X[:, rest]])
        table -= free @ np.linalg.lstsq(free, table, rcond=None)[0]
        apart = Problem(
            table[:, 1:],
            table[:, 0],
            l1_ratio=l1_ratio,
            penalty_weights=problem.penalty_weights[rest],
            fit_intercept=False,
        )
        alphas = grid(problem)
        np.testing.assert_allclose(grid(apart), alphas, rtol=1e-10)
        solves(apart, alphas, answers(solve(problem, alphas))[0][:, rest], np.zeros(3))

    @each_kind
    def test_an_unpenalised_column_of_ones_is_an_intercept(self, loss, settings):
        problem = draw(loss, 11, **settings)
        other = replace(
            problem,
            X=np.column_stack([problem.X, np.ones(60)]),
            penalty_weights=np.r_[problem.penalty_weights, 0.0],
            fit_intercept=False,
        )
        alphas = grid(problem)
        coefs, intercepts = answers(solve(other, alphas))
        assert not intercepts.any()
        solves(problem, alphas, coefs[:, :20], coefs[:, 20])

    @each_loss
    def test_repeated_unpenalised_columns_count_once(self, loss):
        problem = draw(loss, 12)
        u = problem.X[:, 5]
        other = replace(
            problem,
            X=np.column_stack([problem.X, u, 3 * u - 1]),
            penalty_weights=np.r_[problem.penalty_weights, 0.0, 0.0],
        )
        alphas = grid(problem)
        coefs, intercepts = answers(solve(other, alphas))
        merged = coefs[:, :20].copy()
        merged[:, 5] += coefs[:, 20] + 3 * coefs[:, 21]
        solves(problem, alphas, merged, intercepts - coefs[:, 21])

    @each_loss
    def test_of_identical_columns_one_will_do(self, loss):
        problem = draw(loss, 13)
        other = replace(
            problem,
            X=np.column_stack([problem.X, problem.X[:, :3]]),
            penalty_weights=np.r_[problem.penalty_weights, problem.penalty_weights[:3]],
        )
        alphas = grid(problem)
        coefs, intercepts = answers(solve(other, alphas))
        merged = coefs[:, :20].copy()
        merged[:, :3] += coefs[:, 20:]
        solves(problem, alphas, merged, intercepts)

    @each_loss
    def test_a_constant_column_is_left_out_when_standardising(self, loss):
        problem = draw(loss, 14, standardize=True)
        X = problem.X.copy()
        X[:, 8] = -3.7
        alphas = grid(replace(problem, X=X))
        path = solve(replace(problem, X=X), alphas)
        kept = np.arange(20) != 8
        without = replace(
            problem, X=problem.X[:, kept], penalty_weights=problem.penalty_weights[kept]
        )
        coefs, intercepts = answers(path)
        assert not coefs[:, 8].any()
        solves(without, alphas, coefs[:, kept], intercepts)


class TestResponse:
    @pytest.mark.parametrize("settings", SETTINGS)
    def test_the_offset_of_the_squared_error_is_subtracted(self, settings):
        problem = draw("squared_error", 20, **settings)
        shifted = replace(problem, y=problem.y - problem.offset, offset=None)
        alphas = grid(problem)
        solves(shifted, alphas, *answers(solve(problem, alphas)))

    @each_loss
    def test_a_constant_offset_moves_the_intercept(self, loss):
        problem = draw(loss, 21)
        moved = replace(problem, offset=problem.offset + 1.5)
        alphas = grid(problem)
        coefs, intercepts = answers(solve(moved, alphas))
        solves(problem, alphas, coefs, intercepts + 1.5)

    @pytest.mark.parametrize("settings", SETTINGS)
    @pytest.mark.parametrize("unit", [1e-6, 1e6])
    def test_the_unit_of_the_response_is_that_of_coefficients(self, settings, unit):
        problem = draw("squared_error", 22, **settings)
        other = replace(problem, y=unit * problem.y, offset=unit * problem.offset)
        alphas = grid(problem)
        # The l1 part scales with the unit, the ridge part does not: for l1_ratio < 1 the ratio
        # that keeps alpha (1 - rho) while alpha rho grows by the unit.
        absolute, square = unit * problem.l1_ratio, 1 - problem.l1_ratio
        other = replace(other, l1_ratio=absolute / (absolute + square))
        coefs, intercepts = answers(solve(other, alphas * (absolute + square)))
        solves(problem, alphas, coefs / unit, intercepts / unit)

    def test_swapped_classes_swap_signs(self):
        problem = draw("log_loss", 23)
        swapped = replace(problem, y=1 - problem.y, offset=-problem.offset)
        alphas = grid(problem)
        coefs, intercepts = answers(solve(swapped, alphas))
        solves(problem, alphas, -coefs, -intercepts)

    @each_kind
    def test_the_largest_alpha_is_the_smallest_empty_model(self, loss, settings):
        problem = draw(loss, 24, **settings)
        edge = largest_alpha(problem)
        path = solve(problem, edge * np.array([1 + 1e-6, 1 - 1e-4]))
        penalised = problem.penalised
        assert not path.coef[[0]].toarray()[0][penalised].any()
        assert np.count_nonzero(path.coef[[1]].toarray()[0][penalised]) == 1

    @each_kind
    def test_a_counted_grid_starts_there_and_ends_at_a_thousandth(self, loss, settings):
        problem = draw(loss, 25, **settings)
        path = solve(problem, 4, tol=1e-6)
        expected = largest_alpha(problem) * 10.0 ** -np.arange(4)
        np.testing.assert_allclose(path.alphas, expected, rtol=1e-9)

    @pytest.mark.parametrize("why", ["constant", "explained", "zero"])
    def test_where_nothing_is_left_to_explain_coefficients_are_zero(self, why):
        problem = draw("squared_error", 26)
        free = problem.X[:, 5]
        y = {"constant": np.full(60, 3.3), "explained": 2 * free + 1, "zero": np.zeros(60)}[why]
        path = solve(replace(problem, y=y, offset=None), [1.0, 0.1, 1e-6])
        coefs, intercepts = answers(path)
        assert not coefs[:, problem.penalised].any()
        np.testing.assert_array_equal(path.gap, 0.0)
        np.testing.assert_allclose(np.outer(coefs[:, 5], free) + intercepts[:, None], [y] * 3)

    @each_loss
    def test_with_all_columns_left_out_the_null_model_remains(self, loss):
        problem = replace(draw(loss, 27), penalty_weights=np.full(20, np.inf))
        path = solve(problem, [0.1])
        assert path.coef.nnz == 0 and path.gap[0] <= TOL
        value = problem.objective(np.zeros(20), path.intercept[0], 0.1)
        np.testing.assert_allclose(value, null_objective(problem), rtol=1e-12)

    def test_one_row_and_one_column(self):
        assert penalized_path([[2.0]], [3.0], alphas=[0.1]).intercept[0] == 3.0
        path = penalized_path([[2.0]], [3.0], alphas=[0.5], fit_intercept=False)
        np.testing.assert_allclose(path.coef.toarray(), [[(2 * 3 - 0.5) / 4]], rtol=1e-7)


class TestNearlySingularTables:
    @pytest.mark.parametrize(
        ("loss", "apart"),
        [(loss, apart) for loss in LOSSES for apart in (1e-12, 1e-9)],
    )
    def test_columns_that_nearly_repeat_each_other(self, loss, apart):
        """The second of a pair is of no use; plain descent takes under a thousand sweeps."""
        rng = np.random.default_rng(29)
        first = rng.standard_normal((74, 150))
        X = np.hstack([first, first + apart * rng.standard_normal(first.shape)])
        y = first[:, :10].sum(axis=1) + rng.standard_normal(74)
        y = y if loss == "squared_error" else (y > 0).astype(float)
        problem = Problem(X, y, loss)
        alphas = largest_alpha(problem) * np.geomspace(1, 0.01, 10)
        path = penalized_path(X, y, alphas=alphas, max_iter=1000, loss=loss)
        solves(problem, alphas, *answers(path), tol=1e-7)

    @each_loss
    def test_columns_that_unpenalised_ones_explain(self, loss):
        problem = draw(loss, 35)
        u = problem.X[:, 5]
        X = np.outer(u, np.linspace(-3, 3, 20)) + np.linspace(0, 9, 20)
        X[:, 5] = u
        path = solve(replace(problem, X=X), 5)
        assert np.all(path.status == Status.CONVERGED)
        assert not answers(path)[0][:, np.arange(20) != 5].any()


UNITS = 1e-60, 1e-30, 1e30, 1e60
REFUSED_UNITS = 1e-160, 1e160


class TestUnitsBeyondReason:
    """In any units an answer is right, or refused, or a failed status; never a false proof."""

    @pytest.mark.parametrize("standardize", [False, True])
    @pytest.mark.parametrize(
        ("loss", "what", "unit"),
        [
            *[("squared_error", "y", unit) for unit in UNITS],
            *[(loss, "X", unit) for loss in LOSSES for unit in UNITS],
        ],
    )
    def test_nothing_false_is_certified(self, loss, what, unit, standardize):
        problem = replace(draw(loss, 28, standardize=standardize), offset=None)
        alphas, null = grid(problem), null_objective(problem)
        given = replace(problem, **{what: getattr(problem, what) * unit})
        # Standardising leaves alpha alone where X changes units.
        scaled = alphas if standardize and what == "X" else alphas * unit
        path = penalized_path(given.X, given.y, alphas=scaled, **given.settings)
        coefs, intercepts = answers(path)
        coefs, intercepts = (coefs * unit, intercepts) if what == "X" else (
            coefs / unit, intercepts / unit
        )  # fmt: skip
        for k in np.flatnonzero(path.status == Status.CONVERGED):
            found = certified_gap(problem, coefs[k], intercepts[k], alphas[k])
            assert found <= (1e-7 + ROUNDING) * null

    @pytest.mark.parametrize("unit", REFUSED_UNITS)
    @pytest.mark.parametrize(("loss", "what"), [("squared_error", "y"), *product(LOSSES, "X")])
    def test_units_whose_squares_leave_double_precision_are_refused(self, loss, what, unit):
        problem = replace(draw(loss, 28), offset=None)
        given = replace(problem, **{what: getattr(problem, what) * unit})
        with pytest.raises(ValueError, match=r"allowed is 0, or 1e-100 to 1e\+100.*Change"):
            solve(given, 3)


class TestContainers:
    FORMS = (
        "C order",
        "F order",
        "strided",
        "read-only",
        "memory map",
        "csc_array",
        "csc_matrix",
        "csr_array",
        "csr_matrix",
        "coo_array",
        "read-only csc",
        "unsorted csc",
        "list",
        "pandas",
        "polars",
    )

    def wrap(self, X, form, folder):
        if form == "strided":
            return np.repeat(X, 2, axis=1)[:, ::2]
        if form == "memory map":
            np.save(folder / "X.npy", X)
            return np.load(folder / "X.npy", mmap_mode="r")
        if form == "unsorted csc":
            table = sp.csc_array(X)
            table.indices = np.concatenate([part[::-1] for part in np.split(table.indices, 20)])
            table.data = np.concatenate([part[::-1] for part in np.split(table.data, 20)])
            table.has_sorted_indices = False
            return table
        if form == "list":
            return X.tolist()
        if form == "pandas":
            return pd.DataFrame(X)
        if form == "polars":
            return pl.DataFrame(X)
        if "order" in form:
            return np.array(X, order=form[0])
        if form in ("read-only", "read-only csc"):
            table = X.copy() if form == "read-only" else sp.csc_array(X)
            for part in [table] if form == "read-only" else [table.data, table.indices]:
                part.flags.writeable = False
            return table
        return getattr(sp, form)(X)

    @each_loss
    @pytest.mark.parametrize("dtype", [np.float64, np.float32])
    @pytest.mark.parametrize("form", FORMS)
    def test_every_container_gives_the_same_answer(self, form, dtype, loss, tmp_path):
        problem = draw(loss, 30, standardize=True)
        exact = replace(problem, X=problem.X.astype(dtype).astype(np.float64))
        alphas = grid(exact)
        table = self.wrap(problem.X.astype(dtype), form, tmp_path)
        solves(exact, alphas, *answers(solve(replace(problem, X=table), alphas)))

    @each_loss
    def test_integers_and_booleans_are_numbers(self, loss):
        problem = draw(loss, 31)
        for table in ((10 * problem.X).astype(np.int32), problem.X > 0):
            exact = replace(problem, X=table.astype(np.float64))
            alphas = grid(exact)
            solves(exact, alphas, *answers(solve(replace(problem, X=table), alphas)))

    @each_kind
    def test_single_precision_is_near_double(self, loss, settings):
        """Each answer is best for its own table, so by its own the other can be better only by
        what rounding X changes in the two objectives.
        """
        double = draw(loss, 32, **settings)
        single = replace(double, X=double.X.astype(np.float32))
        alphas, null = grid(double), null_objective(double)
        pairs = [zip(*answers(solve(problem, alphas)), strict=True) for problem in (double, single)]
        for alpha, of_double, of_single in zip(alphas, *pairs, strict=True):
            moved = [
                abs(single.objective(*point, alpha) - double.objective(*point, alpha))
                for point in (of_double, of_single)
            ]
            excess = double.objective(*of_single, alpha) - double.objective(*of_double, alpha)
            assert sum(moved) <= 1e-6 * null
            assert -TOL * null <= excess <= sum(moved) + (TOL + ROUNDING) * null

    def test_nothing_given_is_written_to(self):
        problem = draw("squared_error", 33, sample_weight=np.ones(60))
        given = [
            problem.X, problem.y, problem.penalty_weights, problem.offset, problem.sample_weight
        ]  # fmt: skip
        before = [array.copy() for array in given]
        for array in given:
            array.flags.writeable = False
        alphas = grid(problem)
        alphas.flags.writeable = False
        solve(problem, alphas)
        for array, copy in zip(given, before, strict=True):
            np.testing.assert_array_equal(array, copy)


class TestWorkers:
    @staticmethod
    def bank(loss):
        rng = np.random.default_rng([40, LOSSES.index(loss)])
        X = rng.standard_normal((40, 300))
        y = X[:, :3].sum(axis=1) + rng.standard_normal(40)
        y = y if loss == "squared_error" else (y > 0).astype(float)
        weights = (rng.random((130, 40)) < 0.7).astype(float)
        return as_design(X), Problems(loss, y, sample_weight=weights, standardize=True)

    @staticmethod
    def run(loss, settings):
        design, problems = TestWorkers.bank(loss)
        keep = Keep(coefficients=True, entries=8, held_out=1 - problems.sample_weight)
        return solve_bank(design, problems, 12, keep=keep, settings=settings)

    @staticmethod
    def assert_same_bits(one, other):
        for name in (
            "alphas alpha_max null_objective n_left_out gap status n_iter intercept entry_order "
            "held_out_loss"
        ).split():
            np.testing.assert_array_equal(getattr(one, name), getattr(other, name), err_msg=name)
        for a, b in zip(one.coef, other.coef, strict=True):
            for part in ("data", "indices", "indptr"):
                np.testing.assert_array_equal(getattr(a, part), getattr(b, part))

    @each_loss
    def test_one_and_two_threads_give_the_same_bits(self, loss):
        alone = self.run(loss, TaskSettings(n_jobs=1))
        self.assert_same_bits(alone, self.run(loss, TaskSettings(n_jobs=2, prefer="threads")))

    def test_threads_and_processes_give_the_same_bits(self):
        alone = {loss: self.run(loss, TaskSettings(n_jobs=1)) for loss in LOSSES}
        with joblib.parallel_config("loky", n_jobs=2):
            for loss in LOSSES:
                self.assert_same_bits(alone[loss], self.run(loss, TaskSettings(n_jobs=2)))

    @each_loss
    def test_the_same_call_gives_the_same_bits(self, loss):
        self.assert_same_bits(self.run(loss, TaskSettings()), self.run(loss, TaskSettings()))


class TestFailures:
    @each_loss
    def test_too_few_sweeps_are_one_warning_with_advice_and_an_honest_gap(self, loss):
        problem = draw(loss, 50)
        alphas, null = grid(problem) / 100, null_objective(problem)
        with pytest.warns(ConvergenceWarning) as caught:
            path = penalized_path(
                problem.X, problem.y, alphas=alphas, tol=1e-12, max_iter=1, **problem.settings
            )
        assert len(caught) == 1
        message = str(caught[0].message)
        assert "3 of 3 solves ended without reaching a relative duality gap of 1e-12" in message
        assert "not certified" in message and "raise max_iter or tol" in message
        np.testing.assert_array_equal(path.status, Status.MAX_ITER)
        for k, alpha in enumerate(alphas):
            point = path.coef[[k]].toarray()[0], path.intercept[k]
            best = solve(problem, [alpha], tol=1e-10)
            optimum = problem.objective(best.coef.toarray()[0], best.intercept[0], alpha)
            above = problem.objective(*point, alpha) - optimum
            assert path.gap[k] > 1e-12
            assert path.gap[k] * null >= above - ROUNDING * null

    def test_a_bank_counts_its_failures_and_warns_in_the_parent_once(self):
        rng = np.random.default_rng(51)
        X, y = rng.standard_normal((30, 60)), rng.standard_normal((3, 30))
        problems = Problems("squared_error", y)
        result = solve_bank(as_design(X), problems, [0.001, 0.0001], tol=1e-12, max_iter=1)
        assert result.failed.sum() == 6
        with pytest.warns(ConvergenceWarning, match="6 of 6 solves") as caught:
            warn_failures(result, 1e-12)
        assert len(caught) == 1

    def test_a_success_is_silent(self, recwarn):
        problem = draw("squared_error", 52)
        solve(problem, grid(problem))
        assert not recwarn.list
