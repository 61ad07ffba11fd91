"""`penalized_path` against scikit-learn's coordinate descent, liblinear and SAGA.

A peer's answer is a point of the same problem, so our oracle certifies it like any other: two
points with certified gaps g and h have objectives that differ by at most max(g, h). That needs no
tolerance of our choosing, and no trust in what the peer says of itself.
"""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp
from oracles import Problem, certified_gap, largest_alpha, null_objective
from sklearn.linear_model import (
    ElasticNet,
    LinearRegression,
    LogisticRegression,
    enet_path,
    lasso_path,
)
from sklearn.preprocessing import StandardScaler

from sparsesel.engine import penalized_path

# Rounding of an objective, relative to the null.
ROUNDING = 1e-12


def table(n, p, seed, *, kind="dense"):
    rng = np.random.default_rng([seed, n, p])
    X = rng.standard_normal((n, p)) + 0.7 * rng.standard_normal((n, 1))
    X *= rng.uniform(0.3, 3, p)
    if kind == "sparse":
        X *= rng.random((n, p)) < 0.3
    y = X[:, :4] @ [1.0, -1.0, 0.5, 2.0] + 2 * rng.standard_normal(n)
    if kind == "sparse":
        return sp.csc_array(X), y
    return (X.astype(np.float32) if kind == "float32" else X), y


def labels(y):
    return (y > np.median(y)).astype(float)


def agree(problem, path, coefs, intercepts, *, good=1e-6):
    """Both points of every alpha are certified; objectives agree within the larger gap.

    `good` bounds the peer's gap relative to the null, so that a peer that failed can't make the
    comparison empty.
    """
    null = null_objective(problem)
    for k, alpha in enumerate(path.alphas):
        ours = path.coef[[k]].toarray()[0], path.intercept[k]
        theirs = np.asarray(coefs[k], dtype=float), intercepts[k]
        gaps = [certified_gap(problem, *point, alpha) for point in (ours, theirs)]
        values = [problem.objective(*point, alpha) for point in (ours, theirs)]
        assert gaps[0] <= (1e-9 + ROUNDING) * null
        assert gaps[1] <= good * null
        assert abs(values[0] - values[1]) <= max(gaps) + ROUNDING * null


def centred_intercepts(problem, coefs):
    """Best intercepts for given coefficients under the squared error."""
    if not problem.fit_intercept:
        return np.zeros(len(coefs))
    return [problem.weight @ (problem.y - problem.dense @ coef) for coef in coefs]


KINDS = ("dense", "float32", "sparse")
SHAPES = ((60, 25), (30, 80))


class TestCoordinateDescent:
    @pytest.mark.parametrize(("n", "p"), SHAPES)
    @pytest.mark.parametrize("kind", KINDS)
    def test_lasso_path_without_intercept(self, n, p, kind):
        X, y = table(n, p, 1, kind=kind)
        problem = Problem(X, y, fit_intercept=False)
        alphas = largest_alpha(problem) * np.geomspace(0.999, 0.01, 15)
        path = penalized_path(X, y, alphas=alphas, fit_intercept=False, tol=1e-9)
        peer = sp.csc_matrix(X) if kind == "sparse" else X
        response = y.astype(np.float32) if kind == "float32" else y
        # float32 goes through scikit-learn in single precision, response and all.
        tol = 1e-5 if kind == "float32" else 1e-10
        _, coefs, _ = lasso_path(peer, response, alphas=alphas, tol=tol, max_iter=100_000)
        agree(problem, path, coefs.T, np.zeros(15), good=1e-4 if kind == "float32" else 1e-8)

    @pytest.mark.parametrize(("n", "p"), SHAPES)
    def test_lasso_path_on_centred_data_is_ours_with_an_intercept(self, n, p):
        X, y = table(n, p, 2)
        problem = Problem(X, y)
        alphas = largest_alpha(problem) * np.geomspace(0.999, 0.01, 15)
        path = penalized_path(X, y, alphas=alphas, tol=1e-9)
        _, coefs, _ = lasso_path(
            X - X.mean(axis=0), y - y.mean(), alphas=alphas, tol=1e-10, max_iter=100_000
        )
        agree(problem, path, coefs.T, centred_intercepts(problem, coefs.T))

    def test_the_default_grid_is_lasso_path_s(self):
        X, y = table(60, 25, 3)
        alphas, _, _ = lasso_path(X - X.mean(axis=0), y - y.mean())
        np.testing.assert_allclose(penalized_path(X, y).alphas, alphas, rtol=1e-12)

    @pytest.mark.parametrize("l1_ratio", [0.9, 0.5, 0.05])
    @pytest.mark.parametrize(("n", "p"), SHAPES)
    @pytest.mark.parametrize("kind", ["dense", "sparse"])
    def test_enet_path(self, n, p, kind, l1_ratio):
        X, y = table(n, p, 4, kind=kind)
        problem = Problem(X, y, l1_ratio=l1_ratio, fit_intercept=False)
        alphas = largest_alpha(problem) * np.geomspace(0.999, 0.005, 12)
        settings = {"alphas": alphas, "l1_ratio": l1_ratio}
        path = penalized_path(X, y, fit_intercept=False, tol=1e-9, **settings)
        peer = sp.csc_matrix(X) if kind == "sparse" else X
        _, coefs, _ = enet_path(peer, y, tol=1e-10, max_iter=100_000, **settings)
        agree(problem, path, coefs.T, np.zeros(12))

    @pytest.mark.parametrize("kind", ["dense", "sparse"])
    @pytest.mark.parametrize("l1_ratio", [1.0, 0.6])
    def test_weighted_estimators_with_an_intercept(self, kind, l1_ratio):
        X, y = table(50, 30, 5, kind=kind)
        weight = np.random.default_rng(5).uniform(0, 2, 50) * (np.arange(50) % 4 > 0)
        problem = Problem(X, y, l1_ratio=l1_ratio, sample_weight=weight)
        alphas = largest_alpha(problem) * np.array([0.5, 0.1, 0.02])
        settings = {"l1_ratio": l1_ratio, "sample_weight": weight, "tol": 1e-9}
        path = penalized_path(X, y, alphas=alphas, **settings)
        peer = sp.csc_matrix(X) if kind == "sparse" else X
        fits = [
            ElasticNet(alpha=alpha, l1_ratio=l1_ratio, tol=1e-10, max_iter=100_000).fit(
                peer, y, sample_weight=weight
            )
            for alpha in alphas
        ]
        agree(problem, path, [fit.coef_ for fit in fits], [fit.intercept_ for fit in fits])

    def test_standardize_is_a_scaled_table(self):
        X, y = table(60, 25, 6)
        problem = Problem(X, y, standardize=True)
        alphas = largest_alpha(problem) * np.geomspace(0.999, 0.01, 15)
        path = penalized_path(X, y, alphas=alphas, standardize=True, tol=1e-9)
        scaler = StandardScaler().fit(X)
        _, coefs, _ = lasso_path(
            scaler.transform(X), y - y.mean(), alphas=alphas, tol=1e-10, max_iter=100_000
        )
        coefs = coefs.T / scaler.scale_
        agree(problem, path, coefs, centred_intercepts(problem, coefs))

    def test_all_unpenalised_is_least_squares(self):
        X, y = table(60, 10, 7)
        weight = np.random.default_rng(7).uniform(0.5, 2, 60)
        settings = {"penalty_weights": np.zeros(10), "sample_weight": weight}
        path = penalized_path(X, y, alphas=[1.0], **settings)
        fit = LinearRegression().fit(X, y, sample_weight=weight)
        np.testing.assert_allclose(path.coef.toarray()[0], fit.coef_, rtol=1e-9, atol=1e-12)
        np.testing.assert_allclose(path.intercept[0], fit.intercept_, rtol=1e-9)


def l1_penalty(l1_ratio=1.0):
    """How LogisticRegression is asked for it; `penalty` is deprecated since scikit-learn 1.8."""
    if LogisticRegression().get_params()["penalty"] == "deprecated":
        return {"l1_ratio": l1_ratio}
    return {"penalty": "l1"} if l1_ratio == 1 else {"penalty": "elasticnet", "l1_ratio": l1_ratio}


class TestLogisticRegression:
    """scikit-learn's C weighs the sum of losses: C = 1 / (alpha * sum of weights)."""

    @pytest.mark.parametrize(("n", "p"), SHAPES)
    @pytest.mark.parametrize("kind", ["dense", "sparse"])
    def test_liblinear_without_intercept(self, n, p, kind):
        X, y = table(n, p, 8, kind=kind)
        y = labels(y)
        problem = Problem(X, y, "log_loss", fit_intercept=False)
        alphas = largest_alpha(problem) * np.array([0.8, 0.3, 0.1, 0.03])
        path = penalized_path(X, y, loss="log_loss", alphas=alphas, fit_intercept=False, tol=1e-9)
        peer = sp.csc_matrix(X) if kind == "sparse" else X
        coefs = [
            LogisticRegression(
                **l1_penalty(), C=1 / (alpha * n), solver="liblinear", fit_intercept=False,
                tol=1e-10, max_iter=10_000, random_state=0,
            ).fit(peer, y).coef_[0]
            for alpha in alphas
        ]  # fmt: skip
        agree(problem, path, coefs, np.zeros(4))

    @pytest.mark.parametrize("l1_ratio", [1.0, 0.5])
    @pytest.mark.parametrize("weighted", [False, True])
    def test_saga_with_intercept(self, l1_ratio, weighted):
        n, p = 80, 15
        X, y = table(n, p, 9)
        X, y = X / X.std(axis=0), labels(y)
        weight = np.random.default_rng(9).uniform(0.5, 2, n) if weighted else np.ones(n)
        problem = Problem(X, y, "log_loss", l1_ratio, sample_weight=weight)
        alphas = largest_alpha(problem) * np.array([0.8, 0.3, 0.1])
        settings = {"alphas": alphas, "l1_ratio": l1_ratio, "sample_weight": weight}
        path = penalized_path(X, y, loss="log_loss", tol=1e-9, **settings)
        fits = [
            LogisticRegression(
                **l1_penalty(l1_ratio), C=1 / (alpha * weight.sum()), solver="saga", tol=1e-8,
                max_iter=20_000, random_state=0,
            ).fit(X, y, sample_weight=weight)
            for alpha in alphas
        ]  # fmt: skip
        agree(problem, path, [f.coef_[0] for f in fits], [f.intercept_[0] for f in fits])
