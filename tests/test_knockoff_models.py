"""Models of the features: second moments, exchangeability, covariates, degenerate columns."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import ks_2samp, kstest, norm, poisson
from sklearn.covariance import OAS, LedoitWolf
from statsmodels.stats._knockoff import _design_knockoff_equi

from sparsesel.knockoffs import (
    FEATURE_MODELS,
    CopulaModel,
    FixedXModel,
    GaussianModel,
    LowRankCovariance,
    indistinct_features,
    s_vector,
    solve_s_vector,
)
from sparsesel.knockoffs._gaussian_draws import DenseDraws, LowRankDraws, safe_root
from sparsesel.knockoffs._marginals import marginal
from sparsesel.knockoffs._model import repeated_columns
from sparsesel.knockoffs.copula import _Precision, _truncated
from sparsesel.knockoffs.covariances import ESTIMATORS, number_of_factors
from sparsesel.knockoffs.fixed_x import _random_basis
from sparsesel.tasks import spawn

METHODS = ("mvr", "max_entropy", "sdp", "equicorrelated")


def autoregressive(size, correlation):
    return correlation ** np.abs(np.subtract.outer(np.arange(size), np.arange(size)))


def table(generator, n_rows, n_features, correlation=0.6):
    root = np.linalg.cholesky(autoregressive(n_features, correlation))
    return generator.standard_normal((n_rows, n_features)) @ root.T


def joint_moments(covariance, s):
    """The covariance of (features, copies): equation 3.1 of Candes, Fan, Janson and Lv 2018."""
    moved = covariance - np.diag(s)
    return np.block([[covariance, moved], [moved, covariance]])


class Unit:
    """A generator whose normal draws are the columns of one identity matrix, taken in turn.

    Fed to a sampler with as many rows as it draws numbers per row, copies of zero rows are then the
    transposed root of their covariance, and no Monte Carlo is needed.
    """

    def __init__(self, size):
        self.size, self.used = size, 0

    def standard_normal(self, shape):
        block = np.eye(self.size)[:, self.used : self.used + shape[1]]
        self.used += shape[1]
        assert shape[0] == self.size
        return block


def conditional_moments(draws, n_features, n_noise):
    """Slope and covariance of copies given features, read off a sampler exactly."""
    noise = draws.draw(np.zeros((n_noise, n_features)), Unit(n_noise))

    class Silent:
        def standard_normal(self, shape):
            return np.zeros(shape)

    slope = draws.draw(np.eye(n_features), Silent())
    return slope, noise.T @ noise


# --- Gaussian draws ---------------------------------------------------------------------------


@pytest.mark.parametrize("method", METHODS)
def test_dense_draws_have_the_joint_moments(method):
    covariance = autoregressive(12, 0.8)
    s = s_vector(covariance, method)
    slope, spread = conditional_moments(DenseDraws.prepare(covariance, s), 12, 12)
    np.testing.assert_allclose(covariance @ slope, covariance - np.diag(s), atol=1e-11)
    np.testing.assert_allclose(slope.T @ covariance @ slope + spread, covariance, atol=1e-10)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("uniqueness", [1.5, 0.02])
def test_low_rank_draws_have_the_joint_moments(method, uniqueness):
    """Small diagonals leave s above twice the diagonal for some features: the coupled draw."""
    generator = spawn(21, 1)[0]
    loadings = generator.standard_normal((15, 3))
    loadings[:3] *= 0.3
    diagonal = uniqueness * generator.uniform(0.5, 1.5, 15)
    covariance = LowRankCovariance(diagonal, loadings)
    covariance = covariance.scaled(1.0 / np.sqrt(covariance.variances))
    dense = covariance.dense()
    s = s_vector(dense, method)
    draws = LowRankDraws.prepare(covariance, s)
    slope, spread = conditional_moments(draws, 15, 18)
    np.testing.assert_allclose(dense @ slope, dense - np.diag(s), atol=1e-10)
    np.testing.assert_allclose(slope.T @ dense @ slope + spread, dense, atol=1e-8)


def test_low_rank_draws_beyond_twice_the_diagonal():
    """One feature apart from a strong factor: its s exceeds twice its diagonal part."""
    loadings = np.array([[0.1], [0.9], [0.9], [0.9], [0.9], [0.9]])
    diagonal = np.array([0.05, 0.4, 0.4, 0.4, 0.4, 0.4])
    covariance = LowRankCovariance(diagonal, np.column_stack([loadings, np.eye(6)[:, 0]]))
    dense = covariance.dense()
    s = s_vector(dense, "sdp")
    draws = LowRankDraws.prepare(covariance, s)
    assert len(draws.coupled) == 1
    slope, spread = conditional_moments(draws, 6, 8)
    np.testing.assert_allclose(dense @ slope, dense - np.diag(s), atol=1e-11)
    np.testing.assert_allclose(slope.T @ dense @ slope + spread, dense, atol=1e-9)


def test_safe_root_of_singular_matrices():
    generator = spawn(22, 1)[0]
    half = generator.standard_normal((6, 3))
    half[4] = 0.0
    singular = half @ half.T
    root = safe_root(singular)
    np.testing.assert_allclose(root @ root.T, singular, atol=1e-10)
    with pytest.raises(np.linalg.LinAlgError):
        safe_root(np.array([[1.0, 3.0], [3.0, 1.0]]))


def test_sampled_moments_agree_within_their_error():
    """Exchangeability of a real draw: 4.5 standard errors for each of 100 distinct moments.

    For Gaussian rows the variance of a sample covariance is (S_ij^2 + S_ii S_jj) / n; the chance
    that one of 210 exceeds 4.5 standard errors is below .002.
    """
    covariance, n_rows = autoregressive(10, 0.7), 20_000
    generator = spawn(23, 1)[0]
    X = table(generator, n_rows, 10, 0.7)
    fitted = GaussianModel(covariance, mean=np.zeros(10)).fit(X)
    both = np.hstack([X, fitted.sample(X, generator)])
    expected = joint_moments(covariance, fitted.s)
    found = both.T @ both / n_rows
    size = np.outer(np.diag(expected), np.diag(expected))
    error = np.sqrt((expected**2 + size) / n_rows)
    assert (np.abs(found - expected) < 4.5 * error).all()


# --- Gaussian model ---------------------------------------------------------------------------


@pytest.mark.parametrize("estimate", sorted(ESTIMATORS))
def test_estimated_copies_have_the_moments_of_the_estimate(estimate):
    """Given the fit, cov(copy, feature) = cov - diag(s scale^2) in the units of the features."""
    generator = spawn(24, 1)[0]
    scale = np.array([1.0, 10.0, 0.1, 3.0, 1.0, 5.0])
    X = 7.0 + table(generator, 300, 6) * scale
    fitted = GaussianModel(estimate).fit(X)
    assert fitted.has_copy.all() and (fitted.s > 0).all()
    n_rows = 40_000
    fresh = 7.0 + table(generator, n_rows, 6) * scale
    copies = fitted.sample(fresh, generator)
    # a copy's conditional mean is linear with slopes that only the estimate decides
    together = np.corrcoef(fresh, copies, rowvar=False)[:6, 6:]
    np.testing.assert_allclose(
        np.diag(together), 1.0 - fitted.s, atol=0.12, err_msg="1 - s is the correlation"
    )
    np.testing.assert_allclose(copies.mean(0), X.mean(0), atol=0.15 * scale.max())


def test_ledoit_wolf_and_oas_are_those_of_scikit_learn():
    generator = spawn(25, 1)[0]
    rows = table(generator, 60, 8)
    rows = (rows - rows.mean(0)) / rows.std(0)
    for name, estimator in (("ledoit_wolf", LedoitWolf), ("oas", OAS)):
        expected = estimator(assume_centered=True).fit(rows).covariance_
        np.testing.assert_allclose(ESTIMATORS[name](rows), expected, atol=1e-12)
        wide = generator.standard_normal((20, 50))
        wide = (wide - wide.mean(0)) / wide.std(0)
        expected = estimator(assume_centered=True).fit(wide).covariance_
        found = ESTIMATORS[name](wide)
        assert isinstance(found, LowRankCovariance)
        np.testing.assert_allclose(found.dense(), expected, atol=1e-12)


def test_number_of_factors_is_found():
    generator = spawn(26, 1)[0]
    loadings = generator.standard_normal((40, 3))
    rows = generator.standard_normal((300, 3)) @ loadings.T + generator.standard_normal((300, 40))
    rows = (rows - rows.mean(0)) / rows.std(0)
    assert number_of_factors(rows) == 3


def test_independent_features_have_no_factors_in_19_tables_of_20():
    """At a rate of .05, more than 9 of 60 have probability below .001."""
    found = 0
    for source in spawn(59, 60):
        noise = source.standard_normal((200, 80))
        found += number_of_factors((noise - noise.mean(0)) / noise.std(0)) > 0
    assert found <= 9


@pytest.mark.parametrize("estimate", ["ledoit_wolf", "oas", "factor"])
def test_more_features_than_rows(estimate):
    """The low-rank form gives the copies that the dense form would give."""
    generator = spawn(27, 1)[0]
    X = table(generator, 40, 120)
    fitted = GaussianModel(estimate).fit(X)
    assert isinstance(fitted._draws, LowRankDraws)
    correlation = fitted._draws.covariance.dense()
    dense = DenseDraws.prepare(correlation, fitted.solution.s)
    noise = 120 + fitted._draws.factor.shape[1]
    slope, spread = conditional_moments(fitted._draws, 120, noise)
    other_slope, other_spread = conditional_moments(dense, 120, 120)
    np.testing.assert_allclose(slope, other_slope, atol=1e-10)
    np.testing.assert_allclose(spread, other_spread, atol=1e-9)
    assert np.isfinite(fitted.sample(X, generator)).all()


def test_covariates_are_conditioned_on():
    """The copies' dependence on a covariate is that of the features; the rest moves by s."""
    generator = spawn(28, 1)[0]
    n_rows = 5_000
    Z = generator.standard_normal((n_rows, 2))
    slopes = np.array([[3.0, 0.0, -2.0, 1.0], [0.0, 1.0, 1.0, 0.0]])
    X = 5.0 + Z @ slopes + table(generator, n_rows, 4)
    fitted = GaussianModel().fit(X, covariates=Z)
    copies = fitted.sample(X, generator, covariates=Z)
    design = np.column_stack([np.ones(n_rows), Z])
    found, expected = (np.linalg.lstsq(design, M, rcond=None)[0] for M in (copies, X))
    # the difference of the fits is noise of standard deviation sqrt(2 s / n) at most
    np.testing.assert_allclose(found, expected, atol=4.5 * np.sqrt(2.0 / n_rows))
    rest = np.corrcoef(X - design @ expected, copies - design @ expected, rowvar=False)
    np.testing.assert_allclose(np.diag(rest[:4, 4:]), 1.0 - fitted.s, atol=5.0 / np.sqrt(n_rows))


def test_given_joint_covariance_is_conditioned():
    """A joint covariance of features and covariates gives the regression it implies."""
    generator = spawn(29, 1)[0]
    joint = autoregressive(5, 0.7) * np.outer([1, 2, 3, 4, 5], [1, 2, 3, 4, 5])
    rows = generator.standard_normal((50, 5)) @ np.linalg.cholesky(joint).T
    X, Z = rows[:, :3], rows[:, 3:]
    mean = np.arange(5.0)
    fitted = GaussianModel(joint, mean=mean).fit(X, covariates=Z)
    slopes = np.linalg.solve(joint[3:, 3:], joint[3:, :3])
    left = joint[:3, :3] - joint[:3, 3:] @ slopes
    deviation = np.sqrt(np.diag(left))
    expected = s_vector(left / np.outer(deviation, deviation), "mvr")
    np.testing.assert_allclose(fitted.s, expected, rtol=1e-6)
    centre = fitted.conditioning.centre(X, Z)
    np.testing.assert_allclose(centre, mean[:3] + (Z - mean[3:]) @ slopes, atol=1e-10)
    # the same joint covariance as diagonal plus rank one
    loadings = np.array([[1.0], [0.5], [0.8], [0.6], [0.9]])
    low = LowRankCovariance(np.array([0.5, 1.0, 0.7, 0.4, 0.9]), loadings)
    one = GaussianModel(low, mean=mean).fit(X, covariates=Z)
    two = GaussianModel(low.dense(), mean=mean).fit(X, covariates=Z)
    np.testing.assert_allclose(one.s, two.s, rtol=1e-5)
    np.testing.assert_allclose(
        one.conditioning.centre(X, Z), two.conditioning.centre(X, Z), atol=1e-10
    )


def test_integer_weights_equal_repeated_rows_in_centre_and_scale():
    generator = spawn(30, 1)[0]
    X, Z = table(generator, 40, 3), generator.standard_normal((40, 1))
    weights = generator.integers(0, 4, 40)
    repeated = np.repeat(np.arange(40), weights)
    one = GaussianModel("oas").fit(X, covariates=Z, sample_weight=weights)
    two = GaussianModel("oas").fit(X[repeated], covariates=Z[repeated])
    np.testing.assert_allclose(
        one.conditioning.coefficients, two.conditioning.coefficients, atol=1e-10
    )
    np.testing.assert_allclose(one.conditioning.scale, two.conditioning.scale, rtol=1e-10)
    scaled = GaussianModel("oas").fit(X, covariates=Z, sample_weight=10.0 * weights)
    np.testing.assert_allclose(one.s, scaled.s, rtol=1e-8)


def degenerate(generator, n_rows=80):
    """Columns: 0 constant, 1 ordinary, 2 = -3 * column 4, 3 the covariate again, 5 ordinary."""
    Z = generator.standard_normal((n_rows, 1))
    X = generator.standard_normal((n_rows, 6))
    X[:, 0], X[:, 3] = 0.1, 2.0 - 5.0 * Z[:, 0]
    X[:, 2] = -3.0 * X[:, 4] + 1.0
    return X, Z


@pytest.mark.parametrize(
    "model", [GaussianModel(), CopulaModel(), FixedXModel()], ids=["gaussian", "copula", "fixed-X"]
)
@pytest.mark.parametrize("kind", [np.float64, np.float32])
def test_features_without_a_copy(model, kind):
    X, Z = degenerate(spawn(31, 1)[0])
    X = X.astype(kind)
    fitted = model.fit(X, covariates=Z)
    assert fitted.has_copy.tolist() == [False, True, False, False, False, True]
    assert ((fitted.s > 0) == fitted.has_copy).all()
    copies = fitted.sample(X, spawn(31, 2)[1], covariates=Z)
    assert copies.dtype == kind
    np.testing.assert_array_equal(copies[:, ~fitted.has_copy], X[:, ~fitted.has_copy])
    assert (np.abs(copies - X)[:, fitted.has_copy].max(0) > 0.1).all()


def test_nothing_to_copy():
    X = np.ones((20, 3))
    generator = spawn(32, 1)[0]
    for model in (GaussianModel(), CopulaModel(), FixedXModel()):
        fitted = model.fit(X)
        assert not fitted.has_copy.any()
        drawn = fitted.draw(X, generator.standard_normal(20), generator)
        np.testing.assert_array_equal(drawn.copies, X)


def test_repeated_columns_are_found_up_to_sign():
    generator = spawn(33, 1)[0]
    rows = generator.standard_normal((30, 7))
    rows[:, 5], rows[:, 6], rows[:, 2] = rows[:, 1], -rows[:, 1], -rows[:, 0]
    rows /= np.linalg.norm(rows, axis=0)
    assert list(repeated_columns(rows, np.dtype(np.float64))) == [(0, 2), (1, 5, 6)]
    rows[:, 6] += 1e-3 * generator.standard_normal(30)
    rows /= np.linalg.norm(rows, axis=0)
    assert list(repeated_columns(rows, np.dtype(np.float64))) == [(0, 2), (1, 5)]


def test_gaussian_assumptions_tell_what_was_checked():
    generator = spawn(34, 1)[0]
    X = table(generator, 100, 10)
    states = {text: state for text, state, _ in GaussianModel().fit(X).assumptions()}
    key = "the covariance is estimated from at least 5 rows per feature"
    assert states[key] == "checked and fine"
    states = {
        text: (state, detail) for text, state, detail in GaussianModel().fit(X[:40]).assumptions()
    }
    assert states[key][0] == "checked and violated"
    assert "not guaranteed" in states[key][1]
    given = GaussianModel(autoregressive(10, 0.6)).fit(X).assumptions()
    assert given[1][1] == "can't be checked from the data"
    singular = GaussianModel(np.full((10, 10), 0.5) + 0.5).fit(X).assumptions()
    assert "mixed in" in singular[-1][2]


def test_two_valued_columns_are_not_called_gaussian():
    generator = spawn(47, 1)[0]
    X = table(generator, 100, 5)
    X[:, 2] = X[:, 2] > 0
    _, state, detail = GaussianModel().fit(X).assumptions()[0]
    assert state == "checked and violated" and "1 take at most 10 values" in detail


# --- groups -----------------------------------------------------------------------------------


def paired_features(generator, n_rows):
    """Six features in three groups of two, the second a noisy repetition of the first."""
    first = table(generator, n_rows, 3, 0.5)
    second = first + 0.05 * generator.standard_normal((n_rows, 3))
    return np.stack([first, second], axis=2).reshape(n_rows, 6), np.arange(6) // 2


@pytest.mark.parametrize("method", METHODS)
def test_group_draws_have_the_joint_moments(method):
    labels = np.arange(12) // 3
    covariance = autoregressive(12, 0.9)
    solution = solve_s_vector(covariance, method, feature_groups=labels)
    slope, spread = conditional_moments(DenseDraws.prepare(covariance, solution.S), 12, 12)
    np.testing.assert_allclose(covariance @ slope, covariance - solution.matrix, atol=1e-10)
    np.testing.assert_allclose(slope.T @ covariance @ slope + spread, covariance, atol=1e-9)


@pytest.mark.parametrize(
    "model", [GaussianModel(), CopulaModel(), FixedXModel()], ids=["gaussian", "copula", "fixed-X"]
)
def test_groups_move_further_than_their_members_alone(model):
    X, labels = paired_features(spawn(56, 1)[0], 400)
    alone, together = model.fit(X), model.fit(X, feature_groups=labels)
    one_of_each = model.fit(X[:, ::2])
    assert alone.s.max() < 0.05
    assert (together.s[::2] > 0.8 * one_of_each.s).all()
    copies = together.sample(X, spawn(56, 2)[1])
    # copies of a group keep the group's own dependence
    found = np.corrcoef(copies, rowvar=False)
    np.testing.assert_allclose(found, np.corrcoef(X, rowvar=False), atol=0.2)


def test_fixed_x_groups_keep_the_products():
    generator = spawn(57, 1)[0]
    X, labels = paired_features(generator, 30)
    fitted = FixedXModel().fit(X, feature_groups=labels)
    copies = fitted.sample(X, generator)
    fixed = np.ones((30, 1))
    moments = second_moments(fixed, X, copies)
    for group in range(3):
        members = labels == group
        left, right = X.copy(), copies.copy()
        left[:, members], right[:, members] = copies[:, members], X[:, members]
        np.testing.assert_allclose(second_moments(fixed, left, right), moments, atol=1e-8)


def test_repeated_features_inside_a_group_are_copied():
    generator = spawn(58, 1)[0]
    X = table(generator, 60, 4)
    X[:, 1] = 2.0 * X[:, 0] - 1.0
    assert GaussianModel().fit(X).has_copy.tolist() == [False, False, True, True]
    together = GaussianModel().fit(X, feature_groups=np.array([0, 0, 1, 2]))
    assert together.has_copy.all() and together.s.min() > 0.2
    apart = GaussianModel().fit(X, feature_groups=np.array([0, 1, 1, 2]))
    assert apart.has_copy.tolist() == [False, False, True, True]


# --- copula -----------------------------------------------------------------------------------


def mixed_table(generator, n_rows, correlation=0.7):
    """Two-valued, lognormal, count, half zero and normal columns with one latent dependence."""
    latent = table(generator, n_rows, 10, correlation)
    X = latent.copy()
    X[:, 0::5] = latent[:, 0::5] > 0.4
    X[:, 1::5] = np.exp(latent[:, 1::5])
    X[:, 2::5] = poisson.ppf(norm.cdf(latent[:, 2::5]), 1.5)
    X[:, 3::5] = np.maximum(latent[:, 3::5], 0.0)
    return X


def test_copula_keeps_the_values_of_discrete_columns():
    generator = spawn(48, 1)[0]
    X = mixed_table(generator, 400)
    copies = CopulaModel().fit(X).sample(X, generator)
    for j in (0, 5, 2, 7):
        assert set(np.unique(copies[:, j])) <= set(np.unique(X[:, j]))
    assert (copies[:, [1, 6]] > 0).all()
    assert (copies[:, [3, 8]] >= 0).all()
    # the share of zeros: two samples of 400 with the same probability
    difference = (copies[:, [3, 8]] == 0).mean(0) - (X[:, [3, 8]] == 0).mean(0)
    assert (np.abs(difference) < 4.0 * np.sqrt(0.5 / 400)).all()


def test_copula_finds_the_latent_correlation():
    """Standard error of a tetrachoric correlation at .7 from 4,000 rows is below .025."""
    X = mixed_table(spawn(49, 1)[0], 4_000)
    fitted = CopulaModel("oas").fit(X)
    latent = autoregressive(10, 0.7)
    np.testing.assert_allclose(fitted._covariance, latent, atol=0.1)


def test_copula_moments_agree_after_a_swap():
    """E x_j x_k = E x~_j x_k for j != k within 5 standard errors of the paired difference."""
    generator = spawn(50, 1)[0]
    X = mixed_table(generator, 6_000)
    fitted = CopulaModel().fit(X)
    fresh = mixed_table(generator, 6_000)
    copies = fitted.sample(fresh, generator)
    left, moved = ((M - X.mean(0)) / X.std(0) for M in (fresh, copies))
    left, moved = np.clip(left, -3, 3), np.clip(moved, -3, 3)
    difference = np.einsum("ij,ik->ijk", left - moved, left)
    error = difference.std(0) / np.sqrt(len(X))
    z = difference.mean(0) / np.maximum(error, 1e-12)
    z[np.eye(10, dtype=bool)] = 0.0
    # the fit has the error of as many rows, which at most doubles the variance
    assert (np.abs(z) < 5.0 * np.sqrt(2.0)).all()


def test_copula_of_gaussian_rows_is_close_to_the_gaussian_model():
    X = table(spawn(51, 1)[0], 3_000, 6)
    one, two = CopulaModel().fit(X), GaussianModel().fit(X)
    np.testing.assert_allclose(one.s, two.s, atol=0.05)


def test_marginal_maps_invert_each_other():
    generator = spawn(52, 1)[0]
    smooth = np.exp(generator.standard_normal(200))
    tied = np.maximum(generator.standard_normal(200), 0.0)
    for column in (smooth, tied, (tied > 0.5).astype(float), np.floor(3 * smooth)):
        shape = marginal(column, np.full(200, 1.0 / 200))
        lower, upper = shape.bounds(column)
        assert (lower <= upper).all()
        inside = norm.ppf(0.5 * (norm.cdf(lower) + norm.cdf(upper)))
        np.testing.assert_allclose(shape.back(inside), column, atol=1e-9)
    shape = marginal(smooth, np.full(200, 1.0 / 200))
    beyond = np.array([smooth.min() - 0.001, smooth.max() * 1.5])
    np.testing.assert_allclose(shape.back(shape.bounds(beyond)[0]), beyond)
    assert shape.back(np.array([3.5]))[0] > smooth.max()


def test_marginal_of_integer_weights_equals_repeated_rows():
    generator = spawn(53, 1)[0]
    column = generator.integers(0, 6, 60).astype(float)
    weights = generator.integers(1, 4, 60)
    one = marginal(column, weights / weights.sum())
    repeated = np.repeat(column, weights)
    two = marginal(repeated, np.full(len(repeated), 1.0 / len(repeated)))
    np.testing.assert_allclose(one.upper, two.upper, atol=1e-10)


@pytest.mark.parametrize("low_rank", [False, True])
def test_gibbs_conditionals_are_those_of_the_normal_distribution(low_rank):
    generator = spawn(54, 1)[0]
    covariance = LowRankCovariance(
        generator.uniform(0.5, 1.0, 6), generator.standard_normal((6, 2))
    )
    dense = covariance.dense()
    rest = generator.standard_normal((4, 6))
    precision = _Precision.of(covariance if low_rank else dense, rest)
    precision.replace(1, np.arange(4.0))
    for j in (0, 1, 4):
        others = np.delete(np.arange(6), j)
        slope = np.linalg.solve(dense[np.ix_(others, others)], dense[others, j])
        variance, mean = precision.given_others(j)
        assert variance == pytest.approx(dense[j, j] - dense[others, j] @ slope)
        np.testing.assert_allclose(mean, precision.rest[:, others] @ slope, atol=1e-10)


def test_truncated_normal_draws():
    """Uniform after the probability transform, far tails included."""
    generator = spawn(55, 1)[0]
    for low, high in ((-1.0, 0.5), (2.0, np.inf), (-np.inf, -3.0), (6.0, 6.5)):
        drawn = _truncated(np.full(2_000, low), np.full(2_000, high), generator)
        assert ((drawn >= low) & (drawn <= high)).all()
        share = (norm.sf(low) - norm.sf(drawn)) / (norm.sf(low) - norm.sf(high))
        assert kstest(share, "uniform").pvalue > 1e-4


# --- fixed-X ----------------------------------------------------------------------------------


def second_moments(fixed, X, copies, weights=None):
    root = 1.0 if weights is None else np.sqrt(weights)[:, None]
    everything = np.column_stack([fixed, X, copies]) * root
    return everything.T @ everything


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("n_covariates", [0, 2])
def test_fixed_x_moments_are_exact(method, n_covariates):
    """[1 Z X X~]'[1 Z X X~] stays what it is when any features are swapped with their copies."""
    generator = spawn(35, 1)[0]
    n_features = 7
    n_rows = 2 * n_features + 1 + n_covariates
    X = 3.0 + table(generator, n_rows, n_features)
    Z = generator.standard_normal((n_rows, n_covariates))
    fitted = FixedXModel(method).fit(X, covariates=Z)
    copies = fitted.sample(X, generator)
    fixed = np.column_stack([np.ones(n_rows), Z])
    moments = second_moments(fixed, X, copies)
    for swapped in ([0], [1, 4], range(n_features)):
        left, right = X.copy(), copies.copy()
        left[:, swapped], right[:, swapped] = copies[:, swapped], X[:, swapped]
        np.testing.assert_allclose(second_moments(fixed, left, right), moments, atol=1e-8)
    left = X - fixed @ np.linalg.lstsq(fixed, X, rcond=None)[0]
    moved = left.T @ left - X.T @ copies + X.T @ (X - left)
    np.testing.assert_allclose(moved, np.diag(fitted.s * (left**2).sum(0)), atol=1e-8)


def test_fixed_x_agrees_with_statsmodels():
    """statsmodels.stats builds equicorrelated copies of unit columns without an intercept.

    Its second moments and s are those of ours for columns orthogonal to the intercept.
    """
    generator = spawn(36, 1)[0]
    X = table(generator, 60, 8, 0.3)
    X -= X.mean(0)
    theirs, their_copies, s = _design_knockoff_equi(X, np.random.default_rng(0))
    fitted = FixedXModel("equicorrelated").fit(theirs)
    np.testing.assert_allclose(fitted.s, s, rtol=1e-8)
    copies = fitted.sample(theirs, generator)
    np.testing.assert_allclose(copies.T @ copies, their_copies.T @ their_copies, atol=1e-8)
    np.testing.assert_allclose(theirs.T @ copies, theirs.T @ their_copies, atol=1e-8)


@pytest.mark.parametrize("weighted", [False, True])
def test_rotation_fixes_intercept_and_covariates_and_keeps_products(weighted):
    generator = spawn(37, 1)[0]
    n_rows, n_features = 31, 7
    X, Z = table(generator, n_rows, n_features), generator.standard_normal((n_rows, 2))
    y = X[:, 0] + Z[:, 0] + generator.standard_normal(n_rows)
    weights = generator.uniform(0.5, 2.0, n_rows) if weighted else None
    fitted = FixedXModel().fit(X, covariates=Z, sample_weight=weights)
    drawn = fitted.draw(X, y, generator, covariates=Z, sample_weight=weights)
    np.testing.assert_array_equal(drawn.covariates, Z)
    assert np.abs(drawn.features - X).max() > 0.1
    fixed = np.column_stack([np.ones(n_rows), Z])
    left, right = (
        second_moments(fixed, np.column_stack(pair), np.empty((n_rows, 0)), weights)
        for pair in ((X, y), (drawn.features, drawn.response))
    )
    np.testing.assert_allclose(left, right, atol=1e-8)
    moments = second_moments(fixed, drawn.features, drawn.copies, weights)
    np.testing.assert_allclose(
        second_moments(fixed, drawn.copies, drawn.features, weights), moments, atol=1e-8
    )


def test_rotation_is_uniform_on_a_circle():
    """Two free dimensions: the angle of a random unit column is uniform (Kolmogorov-Smirnov)."""
    fixed = np.full((3, 1), 1.0 / np.sqrt(3.0))
    first = np.array([1.0, -1.0, 0.0]) / np.sqrt(2.0)
    second = np.array([1.0, 1.0, -2.0]) / np.sqrt(6.0)
    angles = []
    for generator in spawn(38, 400):
        column = _random_basis(fixed, 1, generator)[:, 0]
        np.testing.assert_allclose([column.sum(), column @ column], [0.0, 1.0], atol=1e-12)
        angles.append(np.arctan2(column @ second, column @ first) / (2.0 * np.pi) + 0.5)
    assert kstest(angles, "uniform").pvalue > 1e-4


def test_rotated_and_unrotated_draws_have_one_distribution():
    """[X X~]'y, which decides every sufficient importance, by a two-sample Kolmogorov-Smirnov."""
    generator = spawn(44, 1)[0]
    X = table(generator, 12, 3)
    y = X[:, 0] + generator.standard_normal(12)
    fitted = FixedXModel().fit(X)
    centred = y - y.mean()
    plain = np.array([fitted.sample(X, source).T @ centred for source in spawn(45, 400)])
    rotated = []
    for source in spawn(46, 400):
        drawn = fitted.draw(X, y, source)
        rotated.append(drawn.copies.T @ (drawn.response - drawn.response.mean()))
    for one, two in zip(plain.T, np.array(rotated).T, strict=True):
        assert ks_2samp(one, two).pvalue > 1e-4


def test_zero_weights_leave_rows_out():
    generator = spawn(39, 1)[0]
    X, y = table(generator, 30, 4), generator.standard_normal(30)
    weights = np.r_[np.zeros(6), np.ones(24)]
    fitted = FixedXModel().fit(X, sample_weight=weights)
    np.testing.assert_allclose(fitted.s, FixedXModel().fit(X[6:]).s)
    drawn = fitted.draw(X, y, generator, sample_weight=weights)
    assert drawn.features.shape == (24, 4)
    np.testing.assert_array_equal(fitted.sample(X, generator)[:6], X[:6])


def test_missing_rows_are_added():
    """Below 2p + 1: the products of the features are kept, those of the response grow by chance."""
    generator = spawn(40, 1)[0]
    n_rows, n_features = 20, 12
    X, Z = table(generator, n_rows, n_features), generator.standard_normal((n_rows, 1))
    y = X[:, 0] + generator.standard_normal(n_rows)
    fitted = FixedXModel().fit(X, covariates=Z)
    assert fitted.n_added_rows == 2 * n_features + 2 - n_rows
    drawn = fitted.draw(X, y, generator, covariates=Z)
    assert drawn.features.shape == (2 * n_features + 1, n_features)
    assert drawn.covariates.shape[1] == 0 and drawn.sample_weight is None
    fixed = np.column_stack([np.ones(n_rows), Z])
    left = X - fixed @ np.linalg.lstsq(fixed, X, rcond=None)[0]
    expected = joint_moments(left.T @ left, fitted.s * (left**2).sum(0))
    both = np.column_stack([drawn.features, drawn.copies])
    np.testing.assert_allclose(both.T @ both, expected, atol=1e-8)
    np.testing.assert_allclose(drawn.features.T @ drawn.response, left.T @ y, atol=1e-8)
    np.testing.assert_allclose(np.column_stack([both, drawn.response]).sum(0), 0.0, atol=1e-8)
    assert fitted.assumptions()[-1][1] == "checked and violated"
    with pytest.raises(ValueError, match=r"6 rows are missing.*Use `draw`"):
        fitted.sample(X, generator, covariates=Z)


def test_added_rows_carry_the_estimated_variance():
    """Over many draws the added part of |y|^2 averages sigma^2 per added row."""
    generator = spawn(41, 1)[0]
    X = table(generator, 20, 12)
    y = X[:, 0] + 2.0 * generator.standard_normal(20)
    fitted = FixedXModel().fit(X)
    design = np.column_stack([np.ones(20), X])
    left = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
    variance = left @ left / (20 - 13)
    centred = ((y - y.mean()) ** 2).sum()
    added = [np.sum(fitted.draw(X, y, source).response ** 2) - centred for source in spawn(42, 300)]
    count = fitted.n_added_rows
    error = variance * np.sqrt(2.0 * count / len(added))
    assert abs(np.mean(added) - variance * count) < 4.0 * error


# --- the contract of every model ------------------------------------------------------------------


@pytest.fixture
def contract_table():
    generator = spawn(81, 1)[0]
    X = table(generator, 60, 6)
    X[:, 3] = 4.0
    Z, y = generator.standard_normal((60, 1)), generator.standard_normal(60)
    for array in (X, Z, y):
        array.setflags(write=False)
    return X, Z, y, generator.uniform(0.5, 2.0, 60)


@pytest.mark.parametrize("name", FEATURE_MODELS)
def test_contract_of_a_draw(name, contract_table):
    X, Z, y, weights = contract_table
    fitted = FEATURE_MODELS[name]().fit(X, covariates=Z, sample_weight=weights)
    assert fitted.s.shape == fitted.has_copy.shape == (6,)
    assert ((fitted.s > 0) == fitted.has_copy).all()
    assert fitted.has_copy.tolist() == [True, True, True, False, True, True]
    one, two, other = (
        fitted.draw(X, y, np.random.default_rng(seed), covariates=Z, sample_weight=weights)
        for seed in (5, 5, 6)
    )
    np.testing.assert_array_equal(one.copies, two.copies)
    assert (one.copies != other.copies).any(axis=0).tolist() == fitted.has_copy.tolist()
    assert one.features.shape == one.copies.shape == (len(one.response), 6)
    assert one.covariates.shape == (len(one.response), 1)
    np.testing.assert_array_equal(one.features[:, 3], one.copies[:, 3])
    np.testing.assert_array_equal(one.sample_weight, weights)


@pytest.mark.parametrize("name", FEATURE_MODELS)
def test_contract_of_assumptions(name, contract_table):
    X, Z, _, _ = contract_table
    states = {
        "by construction",
        "checked and fine",
        "checked and violated",
        "can't be checked from the data",
    }
    found = FEATURE_MODELS[name]().fit(X, covariates=Z).assumptions()
    assert found
    for statement, state, detail in found:
        assert statement and not statement.endswith(".") and state in states
        assert isinstance(detail, str)


@pytest.mark.parametrize("name", FEATURE_MODELS)
def test_contract_of_groups(name, contract_table):
    X, _, y, _ = contract_table
    labels = np.array([0, 0, 1, 1, 2, 2])
    fitted = FEATURE_MODELS[name]().fit(X, feature_groups=labels)
    assert fitted.draw(X, y, np.random.default_rng(0)).copies.shape == X.shape
    assert fitted.solution.matrix.shape == (5, 5)
    with pytest.raises(ValueError, match="one label per feature"):
        FEATURE_MODELS[name]().fit(X, feature_groups=labels[:4])


@pytest.mark.parametrize("name", FEATURE_MODELS)
def test_contract_of_column_order(name, contract_table):
    """s goes with the feature, wherever its column stands."""
    X, Z, _, _ = contract_table
    order = np.array([4, 2, 5, 0, 3, 1])
    model = FEATURE_MODELS[name]()
    straight = model.fit(X, covariates=Z).s
    np.testing.assert_allclose(model.fit(X[:, order], covariates=Z).s, straight[order], rtol=1e-4)


# --- features without power ----------------------------------------------------------------------


def test_indistinct_features_are_clustered():
    generator = spawn(82, 1)[0]
    X = generator.standard_normal((400, 8))
    X[:, 5] = X[:, 1] + 0.01 * X[:, 5]
    X[:, 6] = X[:, 1] + 0.01 * X[:, 6]
    X[:, 3] = X[:, 0] + X[:, 2] + X[:, 4] + 0.01 * X[:, 3]
    fitted = GaussianModel().fit(X)
    found = indistinct_features(X, fitted.s, fitted.has_copy)
    assert found.n_features == 7
    assert found.clusters[0] in {(0, 2, 3, 4), (1, 5, 6)}
    assert {j for cluster in found.clusters for j in cluster} == set(range(7))
    _, state, detail = found.assumption([f"x{j}" for j in range(8)])
    assert state == "checked and violated" and "{x1, x5, x6}" in detail


def test_distinct_features_are_left_alone():
    X = spawn(83, 1)[0].standard_normal((200, 5))
    fitted = GaussianModel().fit(X)
    found = indistinct_features(X, fitted.s, fitted.has_copy)
    assert found.clusters == () and found.assumption()[1] == "checked and fine"


# --- bad input --------------------------------------------------------------------------------


def test_bad_input_is_refused():
    generator = spawn(43, 1)[0]
    X = table(generator, 30, 5)
    with pytest.raises(ValueError, match="'shrunk' is unknown; allowed are 'ledoit_wolf'"):
        GaussianModel("shrunk").fit(X)
    with pytest.raises(ValueError, match=r"shape \(4, 4\) was given for 5 features"):
        GaussianModel(np.eye(4)).fit(X)
    with pytest.raises(ValueError, match=r"mean of shape \(4,\)"):
        GaussianModel(np.eye(5), mean=np.zeros(4)).fit(X)
    with pytest.raises(ValueError, match="covariates have 29 rows and the features 30"):
        GaussianModel().fit(X, covariates=np.ones((29, 1)))
    with pytest.raises(ValueError, match="one weight of at least 0 per row"):
        GaussianModel().fit(X, sample_weight=-np.ones(30))
    with pytest.raises(ValueError, match="Give fewer covariates or more rows"):
        GaussianModel().fit(X, covariates=generator.standard_normal((30, 29)))
    with pytest.raises(ValueError, match=r"need at least 7.*model-X"):
        FixedXModel().fit(X[:6])
    with pytest.raises(ValueError, match=r"need at least 11.*model-X"):
        FixedXModel(add_rows=False).fit(X[:10])
    follows = np.column_stack([X, X @ np.ones(5)])
    with pytest.raises(ValueError, match="linear combinations of others"):
        FixedXModel().fit(follows)
    with pytest.raises(ValueError, match="Fit the model to these rows"):
        FixedXModel().fit(X).sample(X[:20], generator)
