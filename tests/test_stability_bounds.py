"""Bounds of stability selection against published values, linear programmes and direct search."""

from __future__ import annotations

import math
import re
import time

import numpy as np
import pytest
from scipy.optimize import brentq, linprog, minimize

from sparsesel.error_control import stability_bounds as sb

P, PAIRS = 1000, 50
THRESHOLDS = (0.6, 0.7, 0.75, 0.8, 0.9)

# Shah and Samworth (2013). The formulas were written down from memory of the paper, the values
# recomputed outside this project.
TABLE = {
    (50, "worst_case"): (12.5, 6.25, 5, 4.1667, 3.125),
    (50, "unimodal"): (6.5789, 3.2051, 2.5510, 2.0588, 1.0784),
    (50, "r_concave"): (2.60533, 0.96859, 0.64785, 0.43513, 0.17050),
    (20, "worst_case"): (2, 1, 0.8, 0.6667, 0.5),
    (20, "unimodal"): (1.0526, 0.5128, 0.4082, 0.3294, 0.1725),
    (20, "r_concave"): (0.33450, 0.14592, 0.09749, 0.06543, 0.02561),
}


@pytest.mark.parametrize(("q", "bound"), TABLE)
def test_bounds_equal_the_recomputed_table(q, bound):
    found = [sb.expected_false_selections(bound, q, P, t, PAIRS) for t in THRESHOLDS]
    # Half a unit of the last digit in the table.
    digit = 1e-5 if bound == "r_concave" else 1e-4
    np.testing.assert_allclose(found, TABLE[q, bound], rtol=0, atol=0.51 * digit)


@pytest.mark.parametrize(
    ("mean", "threshold", "points", "r", "value"),
    [
        (0.1, 5 / 8, 8, -1 / 2, 0.0467485),
        (0.05, 4 / 8, 8, -1 / 2, 0.0318956),
        (0.1, 0.6, 10, -1 / 4, 0.0315981),
        (0.15, 0.5, 10, -1 / 4, 0.0942668),
    ],
)
def test_r_concave_tail_equals_values_found_by_direct_optimisation(
    mean, threshold, points, r, value
):
    # Recomputed outside this project by nonlinear optimisation, checked there to 1e-9.
    assert sb.r_concave_tail(mean, threshold, points, r) == pytest.approx(value, abs=6e-8)


def test_vitamin_example():
    # Meinshausen and Bühlmann (2010): p = 4088, threshold .9, q = 57. The q was read in the paper,
    # the bound .99346 is from memory.
    assert sb.worst_case_bound(57, 4088, 0.9) == pytest.approx(0.99346, abs=5e-6)


def largest_tail(mean, position, points, rows, rhs):
    """Linear programme: the largest P(X >= position) of a law with this mean or less."""
    grid = np.arange(points + 1)
    result = linprog(
        -(grid >= position).astype(float),
        A_ub=np.vstack([grid, rows]),
        b_ub=np.concatenate([[mean], rhs]),
        A_eq=np.ones((1, points + 1)),
        b_eq=[1.0],
        method="highs",
    )
    # Infeasible: no law of this shape has so small a mean.
    assert result.status in (0, 2)
    return -result.fun if result.status == 0 else 0.0


def largest_unimodal_tail(mean, position, points):
    best = 0.0
    for mode in range(points + 1):
        rows = np.zeros((points, points + 1))
        for i in range(points):
            sign = 1 if i < mode else -1
            rows[i, i], rows[i, i + 1] = sign, -sign
        best = max(best, largest_tail(mean, position, points, rows, np.zeros(points)))
    return best


@pytest.mark.parametrize(
    ("rate", "votes", "pairs"),
    [
        (0.05, 13, 10),
        (0.05, 15, 10),
        (0.1, 14, 10),
        (0.2, 18, 12),
        (0.3, 20, 12),
        (0.4, 26, 15),
        (0.5, 30, 16),
        (0.55, 31, 16),
        (0.02, 17, 16),
        (0.1, 20, 10),
    ],
)
def test_unimodal_bound_is_the_linear_programme_over_unimodal_laws(rate, votes, pairs):
    bound = sb.unimodal_bound(1000 * rate, 1000, votes / (2 * pairs), pairs) / 1000
    best = largest_unimodal_tail(rate**2 * pairs, votes - pairs, pairs)
    # The bound is attained on the lattice: no smaller one holds for all unimodal laws.
    assert bound == pytest.approx(best, rel=1e-9)


def test_unimodal_bound_is_refused_where_a_law_exceeds_its_formula():
    # threshold .55, rate .3, 50 pairs (recomputed outside this project): formula .50, a law .83.
    factor = 1 / (2 * (2 * 0.55 - 1 - 1 / 100))
    assert factor * 0.3**2 == pytest.approx(0.50, abs=5e-3)
    assert largest_unimodal_tail(0.3**2 * 50, 5, 50) == pytest.approx(0.83, abs=5e-3)
    with pytest.raises(ValueError, match=r"features_per_fit at most 577.*above 0\.5775.*r_concave"):
        sb.unimodal_bound(300, 1000, 0.55, 50)
    with pytest.raises(ValueError, match="Raise the threshold, lower features_per_fit"):
        sb.unimodal_bound(600, 1000, 0.9, 50)


def test_worst_case_is_the_linear_programme_over_all_laws():
    for rate, votes, pairs in [(0.1, 12, 10), (0.3, 15, 10), (0.2, 20, 10)]:
        best = largest_tail(rate**2 * pairs, votes - pairs, pairs, np.zeros((1, pairs + 1)), [0.0])
        bound = sb.worst_case_bound(1000 * rate, 1000, votes / (2 * pairs)) / 1000
        assert bound == pytest.approx(best, rel=1e-9)


def optimised_tail(mean, position, points, r, generator):
    """Search the r-concave laws on {0..k} by a general optimiser, for every k."""
    best, s = 0.0, -1 / r
    for last in range(position, points + 1):
        grid = np.arange(last + 1)
        bend = np.zeros((max(last - 1, 0), last + 1))
        for i in range(last - 1):
            bend[i, i : i + 3] = (1, -2, 1)

        def law(g, s=s):
            f = g**-s
            return f / f.sum()

        constraints = [
            {"type": "ineq", "fun": lambda g, bend=bend: bend @ g},
            {"type": "ineq", "fun": lambda g, grid=grid: mean - law(g) @ grid},
        ]
        for _ in range(3):
            start = 1 + np.cumsum(generator.uniform(0.5, 6) + np.zeros(last + 1))
            found = minimize(
                lambda g: -law(g)[position:].sum(),
                start / start[0],
                bounds=[(1e-3, 1e4)] * (last + 1),
                constraints=constraints,
                method="SLSQP",
                options={"maxiter": 400, "ftol": 1e-13},
            )
            feasible = law(found.x) @ grid <= mean + 1e-8 and np.all(bend @ found.x >= -1e-7)
            best = max(best, -found.fun if feasible else 0.0)
    return best


# Older versions of the optimiser step a rounding error over a bound, and say so.
@pytest.mark.filterwarnings("ignore:Values in x were outside bounds:RuntimeWarning")
@pytest.mark.parametrize(
    ("mean", "position", "points", "r"),
    [(0.8, 5, 8, -1 / 2), (1.3, 3, 6, -1 / 4), (2.2, 4, 6, -1 / 2), (2.6, 3, 5, -1 / 2)],
)
def test_r_concave_tail_is_what_a_general_optimiser_finds(mean, position, points, r):
    found = optimised_tail(mean, position, points, r, np.random.default_rng(0))
    exact = sb.r_concave_tail(mean / points, position / points, points, r)
    assert found == pytest.approx(exact, abs=2e-6)


def affine_tail(mean, position, first, last, s):
    """P(X >= position) of the law with affine f^r on {first..last} and this mean."""
    grid = np.arange(first, last + 1.0)

    def law(z):
        with np.errstate(over="ignore"):
            g = (last - grid) + np.exp(z) * (grid - first)
        f = (g / g.min()) ** -s
        return f / f.sum()

    z = brentq(lambda z: law(z) @ grid - mean, -200, 200, xtol=1e-13)
    return law(z)[grid >= position].sum()


@pytest.mark.parametrize("r", [-1 / 4, -1 / 2, -1])
def test_supports_that_begin_above_zero_never_do_better(r):
    points = 14
    for mean in (0.4, 1.7, 3.3, 5.95, 9.2):
        for position in range(math.ceil(mean), points + 1):
            tails = [
                affine_tail(mean, position, first, last, -1 / r)
                for first in range(math.ceil(mean))
                for last in range(position, points + 1)
            ]
            exact = sb.r_concave_tail(mean / points, position / points, points, r)
            assert exact == pytest.approx(max(tails), rel=1e-9)


def test_no_random_r_concave_law_has_a_larger_tail():
    generator = np.random.default_rng(1)
    points, s = 12, 2
    grid = np.arange(points + 1)
    for _ in range(300):
        slopes = np.sort(generator.normal(size=points) * generator.choice([0.1, 1, 5]))
        g = np.concatenate([[0], np.cumsum(slopes)])
        f = (g - g.min() + generator.exponential()) ** -s
        last = generator.integers(1, points + 1)
        f[last + 1 :] = 0
        f /= f.sum()
        for position in range(1, points + 1):
            bound = sb.r_concave_tail(f @ grid / points, position / points, points, -1 / s)
            assert f[position:].sum() <= bound * (1 + 1e-9)


def test_r_concave_tail_at_its_edges():
    assert sb.r_concave_tail(0.0, 0.1, 10, -0.5) == 0
    assert sb.r_concave_tail(0.3, 0.3, 10, -0.5) == 1
    assert sb.r_concave_tail(0.3, 0.0, 10, -0.5) == 1
    assert sb.r_concave_tail(0.3, 1.1, 10, -0.5) == 0
    # As the mean falls, f(i) / f(1) tends to i^(1/r), so the tail becomes proportional to the mean.
    tiny = sb.r_concave_tail(1e-12, 0.6, 50, -0.5)
    assert tiny == pytest.approx(sb.r_concave_tail(1e-13, 0.6, 50, -0.5) * 10, rel=1e-4)


@pytest.mark.parametrize("bound", ["worst_case", "unimodal", "r_concave"])
def test_bounds_grow_with_q_and_fall_with_the_threshold(bound):
    by_q = [sb.expected_false_selections(bound, q, 200, 0.8, 25) for q in range(1, 60, 3)]
    by_threshold = [sb.expected_false_selections(bound, 20, 200, t / 50, 25) for t in range(30, 51)]
    assert np.all(np.diff(by_q) > 0)
    assert np.all(np.diff(by_threshold) < 0)


def test_smaller_classes_of_laws_have_smaller_bounds():
    for q in (5, 20, 50):
        for threshold in (0.6, 0.72, 0.9):
            worst, unimodal, r_concave = (
                sb.expected_false_selections(b, q, 500, threshold, 50) for b in sb.BOUND_SOURCES
            )
            assert r_concave < unimodal < worst


def test_thresholds_are_rounded_up_on_their_grid():
    assert sb.grid_threshold(0.7, 50) == 0.7
    assert sb.grid_threshold(0.701, 50) == 0.71
    for bound in sb.BOUND_SOURCES:
        found = sb.expected_false_selections(bound, 20, 1000, 0.753, 50)
        assert found == sb.expected_false_selections(bound, 20, 1000, 0.76, 50)
    halves = [k / 100 for k in range(51, 101)]
    assert [sb.grid_threshold(t, 50) for t in halves] == halves


def test_automatic_features_per_fit_is_the_largest_that_meets_the_target():
    # p = 20,000, 50 pairs, pfer 1: q = 288, computed outside this project.
    found = sb.calibrate(1.0, 20_000, 5_000, 50)
    assert (found.features_per_fit, found.threshold, found.capped) == (288, 0.75, False)
    assert found.value <= 1 < sb.r_concave_bound(289, 20_000, 0.75, 50)
    assert found.worst_case == sb.worst_case_bound(288, 20_000, 0.75)


@pytest.mark.parametrize("bound", ["worst_case", "unimodal", "r_concave"])
def test_automatic_features_per_fit_equals_a_linear_search(bound):
    for pfer, p in [(0.5, 60), (2.0, 150), (7.0, 40)]:
        setting = sb._Setting(bound, p, 20)
        fits = [q for q in range(1, p + 1) if setting.value(q, 0.75) <= pfer]
        assert sb.calibrate(pfer, p, p, 20, bound).features_per_fit == max(fits)


def test_where_rows_limit_q_the_threshold_falls_to_the_smallest_that_meets_the_target():
    found = sb.calibrate(1.0, 20_000, 250, 50)
    assert found.capped and found.features_per_fit == 250
    assert 0.60 < found.threshold < 0.75
    assert found.value <= 1 < sb.r_concave_bound(250, 20_000, found.threshold - 0.01, 50)
    low = sb.calibrate(1.0, 20_000, 79, 50)
    assert (low.features_per_fit, low.threshold) == (79, 0.60)


def test_given_threshold_is_kept_and_given_q_sets_the_threshold():
    found = sb.calibrate(1.0, 1000, 1000, 50, threshold=0.9)
    assert found.threshold == 0.9
    assert found.value <= 1 < sb.r_concave_bound(found.features_per_fit + 1, 1000, 0.9, 50)
    capped = sb.calibrate(1.0, 1000, 40, 50, threshold=0.9)
    assert (capped.features_per_fit, capped.threshold, capped.capped) == (40, 0.9, True)
    # From the table above: q = 50 allows 2.6 at .6, .969 at .7.
    by_q = sb.calibrate(0.97, 1000, 20, 50, features_per_fit=50)
    assert (by_q.features_per_fit, by_q.threshold, by_q.capped) == (50, 0.7, False)


def test_both_given_the_target_is_a_ceiling_and_the_error_names_the_largest_q():
    kept = sb.calibrate(1.0, 1000, 1000, 50, threshold=0.75, features_per_fit=50)
    assert (kept.features_per_fit, kept.threshold) == (50, 0.75)
    largest = sb.calibrate(1.0, 1000, 1000, 50, threshold=0.6).features_per_fit
    with pytest.raises(ValueError, match=rf"up to 2\.605 .* pfer=1.0.* threshold is {largest}\."):
        sb.calibrate(1.0, 1000, 1000, 50, threshold=0.6, features_per_fit=50)
    with pytest.raises(ValueError, match="outside the conditions of bound='unimodal'"):
        sb.calibrate(50.0, 1000, 1000, 50, "unimodal", threshold=0.55, features_per_fit=300)


def test_unreachable_targets_name_the_nearest_one_and_it_can_be_met():
    with pytest.raises(ValueError, match="even with one feature per half") as caught:
        sb.calibrate(1e-6, 50, 10, 50)
    nearest = float(re.search(r"is pfer=([0-9.e-]+[0-9])", str(caught.value)).group(1))
    assert sb.calibrate(nearest, 50, 10, 50).features_per_fit == 1
    with pytest.raises(ValueError, match=r"at any threshold.*largest features_per_fit .* is \d+"):
        sb.calibrate(0.1, 100, 100, 50, features_per_fit=60)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"pfer": 0.0}, "pfer=0.0 must be a positive number"),
        ({"pfer": math.nan}, "pfer=nan must be a positive number"),
        ({"n_features": 0}, "at least one candidate"),
        ({"largest_fit": 0}, "at least one feature"),
        ({"n_pairs": 0}, "n_pairs=0 must be a positive integer"),
        ({"bound": "strict"}, "allowed are 'worst_case', 'unimodal', 'r_concave'"),
        ({"threshold": 0.5}, r"threshold=0\.5 must lie above 0\.5"),
        ({"features_per_fit": 101}, "number of candidate features, 100"),
    ],
)
def test_bad_input_is_named(arguments, message):
    good = {"pfer": 1.0, "n_features": 100, "largest_fit": 20, "n_pairs": 50}
    with pytest.raises(ValueError, match=message):
        sb.calibrate(**(good | arguments))


def test_bad_laws_are_named():
    for mean, points, r in [(1.2, 10, -0.5), (0.1, 0, -0.5), (0.1, 10, 0.5)]:
        with pytest.raises(ValueError, match="a mean from 0 to 1"):
            sb.r_concave_tail(mean, 0.6, points, r)


def test_rows_and_classes_limit_what_a_half_can_pick():
    assert sb.largest_features_per_fit(100) == 79
    assert sb.largest_features_per_fit(101, 10) == 72
    assert sb.largest_features_per_fit(100, rarer_class=20) == 16
    assert sb.largest_features_per_fit(30, 20, rarer_class=15) == 7
    with pytest.raises(
        ValueError, match="20 rows, 1 of them in the rarer class, with 0 covariates"
    ):
        sb.largest_features_per_fit(20, rarer_class=1)


def test_calibration_takes_a_fraction_of_a_second():
    spent = []
    for _ in range(3):
        sb._r_concave_tails.cache_clear()
        start = time.process_time()
        sb.calibrate(1.0, 20_000, 79, 50)
        spent.append(time.process_time() - start)
    assert min(spent) < 0.2


def test_empty_list_is_explained_with_a_target_that_would_have_filled_it():
    settings = sb.calibrate(1.0, 1000, 1000, 50, features_per_fit=50, threshold=0.8)
    reason, nearest = sb.why_none_stable(0.6, settings, 1000, 50)
    assert reason == "the largest selection probability is 0.6, below the threshold 0.8"
    assert nearest is not None and nearest.endswith("pfer 2.61")
    assert sb.why_none_stable(0.5, settings, 1000, 50)[1] is None


def test_wording_names_what_is_bounded():
    assert "picks with probability at most 288/20,000" in sb.bounded_quantity(288, 20_000)
    assert sb.BOUND_SOURCES.keys() == sb.BOUND_ASSUMPTIONS.keys() == sb._BOUNDS.keys()
    assert "stands in for a correlated true one" in sb.NEIGHBOUR_NOTE
