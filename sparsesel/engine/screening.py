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

What is kept is not G_kj but the cosine G_kj / (||x_j||_W ||r_k||_W), in single precision:
it can neither overflow nor vanish, whatever the units.  Its rounding, and that of double
precision in the long sums, is added to the bound.  The columns left undecided are
multiplied exactly.
"""

from __future__ import annotations

import numpy as np

from sparsesel.engine._jit import exact_kernel, kernel

# A unit in the last place of single precision; and the share of the limit given to
# double-precision sums over rows.
_SINGLE = 1.2e-7
_DOUBLE = 1e-10
# A unit in the last place of double precision.
_UNIT = 2.3e-16
# Lift of the normal equations: kept residuals are nearly parallel late in a path.
_RIDGE = 1e-14
# Columns looked at in one vectorised go before any of them is named.
_STRIP = 256


@kernel
def _mix(weights, residual, kept, known, newest, coefficients):
    """Write a_k ||r_k||_W, the coefficients on the kept cosines; returns ||d||_W.

    The norm carries the rounding of the cosines, which are at most one.
    """
    normal = np.empty((known, known))
    diagonal = np.empty(known)
    for k in range(known):
        for c in range(k + 1):
            total = 0.0
            for i in range(weights.size):
                total += weights[i] * kept[k, i] * kept[c, i]
            normal[k, c] = total
        diagonal[k] = normal[k, k]
        total = 0.0
        for i in range(weights.size):
            total += weights[i] * kept[k, i] * residual[i]
        coefficients[k] = total
    if not _solve_in_place(normal, coefficients):
        for k in range(known):
            coefficients[k] = 1.0 if k == newest else 0.0
    rest = 0.0
    for i in range(weights.size):
        gap = residual[i]
        for k in range(known):
            gap -= coefficients[k] * kept[k, i]
        rest += weights[i] * gap * gap
    rounding = 0.0
    for k in range(known):
        coefficients[k] *= np.sqrt(diagonal[k])
        rounding += abs(coefficients[k])
    return np.sqrt(rest) + _SINGLE * rounding


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
def _predict(cosines, coefficients, start, stop, value):
    """|sum_k a_k G_kj| / ||x_j||_W of a strip of columns."""
    # Slices, because an index that is a sum keeps the loop from being vectorised.
    row = cosines[0, start:stop]
    for c in range(row.size):
        value[c] = coefficients[0] * row[c]
    for k in range(1, coefficients.size):
        row = cosines[k, start:stop]
        for c in range(row.size):
            value[c] += coefficients[k] * row[c]
    for c in range(row.size):
        value[c] = abs(value[c])


@exact_kernel
def _undecided(cosines, coefficients, rest, norms, order_one, taken, limit, found):
    """Columns outside the working set whose bound does not stay under ``limit`` * l1."""
    total = 0
    value = np.empty(_STRIP)
    lowered = limit * (1.0 - _DOUBLE)
    for start in range(0, order_one.size, _STRIP):
        stop = min(start + _STRIP, order_one.size)
        _predict(cosines, coefficients, start, stop, value)
        norm, one, busy = norms[start:stop], order_one[start:stop], taken[start:stop]
        hits = 0
        for c in range(norm.size):
            hits += not ((value[c] + rest) * norm[c] <= lowered * one[c])
        if hits == 0:
            continue
        for c in range(norm.size):
            if (value[c] + rest) * norm[c] <= lowered * one[c] or busy[c] or one[c] == np.inf:
                continue
            if total == found.size:
                return -1
            found[total] = start + c
            total += 1
    return total


@exact_kernel
def undecided(
    problems, weights, residual, kept_residual, kept_cosine, pushed, norms, order_one, taken,
    limit, found, totals,
):  # fmt: skip
    """Columns of each named problem that kept gradients can't bound under limit[b] * l1.

    Row b of ``found`` receives them in column order and ``totals[b]`` their number, -1 if
    there are more than fit.
    """
    for b in problems:
        known = min(pushed[b], kept_residual.shape[1])
        mixing = np.empty(known)
        newest = (pushed[b] - 1) % kept_residual.shape[1]
        rest = _mix(weights[b], residual[b], kept_residual[b], known, newest, mixing)
        totals[b] = _undecided(
            kept_cosine[b], mixing, rest, norms[b], order_one[b], taken[b], limit[b], found[b]
        )


@exact_kernel
def _promising(cosines, coefficients, norms, order_one, taken, threshold, most, found):
    size = order_one.size
    named = np.empty(size, np.int64)
    ratios = np.empty(size)
    total = 0
    value = np.empty(_STRIP)
    for start in range(0, size, _STRIP):
        stop = min(start + _STRIP, size)
        _predict(cosines, coefficients, start, stop, value)
        norm, one, busy = norms[start:stop], order_one[start:stop], taken[start:stop]
        hits = 0
        for c in range(one.size):
            value[c] *= norm[c]
            hits += value[c] > threshold * one[c]
        if hits == 0:
            continue
        for c in range(one.size):
            if value[c] > threshold * one[c] and not busy[c]:
                named[total] = start + c
                ratios[total] = value[c] / one[c]
                total += 1
    return _largest(named[:total], ratios[:total], most, found)


@exact_kernel
def promising(
    problems, weights, residual, kept_residual, kept_cosine, pushed, norms, order_one, taken,
    threshold, most, found, totals,
):  # fmt: skip
    """Columns whose predicted |g| exceeds threshold[b] * l1: the most[b] largest by ratio."""
    for b in problems:
        known = min(pushed[b], kept_residual.shape[1])
        mixing = np.empty(known)
        newest = (pushed[b] - 1) % kept_residual.shape[1]
        _mix(weights[b], residual[b], kept_residual[b], known, newest, mixing)
        totals[b] = _promising(
            kept_cosine[b],
            mixing,
            norms[b],
            order_one[b],
            taken[b],
            threshold[b],
            most[b],
            found[b],
        )


@exact_kernel
def violating(problems, order_one, limit, most, found, totals, values):
    """Keep, of the exactly known columns, those over limit[b] * l1, the most[b] largest."""
    for b in problems:
        named = np.empty(totals[b], np.int64)
        ratios = np.empty(totals[b])
        count = 0
        for position in range(totals[b]):
            j = found[b, position]
            if not abs(values[b, position]) <= limit[b] * order_one[b, j]:
                named[count] = j
                ratios[count] = abs(values[b, position]) / order_one[b, j]
                count += 1
        totals[b] = _largest(named[:count], ratios[:count], most[b], found[b])


@exact_kernel
def _largest(named, ratios, most, found):
    """Write the columns of largest ratio to ``found``, in column order; a NaN is large."""
    most = min(most, found.size)
    cut = -np.inf if named.size <= most else _ranked(ratios.copy(), named.size - most)
    total = 0
    for position in range(named.size):
        if not ratios[position] < cut and total < most:
            found[total] = named[position]
            total += 1
    return total


@exact_kernel
def _ranked(values, rank):
    """The value of this rank from below, by selection (Hoare 1961); reorders ``values``.

    NumPy's own partition does the same and takes ten times as long to compile.
    """
    low, high = 0, values.size - 1
    while low < high:
        pivot = values[(low + high) // 2]
        left, right = low, high
        while left <= right:
            while values[left] < pivot:
                left += 1
            while values[right] > pivot:
                right -= 1
            if left <= right:
                values[left], values[right] = values[right], values[left]
                left += 1
                right -= 1
        if rank <= right:
            high = right
        elif rank >= left:
            low = left
        else:
            break
    return values[rank]


@kernel
def dense_dots(problems, table, weights, residual, found, totals, values):
    """Products of W r with the found rows of ``table`` (p, n), in double."""
    weighted = np.empty(weights.shape[1])
    for b in problems:
        for i in range(weighted.size):
            weighted[i] = weights[b, i] * residual[b, i]
        for position in range(totals[b]):
            column = table[found[b, position]]
            total = 0.0
            for i in range(weighted.size):
                total += weighted[i] * column[i]
            values[b, position] = total


@kernel
def sparse_dots(problems, data, indices, indptr, weights, residual, found, totals, values):
    """The same for the columns of a CSC table."""
    weighted = np.empty(weights.shape[1])
    for b in problems:
        for i in range(weighted.size):
            weighted[i] = weights[b, i] * residual[b, i]
        for position in range(totals[b]):
            j = found[b, position]
            total = 0.0
            for place in range(indptr[j], indptr[j + 1]):
                total += data[place] * weighted[indices[place]]
            values[b, position] = total


@exact_kernel
def sparse_extremes(data, indptr, centres, largest):
    """Sums of the stored entries of every CSC column, and their largest absolute value."""
    for j in range(centres.size):
        total = 0.0
        most = 0.0
        for place in range(indptr[j], indptr[j + 1]):
            total += data[place]
            # Once a NaN, always a NaN: no comparison with it is true.
            if not (abs(data[place]) <= most or most != most):
                most = abs(data[place])
        centres[j] = total
        largest[j] = most


@kernel
def sparse_moments(data, indices, indptr, weights, mean, scale):
    """Weighted means and standard deviations of every CSC column, two-pass about the mean.

    The entries that are not stored are zeros: they carry the rest of the weight, which sums
    to one.
    """
    for b in range(weights.shape[0]):
        for j in range(indptr.size - 1):
            total = 0.0
            stored = 0.0
            for place in range(indptr[j], indptr[j + 1]):
                weight = weights[b, indices[place]]
                total += weight * data[place]
                stored += weight
            rest = 1.0 - stored
            # What rounding alone leaves of a column stored in full is not weight.
            if rest <= _UNIT * (indptr[j + 1] - indptr[j]):
                rest = 0.0
            variance = rest * total * total
            for place in range(indptr[j], indptr[j + 1]):
                away = data[place] - total
                variance += weights[b, indices[place]] * away * away
            mean[b, j] = total
            scale[b, j] = np.sqrt(variance)
