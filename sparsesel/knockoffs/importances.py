r"""How much more a feature matters than its copy: importances and their contrasts.

Letters: features X (n rows, m columns), copies X~, outcome y, covariates A; a size Z >= 0 of every
column of the widened table [A X X~]; contrast W of every unit of selection, a unit being one
feature or a group of them.

    difference      W_g = sum over j in g of Z_j  -  sum over j in g of Z~_j
    signed maximum  W_g = max(Z_g, Z~_g) sign(Z_g - Z~_g),   Z_g the largest Z_j of the unit

(Barber and Candes 2015, equations 1.7 and 1.8, for units of one feature; for groups Dai and Barber
2016). The filters rest on one property: **swapping the columns of a unit with their copies flips
the sign of its contrast and changes no other.** It holds when Z is computed by a rule that treats
all penalised columns alike, which is why

* the columns are permuted at random before every fit: a solver that stops early, breaks a tie or
  draws its own random numbers by position would otherwise favour the originals;
* the penalty is tuned on the widened table, never on X alone;
* a feature and its copy have the same penalty weight.

Rules that decide with random numbers (folds, forests) have the property in distribution; given the
folds, those of the engine and the closed forms have it exactly, up to the tolerance of the solver.
Features without a copy (constant ones, say) are in the table once and have contrast 0.

**Tuned lasso.** One grid of penalties, that of the whole table; K folds are one bank; the penalty
with the smallest mean held-out loss. The grid is gone down in parts and left once the smallest
loss lies well above its end, because the lower end costs most and decides nothing.

**Entry point.** Z_j is the penalty at which column j enters the lasso path. The path is solved on
a geometric grid. Between two of its points, a_k < Z_j <= a_(k-1), the size of the standardised
coefficient at a_k, u = |b_j| s_j / v_j, which grows from 0 at the entry (with slope 1 where columns
are orthogonal), tells the entries apart:  Z_j = a_k + d u / (d + u),  d = a_(k-1) - a_k.  The path
ends once half of the columns, or half as many columns as rows, have entered; a column that is then
still outside has Z_j = 0.

**Ridge and marginal** sizes come from the working response. With the null model (intercept and
covariates) having mean mu and variance h = 1 (squared error) or mu (1 - mu) (log loss), weights
omega = w h and response r = (y - mu) / h, let z_j and u be omega^1/2 x_j and omega^1/2 r, projected
off omega^1/2 [1 A]. The marginal size is |z_j'u| / (|z_j| |u| v_j), the partial correlation given
the covariates. Ridge minimises |u - Z b|^2 + lambda sum_j v_j b_j^2 over standardised columns with
lambda by generalised cross-validation. For squared error these are the estimates themselves, for
the log loss one Newton step from the null model. Both are functions of the second moments of the
widened table alone.

References
----------
Barber, R. F. and Candes, E. J. (2015). Controlling the false discovery rate via knockoffs. *Annals
of Statistics* 43, 2055-2085.

Candes, E., Fan, Y., Janson, L. and Lv, J. (2018). Panning for gold: 'model-X' knockoffs for high
dimensional controlled variable selection. *Journal of the Royal Statistical Society B* 80,
551-577. Section 3.2; the tuned lasso coefficient difference is its equation 3.7.

Dai, R. and Barber, R. F. (2016). The knockoff filter for FDR control in group-sparse and multitask
regression. *Proceedings of the 33rd International Conference on Machine Learning*.

Golub, G. H., Heath, M. and Wahba, G. (1979). Generalized cross-validation as a method for choosing
a good ridge parameter. *Technometrics* 21, 215-223.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh
from scipy.special import expit, logit
from sklearn.base import clone, is_classifier
from sklearn.utils.validation import has_fit_parameter

from sparsesel.engine import BankResult, DesignMatrix, Keep, Problems, Status, as_design, solve_bank
from sparsesel.knockoffs._model import PairedTable

__all__ = [
    "IMPORTANCES",
    "EngineFit",
    "EntryPoint",
    "EstimatorDifference",
    "Importance",
    "ImportanceProblem",
    "LassoDifference",
    "MarginalDifference",
    "Measured",
    "RidgeDifference",
    "Sizes",
    "WidenedTable",
    "as_importance",
    "measure_contrasts",
]

FloatArray = NDArray[np.float64]

# The grid of penalties: three decades in steps of 7%, solved in parts of a factor of two.
_GRID, _ALPHA_MIN_RATIO, _PART = 100, 1e-3, 10
# The smallest loss is believed when it lies this many points above the end, a factor of three in
# the penalty, or the fewer, a factor of 1.7, once a quarter of its gain on the null model is lost.
_FAR, _NEAR = 15, 8
# Of an outcome that intercept and covariates explain only rounding is left, relative to its size.
_NOTHING_LEFT = 1e-12
# Ridge penalties that are tried, relative to the largest squared singular value.
_RIDGE_GRID = np.geomspace(1e3, 1e-6, 100)


# ---------------------------------------------------------------------------------------------
# What is measured, and what comes out
# ---------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class ImportanceProblem:
    """One draw of copies with all that an importance may use.

    Parameters
    ----------
    table : PairedTable
        Features, copies, outcome, covariates and weights.
    loss : {"squared_error", "log_loss"}
        With log loss the outcome is 0 or 1.
    has_copy : ndarray of shape (m,), bool
        Which features have a copy of their own.
    units : ndarray of shape (m,), int
        Unit of every feature, from 0.
    penalty_weights : ndarray of shape (m,) or None, default=None
        Positive and finite; a copy has the weight of its feature. None: all one.
    groups : ndarray of shape (n,) or None, default=None
        Labels of rows that stay together when folds are made.
    standardize : bool, default=True
        Whether penalties and sizes are in units of the columns' standard deviations.
    tol, max_iter : float, int
        Accuracy and iterations of the engine.
    """

    table: PairedTable
    loss: str
    has_copy: NDArray[np.bool_]
    units: NDArray[np.int64]
    penalty_weights: FloatArray | None = None
    groups: NDArray[Any] | None = None
    standardize: bool = True
    tol: float = 1e-7
    max_iter: int = 10_000

    @property
    def n_units(self) -> int:
        """Number of units."""
        return int(self.units.max()) + 1

    @property
    def weights(self) -> FloatArray:
        """Weights (n,) of the rows, ones where none were given."""
        given = self.table.sample_weight
        return np.ones(len(self.table.response)) if given is None else given


@dataclass(frozen=True)
class EngineFit:
    """The last problem that a size was read off, with the engine's answer.

    Attributes
    ----------
    problems : Problems
        The statement, of a single problem on the widened table.
    alpha : float
        Its penalty.
    coef : ndarray of shape (number of columns,)
        Coefficients of the widened table.
    intercept : float
        Intercept.
    """

    problems: Problems
    alpha: float
    coef: FloatArray
    intercept: float


@dataclass(frozen=True)
class Sizes:
    """Sizes of the columns of the widened table.

    Attributes
    ----------
    values : ndarray of shape (number of columns,)
        Not negative and finite; what covariates have is not used.
    results : tuple of BankResult
        Every bank that the engine solved, for its certificates.
    fit : EngineFit or None
        What the sizes were read off, if the engine solved it.
    """

    values: FloatArray
    results: tuple[BankResult, ...] = ()
    fit: EngineFit | None = None


@dataclass(frozen=True)
class Measured:
    """Contrasts of one draw.

    Attributes
    ----------
    contrast : ndarray of shape (n_units,)
        W, large and positive where a unit beats its copies.
    results : tuple of BankResult
        Every bank that the engine solved.
    design : ndarray of shape (n, number of columns) or None
        The widened table, in the order of `fit`.
    fit : EngineFit or None
        What the sizes were read off, if the engine solved it.
    """

    contrast: FloatArray
    results: tuple[BankResult, ...] = ()
    design: NDArray[Any] | None = None
    fit: EngineFit | None = None


class Importance(ABC):
    """A rule that gives every column of the widened table a size.

    Attributes
    ----------
    signed_maximum : bool
        Whether the contrast is the signed maximum instead of the difference.
    """

    signed_maximum: ClassVar[bool] = False

    @abstractmethod
    def describe(self) -> str:
        """What a claim calls the importance."""

    @abstractmethod
    def sizes(self, wide: WidenedTable, generator: np.random.Generator) -> Sizes:
        """Sizes of the columns, by a rule that treats all penalised ones alike."""

    def objection(self, problem: ImportanceProblem) -> str:
        """Say why the rule can't be applied to a problem; empty where it can."""
        return ""


def measure_contrasts(
    importance: Importance, problem: ImportanceProblem, generator: np.random.Generator
) -> Measured:
    """Contrasts of the units of one draw.

    Parameters
    ----------
    importance : Importance
        The rule, see `IMPORTANCES`.
    problem : ImportanceProblem
        The draw.
    generator : numpy.random.Generator
        Order of the columns, folds, seeds of estimators.

    Returns
    -------
    Measured
        The contrasts with the certificates of what was solved.

    Raises
    ------
    ValueError
        If the rule can't be applied to the problem, or a size is negative or not finite.

    References
    ----------
    Barber and Candes (2015), equations 1.7 and 1.8.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import GaussianModel
    >>> from sparsesel.knockoffs.importances import ImportanceProblem, MarginalDifference
    >>> from sparsesel.knockoffs.importances import measure_contrasts
    >>> generator = np.random.default_rng(0)
    >>> X = generator.standard_normal((200, 3))
    >>> model = GaussianModel().fit(X)
    >>> table = model.draw(X, 3 * X[:, 1] + generator.standard_normal(200), generator)
    >>> problem = ImportanceProblem(table, "squared_error", model.has_copy, np.arange(3))
    >>> int(measure_contrasts(MarginalDifference(), problem, generator).contrast.argmax())
    1
    """
    if objection := importance.objection(problem):
        raise ValueError(objection)
    if not problem.has_copy.any():
        return Measured(np.zeros(problem.n_units))
    wide = WidenedTable.of(problem, generator)
    sizes = importance.sizes(wide, generator)
    if not (np.isfinite(sizes.values).all() and (sizes.values >= 0).all()):
        raise ValueError(
            f"{importance.describe()} gave sizes that are negative or not finite. Sizes must be "
            "finite numbers from 0: check the parameters of what measures them, or use "
            "importance='lasso'."
        )
    original, copy = wide.of_pairs(sizes.values)
    units = problem.units[problem.has_copy]
    if importance.signed_maximum:
        contrast = _signed_maximum(original, copy, units, problem.n_units)
    else:
        contrast = _summed(original, units, problem.n_units)
        contrast -= _summed(copy, units, problem.n_units)
    return Measured(contrast, sizes.results, wide.table, sizes.fit)


def _summed(sizes: FloatArray, units: NDArray[np.int64], n_units: int) -> FloatArray:
    return np.asarray(np.bincount(units, sizes, n_units), dtype=np.float64)


def _signed_maximum(
    original: FloatArray, copy: FloatArray, units: NDArray[np.int64], n_units: int
) -> FloatArray:
    largest = np.zeros((2, n_units))
    np.maximum.at(largest[0], units, original)
    np.maximum.at(largest[1], units, copy)
    return largest.max(axis=0) * np.sign(largest[0] - largest[1])


# ---------------------------------------------------------------------------------------------
# The widened table
# ---------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class WidenedTable:
    """Covariates, features and copies side by side, in random order.

    Attributes
    ----------
    problem : ImportanceProblem
        What it was made from.
    table : ndarray of shape (n, number of columns)
        Covariates, features without a copy, features with one, their copies; permuted.
    design : DesignMatrix
        The table as the engine reads it.
    position : ndarray of shape (number of columns,), int
        Where each column of that list is in the table.
    penalty_weights : ndarray of shape (number of columns,)
        0 for covariates; in the order of the table.
    """

    problem: ImportanceProblem
    table: NDArray[Any]
    design: DesignMatrix
    position: NDArray[np.int64]
    penalty_weights: FloatArray

    @classmethod
    def of(cls, problem: ImportanceProblem, generator: np.random.Generator) -> WidenedTable:
        """Widen the table of a problem and permute its columns."""
        paired, has_copy = problem.table, problem.has_copy
        given = problem.penalty_weights
        weights = np.ones(len(has_copy)) if given is None else given
        parts = [
            (paired.covariates, np.zeros(paired.covariates.shape[1])),
            (paired.features[:, ~has_copy], weights[~has_copy]),
            (paired.features[:, has_copy], weights[has_copy]),
            (paired.copies[:, has_copy], weights[has_copy]),
        ]
        count = sum(len(penalty) for _, penalty in parts)
        position = generator.permutation(count)
        kind = np.float32 if paired.features.dtype == np.float32 else np.float64
        table = np.empty((len(paired.response), count), dtype=kind, order="F")
        penalty_weights = np.empty(count)
        start = 0
        for columns, penalty in parts:
            where = position[start : start + len(penalty)]
            table[:, where], penalty_weights[where] = columns, penalty
            start += len(penalty)
        return cls(problem, table, as_design(table), position, penalty_weights)

    @property
    def covariates(self) -> NDArray[np.int64]:
        """Positions of the covariates in the table."""
        return self.position[: self.problem.table.covariates.shape[1]]

    @property
    def penalized(self) -> NDArray[np.int64]:
        """Positions of all other columns in the table."""
        return self.position[self.problem.table.covariates.shape[1] :]

    @property
    def scale(self) -> FloatArray:
        """Weighted standard deviation of every column, or ones without standardising."""
        if not self.problem.standardize:
            return np.ones(len(self.position))
        weights = self.problem.weights / self.problem.weights.sum()
        return self.design.moments(weights[None, :]).scale[0]

    def of_pairs(self, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Values of the features that have a copy, and of their copies."""
        count = int(self.problem.has_copy.sum())
        pairs = values[self.position[len(self.position) - 2 * count :]]
        return pairs[:count], pairs[count:]

    def problems(self, sample_weight: FloatArray, l1_ratio: float = 1.0) -> Problems:
        """The penalised regressions of the outcome on the table, one per row of weights."""
        return Problems(
            loss=self.problem.loss,
            response=self.problem.table.response,
            sample_weight=sample_weight,
            penalty_weights=self.penalty_weights,
            l1_ratio=l1_ratio,
            standardize=self.problem.standardize,
        )

    def solve(self, problems: Problems, alphas: Any, keep: Keep) -> BankResult:
        """Have the engine solve problems of this table."""
        return solve_bank(
            self.design,
            problems,
            alphas,
            keep=keep,
            alpha_min_ratio=_ALPHA_MIN_RATIO,
            tol=self.problem.tol,
            max_iter=self.problem.max_iter,
        )


def held_out_folds(
    problem: ImportanceProblem, n_folds: int, generator: np.random.Generator
) -> NDArray[np.bool_]:
    """Masks (K, n) of the held-out rows of every fold, drawn at random.

    Groups of rows stay together, classes are spread evenly with log loss, and rows of weight zero
    are in no fold. K is smaller than asked for where the rarer class or the groups are few.
    """
    rows = np.flatnonzero(problem.weights > 0)
    labels = rows if problem.groups is None else problem.groups[rows]
    unit_of_row = np.unique(labels, return_inverse=True)[1].reshape(-1)
    n_units = int(unit_of_row.max()) + 1
    classes, fewest = np.zeros(n_units), n_units
    if problem.loss == "log_loss":
        np.maximum.at(classes, unit_of_row, problem.table.response[rows])
        fewest = int(min(np.sum(classes == 0), np.sum(classes == 1)))
    if fewest < 2:
        raise ValueError(
            f"There is {fewest} row or group of rows of the rarer class, of {n_units} altogether. "
            "To cross-validate the penalty at least 2 of each class are needed: give more rows, or "
            "use importance='entry', 'ridge' or 'marginal', which need no folds."
        )
    count = min(n_folds, fewest)
    order = generator.permutation(n_units)
    order = order[np.argsort(classes[order], kind="stable")]
    fold = np.empty(n_units, dtype=np.int64)
    fold[order] = np.arange(n_units) % count
    held_out = np.zeros((count, len(problem.weights)), dtype=bool)
    held_out[fold[unit_of_row], rows] = True
    return held_out


# ---------------------------------------------------------------------------------------------
# Importances of the engine
# ---------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class LassoDifference(Importance):
    """Difference of the coefficients of a lasso or elastic net with cross-validated penalty.

    Parameters
    ----------
    l1_ratio : float in (0, 1], default=1.0
        Share of the absolute-value penalty.
    n_folds : int, default=5
        Folds of the cross-validation, at least 2.

    References
    ----------
    Candes, Fan, Janson and Lv (2018), equation 3.7.
    """

    l1_ratio: float = 1.0
    n_folds: int = 5

    def describe(self) -> str:
        """What a claim calls the importance."""
        kind = "lasso" if self.l1_ratio == 1.0 else f"elastic net (l1_ratio {self.l1_ratio:g})"
        return f"the coefficient difference of a {kind} with cross-validated penalty"

    def sizes(self, wide: WidenedTable, generator: np.random.Generator) -> Sizes:
        """Sizes |b_j| s_j at the chosen penalty."""
        held_out = held_out_folds(wide.problem, self.n_folds, generator)
        whole = wide.problems(wide.problem.weights, self.l1_ratio)
        top = wide.solve(whole, 1, Keep(coefficients=False)).alpha_max[0]
        if top == 0:
            return Sizes(np.zeros(len(wide.position)))
        alphas = top * np.geomspace(1.0, _ALPHA_MIN_RATIO, _GRID)
        position, results = self._choose(wide, held_out, alphas)
        final = wide.solve(whole, alphas[: position + 1], Keep(coefficients=True))
        assert final.coef is not None
        coef = final.coef[0][[-1]].toarray()[0]
        fit = EngineFit(whole, float(alphas[position]), coef, float(final.intercept[0, -1]))
        return Sizes(np.abs(coef) * wide.scale, (*results, final), fit)

    def _choose(
        self, wide: WidenedTable, held_out: NDArray[np.bool_], alphas: FloatArray
    ) -> tuple[int, list[BankResult]]:
        """Position of the penalty with the smallest held-out loss; the largest wins ties."""
        weights = wide.problem.weights
        problems = wide.problems(np.where(held_out, 0.0, weights), self.l1_ratio)
        keep = Keep(coefficients=False, held_out=held_out * weights)
        results: list[BankResult] = []
        loss = np.empty(0)
        for start in range(0, len(alphas), _PART):
            results.append(wide.solve(problems, alphas[start : start + _PART], keep))
            found = results[-1].held_out_loss
            assert found is not None
            loss = np.concatenate([loss, found.mean(axis=0)])
            if _is_past(loss):
                break
        return int(np.argmin(loss)), results


def _is_past(loss: FloatArray) -> bool:
    """Whether the smallest held-out loss of a grid has been seen in these first points of it.

    The loss can fall in steps, one for every strong feature that enters, with a rise before each.
    """
    best = int(np.argmin(loss))
    beyond, gain = len(loss) - 1 - best, loss[0] - loss[best]
    return beyond >= _FAR or (beyond >= _NEAR and 0 < gain <= 4 * (loss[-1] - loss[best]))


@dataclass(frozen=True)
class EntryPoint(Importance):
    """The penalty at which a column enters the lasso path, with the signed maximum.

    References
    ----------
    Barber and Candes (2015), equation 1.7.
    """

    signed_maximum: ClassVar[bool] = True

    def describe(self) -> str:
        """What a claim calls the importance."""
        return "the signed penalty of entry into the lasso path"

    def sizes(self, wide: WidenedTable, generator: np.random.Generator) -> Sizes:
        """Sizes in units of the penalty; 0 for columns that have not entered."""
        whole = wide.problems(wide.problem.weights)
        most = max(1, min(len(wide.penalized), int(np.sum(wide.problem.weights > 0))) // 2)
        result = wide.solve(whole, _GRID, Keep(coefficients=True, entries=most))
        assert result.coef is not None
        reached = np.flatnonzero(result.status[0] != Status.NOT_REACHED)
        path, alphas = result.coef[0].tocsc(), result.alphas[0]
        sizes = np.zeros(len(wide.position))
        scale = wide.scale
        for j in wide.penalized:
            entries = slice(path.indptr[j], path.indptr[j + 1])
            nonzero = np.flatnonzero(path.data[entries])
            if nonzero.size:
                first = path.indptr[j] + nonzero[np.argmin(path.indices[entries][nonzero])]
                u = abs(path.data[first]) * scale[j] / wide.penalty_weights[j]
                sizes[j] = _entry(alphas, path.indices[first], u)
        last = int(reached[-1])
        coef = result.coef[0][[last]].toarray()[0]
        fit = EngineFit(whole, float(alphas[last]), coef, float(result.intercept[0, last]))
        return Sizes(sizes, (result,), fit)


def _entry(alphas: FloatArray, k: int, u: float) -> float:
    """Penalty of entry of a column that is first seen at grid point k with coefficient u."""
    d = alphas[max(k - 1, 0)] - alphas[k]
    return float(alphas[k] + (d * u / (d + u) if d > 0 else 0.0))


# ---------------------------------------------------------------------------------------------
# Closed forms
# ---------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Working:
    """The working response and what it is projected off; see the module's docstring."""

    root: FloatArray  # (n,), omega^1/2
    basis: FloatArray  # (n, rank), orthonormal, spans root * [1 A]
    u: FloatArray  # (n,)
    results: tuple[BankResult, ...]

    @classmethod
    def of(cls, wide: WidenedTable) -> _Working:
        weights, response, results = _working_response(wide)
        root = np.sqrt(weights)
        covariates = wide.design.gather(wide.covariates, centred=True)
        fixed = np.vstack([np.ones(len(root)), covariates]) * root
        left, values, _ = np.linalg.svd(fixed.T, full_matrices=False)
        basis = left[:, values > 1e-10 * values[0]]
        whole = root * response
        u = whole - basis @ (basis.T @ whole)
        if np.linalg.norm(u) <= _NOTHING_LEFT * np.linalg.norm(whole):
            u = np.zeros_like(u)
        return cls(root, basis, u, results)

    def columns(self, wide: WidenedTable) -> FloatArray:
        """Projected penalised columns as rows, zero where nothing but rounding is left."""
        rows = wide.design.gather(wide.penalized, centred=True) * self.root
        before = np.linalg.norm(rows, axis=1)
        rows -= (rows @ self.basis) @ self.basis.T
        after = np.linalg.norm(rows, axis=1)
        rounding = wide.design.rounding
        floor = wide.design.largest[wide.penalized] * np.linalg.norm(self.root)
        rows[(after <= 1e3 * rounding * before) | (before <= rounding * floor)] = 0.0
        return rows


def _working_response(
    wide: WidenedTable,
) -> tuple[FloatArray, FloatArray, tuple[BankResult, ...]]:
    """Weights w h and working response (y - mu) / h of the null model."""
    problem = wide.problem
    weights, y = problem.weights / problem.weights.sum(), problem.table.response
    if problem.loss == "squared_error":
        return weights, y, ()
    results: tuple[BankResult, ...] = ()
    eta: Any = logit(weights @ y)
    if len(wide.covariates):
        null = Problems(
            loss=problem.loss,
            response=y,
            sample_weight=problem.weights,
            penalty_weights=np.zeros(len(wide.covariates)),
        )
        covariates = problem.table.covariates
        result = solve_bank(
            as_design(covariates), null, [1.0], tol=problem.tol, max_iter=problem.max_iter
        )
        assert result.coef is not None
        eta = result.intercept[0, 0] + covariates @ result.coef[0].toarray()[0]
        results = (result,)
    mean = expit(np.broadcast_to(eta, y.shape))
    # A fitted probability of 0 or 1 carries no information; the floor keeps its weight finite.
    information = np.maximum(mean * (1.0 - mean), 1e-12)
    return weights * information, (y - mean) / information, results


@dataclass(frozen=True)
class MarginalDifference(Importance):
    """Difference of the absolute partial correlations with the outcome, given the covariates.

    With log loss of the score statistics of single columns.
    """

    def describe(self) -> str:
        """What a claim calls the importance."""
        return "the difference of marginal associations"

    def sizes(self, wide: WidenedTable, generator: np.random.Generator) -> Sizes:
        """Sizes |z_j'u| / (|z_j| |u| v_j)."""
        working = _Working.of(wide)
        rows = working.columns(wide)
        length = np.linalg.norm(rows, axis=1) * np.linalg.norm(working.u)
        product = np.abs(rows @ working.u)
        sizes = np.zeros(len(wide.position))
        sizes[wide.penalized] = np.divide(
            product,
            length * wide.penalty_weights[wide.penalized],
            out=np.zeros_like(product),
            where=length > 0,
        )
        return Sizes(sizes, working.results)


@dataclass(frozen=True)
class RidgeDifference(Importance):
    """Difference of ridge coefficients, the penalty by generalised cross-validation.

    With log loss one Newton step from the null model.

    References
    ----------
    Golub, Heath and Wahba (1979).
    """

    def describe(self) -> str:
        """What a claim calls the importance."""
        return "the ridge coefficient difference, penalty by generalised cross-validation"

    def sizes(self, wide: WidenedTable, generator: np.random.Generator) -> Sizes:
        """Sizes |b_j| s_j at the chosen penalty."""
        working, scale = _Working.of(wide), wide.scale[wide.penalized]
        rows = working.columns(wide)
        unit = scale * np.sqrt(wide.penalty_weights[wide.penalized])
        rows *= np.divide(1.0, unit, out=np.zeros_like(unit), where=unit > 0)[:, None]
        n_rows = int(np.sum(wide.problem.weights > 0))
        # b in units of 1 / unit_j; what counts is b_j s_j.
        coef = _ridge(rows, working.u, working.basis.shape[1], n_rows)
        sizes = np.zeros(len(wide.position))
        sizes[wide.penalized] = np.abs(coef) / np.sqrt(wide.penalty_weights[wide.penalized])
        return Sizes(sizes, working.results)


def _ridge(rows: FloatArray, u: FloatArray, n_fixed: int, n_rows: int) -> FloatArray:
    """Minimise |u - rows'b|^2 + lambda |b|^2, lambda by generalised cross-validation.

    With singular values d of the columns, left singular vectors g and N rows (Golub, Heath and
    Wahba 1979) lambda minimises

        [sum_i (lambda / (d_i^2 + lambda))^2 (g_i'u)^2 + |u|^2 - sum_i (g_i'u)^2] / (1 - t / N)^2,
        t = n_fixed + sum_i d_i^2 / (d_i^2 + lambda).
    """
    wide = len(rows) > len(u)
    squares, vectors = eigh(rows.T @ rows if wide else rows @ rows.T)
    kept = squares > 1e-12 * squares[-1]
    squares, vectors = squares[kept], vectors[:, kept]
    if not squares.size:
        return np.zeros(len(rows))
    along = vectors.T @ u if wide else (vectors.T @ (rows @ u)) / np.sqrt(squares)
    penalties = squares[-1] * _RIDGE_GRID[:, None]
    unexplained = max(float(u @ u - along @ along), 0.0)
    residual = ((penalties / (squares + penalties) * along) ** 2).sum(axis=1) + unexplained
    room = 1.0 - (n_fixed + (squares / (squares + penalties)).sum(axis=1)) / n_rows
    score = np.where(room > 0, residual / np.maximum(room, 1e-300) ** 2, np.inf)
    shrunk = along / (squares + penalties[np.argmin(score), 0])
    return rows @ (vectors @ shrunk) if wide else vectors @ (shrunk * np.sqrt(squares))


# ---------------------------------------------------------------------------------------------
# Any estimator
# ---------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class EstimatorDifference(Importance):
    """Difference of the importances that an estimator of scikit-learn gives the columns.

    Parameters
    ----------
    estimator : estimator
        With `coef_` or `feature_importances_` after fit. It is cloned, seeded and fitted to the
        widened table, covariates included as ordinary columns; its own parameters decide the
        loss.
    """

    estimator: Any

    def describe(self) -> str:
        """What a claim calls the importance."""
        return f"the difference of the importances of {type(self.estimator).__name__}"

    def objection(self, problem: ImportanceProblem) -> str:
        """Weights that the estimator does not take, or a classifier without classes."""
        name, given = type(self.estimator).__name__, problem.penalty_weights
        if given is not None and not (given == 1).all():
            return (
                f"penalty_weights holds finite weights other than 1, but importances come from "
                f"{name}, which knows no penalty weights. Allowed are 1 and infinity (left out): "
                "leave the others away, or use importance='lasso'."
            )
        weighted = problem.table.sample_weight is not None
        if weighted and not has_fit_parameter(self.estimator, "sample_weight"):
            return (
                f"sample_weight was given, but {name}.fit does not take it. Fit without weights, "
                "or use an estimator that takes them."
            )
        if is_classifier(self.estimator) and problem.loss != "log_loss":
            return (
                f"{name} is a classifier, but the outcome was read as numbers (the loss is "
                "'squared_error'). Use a regressor, or an outcome with two classes and "
                "loss='log_loss'."
            )
        return ""

    def sizes(self, wide: WidenedTable, generator: np.random.Generator) -> Sizes:
        """Sizes |coef_| s_j, or feature_importances_ where they are positive."""
        estimator = clone(self.estimator)
        _seed(estimator, generator)
        response, weight = wide.problem.table.response, wide.problem.table.sample_weight
        keywords = {} if weight is None else {"sample_weight": weight}
        outcome = response.astype(np.int64) if is_classifier(estimator) else response
        estimator.fit(wide.table, outcome, **keywords)
        if hasattr(estimator, "coef_"):
            coef = np.abs(np.asarray(estimator.coef_, dtype=np.float64))
            return Sizes(coef.reshape(-1, len(wide.position)).sum(axis=0) * wide.scale)
        if hasattr(estimator, "feature_importances_"):
            return Sizes(np.asarray(estimator.feature_importances_, dtype=np.float64))
        raise ValueError(
            f"{type(estimator).__name__} has neither coef_ nor feature_importances_ after fit, so "
            "it gives no importances. Use an estimator with one of them, or importance='lasso'."
        )


def _seed(estimator: Any, generator: np.random.Generator) -> None:
    """Set every random_state of the estimator and of what it wraps."""
    names = [
        name
        for name in sorted(estimator.get_params(deep=True))
        if name == "random_state" or name.endswith("__random_state")
    ]
    estimator.set_params(**{name: int(generator.integers(2**31)) for name in names})


# ---------------------------------------------------------------------------------------------
# The registry
# ---------------------------------------------------------------------------------------------

IMPORTANCES: Mapping[str, Importance] = MappingProxyType(
    {
        "lasso": LassoDifference(),
        "entry": EntryPoint(),
        "ridge": RidgeDifference(),
        "elastic_net": LassoDifference(l1_ratio=0.5),
        "marginal": MarginalDifference(),
    }
)


def as_importance(importance: Any) -> Importance:
    """Resolve what a caller names as importance.

    Parameters
    ----------
    importance : str, Importance or estimator
        A key of `IMPORTANCES`, a rule of its own, or an estimator of scikit-learn.

    Returns
    -------
    Importance
        The rule.

    Raises
    ------
    ValueError
        If it is none of these.

    Examples
    --------
    >>> from sparsesel.knockoffs.importances import as_importance
    >>> as_importance("entry")
    EntryPoint()
    """
    if isinstance(importance, str) and importance in IMPORTANCES:
        return IMPORTANCES[importance]
    if isinstance(importance, Importance):
        return importance
    if hasattr(importance, "fit") and hasattr(importance, "get_params"):
        return EstimatorDifference(importance)
    raise ValueError(
        f"importance={importance!r} is unknown; allowed are {', '.join(map(repr, IMPORTANCES))}, "
        "an estimator of scikit-learn with coef_ or feature_importances_, or an Importance. "
        "'lasso' is the usual choice."
    )
