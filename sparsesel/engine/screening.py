"""Which columns can matter: bounds from gradients already known.

The gradients G_k = X'W r_k of a few earlier residuals are kept.  For a new residual r and
any numbers a_k, with d = r - sum a_k r_k,

    | x_j'W r  -  sum_k a_k G_kj |  <=  ||x_j||_W  ||d||_W         (Cauchy-Schwarz),

so a column whose bound |sum a_k G_kj| + ||x_j||_W ||d||_W is under its penalty needs no
product with the table.  A lasso path is linear in the penalty as long as its support
stays, hence two or three earlier residuals predict the next one closely; the a_k are the
weighted least-squares coefficients of r on the r_k, and the bound holds whatever they are.
Under an intercept all residuals are orthogonal to the constant, and ||x_j||_W is the
column's weighted standard deviation.

Kept gradients are single precision; their rounding, and that of double precision in the
long sums, is added to the bound.  The columns left undecided are multiplied exactly.
"""

from __future__ import annotations

import numpy as np

from sparsesel.engine._jit import exact_kernel, kernel

# A unit in the last place of single precision; and the share of the limit given to double-precision sums over rows.
_SINGLE = 1.2e-7
_DOUBLE = 1e-10
# Lift of the normal equations: kept residuals are nearly parallel late in a path.
_RIDGE = 1e-14
# Columns looked at in one vectorised go before any of them is named.
_STRIP = 256


@kernel
def mix(weights, residual, kept, count):
    """Coefficients a (count,) of the residual on the kept ones, and ||d||_W.

    The norm carries the rounding of the kept gradients, |G_kj| <= ||x_j||_W ||r_k||_W.
    """
    size = weights.size
    coefficients = np.zeros(count)
    normal = np.zeros((count, count))
    diagonal = np.zeros(count)
    for k in range(count):
        for c in range(k + 1):
            total = 0.0
            for i in range(size):
                total += weights[i] * kept[k, i] * kept[c, i]
            normal[k, c] = total
        diagonal[k] = normal[k, k]
        total = 0.0
        for i in range(size):
            total += weights[i] * kept[k, i] * residual[i]
        coefficients[k] = total
    usable = _solve_in_place(normal, coefficients)
    if not usable:
        coefficients[:] = 0.0
        coefficients[0] = 1.0
    rest = 0.0
    for i in range(size):
        gap = residual[i]
        for k in range(count):
            gap -= coefficients[k] * kept[k, i]
        rest += weights[i] * gap * gap
    rounding = 0.0
    for k in range(count):
        rounding += abs(coefficients[k]) * np.sqrt(diagonal[k])
    return coefficients, np.sqrt(rest) + _SINGLE * rounding


@kernel
def _solve_in_place(normal, right):
    """Cholesky solve of a lifted normal matrix (lower triangle given); False if it fails."""
    count = right.size
    for a in range(count):
        for c in range(a + 1):
            value = normal[a, c]
            if a == c:
                value *= 1.0 + _RIDGE
            for q in range(c):
                value -= normal[a, q] * normal[c, q]
            if a == c:
                if not value > 1e-13 * normal[a, a]:
                    return False
                normal[a, a] = np.sqrt(value)
            else:
                normal[a, c] = value / normal[c, c]
    for a in range(count):
        for q in range(a):
            right[a] -= normal[a, q] * right[q]
        right[a] /= normal[a, a]
    for a in range(count - 1, -1, -1):
        for q in range(a + 1, count):
            right[a] -= normal[q, a] * right[q]
        right[a] /= normal[a, a]
    return True


@exact_kernel
def _predict(gradients, count, coefficients, start, stop, value):
    """|sum_k a_k G_kj| of a strip of columns."""
    # Slices, because an index that is a sum keeps the loop from being vectorised.
    row = gradients[0, start:stop]
    for c in range(row.size):
        value[c] = coefficients[0] * row[c]
    for k in range(1, count):
        row = gradients[k, start:stop]
        for c in range(row.size):
            value[c] += coefficients[k] * row[c]
    for c in range(row.size):
        value[c] = abs(value[c])


@exact_kernel
def undecided(gradients, count, coefficients, rest, norms, order_one, taken, limit, found):
    """Columns outside the working set whose bound does not stay under ``limit`` * l1.

    Writes them to ``found`` in column order, as many as it holds, and returns their number,
    or -1 if there are more.
    """
    total = 0
    value = np.empty(_STRIP)
    lowered = limit * (1.0 - _DOUBLE)
    for start in range(0, order_one.size, _STRIP):
        stop = min(start + _STRIP, order_one.size)
        _predict(gradients, count, coefficients, start, stop, value)
        norm, one, busy = norms[start:stop], order_one[start:stop], taken[start:stop]
        hits = 0
        for c in range(norm.size):
            hits += not (value[c] + rest * norm[c] <= lowered * one[c])
        if hits == 0:
            continue
        for c in range(norm.size):
            if value[c] + rest * norm[c] <= lowered * one[c] or busy[c] or one[c] == np.inf:
                continue
            if total == found.size:
                return -1
            found[total] = start + c
            total += 1
    return total


@exact_kernel
def promising(gradients, count, coefficients, order_one, taken, threshold, limit):
    """Columns whose predicted |g| exceeds threshold * l1: the ``limit`` largest by ratio."""
    found = np.empty(order_one.size, np.int64)
    ratios = np.empty(order_one.size)
    total = 0
    value = np.empty(_STRIP)
    for start in range(0, order_one.size, _STRIP):
        stop = min(start + _STRIP, order_one.size)
        _predict(gradients, count, coefficients, start, stop, value)
        one, busy = order_one[start:stop], taken[start:stop]
        hits = 0
        for c in range(one.size):
            hits += value[c] > threshold * one[c]
        if hits == 0:
            continue
        for c in range(one.size):
            if value[c] > threshold * one[c] and not busy[c]:
                found[total] = start + c
                ratios[total] = value[c] / one[c]
                total += 1
    return _largest(found[:total], ratios[:total], limit)


@exact_kernel
def violating(columns, gradient, order_one, limit_factor, limit):
    """Of the exactly known columns those over limit_factor * l1, the ``limit`` largest."""
    found = np.empty(columns.size, np.int64)
    ratios = np.empty(columns.size)
    total = 0
    for position in range(columns.size):
        j = columns[position]
        if not abs(gradient[position]) <= limit_factor * order_one[j]:
            found[total] = j
            ratios[total] = abs(gradient[position]) / order_one[j]
            total += 1
    return _largest(found[:total], ratios[:total], limit)


@exact_kernel
def _largest(found, ratios, limit):
    """The ``limit`` columns of largest ratio, in column order; a NaN counts as large."""
    if found.size <= limit:
        return found.copy()
    cut = np.partition(ratios, found.size - limit)[found.size - limit]
    kept = np.empty(limit, np.int64)
    total = 0
    for position in range(found.size):
        if not ratios[position] < cut and total < limit:
            kept[total] = found[position]
            total += 1
    return kept[:total]


@kernel
def dense_dots(table, weighted, columns, out):
    """Products of a row vector with some rows of ``table`` (p, n), in double."""
    for position in range(columns.size):
        j = columns[position]
        total = 0.0
        for i in range(weighted.size):
            total += weighted[i] * table[j, i]
        out[position] = total


@kernel
def sparse_dots(data, indices, indptr, weighted, columns, out):
    """The same for the columns of a CSC table."""
    for position in range(columns.size):
        j = columns[position]
        total = 0.0
        for place in range(indptr[j], indptr[j + 1]):
            total += data[place] * weighted[indices[place]]
        out[position] = total
