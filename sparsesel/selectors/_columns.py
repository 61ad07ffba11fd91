r"""What the columns of a table are: covariates, candidates, units of selection, penalty weights.

The constructor arguments of a selector speak of columns by name, position, slice, mask or rule.
This module turns them, once per fit, into arrays over the p columns of the table in hand.

**Groups by correlation.** Two columns that carry one signal split its votes, so the unit of
selection can be a cluster of columns. Clusters are found without looking at the outcome, by
average linkage on the distance :math:`d_{jk} = 1 - |r_{jk}|` (r: weighted Pearson correlation),
cut at distance :math:`1 - c`: two clusters stay apart when the mean absolute correlation between
them is below the cut c. Average linkage neither chains a slowly drifting spectrum into one
cluster, as single linkage does, nor breaks a block because of one pair that a small sample
happened to estimate low, as complete linkage does.

The p x p matrix is never formed. Two clusters whose mean distance is at most 1 - c hold at least
one pair whose distance is at most 1 - c, so every cluster lies inside one connected component of
the graph that joins the pairs with :math:`|r_{jk}| \ge c`. The components are found from blocks of
correlations that are thrown away, and the linkage then runs inside each component alone, which
gives the same clusters.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from numbers import Integral
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.cluster.hierarchy import fcluster, linkage
from scipy.sparse.csgraph import connected_components
from scipy.spatial.distance import squareform

# Columns of one block of correlations: wide enough for matrix products at full speed, while a
# block against 20,000 columns stays under 100 MB.
_BLOCK = 512

# Names of a cluster list this many of its columns, and count the others.
_MEMBERS_SHOWN = 3

_KEEP_NAMES = (
    "To keep names through earlier steps of a Pipeline, give those steps "
    "set_output(transform='pandas'), ColumnTransformer verbose_feature_names_out=False and "
    "encoders sparse_output=False"
)


@dataclass(frozen=True)
class Table:
    """The table as columns are resolved against it.

    Attributes
    ----------
    names : ndarray of shape (p,), object
        Column names; "x0", "x1", ... where the table has none.
    named : bool
        Whether the names came with the table.
    original : any
        The table as the caller gave it, for rules that are functions of it.
    validated : ndarray or sparse of shape (n, p)
        The table after validation.
    sample_weight : ndarray of shape (n,) or None
        Weights of the rows.
    """

    names: NDArray[np.object_]
    named: bool
    original: Any
    validated: Any
    sample_weight: NDArray[np.float64] | None

    @property
    def n_columns(self) -> int:
        """Number of columns p."""
        return len(self.names)


@dataclass(frozen=True)
class Columns:
    """What every column of the table is.

    Attributes
    ----------
    names : ndarray of shape (p,), object
        Column names.
    covariates : ndarray of shape (p,), bool
        Columns that are in every model, unpenalised, and never counted as selected.
    penalty_weights : ndarray of shape (p,)
        0 for covariates, infinite for columns left out, positive for candidates.
    unit_of : ndarray of shape (p,), int64
        Unit of selection that the column belongs to, from 0; -1 for covariates and for columns
        left out.
    unit_names : tuple of str
        Names of the units, in the order of their first column.
    grouped : bool
        Whether `feature_groups` was given.
    """

    names: NDArray[np.object_]
    covariates: NDArray[np.bool_]
    penalty_weights: NDArray[np.float64]
    unit_of: NDArray[np.int64]
    unit_names: tuple[str, ...]
    grouped: bool

    @property
    def n_columns(self) -> int:
        """Number of columns p of the table."""
        return len(self.names)

    @property
    def n_covariates(self) -> int:
        """Number of covariates."""
        return int(self.covariates.sum())

    @property
    def n_units(self) -> int:
        """Number of units of selection."""
        return len(self.unit_names)

    @property
    def unit(self) -> str:
        """What one unit is called."""
        return "feature group" if self.grouped else "feature"

    @property
    def candidates(self) -> NDArray[np.bool_]:
        """Mask (p,) of the columns that can be selected."""
        return self.unit_of >= 0

    def members(self) -> list[NDArray[np.int64]]:
        """Positions of the columns of every unit."""
        order = np.argsort(self.unit_of, kind="stable")
        order = order[self.unit_of[order] >= 0]
        bounds = np.cumsum(np.bincount(self.unit_of[order], minlength=self.n_units))[:-1]
        return np.split(order, bounds)

    def over_columns(self, per_unit: Any, elsewhere: Any) -> NDArray[Any]:
        """Repeat a value per unit over the unit's columns; `elsewhere` for all other columns."""
        values = np.asarray(per_unit)
        spread = np.full(self.n_columns, elsewhere, dtype=np.result_type(values, type(elsewhere)))
        spread[self.candidates] = values[self.unit_of[self.candidates]]
        return spread

    def any_over_units(self, per_column: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Whether any column of each unit is marked."""
        marked = np.zeros(self.n_units, dtype=bool)
        marked[self.unit_of[per_column & self.candidates]] = True
        return marked


def resolve_columns(
    table: Table, *, covariates: Any, feature_groups: Any, penalty_weights: Any
) -> Columns:
    """Resolve the three column arguments of a selector against a table.

    Parameters
    ----------
    table : Table
        The table.
    covariates : None, str, int, slice, sequence, mask or callable
        Column specification in scikit-learn's sense.
    feature_groups : None, "correlation", array-like of shape (p,), dict or callable
        Labels of the units.
    penalty_weights : None, array-like of shape (p,) or dict
        Penalty weights of the candidates.

    Returns
    -------
    Columns
        The columns, resolved.

    Raises
    ------
    ValueError
        If a name is unknown, a shape is wrong, a weight is not positive, or nothing is left to
        select from.
    """
    kept = column_mask(covariates, table, "covariates")
    weights = _resolve_weights(penalty_weights, table, kept)
    candidates = ~kept & np.isfinite(weights)
    if not candidates.any():
        raise ValueError(
            f"No column is left to select from: of {table.n_columns} columns {int(kept.sum())} are "
            f"covariates and {int(np.isinf(weights).sum())} have an infinite penalty weight. At "
            "least one must be a candidate: name fewer covariates or lower a penalty weight."
        )
    labels = _resolve_labels(feature_groups, table, candidates)
    unit_of, unit_names = _number_units(labels, table.names, candidates)
    return Columns(
        table.names,
        kept,
        np.where(kept, 0.0, weights),
        unit_of,
        unit_names,
        grouped=feature_groups is not None,
    )


def column_mask(spec: Any, table: Table, argument: str) -> NDArray[np.bool_]:
    """Mask of the columns that a specification in scikit-learn's sense names.

    Parameters
    ----------
    spec : None, str, int, slice, sequence, mask or callable
        Names, positions (negative ones count from the end), a slice of either (of names: both
        ends included), a boolean mask over all columns, or a callable that takes the table and
        returns one of these.
    table : Table
        The table.
    argument : str
        What the error messages call the specification.

    Returns
    -------
    ndarray of shape (p,), bool
        True where named.

    Raises
    ------
    ValueError
        If a name or position does not exist or the specification is of another kind.
    """
    if callable(spec):
        return column_mask(spec(table.original), table, argument)
    mask = np.zeros(table.n_columns, dtype=bool)
    if spec is None:
        return mask
    if isinstance(spec, slice):
        mask[_positional_slice(spec, table, argument)] = True
        return mask
    keys = [spec] if isinstance(spec, (str, Integral)) else list(spec)
    if keys and all(isinstance(key, (bool, np.bool_)) for key in keys):
        return _checked_mask(keys, table, argument)
    for key in keys:
        mask[_position(key, table, argument)] = True
    return mask


def _checked_mask(keys: Sequence[Any], table: Table, argument: str) -> NDArray[np.bool_]:
    if len(keys) != table.n_columns:
        raise ValueError(
            f"{argument} is a mask of length {len(keys)}, but the table has {table.n_columns} "
            "columns. Give one True or False per column, or names or positions instead."
        )
    return np.asarray(keys, dtype=bool)


def _positional_slice(spec: slice, table: Table, argument: str) -> slice:
    """The slice over positions; ends that are names are both included, as in scikit-learn."""
    if not any(isinstance(end, str) for end in (spec.start, spec.stop)):
        return spec
    start = None if spec.start is None else _position(spec.start, table, argument)
    stop = None if spec.stop is None else _position(spec.stop, table, argument) + 1
    return slice(start, stop, spec.step)


def _position(key: Any, table: Table, argument: str) -> int:
    if isinstance(key, str):
        return _position_of_name(key, table, argument)
    if isinstance(key, Integral) and not isinstance(key, (bool, np.bool_)):
        position = int(key)
        if -table.n_columns <= position < table.n_columns:
            return position % table.n_columns
        raise ValueError(
            f"{argument} names position {position}, but the table has {table.n_columns} columns. "
            f"Positions from {-table.n_columns} to {table.n_columns - 1} exist."
        )
    raise ValueError(
        f"{argument} holds {key!r}, of type {type(key).__name__}. Columns are named by str, by "
        "int position, by a slice, by a boolean mask over all columns, or by a callable that "
        "takes the table; convert the entry to one of these."
    )


def _position_of_name(name: str, table: Table, argument: str) -> int:
    found = np.flatnonzero(table.names == name) if table.named else np.empty(0, dtype=np.int64)
    if len(found) == 1:
        return int(found[0])
    if len(found) > 1:
        raise ValueError(
            f"{argument} names {name!r}, but {len(found)} columns have that name (positions "
            f"{', '.join(map(str, found[:5]))}). Names must be unique: rename the columns, or give "
            "the position."
        )
    if not table.named:
        raise ValueError(
            f"{argument} names {name!r}, but the table came as "
            f"{type(table.original).__name__} without column names. Give positions, or a pandas or "
            f"polars table whose names are all str. {_KEEP_NAMES}."
        )
    close = _close_names(name, [str(known) for known in table.names])
    hint = f"close to it: {', '.join(map(repr, close))}" if close else "none is close to it"
    raise ValueError(
        f"{argument} names {name!r}, which is not among the {table.n_columns} columns of the "
        f"table; {hint}. Names must match feature_names_in_ exactly. {_KEEP_NAMES}."
    )


def _close_names(name: str, known: Sequence[str]) -> list[str]:
    """Up to three known names that contain the wanted one, whatever the case, or resemble it."""
    wanted = name.lower()
    containing = [other for other in known if wanted and wanted in other.lower()]
    by_lower = {other.lower(): other for other in known}
    alike = [by_lower[other] for other in difflib.get_close_matches(wanted, by_lower, n=3)]
    return list(dict.fromkeys([*alike, *containing]))[:3]


def _resolve_weights(
    weights: Any, table: Table, covariates: NDArray[np.bool_]
) -> NDArray[np.float64]:
    """Penalty weight of every column, 1 where none is given; those of covariates don't count."""
    if weights is None:
        return np.ones(table.n_columns)
    if isinstance(weights, Mapping):
        values = np.ones(table.n_columns)
        for key, weight in weights.items():
            values[_position(key, table, "penalty_weights")] = float(weight)
    else:
        values = np.array(weights, dtype=np.float64)
        if values.shape != (table.n_columns,):
            raise ValueError(
                f"penalty_weights has shape {values.shape}, but the table has {table.n_columns} "
                "columns. Give one weight per column, or a dict from column name to weight."
            )
    wrong = np.flatnonzero(~(values > 0) & ~covariates)
    if wrong.size:
        j = int(wrong[0])
        raise ValueError(
            f"penalty_weights holds {values[j]} for column {table.names[j]!r}. Weights must be "
            "positive; infinity leaves a column out. To keep a column in every model without a "
            "penalty, name it in covariates."
        )
    return values


def _resolve_labels(groups: Any, table: Table, candidates: NDArray[np.bool_]) -> list[Any]:
    """One label per column; None where a column is a unit of its own."""
    if groups is None:
        return [None] * table.n_columns
    if isinstance(groups, str):
        return _correlation_labels(table, candidates)
    if callable(groups):
        groups = groups(table.original)
    if isinstance(groups, Mapping):
        labels: list[Any] = [None] * table.n_columns
        for key, label in groups.items():
            labels[_position(key, table, "feature_groups")] = _plain_label(label)
        return labels
    values = np.asarray(groups, dtype=object)
    if values.shape != (table.n_columns,):
        raise ValueError(
            f"feature_groups gave labels of shape {values.shape}, but the table has "
            f"{table.n_columns} columns. Give one label per column (None: a unit of its own), or a "
            "dict from column name to label."
        )
    return [_plain_label(label) for label in values]


def _plain_label(label: Any) -> Any:
    """The label as a hashable; missing ones become None."""
    if label is None or label != label:  # NaN is the only label unequal to itself
        return None
    try:
        hash(label)
    except TypeError:
        raise ValueError(
            f"feature_groups holds the label {label!r} of type {type(label).__name__}. Labels must "
            "be hashable: give str or int labels."
        ) from None
    return label


def _number_units(
    labels: Sequence[Any], names: NDArray[np.object_], candidates: NDArray[np.bool_]
) -> tuple[NDArray[np.int64], tuple[str, ...]]:
    """Units numbered by their first candidate column, with names that tell them apart."""
    unit_of = np.full(len(names), -1, dtype=np.int64)
    numbers: dict[Any, int] = {}
    for j in np.flatnonzero(candidates):
        key = ("column", int(j)) if labels[int(j)] is None else ("label", labels[int(j)])
        unit_of[j] = numbers.setdefault(key, len(numbers))
    own = {str(names[key]) for kind, key in numbers if kind == "column"}
    titles = []
    for kind, key in numbers:
        title = str(names[key]) if kind == "column" else str(key)
        titles.append(f"{title} (group)" if kind == "label" and title in own else title)
    return unit_of, tuple(titles)


class _Cluster(NamedTuple):
    """Label of a cluster: told apart by its first column, since names may repeat."""

    first: int
    title: str

    def __str__(self) -> str:
        return self.title


def _correlation_labels(table: Table, candidates: NDArray[np.bool_]) -> list[Any]:
    """Clusters of correlated candidates."""
    positions = np.flatnonzero(candidates)
    clusters = correlation_groups(
        table.validated, sample_weight=table.sample_weight, columns=positions
    )
    labels: list[Any] = [None] * table.n_columns
    for cluster in np.flatnonzero(np.bincount(clusters) > 1):
        members = positions[clusters == cluster]
        shown = " + ".join(str(name) for name in table.names[members[:_MEMBERS_SHOWN]])
        hidden = len(members) - _MEMBERS_SHOWN
        title = f"{shown} + {hidden} more" if hidden > 0 else shown
        for j in members:
            labels[j] = _Cluster(int(members[0]), title)
    return labels


def correlation_groups(
    X: Any, cut: float = 0.7, *, sample_weight: Any = None, columns: Any = None
) -> NDArray[np.int64]:
    r"""Clusters of columns by average linkage on one minus the absolute correlation.

    Two clusters are joined while the mean absolute correlation between their columns is at least
    `cut`. The outcome is not looked at. `feature_groups="correlation"` of the selectors calls
    this with its defaults; ``feature_groups=functools.partial(correlation_groups, cut=0.9)`` has
    another cut.

    Parameters
    ----------
    X : {array-like, sparse, dataframe} of shape (n, p)
        The table; finite numbers.
    cut : float in (0, 1], default=0.7
        Mean absolute correlation at which two clusters are still joined.
    sample_weight : array-like of shape (n,), optional
        Weights of the rows in the correlations. Equal by default.
    columns : array-like of int, optional
        Positions of the columns to cluster. All by default.

    Returns
    -------
    ndarray of shape (p,) or (number of `columns`,), int64
        Cluster of every column, numbered from 0 by the first column of each. A column that is
        constant is a cluster of its own.

    Raises
    ------
    ValueError
        If `cut` is outside (0, 1].

    Notes
    -----
    Time grows with n p²; memory with p times the width of a block of 512 columns, and with the
    square of the largest set of columns that is connected at the cut.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.selectors import correlation_groups
    >>> a, b = np.random.default_rng(0).standard_normal((2, 100))
    >>> correlation_groups(np.column_stack([a, b, -a, a + 0.3 * b]))
    array([0, 1, 0, 0])
    """
    if not 0.0 < cut <= 1.0:
        raise ValueError(
            f"cut is {cut!r}. It is a mean absolute correlation, above 0 and at most 1; 0.7 is the "
            "default."
        )
    X = X.tocsc() if sparse.issparse(X) else np.asarray(X)
    columns = np.arange(X.shape[1]) if columns is None else np.asarray(columns)
    weight = np.ones(X.shape[0]) if sample_weight is None else np.asarray(sample_weight, float)
    weight = weight / weight.sum()
    component = _components(X, columns, weight, cut)
    labels = np.empty(len(columns), dtype=np.int64)
    n_labels = 0
    for members in _by_label(component):
        clusters = _average_linkage(_standardized(X, columns[members], weight), cut)
        labels[members] = n_labels + clusters
        n_labels += clusters.max() + 1
    return _renumber(labels)


def _standardized(X: Any, columns: NDArray[Any], weight: NDArray[Any]) -> NDArray[np.float64]:
    """Columns centred, times the root of the weights, scaled to length 1; constant ones to 0."""
    block = X[:, columns]
    block = (block.toarray() if sparse.issparse(block) else block).astype(np.float64)
    largest = np.abs(block).max(axis=0, initial=0.0)
    block -= weight @ block
    block *= np.sqrt(weight)[:, None]
    length = np.sqrt(np.einsum("ij,ij->j", block, block))
    rounding = 1e-5 if X.dtype == np.float32 else 1e-10
    varies = length > rounding * largest
    return block * np.where(varies, 1.0 / np.where(varies, length, 1.0), 0.0)


def _components(
    X: Any, columns: NDArray[Any], weight: NDArray[Any], cut: float
) -> NDArray[np.int64]:
    """Connected components of the graph of pairs with |r| >= cut, block by block."""
    n = len(columns)
    component = np.arange(n)
    # Rounding must not lose an edge whose correlation is exactly the cut, as between copies.
    reached = cut * (1.0 - 1e-9)
    for first in _blocks(n):
        left = _standardized(X, columns[first], weight)
        edges = [np.stack([np.arange(n), component])]
        for second in _blocks(n):
            if second.start < first.start:
                continue
            right = left if second == first else _standardized(X, columns[second], weight)
            i, j = np.nonzero(np.abs(left.T @ right) >= reached)
            edges.append(np.stack([i + first.start, j + second.start]))
        i, j = np.concatenate(edges, axis=1)
        graph = sparse.coo_array((np.ones(len(i), dtype=np.int8), (i, j)), shape=(n, n))
        component = connected_components(graph, directed=False)[1]
        component = _first_member(component)
    return component


def _blocks(n: int) -> Iterator[slice]:
    return (slice(start, min(start + _BLOCK, n)) for start in range(0, n, _BLOCK))


def _first_member(labels: NDArray[Any]) -> NDArray[np.int64]:
    """Every label replaced by the position of its first holder, so that it is a graph edge."""
    _, first, inverse = np.unique(labels, return_index=True, return_inverse=True)
    return first[inverse]


def _renumber(labels: NDArray[Any]) -> NDArray[np.int64]:
    """Labels from 0 in the order of their first holder."""
    return np.unique(_first_member(labels), return_inverse=True)[1].astype(np.int64)


def _by_label(labels: NDArray[Any]) -> Iterable[NDArray[np.int64]]:
    order = np.argsort(labels, kind="stable")
    _, starts = np.unique(labels[order], return_index=True)
    return np.split(order, starts[1:])


def _average_linkage(block: NDArray[np.float64], cut: float) -> NDArray[np.int64]:
    """Clusters, from 0, of one connected component given its standardised columns."""
    if block.shape[1] == 1:
        return np.zeros(1, dtype=np.int64)
    distance = np.clip(1.0 - np.abs(block.T @ block), 0.0, 1.0)
    np.fill_diagonal(distance, 0.0)
    tree = linkage(squareform(distance, checks=False), method="average")
    height = 1.0 - cut + 1e-9
    return fcluster(tree, height, criterion="distance").astype(np.int64) - 1
