"""Published fits and textbook facts about the lasso and its relatives, through `penalized_path`.

Each value names its source. "From memory" marks a printed value that was not read in a copy of the
source; it was recomputed independently before it was used here.
"""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from scipy import stats
from scipy.optimize import brentq
from scipy.special import expit, xlog1py, xlogy
from sklearn.datasets import load_diabetes
from sklearn.linear_model import lars_path
from tables import load_prostate

from sparsesel.engine import Problems, as_design, penalized_path, solve_bank

# Chance of a false alarm of one Monte Carlo comparison.
FALSE_ALARM = 1e-4
PREDICTORS = ("lcavol", "lweight", "age", "lbph", "svi", "lcp", "gleason", "pgg45")


def soft(z, threshold):
    return np.sign(z) * np.maximum(np.abs(z) - threshold, 0)


def dense(path):
    return path.coef.toarray()


def fit(X, y, alpha, **settings):
    """Coefficients and intercept at one penalty, solved as far as double precision goes."""
    path = penalized_path(X, y, alphas=[alpha], **{"tol": 1e-13, "max_iter": 100_000, **settings})
    assert path.gap[0] <= settings.get("tol", 1e-13)
    return dense(path)[0], path.intercept[0]


def least_squares(X, y, columns=None, **settings):
    """Least squares on some columns: they are unpenalised, the others left out."""
    weights = np.full(X.shape[1], np.inf)
    weights[slice(None) if columns is None else list(columns)] = 0.0
    return fit(X, y, 1.0, penalty_weights=weights, **settings)


def penalty_at_norm(norm_at, target, largest):
    """The penalty at which the decreasing function `norm_at` takes the value `target`."""
    return brentq(lambda alpha: norm_at(alpha) - target, largest * 1e-6, largest, xtol=1e-13)


@pytest.fixture(scope="module")
def split():
    """Prostate training columns and outcome, test columns and outcome."""
    table = load_prostate()
    assert tuple(table.features.columns) == PREDICTORS
    columns = table.features.to_numpy(float)
    columns = (columns - columns.mean(axis=0)) / columns.std(axis=0, ddof=1)
    y, train = table.metadata["lpsa"].to_numpy(), table.metadata["train"].to_numpy()
    return columns[train], y[train], columns[~train], y[~train]


class TestProstate:
    """Hastie, Tibshirani and Friedman (2009), The Elements of Statistical Learning, Table 3.3.

    Columns have unit standard deviation (divisor n − 1) over all 97 rows; fits use the 67 training
    rows, errors the other 30.
    """

    @staticmethod
    def assert_printed(split, coef, intercept, row, tolerance):
        test_error = np.mean((split[3] - intercept - split[2] @ coef) ** 2)
        np.testing.assert_allclose([intercept, *coef, test_error], row, atol=tolerance, rtol=0)

    def test_least_squares(self, split):
        row = [2.465, 0.680, 0.263, -0.141, 0.210, 0.305, -0.288, -0.021, 0.267, 0.521]
        self.assert_printed(split, *least_squares(*split[:2]), row, 6e-4)

    def test_best_subset_of_two(self, split):
        row = [2.477, 0.740, 0.316, 0, 0, 0, 0, 0, 0, 0.492]
        self.assert_printed(split, *least_squares(*split[:2], [0, 1]), row, 6e-4)

    def test_ridge_with_five_degrees_of_freedom(self, split):
        """λ = 24.176 spends Σ d²/(d² + λ) = 5; the book does not recentre the training rows.

        Ridge is the limit of the elastic net; an l1 share of 1e-6 moves no printed digit.
        """
        X, y = split[:2]
        penalty, squares = 24.176, np.linalg.svd(X, compute_uv=False) ** 2
        assert (squares / (squares + penalty)).sum() == pytest.approx(5, abs=1e-4)
        coef, _ = fit(X, y - y.mean(), penalty / len(y), l1_ratio=1e-6, fit_intercept=False)
        row = [2.452, 0.420, 0.238, -0.046, 0.162, 0.227, 0.000, 0.040, 0.133, 0.492]
        self.assert_printed(split, coef, y.mean(), row, 6e-4)

    def test_lasso(self, split):
        """Training rows standardised again, at 0.3748 of the full L1 norm (recomputed)."""
        X, y = split[:2]
        scales = X.std(axis=0)
        full = scales @ np.abs(least_squares(X, y)[0])
        largest = penalized_path(X, y, alphas=2, standardize=True).alphas[0]
        alpha = penalty_at_norm(
            lambda alpha: scales @ np.abs(fit(X, y, alpha, standardize=True)[0]),
            0.3748 * full,
            largest,
        )
        row = [2.468, 0.533, 0.169, 0, 0.002, 0.094, 0, 0, 0, 0.479]
        coef, intercept = fit(X, y, alpha, standardize=True)
        self.assert_printed(split, coef, intercept, row, 1e-3)
        np.testing.assert_array_equal(coef == 0, np.array(row[1:-1]) == 0)

    def test_best_subset_of_every_size(self, split):
        """Residual sums of squares over the training rows (recomputed, not printed in the book)."""
        X, y = split[:2]
        best = {
            ("lcavol",): 44.5286,
            ("lcavol", "lweight"): 37.0918,
            ("lcavol", "lweight", "svi"): 34.9077,
            ("lcavol", "lweight", "lbph", "svi"): 32.8150,
            ("lcavol", "lweight", "lbph", "svi", "pgg45"): 32.0694,
            ("lcavol", "lweight", "lbph", "svi", "lcp", "pgg45"): 30.5398,
            ("lcavol", "lweight", "age", "lbph", "svi", "lcp", "pgg45"): 29.4373,
            PREDICTORS: 29.4264,
        }
        subsets = [subset for size in range(1, 9) for subset in combinations(PREDICTORS, size)]
        weights = np.array([[0 if name in s else np.inf for name in PREDICTORS] for s in subsets])
        bank = solve_bank(
            as_design(X),
            Problems(loss="squared_error", response=y, penalty_weights=weights),
            np.array([1.0]),
            tol=1e-12,
        )
        sums = {
            subset: np.sum((y - intercept[0] - X @ coef.toarray()[0]) ** 2)
            for subset, coef, intercept in zip(subsets, bank.coef, bank.intercept, strict=True)
        }
        for size in range(1, 9):
            winner = min((s for s in subsets if len(s) == size), key=sums.__getitem__)
            assert sums[winner] == pytest.approx(best[winner], abs=6e-5)


@pytest.fixture(scope="module")
def diabetes():
    X, y = load_diabetes(return_X_y=True)
    np.testing.assert_allclose(np.linalg.norm(X, axis=0), 1)
    return X, y


class TestDiabetes:
    """Efron, Hastie, Johnstone and Tibshirani (2004), Least angle regression, Ann. Statist. 32.

    442 × 10, columns of unit norm. Order of entry from memory, recomputed; knots and norms
    recomputed.
    """

    # max |x_j'r| where the support changes, and Σ|b_j| there.
    KNOTS = np.array(
        [
            949.4353,
            889.3138,
            452.8957,
            316.0734,
            130.1295,
            88.7843,
            68.9648,
            19.9812,
            5.4775,
            5.0882,
            2.1823,
            1.3104,
        ]
    )
    NORMS = np.array(
        [
            0,
            60.1215,
            663.6773,
            888.9104,
            1250.6970,
            1440.7845,
            1537.0634,
            1914.5641,
            2115.7287,
            2195.7549,
            2802.3571,
            2862.9929,
        ]
    )
    NORM_OF_LEAST_SQUARES = 3459.9776
    # Columns counted from 1; −7 is the seventh leaving.
    EVENTS = (3, 9, 4, 7, 2, 10, 5, 8, 6, 1, -7, 7)

    def path(self, diabetes, knots):
        X, y = diabetes
        return dense(penalized_path(X, y, alphas=knots / len(y), tol=1e-14, max_iter=200_000))

    def test_columns_enter_and_leave_at_the_knots(self, diabetes):
        supports, active = [set()], set()
        for event in self.EVENTS:
            active = active - {-event} if event < 0 else active | {event}
            supports.append(active)
        # Just before and just behind each knot: the knots are printed to 4 decimals.
        around = np.outer(self.KNOTS, [1 + 1e-4, 1 - 1e-4]).ravel()
        found = [set(np.flatnonzero(coef) + 1) for coef in self.path(diabetes, around)]
        assert found[0::2] == supports[:-1]
        assert found[1::2] == supports[1:]

    def test_correlations_and_norms_at_the_knots(self, diabetes):
        """Knots are printed to 5e-5, which moves a norm by that times the steeper slope there."""
        X, y = diabetes
        coefs = self.path(diabetes, self.KNOTS)
        residuals = (y - y.mean())[:, None] - X @ coefs.T
        correlations = np.abs(X.T @ residuals).max(axis=0)
        np.testing.assert_allclose(correlations, self.KNOTS, atol=5e-5)
        slopes = -np.diff([*self.NORMS, self.NORM_OF_LEAST_SQUARES]) / np.diff([*self.KNOTS, 0])
        steeper = np.maximum(np.r_[0, slopes[:-1]], slopes)
        deviation = np.abs(np.abs(coefs).sum(axis=1) - self.NORMS)
        assert (deviation <= 5e-5 * (1 + steeper)).all(), deviation

    def test_end_of_the_path_is_least_squares(self, diabetes):
        norm = np.abs(least_squares(*diabetes)[0]).sum()
        assert norm == pytest.approx(self.NORM_OF_LEAST_SQUARES, abs=1e-3)

    @pytest.mark.parametrize(
        ("norm", "printed"),
        [
            (1903.00, (0, -195.13, 521.95, 295.79, -100.76, 0, -223.07, 0, 512.84, 53.46)),
            (2051.40, (0, -217.06, 525.41, 308.88, -165.94, 0, -175.33, 72.33, 525.07, 61.38)),
        ],
    )
    def test_lasso_column_of_park_and_casella(self, diabetes, norm, printed):
        """Park and Casella (2008), The Bayesian lasso, JASA 103, Table 1; from memory, recomputed.

        The norms are the sums of the printed coefficients, hence uncertain by .005 for each. The
        path is a straight line between the ends of that range; the table holds to .01 of it.
        """
        X, y = diabetes
        reach = 0.005 * np.count_nonzero(printed)
        ends = []
        for target in (norm - reach, norm + reach):
            alpha = penalty_at_norm(
                lambda alpha: np.abs(fit(X, y, alpha)[0]).sum(), target, self.KNOTS[0] / len(y)
            )
            ends.append(fit(X, y, alpha)[0])
            np.testing.assert_array_equal(ends[-1] == 0, np.array(printed) == 0)
        assert (np.min(ends, axis=0) - 0.01 <= printed).all()
        assert (np.max(ends, axis=0) + 0.01 >= printed).all()


# Hald (1952), Statistical Theory with Engineering Applications: 13 cements, four constituents (%),
# heat (cal/g); reprinted in most regression textbooks. From memory, recomputed.
HALD = np.array(
    [
        [7, 26, 6, 60, 78.5],
        [1, 29, 15, 52, 74.3],
        [11, 56, 8, 20, 104.3],
        [11, 31, 8, 47, 87.6],
        [7, 52, 6, 33, 95.9],
        [11, 55, 9, 22, 109.2],
        [3, 71, 17, 6, 102.7],
        [1, 31, 22, 44, 72.5],
        [2, 54, 18, 22, 93.1],
        [21, 47, 4, 26, 115.9],
        [1, 40, 23, 34, 83.8],
        [11, 66, 9, 12, 113.3],
        [10, 68, 8, 12, 109.4],
    ]
)


@pytest.mark.parametrize(
    ("columns", "residual_sum"),
    [
        ((), 2715.76),
        ((4,), 883.8669),
        ((1, 2), 57.9045),
        ((1, 4), 74.7621),
        ((1, 2, 3), 48.1106),
        ((1, 2, 4), 47.9727),
        ((1, 3, 4), 50.8361),
        ((2, 3, 4), 73.8146),
        ((1, 2, 3, 4), 47.8636),
    ],
)
def test_hald_cement_residual_sums(columns, residual_sum):
    X, y = HALD[:, :4], HALD[:, 4]
    coef, intercept = least_squares(X, y, [column - 1 for column in columns])
    printed = 6e-3 if not columns else 6e-5
    assert np.sum((y - intercept - X @ coef) ** 2) == pytest.approx(residual_sum, abs=printed)


def gaussian_problem(seed, n=40, p=12):
    generator = np.random.default_rng(seed)
    X = generator.standard_normal((n, p)) + generator.standard_normal((n, 1))
    y = X[:, :3] @ [2.0, -1.0, 1.0] + generator.standard_normal(n) + 3.0
    return X, y


class TestExactFacts:
    """Textbook facts, e.g. Hastie, Tibshirani and Wainwright (2015), ch. 2; squared error is
    (1/2n)‖y − Xb‖² + α‖b‖₁ throughout."""

    @pytest.mark.parametrize("l1_ratio", [1.0, 0.5, 0.1])
    def test_largest_penalty(self, l1_ratio):
        """α_max = ‖X'y‖∞/(n · l1_ratio) for centred data."""
        X, y = gaussian_problem(0)
        largest = np.abs((X - X.mean(axis=0)).T @ (y - y.mean())).max() / len(y) / l1_ratio
        path = penalized_path(X, y, alphas=5, l1_ratio=l1_ratio)
        assert path.alphas[0] == pytest.approx(largest, rel=1e-12)
        around = penalized_path(
            X, y, alphas=[largest * (1 + 1e-9), largest * (1 - 1e-6)], l1_ratio=l1_ratio, tol=1e-14
        )
        assert list(np.count_nonzero(dense(around), axis=1)) == [0, 1]

    def test_orthogonal_columns_have_closed_forms(self):
        """X'X = nI, z = X'y/n: soft(z, α), soft(z, αρ)/(1 + α(1 − ρ)), soft(z, αw)."""
        generator = np.random.default_rng(1)
        n, p, alpha, rho = 60, 15, 0.4, 0.6
        X = np.linalg.qr(generator.standard_normal((n, p)))[0] * np.sqrt(n)
        y = X @ generator.uniform(-1, 1, p) + 0.1 * generator.standard_normal(n)
        z, weights = X.T @ y / n, generator.uniform(0.2, 3, p)
        expected = {
            (1.0, None): soft(z, alpha),
            (rho, None): soft(z, alpha * rho) / (1 + alpha * (1 - rho)),
            (1.0, "weights"): soft(z, alpha * weights),
        }
        for (l1_ratio, weighted), closed in expected.items():
            assert 0 < np.count_nonzero(closed) < p
            coef, _ = fit(
                X,
                y,
                alpha,
                l1_ratio=l1_ratio,
                penalty_weights=weights if weighted else None,
                fit_intercept=False,
            )
            np.testing.assert_allclose(coef, closed, atol=1e-12)

    @pytest.mark.parametrize("tol", [1e-2, 1e-5, 1e-12])
    def test_gap_of_the_lasso(self, tol):
        """θ = r·min(1, nα/‖X'r‖∞) is dual feasible with value (‖y‖² − ‖y − θ‖²)/2n.

        The reported gap is the difference at the reported coefficients, over ‖y‖²/2n.
        """
        X, y = gaussian_problem(2, n=30, p=50)
        n = len(y)
        path = penalized_path(X, y, alphas=20, fit_intercept=False, tol=tol, max_iter=100_000)
        for alpha, coef, gap in zip(path.alphas, dense(path), path.gap, strict=True):
            r = y - X @ coef
            theta = r * min(1, n * alpha / np.abs(X.T @ r).max())
            primal = r @ r / (2 * n) + alpha * np.abs(coef).sum()
            dual = (y @ y - (y - theta) @ (y - theta)) / (2 * n)
            null = y @ y / (2 * n)
            assert gap <= tol
            assert gap == pytest.approx((primal - dual) / null, rel=1e-6, abs=1e-14)

    @pytest.mark.parametrize("fit_intercept", [False, True])
    def test_dual_of_the_l1_logistic(self, fit_intercept):
        """Sum form, y = ±1: D(u) = −Σ[u ln u + (1 − u) ln(1 − u)], ‖Σ y_i u_i x_i‖∞ ≤ λ, and
        Σ y_i u_i = 0 with an intercept; u_i = 1/(1 + exp(y_i η_i)), scaled, attains the primal."""
        X, y = gaussian_problem(3)
        sign = np.where(y > 3, 1.0, -1.0)
        n, tol = len(y), 1e-10
        path = penalized_path(
            X, sign > 0, loss="log_loss", alphas=15, fit_intercept=fit_intercept, tol=tol
        )
        share = (sign > 0).mean() if fit_intercept else 0.5
        null = -n * (xlogy(share, share) + xlog1py(1 - share, -share))
        for alpha, coef, intercept, gap in zip(
            path.alphas, dense(path), path.intercept, path.gap, strict=True
        ):
            margin = sign * (intercept + X @ coef)
            u = expit(-margin)
            assert fit_intercept is False or abs(np.sum(sign * u)) <= 1e-9 * n
            u = u * min(1, n * alpha / np.abs(X.T @ (sign * u)).max())
            primal = np.logaddexp(0, -margin).sum() + n * alpha * np.abs(coef).sum()
            dual = -(xlogy(u, u) + xlog1py(1 - u, -u)).sum()
            assert -1e-12 * null <= primal - dual <= 2 * tol * null
            assert gap <= tol

    @pytest.mark.parametrize("fit_intercept", [False, True])
    def test_degrees_of_freedom_are_the_expected_size_of_the_support(self, fit_intercept):
        """Zou, Hastie and Tibshirani (2007), On the degrees of freedom of the lasso, Annals of
        Statistics 35, Theorem 1: Σ_i Cov(ŷ_i, y_i)/σ² = E|support| (+ 1 with an intercept)."""
        generator = np.random.default_rng(4)
        X, _ = gaussian_problem(4, n=25, p=10)
        n_draws, sigma = 4000, 1.5
        noise = generator.standard_normal((n_draws, len(X)))
        bank = solve_bank(
            as_design(X),
            Problems(
                loss="squared_error",
                response=X[:, :2] @ [1.0, -0.5] + sigma * noise,
                fit_intercept=fit_intercept,
            ),
            np.array([0.4]),
        )
        coef = np.vstack([rows.toarray() for rows in bank.coef])
        fitted = coef @ X.T + bank.intercept
        size = np.count_nonzero(coef, axis=1) + fit_intercept
        # Each has the covariance, or the size, as its mean: the difference has mean zero.
        difference = (fitted * noise).sum(axis=1) / sigma - size
        z = difference.mean() / (difference.std(ddof=1) / np.sqrt(n_draws))
        assert 2 < size.mean() < 8
        assert abs(z) < stats.norm.isf(FALSE_ALARM / 2)

    @pytest.mark.parametrize("standardize", [False, True])
    @pytest.mark.parametrize("loss", ["squared_error", "log_loss"])
    def test_integer_weights_are_repeated_rows(self, loss, standardize):
        X, y = gaussian_problem(5)
        y = y if loss == "squared_error" else y > 3
        counts = np.random.default_rng(5).integers(0, 4, len(y))
        settings = {"loss": loss, "standardize": standardize, "tol": 1e-12}
        weighted = penalized_path(X, y, alphas=10, sample_weight=counts, **settings)
        repeated = penalized_path(X.repeat(counts, axis=0), y.repeat(counts), alphas=10, **settings)
        np.testing.assert_allclose(weighted.alphas, repeated.alphas, rtol=1e-10)
        np.testing.assert_allclose(dense(weighted), dense(repeated), atol=1e-5)
        np.testing.assert_allclose(weighted.intercept, repeated.intercept, atol=1e-5)

    @pytest.mark.parametrize("loss", ["squared_error", "log_loss"])
    def test_a_table_stacked_twice_gives_the_same_answer(self, loss):
        X, y = gaussian_problem(6)
        y = y if loss == "squared_error" else y > 3
        once = penalized_path(X, y, alphas=10, loss=loss, tol=1e-12)
        twice = penalized_path(np.vstack([X, X]), np.tile(y, 2), alphas=10, loss=loss, tol=1e-12)
        np.testing.assert_allclose(once.alphas, twice.alphas, rtol=1e-10)
        np.testing.assert_allclose(dense(once), dense(twice), atol=1e-5)


class TestAdaptiveLasso:
    """Zou (2006), The adaptive lasso and its oracle properties, JASA 101, Model 0.

    Three true coefficients of 5.6; columns correlate −.39 among the true ones and .23 with the
    fourth, so Σ_21 Σ_11⁻¹ sign(β) = .69/.22 > 1 and the lasso can't be consistent (condition 3 of
    the paper). Expected shares are from 2,000 repetitions made elsewhere; those printed in the
    paper's Table 1 (from memory) are within .06 of them.
    """

    GAMMAS = (0.0, 0.5, 1.0, 2.0)  # 0 is the lasso.
    SHARES = (
        (60, 9, (0.497, 0.586, 0.700, 0.784)),
        (120, 5, (0.491, 0.692, 0.915, 0.978)),
        (300, 3, (0.498, 0.930, 1, 1)),
    )
    BETA = np.array([5.6, 5.6, 5.6, 0.0])
    COVARIANCE = np.array(
        [
            [1, -0.39, -0.39, 0.23],
            [-0.39, 1, -0.39, 0.23],
            [-0.39, -0.39, 1, 0.23],
            [0.23] * 3 + [1],
        ]
    )

    def test_irrepresentable_value(self):
        C = self.COVARIANCE
        value = C[3, :3] @ np.linalg.solve(C[:3, :3], np.ones(3))
        assert value == pytest.approx(3.13636, abs=5e-6)

    def supports_by_segment(self, X, y, weights):
        """Supports of the weighted lassos between the knots of their paths.

        The knots come from scikit-learn's LARS on x_j/v_j; a support is constant between two of
        them, so that one penalty in each segment shows the whole path.
        """
        segments = []
        for v in weights:
            knots = lars_path(X / v, y, method="lasso")[0]
            segments.append((knots[:-1] + knots[1:]) / 2)
        longest = max(map(len, segments))
        # Shorter lists are filled up inside the last segment.
        filled = [
            np.concatenate([s, s[-1] * 0.9 ** np.arange(1, longest - len(s) + 1)]) for s in segments
        ]
        bank = solve_bank(
            as_design(X),
            Problems(
                loss="squared_error", response=y, penalty_weights=weights, fit_intercept=False
            ),
            np.array(filled),
            tol=1e-12,
        )
        assert np.nanmax(bank.gap) <= 1e-12
        return [coef.toarray() != 0 for coef in bank.coef]

    def shares(self, n, sigma, n_draws, seed):
        """Share of draws whose path contains the true model, for each γ."""
        factor = np.linalg.cholesky(self.COVARIANCE)
        hits = np.zeros(len(self.GAMMAS))
        for stream in np.random.SeedSequence(seed).spawn(n_draws):
            generator = np.random.default_rng(stream)
            X = generator.standard_normal((n, 4)) @ factor.T
            y = X @ self.BETA + sigma * generator.standard_normal(n)
            initial = np.abs(np.linalg.lstsq(X, y, rcond=None)[0])
            weights = np.array([(initial.max() / initial) ** gamma for gamma in self.GAMMAS])
            for which, supports in enumerate(self.supports_by_segment(X, y, weights)):
                hits[which] += (supports == (self.BETA != 0)).all(axis=1).any()
        return hits / n_draws

    def assert_shares(self, n, sigma, expected, n_draws):
        found = self.shares(n, sigma, n_draws, seed=20060)
        # Two binomial shares, n_draws and 2,000; one added on each side keeps a share of 1 honest.
        pooled = (found * n_draws + np.array(expected) * 2000 + 1) / (n_draws + 2000 + 2)
        deviation = np.sqrt(pooled * (1 - pooled) * (1 / n_draws + 1 / 2000))
        limit = stats.norm.isf(FALSE_ALARM / 2 / len(self.GAMMAS))
        assert (np.abs(found - expected) < limit * deviation).all(), (found, limit * deviation)

    @pytest.mark.parametrize(("n", "sigma", "expected"), SHARES)
    def test_share_of_paths_with_the_true_model(self, n, sigma, expected):
        self.assert_shares(n, sigma, expected, n_draws=200)

    @pytest.mark.statistical
    @pytest.mark.parametrize(("n", "sigma", "expected"), SHARES)
    def test_share_of_paths_with_the_true_model_in_full(self, n, sigma, expected):
        self.assert_shares(n, sigma, expected, n_draws=2000)
