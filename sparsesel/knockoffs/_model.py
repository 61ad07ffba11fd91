"""What every model of the features offers, and what all of them do with a table first.

A model is a frozen dataclass of settings; ``fit`` returns another frozen dataclass that can
``draw``.  Covariates are conditioned on, never copied: every model describes the distribution of
the features given them.  Some features get no copy:

* a constant feature, and one that the covariates determine, has nothing to be told apart by;
* features that repeat one another (correlation 1 or -1 in the rows seen) can't be told apart from
  one another, let alone from copies.  One of them is conditioned on like a covariate.

They have s_j = 0, their copy is the feature itself, and a selector must give them contrast 0.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np

# The four states of an assumption, spelled as the claim spells them.
BY_CONSTRUCTION = "by construction"
HOLDS = "checked and fine"
VIOLATED = "checked and violated"
UNCHECKED = "can't be checked from the data"

Assumptions = tuple[tuple[str, str, str], ...]

# Columns of at most this many values are not called Gaussian.
FEW_VALUES = 10

# Rounding, relative: of a constant column, and of what regression leaves of a determined one.
_CONSTANT = {np.dtype(np.float32): 1e-5, np.dtype(np.float64): 1e-10}
_DETERMINED = {np.dtype(np.float32): 1e-4, np.dtype(np.float64): 1e-7}


@dataclass(frozen=True)
class PairedTable:
    """Originals and copies, ready for a regression of the response on both.

    Attributes
    ----------
    features : ndarray of shape (n_rows, n_features)
        The originals.
    copies : ndarray of shape (n_rows, n_features)
        The copies; equal to the original where a feature has none.
    response : ndarray of shape (n_rows,)
        The response.
    covariates : ndarray of shape (n_rows, n_covariates)
        Columns to keep unpenalised in the regression, beside an intercept.
    sample_weight : ndarray of shape (n_rows,) or None
        Weights of the rows.
    """

    features: np.ndarray
    copies: np.ndarray
    response: np.ndarray
    covariates: np.ndarray
    sample_weight: np.ndarray | None


class FittedModel(Protocol):
    """A fitted model of the features.

    Attributes
    ----------
    s : ndarray of shape (n_features,)
        1 - correlation of a feature with its copy, given the covariates; 0 without a copy.
    has_copy : ndarray of shape (n_features,), bool
        Which features have a copy of their own.
    """

    s: np.ndarray
    has_copy: np.ndarray

    def draw(
        self,
        X: np.ndarray,
        y: np.ndarray,
        generator: np.random.Generator,
        *,
        covariates: np.ndarray | None = None,
        sample_weight: np.ndarray | None = None,
    ) -> PairedTable:
        """One draw of copies, with the table that importances are computed from."""

    def assumptions(self) -> Assumptions:
        """What the model assumes: (statement, state, detail) each."""


class FeatureModel(Protocol):
    """Settings of a model of the features."""

    def fit(
        self,
        X: np.ndarray,
        *,
        covariates: np.ndarray | None = None,
        sample_weight: np.ndarray | None = None,
        feature_groups: np.ndarray | None = None,
    ) -> FittedModel:
        """Fit the model to the rows of X."""


@dataclass(frozen=True)
class Conditioning:
    """How features are centred on what is conditioned on, and which of them are copied.

    The mean of the copied features is [1, covariates, X[:, repeated]] @ coefficients, and
    ``scale`` is the weighted standard deviation about it.
    """

    has_copy: np.ndarray
    repeated: np.ndarray
    coefficients: np.ndarray
    scale: np.ndarray
    notes: tuple[str, ...] = ()

    def centre(self, X: np.ndarray, covariates: np.ndarray) -> np.ndarray:
        """Mean of the copied features in each row, shape (n_rows, n_copied)."""
        fixed = np.column_stack([covariates, X[:, self.repeated]])
        return self.coefficients[0] + fixed @ self.coefficients[1:]

    def residuals(self, X: np.ndarray, covariates: np.ndarray) -> np.ndarray:
        """Copied features about their mean, in units of their standard deviation."""
        return (X[:, self.has_copy] - self.centre(X, covariates)) / self.scale


def as_covariates(covariates: np.ndarray | None, n_rows: int) -> np.ndarray:
    """Covariates as a float64 matrix, with no columns where there are none."""
    if covariates is None:
        return np.empty((n_rows, 0))
    matrix = np.asarray(covariates, dtype=np.float64)
    matrix = matrix.reshape(-1, 1) if matrix.ndim == 1 else matrix
    if len(matrix) != n_rows:
        raise ValueError(
            f"The covariates have {len(matrix)} rows and the features {n_rows}; both must describe "
            "the same rows. Take both from one table."
        )
    return matrix


def as_weights(sample_weight: np.ndarray | None, n_rows: int) -> np.ndarray:
    """Sample weights scaled to sum to one."""
    if sample_weight is None:
        return np.full(n_rows, 1.0 / n_rows)
    weights = np.asarray(sample_weight, dtype=np.float64)
    valid = weights.shape == (n_rows,) and np.isfinite(weights).all() and (weights >= 0).all()
    if not valid or weights.sum() <= 0:
        raise ValueError(
            f"The sample weights have shape {weights.shape} for {n_rows} rows, or hold values that "
            "are negative, not finite, or all 0; one weight of at least 0 per row is needed, not "
            "all 0. Leave sample_weight out to weigh all rows alike."
        )
    return weights / weights.sum()


def condition(
    X: np.ndarray,
    covariates: np.ndarray,
    weights: np.ndarray,
    feature_groups: np.ndarray | None = None,
) -> Conditioning:
    """Find the features that are copied and regress them on what is conditioned on.

    Features that repeat one another inside one group are copied: the group is told apart as a
    whole.
    """
    n_features = X.shape[1]
    if feature_groups is not None and np.shape(feature_groups) != (n_features,):
        raise ValueError(
            f"{np.shape(feature_groups)} labels of groups were given for {n_features} features; "
            "one label per feature is needed. Give features outside of any group labels of their "
            "own."
        )
    seen = weights > 0
    X, covariates, weights = X[seen], covariates[seen], weights[seen]
    precision = X.dtype if X.dtype == np.float32 else np.dtype(np.float64)
    root = np.sqrt(weights)[:, None]
    deviation = _deviations(X, weights)
    varying = deviation > _CONSTANT[precision] * np.abs(X).max(axis=0, initial=0.0)
    notes = _noted("constant", ~varying)

    fixed = np.column_stack([np.ones(len(X)), covariates])
    if len(X) < fixed.shape[1] + 2:
        raise ValueError(
            f"{len(X)} rows of positive weight were given with {fixed.shape[1]} columns of "
            "intercept and covariates; at least two more rows than these are needed. Give fewer "
            "covariates or more rows."
        )
    _, spread = regression(X, fixed, root)
    free = varying & (spread > _DETERMINED[precision] * deviation)
    notes += _noted("determined by the covariates", varying & ~free)

    residuals = X - fixed @ regression(X, fixed, root)[0]
    groups = repeated_columns(residuals[:, free] * (root / spread[free]), precision)
    positions = np.flatnonzero(free)
    if feature_groups is not None:
        labels = np.asarray(feature_groups)[positions]
        groups = [group for group in groups if len(set(labels[list(group)])) > 1]
    repeated = np.array([positions[group[0]] for group in groups], dtype=np.intp)
    members = np.zeros(n_features, dtype=bool)
    for group in groups:
        members[positions[list(group)]] = True
    notes += _noted("repeating one another", members)

    fixed = np.column_stack([fixed, X[:, repeated]])
    coefficients, left = regression(X, fixed, root)
    has_copy = free & ~members & (left > _DETERMINED[precision] * deviation)
    return Conditioning(has_copy, repeated, coefficients[:, has_copy], left[has_copy], tuple(notes))


def _deviations(X: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Weighted standard deviations, two-pass."""
    mean = weights @ X
    return np.sqrt(weights @ (X - mean) ** 2)


def regression(X: np.ndarray, fixed: np.ndarray, root: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Weighted least-squares coefficients and standard deviations about the fit."""
    centre = X.mean(axis=0, dtype=np.float64)
    coefficients = np.linalg.lstsq(fixed * root, (X - centre) * root, rcond=1e-12)[0]
    spread = np.sqrt((((X - centre - fixed @ coefficients) * root) ** 2).sum(axis=0))
    coefficients[0] += centre
    return coefficients, spread


def repeated_columns(standardized: np.ndarray, precision: np.dtype) -> Sequence[tuple[int, ...]]:
    """Groups of columns of unit norm that are equal up to sign.

    Equal columns have equal products with one fixed vector; sorting these finds the candidates in
    O(n p), and the columns themselves decide.
    """
    if standardized.shape[1] < 2:
        return []
    probe = np.cos(1.0 + np.arange(len(standardized), dtype=np.float64) ** 2)
    product = np.abs(probe @ standardized)
    tolerance = _DETERMINED[precision]
    order = np.argsort(product, kind="stable")
    groups: list[list[int]] = []
    for before, after in itertools.pairwise(order):
        if product[after] - product[before] > tolerance:
            continue
        if 1.0 - abs(standardized[:, before] @ standardized[:, after]) > tolerance**2:
            continue
        if groups and groups[-1][-1] == before:
            groups[-1].append(int(after))
        else:
            groups.append([int(before), int(after)])
    return sorted(tuple(sorted(group)) for group in groups)


def count_few_valued(X: np.ndarray, columns: np.ndarray) -> int:
    """How many of the columns (positions) take at most ten values.

    The first rows rule out nearly all others without sorting whole columns.
    """
    start = X[:200]
    suspects = [j for j in columns if len(np.unique(start[:, j])) <= FEW_VALUES]
    return sum(len(np.unique(X[:, j])) <= FEW_VALUES for j in suspects)


def _noted(what: str, mask: np.ndarray) -> list[str]:
    count = int(mask.sum())
    return [f"{count} {what}"] if count else []


def pair(
    X: np.ndarray,
    copies: np.ndarray,
    y: np.ndarray,
    covariates: np.ndarray | None,
    sample_weight: np.ndarray | None,
) -> PairedTable:
    """The table of a model-X draw: the rows as they are, the copies beside them."""
    weight = None if sample_weight is None else np.asarray(sample_weight, dtype=np.float64)
    return PairedTable(X, copies, np.asarray(y), as_covariates(covariates, len(X)), weight)
