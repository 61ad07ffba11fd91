"""The state of one chunk of problems that are solved in step along their grids.

Every problem keeps a working set of columns, starts each penalty from the answer to the
one before, and is done when the duality gap over *all* columns is small enough.  What the
problems of a chunk share is the product of the table with their residuals, one matrix
product for all that need one, and the pool of gathered columns.

``walk`` leads a chunk along its grids; here is what it knows.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from sparsesel.engine.basis import Basis, unpenalised_basis
from sparsesel.engine.design import DesignMatrix, FloatArray, IntArray, Moments
from sparsesel.engine.problems import Problems

# Residuals with known gradients that are kept per problem.
_KEPT = 3
# A gradient below this share of ||x_j|| ||r|| is rounding error; and the share of it at
# which a grid starts that has no other start, with room for the grid below it.
_NO_GRADIENT, _FLOOR = 1e-13, 1e-9


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
            room = np.empty((max(256, 2 * stop), self.rows.shape[1]))
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

    def occupied(self) -> NDArray[np.bool_]:
        """Which places hold a column (B, capacity)."""
        return np.arange(self.coef.shape[1]) < self.size[:, None]

    def used(self) -> NDArray[np.bool_]:
        """Which places hold a column with a nonzero coefficient (B, capacity)."""
        return (self.coef != 0.0) & self.occupied()

    def reserve(self, capacity: int) -> None:
        """Make room for ``capacity`` columns per problem."""
        present = self.coef.shape[1]
        if capacity <= present:
            return
        room = max(64, capacity + capacity // 2)
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
    """The latest residuals (B, K, n) whose gradients are known, K in a ring.

    ``cosine`` (B, K, p) holds x_j'W r_k / (||x_j||_W ||r_k||_W).
    ``pushed`` (B,) counts all that were ever kept; the newest is at (pushed - 1) % K.
    """

    residual: FloatArray
    cosine: NDArray[np.float32]
    pushed: IntArray

    @classmethod
    def empty(cls, n_problems: int, n_rows: int, n_columns: int) -> Kept:
        """Nothing known yet."""
        return cls(
            np.zeros((n_problems, _KEPT, n_rows)),
            np.zeros((n_problems, _KEPT, n_columns), np.float32),
            np.zeros(n_problems, np.int64),
        )

    def push(self, problems: IntArray, residual: FloatArray, cosine: FloatArray) -> None:
        """Keep these, the oldest of their problem making room."""
        place = self.pushed[problems] % _KEPT
        self.residual[problems, place] = residual
        self.cosine[problems, place] = cosine
        self.pushed[problems] += 1


@dataclass
class Outside:
    """Columns outside the working sets, ragged: found[b, :totals[b]] with their gradients."""

    found: IntArray
    totals: IntArray
    values: FloatArray

    @classmethod
    def empty(cls, n_problems: int, capacity: int) -> Outside:
        """Room for ``capacity`` columns per problem."""
        shape = (n_problems, capacity)
        return cls(np.empty(shape, np.int64), np.zeros(n_problems, np.int64), np.empty(shape))


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
    sweeps: IntArray
    # Set at the null model, by the loss and from its gradient.
    alpha_max: FloatArray = field(default_factory=lambda: np.empty(0))
    alpha_floor: FloatArray = field(default_factory=lambda: np.empty(0))
    null_objective: FloatArray = field(default_factory=lambda: np.empty(0))
    residual: FloatArray = field(default_factory=lambda: np.empty((0, 0)))
    centred: FloatArray = field(default_factory=lambda: np.empty((0, 0)))
    signs: FloatArray = field(default_factory=lambda: np.empty((0, 0)))
    predictor: FloatArray = field(default_factory=lambda: np.empty((0, 0)))
    load: FloatArray = field(default_factory=lambda: np.empty((0, 0)))


class Loss(Protocol):
    """What a loss does for a chunk; ``losses`` holds them."""

    name: str
    #: Whether Gram matrices stay the same along the path, and are kept for every problem.
    keeps_gram: bool

    def check_response(self, response: FloatArray) -> None:
        """Refuse responses that the loss has no value for."""

    def start(self, chunk: Chunk) -> None:
        """Fit the null models: residuals, loads and null objectives."""

    def extend(self, chunk: Chunk, problems: IntArray) -> None:
        """Take in columns that joined the working sets."""

    def solve(
        self, chunk: Chunk, problems: IntArray, alpha: FloatArray, target: FloatArray
    ) -> None:
        """Solve the working sets of the named problems to these absolute gaps."""

    def certify(
        self, chunk: Chunk, problems: IntArray, alpha: FloatArray, outside: Outside
    ) -> FloatArray:
        """Relative gaps (B,), those of the named problems written."""

    def basis_loads(self, chunk: Chunk) -> FloatArray:
        """Coordinates of every problem on its basis (B, k)."""

    def row_losses(self, chunk: Chunk, problems: IntArray) -> FloatArray:
        """The loss of every row (problems.size, n)."""


def open_chunk(design: DesignMatrix, problems: Problems, loss: Loss, max_iter: int) -> Chunk:
    """State the chunk's problems in full and start them at their null models."""
    n_problems, n, p = problems.count, design.n_rows, design.n_columns
    weights = _rows(_one_if_none(problems.sample_weight), n_problems, n)
    weights = np.ascontiguousarray(weights / weights.sum(axis=1, keepdims=True))
    penalty = _rows(_one_if_none(problems.penalty_weights), n_problems, p)
    moments = design.moments(weights)
    deviation = moments.scale
    norms = deviation if problems.fit_intercept else np.hypot(moments.mean, deviation)
    order_one, n_left_out = _first_order(design, penalty, deviation, problems.standardize)
    order_two = order_one
    if problems.l1_ratio < 1.0 and problems.standardize:
        order_two = np.where(np.isinf(order_one), np.inf, deviation)
        np.multiply(order_two, order_one, out=order_two, where=np.isfinite(order_one))
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
        sweeps=np.zeros(n_problems, np.int64),
    )
    loss.start(chunk)
    gradient = keep_gradients(chunk, np.arange(n_problems))
    chunk.alpha_max, chunk.alpha_floor = _largest_penalties(chunk, gradient, moments)
    return chunk


def keep_gradients(chunk: Chunk, problems: IntArray) -> FloatArray:
    """Multiply the residuals of the named problems with the table, and keep the product."""
    residual, weights = chunk.residual[problems], chunk.weights[problems]
    gradient = chunk.design.correlate(weights * residual)
    length = np.sqrt(np.einsum("bn,bn->b", weights, residual**2))
    size = chunk.norms[problems] * np.where(length > 0.0, length, 1.0)[:, None]
    cosine = np.divide(gradient, size, out=np.zeros_like(gradient), where=size > 0.0)
    chunk.kept.push(problems, residual, cosine)
    return gradient


def _one_if_none(values: FloatArray | None) -> FloatArray | float:
    return 1.0 if values is None else values


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


def _largest_penalties(
    chunk: Chunk, gradient: FloatArray, moments: Moments
) -> tuple[FloatArray, FloatArray]:
    """The smallest penalty (B,) that empties each problem, and the one rounding would ask for.

    A gradient that is rounding error of its own sum (a column in the span of the
    unpenalised ones) counts as zero.
    """
    length = np.sqrt(np.einsum("bn,bn->b", chunk.weights, chunk.residual**2))
    size = np.hypot(moments.mean, moments.scale) * length[:, None]
    out = np.isinf(chunk.order_one)
    penalty = np.where(out, 1.0, chunk.order_one) * chunk.l1_ratio
    ratios = np.where(out | (np.abs(gradient) <= _NO_GRADIENT * size), 0.0, np.abs(gradient))
    largest = (ratios / penalty).max(axis=1, initial=0.0)
    floor = (np.where(out, 0.0, size) / penalty).max(axis=1, initial=0.0) * _FLOOR
    return largest, floor
