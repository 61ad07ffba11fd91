"""Model-X knockoffs for features that are jointly Gaussian given the covariates.

    X | covariates  ~  N( B' [1, covariates],  Sigma )                                          (1)

Copies keep the covariates and move each feature by its s_j (Candes, Fan, Janson and Lv 2018,
"Panning for gold: model-X knockoffs for high dimensional controlled variable selection", Journal
of the Royal Statistical Society B 80, section 3.1).  B and Sigma are given, or estimated from the
rows: B by weighted least squares, Sigma by one of `covariances`.  With them known, false discovery
control holds for every outcome and every importance; with Sigma estimated it holds as far as the
estimate does.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from sparsesel.knockoffs._gaussian_draws import DenseDraws, LowRankDraws, safe_root
from sparsesel.knockoffs._model import (
    FEW_VALUES,
    HOLDS,
    UNCHECKED,
    VIOLATED,
    Assumptions,
    Conditioning,
    PairedTable,
    as_covariates,
    as_weights,
    condition,
    count_few_valued,
    pair,
)
from sparsesel.knockoffs.covariances import (
    Covariance,
    Estimator,
    dense,
    estimator,
    scaled,
    subset,
    variances,
)
from sparsesel.knockoffs.low_rank import LowRankCovariance, capacitance
from sparsesel.knockoffs.s_vectors import (
    SVector,
    SVectorStatus,
    block_diagonal_s_vector,
    solve_s_vector,
    well_conditioned,
)

# Rows per feature from which an estimated covariance is trusted.
ROWS_PER_FEATURE = 5

# Dense covariances beyond this get the block-diagonal s-vector.
LARGEST_DENSE = 2000


@dataclass(frozen=True)
class GaussianModel:
    """Features that are Gaussian given the covariates.

    Parameters
    ----------
    covariance : {"ledoit_wolf", "oas", "graphical_lasso", "factor"}, ndarray or \
LowRankCovariance, default="ledoit_wolf"
        How the covariance is estimated, or the covariance itself: of the features, or, where there
        are covariates, of features and covariates together, in this order.
    mean : ndarray, default=None
        The mean belonging to a given covariance, of the same length; None: the weighted mean.
    s_vector : {"mvr", "max_entropy", "sdp", "equicorrelated"}, default="mvr"
        The rule for the distance of copies.

    Notes
    -----
    Constant features, features that the covariates determine and features that repeat one another
    get no copy: s_j = 0, and the copy is the feature.  Rows of weight 0 are copied and not used in
    the estimates.  Beyond 2,000 features a dense covariance gets the block-diagonal s-vector.

    References
    ----------
    Candes, Fan, Janson and Lv 2018, section 3.1; `covariances` for the estimates.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import GaussianModel
    >>> generator = np.random.default_rng(0)
    >>> X = generator.standard_normal((400, 3))
    >>> fitted = GaussianModel().fit(X)
    >>> fitted.sample(X, generator).shape
    (400, 3)
    >>> bool((fitted.s > 0.9).all())
    True
    """

    covariance: str | Covariance = "ledoit_wolf"
    mean: np.ndarray | None = None
    s_vector: str = "mvr"

    def fit(
        self,
        X: np.ndarray,
        *,
        covariates: np.ndarray | None = None,
        sample_weight: np.ndarray | None = None,
        feature_groups: np.ndarray | None = None,
    ) -> FittedGaussian:
        """Fit the model to the rows of X.

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
        FittedGaussian
            The model, ready to draw copies.

        Raises
        ------
        ValueError
            If the name of the covariance is unknown, a given one has another size, or the rows are
            too few for the covariates.
        """
        Z = as_covariates(covariates, len(X))
        weights = as_weights(sample_weight, len(X))
        if isinstance(self.covariance, str):
            conditioning = condition(X, Z, weights, feature_groups)
            covariance_of = estimator(self.covariance)
            conditioning, covariance = _estimated(covariance_of, conditioning, X, Z, weights)
        else:
            conditioning, covariance = self._given(X, Z, weights)
        n_rows = int((weights > 0).sum())
        fitted = fitted_gaussian(self, conditioning, covariance, n_rows, feature_groups)
        few = count_few_valued(X[weights > 0], np.flatnonzero(fitted.has_copy))
        return replace(fitted, n_few_valued=few)

    def _given(
        self, X: np.ndarray, Z: np.ndarray, weights: np.ndarray
    ) -> tuple[Conditioning, Covariance]:
        n_features, n_all = X.shape[1], X.shape[1] + Z.shape[1]
        covariance = self.covariance
        if not isinstance(covariance, LowRankCovariance):
            covariance = np.asarray(covariance, dtype=np.float64)
        if covariance.shape != (n_all, n_all):
            raise ValueError(
                f"A covariance of shape {covariance.shape} was given for {n_features} features and "
                f"{Z.shape[1]} covariates; the covariance of all of them together is needed, "
                f"features first, of shape {(n_all, n_all)}. Leave it to be estimated otherwise."
            )
        mean = np.concatenate([weights @ X, weights @ Z]) if self.mean is None else self.mean
        if np.shape(mean) != (n_all,):
            raise ValueError(
                f"A mean of shape {np.shape(mean)} was given; one number for each feature, then "
                f"each covariate, is needed: shape {(n_all,)}. Leave it out to use the mean of the "
                "rows."
            )
        slopes, covariance = _conditional(covariance, n_features)
        intercept = np.asarray(mean)[:n_features] - np.asarray(mean)[n_features:] @ slopes
        has_copy = variances(covariance) > 0
        coefficients = np.vstack([intercept, slopes])[:, has_copy]
        scale = np.ones(int(has_copy.sum()))
        conditioning = Conditioning(has_copy, np.empty(0, dtype=np.intp), coefficients, scale)
        return standardized(conditioning, subset(covariance, has_copy))


@dataclass(frozen=True)
class FittedGaussian:
    """A Gaussian model of the features, ready to draw copies.

    Attributes
    ----------
    s : ndarray of shape (n_features,)
        1 - correlation of a feature with its copy, given the covariates; 0 without a copy.
    has_copy : ndarray of shape (n_features,), bool
        Which features have a copy of their own.
    solution : SVector
        The s-vector of the copied features with its certified gap and shrinkage.
    n_few_valued : int
        Copied features that take at most ten values.
    """

    settings: GaussianModel
    s: np.ndarray
    has_copy: np.ndarray
    solution: SVector
    n_rows: int
    conditioning: Conditioning
    _draws: DenseDraws | LowRankDraws | None
    n_few_valued: int = 0

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
        kind = np.float32 if X.dtype == np.float32 else np.float64
        copies = np.array(X, dtype=kind)
        if self._draws is not None:
            Z = as_covariates(covariates, len(X))
            drawn = self._draws.draw(self.conditioning.residuals(X, Z), generator)
            centre = self.conditioning.centre(X, Z)
            copies[:, self.has_copy] = centre + drawn * self.conditioning.scale
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
        size = int(self.has_copy.sum())
        few = self.n_few_valued
        notes = [f"{few} take at most {FEW_VALUES} values, CopulaModel is for these"] if few else []
        gaussian = (
            "the features are jointly Gaussian given the covariates",
            VIOLATED if few else UNCHECKED,
            "; ".join([*notes, *self.conditioning.notes]),
        )
        if not isinstance(self.settings.covariance, str):
            known = ("the covariance given is that of the features", UNCHECKED, "")
            return (gaussian, known, *_nearly_singular(self.solution))
        enough = self.n_rows >= ROWS_PER_FEATURE * size
        detail = f"{self.n_rows} rows, {size} features, estimate {self.settings.covariance!r}"
        if not enough:
            detail += "; the false discovery rate is not guaranteed, a rehearsal gives the figure"
        estimated = (
            f"the covariance is estimated from at least {ROWS_PER_FEATURE} rows per feature",
            HOLDS if enough else VIOLATED,
            detail,
        )
        return (gaussian, estimated, *_nearly_singular(self.solution))


def _estimated(
    covariance_of: Estimator,
    conditioning: Conditioning,
    X: np.ndarray,
    Z: np.ndarray,
    weights: np.ndarray,
) -> tuple[Conditioning, Covariance]:
    """Correlation matrix from the rows of positive weight."""
    if not conditioning.has_copy.any():
        return conditioning, np.empty((0, 0))
    seen = weights > 0
    root = np.sqrt(weights[seen] * seen.sum())[:, None]
    rows = conditioning.residuals(X[seen], Z[seen]) * root
    return standardized(conditioning, covariance_of(rows))


def _nearly_singular(solution: SVector) -> Assumptions:
    if solution.shrinkage == 0:
        return ()
    return (
        (
            "the correlation matrix is not singular",
            VIOLATED,
            f"the identity was mixed in with weight {solution.shrinkage:.1e}; features that others "
            "determine have no power, unless they share a group",
        ),
    )


def fitted_gaussian(
    settings: GaussianModel,
    conditioning: Conditioning,
    covariance: Covariance,
    n_rows: int,
    feature_groups: np.ndarray | None = None,
) -> FittedGaussian:
    """Find the s-vector and prepare the draws; the covariance has unit diagonal."""
    has_copy = conditioning.has_copy
    s = np.zeros(len(has_copy))
    solution = SVector(s[has_copy], settings.s_vector, 0.0, 0, SVectorStatus.CONVERGED, 0.0)
    draws: DenseDraws | LowRankDraws | None = None
    if has_copy.any():
        labels = None
        if feature_groups is not None:
            labels = np.asarray(feature_groups)[has_copy]
            covariance = dense(covariance)
        covariance, shrinkage = well_conditioned(covariance)
        solution = _solution(covariance, settings.s_vector, labels)
        solution = replace(solution, shrinkage=shrinkage)
        if isinstance(covariance, LowRankCovariance):
            draws = LowRankDraws.prepare(covariance, solution.s)
        else:
            draws = DenseDraws.prepare(covariance, solution.S)
        s[has_copy] = solution.s
    return FittedGaussian(settings, s, has_copy, solution, n_rows, conditioning, draws)


def _solution(covariance: Covariance, method: str, labels: np.ndarray | None) -> SVector:
    if labels is not None:
        return solve_s_vector(covariance, method, feature_groups=labels)
    if isinstance(covariance, LowRankCovariance) or len(covariance) <= LARGEST_DENSE:
        return solve_s_vector(covariance, method)
    s = block_diagonal_s_vector(covariance, method)
    return SVector(s, method, np.inf, 0, SVectorStatus.IN_BLOCKS, 0.0)


def standardized(
    conditioning: Conditioning, covariance: Covariance
) -> tuple[Conditioning, Covariance]:
    """Move what is left of the variances from the covariance into the scale."""
    deviation = np.sqrt(variances(covariance))
    moved = replace(conditioning, scale=conditioning.scale * deviation)
    return moved, scaled(covariance, 1.0 / deviation)


def _conditional(covariance: Covariance, n_features: int) -> tuple[np.ndarray, Covariance]:
    """Slopes on the covariates and covariance given them, from the joint covariance.

    For diag(delta) + U U' with rows U_x of the features and U_z of the covariates, the conditional
    covariance is diag(delta_x) + U_x (I + U_z' diag(1/delta_z) U_z)^-1 U_x'.
    """
    if isinstance(covariance, LowRankCovariance):
        inner, outer = covariance.loadings[:n_features], covariance.loadings[n_features:]
        delta = covariance.diagonal
        joint = LowRankCovariance(delta[n_features:], outer).dense()
        slopes = np.linalg.lstsq(joint, outer @ inner.T, rcond=1e-12)[0]
        left = np.linalg.inv(capacitance(delta[n_features:], outer))
        given = LowRankCovariance(delta[:n_features], inner @ safe_root(0.5 * (left + left.T)))
        return slopes, given
    joint, cross = covariance[n_features:, n_features:], covariance[n_features:, :n_features]
    slopes = np.linalg.lstsq(joint, cross, rcond=1e-12)[0]
    left = covariance[:n_features, :n_features] - cross.T @ slopes
    size = np.diagonal(covariance)[:n_features]
    left[np.diagonal(left) <= 1e-12 * size] = 0.0
    left[:, np.diagonal(left) <= 1e-12 * size] = 0.0
    return slopes, 0.5 * (left + left.T)
