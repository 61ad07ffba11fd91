"""What the engine accepts; everything else is one error.

A message says what was received, what is allowed, and what to do next.

Magnitudes.  Let every column, the response and the offset have their largest absolute value
in [1e-100, 1e100], or be zero, and every positive finite penalty weight v, and v times the
l1_ratio, be at least 1e-100.  Then a gradient |x_j'W r| is at most about 1e200 and the
penalty that empties the model, |x_j'W r| / (rho v_j), at most about 1e300: nothing overflows
a double (1.8e308), and squares of the largest values do not vanish in its underflow
(2.2e-308).  Other units change the coefficients by their factor only, so a table beyond
these limits is refused, with the advice to change its units.

Tables are read once: the largest absolute values of the columns, which the engine keeps,
tell NaN, infinity and magnitudes at the same time.  Rows without weight are held to this
too: zero times NaN is not zero.
"""

from __future__ import annotations

import numbers
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse

from sparsesel.engine.design import DesignMatrix, FloatArray
from sparsesel.engine.losses import LOSSES
from sparsesel.engine.problems import Keep, Problems

_SMALLEST, _LARGEST = 1e-100, 1e100
# Above the largest penalty that empties a model within these, and twice it is still finite.
_LARGEST_PENALTY = 1e300
# Columns in which NaN are counted at once: a table may be larger than memory.
_COUNTED_AT_ONCE = 64
_NUMERIC_KINDS = "fiub"
_KINDS = {
    "U": "text",
    "S": "text",
    "T": "text",
    "c": "complex numbers",
    "M": "dates",
    "m": "durations",
    "V": "records",
}


# --- from what a caller has to arrays ---------------------------------------------------------


def as_table(X: Any) -> Any:
    """A table as a float array or sparse columns (n, p), not copied where it is one already.

    Parameters
    ----------
    X : array, nested list, data frame, or sparse matrix or array of shape (n, p)
        Numbers. float32 and float64 stay as they are; integers, booleans and other floats
        become float64.

    Returns
    -------
    ndarray or csc_array of shape (n, p)

    Raises
    ------
    ValueError
        If X is not a two-dimensional table of real numbers with rows and columns.
    """
    if hasattr(getattr(X, "sparse", None), "to_coo") and np.ndim(X) == 2:
        X = X.sparse.to_coo()  # a data frame all of whose columns are sparse
    table = X if sparse.issparse(X) else _as_array(X, "X")
    if table.ndim != 2:
        raise ValueError(
            f"X has shape {table.shape}; allowed is a table with two axes, rows and columns. "
            "Pass one row per sample; a single column is X.reshape(-1, 1), a single row "
            "X.reshape(1, -1)."
        )
    _refuse_empty(table.shape)
    return _as_floats(_as_columns(table) if sparse.issparse(table) else table, "X")


def as_vector(values: Any, name: str, length: int, axis: str = "row") -> FloatArray:
    """A float64 vector with one value per row (or column) of X.

    Parameters
    ----------
    values : array-like of shape (length,)
        Real numbers.
    name : str
        What messages call it.
    length : int
    axis : {"row", "column"}

    Returns
    -------
    ndarray of shape (length,)

    Raises
    ------
    ValueError
        If values are not real numbers, or have another shape.
    """
    array = _as_array(values, name)
    if array.ndim != 1:
        advice = f"np.full({length}, value)" if array.ndim == 0 else "one column of it"
        advice = f"{name}.ravel()" if array.ndim > 1 and array.size == length else advice
        raise ValueError(
            f"{name} has shape {array.shape}; allowed is one axis with {length} values, one per "
            f"{axis} of X. Pass {advice}."
        )
    if array.size != length:
        raise ValueError(
            f"{name} has {array.size} values and X has {length} {axis}s; they must match. Pass "
            f"one value of {name} per {axis} of X."
        )
    return _as_floats(array, name).astype(np.float64, copy=False)


def as_grid(alphas: int | ArrayLike, n_problems: int | None = None) -> int | FloatArray:
    """A count of grid points, or penalties (L,), or (B, L) where a bank of B asks.

    Parameters
    ----------
    alphas : int, or array-like of shape (L,) or (n_problems, L)
        A count from 1; or positive, finite, strictly decreasing penalties.
    n_problems : int or None
        None: one grid only.

    Returns
    -------
    int or ndarray

    Raises
    ------
    ValueError
        If alphas are neither.
    """
    shown = _shown(alphas)
    if isinstance(alphas, int | np.integer) and not isinstance(alphas, bool):
        if alphas < 1:
            raise ValueError(
                f"alphas={shown} asks for no grid point; allowed is a count of at least 1, or the "
                "penalties themselves. Pass a positive integer."
            )
        return int(alphas)
    neither = ValueError(
        f"alphas={shown} is neither an integer count nor a list of penalties; these are allowed. "
        "Pass a count such as 100, or a list, [0.5] for a single penalty."
    )
    try:
        array = _as_array(alphas, "alphas")
        values = _as_floats(array, "alphas").astype(np.float64, copy=False)
    except ValueError as error:
        raise neither from error
    if array.ndim == 0 or array.dtype.kind == "b":
        raise neither
    allowed = "(L,)" if n_problems is None else f"(L,) or ({n_problems}, L)"
    if values.ndim > 2 or (values.ndim == 2 and len(values) != n_problems):
        raise ValueError(
            f"alphas has shape {values.shape}; allowed is {allowed}. Pass one list of penalties"
            f"{'' if n_problems is None else ', or one of the same length for every problem'}."
        )
    # NaN compares false.
    decreasing = values.size > 0 and bool((np.diff(values) < 0.0).all())
    if not (decreasing and np.isfinite(values).all() and bool((values > 0.0).all())):
        raise ValueError(
            f"alphas={shown} is not a list of positive, finite, strictly decreasing penalties. "
            "Sort it from large to small and drop repeats and zeros; a column that should carry "
            "no penalty gets penalty_weights 0."
        )
    if values.max() > _LARGEST_PENALTY:
        raise ValueError(
            f"alphas begin at {values.max():.3g}; allowed is up to {_LARGEST_PENALTY:g}. Pass "
            "smaller penalties: these give empty models."
        )
    return values


def _as_array(values: Any, name: str) -> NDArray:
    """Whatever holds numbers, as an array of any shape; text and the like are refused."""
    if values is None or sparse.issparse(values):
        received = "None" if values is None else f"sparse ({type(values).__name__})"
        raise ValueError(
            f"{name} is {received}; allowed is an array of real numbers. Pass one"
            f"{', such as the result of .toarray().ravel()' if values is not None else ''}."
        )
    n_masked = np.ma.count_masked(values) if isinstance(values, np.ma.MaskedArray) else 0
    if n_masked:
        raise ValueError(
            f"{name} holds {n_masked} masked values; allowed are tables and vectors without "
            "missing values. Impute them or drop their rows, then pass the plain array."
        )
    try:
        array = np.asarray(values)
    except ValueError as error:
        raise ValueError(
            f"{name} cannot be made an array ({error}); allowed are real numbers in lists of "
            "equal length. Check that all rows have the same number of values."
        ) from error
    if array.dtype == object and hasattr(values, "isna"):
        array = np.where(np.asarray(values.isna()), np.nan, array)
    _refuse_kind(array, name)
    return array


def _refuse_kind(array: Any, name: str) -> None:
    kind = array.dtype.kind
    if kind == "O" and any(isinstance(value, str | bytes) for value in array.flat):
        kind = "U"
    if kind not in _NUMERIC_KINDS + "O":
        raise ValueError(
            f"{name} holds {_KINDS.get(kind, array.dtype)}; allowed are real numbers. Turn "
            "them into real numbers first, or leave them out."
        )


def _as_floats(array: Any, name: str) -> Any:
    """Single and double precision as they are, other numbers as double."""
    if array.dtype in (np.float64, np.float32):
        return array
    try:
        with np.errstate(over="ignore"):
            return array.astype(np.float64)
    except (TypeError, ValueError, OverflowError) as error:
        raise ValueError(
            f"{name} holds objects that are not numbers ({error}); allowed are real numbers. "
            "Turn them into real numbers first; impute missing values or drop their rows."
        ) from error


def _as_columns(table: Any) -> sparse.csc_array:
    """Compressed sparse columns whose indices are safe to follow."""
    if table.dtype.kind not in _NUMERIC_KINDS:
        raise ValueError(
            f"X is sparse and holds {_KINDS.get(table.dtype.kind, 'objects')}; allowed are real "
            "numbers. Turn them into real numbers first, or leave them out."
        )
    try:
        if table.format in ("csr", "csc"):
            # The check may trim a matrix, so it gets a view of its own.
            parts = (table.data, table.indices, table.indptr)
            type(table)(parts, shape=table.shape, copy=False).check_format(full_check=True)
        return sparse.csc_array(table)
    except ValueError as error:
        raise ValueError(
            f"X is sparse and its indices contradict its shape {table.shape} ({error}); every "
            "index must name a row and a column of the table. Build it again, with "
            "scipy.sparse.coo_array say."
        ) from error


def _shown(values: Any) -> str:
    text = " ".join(repr(values).split())
    return text if len(text) <= 80 else text[:77] + "..."


# --- values ---------------------------------------------------------------------------------


def check_settings(loss: Any, l1_ratio: Any, fit_intercept: Any, standardize: Any) -> None:
    """Refuse an unknown loss, an l1_ratio out of range, and switches that are not booleans."""
    if not (isinstance(loss, str) and loss in LOSSES):
        raise ValueError(
            f"loss={_shown(loss)} is not known; allowed are {sorted(LOSSES)}. Pass one of these."
        )
    if not (_is_real(l1_ratio) and 0.0 < l1_ratio <= 1.0):
        raise ValueError(
            f"l1_ratio={_shown(l1_ratio)} is not a number in (0, 1]. Pass 1 for the lasso or a "
            "value between 0 and 1 for the elastic net; for ridge regression use "
            "sklearn.linear_model.Ridge."
        )
    for name, value in (("fit_intercept", fit_intercept), ("standardize", standardize)):
        if not isinstance(value, bool | np.bool_):
            raise ValueError(
                f"{name}={_shown(value)} is not a boolean; allowed are True and False. Pass one "
                "of these."
            )


def check_limits(tol: Any, max_iter: Any, alpha_min_ratio: Any) -> None:
    """Refuse a tolerance, a limit of sweeps or an end of the grid that makes no sense."""
    if not (_is_real(tol) and 0.0 < tol < 1.0):
        raise ValueError(
            f"tol={_shown(tol)} is not a number between 0 and 1; it is a relative duality gap. "
            "Pass a value such as 1e-7."
        )
    if not (_is_count(max_iter) and max_iter >= 1):
        raise ValueError(
            f"max_iter={_shown(max_iter)} is not a positive integer. Pass how many coordinate "
            "sweeps one penalty may cost, such as 10000."
        )
    if not (_is_real(alpha_min_ratio) and 0.0 < alpha_min_ratio < 1.0):
        raise ValueError(
            f"alpha_min_ratio={_shown(alpha_min_ratio)} is not a number between 0 and 1; it is "
            "the last penalty of a grid relative to its first. Pass a value such as 1e-3."
        )


def check_bank(
    design: DesignMatrix, problems: Problems, alphas: int | ArrayLike, keep: Keep
) -> None:
    """Refuse a bank that has no answer, before any of it is solved.

    Parameters
    ----------
    design : DesignMatrix
        Its largest absolute values are read, which the engine needs anyway.
    problems : Problems
    alphas : int, array (L,) or array (B, L)
    keep : Keep

    Raises
    ------
    ValueError
        If the loss or l1_ratio is unknown, an array has another shape than the table and the
        other arrays ask for, a number is not finite or beyond the magnitudes of the module's
        head, a weight is negative, all weights of a problem are zero, penalties do not
        decrease, or what is to be kept does not exist.
    """
    if not isinstance(design, DesignMatrix):
        raise ValueError(
            f"design is of type {type(design).__name__}; allowed is a DesignMatrix. Pass "
            "as_design(X)."
        )
    _refuse_empty((design.n_rows, design.n_columns))
    check_settings(problems.loss, problems.l1_ratio, problems.fit_intercept, problems.standardize)
    _check_shapes(design, problems)
    _check_response(problems)
    if problems.sample_weight is not None:
        _check_weights(problems.sample_weight, "sample_weight")
    _check_penalty_weights(problems)
    as_grid(alphas, problems.count)
    _check_keep(design, problems, keep)
    _check_columns(design)


def _check_shapes(design: DesignMatrix, problems: Problems) -> None:
    n, p = design.n_rows, design.n_columns
    for name, length, may_be_many in (
        ("response", n, True),
        ("sample_weight", n, True),
        ("penalty_weights", p, True),
        ("offset", n, False),
    ):
        values = getattr(problems, name)
        if values is None and name != "response":
            continue
        shapes = f"({length},) or (B, {length})" if may_be_many else f"({length},)"
        _refuse_other_arrays(values, name, shapes)
        ranks = (1, 2) if may_be_many else (1,)
        if values.ndim not in ranks or values.shape[-1] != length or len(values) == 0:
            raise ValueError(
                f"{name} has shape {values.shape} and the table {n} rows and {p} columns; "
                f"allowed is shape {shapes}, B the number of problems. Pass one value per "
                f"{'column' if name == 'penalty_weights' else 'row'}."
            )


def _refuse_other_arrays(values: Any, name: str, shapes: str) -> None:
    if not (isinstance(values, np.ndarray) and values.dtype.kind in _NUMERIC_KINDS):
        received = (
            f"an array of {values.dtype}"
            if isinstance(values, np.ndarray)
            else f"of type {type(values).__name__}"
        )
        raise ValueError(
            f"{name} is {received}; allowed is a numeric array of shape {shapes}. Convert it with "
            "numpy.asarray."
        )


def _check_response(problems: Problems) -> None:
    _check_numbers(problems.response, "response y")
    if problems.offset is not None:
        _check_numbers(problems.offset, "offset")
    LOSSES[problems.loss].check_response(problems.response)


def _check_numbers(values: NDArray, name: str) -> None:
    """Finite, and in every problem of a magnitude that can be squared."""
    low, high = _ends(values)
    _refuse_not_finite(values, name, np.isfinite(low) & np.isfinite(high))
    largest = np.maximum(-low, high)
    bad = np.flatnonzero(_beyond(largest))
    if bad.size:
        raise ValueError(
            f"{name}{_of_problem(values, bad[0])} has the largest absolute value "
            f"{largest[bad[0]]:.3g}; allowed is 0, or {_SMALLEST:g} to {_LARGEST:g}, because "
            "products of larger and smaller numbers leave double precision. Change its units."
        )


def _check_weights(values: NDArray, name: str) -> None:
    """Finite, not negative, not all zero in any problem."""
    low, high = _ends(values)
    _refuse_not_finite(values, name, np.isfinite(low) & np.isfinite(high))
    bad = np.flatnonzero((low < 0.0) | (high == 0.0))
    if bad.size:
        row = np.atleast_2d(values)[bad[0]]
        raise ValueError(
            f"{name}{_of_problem(values, bad[0])} holds {np.count_nonzero(row < 0)} negative "
            f"values and sums to {row.sum():g}; weights must not be negative and must not all be "
            "zero. Drop the rows that should not count, or give them weight 0."
        )
    bad = np.flatnonzero(_beyond(high))
    if bad.size:
        raise ValueError(
            f"{name}{_of_problem(values, bad[0])} has the largest value {high[bad[0]]:.3g}; "
            f"allowed is {_SMALLEST:g} to {_LARGEST:g}. Divide the weights by their mean: only "
            "their ratios matter."
        )


def _check_penalty_weights(problems: Problems) -> None:
    values, smallest = problems.penalty_weights, 1.0
    if values is not None:
        low, _ = _ends(values)
        bad = np.flatnonzero(~(low >= 0.0))
        if bad.size:
            row = np.atleast_2d(values)[bad[0]]
            raise ValueError(
                f"penalty_weights{_of_problem(values, bad[0])} holds "
                f"{np.count_nonzero(~(row >= 0))} values that are negative or NaN, the first in "
                f"column {np.argmin(row >= 0)}; allowed is from 0 (unpenalised) to inf (left "
                "out). Pass None to penalise all columns alike."
            )
        values = np.asarray(values, dtype=np.float64)
        smallest = float(np.min(values, where=values > 0.0, initial=np.inf))
        largest = float(np.max(values, where=values < np.inf, initial=0.0))
        if smallest < _SMALLEST or largest > _LARGEST:
            raise ValueError(
                f"penalty_weights range from {smallest:.3g} to {largest:.3g} where positive and "
                f"finite; allowed are 0, {_SMALLEST:g} to {_LARGEST:g}, and inf. Pass 0 for a "
                "column without penalty, inf for one that is left out."
            )
    if problems.l1_ratio * smallest < _SMALLEST:
        raise ValueError(
            f"l1_ratio={problems.l1_ratio!r} times the smallest positive penalty weight "
            f"{smallest:.3g} is below {_SMALLEST:g}; the penalty that empties the model would "
            "leave double precision. Pass a larger l1_ratio; for ridge regression use "
            "sklearn.linear_model.Ridge."
        )


def _check_keep(design: DesignMatrix, problems: Problems, keep: Keep) -> None:
    if not (_is_count(keep.entries) and keep.entries >= 0):
        raise ValueError(
            f"entries={_shown(keep.entries)} is not a count; allowed are integers from 0. Pass "
            "how many columns may enter before a path stops, 0 for no order of entry."
        )
    if keep.entry_units is not None:
        _check_units(design.n_columns, problems, keep.entry_units)
    if keep.held_out is None:
        return
    shape = (problems.count, design.n_rows)
    _refuse_other_arrays(keep.held_out, "held_out", str(shape))
    if keep.held_out.shape != shape:
        raise ValueError(
            f"held_out has shape {keep.held_out.shape}; allowed is {shape}, one row per problem "
            "and one weight per row of the table. Pass such an array, or None."
        )
    _check_weights(keep.held_out, "held_out")


def _check_units(n_columns: int, problems: Problems, units: Any) -> None:
    _refuse_other_arrays(units, "entry_units", f"({n_columns},)")
    if units.shape != (n_columns,) or units.dtype.kind not in "iu":
        raise ValueError(
            f"entry_units has shape {units.shape} and type {units.dtype}; allowed are {n_columns} "
            "integers, the unit of every column. Pass None if every column is its own unit."
        )
    lowest, highest = int(units.min()), int(units.max())
    # A column that is never penalised never enters, so its unit may be negative: none.
    if lowest < 0:
        weights = 1.0 if problems.penalty_weights is None else problems.penalty_weights
        enters = np.atleast_2d(np.greater(weights, 0.0) & np.isfinite(weights)).any(axis=0)
        lowest = int(units.min(where=np.broadcast_to(enters, units.shape), initial=0))
    if lowest < 0 or highest >= n_columns:
        raise ValueError(
            f"entry_units of columns that can enter range from {lowest} to {highest}; allowed is "
            f"0 to {n_columns - 1}. Number the units from 0 without gaps."
        )


def _check_columns(design: DesignMatrix) -> None:
    """NaN, infinity and magnitudes of the table, from the largest value of every column."""
    with np.errstate(over="ignore", invalid="ignore"):
        largest = design.largest
    broken = np.flatnonzero(~np.isfinite(largest))
    if broken.size:
        n_nan = n_infinite = 0
        for part in np.array_split(broken, -(-broken.size // _COUNTED_AT_ONCE)):
            columns = design.gather(part, centred=False)
            n_nan += int(np.count_nonzero(np.isnan(columns)))
            n_infinite += int(np.count_nonzero(np.isinf(columns)))
        raise ValueError(
            f"X holds {n_nan} NaN and {n_infinite} infinite values in {broken.size} columns, the "
            f"first is column {broken[0]}; every value must be finite. Impute them, or drop their "
            "rows or columns."
        )
    bad = np.flatnonzero(_beyond(largest))
    if bad.size:
        raise ValueError(
            f"X has {bad.size} columns whose largest absolute value is out of range, the first is "
            f"column {bad[0]} with {largest[bad[0]]:.3g}; allowed is 0, or {_SMALLEST:g} to "
            f"{_LARGEST:g}, because products of larger and smaller numbers leave double "
            "precision. Change the units of these columns."
        )


def _is_real(value: Any) -> bool:
    return isinstance(value, numbers.Real) and not isinstance(value, bool)


def _is_count(value: Any) -> bool:
    return isinstance(value, int | np.integer) and not isinstance(value, bool)


def _refuse_empty(shape: tuple[int, ...]) -> None:
    if 0 in shape:
        raise ValueError(
            f"X has {shape[0]} rows and {shape[1]} columns; allowed is at least one of each. "
            "Check how the table was filtered."
        )


def _ends(values: NDArray) -> tuple[FloatArray, FloatArray]:
    """Smallest and largest value of every problem (B,), NaN where there is one."""
    rows = np.atleast_2d(values)
    return rows.min(axis=1).astype(np.float64), rows.max(axis=1).astype(np.float64)


def _beyond(largest: FloatArray) -> NDArray[np.bool_]:
    return (largest > _LARGEST) | ((largest > 0.0) & (largest < _SMALLEST))


def _of_problem(values: NDArray, problem: int) -> str:
    return f" of problem {problem}" if values.ndim == 2 else ""


def _refuse_not_finite(values: NDArray, name: str, fine: NDArray[np.bool_]) -> None:
    bad = np.flatnonzero(~fine)
    if bad.size:
        row = np.atleast_2d(values)[bad[0]]
        raise ValueError(
            f"{name}{_of_problem(values, bad[0])} holds {np.count_nonzero(np.isnan(row))} NaN and "
            f"{np.count_nonzero(np.isinf(row))} infinite values, the first in row "
            f"{np.argmin(np.isfinite(row))}; every value must be finite. Impute them, or drop "
            "their rows."
        )
