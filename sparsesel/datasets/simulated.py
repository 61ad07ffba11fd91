"""Simulated tables whose true features are known.

A table has k covariate columns z and p feature columns x. Row i of group g(i) is drawn as

    x_i = √(1 − c) · [ √(1 − h) · e_i + √h · u_g(i) ] + √c · A z_i ,     z_i ~ N(0, I) ,

with e_i and u_g independent draws from N(0, Σ), Σ a correlation matrix of one of the families
below. h is the share of each feature that rows of one group have in common; c is the share that
the covariates explain, where feature j follows covariate j mod k (A holds one 1 in each row).
Hence every column has variance 1, whatever c and h, and over all rows

    Cov(x) = (1 − c) Σ + c A A' ,     Cov(x, z) = √c A ,     Cov(z) = I .

The outcome depends on the m true features, the covariates and an effect of the row's group:

    η_i = x_i'β + γ Σ_l z_il + a_g(i) ,     a_g ~ N(0, τ²) ,

with y_i = η_i + σ ε_i (continuous), or P(y_i = 1) = 1/(1 + exp(−b0 − η_i)), b0 set so that the
expected share of ones over the drawn rows is the requested prevalence. Given the true features
and the covariates, the outcome is independent of every other column, so a selected column outside
`support` is false without further judgement.

No p × p matrix is formed on the way: the autoregressive family is a recursion along the columns,
the equicorrelated, block and factor families are products of a few shared normals. Rows are drawn
in blocks, in double, and rounded into the table, so that one seed gives the same table in every
dtype and order.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import toeplitz
from scipy.optimize import brentq
from scipy.signal import lfilter
from scipy.special import expit

if TYPE_CHECKING:
    import pandas

Sampler = Callable[[np.random.Generator, int], NDArray[np.float64]]

# Rows drawn at a time: bounds the double-precision work space at 64 × p, and is part of what a
# seed means.
ROW_BLOCK = 64
# A covariance of this many columns takes 3.2 GB; above it, the family is the usable description.
LARGEST_COVARIANCE = 20_000


def require(condition: bool, received: str, allowed: str, remedy: str) -> None:
    """Raise a ValueError that says what was received, what is allowed and what to do next."""
    if not condition:
        raise ValueError(f"{received}: {allowed}. {remedy}")


def spawn_generators(random_state: Any, count: int) -> list[np.random.Generator]:
    """Independent generators, so that one part of a table can change without moving the others.

    Parameters
    ----------
    random_state : None, int, SeedSequence, Generator or RandomState
        A RandomState or Generator advances by the call, as in scikit-learn.
    count : int
        Number of generators.

    Returns
    -------
    list of Generator
    """
    if isinstance(random_state, np.random.Generator):
        random_state = int(random_state.integers(2**31))
    elif isinstance(random_state, np.random.RandomState):
        random_state = int(random_state.randint(2**31))
    if not isinstance(random_state, np.random.SeedSequence):
        random_state = np.random.SeedSequence(random_state)
    children = np.random.SeedSequence(random_state.entropy, spawn_key=random_state.spawn_key)
    return [np.random.default_rng(child) for child in children.spawn(count)]


def solve_intercept(scores: NDArray[np.float64], prevalence: float) -> float:
    """Intercept b0 at which the mean of 1/(1 + exp(−b0 − scores)) equals `prevalence`."""
    reach = float(np.max(np.abs(scores))) + abs(np.log(prevalence / (1 - prevalence))) + 1.0
    return float(brentq(lambda b0: expit(b0 + scores).mean() - prevalence, -reach, reach))


def _require_share(name: str, value: float, *, least: float = 0.0) -> None:
    require(
        least <= value < 1,
        f"{name}={value!r}",
        f"a number in [{least:g}, 1) is allowed",
        "Choose a smaller one: at 1 the columns are copies of one another.",
    )


class Covariance(ABC):
    """A family of correlation matrices, one member for every number of columns."""

    @abstractmethod
    def sampler(self, n_features: int) -> Sampler:
        """Function (generator, n_rows) -> (n_rows, n_features) of independent rows of N(0, Σ)."""

    @abstractmethod
    def matrix(self, n_features: int) -> NDArray[np.float64]:
        """Σ itself, (n_features, n_features)."""


@dataclass(frozen=True)
class Independent(Covariance):
    """Σ = I."""

    def sampler(self, n_features: int) -> Sampler:
        """Rows of independent standard normals."""
        return lambda generator, n_rows: generator.standard_normal((n_rows, n_features))

    def matrix(self, n_features: int) -> NDArray[np.float64]:
        """The identity."""
        return np.eye(n_features)


@dataclass(frozen=True)
class Autoregressive(Covariance):
    """Σ_jk = ρ^|j−k|: each column depends on the one before it.

    Parameters
    ----------
    rho : float in (-1, 1), default=0.5
        Correlation of neighbours.
    """

    rho: float = 0.5

    def __post_init__(self) -> None:
        """Check the range."""
        _require_share("abs(rho)", abs(self.rho))

    def sampler(self, n_features: int) -> Sampler:
        """Recursion x_j = ρ x_{j−1} + √(1 − ρ²) e_j, started at x_1 = e_1."""
        scale = np.sqrt(1 - self.rho**2)

        def draw(generator: np.random.Generator, n_rows: int) -> NDArray[np.float64]:
            noise = generator.standard_normal((n_rows, n_features))
            noise[:, 0] /= scale
            return lfilter([scale], [1.0, -self.rho], noise, axis=1)

        return draw

    def matrix(self, n_features: int) -> NDArray[np.float64]:
        """The Toeplitz matrix of powers of ρ."""
        return toeplitz(self.rho ** np.arange(n_features))


@dataclass(frozen=True)
class Blocks(Covariance):
    """Consecutive columns in blocks; correlation ρ inside a block, 0 between blocks.

    Parameters
    ----------
    size : int, default=10
        Columns of a block; the last block is shorter when `size` does not divide the number of
        columns.
    rho : float in [0, 1), default=0.8
        Correlation inside a block.
    """

    size: int = 10
    rho: float = 0.8

    def __post_init__(self) -> None:
        """Check the ranges."""
        _require_share("rho", self.rho)
        require(
            self.size >= 1, f"size={self.size!r}", "an integer >= 1 is allowed", "Use 1 or more."
        )

    def labels(self, n_features: int) -> NDArray[np.intp]:
        """Block of each column, (n_features,): ready to serve as feature groups."""
        return np.arange(n_features) // self.size

    def sampler(self, n_features: int) -> Sampler:
        """One shared normal per block and row, x = √ρ f_block + √(1 − ρ) e."""
        labels = self.labels(n_features)

        def draw(generator: np.random.Generator, n_rows: int) -> NDArray[np.float64]:
            shared = generator.standard_normal((n_rows, labels[-1] + 1))
            noise = generator.standard_normal((n_rows, n_features))
            return np.sqrt(self.rho) * shared[:, labels] + np.sqrt(1 - self.rho) * noise

        return draw

    def matrix(self, n_features: int) -> NDArray[np.float64]:
        """1 on the diagonal, ρ inside blocks, 0 elsewhere."""
        labels = self.labels(n_features)
        same_block = labels[:, None] == labels[None, :]
        return self.rho * same_block + (1 - self.rho) * np.eye(n_features)


@dataclass(frozen=True)
class Equicorrelated(Covariance):
    """Σ_jk = ρ for every pair: one block that holds all columns.

    Parameters
    ----------
    rho : float in [0, 1), default=0.3
        Correlation of every pair.
    """

    rho: float = 0.3

    def __post_init__(self) -> None:
        """Check the range."""
        _require_share("rho", self.rho)

    def sampler(self, n_features: int) -> Sampler:
        """As one block over all columns."""
        return Blocks(n_features, self.rho).sampler(n_features)

    def matrix(self, n_features: int) -> NDArray[np.float64]:
        """As one block over all columns."""
        return Blocks(n_features, self.rho).matrix(n_features)


@dataclass(frozen=True)
class FactorModel(Covariance):
    """Σ = L L' + (1 − κ) I: a few common factors explain the share κ of every column.

    Parameters
    ----------
    n_factors : int, default=5
        Number of common factors k.
    communality : float in [0, 1), default=0.5
        κ, the squared length of each row of the loadings L (p, k).
    loading_seed : int, default=0
        Seed of the loadings, whose rows point in uniformly random directions. It belongs to the
        family and not to the draw, so that repetitions of a simulation share one Σ.
    """

    n_factors: int = 5
    communality: float = 0.5
    loading_seed: int = 0

    def __post_init__(self) -> None:
        """Check the ranges."""
        _require_share("communality", self.communality)
        require(
            self.n_factors >= 1,
            f"n_factors={self.n_factors!r}",
            "an integer >= 1 is allowed",
            "Use Independent() for a table without common factors.",
        )

    def loadings(self, n_features: int) -> NDArray[np.float64]:
        """L, (n_features, n_factors), each row of squared length κ."""
        directions = np.random.default_rng(self.loading_seed).standard_normal(
            (n_features, self.n_factors)
        )
        lengths = np.linalg.norm(directions, axis=1, keepdims=True)
        return np.sqrt(self.communality) * directions / lengths

    def sampler(self, n_features: int) -> Sampler:
        """Rows F L' + √(1 − κ) E with F of k standard normals a row."""
        loadings = self.loadings(n_features)

        def draw(generator: np.random.Generator, n_rows: int) -> NDArray[np.float64]:
            factors = generator.standard_normal((n_rows, self.n_factors))
            noise = generator.standard_normal((n_rows, n_features))
            return factors @ loadings.T + np.sqrt(1 - self.communality) * noise

        return draw

    def matrix(self, n_features: int) -> NDArray[np.float64]:
        """L L' + (1 − κ) I."""
        loadings = self.loadings(n_features)
        return loadings @ loadings.T + (1 - self.communality) * np.eye(n_features)


COVARIANCE_FAMILIES: tuple[type[Covariance], ...] = (
    Independent,
    Autoregressive,
    Equicorrelated,
    Blocks,
    FactorModel,
)


@dataclass(frozen=True)
class TableDesign:
    """The columns of a simulated table: how many, how they are correlated, how they are stored.

    Parameters
    ----------
    n_samples : int, default=200
        Rows n.
    n_features : int, default=500
        Candidate features p, up to hundreds of thousands.
    covariance : Covariance, default=Autoregressive(0.5)
        Family of Σ.
    n_covariates : int, default=0
        Covariate columns k, placed before the features.
    confounding : float in [0, 1), default=0.0
        Share c of every feature's variance that a covariate explains; needs ``n_covariates >= 1``.
    n_groups : int or None, default=None
        Groups of rows, of equal size up to one row, in consecutive rows. None: all rows
        independent.
    group_share : float in [0, 1), default=0.0
        Share h of every feature's variance that rows of one group have in common; needs `n_groups`.
    dtype : {"float64", "float32"}, default="float64"
        Type of the table.
    order : {"F", "C"}, default="F"
        Memory order of the table.

    Raises
    ------
    ValueError
        If a number is out of its range or a share has nothing to refer to.
    """

    n_samples: int = 200
    n_features: int = 500
    covariance: Covariance = field(default_factory=Autoregressive)
    n_covariates: int = 0
    confounding: float = 0.0
    n_groups: int | None = None
    group_share: float = 0.0
    dtype: str = "float64"
    order: str = "F"

    def __post_init__(self) -> None:
        """Check the ranges and that each share has something to refer to."""
        shape = f"n_samples={self.n_samples!r}, n_features={self.n_features!r}"
        require(
            self.n_samples >= 2 and self.n_features >= 1,
            shape,
            "at least 2 rows and 1 feature are needed",
            "Ask for a larger table.",
        )
        _require_share("confounding", self.confounding)
        _require_share("group_share", self.group_share)
        require(
            self.confounding == 0 or self.n_covariates > 0,
            f"confounding={self.confounding!r} with n_covariates={self.n_covariates!r}",
            "confounding is a share explained by covariates",
            "Set n_covariates to 1 or more, or confounding to 0.",
        )
        require(
            self.group_share == 0 or self.n_groups is not None,
            f"group_share={self.group_share!r} with n_groups=None",
            "group_share is a share common to the rows of one group",
            "Set n_groups, or group_share to 0.",
        )
        require(
            self.n_groups is None or 1 <= self.n_groups <= self.n_samples,
            f"n_groups={self.n_groups!r} with n_samples={self.n_samples!r}",
            "between 1 and n_samples groups are allowed",
            "Lower n_groups, or use None for independent rows.",
        )
        require(
            self.dtype in ("float64", "float32") and self.order in ("F", "C"),
            f"dtype={self.dtype!r}, order={self.order!r}",
            "dtype 'float64' or 'float32' and order 'F' or 'C' are allowed",
            "Convert the finished table if you need another storage.",
        )


@dataclass(frozen=True)
class Signal:
    """How the outcome depends on the columns.

    Parameters
    ----------
    n_informative : int, default=10
        True features m. 0 is the global null.
    amplitude : float, default=1.0
        Absolute value of every nonzero coefficient; columns have unit variance.
    placement : {"random", "spread", "first"}, default="random"
        Which features are true: drawn at random, evenly spaced (at the first column of every ⌊p/m⌋,
        hence at most one in each block of up to that size), or the first m.
    signs : {"random", "alternating", "positive"}, default="random"
        Signs of the nonzero coefficients, in order of position.
    covariate_effect : float, default=1.0
        Coefficient γ of every covariate.
    group_effect : float >= 0, default=0.0
        Standard deviation τ of the groups' effects on the outcome; 0 where the design has no
        groups.

    Raises
    ------
    ValueError
        If a choice is unknown or a number out of its range.
    """

    n_informative: int = 10
    amplitude: float = 1.0
    placement: str = "random"
    signs: str = "random"
    covariate_effect: float = 1.0
    group_effect: float = 0.0

    def __post_init__(self) -> None:
        """Check choices and ranges."""
        require(
            self.placement in ("random", "spread", "first"),
            f"placement={self.placement!r}",
            "'random', 'spread' and 'first' are allowed",
            "For a support of your own, compute the outcome from X.",
        )
        require(
            self.signs in ("random", "alternating", "positive"),
            f"signs={self.signs!r}",
            "'random', 'alternating' and 'positive' are allowed",
            "For negative signs only, use 'positive' with a negative amplitude.",
        )
        require(
            self.n_informative >= 0 and self.group_effect >= 0,
            f"n_informative={self.n_informative!r}, group_effect={self.group_effect!r}",
            "numbers >= 0 are allowed",
            "Use 0 for none.",
        )


@dataclass(frozen=True, eq=False)
class SimulatedTable:
    """A simulated table and its truth.

    Attributes
    ----------
    X : ndarray of shape (n_samples, n_covariates + n_features)
        Covariates first, then features.
    y : ndarray of shape (n_samples,)
        float64 for a continuous outcome, int64 of 0 and 1 for two classes.
    coef : ndarray of shape (n_covariates + n_features,)
        Coefficients that made the outcome, covariates included.
    intercept : float
        Intercept that made the outcome.
    support : ndarray of bool of shape (n_covariates + n_features,)
        True features. Covariates are never in it: they are not candidates.
    feature_names : tuple of str
        "z0", "z1", ... for covariates, "x0", "x1", ... for features.
    covariates : tuple of str
        Names of the covariate columns.
    groups : ndarray of shape (n_samples,) or None
        Group of each row.
    design : TableDesign
        What the columns were drawn from.
    """

    X: NDArray[Any]
    y: NDArray[Any]
    coef: NDArray[np.float64]
    intercept: float
    support: NDArray[np.bool_]
    feature_names: tuple[str, ...]
    covariates: tuple[str, ...]
    groups: NDArray[np.intp] | None
    design: TableDesign

    @property
    def truth(self) -> tuple[str, ...]:
        """Names of the true features."""
        return tuple(self.feature_names[position] for position in np.flatnonzero(self.support))

    @property
    def covariance(self) -> NDArray[np.float64]:
        """Covariance of all columns, (k + p, k + p), computed when asked for."""
        return table_covariance(self.design)

    def frame(self) -> pandas.DataFrame:
        """X as a pandas DataFrame with `feature_names`."""
        import pandas

        return pandas.DataFrame(self.X, columns=list(self.feature_names))


def table_covariance(design: TableDesign) -> NDArray[np.float64]:
    """Covariance of all columns of a design, in closed form.

    Parameters
    ----------
    design : TableDesign

    Returns
    -------
    ndarray of shape (k + p, k + p)
        Covariates first.

    Raises
    ------
    ValueError
        Above 20,000 columns, where the matrix would not fit the memory of a usual machine.

    Examples
    --------
    >>> from sparsesel.datasets import Equicorrelated, TableDesign, table_covariance
    >>> table_covariance(TableDesign(n_features=3, covariance=Equicorrelated(0.25)))
    array([[1.  , 0.25, 0.25],
           [0.25, 1.  , 0.25],
           [0.25, 0.25, 1.  ]])
    """
    k, p, c = design.n_covariates, design.n_features, design.confounding
    require(
        k + p <= LARGEST_COVARIANCE,
        f"a covariance of {k + p} columns",
        f"up to {LARGEST_COVARIANCE} columns are formed as a matrix",
        "Use design.covariance, which describes it without the matrix.",
    )
    covariance = np.zeros((k + p, k + p))
    covariance[:k, :k] = np.eye(k)
    covariance[k:, k:] = (1 - c) * design.covariance.matrix(p)
    if k:
        follows = (np.arange(p)[:, None] % k == np.arange(k)[None, :]).astype(float)
        covariance[k:, k:] += c * follows @ follows.T
        covariance[k:, :k] = np.sqrt(c) * follows
        covariance[:k, k:] = covariance[k:, :k].T
    return covariance


def make_sparse_regression(
    design: TableDesign | None = None,
    signal: Signal | None = None,
    *,
    noise: float = 1.0,
    random_state: Any = None,
) -> SimulatedTable:
    """Simulate a table with a continuous outcome that depends on a few of its features.

    y_i = x_i'β + γ Σ_l z_il + a_g(i) + σ ε_i, see the head of this module.

    Parameters
    ----------
    design : TableDesign, optional
        The columns; TableDesign() when left out.
    signal : Signal, optional
        The dependence; Signal() when left out.
    noise : float >= 0, default=1.0
        Standard deviation σ of the noise.
    random_state : None, int, SeedSequence, Generator or RandomState, default=None
        An integer makes the table reproducible. Columns, positions, noise and group effects have
        streams of their own: the same seed with another `noise` has the same X.

    Returns
    -------
    SimulatedTable

    Raises
    ------
    ValueError
        If more true features are asked for than there are features, or the noise is negative.

    Examples
    --------
    >>> from sparsesel.datasets import Signal, TableDesign, make_sparse_regression
    >>> table = make_sparse_regression(
    ...     TableDesign(n_samples=50, n_features=100), Signal(3, placement="spread"), random_state=0
    ... )
    >>> table.X.shape, table.truth
    ((50, 100), ('x0', 'x33', 'x66'))
    """
    require(
        noise >= 0, f"noise={noise!r}", "a number >= 0 is allowed", "Use 0 for an exact outcome."
    )
    design, signal = design or TableDesign(), signal or Signal()
    streams = spawn_generators(random_state, 5)
    X, groups = _draw_columns(design, streams[0], streams[1])
    coef = _draw_coefficients(design, signal, streams[2])
    y = _linear_predictor(X, coef, groups, signal.group_effect, streams[3])
    y += noise * streams[4].standard_normal(design.n_samples)
    return _finish(design, X, y, coef, groups, intercept=0.0)


def make_sparse_classification(
    design: TableDesign | None = None,
    signal: Signal | None = None,
    *,
    prevalence: float = 0.5,
    random_state: Any = None,
) -> SimulatedTable:
    """Simulate a table with a two-class outcome from a logistic model in a few of its features.

    P(y_i = 1) = 1/(1 + exp(−b0 − η_i)), see the head of this module.

    Parameters
    ----------
    design : TableDesign, optional
        The columns; TableDesign() when left out.
    signal : Signal, optional
        The dependence; Signal() when left out.
    prevalence : float in (0, 1), default=0.5
        Expected share of class 1 over the drawn rows.
    random_state : None, int, SeedSequence, Generator or RandomState, default=None
        An integer makes the table reproducible.

    Returns
    -------
    SimulatedTable
        With y of 0 and 1, both present.

    Raises
    ------
    ValueError
        If `prevalence` is out of range, or the draw left one class empty.

    Examples
    --------
    >>> from sparsesel.datasets import Signal, TableDesign, make_sparse_classification
    >>> table = make_sparse_classification(
    ...     TableDesign(n_samples=400, n_features=50), Signal(5), prevalence=0.25, random_state=0
    ... )
    >>> sorted(set(table.y.tolist()))
    [0, 1]
    """
    require(
        0 < prevalence < 1,
        f"prevalence={prevalence!r}",
        "a share strictly between 0 and 1 is allowed",
        "Choose the share of class 1, e.g. 0.25.",
    )
    design, signal = design or TableDesign(), signal or Signal()
    streams = spawn_generators(random_state, 5)
    X, groups = _draw_columns(design, streams[0], streams[1])
    coef = _draw_coefficients(design, signal, streams[2])
    eta = _linear_predictor(X, coef, groups, signal.group_effect, streams[3])
    intercept = solve_intercept(eta, prevalence)
    y = (streams[4].random(design.n_samples) < expit(intercept + eta)).astype(np.int64)
    require(
        0 < y.sum() < y.size,
        f"a draw of {y.size} rows with class 1 in {y.sum()} of them",
        "both classes must be present",
        "Ask for more rows, a prevalence nearer 0.5, or another random_state.",
    )
    return _finish(design, X, y, coef, groups, intercept)


def _draw_columns(
    design: TableDesign, rows: np.random.Generator, shared: np.random.Generator
) -> tuple[NDArray[Any], NDArray[np.intp] | None]:
    """The table, block of rows by block of rows, and the group of each row."""
    n, k, p, c, h = (
        design.n_samples,
        design.n_covariates,
        design.n_features,
        design.confounding,
        design.group_share,
    )
    sampler = design.covariance.sampler(p)
    groups = None if design.n_groups is None else np.arange(n) * design.n_groups // n
    common = sampler(shared, design.n_groups) if h and design.n_groups is not None else None
    X = np.empty((n, k + p), dtype=design.dtype, order="F" if design.order == "F" else "C")
    for start in range(0, n, ROW_BLOCK):
        block = slice(start, min(start + ROW_BLOCK, n))
        features = sampler(rows, block.stop - block.start)
        if common is not None and groups is not None:
            features = np.sqrt(1 - h) * features + np.sqrt(h) * common[groups[block]]
        if k:
            covariates = rows.standard_normal((block.stop - block.start, k))
            features = np.sqrt(1 - c) * features + np.sqrt(c) * covariates[:, np.arange(p) % k]
            X[block, :k] = covariates
        X[block, k:] = features
    return X, groups


def _draw_coefficients(
    design: TableDesign, signal: Signal, generator: np.random.Generator
) -> NDArray[np.float64]:
    p, m = design.n_features, signal.n_informative
    require(
        m <= p,
        f"n_informative={m} with n_features={p}",
        "at most all features can be true",
        "Lower n_informative or raise n_features.",
    )
    positions = {
        "random": lambda: np.sort(generator.choice(p, size=m, replace=False)),
        "spread": lambda: np.arange(m) * (p // max(m, 1)),
        "first": lambda: np.arange(m),
    }[signal.placement]()
    signs = {
        "random": lambda: generator.choice([-1.0, 1.0], size=m),
        "alternating": lambda: (-1.0) ** np.arange(m),
        "positive": lambda: np.ones(m),
    }[signal.signs]()
    coef = np.zeros(design.n_covariates + p)
    coef[: design.n_covariates] = signal.covariate_effect
    coef[design.n_covariates + positions] = signal.amplitude * signs
    return coef


def _linear_predictor(
    X: NDArray[Any],
    coef: NDArray[np.float64],
    groups: NDArray[np.intp] | None,
    group_effect: float,
    generator: np.random.Generator,
) -> NDArray[np.float64]:
    used = np.flatnonzero(coef)
    eta = X[:, used].astype(np.float64) @ coef[used]
    if groups is not None and group_effect:
        eta += group_effect * generator.standard_normal(groups[-1] + 1)[groups]
    return eta


def _finish(
    design: TableDesign,
    X: NDArray[Any],
    y: NDArray[Any],
    coef: NDArray[np.float64],
    groups: NDArray[np.intp] | None,
    intercept: float,
) -> SimulatedTable:
    k = design.n_covariates
    covariates = tuple(f"z{position}" for position in range(k))
    features = tuple(f"x{position}" for position in range(design.n_features))
    support = coef != 0
    support[:k] = False
    return SimulatedTable(
        X, y, coef, intercept, support, covariates + features, covariates, groups, design
    )
