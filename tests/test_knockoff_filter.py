"""Knockoff filters: hand values, and their guarantees by enumerating every sign of the nulls."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.optimize import linprog
from scipy.stats import nbinom

from sparsesel.error_control import knockoff_filter as kf

HAND = np.array([10, 9, 8, -1, 7, 6, -2, 5, 0.5, -0.3])


@pytest.mark.parametrize(
    ("fdr", "plus", "threshold", "count"),
    [(0.2, False, 2, 6), (0.5, False, 0.3, 7), (0.2, True, 5, 6), (0.5, True, 0.5, 7)],
)
def test_thresholds_worked_out_by_hand(fdr, plus, threshold, count):
    # The definitions of Barber and Candès (2015) applied to HAND on paper.
    found = kf.knockoff_threshold(HAND, fdr, plus)
    assert found == threshold
    assert kf.select(HAND, found).sum() == count


def slow_threshold(contrast, fdr, plus):
    for t in sorted({abs(w) for w in contrast} - {0.0}):
        below, above = np.sum(contrast <= -t), np.sum(contrast >= t)
        if (plus + below) / max(1, above) <= fdr:
            return t
    return math.inf


def test_thresholds_equal_the_definition_with_ties_and_zeros():
    generator = np.random.default_rng(0)
    for _ in range(400):
        contrast = generator.integers(-3, 9, size=generator.integers(1, 25)).astype(float)
        for fdr, plus in itertools.product((0.1, 0.25, 0.5), (True, False)):
            assert kf.knockoff_threshold(contrast, fdr, plus) == slow_threshold(contrast, fdr, plus)


# Three true features with fixed contrasts among nulls with fixed magnitudes, some of them tied, and
# one zero. The guarantees are statements on fair coins for the signs of the nulls, so the mean over
# all signs is exact.
TRUE = np.array([5.0, 3.0, 2.0])
NULLS = np.array([6.0, 4.0, 3.0, 3.0, 2.5, 2.0, 1.0, 1.0, 0.5, 0.0])


def all_contrasts():
    for signs in itertools.product((-1, 1), repeat=NULLS.size):
        yield np.concatenate([TRUE, NULLS * signs])


def false_and_all(list_):
    return list_[TRUE.size :].sum(), list_.sum()


@pytest.mark.parametrize("fdr", [0.2, 0.34, 0.5, 0.7])
def test_fdr_over_all_signs_of_the_nulls(fdr):
    plus, modified = [], []
    for contrast in all_contrasts():
        false, every = false_and_all(contrast >= kf.knockoff_threshold(contrast, fdr))
        plus.append(false / max(every, 1))
        false, every = false_and_all(contrast >= kf.knockoff_threshold(contrast, fdr, plus=False))
        modified.append(false / (every + 1 / fdr))
    assert np.mean(plus) <= fdr
    assert 0 < np.mean(modified) <= fdr


@pytest.mark.parametrize("v", [0, 1, 2, 3])
def test_pfer_and_kfwer_over_all_signs_of_the_nulls(v):
    false = np.array([false_and_all(c >= kf.stopping_threshold(c, v))[0] for c in all_contrasts()])
    assert false.mean() <= v
    for k in range(1, 6):
        dominating = nbinom.sf(k - 1, v, 0.5) if v else 0.0
        assert np.mean(false >= k) <= dominating + 1e-12
    if v:
        assert false.mean() > 0.3 * v


def test_without_ties_the_false_selections_are_negative_binomial():
    magnitudes = np.arange(12, 0, -1.0)
    false = np.array(
        [
            np.sum((w := magnitudes * s) >= kf.stopping_threshold(w, 2))
            for s in itertools.product((-1, 1), repeat=12)
        ]
    )
    # Among 12 nulls the run is cut short only where fewer than two are negative.
    for k in range(10):
        assert np.mean(false == k) == pytest.approx(nbinom.pmf(k, 2, 0.5), abs=1e-12)


@pytest.mark.parametrize("draw_fdr", [0.25, 0.4, 0.6])
def test_null_e_values_add_up_to_at_most_p(draw_fdr):
    totals = [
        kf.knockoff_e_values(c[None, :], draw_fdr)[TRUE.size :].sum() for c in all_contrasts()
    ]
    assert 0 < np.mean(totals) <= TRUE.size + NULLS.size


def test_stopping_by_hand():
    assert [kf.stopping_threshold(HAND, v) for v in range(5)] == [math.inf, 5, 2, 0.5, 0.3]
    # The positive 2 is tied with the first negative and left out.
    assert kf.stopping_threshold([4.0, 2.0, -2.0, 1.0], 1) == 4
    assert kf.stopping_threshold([-3.0, 2.0, 0.0], 1) == math.inf
    assert kf.stopping_threshold([0.0, 2.0, 1.0], 1) == 1


@pytest.mark.parametrize("k", [1, 2, 5])
@pytest.mark.parametrize("level", [0.05, 0.1, 0.5])
def test_kfwer_stop_uses_up_the_level(k, level):
    stop = kf.negatives_for_kfwer(k, level)
    v, weight = int(stop), stop - int(stop)
    errors = [nbinom.sf(k - 1, m, 0.5) if m else 0.0 for m in (v, v + 1)]
    assert errors[0] <= level < errors[1]
    assert (1 - weight) * errors[0] + weight * errors[1] == pytest.approx(level, rel=1e-9)


def test_stopping_numbers_are_drawn_with_their_mean():
    generator = np.random.default_rng(3)
    drawn = [kf.draw_negatives(1.3, generator) for _ in range(4000)]
    assert set(drawn) == {1, 2}
    assert abs(np.mean(drawn) - 1.3) <= 4 * math.sqrt(0.3 * 0.7 / 4000)
    assert kf.draw_negatives(1.3) == 1
    assert kf.draw_negatives(2.0, generator) == 2


def test_least_selection_is_the_least_that_the_filter_gives():
    for fdr in (0.05, 0.07, 0.1, 0.2, 0.3, 1 / 3, 0.6):
        least = kf.least_selection(fdr)
        assert kf.knockoff_threshold(np.ones(least), fdr) == 1
        assert least == 1 or kf.knockoff_threshold(np.ones(least - 1), fdr) == math.inf
    assert kf.least_selection(0.1, plus=False) == 1
    assert kf.least_candidates(0.2) == 10
    assert kf.derandomized_selection(np.ones((3, 10)), 0.2).all()
    assert not kf.derandomized_selection(np.ones((3, 9)), 0.2).any()


def test_smallest_targets_are_where_the_list_begins():
    generator = np.random.default_rng(5)
    for _ in range(200):
        contrast = generator.normal(0.7, 1, size=15)
        fdr = kf.smallest_fdr(contrast)
        if fdr < 1:
            assert np.isfinite(kf.knockoff_threshold(contrast, fdr))
            assert np.isinf(kf.knockoff_threshold(contrast, np.nextafter(fdr, 0)))
        v = kf.smallest_pfer(contrast)
        if np.isfinite(v):
            assert np.isfinite(kf.stopping_threshold(contrast, int(v)))
            assert np.isinf(kf.stopping_threshold(contrast, int(v) - 1))
    assert kf.smallest_fdr([-1.0, 0.0]) == kf.smallest_pfer([-1.0, 0.0]) == math.inf


def test_e_bh_equals_benjamini_hochberg_on_inverse_e_values():
    from scipy.stats import false_discovery_control

    generator = np.random.default_rng(6)
    found = []
    for _ in range(100):
        e_values = np.exp(generator.normal(1, 2, size=30))
        p_values = np.minimum(1, 1 / e_values)
        expected = false_discovery_control(p_values) <= 0.2
        found.append(kf.e_bh(e_values, 0.2).sum())
        np.testing.assert_array_equal(kf.e_bh(e_values, 0.2), expected)
    assert max(found) > min(found)


def test_e_bh_does_not_hang_on_the_last_bit():
    # 50 draws of which each gives p / 1: the average is p up to rounding, and k fdr = 1.
    e_values = np.full(10, np.mean(np.full(50, 10 / 3)) * 3)
    assert kf.e_bh(e_values * (1 - 1e-15), 0.1).all()


def test_one_draw_by_e_values_at_its_own_level_is_knockoff_plus():
    # Ren and Barber (2024): with one draw and equal levels the two lists are the same.
    generator = np.random.default_rng(7)
    sizes = []
    for _ in range(100):
        contrast = generator.normal(1, 1.2, size=40)
        single = contrast >= kf.knockoff_threshold(contrast, 0.2)
        np.testing.assert_array_equal(kf.derandomized_selection([contrast], 0.2, 0.2), single)
        sizes.append(single.sum())
    assert max(sizes) > 0 and min(sizes) == 0


@pytest.mark.parametrize(("threshold", "draws"), [(0.5, 31), (0.5, 30), (0.7, 10), (0.9, 20)])
def test_frequency_factor_is_the_linear_programme(threshold, draws):
    grid = np.arange(draws + 1)
    reached = grid >= threshold * draws - 1e-9
    steps = np.diff(np.eye(draws + 1), axis=0)
    for nonincreasing, rows in [(False, np.zeros((0, draws + 1))), (True, steps)]:
        # The largest P(frequency >= threshold) for one unit of mean.
        best = linprog(
            -reached.astype(float),
            A_ub=rows if rows.size else None,
            b_ub=np.zeros(len(rows)) if rows.size else None,
            A_eq=grid[None, :] / draws,
            b_eq=[1.0],
            method="highs",
        )
        found = kf.frequency_factor(threshold, draws, nonincreasing)
        assert found == pytest.approx(-best.fun, rel=1e-9)
        assert kf.frequency_pfer(2, threshold, draws, nonincreasing) == 2 * found
        inverse = kf.negatives_for_frequency(2, threshold, draws, nonincreasing)
        assert inverse * found == pytest.approx(2)


def test_half_of_an_odd_number_of_draws_costs_nothing_under_nonincreasing_laws():
    for draws in (1, 5, 31, 51):
        assert kf.frequency_factor(0.5, draws, nonincreasing=True) == pytest.approx(1, rel=1e-14)
    assert kf.frequency_factor(0.5, 30, nonincreasing=True) > 1


def test_selection_frequency_counts_draws():
    draws = np.vstack([HAND, -HAND, HAND])
    frequency = kf.selection_frequency(draws, 1)
    expected = [np.mean([d[j] >= kf.stopping_threshold(d, 1) for d in draws]) for j in range(10)]
    np.testing.assert_array_equal(frequency, expected)
    assert not kf.selection_frequency(draws, 0.5).any()
    drawn = kf.selection_frequency(np.tile(HAND, (400, 1)), 0.5, np.random.default_rng(0))
    assert abs(drawn[0] - 0.5) <= 4 * 0.5 / 20


def test_empty_lists_are_explained():
    reason, nearest = kf.why_none_passed(np.ones(4), 0.1)
    assert reason == "a list at fdr 0.1 holds at least 10 and there are 4 candidates"
    assert nearest == "fdr 0.25"
    assert kf.why_none_passed(-np.ones(30), 0.1) == ("no candidate beat its copy", None)
    reason, nearest = kf.why_none_passed(np.r_[np.ones(7), -0.5 * np.ones(20)], 0.1)
    assert "7 of 27 candidates beat their copies" in reason and nearest == "fdr 0.143"
    assert np.isfinite(kf.knockoff_threshold(np.r_[np.ones(7), -0.5 * np.ones(20)], 0.143))


def test_empty_derandomised_lists_are_explained():
    reason, nearest = kf.why_none_passed(np.ones((5, 12)), 0.1)
    assert "need at least 20 candidates and there are 12" in reason
    # 12 candidates fill the list from a level of 1/12 per draw on.
    assert nearest == "fdr 0.2"
    draws = np.tile(np.r_[np.ones(12), np.zeros(18)], (5, 1))
    reason, nearest = kf.why_none_passed(draws, 0.1)
    assert reason.startswith("5 of 5 draws are empty at their level 0.05") and nearest == "fdr 0.2"
    # One draw in three gives 20 candidates the e-value 40/3, enough where 40 / (20 fdr) <= 40/3.
    draws = [np.r_[np.ones(20), np.zeros(20)], -np.ones(40), -np.ones(40)]
    assert not kf.derandomized_selection(draws, 0.1).any()
    reason, nearest = kf.why_none_passed(draws, 0.1)
    assert reason == (
        "2 of 3 draws are empty at their level 0.05, half of the target (a draw that is not empty "
        "holds at least 20), and the others agree too little for the target 0.1"
    )
    assert nearest == "fdr 0.15"


def test_empty_lists_of_the_other_filters_are_explained():
    assert kf.why_none_stopped([-1.0, 0.0], 1) == ("no candidate beat its copy", None)
    assert kf.why_none_stopped([3.0, -1.0], 0)[1] == "pfer 1"
    reason, nearest = kf.why_none_stopped([-5.0, -4.0, 3.0], 1)
    assert "negative contrast number 1" in reason and nearest == "pfer 3"
    reason, nearest = kf.why_none_frequent([0.2, 0.0], 0.5, 31, 1, nonincreasing=True)
    assert reason == "the largest selection frequency is 0.2, below the threshold 0.5"
    assert kf.why_none_frequent([0.0], 0.5, 31, 1)[1] is None


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (
            lambda: kf.knockoff_threshold([1, math.nan, 2], 0.1),
            "at 1 of 3 .* position 1.*converged",
        ),
        (lambda: kf.stopping_threshold([math.inf, 2], 1), "not finite at 1 of 2"),
        (lambda: kf.knockoff_threshold([], 0.1), r"needed is \(p,\)"),
        (lambda: kf.knockoff_e_values([1.0, 2.0], 0.1), r"needed is \(n_draws, p\)"),
        (lambda: kf.knockoff_threshold([1.0], 0.0), "fdr=0.0 must lie strictly between 0 and 1"),
        (lambda: kf.select([1.0], 0.0), "threshold=0.0 must be positive"),
        (lambda: kf.select([1.0], math.nan), "threshold=nan must be positive"),
        (lambda: kf.stopping_threshold([1.0], 1.5), "whole number from 0.*draw_negatives"),
        (lambda: kf.draw_negatives(-1.0), "finite number from 0"),
        (lambda: kf.negatives_for_kfwer(0, 0.1), "k=0 must be a positive integer"),
        (lambda: kf.negatives_for_kfwer(1, 1.0), "level=1.0 must lie strictly"),
        (lambda: kf.e_bh([1.0, math.nan], 0.1), "none NaN"),
        (lambda: kf.frequency_factor(0.0, 10), "threshold must lie above 0"),
        (lambda: kf.negatives_for_frequency(0.0, 0.5, 31), "pfer=0.0 must be a positive number"),
    ],
)
def test_bad_input_is_named(call, message):
    with pytest.raises(ValueError, match=message):
        call()


def test_every_filter_names_its_measure_and_source():
    assert kf.FILTER_MEASURES.keys() == kf.FILTER_SOURCES.keys()
