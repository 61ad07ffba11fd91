"""Compiled loops on working sets: Gram matrices, coordinate descent, Newton steps.

One problem restricted to its working set A (m columns) is, after the intercept and the
unpenalised columns are projected out,

    minimise over c:  1/2 ||r||^2 - g'(c - c0) + 1/2 (c - c0)'G(c - c0)
                      + sum_k [ l1_k |c_k| + 1/2 l2_k c_k^2 ]

with the residual r and the gradient g = Z'Wr at the present c0 and the Gram matrix
G = Z'WZ.  Everything below works on (G, g, c, ||r||^2), never on rows, so that a sweep
costs O(m) per coordinate that moves.  l1 = alpha * l1_ratio * v * s and
l2 = alpha * (1 - l1_ratio) * v * s^2 are the penalties of the columns as they stand.

Gap of the quadratic problem, from the dual point t r with t = min(1, min l1_k / |g_k|):

    gap = 1/2 ||r||^2 (1 - t)^2 + sum [l1 |c| + 1/2 l2 c^2] - t c'g,

or, where every l2_k > 0, from r itself with the conjugate (|g| - l1)_+^2 / (2 l2); the
smaller of the two holds (Fenchel duality; Boyd and Vandenberghe 2004, section 5.1.6).

Columns come from a pool of gathered rows (slots), one pool for all problems of a chunk.
``basis`` (k, n) spans the intercept and the unpenalised columns, orthonormal under the
problem's weights.  The kernels take many arguments because they take arrays, and each
array is one named part of the state; the callers hold them in dataclasses.
"""

from __future__ import annotations

import numpy as np

from sparsesel.engine._jit import kernel

# A working column whose norm, after projection, is below this share of its own is
# numerically inside the span of the unpenalised columns: it has no direction of its own.
_NO_DIRECTION = 1e-12
# Coordinate sweeps over the support between two looks at the whole working set.
_SUPPORT_SWEEPS = 8
# Cycles of sweeps before a Newton step on the support is tried: well-conditioned problems
# never pay for a factorisation.
_CYCLES_BEFORE_NEWTON = 1
# Newton steps in a row, each of which but the last drops some coefficients.
_NEWTON_STEPS = 10
# Largest support that is factored; beyond it, conjugate gradients with so many steps at
# most, down to this share of the first residual.
_DIRECT = 250
_CONJUGATE_STEPS, _CONJUGATE_REST = 60, 1e-3
# Relative lift of the diagonal that keeps the factorisation of a singular support alive.
_LIFT = 1e-9
# Log loss: floor of the curvature p (1 - p), and the score at which the unpenalised
# coordinates count as solved.
_CURVATURE_FLOOR = 1e-10
_SCORE = 1e-13


@kernel
def weighted_dot(weights, left, right):
    """Sum of weights * left * right."""
    total = 0.0
    for i in range(weights.size):
        total += weights[i] * left[i] * right[i]
    return total


@kernel
def plain_dot(left, right):
    """Sum of left * right."""
    total = 0.0
    for i in range(left.size):
        total += left[i] * right[i]
    return total


@kernel
def add_scaled(target, factor, values):
    """Add factor * values to target, in place."""
    for i in range(target.size):
        target[i] += factor * values[i]


@kernel
def _copy(source, target, count):
    """target[:count] = source[:count]; an assignment of slices takes long to compile."""
    for i in range(count):
        target[i] = source[i]


@kernel
def _four_dots(block, column):
    """Products of four rows with one column, which is read once for all of them."""
    one, two, three, four = 0.0, 0.0, 0.0, 0.0
    first, second, third, fourth = block[0], block[1], block[2], block[3]
    for i in range(column.size):
        one += first[i] * column[i]
        two += second[i] * column[i]
        three += third[i] * column[i]
        four += fourth[i] * column[i]
    return one, two, three, four


@kernel
def extend_gram(weights, basis, pool, slots, start, stop, gram, border):
    """Fill the Gram rows and the border B = basis W Z of working columns start..stop."""
    block = np.zeros((4, weights.size))
    n_basis = basis.shape[0]
    for a in range(start, stop, 4):
        width = min(4, stop - a)
        for k in range(width):
            column = pool[slots[a + k]]
            row = block[k]
            for i in range(weights.size):
                row[i] = weights[i] * column[i]
        for q in range(n_basis):
            products = _four_dots(block, basis[q])
            for k in range(width):
                border[a + k, q] = products[k]
        for c in range(a + width):
            products = _four_dots(block, pool[slots[c]])
            for k in range(width):
                value = products[k]
                for q in range(n_basis):
                    value -= border[a + k, q] * border[c, q]
                if c == a + k and value <= _NO_DIRECTION * products[k]:
                    value = 0.0
                gram[a + k, c] = value
                gram[c, a + k] = value


@kernel
def extend_many(problems, weights, basis, pool, slots, filled, size, gram, border):
    """``extend_gram`` for the named problems of a chunk, from filled[b] to size[b]."""
    for b in problems:
        extend_gram(weights[b], basis[b], pool, slots[b], filled[b], size[b], gram[b], border[b])
        filled[b] = size[b]


@kernel
def compact(
    problems, keep, size, filled, columns, slots, coef, order_one, order_two, gram, border,
    keeps_gram,
):  # fmt: skip
    """Drop the working columns whose ``keep`` is False, moving the rest up."""
    for b in problems:
        kept = 0
        for k in range(size[b]):
            if not keep[b, k]:
                continue
            columns[b, kept] = columns[b, k]
            slots[b, kept] = slots[b, k]
            coef[b, kept] = coef[b, k]
            order_one[b, kept] = order_one[b, k]
            order_two[b, kept] = order_two[b, k]
            if keeps_gram:
                for c in range(border.shape[2]):
                    border[b, kept, c] = border[b, k, c]
                target = 0
                for c in range(size[b]):
                    if keep[b, c]:
                        gram[b, kept, target] = gram[b, k, c]
                        target += 1
            kept += 1
        size[b] = kept
        filled[b] = kept


@kernel
def admit(
    problems, found, totals, slot_of, all_one, all_two, taken, size, columns, slots, coef,
    order_one, order_two,
):  # fmt: skip
    """Append the found columns of each named problem to its working set, at zero."""
    for b in problems:
        for position in range(totals[b]):
            j = found[b, position]
            place = size[b]
            columns[b, place] = j
            slots[b, place] = slot_of[j]
            coef[b, place] = 0.0
            order_one[b, place] = all_one[b, j]
            order_two[b, place] = all_two[b, j]
            taken[b, j] = True
            size[b] += 1


@kernel
def enter(problems, size, columns, coef, deviation, unit_of, seen, entries, entered):
    """Append the units that are newly in: larger standardised |coefficient| first.

    Equal ones come in the order of their columns.
    """
    for b in problems:
        while entered[b] < entries.shape[1]:
            best = -1
            largest = -1.0
            for k in range(size[b]):
                j = columns[b, k]
                if coef[b, k] == 0.0 or seen[b, unit_of[j]]:
                    continue
                value = abs(coef[b, k]) * deviation[b, j]
                if value > largest or (value == largest and j < best):
                    largest = value
                    best = j
            if best < 0:
                break
            seen[b, unit_of[best]] = True
            entries[b, entered[b]] = unit_of[best]
            entered[b] += 1


@kernel
def quadratic_gap(size, gradient, coef, l1, l2, squared_norm):
    """Duality gap of the quadratic problem on the working set; see the module's head."""
    penalty = 0.0
    correlation = 0.0
    excess = 1.0
    conjugate = 0.0
    ridge = size > 0
    for k in range(size):
        magnitude = abs(gradient[k])
        penalty += l1[k] * abs(coef[k]) + 0.5 * l2[k] * coef[k] * coef[k]
        correlation += coef[k] * gradient[k]
        if magnitude > l1[k]:
            excess = max(excess, magnitude / l1[k])
            if l2[k] > 0.0:
                conjugate += 0.5 * (magnitude - l1[k]) ** 2 / l2[k]
        if not l2[k] > 0.0:
            ridge = False
    shrink = 1.0 / excess
    gap = 0.5 * squared_norm * (1.0 - shrink) ** 2 + penalty - shrink * correlation
    if ridge:
        gap = min(gap, penalty - correlation + conjugate)
    return gap


@kernel
def _move(k, new, size, gram, gradient, coef):
    """Set coordinate k to ``new``; returns the change of ||r||^2."""
    step = new - coef[k]
    change = -step * (2.0 * gradient[k] - step * gram[k, k])
    coef[k] = new
    row = gram[k]
    for c in range(size):
        gradient[c] -= step * row[c]
    return change


@kernel
def _best(k, gram, gradient, coef, l1, l2):
    """The minimiser in coordinate k with all others held."""
    curvature = gram[k, k]
    if curvature <= 0.0:
        return 0.0
    pull = gradient[k] + curvature * coef[k]
    if pull > l1[k]:
        return (pull - l1[k]) / (curvature + l2[k])
    if pull < -l1[k]:
        return (pull + l1[k]) / (curvature + l2[k])
    return 0.0


@kernel
def _sweep(chosen, count, size, gram, gradient, coef, l1, l2):
    """One pass over the chosen coordinates: (change of ||r||^2, largest decrease)."""
    change = 0.0
    largest = 0.0
    for position in range(count):
        k = chosen[position]
        new = _best(k, gram, gradient, coef, l1, l2)
        if new != coef[k]:
            decrease = (new - coef[k]) ** 2 * (gram[k, k] + l2[k])
            largest = max(largest, decrease)
            change += _move(k, new, size, gram, gradient, coef)
    return change, largest


@kernel
def _support(size, coef, chosen):
    count = 0
    for k in range(size):
        if coef[k] != 0.0:
            chosen[count] = k
            count += 1
    return count


@kernel
def _solve_support(chosen, count, gram, gradient, coef, l1, l2, factor, step):
    """The Newton step of the support at fixed signs, by Cholesky; False if it breaks down."""
    for a in range(count):
        k = chosen[a]
        sign = 1.0 if coef[k] > 0.0 else -1.0
        step[a] = gradient[k] - l1[k] * sign - l2[k] * coef[k]
        row = factor[a]
        for c in range(a):
            other = factor[c]
            value = gram[k, chosen[c]]
            for q in range(c):
                value -= row[q] * other[q]
            row[c] = value / other[c]
        value = gram[k, k] * (1.0 + _LIFT) + l2[k]
        for q in range(a):
            value -= row[q] * row[q]
        if not value > 1e-15 * gram[k, k]:
            return False
        row[a] = np.sqrt(value)
    for a in range(count):
        for c in range(a):
            step[a] -= factor[a, c] * step[c]
        step[a] /= factor[a, a]
    for a in range(count - 1, -1, -1):
        step[a] /= factor[a, a]
        for c in range(a):
            step[c] -= factor[a, c] * step[a]
    return True


@kernel
def _approach_support(chosen, count, gram, gradient, coef, l1, l2, step):
    """The same step by conjugate gradients, stopped early; for supports too large to factor.

    Every iterate lowers the quadratic, so a step that stops early is a shorter step, not a
    wrong one (Hestenes and Stiefel 1952, scaled by the diagonal).
    """
    rest = np.empty(count)
    scale = np.empty(count)
    along = np.empty(count)
    image = np.empty(count)
    block = np.empty((count, count))
    for a in range(count):
        k = chosen[a]
        sign = 1.0 if coef[k] > 0.0 else -1.0
        rest[a] = gradient[k] - l1[k] * sign - l2[k] * coef[k]
        scale[a] = 1.0 / (gram[k, k] * (1.0 + _LIFT) + l2[k])
        step[a] = 0.0
        along[a] = scale[a] * rest[a]
        for c in range(count):
            block[a, c] = gram[k, chosen[c]]
        block[a, a] += _LIFT * gram[k, k] + l2[k]
    size = 0.0
    for a in range(count):
        size += rest[a] * rest[a] * scale[a]
    stop = _CONJUGATE_REST**2 * size
    for _ in range(_CONJUGATE_STEPS):
        if not size > stop:
            break
        curvature = 0.0
        for a in range(count):
            image[a] = plain_dot(block[a], along)
            curvature += image[a] * along[a]
        if not curvature > 0.0:
            break
        length = size / curvature
        fresh = 0.0
        for a in range(count):
            step[a] += length * along[a]
            rest[a] -= length * image[a]
            fresh += rest[a] * rest[a] * scale[a]
        for a in range(count):
            along[a] = scale[a] * rest[a] + fresh / size * along[a]
        size = fresh


@kernel
def _turned(chosen, count, size, gram, step, image):
    """image = G step over the whole working set, for a step on the support."""
    for c in range(size):
        image[c] = 0.0
    for a in range(count):
        row = gram[chosen[a]]
        for c in range(size):
            image[c] += step[a] * row[c]


@kernel
def _objective_change(chosen, count, gradient, coef, l1, l2, step, image):
    total = 0.0
    for a in range(count):
        k = chosen[a]
        new = coef[k] + step[a]
        total += step[a] * (0.5 * image[k] - gradient[k])
        total += l1[k] * (abs(new) - abs(coef[k]))
        total += 0.5 * l2[k] * (new * new - coef[k] * coef[k])
    return total


@kernel
def _support_newton(size, gram, gradient, coef, l1, l2, chosen, factor, step, image):
    """Newton steps on the support: the step to the minimum at fixed signs.

    Coefficients that would change their sign stop at zero, if the objective then falls;
    else the step is cut where the first of them would, along which the objective falls for
    certain, a convex quadratic inside an orthant whose minimum lies ahead.  Returns the
    change of ||r||^2 and whether the last step reached its minimum.
    """
    change = 0.0
    full = np.empty(size)
    for _ in range(_NEWTON_STEPS):
        count = _support(size, coef, chosen)
        if count == 0:
            return change, True
        if count > factor.shape[0]:
            _approach_support(chosen, count, gram, gradient, coef, l1, l2, step)
        elif not _solve_support(chosen, count, gram, gradient, coef, l1, l2, factor, step):
            return change, False
        length = 1.0
        first = -1
        for a in range(count):
            value = coef[chosen[a]]
            if (value + step[a]) * value < 0.0 and -value / step[a] < length:
                length = -value / step[a]
                first = a
        for a in range(count):
            value = coef[chosen[a]]
            full[a] = step[a]
            if (value + step[a]) * value < 0.0:
                step[a] = -value
        _turned(chosen, count, size, gram, step, image)
        if first >= 0 and not (
            _objective_change(chosen, count, gradient, coef, l1, l2, step, image) < 0.0
        ):
            for a in range(count):
                step[a] = length * full[a]
            step[first] = -coef[chosen[first]]
            _turned(chosen, count, size, gram, step, image)
        for a in range(count):
            k = chosen[a]
            change += step[a] * (image[k] - 2.0 * gradient[k])
        for a in range(count):
            k = chosen[a]
            coef[k] = 0.0 if step[a] == -coef[k] else coef[k] + step[a]
        for k in range(size):
            gradient[k] -= image[k]
        if first < 0:
            return change, True
    return change, False


@kernel
def descend(size, gram, gradient, coef, l1, l2, squared_norm, target, max_sweeps):
    """Minimise the quadratic problem in place until its gap is at most ``target``.

    Returns the number of sweeps made.
    """
    everything = np.arange(size)
    chosen = np.empty(size, np.int64)
    factor = np.empty((0, 0))
    step = np.empty(size)
    image = np.empty(size)
    sweeps = 0
    cycle = 0
    while sweeps < max_sweeps:
        change, largest = _sweep(everything, size, size, gram, gradient, coef, l1, l2)
        squared_norm = max(squared_norm + change, 0.0)
        sweeps += 1
        gap = quadratic_gap(size, gradient, coef, l1, l2, squared_norm)
        if gap <= target or largest == 0.0:
            break
        cycle += 1
        if cycle > _CYCLES_BEFORE_NEWTON:
            if factor.shape[0] == 0:
                factor = np.empty((min(size, _DIRECT), min(size, _DIRECT)))
            change, arrived = _support_newton(
                size, gram, gradient, coef, l1, l2, chosen, factor, step, image
            )
            squared_norm = max(squared_norm + change, 0.0)
            if arrived:
                continue
        count = _support(size, coef, chosen)
        for _ in range(_SUPPORT_SWEEPS):
            change, largest = _sweep(chosen, count, size, gram, gradient, coef, l1, l2)
            squared_norm = max(squared_norm + change, 0.0)
            sweeps += 1
            if largest <= 0.01 * target:
                break
    return sweeps


@kernel
def _penalties(size, alpha, l1_ratio, order_one, order_two, l1, l2):
    for k in range(size):
        l1[k] = alpha * l1_ratio * order_one[k]
        l2[k] = alpha * (1.0 - l1_ratio) * order_two[k]


@kernel
def solve_squared(
    problems, alpha, l1_ratio, target, budget, weights, centred, basis, pool, slots, size,
    order_one, order_two, gram, border, coef, gradients, residual, sweeps,
):  # fmt: skip
    """Squared error on the working sets of the named problems.

    ``centred`` (B, n) is the response less offset, projected; ``residual`` (B, n) is
    formed from it afresh after every descent, so the rounding of one descent never
    reaches the next.  A descent is repeated on the exact gradient until the gap of the
    working set is at most the target or the budget of sweeps is spent; ``gradients``
    holds the exact gradient of the working columns at the end.
    """
    capacity = coef.shape[1]
    l1 = np.empty(capacity)
    l2 = np.empty(capacity)
    for b in problems:
        m = size[b]
        w = weights[b]
        r = residual[b]
        gradient = gradients[b]
        _penalties(m, alpha[b], l1_ratio, order_one[b], order_two[b], l1, l2)
        last = np.inf
        while True:
            for k in range(m):
                gradient[k] = weighted_dot(w, pool[slots[b, k]], r)
            squared_norm = weighted_dot(w, r, r)
            gap = quadratic_gap(m, gradient, coef[b], l1, l2, squared_norm)
            if gap <= target[b] or sweeps[b] >= budget or not gap < 0.5 * last:
                break
            last = gap
            sweeps[b] += descend(
                m, gram[b], gradient, coef[b], l1, l2, squared_norm, 0.5 * target[b],
                budget - sweeps[b],
            )  # fmt: skip
            _copy(centred[b], r, r.size)
            for q in range(basis.shape[1]):
                load = 0.0
                for k in range(m):
                    load += border[b, k, q] * coef[b, k]
                add_scaled(r, load, basis[b, q])
            for k in range(m):
                if coef[b, k] != 0.0:
                    add_scaled(r, -coef[b, k], pool[slots[b, k]])
            for q in range(basis.shape[1]):
                add_scaled(r, -weighted_dot(w, basis[b, q], r), basis[b, q])


@kernel
def _log_loss(weights, signs, predictor):
    total = 0.0
    for i in range(weights.size):
        if weights[i] > 0.0:
            margin = signs[i] * predictor[i]
            total += weights[i] * (np.log1p(np.exp(-abs(margin))) + max(-margin, 0.0))
    return total


@kernel
def _log_terms(signs, predictor, pseudo, curvature):
    """The pseudo-residual y - p, with y in {0, 1}, and the curvature p (1 - p)."""
    for i in range(signs.size):
        tail = np.exp(-abs(predictor[i]))
        small = tail / (1.0 + tail)
        agrees = (signs[i] > 0.0) == (predictor[i] > 0.0)
        pseudo[i] = signs[i] * (small if agrees else 1.0 / (1.0 + tail))
        curvature[i] = max(small / (1.0 + tail), _CURVATURE_FLOOR)


@kernel
def _curvature_solve(weights, curvature, basis, right, answer):
    """Solve (basis H basis') answer = right by Cholesky, H = weights * curvature."""
    count = basis.shape[0]
    factor = np.empty((count, count))
    for a in range(count):
        for c in range(a + 1):
            value = 0.0
            for i in range(weights.size):
                value += weights[i] * curvature[i] * basis[a, i] * basis[c, i]
            value -= plain_dot(factor[a, :c], factor[c, :c])
            factor[a, c] = np.sqrt(max(value, 1e-300)) if a == c else value / factor[c, c]
    for column in range(right.shape[1]):
        for a in range(count):
            value = right[a, column] - plain_dot(factor[a, :a], answer[:a, column])
            answer[a, column] = value / factor[a, a]
        for a in range(count - 1, -1, -1):
            value = answer[a, column]
            for c in range(a + 1, count):
                value -= factor[c, a] * answer[c, column]
            answer[a, column] = value / factor[a, a]


@kernel
def polish_basis(weights, signs, basis, load, predictor, pseudo, curvature):
    """Newton on the unpenalised coordinates alone until their score is rounding error."""
    count = basis.shape[0]
    score = np.empty((count, 1))
    step = np.empty((count, 1))
    _log_terms(signs, predictor, pseudo, curvature)
    if count == 0:
        return 0.0
    value = _log_loss(weights, signs, predictor)
    trial = np.empty(predictor.size)
    worst = np.inf
    for _ in range(100):
        worst = 0.0
        for q in range(count):
            score[q, 0] = weighted_dot(weights, basis[q], pseudo)
            worst = max(worst, abs(score[q, 0]))
        if worst <= _SCORE:
            break
        _curvature_solve(weights, curvature, basis, score, step)
        length = 1.0
        for _ in range(30):
            _copy(predictor, trial, trial.size)
            for q in range(count):
                add_scaled(trial, length * step[q, 0], basis[q])
            found = _log_loss(weights, signs, trial)
            # At the optimum the loss cannot fall any more, only its score can.
            if found <= value + 1e-14 * abs(value):
                break
            length *= 0.5
        value = found
        _copy(trial, predictor, trial.size)
        for q in range(count):
            load[q] += length * step[q, 0]
        _log_terms(signs, predictor, pseudo, curvature)
    return worst


@kernel
def _log_gap(weights, signs, offset, predictor, pseudo, size, gradient, coef, l1, l2):
    """Duality gap of the log-loss problem on the working set.

    Dual point u = t |y - p|: sum w [H(u)] - t sum w (y - p) offset - conjugate, with the
    binary entropy H; t as in ``quadratic_gap``.
    """
    penalty = 0.0
    excess = 1.0
    conjugate = 0.0
    ridge = size > 0
    for k in range(size):
        magnitude = abs(gradient[k])
        penalty += l1[k] * abs(coef[k]) + 0.5 * l2[k] * coef[k] * coef[k]
        if magnitude > l1[k]:
            excess = max(excess, magnitude / l1[k])
            if l2[k] > 0.0:
                conjugate += 0.5 * (magnitude - l1[k]) ** 2 / l2[k]
        if not l2[k] > 0.0:
            ridge = False
    primal = _log_loss(weights, signs, predictor) + penalty
    shift = weighted_dot(weights, pseudo, offset)
    shrink = 1.0 / excess
    gap = primal - _entropy(weights, pseudo, shrink) + shrink * shift
    if ridge:
        gap = min(gap, primal - _entropy(weights, pseudo, 1.0) + shift + conjugate)
    return gap


@kernel
def _entropy(weights, pseudo, shrink):
    total = 0.0
    for i in range(weights.size):
        u = shrink * abs(pseudo[i])
        if weights[i] > 0.0 and u > 0.0:
            total -= weights[i] * u * np.log(u)
            if u < 1.0:
                total -= weights[i] * (1.0 - u) * np.log1p(-u)
    return total


@kernel
def _curved_gram(weights, curvature, basis, pool, slots, size, gram, cross, projected):
    """G = Z'HZ with the basis eliminated; keeps B = basis H Z and (basis H basis')^-1 B."""
    heavy = np.empty(weights.size)
    weighted = np.empty(weights.size)
    for i in range(weights.size):
        heavy[i] = weights[i] * curvature[i]
    for k in range(size):
        column = pool[slots[k]]
        for i in range(weights.size):
            weighted[i] = heavy[i] * column[i]
        for q in range(basis.shape[0]):
            cross[q, k] = plain_dot(weighted, basis[q])
        for c in range(k + 1):
            gram[k, c] = plain_dot(weighted, pool[slots[c]])
    _curvature_solve(weights, curvature, basis, cross[:, :size], projected)
    for k in range(size):
        norm = gram[k, k]
        for c in range(k + 1):
            value = gram[k, c]
            for q in range(basis.shape[0]):
                value -= cross[q, k] * projected[q, c]
            if k == c and value <= _NO_DIRECTION * norm:
                value = 0.0
            gram[k, c] = value
            gram[c, k] = value


@kernel
def _log_step(weights, signs, basis, pool, slots, size, l1, l2, old, coef, load, predictor, turn):
    """Backtrack along (coef - old, turn) until the penalised loss falls; False if it can't."""
    direction = np.zeros(predictor.size)
    before = _log_loss(weights, signs, predictor)
    for k in range(size):
        before += l1[k] * abs(old[k]) + 0.5 * l2[k] * old[k] * old[k]
        if coef[k] != old[k]:
            add_scaled(direction, coef[k] - old[k], pool[slots[k]])
    for q in range(basis.shape[0]):
        add_scaled(direction, turn[q], basis[q])
    trial = np.empty(predictor.size)
    length = 1.0
    for _ in range(40):
        _copy(predictor, trial, trial.size)
        add_scaled(trial, length, direction)
        after = _log_loss(weights, signs, trial)
        for k in range(size):
            value = old[k] + length * (coef[k] - old[k])
            after += l1[k] * abs(value) + 0.5 * l2[k] * value * value
        if after <= before + 1e-15 * abs(before):
            for k in range(size):
                if length < 1.0:
                    coef[k] = old[k] + length * (coef[k] - old[k])
            for q in range(basis.shape[0]):
                load[q] += length * turn[q]
            _copy(trial, predictor, trial.size)
            return True
        length *= 0.5
    _copy(old, coef, size)
    return False


@kernel
def solve_log(
    problems, alpha, l1_ratio, target, budget, weights, signs, offset, basis, pool, slots, size,
    order_one, order_two, gram, coef, gradients, load, predictor, residual, sweeps,
):  # fmt: skip
    """Log loss on the working sets of the named problems: Newton around ``descend``.

    Each step minimises the penalised quadratic model at the present point, with intercept
    and unpenalised columns eliminated, then backtracks.  ``residual`` (B, n) receives the
    pseudo-residual y - p, ``load`` the coordinates on the basis.
    """
    capacity = coef.shape[1]
    n_rows = weights.shape[1]
    n_basis = basis.shape[1]
    gradient = np.empty(capacity)
    l1 = np.empty(capacity)
    l2 = np.empty(capacity)
    old = np.empty(capacity)
    turn = np.empty(n_basis)
    cross = np.empty((n_basis, capacity))
    projected = np.empty((n_basis, capacity))
    curvature = np.empty(n_rows)
    model = gram[0]
    for b in problems:
        m = size[b]
        w = weights[b]
        psi = residual[b]
        gradient = gradients[b]
        _penalties(m, alpha[b], l1_ratio, order_one[b], order_two[b], l1, l2)
        _copy(offset, predictor[b], n_rows)
        for q in range(n_basis):
            add_scaled(predictor[b], load[b, q], basis[b, q])
        for k in range(m):
            if coef[b, k] != 0.0:
                add_scaled(predictor[b], coef[b, k], pool[slots[b, k]])
        last = np.inf
        stalled = 0
        while True:
            polish_basis(w, signs[b], basis[b], load[b], predictor[b], psi, curvature)
            for k in range(m):
                gradient[k] = weighted_dot(w, pool[slots[b, k]], psi)
            gap = _log_gap(w, signs[b], offset, predictor[b], psi, m, gradient, coef[b], l1, l2)
            stalled = 0 if gap < 0.9 * last else stalled + 1
            if gap <= target[b] or sweeps[b] >= budget or stalled > 10:
                break
            last = min(gap, last)
            _curved_gram(w, curvature, basis[b], pool, slots[b], m, model, cross, projected)
            squared_norm = 0.0
            for i in range(n_rows):
                squared_norm += w[i] * psi[i] * psi[i] / curvature[i]
            _copy(coef[b], old, m)
            sweeps[b] += descend(
                m, model, gradient, coef[b], l1, l2, squared_norm,
                max(0.01 * gap, 0.1 * target[b]), budget - sweeps[b],
            )  # fmt: skip
            for q in range(n_basis):
                turn[q] = 0.0
                for k in range(m):
                    turn[q] -= projected[q, k] * (coef[b, k] - old[k])
            if not _log_step(
                w, signs[b], basis[b], pool, slots[b], m, l1, l2, old, coef[b], load[b],
                predictor[b], turn,
            ):  # fmt: skip
                stalled += 5
