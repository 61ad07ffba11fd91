r"""Initial estimates of the adaptive lasso.

The adaptive lasso penalises column j by :math:`(\max_k |\hat b_k| / |\hat b_j|)^\gamma`, so all it
needs of an initial estimate is how large the coefficients are relative to each other, in units of
the columns' standard deviations where the selector standardises. Four estimates are on offer:

* **Least squares** (log loss: maximum likelihood): all columns unpenalised.
* **Lasso**: the path's point with the smallest BIC. It decides without resampling, so that the
  estimate is a function of the rows alone and can be made again inside every fold; that BIC picks
  too many columns when there are many is what an initial estimate should do.
* **Ridge** and **marginal** slopes, from the *working response*. Let :math:`\eta` be the linear
  predictor of the null model (intercept and covariates A only), with mean :math:`\mu` and variance
  h = 1 (squared error) or :math:`\mu (1 - \mu)` (log loss). With weights :math:`\omega = w h` and
  the working response :math:`r = (y - \mu) / h`, project :math:`\omega^{1/2} x_j` and
  :math:`\omega^{1/2} r` off the span of :math:`\omega^{1/2} (1, A)` and call the results
  :math:`z_j` and u. The marginal slope is :math:`z_j'u / z_j'z_j`; ridge minimises
  :math:`\|u - Z b\|^2 + \lambda \|b\|^2` over the scaled columns. For squared error these are the
  estimates themselves, for the log loss one Newton step from the null model.

The ridge penalty is chosen by generalised cross-validation from the singular values d of Z,

.. math::

    V(\lambda) = \frac{\sum_i (\lambda / (d_i^2 + \lambda))^2 (g_i' u)^2 + \|u_\perp\|^2}
    {(1 - t(\lambda) / N)^2}, \qquad
    t(\lambda) = \operatorname{rank}(1, A) + \sum_i \frac{d_i^2}{d_i^2 + \lambda}

with g the left singular vectors. Only the smaller of the two Gram matrices is formed, from blocks
of columns; X is not copied.

References
----------
Zou, H. (2006). The adaptive lasso and its oracle properties. *Journal of the American Statistical
Association* 101, 1418-1429. Least squares, and ridge under collinearity.

Huang, J., Ma, S. and Zhang, C.-H. (2008). Adaptive lasso for sparse high-dimensional regression
models. *Statistica Sinica* 18, 1603-1618. Marginal slopes.

Bühlmann, P. and van de Geer, S. (2011). *Statistics for High-Dimensional Data*. Springer. Section
2.8, the lasso as initial estimate.

Golub, G. H., Heath, M. and Wahba, G. (1979). Generalized cross-validation as a method for choosing
a good ridge parameter. *Technometrics* 21, 215-223.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh
from scipy.special import expit

from sparsesel.engine import Keep, Problems, solve_bank, warn_failures
from sparsesel.engine.design import DesignMatrix
from sparsesel.selectors._tuning import effective_rows, extended_bic, lowest
from sparsesel.tasks import TaskSettings

FloatArray = NDArray[np.float64]

# "auto" trusts least squares where every column has at least this many rows.
_ROWS_PER_COLUMN = 5
# Columns per block of the streamed Gram matrices.
_BLOCK = 512
# Ridge penalties that are tried, relative to the largest squared singular value.
_RIDGE_GRID = np.geomspace(1e3, 1e-6, 100)


@dataclass(frozen=True)
class InitialProblem:
    """What an initial estimate is made from, for several weightings of the rows at once.

    Attributes
    ----------
    design : DesignMatrix
        The table (n, p).
    response : ndarray of shape (n,)
        Numbers, or 0 and 1 with log loss.
    weights : ndarray of shape (B, n)
        Weights of the rows, one row per problem.
    loss : str
        "squared_error" or "log_loss".
    penalty_weights : ndarray of shape (p,)
        0 for covariates, infinite for columns left out, positive for candidates.
    standardize : bool
        Whether coefficients count in units of their columns' standard deviations.
    tol, max_iter : float, int
        Accuracy and iterations of the engine.
    settings : TaskSettings
        How the engine's tasks run.
    """

    design: DesignMatrix
    response: FloatArray
    weights: FloatArray
    loss: str
    penalty_weights: FloatArray
    standardize: bool
    tol: float
    max_iter: int
    settings: TaskSettings

    @property
    def candidates(self) -> NDArray[np.int64]:
        """Positions of the columns that can be selected."""
        return np.flatnonzero((self.penalty_weights > 0) & np.isfinite(self.penalty_weights))

    @property
    def covariates(self) -> NDArray[np.int64]:
        """Positions of the covariates."""
        return np.flatnonzero(self.penalty_weights == 0)

    def solve(self, penalty_weights: FloatArray, alphas: int | list[float], keep: Keep):
        """Solve the bank with other penalty weights; failures are warned of."""
        problems = Problems(
            loss=self.loss,
            response=self.response,
            sample_weight=self.weights,
            penalty_weights=penalty_weights,
            standardize=self.standardize,
        )
        result = solve_bank(
            self.design,
            problems,
            alphas,
            keep=keep,
            tol=self.tol,
            max_iter=self.max_iter,
            settings=self.settings,
        )
        warn_failures(result, self.tol)
        return result


def choose_initial(initial: str, loss: str, n_rows: float, n_columns: int) -> str:
    """Resolve initial="auto" from the size of the table.

    Least squares where there are at least five rows per column, ridge up to as many columns as
    rows, the lasso beyond. With the log loss ridge instead of maximum likelihood, which does not
    exist where the columns happen to separate the classes, be it in one fold.

    Parameters
    ----------
    initial : str
        The parameter of the selector.
    loss : {"squared_error", "log_loss"}
        Which loss.
    n_rows : float
        Rows that the smallest fit has, N.
    n_columns : int
        Columns of the model, covariates and intercept included.

    Returns
    -------
    str
        "least_squares", "ridge", "lasso" or "marginal".

    Raises
    ------
    ValueError
        If least squares is asked for with more columns than rows.
    """
    if initial == "least_squares" and n_columns > n_rows:
        raise ValueError(
            f"initial='least_squares' with {n_columns} columns (intercept and covariates included) "
            f"and {n_rows:g} rows in the smallest fit. It needs at least as many rows as columns. "
            "Use initial='ridge', 'lasso' or 'auto'."
        )
    if initial != "auto":
        return initial
    if loss == "squared_error" and n_rows >= _ROWS_PER_COLUMN * n_columns:
        return "least_squares"
    return "ridge" if n_rows >= n_columns else "lasso"


def initial_sizes(initial: str, problem: InitialProblem) -> FloatArray:
    """Sizes of the initial coefficients.

    Parameters
    ----------
    initial : {"least_squares", "ridge", "lasso", "marginal"}
        The estimate.
    problem : InitialProblem
        The table, the outcome and B weightings of the rows.

    Returns
    -------
    ndarray of shape (B, p)
        |b_j| in units of the columns' standard deviations (without standardising, in units of the
        columns); 0 outside the candidates.
    """
    if initial in ("least_squares", "lasso"):
        coef = _by_engine(initial, problem)
    else:
        coef = _by_working_response(initial, problem)
    sizes = np.abs(coef)
    if problem.standardize:
        weights = problem.weights / problem.weights.sum(axis=1, keepdims=True)
        sizes *= problem.design.moments(weights).scale
    outside = np.ones(problem.design.n_columns, dtype=bool)
    outside[problem.candidates] = False
    sizes[:, outside] = 0.0
    return sizes


def _by_engine(initial: str, problem: InitialProblem) -> FloatArray:
    """Coefficients (B, p) of the least-squares or the BIC-chosen lasso fits."""
    v = problem.penalty_weights
    if initial == "least_squares":
        return _unpenalised(problem)
    unweighted = np.where((v > 0) & np.isfinite(v), 1.0, v)
    keep = Keep(coefficients=True, held_out=problem.weights)
    result = problem.solve(unweighted, 100, keep)
    assert result.coef is not None and result.held_out_loss is not None
    coef = np.empty((len(result.coef), len(v)))
    for b, path in enumerate(result.coef):
        n_rows = effective_rows(problem.weights[b])
        n_nonzero = np.diff(path[:, problem.candidates].indptr)
        criterion = extended_bic(
            problem.loss,
            result.held_out_loss[b],
            n_nonzero,
            n_rows,
            len(problem.candidates),
            gamma=0.0,
        )
        coef[b] = path[[lowest(criterion)]].toarray()[0]
    return coef


def _unpenalised(problem: InitialProblem) -> FloatArray:
    """Coefficients (B, p) with no penalty on any column."""
    v = problem.penalty_weights
    try:
        result = problem.solve(np.where(np.isfinite(v), 0.0, v), [1.0], Keep(coefficients=True))
    except ValueError as error:
        raise ValueError(
            f"initial='least_squares' has no answer: {error} Among the initial estimates 'ridge', "
            "'lasso' and 'marginal' always exist: use one of these, or 'auto'."
        ) from error
    assert result.coef is not None
    return np.stack([path.toarray()[0] for path in result.coef])


def _by_working_response(initial: str, problem: InitialProblem) -> FloatArray:
    """Coefficients (B, p) of the ridge or marginal fits to the null model's working response."""
    weights, response = _working_response(problem)
    coef = np.zeros((len(weights), problem.design.n_columns))
    for b, (weight, working) in enumerate(zip(weights, response, strict=True)):
        projected = _Projected.of(problem, problem.weights[b], weight, working)
        estimate = projected.marginal() if initial == "marginal" else projected.ridge()
        coef[b, problem.candidates] = estimate
    return coef


def _working_response(problem: InitialProblem) -> tuple[FloatArray, FloatArray]:
    """Weights w h and working response (y - mu) / h of the null model, both (B, n)."""
    if problem.loss == "squared_error":
        return problem.weights, np.broadcast_to(problem.response, problem.weights.shape)
    null = np.where(problem.penalty_weights > 0, np.inf, 0.0)
    result = problem.solve(null, [1.0], Keep(coefficients=True))
    assert result.coef is not None
    covariates = problem.covariates
    offsets = np.stack([path[:, covariates].toarray()[0] for path in result.coef])
    columns = problem.design.gather(covariates, centred=False)
    eta = result.intercept[:, :1] + offsets @ columns
    mean = expit(eta)
    # A fitted probability of 0 or 1 carries no information; the floor keeps its weight finite.
    information = np.maximum(mean * (1.0 - mean), 1e-12)
    return problem.weights * information, (problem.response - mean) / information


@dataclass(frozen=True)
class _Projected:
    """The candidates and the working response, projected off intercept and covariates.

    Every column enters as root * (x_j - centre) / scale, less its projection on `basis`.
    """

    design: DesignMatrix
    candidates: NDArray[np.int64]
    root: FloatArray  # (n,), square roots of the working weights
    scale: FloatArray  # (number of candidates,), infinite for constant columns
    basis: FloatArray  # (n, rank), orthonormal, spans root * (1, covariates)
    u: FloatArray  # (n,), the projected working response
    n_rows: float  # N

    @staticmethod
    def of(
        problem: InitialProblem, sample_weight: FloatArray, weight: FloatArray, working: FloatArray
    ) -> _Projected:
        design, candidates = problem.design, problem.candidates
        root = np.sqrt(weight)
        covariates = design.gather(problem.covariates, centred=True)
        fixed = np.vstack([np.ones(design.n_rows), covariates]) * root
        left, values, _ = np.linalg.svd(fixed.T, full_matrices=False)
        basis = left[:, values > 1e-10 * values[0]]
        spread = design.moments((sample_weight / sample_weight.sum())[None, :]).scale[0]
        varies = spread > design.rounding * design.largest
        scale = np.where(varies, spread if problem.standardize else 1.0, np.inf)[candidates]
        u = root * working
        n_rows = effective_rows(sample_weight)
        return _Projected(design, candidates, root, scale, basis, u - basis @ (basis.T @ u), n_rows)

    def blocks(self) -> Iterator[tuple[slice, FloatArray]]:
        """Blocks of projected columns as rows, and which candidates they are."""
        for start in range(0, len(self.candidates), _BLOCK):
            part = slice(start, min(start + _BLOCK, len(self.candidates)))
            yield part, self.block(part)

    def block(self, part: slice) -> FloatArray:
        """One block of projected columns, as rows."""
        rows = self.design.gather(self.candidates[part], centred=True) * self.root
        rows -= (rows @ self.basis) @ self.basis.T
        return rows / self.scale[part, None]

    def times_columns(self, vector: FloatArray) -> FloatArray:
        """Z' vector, one entry per candidate."""
        return np.concatenate([block @ vector for _, block in self.blocks()])

    def marginal(self) -> FloatArray:
        """Slope of every candidate on its own."""
        lengths = np.concatenate([np.einsum("ij,ij->i", z, z) for _, z in self.blocks()])
        # A column that the covariates explain has no slope of its own left.
        own = lengths > 1e-10 * (self.root @ self.root) * np.isfinite(self.scale)
        slope = np.divide(
            self.times_columns(self.u), lengths, out=np.zeros_like(lengths), where=own
        )
        return slope / self.scale

    def ridge(self) -> FloatArray:
        """Ridge coefficients at the penalty that generalised cross-validation chooses."""
        wide = len(self.candidates) > len(self.root)
        gram = self._row_gram() if wide else self._column_gram()
        squares, vectors = eigh(gram)
        kept = squares > 1e-12 * squares[-1]
        squares, vectors = squares[kept], vectors[:, kept]
        if not squares.size:
            return np.zeros(len(self.candidates))
        # Coordinates g_i'u of u along the left singular vectors, from either Gram matrix.
        along = vectors.T @ (self.u if wide else self.times_columns(self.u))
        if not wide:
            along = along / np.sqrt(squares)
        penalty = self._generalised_cross_validation(squares, along)
        shrunk = along / (squares + penalty)
        if wide:
            return self.times_columns(vectors @ shrunk) / self.scale
        return vectors @ (shrunk * np.sqrt(squares)) / self.scale

    def _generalised_cross_validation(self, squares: FloatArray, along: FloatArray) -> float:
        """The ridge penalty, see the module's formula for V."""
        penalties = squares.max() * _RIDGE_GRID[:, None]
        left_over = max(float(self.u @ self.u - along @ along), 0.0)
        residual = ((penalties / (squares + penalties) * along) ** 2).sum(axis=1) + left_over
        trace = self.basis.shape[1] + (squares / (squares + penalties)).sum(axis=1)
        room = 1.0 - trace / self.n_rows
        score = np.where(room > 0, residual / np.maximum(room, 1e-300) ** 2, np.inf)
        return float(penalties[lowest(score), 0])

    def _row_gram(self) -> FloatArray:
        gram = np.zeros((len(self.root), len(self.root)))
        for _, block in self.blocks():
            gram += block.T @ block
        return gram

    def _column_gram(self) -> FloatArray:
        gram = np.zeros((len(self.candidates), len(self.candidates)))
        for rows, left in self.blocks():
            for columns, right in self.blocks():
                if columns.start >= rows.start:
                    gram[rows, columns] = left @ right.T
                    gram[columns, rows] = gram[rows, columns].T
        return gram
