"""Complementary halves of the rows of a table, by strata and by groups.

A complementary pair is two disjoint random halves A and B of the n rows, of ⌊n/2⌋ rows each; where
n is odd, one row drawn at random is in neither. Selecting on both halves of a pair is what the
bounds of Shah and Samworth rest on: the two selections are independent given the table's law, and
a feature that is chosen by chance is rarely chosen on both.

* **Strata** (classes of an outcome, say): every stratum s of n_s rows is halved for itself, so a
  half holds ⌊n_s/2⌋ of its rows, and a rare class can't be missing from a half.
* **Groups** (rows that belong together, as lots of one orchard): whole groups are halved, ⌊G/2⌋
  of the G groups in each half, because halves that share a group are not independent.
* **Both**: the groups are halved within strata of groups that hold the same set of classes.

References
----------
R. D. Shah and R. J. Samworth, "Variable selection with error control: another look at stability
selection", Journal of the Royal Statistical Society B 75 (2013) 55-80, section 2.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["complementary_pairs", "half_size", "one_row_per_group"]


def complementary_pairs(
    n_rows: int,
    n_pairs: int,
    generator_or_seed: np.random.Generator | int,
    *,
    strata: ArrayLike | None = None,
    groups: ArrayLike | None = None,
) -> NDArray[np.bool_]:
    """Draw complementary pairs of halves.

    Parameters
    ----------
    n_rows : int
        Number of rows of the table, at least 4.
    n_pairs : int
        Number of pairs, at least 1.
    generator_or_seed : numpy.random.Generator or int
        Source of randomness. More pairs from the same seed begin with the same pairs.
    strata : array-like of shape (n_rows,), optional
        Labels that are balanced between the halves.
    groups : array-like of shape (n_rows,), optional
        Labels of rows that stay together.

    Returns
    -------
    ndarray of bool, shape (2 * n_pairs, n_rows)
        Rows 2k and 2k + 1 are the two halves of pair k.

    Raises
    ------
    ValueError
        If there are too few rows or groups, or if a half could miss a stratum altogether.

    Examples
    --------
    >>> from sparsesel.resampling import complementary_pairs
    >>> halves = complementary_pairs(6, 1, 0, strata=["a", "a", "b", "b", "b", "b"])
    >>> halves.sum(axis=1)
    array([3, 3])
    >>> bool((halves[0] & halves[1]).any())
    False
    """
    if n_pairs < 1:
        raise ValueError(
            f"n_pairs={n_pairs} leaves nothing to draw. Allowed are integers from 1. "
            "Use the default of 50 if in doubt."
        )
    unit_of_row, sets = _units(n_rows, strata, groups)
    n_units = sum(map(len, sets))
    generator = np.random.default_rng(generator_or_seed)
    halves = np.zeros((2 * n_pairs, n_rows), dtype=bool)
    for pair in range(n_pairs):
        chosen = np.zeros((2, n_units), dtype=bool)
        for members in sets:
            drawn = generator.permutation(members)
            half = len(members) // 2
            chosen[0, drawn[:half]] = True
            chosen[1, drawn[half : 2 * half]] = True
        halves[2 * pair : 2 * pair + 2] = chosen[:, unit_of_row]
    return halves


def half_size(n_rows: int, strata: ArrayLike | None = None, groups: ArrayLike | None = None) -> int:
    """Return the smallest number of rows that a half can hold.

    Parameters
    ----------
    n_rows : int
        Number of rows of the table, at least 4.
    strata, groups : array-like of shape (n_rows,), optional
        As in :func:`complementary_pairs`. Groups differ in size: the smallest half holds the
        smallest ones.

    Returns
    -------
    int

    Raises
    ------
    ValueError
        As in :func:`complementary_pairs`.

    Examples
    --------
    >>> from sparsesel.resampling import half_size
    >>> half_size(11), half_size(6, groups=["a", "b", "b", "b", "c", "c"])
    (5, 1)
    """
    unit_of_row, sets = _units(n_rows, strata, groups)
    sizes = np.bincount(unit_of_row)
    return int(sum(np.sort(sizes[members])[: len(members) // 2].sum() for members in sets))


def one_row_per_group(groups: ArrayLike, generator: np.random.Generator) -> NDArray[np.intp]:
    """Draw one row of every group, each row of a group equally likely.

    Parameters
    ----------
    groups : array-like of shape (n_rows,)
        Labels of rows that belong together.
    generator : numpy.random.Generator
        Source of randomness.

    Returns
    -------
    ndarray of int, shape (n_groups,)
        Row positions, in the order of the sorted labels.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.resampling import one_row_per_group
    >>> one_row_per_group(["b", "a", "c"], np.random.default_rng(0))
    array([1, 0, 2])
    """
    codes = _codes(groups, "groups", None)
    shuffled = generator.permutation(len(codes))
    return shuffled[np.unique(codes[shuffled], return_index=True)[1]]


def _units(
    n_rows: int, strata: ArrayLike | None, groups: ArrayLike | None
) -> tuple[NDArray[np.intp], list[NDArray[np.intp]]]:
    """Return which unit each row belongs to, and the sets of units that are halved one by one."""
    if n_rows < 4:
        raise ValueError(
            f"A table of {n_rows} rows can't be halved usefully. Allowed are tables of at least 4 "
            "rows. Collect more rows, or select on the whole table with a method that does not "
            "resample."
        )
    classes = None if strata is None else _codes(strata, "strata", n_rows)
    if groups is None:
        unit_of_row, kind = np.arange(n_rows), "row"
        stratum_of_unit = np.zeros(n_rows, dtype=np.intp) if classes is None else classes
    else:
        unit_of_row, kind = _codes(groups, "groups", n_rows), "group"
        stratum_of_unit = _class_sets(unit_of_row, classes)
    _check_units(unit_of_row, kind)
    sets = _members(stratum_of_unit)
    if classes is not None:
        _check_strata(np.asarray(strata), classes, unit_of_row, sets, kind)
        sets = _pool_singles(sets)
    return unit_of_row, sets


def _codes(labels: ArrayLike, name: str, n_rows: int | None) -> NDArray[np.intp]:
    """Number labels from 0 in sorted order."""
    values = np.asarray(labels)
    if values.ndim != 1 or (n_rows is not None and len(values) != n_rows):
        wanted = "one dimension" if n_rows is None else f"shape ({n_rows},)"
        raise ValueError(
            f"{name} has shape {values.shape}. Allowed is {wanted}: one label for every row. "
            f"Pass {name} for the same rows as X."
        )
    if _has_missing(values):
        raise ValueError(
            f"{name} has missing labels. Allowed is a label for every row. Leave out the rows "
            "without one, or give each a label of its own."
        )
    try:
        return np.unique(values, return_inverse=True)[1].reshape(-1)
    except TypeError as error:
        kinds = sorted({type(value).__name__ for value in values})
        raise ValueError(
            f"{name} mixes labels of the types {', '.join(kinds)}. Allowed are labels that can be "
            "sorted. Turn them all into text."
        ) from error


def _has_missing(values: NDArray[Any]) -> bool:
    if values.dtype.kind == "O":
        return any(map(_is_missing, values))
    return bool(values.dtype.kind in "fcmM" and np.isnan(values).any())


def _is_missing(label: Any) -> bool:
    # NaN differs from itself; pandas' NA compares to itself with neither yes nor no.
    same = label == label
    return label is None or not isinstance(same, bool | np.bool_) or not same


def _class_sets(
    unit_of_row: NDArray[np.intp], classes: NDArray[np.intp] | None
) -> NDArray[np.intp]:
    """Number the groups by the set of classes that their rows hold."""
    n_units = int(unit_of_row.max()) + 1
    if classes is None:
        return np.zeros(n_units, dtype=np.intp)
    holds = np.zeros((n_units, int(classes.max()) + 1), dtype=bool)
    holds[unit_of_row, classes] = True
    return np.unique(holds, axis=0, return_inverse=True)[1].reshape(-1)


def _members(labels: NDArray[np.intp]) -> list[NDArray[np.intp]]:
    order = np.argsort(labels, kind="stable")
    return np.split(order, np.flatnonzero(np.diff(labels[order])) + 1)


def _check_units(unit_of_row: NDArray[np.intp], kind: str) -> None:
    n_units = int(unit_of_row.max()) + 1
    if n_units < 2:
        raise ValueError(
            f"groups holds {n_units} {kind}, so there is nothing to halve. Allowed are at least 2 "
            "groups. Pass groups=None if rows are independent, or collect further groups."
        )


def _check_strata(
    labels: NDArray[Any],
    classes: NDArray[np.intp],
    unit_of_row: NDArray[np.intp],
    sets: list[NDArray[np.intp]],
    kind: str,
) -> None:
    """Refuse strata that a half can miss: those without a set of two or more units."""
    safe_units = np.zeros(int(unit_of_row.max()) + 1, dtype=bool)
    for members in sets:
        safe_units[members] = len(members) >= 2
    safe = np.bincount(classes, weights=safe_units[unit_of_row]) > 0
    if safe.all():
        return
    label = labels[np.flatnonzero(~safe[classes])[0]]
    among = "" if kind == "row" else " among groups with the same set of classes"
    raise ValueError(
        f"The class {label!s} has a single {kind}{among}, so a half of the table would be without "
        f"it. Allowed are classes with at least 2 {kind}s each. Merge it with another class, leave "
        f"it out, or collect more of it."
    )


def _pool_singles(sets: list[NDArray[np.intp]]) -> list[NDArray[np.intp]]:
    """Halve together the groups whose set of classes no other group has.

    Alone, such a group would be the odd one of its set and in no half ever. A lone one joins the
    largest set, where that has three groups or more, so that each half keeps a group of that set.
    """
    single = [members for members in sets if len(members) == 1]
    several = [members for members in sets if len(members) > 1]
    if len(single) > 1:
        return [*several, np.concatenate(single)]
    if single:
        largest = max(range(len(several)), key=lambda position: len(several[position]))
        if len(several[largest]) >= 3:
            several[largest] = np.concatenate([several[largest], single[0]])
            return several
    return sets
