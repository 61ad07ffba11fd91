"""Complementary pairs: identities of the design, balance, inclusion probabilities, errors."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from sparsesel.resampling import complementary_pairs, half_size, one_row_per_group
from sparsesel.tasks import spawn


def pairs(halves):
    return halves.reshape(-1, 2, halves.shape[1])


def counts(labels, half):
    """How many rows of each label a half holds."""
    names = np.unique(labels)
    return (labels[half][:, None] == names).sum(axis=0)


# --- sizes and disjointness -----------------------------------------------------------------


@given(n_rows=st.integers(4, 60), n_pairs=st.integers(1, 5), seed=st.integers(0, 2**31 - 1))
def test_halves_of_independent_rows(n_rows, n_pairs, seed):
    halves = complementary_pairs(n_rows, n_pairs, seed)
    assert halves.dtype == bool and halves.shape == (2 * n_pairs, n_rows)
    assert (halves.sum(axis=1) == n_rows // 2).all()
    for first, second in pairs(halves):
        assert not (first & second).any()
        assert (~(first | second)).sum() == n_rows % 2
    assert half_size(n_rows) == n_rows // 2


@given(sizes=st.lists(st.integers(2, 9), min_size=1, max_size=5), seed=st.integers(0, 2**31 - 1))
def test_halves_by_strata_hold_half_of_each(sizes, seed):
    assume(sum(sizes) >= 4)
    strata = np.random.default_rng(seed).permutation(np.repeat(np.arange(len(sizes)), sizes))
    halves = complementary_pairs(len(strata), 3, seed, strata=strata)
    for half in halves:
        np.testing.assert_array_equal(counts(strata, half), np.array(sizes) // 2)
    for first, second in pairs(halves):
        assert not (first & second).any()
    assert half_size(len(strata), strata=strata) == sum(size // 2 for size in sizes)


@given(sizes=st.lists(st.integers(1, 6), min_size=2, max_size=8), seed=st.integers(0, 2**31 - 1))
def test_groups_are_never_split(sizes, seed):
    assume(sum(sizes) >= 4)
    groups = np.random.default_rng(seed).permutation(np.repeat(np.arange(len(sizes)), sizes))
    halves = complementary_pairs(len(groups), 3, seed, groups=groups)
    for first, second in pairs(halves):
        in_first, in_second = set(groups[first]), set(groups[second])
        assert len(in_first) == len(in_second) == len(sizes) // 2
        assert not in_first & in_second
        for half, held in ((first, in_first), (second, in_second)):
            assert half.sum() == np.isin(groups, list(held)).sum()
            assert half.sum() >= half_size(len(groups), groups=groups)


def test_the_smallest_half_of_unequal_groups_is_reached():
    groups = np.repeat(["a", "b", "c", "d", "e"], [1, 2, 3, 4, 10])
    halves = complementary_pairs(len(groups), 200, 0, groups=groups)
    # Two of five groups; the smallest two have 1 + 2 rows, and one draw in ten takes them.
    assert halves.sum(axis=1).min() == half_size(len(groups), groups=groups) == 3


@given(seed=st.integers(0, 2**31 - 1), data=st.data())
def test_strata_and_groups_together(seed, data):
    n_pure_0 = data.draw(st.integers(2, 6))
    n_pure_1 = data.draw(st.integers(2, 6))
    n_mixed = data.draw(st.integers(0, 6))
    held = [(0,)] * n_pure_0 + [(1,)] * n_pure_1 + [(0, 1)] * n_mixed
    rows = [
        (group, label)
        for group, labels in enumerate(held)
        for label in labels
        for _ in range(data.draw(st.integers(1, 3)))
    ]
    groups, strata = np.random.default_rng(seed).permutation(np.array(rows)).T
    halves = complementary_pairs(len(rows), 2, seed, strata=strata, groups=groups)
    smallest = half_size(len(rows), strata=strata, groups=groups)
    kinds = np.array(["".join(map(str, labels)) for labels in held])
    for first, second in pairs(halves):
        taken = [set(groups[first]), set(groups[second])]
        assert not taken[0] & taken[1]
        for half, inside in zip((first, second), taken, strict=True):
            assert half.sum() == np.isin(groups, list(inside)).sum() >= smallest
            assert set(strata[half]) == {0, 1}
            if n_mixed != 1:
                expected = [(kinds == kind).sum() // 2 for kind in np.unique(kinds)]
                got = [(kinds[list(inside)] == kind).sum() for kind in np.unique(kinds)]
                assert got == expected


# --- inclusion --------------------------------------------------------------------------------


def check_inclusion(halves, expected):
    """Compare the share of pairs with a row in the first half with its probability.

    The two halves of a pair are not independent, the pairs are.
    """
    first = halves[::2]
    error = np.sqrt(expected * (1 - expected) / len(first))
    # 4.5 standard errors: over 50 rows and two sides, a false alarm in 3,000 changes of seed.
    assert (np.abs(first.mean(axis=0) - expected) <= 4.5 * error).all()


def test_every_row_is_as_likely_in_a_half():
    generator = spawn(0, 1)[0]
    halves = complementary_pairs(11, 4_000, generator)
    check_inclusion(halves, np.full(11, 5 / 11))


def test_every_row_of_a_stratum_is_as_likely_in_a_half():
    strata = np.repeat([0, 1, 2], [3, 8, 5])
    halves = complementary_pairs(16, 4_000, spawn(1, 1)[0], strata=strata)
    check_inclusion(halves, np.repeat([1 / 3, 1 / 2, 2 / 5], [3, 8, 5]))


def test_rows_are_drawn_together_as_often_as_at_random():
    halves = complementary_pairs(8, 4_000, spawn(2, 1)[0])[::2]
    together = (halves.astype(float).T @ halves) / len(halves)
    expected = (4 / 8) * (3 / 7)
    error = math.sqrt(expected * (1 - expected) / len(halves))
    assert np.abs(together[~np.eye(8, dtype=bool)] - expected).max() <= 4.5 * error


def test_groups_with_a_set_of_classes_of_their_own_are_drawn_too():
    # {0} six times, {1} four times, {0, 1} once: alone, the last would always be left out.
    groups = np.array([0, 1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 10])
    strata = np.array([0, 0, 0, 0, 0, 0, 1, 1, 1, 1, 0, 1])
    halves = complementary_pairs(12, 4_000, spawn(3, 1)[0], strata=strata, groups=groups)
    check_inclusion(halves, np.array([3 / 7] * 6 + [1 / 2] * 4 + [3 / 7] * 2))
    # Three classes, {0}, {1}, {2} twice each, and two groups that stand alone: halved together.
    groups = np.array([0, 1, 2, 3, 4, 5, 6, 6, 7, 7])
    strata = np.array([0, 0, 1, 1, 2, 2, 0, 1, 1, 2])
    halves = complementary_pairs(10, 4_000, spawn(4, 1)[0], strata=strata, groups=groups)
    check_inclusion(halves, np.full(10, 1 / 2))


# --- determinism ------------------------------------------------------------------------------


def test_the_seed_decides_and_more_pairs_only_add():
    strata = np.repeat(["a", "b"], [7, 12])
    base = complementary_pairs(19, 5, 3, strata=strata)
    np.testing.assert_array_equal(base, complementary_pairs(19, 5, 3, strata=strata))
    np.testing.assert_array_equal(base, complementary_pairs(19, 9, 3, strata=strata)[:10])
    generator = np.random.default_rng(3)
    np.testing.assert_array_equal(base, complementary_pairs(19, 5, generator, strata=strata))
    assert (complementary_pairs(19, 5, 4, strata=strata) != base).any()


@pytest.mark.parametrize("convert", [list, np.array, pd.Series, pd.Categorical])
def test_names_and_containers_of_labels_do_not_matter(convert):
    codes = np.array([2, 0, 1, 1, 0, 2, 2, 0, 1, 1])
    names = convert([["ash", "beech", "oak"][code] for code in codes])
    for argument in ("strata", "groups"):
        np.testing.assert_array_equal(
            complementary_pairs(10, 4, 0, **{argument: names}),
            complementary_pairs(10, 4, 0, **{argument: codes}),
        )


def test_the_order_of_rows_within_groups_does_not_matter():
    groups = np.repeat([0, 1, 2, 3], [1, 2, 3, 4])
    shuffle = np.random.default_rng(0).permutation(10)
    halves = complementary_pairs(10, 4, 0, groups=groups)
    shuffled = complementary_pairs(10, 4, 0, groups=groups[shuffle])
    np.testing.assert_array_equal(shuffled, halves[:, shuffle])


def test_groups_of_one_row_are_rows():
    np.testing.assert_array_equal(
        complementary_pairs(9, 4, 0, groups=np.arange(9)), complementary_pairs(9, 4, 0)
    )


# --- one row per group --------------------------------------------------------------------------


def test_one_row_of_every_group_each_as_likely():
    groups = np.array(["b", "a", "b", "c", "b", "a"])
    generator = spawn(5, 1)[0]
    drawn = np.array([one_row_per_group(groups, generator) for _ in range(3_000)])
    assert (groups[drawn] == ["a", "b", "c"]).all()
    shares = np.array([(drawn == row).any(axis=1).mean() for row in range(6)])
    expected = np.array([1 / 3, 1 / 2, 1 / 3, 1, 1 / 3, 1 / 2])
    error = np.sqrt(expected * (1 - expected) / len(drawn))
    assert (np.abs(shares - expected) <= 4.5 * error).all()


# --- errors -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (dict(n_rows=3), r"3 rows can't be halved.*at least 4 rows.* Collect more rows"),
        (dict(n_pairs=0), r"n_pairs=0 .*integers from 1.* Use the default"),
        (
            dict(groups=["a"] * 6),
            r"groups holds 1 group, .*at least 2 groups.* Pass groups=None",
        ),
        (
            dict(strata=["yes", "no", "no", "no", "no", "no"]),
            r"class yes has a single row, .*at least 2 rows each.* Merge it",
        ),
        (
            dict(strata=[1, 1, 0, 0, 0, 0], groups=[0, 0, 1, 2, 3, 4]),
            r"class 1 has a single group .*same set of classes, .*at least 2 groups each",
        ),
        (dict(strata=[0, 1]), r"strata has shape \(2,\).*shape \(6,\).* same rows as X"),
        (dict(groups=np.zeros((6, 2))), r"groups has shape \(6, 2\).*shape \(6,\)"),
        (
            dict(groups=[0, 1, 2, 3, 4, np.nan]),
            r"groups has missing labels.*every row.* Leave out",
        ),
        (dict(strata=["a", "a", "b", "b", "b", None]), r"strata has missing labels"),
        (
            dict(groups=pd.array([1, 1, 2, 2, 3, None], dtype="Int64")),
            r"groups has missing labels",
        ),
        (
            dict(groups=np.array([0, "a", 1, "b", 2, "c"], dtype=object)),
            r"mixes labels of the types int, str.*can be sorted.* into text",
        ),
    ],
)
def test_bad_input_is_refused_with_what_to_do(arguments, message):
    arguments = {"n_rows": 6, "n_pairs": 2, **arguments}
    with pytest.raises(ValueError, match=message):
        complementary_pairs(**arguments, generator_or_seed=0)
    if "n_pairs" not in message:
        arguments.pop("n_pairs")
        with pytest.raises(ValueError, match=message):
            half_size(**arguments)
