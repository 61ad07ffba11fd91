"""What all selectors share: validation, the outcome's loss, columns, seeds, support and claim.

A selector's `fit` has three steps. ``_prepare`` turns what the caller gave into a frozen
`FitInput`. The selector states its problems on that input, has the engine solve them, and decides
which units are selected. ``_conclude`` writes the attributes that all selectors have.
"""

from __future__ import annotations

import functools
import importlib.metadata
import warnings
from abc import abstractmethod
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, NoReturn, TypeVar

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from sklearn.base import BaseEstimator
from sklearn.feature_selection import SelectorMixin
from sklearn.utils import get_tags
from sklearn.utils.validation import check_array, check_is_fitted, validate_data

from sparsesel._sklearn_compat import HasMethods, StrOptions, configured_container
from sparsesel.claim import Claim
from sparsesel.engine import ENGINE_FORMAT, Problems
from sparsesel.selectors._columns import Columns, Table, resolve_columns
from sparsesel.tasks import TaskSettings, draw_seed, fingerprint

Selector = TypeVar("Selector", bound=type)

# Distinct whole numbers that could be quantities (a score, a count) or codes of classes.
_FEWEST_AMBIGUOUS, _MOST_AMBIGUOUS = 3, 10

_COMMON_PARAMETERS = """\
loss : {"auto", "squared_error", "log_loss"}, default="auto"
        Loss of the outcome, resolved once per fit on the whole of `y`. "auto": log loss for bool,
        text or categorical outcomes with exactly two classes and for numbers with exactly two
        values; squared error for other numbers, with a warning where 3 to 10 distinct whole
        numbers could be classes as well.
    covariates : str, int, slice, sequence, mask or callable, default=None
        Columns that are in every model without a penalty, are never counted as selected and are
        kept by `transform`. A column specification in scikit-learn's sense: names, positions, a
        slice, a boolean mask, or a callable that takes `X` and returns one of these.
    feature_groups : None, "correlation", array-like of shape (p,), dict or callable, default=None
        The unit of selection. None: every column for itself. "correlation": clusters of columns
        whose mean absolute correlation is at least 0.7, see
        :func:`~sparsesel.selectors.correlation_groups`. Otherwise one label per column, a dict
        from column name to label, or a callable that takes `X` and returns either; a column
        without a label, or with the label None, is a unit of its own.
    penalty_weights : array-like of shape (p,) or dict, default=None
        Factors of the penalty per column, positive, 1 where none is given; infinity leaves a
        column out.
    standardize : bool, default=True
        Whether the penalty acts on coefficients of columns in units of their own (weighted)
        standard deviation in each problem. X is neither scaled nor copied."""

_COMMON_RUN_PARAMETERS = """\
n_jobs : int, default=None
        Number of workers, as in scikit-learn. Results do not depend on it.
    random_state : int, RandomState, Generator or None, default=None
        Source of the seed, drawn once per fit. Pass an int for the same result every time.
    memory : str, path or joblib.Memory, default=None
        Where finished fits are kept, so that a stopped or repeated run computes only what is
        missing.
    verbose : int, default=0
        1 prints progress, 2 more of it."""

_COMMON_ATTRIBUTES = """\
selected_ : ndarray of shape (p,), bool
        The columns of the selected units: what `claim_` is about. `get_support()` is what
        `transform` keeps, the covariates too.
    units_ : dict of str to ndarray of shape (number of units,)
        The table per unit: "unit" (its name), "members" (the names of its columns), "selected"
        and the measures below. A data frame library takes it as it is.
    claim_ : Claim
        What is claimed of the selection, under which assumptions. Printed, a paragraph.
    loss_ : str
        "squared_error" or "log_loss".
    classes_ : ndarray of shape (2,)
        With log loss only: the two classes; coefficients are those of the second.
    seed_ : int
        The seed that the fit used.
    n_features_in_ : int
        Number of columns p.
    feature_names_in_ : ndarray of shape (p,), object
        Names of the columns, if the table came with names that are all str."""


def with_common_docs(selector: Selector) -> Selector:
    """Fill the parameters and attributes that all selectors share into a class's docstring.

    Parameters
    ----------
    selector : type
        Class whose docstring holds ``<common parameters>``, ``<run parameters>`` and
        ``<common attributes>``.

    Returns
    -------
    type
        The same class.
    """
    # Under `python -OO` there is no docstring to fill.
    for mark, text in (
        ("<common parameters>", _COMMON_PARAMETERS),
        ("<run parameters>", _COMMON_RUN_PARAMETERS),
        ("<common attributes>", _COMMON_ATTRIBUTES),
    ):
        if selector.__doc__:
            selector.__doc__ = selector.__doc__.replace(mark, text)
    return selector


@dataclass(frozen=True)
class FitInput:
    """What a fit works on, after validation.

    Attributes
    ----------
    X : ndarray or sparse of shape (n, p)
        The table: float64 or float32, dense, CSC or CSR.
    response : ndarray of shape (n,)
        The outcome as the engine reads it: numbers, or 0 and 1 with log loss.
    labels : ndarray of shape (n,)
        The outcome as it was given.
    sample_weight : ndarray of shape (n,) or None
        Weights of the rows, None if none were given.
    groups : ndarray of shape (n,) or None
        Group of every row, from 0, None if none were given.
    loss : str
        "squared_error" or "log_loss".
    classes : ndarray of shape (2,) or None
        The two classes with log loss.
    columns : Columns
        What every column is.
    seed : int
        Seed of everything random in this fit.
    """

    X: Any
    response: NDArray[np.float64]
    labels: NDArray[Any]
    sample_weight: NDArray[np.float64] | None
    groups: NDArray[np.int64] | None
    loss: str
    classes: NDArray[Any] | None
    columns: Columns
    seed: int

    @property
    def n_rows(self) -> int:
        """Number of rows n."""
        return self.X.shape[0]

    @property
    def weights(self) -> NDArray[np.float64]:
        """Weights (n,) of the rows, ones where none were given."""
        return np.ones(self.n_rows) if self.sample_weight is None else self.sample_weight

    @property
    def rows(self) -> NDArray[np.int64]:
        """Positions of the rows with positive weight; the others are as if they were absent."""
        return np.flatnonzero(self.weights > 0)


@dataclass(frozen=True)
class StatedProblem:
    """One problem that a fitted selector solved, restated so that another solver can check it.

    Attributes
    ----------
    label : str
        Which of the selector's problems it is.
    problems : Problems
        The statement, of a single problem.
    alpha : float
        Its penalty.
    coef : ndarray of shape (p,)
        The engine's coefficients.
    intercept : float
        The engine's intercept.
    design : ndarray or sparse of shape (n, p), optional
        The table of the problem, where it is not the one given to fit.
    """

    label: str
    problems: Problems
    alpha: float
    coef: NDArray[np.float64]
    intercept: float
    design: Any = None


class BaseSparseSelector(SelectorMixin, BaseEstimator):
    """Base of the selectors: a transformer without `predict`, with a stated claim.

    A subclass sets its parameters in `__init__`, adds them to `_parameter_constraints`, and
    writes `fit` between `_prepare` and `_conclude`, and `_stated_problems`.
    """

    # Groups reach fit through cross_val_score and GridSearchCV without a request of the user's:
    # rows of one group on both sides of a split would make every claim false.
    __metadata_request__fit: ClassVar[dict[str, bool]] = {"groups": True}

    _doc_link_module = "sparsesel"

    _parameter_constraints: ClassVar[dict[str, Any]] = {
        "loss": [StrOptions({"auto", "squared_error", "log_loss"})],
        "covariates": [None, str, int, np.integer, slice, "array-like", callable],
        "feature_groups": [None, StrOptions({"correlation"}), "array-like", dict, callable],
        "penalty_weights": [None, "array-like", dict],
        "standardize": ["boolean"],
        "n_jobs": [None, int, np.integer],
        "random_state": ["random_state", np.random.Generator],
        "memory": [None, str, HasMethods(["__fspath__"]), HasMethods(["cache"])],
        "verbose": ["verbose"],
    }

    @property
    def _doc_link_template(self) -> str:
        """Address of the class's documentation; empty, and so not shown, where there is none."""
        return _documentation_address()

    def __sklearn_tags__(self) -> Any:
        tags = super().__sklearn_tags__()
        tags.target_tags.required = True
        tags.input_tags.sparse = True
        tags.transformer_tags.preserves_dtype = ["float64", "float32"]
        return tags

    def _prepare(self, X: Any, y: Any, sample_weight: Any, groups: Any) -> FitInput:
        """Validate parameters and data of a fit, draw its seed, and set what is known already."""
        self._validate_params()
        seed = draw_seed(self.random_state)
        data = self._read(X, y, sample_weight, groups, seed, reset=True)
        self.seed_ = seed
        self.loss_ = data.loss
        if data.classes is not None:
            self.classes_ = data.classes
        elif hasattr(self, "classes_"):  # of an earlier fit, to another kind of outcome
            del self.classes_
        return data

    def _read(
        self, X: Any, y: Any, sample_weight: Any, groups: Any, seed: int, *, reset: bool
    ) -> FitInput:
        """Validated data with resolved loss and columns; writes to self only with `reset`."""
        original = X
        X, labels = _validated(self, X, y, reset=reset)
        weight = _validated_weights(sample_weight, X.shape[0])
        codes = None if groups is None else _group_codes(groups, X.shape[0])
        counted = slice(None) if weight is None else weight > 0
        loss, classes = resolve_loss(self.loss, labels[counted], categorical=_is_categorical(y))
        named = hasattr(self, "feature_names_in_")
        names = self.feature_names_in_ if named else _numbered_names(X.shape[1])
        if not get_tags(self).input_tags.allow_nan:
            _check_finite(X, names, type(self).__name__)
        columns = resolve_columns(
            Table(names, named, original, X, weight),
            covariates=self.covariates,
            feature_groups=self.feature_groups,
            penalty_weights=self.penalty_weights,
        )
        response = _response(labels, loss, classes)
        return FitInput(X, response, labels, weight, codes, loss, classes, columns, seed)

    def _settings(self, data: FitInput, label: str, *parts: Any) -> TaskSettings:
        """How tasks of this fit run; `parts` are what their results depend on beside the data."""
        name = None
        if self.memory is not None:
            name = fingerprint(
                type(self).__name__,
                (data.X, data.response, data.weights, data.groups, data.columns, data.seed),
                (data.loss, self.standardize, ENGINE_FORMAT, *parts),
            )
        return TaskSettings(
            n_jobs=self.n_jobs,
            memory=self.memory,
            verbose=int(self.verbose),
            label=f"{type(self).__name__}, {label}",
            fingerprint=name,
        )

    def _conclude(
        self,
        data: FitInput,
        selected: NDArray[np.bool_],
        measures: Mapping[str, NDArray[Any]],
        claim: Claim,
    ) -> None:
        """Write the attributes that all selectors have.

        Parameters
        ----------
        data : FitInput
            The input of the fit.
        selected : ndarray of shape (number of units,), bool
            The selected units.
        measures : mapping of str to ndarray of shape (number of units,)
            Further columns of `units_`.
        claim : Claim
            The claim.
        """
        columns = data.columns
        members = np.empty(columns.n_units, dtype=object)
        members[:] = [tuple(map(str, columns.names[unit])) for unit in columns.members()]
        self.units_ = {
            "unit": np.array(columns.unit_names, dtype=object),
            "members": members,
            "selected": selected,
            **measures,
        }
        self.selected_ = columns.over_columns(selected, False)
        self._support = self.selected_ | columns.covariates
        self.claim_ = claim

    @abstractmethod
    def _stated_problems(
        self, X: Any, y: Any, sample_weight: Any = None, groups: Any = None
    ) -> list[StatedProblem]:
        """Problems of the fit, rebuilt from `seed_` on the table that it was fitted to.

        Parameters
        ----------
        X, y, sample_weight, groups
            As given to fit.

        Returns
        -------
        list of StatedProblem
            The problems with the engine's answers.
        """

    def _get_support_mask(self) -> NDArray[np.bool_]:
        check_is_fitted(self)
        return self._support

    def transform(self, X: Any) -> Any:
        """Keep the selected columns and the covariates.

        Parameters
        ----------
        X : {array-like, sparse, dataframe} of shape (n, p)
            A table with the columns of the one given to fit.

        Returns
        -------
        {ndarray, sparse, dataframe} of shape (n, number of kept columns)
            The kept columns, values and dtypes untouched. Where none is kept, a table of n rows
            without columns, and a warning; `NullModelFallback` as the next step accepts it.
        """
        check_is_fitted(self)
        to_frame = configured_container(self) != "default"
        if to_frame and _is_polars(X):
            return self._transform_polars(X)
        X = validate_data(
            self,
            X,
            reset=False,
            dtype=None,
            accept_sparse=("csr", "csc"),
            ensure_all_finite=not get_tags(self).input_tags.allow_nan,
            skip_check_array=to_frame and hasattr(X, "iloc"),
        )
        return self._transform(X)

    def _transform_polars(self, X: Any) -> Any:
        """Keep columns of a polars frame as they are; an array of them all has one dtype only."""
        validate_data(self, X, reset=False, skip_check_array=True)
        support = self.get_support()
        if not support.any():
            # A frame that lost its last column may have lost its rows too; an array has not.
            return self._transform(np.broadcast_to(0.0, X.shape))
        kept = X.drop([name for name, keep in zip(X.columns, support, strict=True) if not keep])
        if configured_container(self) == "polars":
            return kept
        import pandas as pd

        arrays = {name: kept[name].to_numpy() for name in kept.columns}
        return pd.DataFrame(arrays, index=range(X.height))


@functools.cache
def _documentation_address() -> str:
    """Documentation address of the installed package, with a place for the estimator's name."""
    try:
        addresses = importlib.metadata.metadata("sparsesel").get_all("Project-URL") or []
    except importlib.metadata.PackageNotFoundError:
        return ""
    for entry in addresses:
        title, _, address = entry.partition(", ")
        if title.lower() == "documentation":
            return address + "#{estimator_name}"
    return ""


# ---------------------------------------------------------------------------------------------
# The table
# ---------------------------------------------------------------------------------------------


def _validated(selector: BaseSparseSelector, X: Any, y: Any, *, reset: bool) -> tuple[Any, Any]:
    """Table and outcome as arrays; scikit-learn's errors with what to do added."""
    try:
        return validate_data(
            selector,
            X,
            y,
            reset=reset,
            accept_sparse=("csc", "csr"),
            dtype=(np.float64, np.float32),
            # Checked below, column by column, so that the error can name the columns.
            ensure_all_finite=False,
            ensure_min_samples=2,
        )
    except (ValueError, TypeError) as error:
        advice = _advice(str(error), X)
        if not advice:
            raise
        raise type(error)(f"{error} {advice}") from error


def _advice(message: str, X: Any) -> str:
    """What to do about an error of scikit-learn's validation."""
    for sign, advice in {
        "0 feature(s)": "Give a table with at least one column.",
        "sample(s)": "Give a table with at least two rows: one row per sample, one column per "
        "feature.",
        "inconsistent numbers of samples": "Give one outcome per row of X.",
        "Input y contains": "The outcome must be known and finite for every row: leave out the "
        "rows without one.",
        "should be a 1d array": "Give one outcome per row, y of shape (n,); fit one selector per "
        "outcome.",
    }.items():
        if sign in message:
            return advice
    if "could not convert" in message or "argument must be a string" in message:
        return (
            f"Selectors need a table of numbers{_text_columns(X)}: encode text in an earlier step "
            "(OneHotEncoder in a ColumnTransformer) or drop those columns."
        )
    return ""


def _text_columns(X: Any) -> str:
    """Name the columns of a data frame that are not numbers, for an error message."""
    if not hasattr(X, "columns"):
        return ""
    text = [str(name) for name in X.columns if np.asarray(X[name]).dtype.kind not in "biuf"]
    more = f" and {len(text) - 3} more" if len(text) > 3 else ""
    return f"; not numbers: {', '.join(map(repr, text[:3]))}{more}"


def _check_finite(X: Any, names: NDArray[np.object_], selector: str) -> None:
    values = X.data if sparse.issparse(X) else X
    with np.errstate(over="ignore", invalid="ignore"):
        # One pass without temporaries; only where it fails are the columns looked at.
        if np.isfinite(np.sum(values, dtype=np.float64)):
            return
    kinds = {"NaN": np.isnan, "infinity (inf)": np.isinf}
    for kind, is_wrong in kinds.items():
        columns = _columns_with(X, is_wrong)
        if columns:
            row, first = columns[0]
            raise ValueError(
                f"X contains {kind} in {len(columns)} of {X.shape[1]} columns, the first in column "
                f"{names[first]!r}, row {row}. {selector} needs finite numbers. Impute or repair "
                "them in an earlier step of the Pipeline (SimpleImputer, say), so that this too "
                "happens inside every fold, or drop those columns."
            )


def _columns_with(X: Any, is_wrong: Callable[..., Any]) -> list[tuple[int, int]]:
    """First (row, column) of every column with a value that is wrong."""
    found = []
    for j in range(X.shape[1]):
        column = X[:, [j]].toarray().ravel() if sparse.issparse(X) else X[:, j]
        rows = np.flatnonzero(is_wrong(column))
        if rows.size:
            found.append((int(rows[0]), j))
    return found


def _numbered_names(n_columns: int) -> NDArray[np.object_]:
    return np.array([f"x{j}" for j in range(n_columns)], dtype=object)


def _is_polars(X: Any) -> bool:
    return type(X).__module__.partition(".")[0] == "polars" and hasattr(X, "get_columns")


# ---------------------------------------------------------------------------------------------
# Rows
# ---------------------------------------------------------------------------------------------


def _validated_weights(sample_weight: Any, n_rows: int) -> NDArray[np.float64] | None:
    """Weights as an array of its own, or None."""
    if sample_weight is None:
        return None
    weight = check_array(
        sample_weight,
        ensure_2d=False,
        dtype=np.float64,
        input_name="sample_weight",
        ensure_min_samples=0,
    )
    if weight.shape != (n_rows,):
        raise ValueError(
            f"sample_weight has shape {weight.shape}, but X has {n_rows} rows. Give one weight per "
            "row of X."
        )
    if (weight < 0).any():
        raise ValueError(
            f"sample_weight holds {int((weight < 0).sum())} negative values, the lowest "
            f"{weight.min():g}. Weights must be zero or positive; zero leaves a row out."
        )
    if not weight.any():
        raise ValueError(
            "sample_weight is zero for every row, which leaves nothing to fit. At least one weight "
            "must be positive; None weights all rows equally."
        )
    return weight


def _group_codes(groups: Any, n_rows: int) -> NDArray[np.int64]:
    """Groups of rows numbered from 0 by their first row."""
    values = np.asarray(groups)
    if values.shape != (n_rows,):
        raise ValueError(
            f"groups has shape {values.shape}, but X has {n_rows} rows. Give one label per row of "
            "X; labels of columns go to feature_groups."
        )
    numbers: dict[Any, int] = {}
    codes = np.empty(n_rows, dtype=np.int64)
    for i, label in enumerate(values.tolist()):
        if label is None or label != label:
            raise ValueError(
                f"groups has no label for row {i}. Every row must belong to a group: give rows on "
                "their own a label of their own, or leave them out."
            )
        codes[i] = numbers.setdefault(label, len(numbers))
    return codes


# ---------------------------------------------------------------------------------------------
# The outcome
# ---------------------------------------------------------------------------------------------


def _is_categorical(y: Any) -> bool:
    """Whether an outcome came as categories, which are labels even where they look like numbers."""
    kind = getattr(y, "dtype", None)
    return str(kind) == "category" or type(kind).__name__ in ("Categorical", "Enum")


def _holds_labels(y: NDArray[Any]) -> bool:
    """Whether values are bool or text. An array of objects that are all numbers holds numbers."""
    if y.dtype.kind in "iuf":
        return False
    if y.dtype.kind != "O":
        return True
    numbers = (int, float, np.integer, np.floating)
    return not all(isinstance(value, numbers) and not isinstance(value, bool) for value in y)


def _distinct(y: NDArray[Any]) -> NDArray[Any]:
    try:
        return np.unique(y)
    except TypeError as error:
        kinds = sorted({type(value).__name__ for value in y})
        raise ValueError(
            f"y mixes values of the types {', '.join(kinds)}. An outcome is all numbers, all bool "
            "or all text: convert it to one of these."
        ) from error


def resolve_loss(
    loss: str, y: NDArray[Any], *, categorical: bool = False
) -> tuple[str, NDArray[Any] | None]:
    """Loss of an outcome, and its classes with log loss.

    Parameters
    ----------
    loss : {"auto", "squared_error", "log_loss"}
        The parameter of the selector.
    y : ndarray of shape (n,)
        The outcome of all rows that count.
    categorical : bool, default=False
        Whether it came as categories.

    Returns
    -------
    loss : {"squared_error", "log_loss"}
        The loss.
    classes : ndarray of shape (2,) or None
        The classes with log loss, sorted.

    Raises
    ------
    ValueError
        If the outcome has the wrong number of classes, or is text and should be numbers.
    """
    labels = categorical or _holds_labels(y)
    distinct = _distinct(y)
    if loss == "auto":
        loss = "log_loss" if labels or len(distinct) == 2 else "squared_error"
        if loss == "squared_error":
            _warn_if_ambiguous(distinct)
    if loss == "log_loss":
        if len(distinct) != 2:
            _refuse_classes(distinct)
        return loss, distinct
    if labels and y.dtype.kind != "b":
        raise ValueError(
            f"y holds labels ({_listed(distinct)}) and loss is 'squared_error', which takes "
            "numbers. Use loss='log_loss' for two classes, or convert y to numbers."
        )
    return loss, None


def _warn_if_ambiguous(distinct: NDArray[Any]) -> None:
    if not _FEWEST_AMBIGUOUS <= len(distinct) <= _MOST_AMBIGUOUS:
        return
    if all(float(value).is_integer() for value in distinct):
        warnings.warn(
            f"y has {len(distinct)} distinct whole numbers ({_listed(distinct)}). loss='auto' "
            "reads them as quantities and uses the squared error; pass loss='squared_error' to say "
            "that this is meant. If they are codes of classes, choose two: select the rows of a "
            "pair of classes, or compare one with the rest by y == code, which gives the log loss.",
            UserWarning,
            stacklevel=6,
        )


def _refuse_classes(distinct: NDArray[Any]) -> NoReturn:
    if len(distinct) == 1:
        raise ValueError(
            f"y has 1 class only ({_listed(distinct)}). The log loss needs exactly two: give rows "
            "of both classes."
        )
    raise ValueError(
        f"y has {len(distinct)} classes ({_listed(distinct)}). The log loss needs exactly two: "
        "select the rows of a pair of classes, or compare one with the rest (y == label). Numbers "
        "that are quantities go with loss='squared_error'."
    )


def _listed(distinct: NDArray[Any]) -> str:
    shown = ", ".join(str(value) for value in distinct[:5])
    return shown if len(distinct) <= 5 else f"{shown}, ..."


def _response(labels: NDArray[Any], loss: str, classes: NDArray[Any] | None) -> NDArray[np.float64]:
    if classes is None:
        return labels.astype(np.float64)
    return (labels == classes[1]).astype(np.float64)


# ---------------------------------------------------------------------------------------------
# The claim
# ---------------------------------------------------------------------------------------------


def rows_detail(data: FitInput) -> str:
    """What is known about the independence of the rows, as the detail of an assumption on them.

    Parameters
    ----------
    data : FitInput
        The input of the fit.

    Returns
    -------
    str
        How many groups were given, or what to do if rows belong together.
    """
    if data.groups is None:
        return (
            "no groups were given; if rows belong together, by subject, lot or site, pass their "
            "labels as groups"
        )
    return f"{len(np.unique(data.groups[data.rows]))} groups were given and kept whole"


def covariate_notes(data: FitInput) -> tuple[str, ...]:
    """Notes of a claim on the columns that are outside the count.

    Parameters
    ----------
    data : FitInput
        The input of the fit.

    Returns
    -------
    tuple of str
        One sentence, or none without covariates.
    """
    names = [str(name) for name in data.columns.names[data.columns.covariates]]
    if not names:
        return ()
    listed = ", ".join(names[:5]) + (", ..." if len(names) > 5 else "")
    return (
        f"In every model without a penalty, and not counted as selected: {len(names)} "
        f"{'covariate' if len(names) == 1 else 'covariates'} ({listed}).",
    )
