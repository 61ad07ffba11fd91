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
def scan(gradient, order_one, order_two, alpha, l1_ratio):
    """Largest |g| / (alpha rho l1), at least 1, and the conjugate at t = 1.

    Columns with an infinite penalty are out of the problem and not looked at.
    """
    excess = 1.0
    conjugate = 0.0
    for j in range(gradient.size):
        weight = order_one[j]
        if weight == np.inf:
            continue
        limit = alpha * l1_ratio * weight
        magnitude = abs(gradient[j])
        if not magnitude <= limit:
            # Once a NaN, always a NaN: no comparison with it is true.
            excess = excess if magnitude / limit <= excess or excess != excess else magnitude / limit
            over = magnitude - limit
            conjugate += 0.5 * over * over / (alpha * (1.0 - l1_ratio) * order_two[j])
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
    problems, alpha, l1_ratio, null, weights, residual, centred, gradient, order_one, order_two,
    size, work_one, work_two, coef, gap,
):  # fmt: skip
    """Relative gaps of the named squared-error problems, written to ``gap``.

    ``gradient`` (B, p) holds x_j'Wr of every problem;
    ``work_one`` and ``work_two`` are the penalties of the working columns.
    """
    for b in problems:
        excess, conjugate = scan(
            gradient[b], order_one[b], order_two[b], alpha[b], l1_ratio
        )
        primal = _primal_squared(weights[b], residual[b]) + _penalty(
            size[b], coef[b], work_one[b], work_two[b], alpha[b], l1_ratio
        )
        found = primal - _dual_squared(weights[b], residual[b], centred[b], 1.0 / excess)
        if l1_ratio < 1.0:
            other = primal - _dual_squared(weights[b], residual[b], centred[b], 1.0) + conjugate
            found = other if other < found else found
        gap[b] = found / null[b]


@exact_kernel
def certify_log(
    problems, alpha, l1_ratio, null, weights, residual, signs, predictor, offset, gradient,
    order_one, order_two, size, work_one, work_two, coef, gap,
):  # fmt: skip
    """Relative gaps of the named log-loss problems; see ``certify_squared``."""
    for b in problems:
        excess, conjugate = scan(
            gradient[b], order_one[b], order_two[b], alpha[b], l1_ratio
        )
        primal = _primal_log(weights[b], signs[b], predictor[b]) + _penalty(
            size[b], coef[b], work_one[b], work_two[b], alpha[b], l1_ratio
        )
        found = primal - _dual_log(weights[b], residual[b], offset, 1.0 / excess)
        if l1_ratio < 1.0:
            other = primal - _dual_log(weights[b], residual[b], offset, 1.0) + conjugate
            found = other if other < found else found
        gap[b] = found / null[b]


@exact_kernel
def candidates(gradient, order_one, threshold, taken, limit):
    """Columns not taken with |g| over threshold * l1, the ``limit`` largest by ratio.

    Returned in column order.
    """
    count = 0
    for j in range(gradient.size):
        if not abs(gradient[j]) <= threshold * order_one[j]:
            count += not taken[j]
    found = np.empty(count, np.int64)
    ratios = np.empty(count)
    count = 0
    for j in range(gradient.size):
        if not abs(gradient[j]) <= threshold * order_one[j] and not taken[j]:
            # An infinite penalty times a threshold of zero is no bound; the column is out.
            if order_one[j] != np.inf:
                found[count] = j
                ratios[count] = abs(gradient[j]) / order_one[j]
                count += 1
    if count <= limit:
        return found[:count]
    cut = np.partition(ratios[:count], count - limit)[count - limit]
    kept = 0
    for k in range(count):
        if not ratios[k] < cut and kept < limit:
            found[kept] = found[k]
            kept += 1
    return found[:kept]
