"""The held-out exchangeability check: false alarms and detection."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from scipy.stats import norm, poisson

from sparsesel.knockoffs import CopulaModel, GaussianModel, check_exchangeability
from sparsesel.knockoffs._model import pair
from sparsesel.tasks import spawn


def autoregressive(size, correlation):
    return correlation ** np.abs(np.subtract.outer(np.arange(size), np.arange(size)))


def gaussian_rows(generator, n_rows, n_features, correlation):
    root = np.linalg.cholesky(autoregressive(n_features, correlation))
    return generator.standard_normal((n_rows, n_features)) @ root.T


def student_rows(generator, n_rows, n_features, correlation):
    rows = gaussian_rows(generator, n_rows, n_features, correlation)
    return rows / np.sqrt(generator.chisquare(3, (n_rows, 1)) / 3.0)


def lognormal_rows(generator, n_rows, n_features, correlation):
    return np.exp(gaussian_rows(generator, n_rows, n_features, correlation))


@dataclass(frozen=True)
class Permuted:
    """Copies that are the columns, each shuffled by itself."""

    n_features: int = 0

    @property
    def has_copy(self):
        return np.ones(self.n_features, dtype=bool)

    def fit(self, X, *, covariates=None, sample_weight=None, feature_groups=None):
        return Permuted(X.shape[1])

    def draw(self, X, y, generator, *, covariates=None, sample_weight=None):
        copies = np.column_stack([generator.permutation(column) for column in X.T])
        return pair(X, copies, y, covariates, sample_weight)


def alarms(rows, model, n_rows, n_features, correlation, seeds, key):
    found = 0
    for seed, generator in enumerate(spawn(key, seeds)):
        X = rows(generator, n_rows, n_features, correlation)
        found += bool(check_exchangeability(model, X, seed).violated)
    return found


CORRECT = {
    "known": (GaussianModel(autoregressive(50, 0.6)), 0.6),
    "Ledoit-Wolf .6": (GaussianModel(), 0.6),
    "Ledoit-Wolf .9": (GaussianModel(), 0.9),
    "Ledoit-Wolf 0": (GaussianModel(), 0.0),
}


def two_valued_rows(generator, n_rows, n_features, correlation):
    return (gaussian_rows(generator, n_rows, n_features, correlation) > 0.5).astype(float)


def count_rows(generator, n_rows, n_features, correlation):
    latent = gaussian_rows(generator, n_rows, n_features, correlation)
    return poisson.ppf(norm.cdf(latent), 2.0)


COPULA = {"lognormal": lognormal_rows, "two-valued": two_valued_rows, "counts": count_rows}
WRONG = {
    "no dependence under .6": (gaussian_rows, GaussianModel(np.eye(50))),
    "permuted columns": (gaussian_rows, Permuted()),
    "t with 3 degrees": (student_rows, GaussianModel()),
    "lognormal": (lognormal_rows, GaussianModel()),
}


@pytest.mark.parametrize("name", CORRECT)
@pytest.mark.parametrize("n_rows", [250, 1000])
def test_few_false_alarms(name, n_rows):
    """At a rate of .07, more than 6 of 20 alarms have probability below .0005."""
    model, correlation = CORRECT[name]
    assert alarms(gaussian_rows, model, n_rows, 50, correlation, 20, 61) <= 6


@pytest.mark.parametrize("name", WRONG)
def test_gross_misfits_are_found(name):
    """At a rate of .9, fewer than 5 of 10 have probability below .0002."""
    rows, model = WRONG[name]
    assert alarms(rows, model, 1000, 50, 0.6, 10, 62) >= 5


@pytest.mark.parametrize("name", COPULA)
def test_copula_is_accepted_where_it_holds(name):
    """At a rate of .07, more than 4 of 10 alarms have probability below .001."""
    assert alarms(COPULA[name], CopulaModel(), 1000, 20, 0.6, 10, 70) <= 4


@pytest.mark.statistical
@pytest.mark.parametrize("name", COPULA)
def test_false_alarm_rate_of_the_copula(name):
    """At most 7%, 3 standard errors of 200 repetitions."""
    found = alarms(COPULA[name], CopulaModel(), 1000, 20, 0.6, 200, 71)
    assert found / 200 <= 0.07 + 3.0 * np.sqrt(0.07 * 0.93 / 200)


@pytest.mark.statistical
@pytest.mark.parametrize("name", CORRECT)
@pytest.mark.parametrize("n_rows", [250, 1000])
def test_false_alarm_rate(name, n_rows):
    """At most 7%, 3 standard errors of 400 repetitions."""
    model, correlation = CORRECT[name]
    found = alarms(gaussian_rows, model, n_rows, 50, correlation, 400, 63)
    assert found / 400 <= 0.07 + 3.0 * np.sqrt(0.07 * 0.93 / 400)


@pytest.mark.statistical
@pytest.mark.parametrize("name", WRONG)
def test_detection_rate(name):
    """At least 90%, 3 standard errors of 200 repetitions."""
    rows, model = WRONG[name]
    found = alarms(rows, model, 1000, 50, 0.6, 200, 64)
    assert found / 200 >= 0.9 - 3.0 * np.sqrt(0.9 * 0.1 / 200)


def test_z_values_are_standard_when_the_covariance_is_estimated():
    """Mean and variance of the scale, skewness and tails z-values, over 60 tables.

    Their standard errors are 1 / sqrt(60) and about sqrt(2 / 60); the variance may fall short of
    one, because the share of the fit is an upper bound.
    """
    z = np.array(
        [
            check_exchangeability(GaussianModel(), gaussian_rows(source, 400, 20, 0.5), i).z
            for i, source in enumerate(spawn(65, 60))
        ]
    )[:, 1:]
    assert (np.abs(z.mean(0)) < 4.0 / np.sqrt(60)).all()
    assert (z.var(0, ddof=1) < 1.0 + 4.0 * np.sqrt(2.0 / 60)).all()


def test_covariates_and_constant_columns_take_no_part():
    generator = spawn(66, 1)[0]
    Z = generator.standard_normal((600, 2))
    X = gaussian_rows(generator, 600, 8, 0.5) + 5.0 * Z[:, :1]
    X[:, 3] = 1.0
    fine = check_exchangeability(GaussianModel(), X, 1, covariates=Z)
    assert not fine.violated
    assert fine.assumption()[1] == "checked and fine"


def test_groups_are_swapped_as_a_whole():
    """Copies of groups repeat their features' differences, which single swaps would notice."""
    generator = spawn(72, 1)[0]
    first = gaussian_rows(generator, 800, 6, 0.5)
    X = np.hstack([first, first + 0.1 * generator.standard_normal((800, 6))])
    labels = np.arange(12) % 6
    fine = check_exchangeability(GaussianModel(), X, 2, feature_groups=labels)
    assert not fine.violated
    wrong = check_exchangeability(GaussianModel(np.eye(12)), X, 2, feature_groups=labels)
    assert "dependence" in wrong.violated


def test_impossible_checks_say_so():
    for X in (np.ones((100, 3)), spawn(67, 1)[0].standard_normal((30, 3))):
        check = check_exchangeability(GaussianModel(), X, 0)
        assert check.n_rows == 0
        assert check.assumption()[1] == "can't be checked from the data"


def test_violations_are_named():
    X = gaussian_rows(spawn(68, 1)[0], 800, 20, 0.7)
    check = check_exchangeability(GaussianModel(np.eye(20)), X, 3)
    _, state, detail = check.assumption()
    assert state == "checked and violated" and "dependence" in detail and check.p_value < 1e-6


def test_one_seed_gives_one_answer():
    X = gaussian_rows(spawn(69, 1)[0], 200, 5, 0.7)
    one, two = (check_exchangeability(GaussianModel(), X, 4) for _ in range(2))
    np.testing.assert_array_equal(one.z, two.z)
    assert (one.z != check_exchangeability(GaussianModel(), X, 5).z).any()
