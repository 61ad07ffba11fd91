"""The losses: what a chunk of problems needs of each, around the compiled kernels.

    squared_error   l(y, f) = (y - f)^2 / 2
    log_loss        l(y, f) = log(1 + e^f) - y f,   y in {0, 1}

A loss starts the chunk at its null model (offset, intercept and unpenalised columns),
solves working sets, certifies, and averages the loss over held-out rows.  A new loss is
one class here, with its kernels, and one line in ``LOSSES``.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sparsesel.engine import certificate, kernels
from sparsesel.engine.chunk import Chunk, Loss, Outside
from sparsesel.engine.design import FloatArray

# A null objective below this share of the response's mean square is rounding error.
_NOTHING_LEFT = 1e-24
# Smallest eigenvalue of the unpenalised columns' curvature (at most 1/4) that still counts
# as a maximum-likelihood estimate at a finite distance.
_SEPARATED = 1e-8

Problems = NDArray[np.int64]


class SquaredError:
    """Half the squared error."""

    name = "squared_error"
    #: Gram matrices do not change along the path and are kept for every problem.
    keeps_gram = True

    def check_response(self, response: FloatArray) -> None:
        """Any finite response will do."""

    def start(self, chunk: Chunk) -> None:
        """Project the response; the residual starts there."""
        target = chunk.response - chunk.offset
        chunk.load = np.einsum("bkn,bn->bk", chunk.basis.rows, chunk.weights * target)
        centred = target - np.einsum("bk,bkn->bn", chunk.load, chunk.basis.rows)
        # Once more, because the first projection leaves rounding of the size of the response.
        rest = np.einsum("bkn,bn->bk", chunk.basis.rows, chunk.weights * centred)
        centred -= np.einsum("bk,bkn->bn", rest, chunk.basis.rows)
        chunk.load += rest
        null = 0.5 * np.einsum("bn,bn->b", chunk.weights, centred**2)
        size = np.einsum("bn,bn->b", chunk.weights, chunk.response**2 + chunk.offset**2)
        chunk.null_objective = np.where(null <= _NOTHING_LEFT * size, 0.0, null)
        chunk.centred = np.where(chunk.null_objective[:, None] > 0.0, centred, 0.0)
        chunk.residual = chunk.centred.copy()

    def extend(self, chunk: Chunk, problems: Problems) -> None:
        """Bring the Gram matrices up to the working sets."""
        kernels.extend_many(
            problems, chunk.weights, chunk.basis.rows, chunk.pool.rows, chunk.work.slots,
            chunk.work.filled, chunk.work.size, chunk.work.gram, chunk.work.border,
        )  # fmt: skip

    def solve(
        self, chunk: Chunk, problems: Problems, alpha: FloatArray, target: FloatArray
    ) -> None:
        """Solve the working sets of the named problems."""
        work = chunk.work
        kernels.solve_squared(
            problems, alpha, chunk.l1_ratio, target, chunk.max_iter, chunk.weights,
            chunk.centred, chunk.basis.rows, chunk.pool.rows, work.slots, work.size,
            work.order_one, work.order_two, work.gram, work.border, work.coef, work.gradient,
            chunk.residual, chunk.sweeps,
        )  # fmt: skip

    def certify(
        self, chunk: Chunk, problems: Problems, alpha: FloatArray, outside: Outside
    ) -> FloatArray:
        """Relative gaps (B,), written for the named problems."""
        work = chunk.work
        gap = np.full(alpha.size, np.nan)
        certificate.certify_squared(
            problems, alpha, chunk.l1_ratio, chunk.null_objective, chunk.weights, chunk.residual,
            chunk.centred, work.size, work.gradient, work.order_one, work.order_two, work.coef,
            outside.found, outside.totals, outside.values, chunk.order_one, chunk.order_two, gap,
        )  # fmt: skip
        return gap

    def basis_loads(self, chunk: Chunk) -> FloatArray:
        """Coordinates of every problem on its basis (B, k)."""
        work = chunk.work
        coef = np.where(work.occupied(), work.coef, 0.0)
        return chunk.load - np.einsum("bm,bmk->bk", coef, work.border)

    def row_losses(self, chunk: Chunk, problems: Problems) -> FloatArray:
        """The loss of every row, those of weight zero too: (problems.size, n)."""
        return 0.5 * np.square(chunk.residual[problems])


class LogLoss:
    """The logistic loss of a two-valued response."""

    name = "log_loss"
    #: The curvature changes with every step, so one Gram matrix serves as scratch.
    keeps_gram = False

    def check_response(self, response: FloatArray) -> None:
        """Only 0 and 1."""
        if not np.isin(response, (0.0, 1.0)).all():
            values = np.unique(response)
            raise ValueError(
                f"The response of the log loss holds {values.size} distinct values, among them "
                f"{values[:3].tolist()}; only 0 and 1 are allowed. Code the two classes as 0 "
                "and 1, or use loss='squared_error'."
            )

    def start(self, chunk: Chunk) -> None:
        """Fit the null model; refuse classes that are missing or already separated."""
        shape = chunk.response.shape
        chunk.signs = np.where(chunk.response > 0.5, 1.0, -1.0)
        chunk.predictor = np.broadcast_to(chunk.offset, shape).copy()
        chunk.residual = np.empty(shape)
        chunk.load = np.zeros((shape[0], chunk.basis.rows.shape[1]))
        chunk.null_objective = np.empty(shape[0])
        self._refuse_one_class(chunk)
        curvature = np.empty(shape[1])
        for b in range(shape[0]):
            score = kernels.polish_basis(
                chunk.weights[b], chunk.signs[b], chunk.basis.rows[b], chunk.load[b],
                chunk.predictor[b], chunk.residual[b], curvature,
            )  # fmt: skip
            self._refuse_separation(chunk, b, curvature, score)
        losses = self.row_losses(chunk, np.arange(shape[0]))
        chunk.null_objective[:] = np.einsum("bn,bn->b", chunk.weights, losses)

    def _refuse_one_class(self, chunk: Chunk) -> None:
        ones = np.einsum("bn,bn->b", chunk.weights, chunk.response > 0.5)
        weighted = chunk.weights > 0.0
        for b in np.flatnonzero((ones <= 0.0) | (ones >= 1.0 - 1e-15)):
            seen = np.unique(chunk.response[b][weighted[b]])
            if chunk.basis.fit_intercept and seen.size < 2:
                raise ValueError(
                    f"The log loss was given one class only ({seen[0]:g}) among the rows of "
                    "positive weight; both 0 and 1 must occur. Check the response, the sample "
                    "weights, and that every fold or half holds both classes."
                )

    def _refuse_separation(self, chunk: Chunk, b: int, curvature: FloatArray, score: float) -> None:
        used = chunk.basis.back[b].shape[1]
        if used == 0:
            return
        rows = chunk.basis.rows[b, :used]
        smallest = np.linalg.eigvalsh((rows * (chunk.weights[b] * curvature)) @ rows.T)[0]
        if not (smallest > _SEPARATED and score <= 1e-12):
            raise ValueError(
                "The null model of the log loss (offset, intercept and "
                f"{chunk.basis.columns[b].size} unpenalised columns) has no finite estimate: it "
                "separates the two classes, or nearly so. It must leave them overlapping. Give a "
                "separating column a positive penalty weight or leave it out, and check the offset."
            )

    def extend(self, chunk: Chunk, problems: Problems) -> None:
        """Nothing is kept between steps."""
        chunk.work.filled[problems] = chunk.work.size[problems]

    def solve(
        self, chunk: Chunk, problems: Problems, alpha: FloatArray, target: FloatArray
    ) -> None:
        """Solve the working sets of the named problems."""
        work = chunk.work
        kernels.solve_log(
            problems, alpha, chunk.l1_ratio, target, chunk.max_iter, chunk.weights, chunk.signs,
            chunk.offset, chunk.basis.rows, chunk.pool.rows, work.slots, work.size,
            work.order_one, work.order_two, work.gram, work.coef, work.gradient, chunk.load,
            chunk.predictor, chunk.residual, chunk.sweeps,
        )  # fmt: skip

    def certify(
        self, chunk: Chunk, problems: Problems, alpha: FloatArray, outside: Outside
    ) -> FloatArray:
        """Relative gaps (B,), written for the named problems."""
        work = chunk.work
        gap = np.full(alpha.size, np.nan)
        certificate.certify_log(
            problems, alpha, chunk.l1_ratio, chunk.null_objective, chunk.weights, chunk.residual,
            chunk.signs, chunk.predictor, chunk.offset, work.size, work.gradient, work.order_one,
            work.order_two, work.coef, outside.found, outside.totals, outside.values,
            chunk.order_one, chunk.order_two, gap,
        )  # fmt: skip
        return gap

    def basis_loads(self, chunk: Chunk) -> FloatArray:
        """Coordinates of every problem on its basis (B, k)."""
        return chunk.load

    def row_losses(self, chunk: Chunk, problems: Problems) -> FloatArray:
        """The loss of every row, those of weight zero too: (problems.size, n)."""
        margin = chunk.signs[problems] * chunk.predictor[problems]
        return np.log1p(np.exp(-np.abs(margin))) + np.maximum(-margin, 0.0)


LOSSES: dict[str, Loss] = {loss.name: loss for loss in (SquaredError(), LogLoss())}
