"""`cross_check`: honest fits pass, falsified fits and other data do not; gaps equal an oracle's."""

from __future__ import annotations

import json
import sys

import numpy as np
import pytest
import scipy.sparse as sp
from oracles import Problem, certify, null_objective
from sklearn.decomposition import PCA
from sklearn.exceptions import NotFittedError
from sklearn.linear_model import Ridge

from sparsesel import (
    AdaptiveLassoSelector,
    KnockoffSelector,
    RandomizedLassoSelector,
    StabilitySelector,
    cross_check,
    penalized_path,
)
from sparsesel.engine import Problems
from sparsesel.selectors import StatedProblem
from sparsesel.study import cross_check as module_function
from sparsesel.study._certificate import Audit

pytest.importorskip("cvxpy", reason="the reference needs the extra of that name")


def make_data(loss="squared_error", n=60, p=25):
    rng = np.random.default_rng(0)
    X = rng.standard_normal((n, p)) * rng.uniform(0.2, 5, p) + rng.uniform(-3, 3, p)
    signal = (X[:, :3] / X[:, :3].std(axis=0)) @ np.array([1.5, -1.0, 1.0])
    y = signal + rng.standard_normal(n)
    return X, (y if loss == "squared_error" else np.where(y > np.median(y), "yes", "no"))


WEIGHT = np.random.default_rng(1).choice([0.0, 0.5, 1.0, 2.0], 60)
GROUPS = np.arange(60) // 3
HALVES = {"n_pairs": 8, "features_per_fit": 5, "pfer": 10, "random_state": 3}
FITS = {
    "stability": (StabilitySelector(**HALVES), {}),
    "stability, elastic net": (StabilitySelector(**HALVES, l1_ratio=0.5), {}),
    "stability, groups of columns": (
        StabilitySelector(**HALVES, feature_groups=np.arange(25) // 2, standardize=False),
        {"groups": GROUPS},
    ),
    "randomised": (RandomizedLassoSelector(**HALVES, covariates=[4]), {"sample_weight": WEIGHT}),
    "adaptive, cv": (AdaptiveLassoSelector(covariates=[4]), {"sample_weight": WEIGHT}),
    "adaptive, one_se": (AdaptiveLassoSelector("one_se", cv=3), {"groups": GROUPS}),
    "adaptive, ebic": (AdaptiveLassoSelector("ebic", l1_ratio=0.8, gamma=2.0), {}),
    "knockoffs": (KnockoffSelector(feature_model="gaussian", random_state=0), {}),
    "knockoffs, entry": (
        KnockoffSelector(feature_model="gaussian", importance="entry", random_state=0),
        {"sample_weight": WEIGHT},
    ),
    "knockoffs, draws": (
        KnockoffSelector(pfer=1.0, n_draws=3, covariates=[4], random_state=0),
        {},
    ),
    "lasso": (AdaptiveLassoSelector(0.1, gamma=0, penalty_weights={0: np.inf}), {}),
}


# --- honest fits ------------------------------------------------------------------------------


@pytest.mark.parametrize("loss", ["squared_error", "log_loss"])
@pytest.mark.parametrize("name", FITS)
def test_honest_fits_agree_with_the_reference(name, loss):
    selector, metadata = FITS[name]
    X, y = make_data(loss)
    selector.fit(X, y, **metadata)
    report = cross_check(selector, X, y, n_problems=3, **metadata)
    assert report.agrees, str(report)
    assert report.n_solved == min(3, report.n_problems)
    assert report.n_certified == report.n_problems
    assert report.n_compared > 0 and all(report.derived.values())
    # The reference is as good as it says it is, so that its agreement means something.
    assert report.largest_reference_gap < 1e-6


@pytest.mark.parametrize("kind", ["float32", "csc", "csr"])
def test_other_tables_are_checked_as_they_are(kind):
    X, y = make_data()
    X = X.astype("float32") if kind == "float32" else sp.csc_array(X * (X > 0)).asformat(kind)
    selector = StabilitySelector(**HALVES).fit(X, y)
    report = cross_check(selector, X, y, n_problems=2)
    assert report.agrees, str(report)


def test_the_sample_starts_with_the_first_problem_and_depends_on_random_state():
    X, y = make_data()
    selector = StabilitySelector(**HALVES).fit(X, y)
    drawn = [cross_check(selector, X, y, n_problems=3, random_state=k).solved for k in (0, 0, 1)]
    assert drawn[0] == drawn[1] != drawn[2]
    assert all(labels[0] == "pair 1, half A" for labels in drawn)
    assert all(len(set(labels)) == 3 for labels in drawn)


# --- falsified fits ---------------------------------------------------------------------------


def fitted(selector, loss="squared_error"):
    X, y = make_data(loss)
    return selector.fit(X, y), X, y


def test_wrong_coefficients_are_caught_by_both_gap_and_reference():
    selector, X, y = fitted(AdaptiveLassoSelector(0.1, initial="ridge"))
    selector.coef_ = selector.coef_ * 1.0002
    report = cross_check(selector, X, y)
    assert not report.agrees
    # The gap is an upper bound on the distance from the optimum.
    assert 1e-7 < report.largest_excess <= report.largest_gap < 1e-3


def test_a_coefficient_that_must_be_zero_is_a_difference_however_small():
    selector, X, y = fitted(AdaptiveLassoSelector(0.1, initial="ridge"))
    assert selector.coef_[20] == 0
    selector.coef_[20] = 1e-12
    report = cross_check(selector, X, y)
    assert report.n_differences == 1 and report.largest_gap <= 1e-7
    assert not report.agrees and "NO AGREEMENT" in str(report)


@pytest.mark.parametrize("attribute", ["selection_probability_", "selected_"])
def test_votes_that_nobody_cast_are_caught(attribute):
    selector, X, y = fitted(StabilitySelector(**HALVES))
    setattr(selector, attribute, np.roll(getattr(selector, attribute), 1))
    report = cross_check(selector, X, y, n_problems=1)
    assert not report.agrees and sum(not holds for holds in report.derived.values()) == 1


def test_contrasts_and_lists_that_do_not_follow_are_caught():
    selector, X, y = fitted(KnockoffSelector(0.5, plus=False, random_state=0))
    assert selector.selected_.any()
    honest = cross_check(selector, X, y)
    assert honest.agrees and len(honest.derived) == 4
    selector.contrast_ = -selector.contrast_
    # So low that more copies are above it than the target allows.
    selector.threshold_ = float(np.min(np.abs(selector._contrasts)))
    selector.units_["selected"] = np.roll(selector.units_["selected"], 1)
    assert not any(cross_check(selector, X, y).derived.values())


def test_a_unit_that_is_claimed_without_votes_is_caught():
    selector, X, y = fitted(StabilitySelector(**HALVES))
    selector.units_["selected"] = np.roll(selector.units_["selected"], 1)
    report = cross_check(selector, X, y, n_problems=1)
    assert not report.derived["the selected units are those with threshold_ or more"]


@pytest.mark.parametrize("rule", ["cv", "one_se"])
def test_a_penalty_that_its_rule_does_not_pick_is_caught(rule):
    selector, X, y = fitted(AdaptiveLassoSelector(rule, initial="ridge"))
    position = np.flatnonzero(selector.alphas_ == selector.alpha_)[0]
    selector.loss_path_[position] *= 10
    report = cross_check(selector, X, y, n_problems=1)
    assert sum(not holds for holds in report.derived.values()) == 2
    assert not report.agrees


# --- other data and other objects -------------------------------------------------------------


@pytest.mark.parametrize(
    "selector",
    [
        StabilitySelector(**HALVES),
        RandomizedLassoSelector(**HALVES),
        AdaptiveLassoSelector(0.1, initial="ridge"),
        AdaptiveLassoSelector(0.1, gamma=0),
        KnockoffSelector(random_state=0),
    ],
    ids=["stability", "randomised", "adaptive", "lasso", "knockoffs"],
)
def test_data_of_another_fit_are_refused(selector):
    selector, X, y = fitted(selector)
    with pytest.raises(ValueError, match=r"very table, outcome, weights and groups .* pass those"):
        cross_check(selector, X, np.roll(y, 1))


def test_what_cannot_be_checked_is_refused():
    X, y = make_data()
    with pytest.raises(NotFittedError):
        cross_check(StabilitySelector(), X, y)
    with pytest.raises(TypeError, match=r"selector is PCA.*pipeline\[-2\]"):
        cross_check(PCA().fit(X), X, y)
    selector = StabilitySelector(**HALVES, estimator=Ridge()).fit(X, y)
    with pytest.raises(ValueError, match="ranked by Ridge, not by the engine"):
        cross_check(selector, X, y)
    selector = StabilitySelector(**HALVES).fit(X, y)
    with pytest.raises(ValueError, match="n_problems is 0 and max_seconds 60"):
        cross_check(selector, X, y, n_problems=0)


# --- limits -----------------------------------------------------------------------------------


def test_what_time_left_out_is_said():
    selector, X, y = fitted(StabilitySelector(**HALVES))
    report = cross_check(selector, X, y, n_problems=4, max_seconds=1e-9)
    assert report.out_of_time and (report.n_solved, report.n_certified) == (1, 1)
    assert "3 drawn but not reached" in str(report) and "15 gaps not reached" in str(report)


def test_a_wide_table_is_solved_by_parts_to_the_optimum_of_the_whole(monkeypatch):
    X, y = make_data(n=30, p=80)
    selector = StabilitySelector(n_pairs=2, features_per_fit=6, pfer=10, random_state=0).fit(X, y)
    whole = cross_check(selector, X, y)
    module = sys.modules[module_function.__module__]
    monkeypatch.setattr(module, "_WHOLE", 20)
    # So few at first that columns must be added.
    monkeypatch.setattr(module, "_FIRST", 3)
    given = []
    solve = module._solve_among
    monkeypatch.setattr(
        module, "_solve_among", lambda audit, some: given.append(some.sum()) or solve(audit, some)
    )
    parts = cross_check(selector, X, y)
    assert max(given) < 80 and len(given) >= 4
    assert whole.agrees and parts.agrees
    assert abs(whole.largest_excess - parts.largest_excess) < 1e-8
    assert parts.largest_reference_gap < 1e-8


# --- the report -------------------------------------------------------------------------------


def test_the_report_can_be_kept():
    selector, X, y = fitted(StabilitySelector(**HALVES))
    report = cross_check(selector, X, y, n_problems=2)
    kept = json.loads(json.dumps(report.to_dict()))
    assert kept["agrees"] is True and kept["solved"] == list(report.solved)
    text = str(report)
    assert "16 restated from seed_ = 3" in text and "14 problems not drawn for cvxpy" in text
    assert "solved 2 (CLARABEL optimal 2)" in text


# --- its own certificate ------------------------------------------------------------------------


def audit_of(X, y, alpha, **settings):
    coef = np.zeros(X.shape[1])
    problems = Problems(response=y, **settings)
    return Audit(StatedProblem("", problems, alpha, coef, 0.0), X)


def test_the_gap_of_a_constructed_optimum_is_zero():
    X = np.array([[1.0, 1.0], [1.0, -1.0], [-1.0, 1.0], [-1.0, -1.0]])
    y = X @ [2.0, 0.5] + 3
    audit = audit_of(X, y, 1.0, loss="squared_error")
    # X'X = nI: soft-thresholded correlations.
    certificate = audit.certify(np.array([1.0, 0.0]), 3.0)
    assert abs(certificate.gap) < 1e-15 and audit.null_objective == pytest.approx(2.125)
    assert certificate.slack == pytest.approx([0.0, 0.5])
    # Half a unit off in an orthogonal column costs half its square.
    assert audit.certify(np.array([1.5, 0.0]), 3.0).gap >= 0.125


@pytest.mark.parametrize("l1_ratio", [1.0, 0.4])
@pytest.mark.parametrize("loss", ["squared_error", "log_loss"])
def test_gaps_equal_those_of_the_tests_own_oracle(loss, l1_ratio):
    X, y = make_data(loss, n=40, p=12)
    response = y if loss == "squared_error" else (y == "yes").astype(float)
    settings = {
        "loss": loss,
        "l1_ratio": l1_ratio,
        "penalty_weights": np.r_[0.0, np.inf, np.linspace(0.5, 2, 10)],
        "sample_weight": np.random.default_rng(2).choice([0.0, 1.0, 2.5], 40),
        "offset": 0.1 * np.arange(40.0) / 40,
        "standardize": True,
    }
    path = penalized_path(X, response, alphas=8, tol=1e-4, **settings)
    problem = Problem(X, response, **settings)
    for alpha, coef, intercept in zip(
        path.alphas[1:], path.coef.toarray()[1:], path.intercept[1:], strict=True
    ):
        audit = audit_of(X, response, alpha, **settings)
        own = audit.certify(coef, intercept).gap / audit.null_objective
        oracle = certify(problem, coef, intercept, alpha).gap / null_objective(problem)
        assert own == pytest.approx(oracle, rel=1e-3, abs=1e-10)


def test_duplicates_are_undecided_and_the_rest_is_not():
    X, y = make_data(n=60, p=10)
    X[:, 9] = X[:, 0]
    path = penalized_path(X, y, alphas=[0.2], standardize=True, tol=1e-10)
    audit = audit_of(X, y, 0.2, loss="squared_error", standardize=True)
    coef, intercept = path.coef.toarray()[0], path.intercept[0]
    zero, nonzero = audit.decided(coef, audit.certify(coef, intercept), 1e-10)
    undecided = ~(zero | nonzero)
    assert set(np.flatnonzero(undecided)) >= {0, 9}
    # A collinear pair leaves the other nonzero columns undecided; zeros are decided all the same.
    np.testing.assert_array_equal(zero, (coef == 0) & ~np.isin(np.arange(10), [0, 9]))
