"""The proof that an answer is right: a duality gap over all columns.

With r the residual (log loss: the pseudo-residual y - p), orthogonal under the weights to
the intercept and the unpenalised columns, t r is dual feasible for

    t = min(1, min_j  alpha rho v_j s_j / |x_j'Wr|)        (all penalised columns j),

and with rho < 1 the point r itself is, at the price of the conjugate
(|x_j'Wr| - alpha rho v_j s_j)_+^2 / (2 alpha (1 - rho) v_j s_j^2).  The dual objective is

    squared error   t <r, y~> - t^2 ||r||^2 / 2,    y~ the projected response less offset,
    log loss        sum w H(t |r|) - t <r, offset>,  H the binary entropy in nats

(Fenchel duality; Boyd and Vandenberghe 2004, sections 5.1.6 and 5.7; the log-loss dual is
the one in Koh, Kim and Boyd 2007, section 2.3, with an offset).  The gap is primal less
dual, over the null objective.  Arithmetic here is exactly as written, and every
comparison is phrased so that a NaN counts as a violation.
"""

from __future__ import annotations

import numpy as np

from sparsesel.engine._jit import exact_kernel


@exact_kernel
def _excess(size, gradient, order_one, order_two, alpha, l1_ratio, found, values, all_one, all_two):
    """Largest |g| / (alpha rho l1), at least 1, and the conjugate at t = 1.

    Over the working columns (with their penalties ``order_one``, ``order_two``) and those
    outside that had to be known exactly: columns ``found`` with gradients ``values``, with
    penalties looked up in ``all_one`` and ``all_two``. All others are bounded under theirs.
    """
    excess = 1.0
    conjugate = 0.0
    for position in range(size + found.size):
        if position < size:
            magnitude = abs(gradient[position])
            one = order_one[position]
            two = order_two[position]
        else:
            magnitude = abs(values[position - size])
            one = all_one[found[position - size]]
            two = all_two[found[position - size]]
        limit = alpha * l1_ratio * one
        if not magnitude <= limit:
            # Once a NaN, always a NaN: no comparison with it is true.
            if not (magnitude / limit <= excess or excess != excess):
                excess = magnitude / limit
            over = magnitude - limit
            conjugate += 0.5 * over * over / (alpha * (1.0 - l1_ratio) * two)
    return excess, conjugate


@exact_kernel
def _penalty(size, coef, order_one, order_two, alpha, l1_ratio):
    total = 0.0
    for k in range(size):
        total += alpha * l1_ratio * order_one[k] * abs(coef[k])
        total += 0.5 * alpha * (1.0 - l1_ratio) * order_two[k] * coef[k] * coef[k]
    return total


@exact_kernel
def _dual_squared(weights, residual, centred, shrink):
    product = 0.0
    norm = 0.0
    for i in range(weights.size):
        product += weights[i] * residual[i] * centred[i]
        norm += weights[i] * residual[i] * residual[i]
    return shrink * product - 0.5 * shrink * shrink * norm


@exact_kernel
def _primal_squared(weights, residual):
    norm = 0.0
    for i in range(weights.size):
        norm += weights[i] * residual[i] * residual[i]
    return 0.5 * norm


@exact_kernel
def _dual_log(weights, residual, offset, shrink):
    total = 0.0
    for i in range(weights.size):
        if weights[i] > 0.0:
            u = shrink * abs(residual[i])
            if u != 0.0:
                total -= weights[i] * u * np.log(u)
            if u != 1.0:
                total -= weights[i] * (1.0 - u) * np.log1p(-u)
            total -= weights[i] * shrink * residual[i] * offset[i]
    return total


@exact_kernel
def _primal_log(weights, signs, predictor):
    total = 0.0
    for i in range(weights.size):
        if weights[i] > 0.0:
            margin = signs[i] * predictor[i]
            total += weights[i] * np.log1p(np.exp(-abs(margin)))
            if margin < 0.0:
                total -= weights[i] * margin
    return total


@exact_kernel
def certify_squared(
    problems, alpha, l1_ratio, null, weights, residual, centred, size, gradient, order_one,
    order_two, coef, found, totals, values, all_one, all_two, gap,
):  # fmt: skip
    """Write the relative gaps of the named squared-error problems; columns as in ``_excess``."""
    for b in problems:
        excess, conjugate = _excess(
            size[b], gradient[b], order_one[b], order_two[b], alpha[b], l1_ratio,
            found[b, : totals[b]], values[b], all_one[b], all_two[b],
        )  # fmt: skip
        primal = _primal_squared(weights[b], residual[b]) + _penalty(
            size[b], coef[b], order_one[b], order_two[b], alpha[b], l1_ratio
        )
        found_gap = primal - _dual_squared(weights[b], residual[b], centred[b], 1.0 / excess)
        if l1_ratio < 1.0:
            other = primal - _dual_squared(weights[b], residual[b], centred[b], 1.0) + conjugate
            found_gap = other if other < found_gap else found_gap
        gap[b] = found_gap / null[b]


@exact_kernel
def certify_log(
    problems, alpha, l1_ratio, null, weights, residual, signs, predictor, offset, size, gradient,
    order_one, order_two, coef, found, totals, values, all_one, all_two, gap,
):  # fmt: skip
    """Write the relative gaps of the named log-loss problems; columns as in ``_excess``."""
    for b in problems:
        excess, conjugate = _excess(
            size[b], gradient[b], order_one[b], order_two[b], alpha[b], l1_ratio,
            found[b, : totals[b]], values[b], all_one[b], all_two[b],
        )  # fmt: skip
        primal = _primal_log(weights[b], signs[b], predictor[b]) + _penalty(
            size[b], coef[b], order_one[b], order_two[b], alpha[b], l1_ratio
        )
        found_gap = primal - _dual_log(weights[b], residual[b], offset, 1.0 / excess)
        if l1_ratio < 1.0:
            other = primal - _dual_log(weights[b], residual[b], offset, 1.0) + conjugate
            found_gap = other if other < found_gap else found_gap
        gap[b] = found_gap / null[b]
