"""Are the copies exchangeable with the features?  A check on rows that the model has not seen.

Copies are valid if swapping any features with their copies leaves the joint distribution of a row
as it is (Candes, Fan, Janson and Lv 2018, definition 3.1).  The model is fitted to half of the
rows; each row of the other half gets copies and a random set A of features to swap.  With T the
features of a row and T^A what stands in their place after the swap, the difference

    d(g) = g(T) - g(T^A)

has mean 0 for every function g, because swapping A twice undoes it.  Four functions are looked at,
each for a way in which models of features fail in practice (columns standardised, R and the signs
taken from the other rows of the held-out half, so that they are independent of the row):

dependence   T'RT, R the correlations between features beyond twice their standard error
scale        (mean of T_j^2 - 1)^2, large rows being large in all features at once
skewness     sum_j c_j (T_j^3 - 3 T_j)
tails        sum_j c_j (T_j^4 - 6 T_j^2)          (powers of T_j clipped at 4)

**Error of the fit.**  An estimated model is never exactly right, and the mean of d is then off by
the error of the fit, which is of the size of its own standard error.  To first order this offset is
minus the mean over the rows of the fit of E[d | T], so that

    Var(mean d) = Var(d) / n_test + Var(E[d | T]) / n_fit,

and the second variance is the covariance of d between two independent draws for the same row (an
upper bound where g is not quadratic).  A z-value against this is calibrated for a known and for an
estimated covariance.

**Size.**  Shrinkage bends every estimate on purpose, and enough rows prove it.  The check calls
dependence and scale violated only when, besides, at least a fifth of mean g is lost in the swap:
with rows five times the features, the Ledoit-Wolf covariance loses about an eighth; with as many
rows as features, two fifths; a model without dependence, three quarters.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

from sparsesel.knockoffs._model import (
    HOLDS,
    UNCHECKED,
    VIOLATED,
    FeatureModel,
    as_covariates,
    as_weights,
    condition,
)
from sparsesel.tasks import spawn

STATISTICS = ("dependence", "scale", "skewness", "tails")

# Loss of mean g that counts as a violation; the last two are 0 under the model's own shape.
_LARGEST_LOSS = np.array([0.2, 0.2, 0.0, 0.0])

_FEWEST_ROWS = 40
_MOST_FEATURES = 500
_CLIP = 4.0


@dataclass(frozen=True)
class ExchangeabilityCheck:
    """Outcome of the check.

    Attributes
    ----------
    z : ndarray of shape (4,)
        Standardised mean differences: dependence, scale, skewness, tails.
    loss : ndarray of shape (4,)
        Share of the mean that is lost in the swap.
    p_value : float
        Smallest two-sided p-value times four, at most 1.
    violated : tuple of str
        The statistics that say no.
    n_rows : int
        Held-out rows; 0 where the check was not possible.
    level : float
        Chance of a false alarm that was asked for.
    """

    z: np.ndarray
    loss: np.ndarray
    p_value: float
    violated: tuple[str, ...]
    n_rows: int
    level: float = 0.05

    def assumption(self) -> tuple[str, str, str]:
        """The result as (statement, state, detail)."""
        statement = "features and copies can be swapped on rows that the model has not seen"
        if self.n_rows == 0:
            return statement, UNCHECKED, f"fewer than {_FEWEST_ROWS} rows, or nothing to copy"
        if not self.violated:
            detail = f"{self.n_rows} held-out rows, p = {self.p_value:.2g}"
            if self.p_value < self.level:
                most = 100 * np.abs(self.loss[_LARGEST_LOSS > 0]).max()
                detail += f", but no more than {most:.0f}% of the dependence is lost"
            return statement, HOLDS, detail
        found = ", ".join(
            f"{name} (z = {self.z[i]:.1f}, {100 * self.loss[i]:.0f}% lost)"
            for i, name in enumerate(STATISTICS)
            if name in self.violated
        )
        return statement, VIOLATED, f"{self.n_rows} held-out rows differ in {found}"


def check_exchangeability(
    model: FeatureModel,
    X: np.ndarray,
    seed: int,
    *,
    covariates: np.ndarray | None = None,
    sample_weight: np.ndarray | None = None,
    feature_groups: np.ndarray | None = None,
    level: float = 0.05,
) -> ExchangeabilityCheck:
    """Fit a model to half of the rows and test its copies on the other half.

    Parameters
    ----------
    model : FeatureModel
        A model-X model, not yet fitted.
    X : ndarray of shape (n_rows, n_features)
        The features.
    seed : int
        Decides the halves, the copies and the swaps.
    covariates : ndarray of shape (n_rows, n_covariates), default=None
        Columns that are conditioned on.
    sample_weight : ndarray of shape (n_rows,), default=None
        Weights for the fit; rows of weight 0 take no part.
    feature_groups : ndarray of shape (n_features,), default=None
        Labels of groups that are swapped as a whole.
    level : float, default=0.05
        Chance of a false alarm, in (0, 1).

    Returns
    -------
    ExchangeabilityCheck
        With ``n_rows = 0`` where there are fewer than 40 rows or nothing to copy.

    Raises
    ------
    ValueError
        If the model cannot be fitted to half of the rows.

    References
    ----------
    Candes, Fan, Janson and Lv 2018, "Panning for gold", definition 3.1, for what is tested.  The
    four statistics and the variance are derived in the module.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import GaussianModel, check_exchangeability
    >>> X = np.random.default_rng(0).standard_normal((400, 10))
    >>> check_exchangeability(GaussianModel(), X, 0).assumption()[1]
    'checked and fine'
    """
    Z, weights = as_covariates(covariates, len(X)), as_weights(sample_weight, len(X))
    split, draws = spawn(seed, 2)
    rows = split.permutation(np.flatnonzero(weights > 0))
    fit, test = rows[: len(rows) // 2], rows[len(rows) // 2 :]
    impossible = ExchangeabilityCheck(np.zeros(4), np.zeros(4), 1.0, (), 0)
    if len(rows) < _FEWEST_ROWS:
        return impossible
    fitted = model.fit(
        X[fit], covariates=Z[fit], sample_weight=weights[fit], feature_groups=feature_groups
    )
    share = weights[fit] / weights[fit].sum()
    conditioning = condition(X[fit], Z[fit], share, feature_groups)
    columns = np.flatnonzero(fitted.has_copy[conditioning.has_copy])
    if not len(columns):
        return impossible
    columns = draws.permutation(columns)[:_MOST_FEATURES]
    labels = np.arange(X.shape[1]) if feature_groups is None else np.asarray(feature_groups)
    units = np.unique(labels[conditioning.has_copy][columns], return_inverse=True)[1]
    held_out = X[test]
    features = conditioning.residuals(held_out, Z[test])[:, columns]
    pairs = []
    for _ in range(2):
        copies = fitted.draw(held_out, np.zeros(len(test)), draws, covariates=Z[test]).copies
        moved = conditioning.residuals(copies, Z[test])[:, columns]
        swap = (draws.random((len(test), units.max() + 1)) < 0.5)[:, units]
        pairs.append(_values(features, np.where(swap, moved, features)))
    before = pairs[0][0]
    after = np.stack([value for _, value in pairs])
    return _judged(before, after, len(fit), level)


def _values(features: np.ndarray, swapped: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The four functions of each row before and after the swap, shapes (n_rows, 4)."""
    before, after = np.empty((len(features), 4)), np.empty((len(features), 4))
    fold = np.arange(len(features)) % 2 == 0
    for own in (fold, ~fold):
        others = features[~own]
        correlation = np.corrcoef(others, rowvar=False).reshape(len(others[0]), -1)
        correlation = np.where(np.abs(correlation) < 2.0 / np.sqrt(len(others)), 0.0, correlation)
        np.fill_diagonal(correlation, 0.0)
        clipped = np.clip(others, -_CLIP, _CLIP)
        skewness = np.mean(clipped**3, axis=0)
        tails = np.mean(clipped**4, axis=0) - 3.0
        for table, values in ((features, before), (swapped, after)):
            rows = table[own]
            short = np.clip(rows, -_CLIP, _CLIP)
            size = rows.shape[1] * (np.mean(rows**2, axis=1) - 1.0) ** 2
            values[own] = np.column_stack(
                [
                    np.einsum("ij,ij->i", rows @ correlation, rows),
                    np.minimum(size, 50.0),
                    (short**3 - 3.0 * rows) @ skewness,
                    (short**4 - 6.0 * short**2) @ tails,
                ]
            )
    return before, after


def _judged(
    before: np.ndarray, after: np.ndarray, n_fit: int, level: float
) -> ExchangeabilityCheck:
    """z-values, losses and the verdict; ``after`` holds two draws."""
    n_test = len(before)
    first, second = before - after[0], before - after[1]
    difference = 0.5 * (first + second)
    mean = difference.mean(axis=0)
    shared = np.mean((first - first.mean(0)) * (second - second.mean(0)), axis=0)
    variance = difference.var(axis=0, ddof=1) / n_test + np.maximum(shared, 0.0) / n_fit
    z = np.divide(mean, np.sqrt(variance), out=np.zeros(4), where=variance > 0)
    size = np.maximum(np.abs(before.mean(0)), np.abs(after.mean(axis=(0, 1))))
    loss = np.divide(mean, size, out=np.zeros(4), where=size > 0)
    p_values = 2.0 * norm.sf(np.abs(z))
    no = (len(z) * p_values < level) & (np.abs(loss) >= _LARGEST_LOSS)
    violated = tuple(name for name, says_no in zip(STATISTICS, no, strict=True) if says_no)
    p_value = float(min(1.0, len(z) * p_values.min()))
    return ExchangeabilityCheck(z, loss, p_value, violated, n_test, level)
