"""`penalized_path` and `solve_bank` against the same problems solved by cvxpy."""

from __future__ import annotations

import inspect
import sys
from collections import Counter
from dataclasses import replace
from itertools import product

import numpy as np
import pytest
import scipy.sparse as sp
from oracles import (
    Problem,
    certified_gap,
    decided_support,
    held_out_loss,
    largest_alpha,
    null_fit,
    null_objective,
    order_of_entry,
    sharpened,
)
from sklearn.exceptions import ConvergenceWarning

from sparsesel.engine import (
    Keep,
    Problems,
    Status,
    as_design,
    certificate,
    penalized_path,
    reference,
    solve_bank,
)
from sparsesel.engine.reference import (
    objective_value,
    reference_path,
    reference_s_vector,
    reference_solution,
)

LOSSES = ("squared_error", "log_loss")
STORAGE = ("float64", "float32", "sparse")
RATIOS = (1.0, "between", 0.02)
REPEATS = 18
KINDS = list(product(LOSSES, STORAGE, RATIOS))
CASES = [(*kind, repeat) for kind in KINDS for repeat in range(REPEATS)]
FRACTIONS = np.array([0.9, 0.4, 0.1, 0.02])


def draw_table(rng, n, p, storage):
    X = rng.standard_normal((n, p)) + rng.uniform(0, 3) * rng.standard_normal((n, 1))
    traits = []
    if storage == "sparse":
        X *= rng.random((n, p)) < 0.3
    else:
        X += rng.choice([0.0, 5.0]) * rng.standard_normal(p)
    X *= 10 ** rng.uniform(-2, 2) * 10 ** rng.uniform(-0.5, 0.5, p)
    columns = list(rng.permutation(p))
    if rng.random() < 0.5:
        X[:, columns.pop()] = X[:, columns[0]]
        traits.append("duplicate")
    if rng.random() < 0.5:
        X[:, columns.pop()] = 2 * X[:, columns[0]] - X[:, columns[1]]
        traits.append("collinear")
    if rng.random() < 0.5:
        X[:, columns.pop()] = rng.choice([0.0, 1.7])
        traits.append("constant")
    if storage == "sparse":
        return sp.csc_array(X), X, traits
    return X.astype(storage), X, traits


def draw_response(rng, signal, loss):
    signal = (signal - signal.mean()) / (signal.std() or 1.0)
    noisy = signal + rng.uniform(0.3, 2) * rng.standard_normal(signal.size)
    if loss == "squared_error":
        return 10 ** rng.uniform(-3, 3) * (noisy + rng.uniform(-3, 3))
    return (noisy > np.median(noisy)).astype(float)


def draw(case):
    """A random problem and what is special about it."""
    loss, storage, ratio, repeat = case
    position = LOSSES.index(loss), STORAGE.index(storage), RATIOS.index(ratio), repeat
    rng = np.random.default_rng(position)
    n, p = int(rng.integers(12, 41)), int(rng.integers(5, 41))
    X, dense, traits = draw_table(rng, n, p, storage)
    traits += [loss, storage, f"l1_ratio {ratio}", "n < p" if n < p else "n >= p"]

    def sometimes(name, share=0.5):
        happens = bool(rng.random() < share)
        traits.extend([name] * happens)
        return happens

    weight = rng.uniform(0.2, 3, n) if sometimes("sample weights") else None
    if weight is not None and sometimes("zero weights"):
        weight[rng.permutation(n)[: n // 5]] = 0.0
    v = rng.uniform(0.3, 3, p) if sometimes("penalty weights") else np.ones(p)
    if sometimes("unpenalised"):
        v[rng.permutation(p)[: rng.integers(1, 3)]] = 0.0
    if sometimes("excluded"):
        v[rng.permutation(p)[: p // 4]] = np.inf
    y = draw_response(rng, dense @ (rng.standard_normal(p) * (rng.random(p) < 0.3)), loss)
    problem = Problem(
        X,
        y,
        loss,
        l1_ratio=float(rng.choice([0.05, 0.5, 0.9])) if ratio == "between" else ratio,
        penalty_weights=v,
        sample_weight=weight,
        offset=rng.standard_normal(n) * y.std() if sometimes("offset") else None,
        fit_intercept=sometimes("intercept", 0.7),
        standardize=sometimes("standardised"),
    )
    if loss == "log_loss" and np.abs(null_fit(problem)).max() > 15:
        # Unpenalised columns that separate the classes leave no optimum; that is an error.
        traits.remove("unpenalised")
        problem = replace(problem, penalty_weights=np.where(v == 0, 1.0, v))
    return problem, traits


def grid(problem):
    # At an l1_ratio near 0 the smallest empty model is reached at an alpha so large that no ridge
    # solution worth having is near it; that of an equal mixture gives the order of magnitude.
    return largest_alpha(problem, max(problem.l1_ratio, 0.5)) * FRACTIONS


class TestRandomProblems:
    """Both losses, three containers, three mixtures; everything else is drawn."""

    # What one objective may differ by from another through rounding alone, relative to the null.
    ROUNDING = 1e-12

    def test_there_are_enough_of_every_kind(self):
        traits = [draw(case)[1] for case in CASES]
        counts = Counter(trait for of_one in traits for trait in of_one)
        assert len(CASES) >= 300
        assert set(counts) == {
            *LOSSES, *STORAGE, "l1_ratio 1.0", "l1_ratio between", "l1_ratio 0.02", "n < p",
            "n >= p", "sample weights", "zero weights", "penalty weights", "unpenalised",
            "excluded", "offset", "intercept", "standardised", "duplicate", "collinear", "constant",
        }  # fmt: skip
        assert min(counts.values()) >= 60, counts

    @pytest.mark.parametrize(("loss", "storage", "ratio"), KINDS)
    def test_agree_with_cvxpy(self, loss, storage, ratio):
        decided = candidates = 0
        for repeat in range(REPEATS):
            case = loss, storage, ratio, repeat
            problem, traits = draw(case)
            alphas = grid(problem)
            null = null_objective(problem)
            path = penalized_path(
                problem.X, problem.y, alphas=alphas, tol=1e-10, **problem.settings
            )
            optima = reference_path(problem.X, problem.y, alphas=alphas, **problem.settings)
            assert np.all(path.status == Status.CONVERGED), (case, traits)
            for k, (alpha, optimum) in enumerate(zip(alphas, optima, strict=True)):
                point = path.coef[[k]].toarray()[0], path.intercept[k]
                self.check_objective(problem, point, alpha, path.gap[k], 1e-10, null, optimum)
                sharp = sharpened(problem, optimum.coef, optimum.intercept, alpha)
                gap = max(path.gap[k], 0.0) * null
                zero, nonzero = decided_support(problem, *sharp, alpha, gap)
                assert not point[0][zero].any(), (case, k, traits)
                assert point[0][nonzero].all(), (case, k, traits)
                decided += np.count_nonzero(zero | nonzero)
                candidates += np.count_nonzero(problem.penalised)
        # Ties must stay the exception, or the comparison of supports would say nothing.
        assert decided >= 0.9 * candidates

    def check_objective(self, problem, point, alpha, gap, tol, null, optimum):
        assert optimum.status == "optimal"
        value = objective_value(problem.X, problem.y, *point, alpha=alpha, **problem.settings)
        # Relative to the optimum, the smaller of the scales one could take.
        assert abs(value - optimum.objective) <= 1e-6 * optimum.objective
        # cvxpy's point is above the optimum, so this difference is at most the true gap.
        assert gap <= tol
        assert gap * null >= value - optimum.objective - self.ROUNDING * null
        assert gap >= -self.ROUNDING
        assert certified_gap(problem, *point, alpha) <= (tol + self.ROUNDING) * null

    @pytest.mark.parametrize("loss", LOSSES)
    def test_the_default_tolerance_is_kept_too(self, loss):
        for storage, ratio in product(STORAGE, RATIOS):
            problem, traits = draw((loss, storage, ratio, 0))
            alphas, null = grid(problem), null_objective(problem)
            path = penalized_path(problem.X, problem.y, alphas=alphas, **problem.settings)
            assert np.all(path.gap <= 1e-7), traits
            for k, alpha in enumerate(alphas):
                point = path.coef[[k]].toarray()[0], path.intercept[k]
                assert certified_gap(problem, *point, alpha) <= 1.001e-7 * null, traits

    @pytest.mark.parametrize("loss", LOSSES)
    def test_the_two_statements_of_the_objective_agree(self, loss):
        """The reference's objective and the oracle's were written from the formula separately."""
        for storage, ratio in product(STORAGE, RATIOS):
            problem, _ = draw((loss, storage, ratio, 1))
            rng = np.random.default_rng(7)
            coef = np.where(np.isinf(problem.v), 0.0, rng.standard_normal(problem.v.size))
            intercept = 0.3 * problem.fit_intercept
            value = objective_value(
                problem.X, problem.y, coef, intercept, alpha=0.7, **problem.settings
            )
            np.testing.assert_allclose(value, problem.objective(coef, intercept, 0.7), rtol=1e-12)


def small(loss, n=40, p=12, seed=0):
    rng = np.random.default_rng([seed, LOSSES.index(loss)])
    X = rng.standard_normal((n, p)) + rng.standard_normal((n, 1))
    y = X[:, :3] @ [1.0, -1.0, 0.5] + rng.standard_normal(n)
    return X, y if loss == "squared_error" else (y > np.median(y)).astype(float)


class TestReference:
    def test_orthogonal_columns_have_a_closed_form(self):
        """X'X = nI: soft(z, alpha rho v) / (1 + alpha (1 - rho) v), z = X'y/n."""
        rng = np.random.default_rng(3)
        n, alpha, rho = 24, 0.4, 0.6
        X = np.sqrt(n) * np.linalg.qr(rng.standard_normal((n, 6)))[0]
        y, v = X @ np.array([2, -1, 0.5, 0.2, 0.1, 1.0]) + 0.1, np.array([1, 2, 1, 0.5, 3, 0.0])
        z = X.T @ y / n
        expected = np.sign(z) * np.maximum(np.abs(z) - alpha * rho * v, 0)
        expected /= 1 + alpha * (1 - rho) * v
        found = reference_solution(
            X, y, loss="squared_error", alpha=alpha, l1_ratio=rho, penalty_weights=v,
            fit_intercept=False,
        )  # fmt: skip
        np.testing.assert_allclose(found.coef, expected, atol=1e-8)

    def test_ridge_is_the_solution_of_the_normal_equations(self):
        X, y = small("squared_error")
        centred, rows = X - X.mean(axis=0), len(y)
        gram = centred.T @ centred / rows + 0.3 * np.eye(X.shape[1])
        expected = np.linalg.solve(gram, centred.T @ (y - y.mean()) / rows)
        found = reference_solution(X, y, loss="squared_error", alpha=0.3, l1_ratio=0.0)
        np.testing.assert_allclose(found.coef, expected, atol=1e-7)

    @pytest.mark.parametrize("loss", LOSSES)
    def test_points_outside_the_problem_cost_infinity(self, loss):
        X, y = small(loss)
        coef, v = np.zeros(12), np.ones(12)
        coef[2], v[2] = 1.0, np.inf
        settings = {"loss": loss, "alpha": 0.1}
        assert objective_value(X, y, coef, 0.0, penalty_weights=v, **settings) == np.inf
        assert np.isfinite(objective_value(X, y, coef, 0.0, **settings))
        assert objective_value(X, y, coef, 1.0, fit_intercept=False, **settings) == np.inf

    def test_the_next_solver_takes_over_and_says_so(self, monkeypatch):
        X, y = small("log_loss")
        first = reference_solution(X, y, loss="log_loss", alpha=0.1)
        impatient = ("CLARABEL", {"max_iter": 1})
        monkeypatch.setattr(reference, "_SOLVERS", (impatient, reference._SOLVERS[1]))
        second = reference_solution(X, y, loss="log_loss", alpha=0.1)
        assert (first.solver, first.status) == ("CLARABEL", "optimal")
        assert (second.solver, second.status) == ("SCS", "optimal")
        assert abs(second.objective - first.objective) <= 1e-7 * first.objective

    def test_a_near_answer_is_called_inaccurate(self, monkeypatch):
        X, y = small("log_loss")
        # A tolerance out of reach, and the reduced one in reach.
        near = {"tol_gap_abs": 0.0, "tol_gap_rel": 0.0, "tol_feas": 0.0, "max_iter": 500}
        monkeypatch.setattr(reference, "_SOLVERS", (("CLARABEL", near),))
        found = reference_solution(X, y, loss="log_loss", alpha=0.1)
        assert found.status == "optimal_inaccurate"

    def test_no_answer_is_an_error_that_names_what_the_solvers_said(self, monkeypatch):
        X, y = small("log_loss")
        monkeypatch.setattr(reference, "_SOLVERS", (("CLARABEL", {"max_iter": 1}),))
        with pytest.raises(RuntimeError, match=r"no solver found.*CLARABEL: .*must be.*Check"):
            reference_solution(X, y, loss="log_loss", alpha=0.1)

    @pytest.mark.parametrize(
        ("change", "message"),
        [
            ({"loss": "hinge"}, "loss is 'hinge'.*squared_error.*Choose"),
            ({"alpha": -0.5}, r"alpha holds -0\.5.*at least 0.*Pass"),
            ({"l1_ratio": 1.5}, r"l1_ratio is 1\.5.*from 0 .* to 1 .*Pass"),
            ({"loss": "log_loss"}, "the response holds .*takes 0 and 1.*Code"),
        ],
    )
    def test_bad_input_is_named(self, change, message):
        X, y = small("squared_error")
        with pytest.raises(ValueError, match=message):
            reference_solution(X, y, **{"loss": "squared_error", "alpha": 0.1, **change})

    def test_without_cvxpy_the_extra_is_named(self, monkeypatch):
        monkeypatch.setitem(sys.modules, "cvxpy", None)
        X, y = small("squared_error")
        with pytest.raises(ImportError, match=r"cvxpy is not installed.*'sparsesel\[reference\]'"):
            reference_solution(X, y, loss="squared_error", alpha=0.1)

    @pytest.mark.parametrize("correlation", [0.0, 0.3, 0.8])
    def test_the_semidefinite_program_of_equal_correlations(self, correlation):
        """The optimum is min(1, 2 (1 - rho)) (recomputed; standard)."""
        sigma = np.full((5, 5), correlation) + (1 - correlation) * np.eye(5)
        expected = min(1.0, 2 * (1 - correlation))
        np.testing.assert_allclose(reference_s_vector(sigma), expected, atol=1e-6)

    def test_the_semidefinite_program_is_optimal_by_duality(self):
        """A dual point Z >= 0, lambda = (1 - diag Z)_+ bounds the sum by 2 tr(Z S) + sum(lambda).

        Z is the projector on the eigenvectors of 2S - diag(s) near zero, weighted so that its
        diagonal is 1 where s lies inside its bounds (complementary slackness).
        """
        sigma = 0.7 ** np.abs(np.subtract.outer(np.arange(8), np.arange(8)))
        s = reference_s_vector(sigma)
        values, vectors = np.linalg.eigh(2 * sigma - np.diag(s))
        assert values[0] >= -1e-8
        null = vectors[:, values < 1e-5]
        target = np.eye(8)
        inside = s < 1 - 1e-5
        pairs = [(a, b) for a in range(null.shape[1]) for b in range(a + 1)]
        design = np.stack([null[inside, a] * null[inside, b] for a, b in pairs], axis=1)
        weights = np.linalg.lstsq(design, np.diag(target)[inside], rcond=None)[0]
        core = np.zeros((null.shape[1], null.shape[1]))
        for (a, b), weight in zip(pairs, weights, strict=True):
            core[a, b] += weight / 2
            core[b, a] += weight / 2
        Z = null @ core @ null.T
        assert np.linalg.eigvalsh(Z)[0] >= -1e-6
        bound = 2 * np.trace(Z @ sigma) + np.maximum(1 - np.diag(Z), 0).sum()
        assert abs(bound - s.sum()) <= 1e-4

    def test_a_covariance_is_not_a_correlation(self):
        with pytest.raises(ValueError, match=r"shape \(2, 2\); it must be square.*Divide"):
            reference_s_vector([[4.0, 1.0], [1.0, 4.0]])


LOSS_AND_RATIO = list(product(LOSSES, (1.0, 0.7)))


class TestBank:
    """A bank of many problems against one call of `penalized_path` each, and what it keeps."""

    B, N, P = 7, 40, 15

    def problems(self, loss, l1_ratio, *, standardize=True):
        rng = np.random.default_rng([11, LOSSES.index(loss)])
        X = rng.standard_normal((self.N, self.P)) * rng.uniform(0.5, 2, self.P)
        X[:, 4] = X[:, 3]
        signal = X[:, :4] @ [1.0, -1.0, 0.5, 0.5]
        responses = signal + rng.standard_normal((self.B, self.N))
        if loss == "log_loss":
            responses = (responses > 0).astype(float)
        weights = rng.uniform(0.5, 2, (self.B, self.N)) * (rng.random((self.B, self.N)) < 0.8)
        penalty = rng.uniform(0.5, 2, (self.B, self.P))
        penalty[:, 9], penalty[2, 10], penalty[3, 5:8] = 0.0, 0.0, np.inf
        return X, Problems(
            loss,
            responses,
            sample_weight=weights,
            penalty_weights=penalty,
            offset=0.1 * rng.standard_normal(self.N),
            l1_ratio=l1_ratio,
            standardize=standardize,
        )

    def one(self, X, problems, b):
        """Problem b of the bank for the oracles."""

        def row(array):
            return array[b] if np.ndim(array) == 2 else array

        return Problem(
            X,
            row(problems.response),
            problems.loss,
            problems.l1_ratio,
            row(problems.penalty_weights),
            row(problems.sample_weight),
            problems.offset,
            problems.fit_intercept,
            problems.standardize,
        )

    def check_against_singles(self, X, problems, bank, tol):
        for b in range(problems.count):
            one = self.one(X, problems, b)
            path = penalized_path(X, one.y, alphas=bank.alphas[b], tol=tol, **one.settings)
            for k, alpha in enumerate(bank.alphas[b]):
                of_bank = one.objective(bank.coef[b][[k]].toarray()[0], bank.intercept[b, k], alpha)
                alone = one.objective(path.coef[[k]].toarray()[0], path.intercept[k], alpha)
                # Each is above the optimum by its own gap at most.
                allowed = max(bank.gap[b, k], path.gap[k]) + 1e-12
                assert abs(of_bank - alone) <= allowed * bank.null_objective[b]
            assert np.all(bank.gap[b] <= tol) and np.all(bank.status[b] == Status.CONVERGED)

    @pytest.mark.parametrize(("loss", "l1_ratio"), LOSS_AND_RATIO)
    def test_equals_separate_paths(self, loss, l1_ratio):
        X, problems = self.problems(loss, l1_ratio)
        bank = solve_bank(as_design(X), problems, 8, alpha_min_ratio=0.02, tol=1e-9)
        self.check_against_singles(X, problems, bank, 1e-9)

    @pytest.mark.parametrize("loss", LOSSES)
    @pytest.mark.parametrize("shared", ["response", "sample_weight", "penalty_weights"])
    def test_what_all_problems_share_may_be_given_once(self, loss, shared):
        X, problems = self.problems(loss, 1.0)
        once = replace(problems, **{shared: getattr(problems, shared)[0]})
        repeated = replace(problems, **{shared: np.tile(getattr(once, shared), (self.B, 1))})
        one = solve_bank(as_design(X), once, 6)
        two = solve_bank(as_design(X), repeated, 6)
        for name in ("alphas", "gap", "intercept", "null_objective"):
            np.testing.assert_array_equal(getattr(one, name), getattr(two, name))
        for a, b in zip(one.coef, two.coef, strict=True):
            np.testing.assert_array_equal(a.toarray(), b.toarray())

    @pytest.mark.parametrize("own", [False, True])
    def test_grids_are_common_or_each_its_own(self, own):
        X, problems = self.problems("squared_error", 1.0)
        alphas = np.array([0.5, 0.2, 0.05])
        grid = np.outer(np.linspace(0.5, 1, self.B), alphas) if own else alphas
        bank = solve_bank(as_design(X), problems, grid, tol=1e-9)
        np.testing.assert_array_equal(bank.alphas, np.broadcast_to(grid, (self.B, 3)))
        self.check_against_singles(X, problems, bank, 1e-9)

    def test_more_problems_than_a_chunk_holds(self):
        X, problems = self.problems("squared_error", 1.0)
        many = replace(
            problems,
            **{
                name: np.tile(getattr(problems, name), (20, 1))
                for name in ("response", "sample_weight", "penalty_weights")
            },
        )
        bank = solve_bank(as_design(X), many, 5, tol=1e-9)
        assert bank.gap.shape == (140, 5) and len(bank.coef) == 140
        self.check_against_singles(X, many, bank, 1e-9)

    @pytest.mark.parametrize(("loss", "l1_ratio"), LOSS_AND_RATIO)
    def test_null_models_grids_and_constant_columns(self, loss, l1_ratio):
        X, problems = self.problems(loss, l1_ratio)
        X[:, 13] = 2.0
        X[:, 14] = np.where(problems.sample_weight[1] > 0, 1.0, X[:, 14])  # constant in problem 1
        bank = solve_bank(as_design(X), problems, 5, alpha_min_ratio=0.1)
        for b in range(self.B):
            one = self.one(X, problems, b)
            np.testing.assert_allclose(bank.null_objective[b], null_objective(one), rtol=1e-10)
            np.testing.assert_allclose(bank.alpha_max[b], largest_alpha(one), rtol=1e-9)
        np.testing.assert_allclose(bank.alphas[:, 0], bank.alpha_max, rtol=1e-14)
        np.testing.assert_allclose(
            bank.alphas, bank.alpha_max[:, None] * 0.1 ** np.linspace(0, 1, 5)
        )
        np.testing.assert_array_equal(bank.n_left_out, np.where(np.arange(self.B) == 1, 2, 1))

    @pytest.mark.parametrize(("loss", "l1_ratio"), LOSS_AND_RATIO)
    def test_held_out_losses(self, loss, l1_ratio):
        X, problems = self.problems(loss, l1_ratio)
        rest = np.where(problems.sample_weight > 0, 0.0, np.arange(1.0, self.N + 1))
        keep = Keep(coefficients=True, held_out=rest)
        bank = solve_bank(as_design(X), problems, 6, keep=keep)
        for b in range(self.B):
            one = self.one(X, problems, b)
            expected = [
                held_out_loss(one, bank.coef[b][[k]].toarray()[0], bank.intercept[b, k], rest[b])
                for k in range(6)
            ]
            np.testing.assert_allclose(bank.held_out_loss[b], expected, rtol=1e-9)

    @pytest.mark.parametrize(("loss", "standardize"), list(product(LOSSES, [False, True])))
    def test_order_of_entry_and_where_the_path_stops(self, loss, standardize):
        X, problems = self.problems(loss, 1.0, standardize=standardize)
        keep = Keep(coefficients=True, entries=5)
        bank = solve_bank(as_design(X), problems, 40, keep=keep)
        whole = solve_bank(as_design(X), problems, 40)
        for b in range(self.B):
            one = self.one(X, problems, b)
            coefs = whole.coef[b].toarray()
            coefs[:, one.v == 0] = 0.0
            scales = replace(one, standardize=True).scales
            np.testing.assert_array_equal(bank.entry_order[b], order_of_entry(coefs, scales, 5))
            entered = np.logical_or.accumulate(coefs != 0).sum(axis=1)
            reached = np.arange(40) <= np.argmax(entered >= 5)
            assert 1 < reached.sum() < 40
            assert np.all(bank.status[b][~reached] == Status.NOT_REACHED)
            assert np.all(bank.status[b][reached] == Status.CONVERGED)
            assert np.isnan(bank.gap[b][~reached]).all()
            assert np.all(bank.gap[b][reached] <= 1e-7)
            np.testing.assert_array_equal(
                bank.coef[b].toarray()[reached], whole.coef[b].toarray()[reached]
            )

    def test_fewer_entries_than_asked_for_are_padded(self):
        X, problems = self.problems("squared_error", 1.0)
        bank = solve_bank(as_design(X), problems, 3, keep=Keep(entries=15), alpha_min_ratio=0.3)
        assert bank.coef is None
        assert np.all((bank.entry_order >= 0).sum(axis=1) < 15)
        for order in bank.entry_order:
            present = order[order >= 0]
            assert np.unique(present).size == present.size
            assert np.all(order[present.size :] == -1)

    def test_units_enter_with_their_first_column(self):
        X, problems = self.problems("squared_error", 1.0)
        units = np.arange(self.P) // 3
        keep = Keep(entries=3, entry_units=units)
        bank = solve_bank(as_design(X), problems, 40, keep=keep)
        columns = solve_bank(as_design(X), problems, 40, keep=Keep(entries=self.P))
        for b in range(self.B):
            order = units[columns.entry_order[b][columns.entry_order[b] >= 0]]
            first = list(dict.fromkeys(order))[:3]
            np.testing.assert_array_equal(bank.entry_order[b], first)

    def test_arrays_that_disagree_are_refused(self):
        X, problems = self.problems("squared_error", 1.0)
        problems = replace(problems, penalty_weights=problems.penalty_weights[:3])
        with pytest.raises(ValueError, match=r"have \[3, 7\] rows.*must.*Give"):
            solve_bank(as_design(X), problems, 3)


class TestWideTables:
    """Many columns, where most are never multiplied: the oracle multiplies them all."""

    N, P, L = 70, 1500, 15

    def table(self, rng, storage):
        X = rng.standard_normal((self.N, self.P)) + 0.5 * rng.standard_normal((self.N, 1))
        for j in range(1, self.P):  # neighbours correlate, in blocks of 25
            X[:, j] += 0.9 * X[:, j - 1] * (j % 25 > 0)
        X *= 10.0 ** rng.uniform(-1, 1, self.P)
        if storage == "sparse":
            X *= rng.random(X.shape) < 0.1
            return sp.csc_array(X)
        return (X + rng.uniform(-5, 5, self.P)).astype(storage)

    @pytest.mark.parametrize("standardize", [False, True])
    @pytest.mark.parametrize("storage", STORAGE)
    @pytest.mark.parametrize(("loss", "l1_ratio"), LOSS_AND_RATIO)
    def test_every_gap_of_a_bank_is_true(self, loss, l1_ratio, storage, standardize):
        rng = np.random.default_rng(
            [13, LOSSES.index(loss), STORAGE.index(storage), int(10 * l1_ratio), standardize]
        )
        X = self.table(rng, storage)
        signal = X[:, :40:10].toarray() if storage == "sparse" else X[:, :40:10]
        y = (signal / np.abs(signal).max(axis=0)).sum(axis=1)
        y = (y - y.mean()) / y.std() + 0.5 * rng.standard_normal(self.N)
        y = y if loss == "squared_error" else (y > 0).astype(float)
        weights = rng.uniform(0.5, 2, (3, self.N)) * (rng.random((3, self.N)) < 0.8)
        penalty = rng.uniform(0.5, 2, (3, self.P))
        penalty[:, ::97], penalty[1, 11] = np.inf, 0.0
        problems = Problems(
            loss, y, sample_weight=weights, penalty_weights=penalty, l1_ratio=l1_ratio,
            standardize=standardize,
        )  # fmt: skip
        bank = solve_bank(as_design(X), problems, self.L, alpha_min_ratio=0.02, tol=1e-8)
        assert np.all(bank.status == Status.CONVERGED)
        for b in range(3):
            one = Problem(X, y, loss, l1_ratio, penalty[b], weights[b], standardize=standardize)
            np.testing.assert_allclose(bank.alpha_max[b], largest_alpha(one), rtol=1e-9)
            for k, alpha in enumerate(bank.alphas[b]):
                coef = bank.coef[b][[k]].toarray()[0]
                gap = certified_gap(one, coef, bank.intercept[b, k], alpha)
                assert gap <= (1e-8 + 1e-12) * bank.null_objective[b]


class TestCertificate:
    """NaN and infinity must fail whatever part of an answer they are in."""

    def poison(self, monkeypatch, loss, name, value):
        """Spoil one number per problem of one of the certificate's arguments, on the way in."""
        kernel = {"squared_error": "certify_squared", "log_loss": "certify_log"}[loss]
        original = getattr(certificate, kernel)
        names = list(inspect.signature(original.py_func).parameters)

        def spoiled(*args):
            arguments = dict(zip(names, args, strict=True))
            array = arguments[name].copy()
            array[..., 0] = value
            return original(*(arguments | {name: array}).values())

        monkeypatch.setattr(certificate, kernel, spoiled)

    @pytest.mark.parametrize("l1_ratio", [1.0, 0.7])
    @pytest.mark.parametrize(
        ("loss", "name", "value"),
        [
            *product(LOSSES, ["residual", "gradient", "coef"], [np.nan, np.inf, -np.inf]),
            ("squared_error", "centred", np.nan),
            *product(["log_loss"], ["predictor", "offset"], [np.nan]),
        ],
    )
    def test_what_is_not_finite_does_not_pass(self, monkeypatch, loss, name, value, l1_ratio):
        X, y = small(loss)
        alphas = largest_alpha(Problem(X, y, loss, l1_ratio)) * np.array([0.5, 0.2])
        settings = {"loss": loss, "alphas": alphas, "l1_ratio": l1_ratio}
        assert np.all(penalized_path(X, y, **settings).status == Status.CONVERGED)
        self.poison(monkeypatch, loss, name, value)
        with pytest.warns(ConvergenceWarning, match="2 of 2 solves ended without"):
            path = penalized_path(X, y, **settings)
        assert not np.any(path.gap <= 1e-7)
        assert all(Status(code).failed for code in path.status)
