"""The walk of a chunk along its grids of penalties.

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

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from sparsesel.engine import kernels, screening
from sparsesel.engine.chunk import Chunk, Loss, Outside, keep_gradients
from sparsesel.engine.design import FloatArray, IntArray
from sparsesel.engine.problems import Keep
from sparsesel.engine.status import Status

# Columns proposed to a working set at once: this part of its support, at least so many.
_PROPOSED_SHARE = 4
_FEWEST_PROPOSED = 10
# A working set is swept of unused columns when they outnumber the used ones by this factor
# and constant; sweeping moves Gram matrices, so not at every penalty.
_SLACK_FACTOR, _SLACK = 2, 40
# More undecided columns than this constant and this share of the table make the product
# with the whole table the cheaper way.
_UNDECIDED, _UNDECIDED_SHARE = 64, 16
# Rounds without a new column in which rounding may be repaired before the problem is
# declared stalled.
_REPAIRS = 4
# Share of the tolerance spent inside the working set; the rest is for the other columns.
_INSIDE = 0.3


class Walk:
    """One chunk on its way: what is kept, and who is finished."""

    def __init__(
        self, chunk: Chunk, loss: Loss, alphas: FloatArray, keep: Keep, tol: float
    ) -> None:
        self.chunk, self.loss, self.alphas, self.keep, self.tol = chunk, loss, alphas, keep, tol
        shape, p = alphas.shape, chunk.design.n_columns
        self.gap = np.full(shape, np.nan)
        self.status = np.full(shape, Status.NOT_REACHED, np.int8)
        self.n_iter = np.zeros(shape, np.int64)
        self.held_out = None if keep.held_out is None else np.full(shape, np.nan)
        self.answers = _Answers(chunk, shape)
        self.entries = np.full((shape[0], keep.entries), -1, np.int64)
        self._entered = np.zeros(shape[0], np.int64)
        units = np.arange(p) if keep.entry_units is None else keep.entry_units
        self._unit_of = np.asarray(units, dtype=np.int64)
        n_units = int(self._unit_of.max(initial=-1)) + 1 if keep.entries else 0
        self._seen = np.zeros((shape[0], n_units), np.bool_)
        # With a null objective of zero every penalised coefficient is zero, provably.
        self._trivial = chunk.null_objective == 0.0
        self._finished = np.zeros(shape[0], np.bool_)
        self._last = np.maximum(chunk.alpha_max, alphas[:, 0])
        self._outside = Outside.empty(shape[0], min(p, _UNDECIDED + p // _UNDECIDED_SHARE))

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
            self._know_outside(pending, alpha * chunk.l1_ratio)
            gap = self.loss.certify(chunk, pending, alpha, self._outside)
            # Weak duality allows a gap below zero by rounding only.
            self.gap[pending, k] = np.where(np.abs(gap) <= self.tol, np.maximum(gap, 0.0), gap)[
                pending
            ]
            open_ = pending[~(np.abs(gap[pending]) <= self.tol)]
            grown = self._admit_violators(open_, alpha * chunk.l1_ratio)
            repairs[open_] += ~grown
            inside[open_[~grown]] *= 0.1
            spent = chunk.sweeps[open_] >= chunk.max_iter
            self.status[open_[spent], k] = Status.MAX_ITER
            stalled = ~spent & (repairs[open_] > _REPAIRS)
            self.status[open_[stalled], k] = Status.STALLED
            pending = open_[~spent & ~stalled]
        self.n_iter[problems, k] = chunk.sweeps[problems]

    def _drop_unused(self, problems: IntArray) -> None:
        work, taken = self.chunk.work, self.chunk.taken
        used = work.used()
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

    def _most_proposed(self) -> IntArray:
        used = np.count_nonzero(self.chunk.work.used(), axis=1)
        return np.maximum(_FEWEST_PROPOSED, used // _PROPOSED_SHARE)

    def _propose(self, problems: IntArray, threshold: FloatArray) -> None:
        """Admit columns whose predicted |g| exceeds threshold * rho * v * s."""
        chunk, outside = self.chunk, self._outside
        screening.promising(
            problems, chunk.weights, chunk.residual, chunk.kept.residual, chunk.kept.cosine,
            chunk.kept.pushed, chunk.norms, chunk.order_one, chunk.taken,
            threshold * chunk.l1_ratio,
            self._most_proposed(), outside.found, outside.totals,
        )  # fmt: skip
        self._admit(problems)

    def _know_outside(self, problems: IntArray, limit: FloatArray) -> None:
        """Find the columns that may exceed their limits, and their exact gradients."""
        chunk = self.chunk
        self._find_undecided(problems, limit)
        crowded = problems[self._outside.totals[problems] < 0]
        if crowded.size:
            keep_gradients(chunk, crowded)
            self._find_undecided(crowded, limit)
        if (self._outside.totals[crowded] < 0).any():
            # A fresh product leaves only columns at their limits undecided; here those are
            # more than there is room for (copies of one column, say).
            self._outside = Outside.empty(limit.size, chunk.design.n_columns)
            self._find_undecided(problems, limit)
        outside = self._outside
        chunk.design.correlate_found(
            problems, chunk.weights, chunk.residual, outside.found, outside.totals, outside.values
        )

    def _find_undecided(self, problems: IntArray, limit: FloatArray) -> None:
        chunk, outside = self.chunk, self._outside
        screening.undecided(
            problems, chunk.weights, chunk.residual, chunk.kept.residual, chunk.kept.cosine,
            chunk.kept.pushed, chunk.norms, chunk.order_one, chunk.taken, limit, outside.found,
            outside.totals,
        )  # fmt: skip

    def _admit_violators(self, problems: IntArray, limit: FloatArray) -> NDArray[np.bool_]:
        outside = self._outside
        screening.violating(
            problems, self.chunk.order_one, limit, self._most_proposed(), outside.found,
            outside.totals, outside.values,
        )  # fmt: skip
        return self._admit(problems)

    def _admit(self, problems: IntArray) -> NDArray[np.bool_]:
        """Put the found columns into the working sets; says which sets grew."""
        chunk, work, outside = self.chunk, self.chunk.work, self._outside
        totals = outside.totals[problems]
        grown = problems[totals > 0]
        if grown.size:
            named = [outside.found[b, : outside.totals[b]] for b in grown]
            chunk.pool.ensure(np.concatenate(named))
            work.reserve(int((work.size[problems] + totals).max()))
            kernels.admit(
                grown, outside.found, outside.totals, chunk.pool.slot_of, chunk.order_one,
                chunk.order_two, chunk.taken, work.size, work.columns, work.slots, work.coef,
                work.order_one, work.order_two,
            )  # fmt: skip
            self.loss.extend(chunk, grown)
        return totals > 0

    def _record(self, k: int, problems: IntArray) -> None:
        if self.held_out is not None:
            assert self.keep.held_out is not None
            weights = self.keep.held_out[problems]
            losses = self.loss.row_losses(self.chunk, problems)
            total = np.einsum("bn,bn->b", weights, losses)
            self.held_out[problems, k] = total / weights.sum(axis=1)
        if self.keep.coefficients:
            self.answers.add(k, problems, self.loss.basis_loads(self.chunk))
        if self.keep.entries:
            work = self.chunk.work
            kernels.enter(
                problems, work.size, work.columns, work.coef, self.chunk.deviation, self._unit_of,
                self._seen, self.entries, self._entered,
            )  # fmt: skip
            self._finished = self._entered >= self.keep.entries


class _Answers:
    """Coefficients and intercepts as they come, point by point."""

    def __init__(self, chunk: Chunk, shape: tuple[int, int]) -> None:
        self._chunk = chunk
        self._parts: list[tuple[IntArray, IntArray, FloatArray]] = []
        self.intercept = np.full(shape, np.nan)

    def add(self, k: int, problems: IntArray, loads: FloatArray) -> None:
        """Keep grid point k of the named problems; ``loads`` (B, k) are on their bases."""
        chunk = self._chunk
        mask = chunk.work.used()[problems]
        rows, places = np.nonzero(mask)
        owners = problems[rows]
        columns = chunk.work.columns[owners, places]
        values = chunk.work.coef[owners, places]
        self._parts.append((owners * self.intercept.shape[1] + k, columns, values))
        centre = np.zeros(loads.shape[0])
        if chunk.basis.fit_intercept:
            products = values * chunk.design.centres[columns]
            np.add.at(centre, owners, products)
        for b in map(int, problems):
            self.intercept[b, k] = self._unpenalised(k, b, loads[b]) - centre[b]

    def _unpenalised(self, k: int, b: int, load: FloatArray) -> float:
        """Keep the unpenalised coefficients of one problem; returns its intercept."""
        chunk = self._chunk
        intercept, values = chunk.basis.coefficients(b, load)
        columns = chunk.basis.columns[b]
        if columns.size:
            point = np.full(columns.size, b * self.intercept.shape[1] + k)
            self._parts.append((point, columns, values))
            if chunk.basis.fit_intercept:
                intercept -= float(values @ chunk.design.centres[columns])
        return intercept

    def matrices(self) -> tuple[sparse.csr_array, ...]:
        """One matrix (L, p) per problem."""
        n_problems, n_points = self.intercept.shape
        shape = (n_problems * n_points, self._chunk.design.n_columns)
        points, columns, values = (np.concatenate(part) for part in zip(*self._parts, strict=True))
        order = np.lexsort((columns, points))
        indptr = np.concatenate([[0], np.cumsum(np.bincount(points, minlength=shape[0]))])
        stacked = sparse.csr_array((values[order], columns[order], indptr), shape=shape)
        return tuple(stacked[b * n_points : (b + 1) * n_points] for b in range(n_problems))
