"""A bank of penalised regressions over one table.

One problem has sample weights w, a response y, an offset o, penalty weights v, a grid of
penalties alpha and an l1_ratio rho, and scales s (1, or the weighted standard deviations
when standardising):

    minimise over (b0, b):
        sum_i w_i l(y_i, o_i + b0 + x_i'b) / sum_i w_i
        + alpha sum_j [ rho v_j s_j |b_j| + (1 - rho)/2 v_j s_j^2 b_j^2 ]

(scikit-learn's scaling; squared error carries 1/2).  v_j = 0: unpenalised.  v_j = inf: left
out.  A penalised column whose s_j is below rounding is left out of that problem and
counted.  The bank is cut into chunks of constant width, whatever the number of workers, so
answers are the same bits for any ``n_jobs``.
"""

from __future__ import annotations

import functools
import warnings
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse
from sklearn.exceptions import ConvergenceWarning

from sparsesel.engine.chunk import open_chunk
from sparsesel.engine.design import DesignMatrix, FloatArray
from sparsesel.engine.inputs import check_bank, check_limits
from sparsesel.engine.losses import LOSSES
from sparsesel.engine.problems import Keep, Problems
from sparsesel.engine.status import Status
from sparsesel.engine.walk import Walk
from sparsesel.tasks import TaskSettings, run_tasks

#: Changes whenever the same problem may get other bits, so that stored results expire.
ENGINE_FORMAT = 1

# Problems solved in step. Wider chunks make the shared product faster, narrower ones
# spread better over workers. Elastic nets keep many more columns per problem.
_CHUNK, _CHUNK_ELASTIC = 50, 10


@dataclass(frozen=True)
class BankResult:
    """Answers of a bank: B problems, L penalties, p columns.

    ``gap`` is relative to the null objective; points that a path did not reach have status
    ``Status.NOT_REACHED`` and gap NaN.  ``coef``, ``entry_order`` and ``held_out_loss`` are
    None unless kept; ``entry_order`` (B, q) is padded with -1.
    """

    alphas: FloatArray
    alpha_max: FloatArray
    null_objective: FloatArray
    n_left_out: NDArray[np.int64]
    gap: FloatArray
    status: NDArray[np.int8]
    n_iter: NDArray[np.int64]
    intercept: FloatArray
    coef: tuple[sparse.csr_array, ...] | None = None
    entry_order: NDArray[np.int64] | None = None
    held_out_loss: FloatArray | None = None

    @property
    def failed(self) -> NDArray[np.bool_]:
        """Grid points without a proof (B, L)."""
        return np.isin(self.status, (Status.MAX_ITER, Status.STALLED))


@dataclass(frozen=True)
class _Options:
    alpha_min_ratio: float
    tol: float
    max_iter: int


@dataclass(frozen=True)
class _Item:
    problems: Problems
    alphas: int | FloatArray
    keep: Keep = field(default_factory=Keep)


def solve_bank(
    design: DesignMatrix,
    problems: Problems,
    alphas: int | ArrayLike,
    *,
    keep: Keep | None = None,
    alpha_min_ratio: float = 1e-3,
    tol: float = 1e-7,
    max_iter: int = 10_000,
    settings: TaskSettings = TaskSettings(),
) -> BankResult:
    """Solve every problem of a bank at every penalty of its grid.

    Parameters
    ----------
    design : DesignMatrix
        From ``as_design``.
    problems : Problems
    alphas : int, array (L,) or array (B, L)
        An integer gives every problem a geometric grid of that many points of its own, from
        the smallest penalty at which it is empty down to ``alpha_min_ratio`` times that.
        Values are positive and strictly decreasing.
    keep : Keep
        What to keep; coefficients by default.
    tol : float
        Largest duality gap relative to the null objective.
    max_iter : int
        Coordinate sweeps a problem may spend on one penalty.
    settings : TaskSettings
        Workers, resume and progress.

    Returns
    -------
    BankResult
        Failures are marked, not raised; see ``warn_failures``.

    Raises
    ------
    ValueError
        If the bank has no answer, as ``inputs.check_bank`` says, the response does not suit
        the loss, or the unpenalised columns separate the classes.

    References
    ----------
    The module's head states the objective; ``certificate`` the gap.
    """
    keep = Keep(coefficients=True) if keep is None else keep
    check_limits(tol, max_iter, alpha_min_ratio)
    check_bank(design, problems, alphas, keep)
    options = _Options(alpha_min_ratio, tol, max_iter)
    width = _CHUNK if problems.l1_ratio == 1.0 else _CHUNK_ELASTIC
    items = [
        _Item(problems.part(chosen), _part(alphas, chosen), keep.part(chosen))
        for chosen in (slice(start, start + width) for start in range(0, problems.count, width))
    ]
    if problems.sample_weight is not None:
        counting = (np.atleast_2d(problems.sample_weight) > 0.0).any(axis=0)
        design = design.counting(np.asarray(counting))
    solve = functools.partial(_solve_chunk, design, options)
    return _joined(run_tasks(solve, items, settings))


def _part(alphas: int | ArrayLike, chosen: slice) -> int | FloatArray:
    if isinstance(alphas, int | np.integer):
        return int(alphas)
    values = np.asarray(alphas, dtype=np.float64)
    return values[chosen] if values.ndim == 2 else values


def geometric_grid(largest: FloatArray, floor: FloatArray, count: int, ratio: float) -> FloatArray:
    """Grids (B, count) from ``largest`` down to ``ratio * largest``, geometric.

    Where nothing correlates with the response (``largest`` 0) any penalty gives the null
    model; the grid then starts at ``floor``, above rounding, or at the resolution of a
    double if that is zero too (as scikit-learn's does).
    """
    start = np.where(largest > 0.0, largest, floor)
    start = np.where(start > 0.0, start, np.finfo(np.float64).resolution)
    return start[:, None] * np.geomspace(1.0, ratio, count)[None, :]


def _solve_chunk(design: DesignMatrix, options: _Options, item: _Item) -> BankResult:
    loss = LOSSES[item.problems.loss]
    chunk = open_chunk(design, item.problems, loss, options.max_iter)
    largest = chunk.alpha_max
    if isinstance(item.alphas, int):
        alphas = geometric_grid(largest, chunk.alpha_floor, item.alphas, options.alpha_min_ratio)
    else:
        alphas = np.broadcast_to(item.alphas, (largest.size, item.alphas.shape[-1]))
    walk = Walk(chunk, loss, np.ascontiguousarray(alphas), item.keep, options.tol)
    walk.run()
    return BankResult(
        alphas=walk.alphas,
        alpha_max=largest,
        null_objective=chunk.null_objective,
        n_left_out=chunk.n_left_out,
        gap=walk.gap,
        status=walk.status,
        n_iter=walk.n_iter,
        intercept=walk.answers.intercept,
        coef=walk.answers.matrices() if item.keep.coefficients else None,
        entry_order=walk.entries if item.keep.entries else None,
        held_out_loss=walk.held_out,
    )


def _joined(parts: list[BankResult]) -> BankResult:
    """One result from those of the chunks, in order."""

    def stack(name: str) -> Any:
        arrays = [getattr(part, name) for part in parts]
        return None if arrays[0] is None else np.concatenate(arrays)

    names = [name for name in BankResult.__dataclass_fields__ if name != "coef"]
    coef = None
    if parts[0].coef is not None:
        coef = tuple(matrix for part in parts for matrix in part.coef or ())
    return BankResult(coef=coef, **{name: stack(name) for name in names})


def warn_failures(result: BankResult, tol: float) -> None:
    """Raise the one ConvergenceWarning for all failures of a bank, if there are any."""
    failed = result.failed
    if not failed.any():
        return
    kinds = [Status(code) for code in np.unique(result.status[failed])]
    advice = "; ".join(f"{kind.name}: {kind.advice}" for kind in kinds)
    worst = np.max(result.gap[failed]) if np.isfinite(result.gap[failed]).all() else np.nan
    warnings.warn(
        f"{np.count_nonzero(failed)} of {failed.size} solves ended without reaching a relative "
        f"duality gap of {tol:g} (largest gap {worst:.3g}). Their answers are not certified. "
        f"{advice}.",
        ConvergenceWarning,
        stacklevel=3,
    )
