"""One chunk of problems, solved in step along their grids of penalties.

Every problem keeps a working set of columns, starts each penalty from the answer to the
one before, and is done when the duality gap over *all* columns is small enough.  What the
problems of a chunk share is the product of the table with their residuals, one matrix
product for all that need one, and the pool of gathered columns.

A round at penalty a_k:

1. columns that pass the sequential strong rule |g_j| >= rho v_j s_j (2 a_k - a_{k-1}) at
   the last gradient join the working set, the largest first and at most a share of the
   support (Tibshirani et al. 2012, section 7; a heuristic, so exact checks follow);
2. the working sets are solved;
3. kept gradients bound those of all other columns (``screening``); where too many stay
   undecided the residual is multiplied with the whole table, for all such problems in one
   product, and kept; the undecided few are multiplied exactly;
4. problems whose gap passes are done; in the others the columns that violate their bound
   join the working set, and the round repeats.

The strong rule only proposes.  The certificate decides.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from sparsesel.engine import kernels, screening
from sparsesel.engine.basis import Basis, unpenalised_basis
from sparsesel.engine.design import DesignMatrix, FloatArray
from sparsesel.engine.status import Status

if TYPE_CHECKING:
    from sparsesel.engine.bank import Keep, Problems
    from sparsesel.engine.losses import LogLoss, SquaredError

IntArray = NDArray[np.int64]

# Columns proposed to a working set at once: this part of its support, at least so many.
_PROPOSED_SHARE = 4
_FEWEST_PROPOSED = 10
# A working set is swept of unused columns when they outnumber the used ones by this factor
# and constant; sweeping moves Gram matrices, so not at every penalty.
_SLACK_FACTOR, _SLACK = 2, 40
# Residuals with known gradients that are kept per problem.
_KEPT = 3
# More undecided columns than this constant and this share of the table make the product
# with the whole table the cheaper way.
_UNDECIDED, _UNDECIDED_SHARE = 64, 16
# Rounds without a new column in which rounding may be repaired before the problem is
# declared stalled.
_REPAIRS = 4
# Share of the tolerance spent inside the working set; the rest is for the other columns.
_INSIDE = 0.3


class Pool:
    """Gathered columns, shared by all problems of a chunk."""

    def __init__(self, design: DesignMatrix, centred: bool) -> None:
        self._design = design
        self._centred = centred
        self.slot_of = np.full(design.n_columns, -1, dtype=np.int64)
        self.rows = np.empty((0, design.n_rows))
        self._used = 0

    def ensure(self, columns: IntArray) -> None:
        """Gather those of ``columns`` that are not in the pool."""
        new = np.unique(columns[self.slot_of[columns] < 0])
        stop = self._used + new.size
        if stop > self.rows.shape[0]:
            room = np.empty((max(64, stop + stop // 2), self.rows.shape[1]))
            room[: self._used] = self.rows[: self._used]
            self.rows = room
        if new.size:
            self.rows[self._used : stop] = self._design.gather(new, self._centred)
            self.slot_of[new] = np.arange(self._used, stop)
            self._used = stop


@dataclass
class WorkingSets:
    """The working sets of a chunk, padded to a common capacity (second axis)."""

    size: IntArray
    filled: IntArray
    columns: IntArray
    slots: IntArray
    coef: FloatArray
    order_one: FloatArray
    order_two: FloatArray
    gram: FloatArray
    border: FloatArray
    gradient: FloatArray

    @classmethod
    def empty(cls, n_problems: int, n_basis: int, keeps_gram: bool) -> WorkingSets:
        """No columns anywhere."""
        grams = n_problems if keeps_gram else 1
        return cls(
            size=np.zeros(n_problems, np.int64),
            filled=np.zeros(n_problems, np.int64),
            columns=np.empty((n_problems, 0), np.int64),
            slots=np.empty((n_problems, 0), np.int64),
            coef=np.empty((n_problems, 0)),
            order_one=np.empty((n_problems, 0)),
            order_two=np.empty((n_problems, 0)),
            gram=np.empty((grams, 0, 0)),
            border=np.empty((n_problems if keeps_gram else 1, 0, n_basis)),
            gradient=np.empty((n_problems, 0)),
        )

    def reserve(self, capacity: int) -> None:
        """Make room for ``capacity`` columns per problem."""
        present = self.coef.shape[1]
        if capacity <= present:
            return
        room = max(32, capacity + capacity // 3)
        for name in ("columns", "slots", "coef", "order_one", "order_two", "border", "gradient"):
            old = getattr(self, name)
            new = np.zeros((old.shape[0], room, *old.shape[2:]), old.dtype)
            new[:, :present] = old
            setattr(self, name, new)
        gram = np.empty((self.gram.shape[0], room, room))
        gram[:, :present, :present] = self.gram
        self.gram = gram


@dataclass
class Kept:
    """The latest residuals (B, K, n) whose gradients (B, K, p) are known, K in a ring."""

    residual: FloatArray
    gradient: NDArray[np.float32]
    count: IntArray

    @classmethod
    def empty(cls, n_problems: int, n_rows: int, n_columns: int) -> Kept:
        """Nothing known yet."""
        return cls(
            np.zeros((n_problems, _KEPT, n_rows)),
            np.zeros((n_problems, _KEPT, n_columns), np.float32),
            np.zeros(n_problems, np.int64),
        )

    def push(self, problems: IntArray, residual: FloatArray, gradient: FloatArray) -> None:
        """Keep these, the oldest of their problem making room."""
        place = self.count[problems] % _KEPT
        self.residual[problems, place] = residual
        self.gradient[problems, place] = gradient
        self.count[problems] += 1

    def known(self, b: int) -> int:
        """How many residuals of problem b are kept."""
        return min(int(self.count[b]), _KEPT)


@dataclass
class Chunk:
    """Everything the solver knows about a chunk; arrays have one row per problem."""

    design: DesignMatrix
    l1_ratio: float
    max_iter: int
    weights: FloatArray
    response: FloatArray
    offset: FloatArray
    order_one: FloatArray
    order_two: FloatArray
    deviation: FloatArray
    n_left_out: IntArray
    basis: Basis
    pool: Pool
    work: WorkingSets
    taken: NDArray[np.bool_]
    norms: FloatArray
    kept: Kept
    alpha_max: FloatArray
    sweeps: IntArray
    # Set by the loss at the null model.
    null_objective: FloatArray = field(default_factory=lambda: np.empty(0))
    residual: FloatArray = field(default_factory=lambda: np.empty((0, 0)))
    centred: FloatArray = field(default_factory=lambda: np.empty((0, 0)))
    signs: FloatArray = field(default_factory=lambda: np.empty((0, 0)))
    predictor: FloatArray = field(default_factory=lambda: np.empty((0, 0)))
    load: FloatArray = field(default_factory=lambda: np.empty((0, 0)))


def open_chunk(
    design: DesignMatrix, problems: Problems, loss: SquaredError | LogLoss, max_iter: int
) -> Chunk:
    """State the chunk's problems in full and start them at their null models."""
    n_problems, n, p = problems.count, design.n_rows, design.n_columns
    weights = _rows(1.0 if problems.sample_weight is None else problems.sample_weight, n_problems, n)
    weights = np.ascontiguousarray(weights / weights.sum(axis=1, keepdims=True))
    penalty = _rows(
        1.0 if problems.penalty_weights is None else problems.penalty_weights, n_problems, p
    )
    moments = design.moments(weights)
    deviation = moments.scale
    norms = deviation if problems.fit_intercept else np.hypot(moments.mean, deviation)
    order_one, n_left_out = _first_order(design, penalty, deviation, problems.standardize)
    order_two = order_one
    if problems.l1_ratio < 1.0:
        order_two = order_one * deviation if problems.standardize else order_one
    basis = unpenalised_basis(design, weights, order_one == 0.0, problems.fit_intercept)
    chunk = Chunk(
        design=design,
        l1_ratio=problems.l1_ratio,
        max_iter=max_iter,
        weights=weights,
        response=np.ascontiguousarray(_rows(problems.response, n_problems, n)),
        offset=np.zeros(n) if problems.offset is None else np.asarray(problems.offset, float),
        order_one=np.where(order_one == 0.0, np.inf, order_one),
        order_two=order_two,
        deviation=deviation,
        n_left_out=n_left_out,
        basis=basis,
        pool=Pool(design, problems.fit_intercept),
        work=WorkingSets.empty(n_problems, basis.rows.shape[1], loss.keeps_gram),
        taken=np.zeros((n_problems, p), np.bool_),
        norms=norms,
        kept=Kept.empty(n_problems, n, p),
        alpha_max=np.zeros(n_problems),
        sweeps=np.zeros(n_problems, np.int64),
    )
    loss.start(chunk)
    gradient = design.correlate(chunk.weights * chunk.residual)
    chunk.alpha_max = _alpha_max(gradient, chunk.order_one, chunk.l1_ratio)
    chunk.kept.push(np.arange(n_problems), chunk.residual, gradient)
    return chunk


def _rows(values: object, n_problems: int, length: int) -> FloatArray:
    return np.broadcast_to(np.asarray(values, dtype=np.float64), (n_problems, length))


def _first_order(
    design: DesignMatrix, penalty: FloatArray, deviation: FloatArray, standardize: bool
) -> tuple[FloatArray, IntArray]:
    """v_j s_j, infinite for columns left out, and how many penalised ones were constant."""
    if not standardize:
        return np.array(penalty), np.zeros(penalty.shape[0], np.int64)
    constant = (deviation <= design.rounding * design.largest) & (penalty > 0.0)
    out = np.isinf(penalty)
    with np.errstate(invalid="ignore"):
        order_one = np.where(constant | out, np.inf, penalty * deviation)
    return order_one, np.count_nonzero(constant & ~out, axis=1)


def _alpha_max(gradient: FloatArray, order_one: FloatArray, l1_ratio: float) -> FloatArray:
    """The smallest penalty at which every penalised coefficient is zero (B,)."""
    with np.errstate(invalid="ignore"):
        ratios = np.abs(gradient) / order_one
    ratios[np.isinf(order_one)] = 0.0
    return ratios.max(axis=1, initial=0.0) / l1_ratio


class Walk:
    """The walk of a chunk along its grids: what is kept, and who is finished."""

    def __init__(
        self, chunk: Chunk, loss: SquaredError | LogLoss, alphas: FloatArray, keep: Keep, tol: float
    ) -> None:
        self.chunk, self.loss, self.alphas, self.keep, self.tol = chunk, loss, alphas, keep, tol
        shape = alphas.shape
        self.gap = np.full(shape, np.nan)
        self.status = np.full(shape, Status.NOT_REACHED, np.int8)
        self.n_iter = np.zeros(shape, np.int64)
        self.intercept = np.full(shape, np.nan)
        self.answers: list[list[tuple[IntArray, FloatArray]]] = [[] for _ in range(shape[0])]
        self.held_out = None if keep.held_out is None else np.full(shape, np.nan)
        self.entries = np.full((shape[0], keep.entries), -1, np.int64)
        self._entered = [set[int]() for _ in range(shape[0])]
        # With a null objective of zero every penalised coefficient is zero, provably.
        self._trivial = chunk.null_objective == 0.0
        self._finished = np.zeros(shape[0], np.bool_)
        self._last = np.maximum(chunk.alpha_max, alphas[:, 0])
        self._found = np.empty(_UNDECIDED + chunk.design.n_columns // _UNDECIDED_SHARE, np.int64)

    def run(self) -> None:
        """Visit every grid point until all problems are finished."""
        for k in range(self.alphas.shape[1]):
            open_ = np.flatnonzero(~self._finished)
            if not open_.size:
                return
            self._visit(k, open_)
            self._record(k, open_)
            self._last = self.alphas[:, k]

    def _visit(self, k: int, problems: IntArray) -> None:
        chunk, alpha = self.chunk, np.ascontiguousarray(self.alphas[:, k])
        chunk.sweeps[:] = 0
        self.gap[problems, k] = 0.0
        self.status[problems, k] = Status.CONVERGED
        pending = problems[~self._trivial[problems]]
        self._drop_unused(pending)
        self._propose(pending, np.maximum(2.0 * alpha - self._last, 0.0))
        inside = np.full(alpha.size, _INSIDE)
        repairs = np.zeros(alpha.size, np.int64)
        while pending.size:
            self.loss.solve(chunk, pending, alpha, inside * self.tol * chunk.null_objective)
            violators = self._certify(k, pending, alpha)
            open_ = pending[~(self.gap[pending, k] <= self.tol)]
            grown = self._admit(open_, [violators[b] for b in open_])
            repairs[open_] += ~grown
            inside[open_[~grown]] *= 0.1
            spent = chunk.sweeps[open_] >= chunk.max_iter
            self.status[open_[spent], k] = Status.MAX_ITER
            stalled = ~spent & (repairs[open_] > _REPAIRS)
            self.status[open_[stalled], k] = Status.STALLED
            pending = open_[~spent & ~stalled]
        self.n_iter[problems, k] = chunk.sweeps[problems]

    def _certify(self, k: int, problems: IntArray, alpha: FloatArray) -> dict[int, IntArray]:
        """Write the gaps of the named problems; return the columns that violate their bounds."""
        chunk = self.chunk
        outside = {b: self._undecided(b, alpha[b]) for b in problems}
        crowded = np.array([b for b in problems if outside[b] is None], dtype=np.int64)
        if crowded.size:
            residual = chunk.residual[crowded]
            gradient = chunk.design.correlate(chunk.weights[crowded] * residual)
            chunk.kept.push(crowded, residual, gradient)
        violators = {}
        for b in problems:
            columns = outside[b]
            if columns is None:
                columns = self._undecided(b, alpha[b])
            if columns is None:
                columns = np.flatnonzero(~chunk.taken[b] & np.isfinite(chunk.order_one[b]))
            gradient = chunk.design.correlate_columns(
                chunk.weights[b] * chunk.residual[b], columns
            )
            one, two = chunk.order_one[b, columns], chunk.order_two[b, columns]
            gap = self.loss.certify(chunk, b, alpha[b], (gradient, one, two))
            self.gap[b, k] = gap
            if not gap <= self.tol:
                violators[int(b)] = screening.violating(
                    columns, gradient, chunk.order_one[b], alpha[b] * chunk.l1_ratio,
                    self._most_proposed(b),
                )  # fmt: skip
        return violators

    def _undecided(self, b: int, alpha: float) -> IntArray | None:
        """Columns that kept gradients can't bound at this residual; None if too many."""
        chunk, kept = self.chunk, self.chunk.kept
        known = kept.known(b)
        mixing, rest = screening.mix(
            chunk.weights[b], chunk.residual[b], kept.residual[b], known
        )
        total = screening.undecided(
            kept.gradient[b], known, mixing, rest, chunk.norms[b], chunk.order_one[b],
            chunk.taken[b], alpha * chunk.l1_ratio, self._found,
        )  # fmt: skip
        return None if total < 0 else self._found[:total].copy()

    def _drop_unused(self, problems: IntArray) -> None:
        work, taken = self.chunk.work, self.chunk.taken
        used = (work.coef != 0.0) & (np.arange(work.coef.shape[1]) < work.size[:, None])
        crowded = work.size > _SLACK_FACTOR * used.sum(axis=1) + _SLACK
        crowded = problems[crowded[problems]]
        if not crowded.size:
            return
        for b in crowded:
            columns = work.columns[b, : work.size[b]]
            taken[b, columns[~used[b, : work.size[b]]]] = False
        kernels.compact(
            crowded, used, work.size, work.filled, work.columns, work.slots, work.coef,
            work.order_one, work.order_two, work.gram, work.border, self.loss.keeps_gram,
        )  # fmt: skip

    def _most_proposed(self, b: int) -> int:
        work = self.chunk.work
        used = int(np.count_nonzero(work.coef[b, : work.size[b]]))
        return max(_FEWEST_PROPOSED, used // _PROPOSED_SHARE)

    def _propose(self, problems: IntArray, threshold: FloatArray) -> None:
        """Admit columns whose predicted |g| exceeds threshold * rho * v * s."""
        chunk, kept = self.chunk, self.chunk.kept
        found = []
        for b in problems:
            known = kept.known(b)
            mixing, _ = screening.mix(
                chunk.weights[b], chunk.residual[b], kept.residual[b], known
            )
            found.append(
                screening.promising(
                    kept.gradient[b], known, mixing, chunk.order_one[b], chunk.taken[b],
                    threshold[b] * chunk.l1_ratio, self._most_proposed(b),
                )  # fmt: skip
            )
        self._admit(problems, found)

    def _admit(self, problems: IntArray, found: list[IntArray]) -> NDArray[np.bool_]:
        """Put the found columns into the working sets; says which sets grew."""
        chunk, work = self.chunk, self.chunk.work
        grown = np.array([part.size > 0 for part in found], dtype=np.bool_)
        if not grown.any():
            return grown
        chunk.pool.ensure(np.concatenate(found))
        work.reserve(max(work.size[b] + f.size for b, f in zip(problems, found, strict=True)))
        for b, columns in zip(problems, found, strict=True):
            place = slice(work.size[b], work.size[b] + columns.size)
            work.columns[b, place] = columns
            work.slots[b, place] = chunk.pool.slot_of[columns]
            work.coef[b, place] = 0.0
            work.order_one[b, place] = chunk.order_one[b, columns]
            work.order_two[b, place] = chunk.order_two[b, columns]
            work.size[b] += columns.size
            chunk.taken[b, columns] = True
        self.loss.extend(chunk, problems[grown])
        return grown

    def _record(self, k: int, problems: IntArray) -> None:
        if self.held_out is not None:
            weights = self.keep.held_out[problems]
            losses = self.loss.row_losses(self.chunk, problems)
            self.held_out[problems, k] = np.einsum("bn,bn->b", weights, losses) / weights.sum(
                axis=1
            )
        for b in problems:
            if self.keep.coefficients:
                self._keep_coefficients(k, b)
            if self.keep.entries:
                self._keep_entries(b)

    def _keep_coefficients(self, k: int, b: int) -> None:
        chunk, work = self.chunk, self.chunk.work
        m = work.size[b]
        columns, values = work.columns[b, :m], work.coef[b, :m]
        used = values != 0.0
        intercept, unpenalised = chunk.basis.coefficients(b, self.loss.basis_load(chunk, b))
        columns = np.concatenate([columns[used], chunk.basis.columns[b]])
        values = np.concatenate([values[used], unpenalised])
        if chunk.basis.fit_intercept:
            intercept -= float(values @ chunk.design.centres[columns])
        order = np.argsort(columns)
        self.intercept[b, k] = intercept
        self.answers[b].append((columns[order], values[order]))

    def _keep_entries(self, b: int) -> None:
        """Append who is newly in: larger standardised |coefficient| first, then position."""
        work, entered = self.chunk.work, self._entered[b]
        m = work.size[b]
        columns, values = work.columns[b, :m], np.abs(work.coef[b, :m])
        order = np.lexsort((columns, -values * self.chunk.deviation[b, columns]))
        for position in order[values[order] > 0.0]:
            unit = int(columns[position])
            if self.keep.entry_units is not None:
                unit = int(self.keep.entry_units[unit])
            if unit not in entered and len(entered) < self.keep.entries:
                self.entries[b, len(entered)] = unit
                entered.add(unit)
        self._finished[b] = len(entered) >= self.keep.entries
