"""Model-X knockoffs for features with any marginals and the dependence of Gaussian variables.

Each feature is a monotone function of a latent normal variable, and the latent variables are
jointly Gaussian given the covariates:

    X_j = h_j(T_j),      T | covariates  ~  N( B' [1, covariates], diag(scale) R diag(scale) ).

For a smooth h_j the latent variable is the normal score of the value (Liu, Lafferty and Wasserman
2009, "The nonparanormal", Journal of Machine Learning Research 10).  For a two-valued, count or
tied column it is known to lie in an interval only; it is drawn from its distribution given all
other columns of the row by Gibbs sampling (Hoff 2007, "Extending the rank likelihood for
semiparametric copula estimation", Annals of Applied Statistics 1), and B, scale and R are estimated
in turn with it.

Copies of the latent variables are those of `gaussian`; h_j of them are the copies of the features.
Where the model holds with R and h known, (X, X~) is exchangeable because (T, T~) is and h_j acts on
each feature and its copy alike.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr, ndtri

from sparsesel.knockoffs._marginals import Marginal, marginal
from sparsesel.knockoffs._model import (
    UNCHECKED,
    Assumptions,
    Conditioning,
    PairedTable,
    as_covariates,
    as_weights,
    condition,
    pair,
    regression,
)
from sparsesel.knockoffs.covariances import Covariance, Estimator, estimator, shrunk
from sparsesel.knockoffs.gaussian import (
    FittedGaussian,
    GaussianModel,
    fitted_gaussian,
    standardized,
)
from sparsesel.knockoffs.low_rank import LowRankCovariance, capacitance
from sparsesel.knockoffs.s_vectors import SVector


@dataclass(frozen=True)
class CopulaModel:
    """Features of any shape, continuous, two-valued or counts, with Gaussian dependence.

    Parameters
    ----------
    covariance : {"ledoit_wolf", "oas", "graphical_lasso", "factor"}, default="ledoit_wolf"
        How the covariance of the latent variables is estimated.
    s_vector : {"mvr", "max_entropy", "sdp", "equicorrelated"}, default="mvr"
        The rule for the distance of copies, on the scale of the latent variables.
    n_sweeps : int, default=20
        Gibbs sweeps over the latent variables of columns with ties, in the fit and in every draw.
    seed : int, default=0
        Seed of the sweeps of the fit; the draws have their own generator.

    Notes
    -----
    Copies of a column of few distinct values take these values only.  Columns that get no copy are
    those of `GaussianModel`.

    References
    ----------
    Liu, Lafferty and Wasserman 2009; Hoff 2007; Candes, Fan, Janson and Lv 2018.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import CopulaModel
    >>> generator = np.random.default_rng(0)
    >>> X = np.exp(generator.standard_normal((300, 3)))
    >>> X[:, 0] = X[:, 0] > 1
    >>> copies = CopulaModel().fit(X).sample(X, generator)
    >>> np.unique(copies[:, 0]).tolist(), bool((copies > -1).all())
    ([0.0, 1.0], True)
    """

    covariance: str = "ledoit_wolf"
    s_vector: str = "mvr"
    n_sweeps: int = 20
    seed: int = 0

    def fit(
        self,
        X: np.ndarray,
        *,
        covariates: np.ndarray | None = None,
        sample_weight: np.ndarray | None = None,
        feature_groups: np.ndarray | None = None,
    ) -> FittedCopula:
        """Fit the marginals and the latent Gaussian model.

        Parameters
        ----------
        X : ndarray of shape (n_rows, n_features)
            The features.
        covariates : ndarray of shape (n_rows, n_covariates), default=None
            Columns that are conditioned on.
        sample_weight : ndarray of shape (n_rows,), default=None
            Weights of the rows in the estimates.
        feature_groups : ndarray of shape (n_features,), default=None
            Labels of groups that are told from their copies as a whole.

        Returns
        -------
        FittedCopula
            The model, ready to draw copies.

        Raises
        ------
        ValueError
            If the name of the covariance is unknown, or the rows are too few for the covariates.
        """
        estimate = estimator(self.covariance)
        Z, weights = as_covariates(covariates, len(X)), as_weights(sample_weight, len(X))
        roles = condition(X, Z, weights, feature_groups)
        seen = weights > 0
        weights = weights[seen]
        columns = np.asarray(X[np.ix_(seen, roles.has_copy)], dtype=np.float64)
        marginals = tuple(marginal(column, weights) for column in columns.T)
        fixed = np.column_stack([Z, X[:, roles.repeated]])[seen]
        latent = _Latent.of(marginals, columns, fixed, np.random.default_rng(self.seed))
        # scores drawn under a shrunk covariance repeat its shrinkage, so the sweeps do without it
        # where the rows allow
        within = estimate if len(columns) < 2 * len(marginals) else _unshrunk
        for _ in range(self.n_sweeps if latent.tied.size else 0):
            latent.sweep(*_estimated(latent, weights, within))
        conditioning, covariance = _estimated(latent, weights, estimate)
        settings = GaussianModel(self.covariance, s_vector=self.s_vector)
        labels = None
        if feature_groups is not None:
            labels = np.asarray(feature_groups)[roles.has_copy]
        gaussian = fitted_gaussian(settings, conditioning, covariance, len(columns), labels)
        s = np.zeros(X.shape[1])
        s[roles.has_copy] = gaussian.s
        return FittedCopula(self, s, roles.has_copy, roles, marginals, covariance, gaussian)


@dataclass(frozen=True)
class FittedCopula:
    """A Gaussian copula of the features, ready to draw copies.

    Attributes
    ----------
    s : ndarray of shape (n_features,)
        1 - correlation of the latent variables of a feature and its copy; 0 without a copy.
    has_copy : ndarray of shape (n_features,), bool
        Which features have a copy of their own.
    """

    settings: CopulaModel
    s: np.ndarray
    has_copy: np.ndarray
    _roles: Conditioning
    _marginals: tuple[Marginal, ...]
    _covariance: Covariance
    _gaussian: FittedGaussian

    @property
    def solution(self) -> SVector:
        """The s-vector of the latent variables with its certified gap and shrinkage."""
        return self._gaussian.solution

    def sample(
        self,
        X: np.ndarray,
        generator: np.random.Generator,
        *,
        covariates: np.ndarray | None = None,
    ) -> np.ndarray:
        """One draw of copies.

        Parameters
        ----------
        X : ndarray of shape (n_rows, n_features)
            The rows to copy; not necessarily those of the fit.
        generator : numpy.random.Generator
            Source of the draw.
        covariates : ndarray of shape (n_rows, n_covariates), default=None
            The covariates of these rows.

        Returns
        -------
        ndarray of shape (n_rows, n_features)
            The copies, in single precision where X is.
        """
        copies = np.array(X, dtype=np.float32 if X.dtype == np.float32 else np.float64)
        if not self._marginals:
            return copies
        columns = np.asarray(X[:, self.has_copy], dtype=np.float64)
        fixed = np.column_stack([as_covariates(covariates, len(X)), X[:, self._roles.repeated]])
        latent = _Latent.of(self._marginals, columns, fixed, generator)
        for _ in range(self.settings.n_sweeps if latent.tied.size else 0):
            latent.sweep(self._gaussian.conditioning, self._covariance)
        drawn = self._gaussian.sample(latent.scores, generator, covariates=fixed)
        for place, column, shape in zip(
            np.flatnonzero(self.has_copy), drawn.T, self._marginals, strict=True
        ):
            copies[:, place] = shape.back(column)
        return copies

    def draw(
        self,
        X: np.ndarray,
        y: np.ndarray,
        generator: np.random.Generator,
        *,
        covariates: np.ndarray | None = None,
        sample_weight: np.ndarray | None = None,
    ) -> PairedTable:
        """Copies beside the rows as they are; parameters as for `sample`."""
        copies = self.sample(X, generator, covariates=covariates)
        return pair(X, copies, y, covariates, sample_weight)

    def assumptions(self) -> Assumptions:
        """What the model assumes: (statement, state, detail) each."""
        discrete = sum(shape.discrete for shape in self._marginals)
        tied = sum(len(shape.atoms) > 0 for shape in self._marginals) - discrete
        notes = [f"{discrete} features of few distinct values"] if discrete else []
        notes += [f"{tied} with a value that many rows share"] if tied else []
        copula = (
            "the features are monotone functions of jointly Gaussian variables, given the "
            "covariates",
            UNCHECKED,
            "; ".join([*notes, *self._roles.notes]),
        )
        return (copula, *self._gaussian.assumptions()[1:])


@dataclass(frozen=True)
class _Latent:
    """Latent scores of some rows; those of tied columns move with every sweep."""

    scores: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    tied: np.ndarray
    fixed: np.ndarray
    generator: np.random.Generator

    @classmethod
    def of(
        cls,
        marginals: tuple[Marginal, ...],
        columns: np.ndarray,
        fixed: np.ndarray,
        generator: np.random.Generator,
    ) -> _Latent:
        """Start inside the intervals, as if the columns were independent."""
        lower, upper = np.empty_like(columns), np.empty_like(columns)
        for j, shape in enumerate(marginals):
            lower[:, j], upper[:, j] = shape.bounds(columns[:, j])
        tied = np.flatnonzero((lower < upper).any(axis=0))
        scores = lower.copy()
        scores[:, tied] = _truncated(lower[:, tied], upper[:, tied], generator)
        return cls(scores, lower[:, tied], upper[:, tied], tied, fixed, generator)

    def sweep(self, conditioning: Conditioning, covariance: Covariance) -> None:
        """Draw the scores of each tied column given all others, in place."""
        if not self.tied.size:
            return
        centre = conditioning.centre(self.scores, self.fixed)
        rest = (self.scores - centre) / conditioning.scale
        precision = _Precision.of(covariance, rest)
        for i, j in enumerate(self.tied):
            variance, mean = precision.given_others(j)
            spread = np.sqrt(variance)
            offset, scale = centre[:, j], conditioning.scale[j]
            low = ((self.lower[:, i] - offset) / scale - mean) / spread
            high = ((self.upper[:, i] - offset) / scale - mean) / spread
            drawn = mean + spread * _truncated(low, high, self.generator)
            precision.replace(j, drawn)
            self.scores[:, j] = offset + scale * drawn


@dataclass(frozen=True)
class _Precision:
    """Conditional means of one column of ``rest`` given the others, kept up to date.

    Dense: the precision matrix itself.  Low rank: Sigma^-1 e = e/delta - (U/delta) C U'(e/delta),
    of which U'(e/delta) is carried along.
    """

    rest: np.ndarray
    matrix: np.ndarray
    scaled: np.ndarray | None = None
    delta: np.ndarray | None = None
    carried: np.ndarray | None = None

    @classmethod
    def of(cls, covariance: Covariance, rest: np.ndarray) -> _Precision:
        if not isinstance(covariance, LowRankCovariance):
            return cls(rest, np.linalg.inv(covariance))
        delta = covariance.diagonal
        scaled = covariance.loadings / delta[:, None]
        middle = np.linalg.inv(capacitance(delta, covariance.loadings))
        return cls(rest, middle, scaled, delta, rest @ scaled)

    def given_others(self, j: int) -> tuple[float, np.ndarray]:
        """Variance and means of column j given the other columns."""
        if self.scaled is None or self.delta is None or self.carried is None:
            own = self.matrix[j, j]
            return 1.0 / own, self.rest[:, j] - self.rest @ self.matrix[:, j] / own
        row = self.matrix @ self.scaled[j]
        own = 1.0 / self.delta[j] - self.scaled[j] @ row
        product = self.rest[:, j] / self.delta[j] - self.carried @ row
        return 1.0 / own, self.rest[:, j] - product / own

    def replace(self, j: int, column: np.ndarray) -> None:
        """Put a new column j."""
        if self.carried is not None and self.scaled is not None:
            self.carried[:] += np.outer(column - self.rest[:, j], self.scaled[j])
        self.rest[:, j] = column


def _estimated(
    latent: _Latent, weights: np.ndarray, estimate: Estimator
) -> tuple[Conditioning, Covariance]:
    """Regression of the scores on what is conditioned on, and correlation of the rest."""
    scores = latent.scores
    if not scores.shape[1]:
        nothing = Conditioning(
            np.ones(0, bool), np.empty(0, np.intp), np.empty((1, 0)), np.empty(0)
        )
        return nothing, np.empty((0, 0))
    design = np.column_stack([np.ones(len(scores)), latent.fixed])
    coefficients, scale = regression(scores, design, np.sqrt(weights)[:, None])
    everything = np.ones(scores.shape[1], dtype=bool)
    conditioning = Conditioning(everything, np.empty(0, dtype=np.intp), coefficients, scale)
    rows = conditioning.residuals(scores, latent.fixed) * np.sqrt(weights * len(weights))[:, None]
    return standardized(conditioning, estimate(rows))


def _unshrunk(rows: np.ndarray) -> Covariance:
    """The correlation matrix itself, kept invertible."""
    return shrunk(rows, 1e-3)


def _truncated(lower: np.ndarray, upper: np.ndarray, generator: np.random.Generator) -> np.ndarray:
    """Standard normal draws within intervals; a single point where the ends meet.

    Intervals above zero are mirrored, because the lower tail keeps its precision.
    """
    mirrored = lower + upper > 0
    low, high = np.where(mirrored, -upper, lower), np.where(mirrored, -lower, upper)
    below, above = ndtr(low), ndtr(high)
    drawn = ndtri(below + generator.random(low.shape) * (above - below))
    drawn = np.clip(drawn, np.maximum(low, -40.0), np.minimum(high, 40.0))
    return np.where(mirrored, -drawn, drawn)
