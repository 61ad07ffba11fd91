"""Fixed-X knockoffs: exact for Gaussian linear regression, whatever the features are.

With X the features after intercept and covariates are projected out (columns of unit length),
Sigma = X'X, S = diag(s), 2 Sigma - S >= 0, and U an orthonormal basis of p columns orthogonal to X,
the intercept and the covariates (Barber and Candes 2015, equation 1.4),

    X~ = X (I - Sigma^-1 S) + U C,      C'C = 2 S - S Sigma^-1 S,                              (1)

gives X~'X~ = Sigma and X~'X = Sigma - S.  What the intercept and the covariates explain of a
feature is added back to its copy, so that [X X~] has the same products with them when any feature
is swapped with its copy.  Room for U needs n >= 2 p + 1 + covariates.

**Rotation.**  An importance is antisymmetric only if it depends on the table through [X X~]'[X X~]
and [X X~]'y.  A penalty chosen by cross-validation depends on more: on which row lies in which
fold.  Multiplying [X X~ y] by a random orthogonal matrix that fixes the intercept and the
covariates makes the rows carry nothing beyond these products.  The matrix is never formed: with
Q R the part of [X X~ y] orthogonal to what is fixed (Q orthonormal), its random rotation is W R, W
uniform among the orthonormal bases orthogonal to what is fixed.

**Below 2 p + 1 + covariates** rows are added (the same paper, section 2.1.2): features 0, response
N(0, sigma^2), as many as are missing, sigma estimated by least squares.  With the estimate the
false discovery control is approximate.  Here the projected rows are rotated together with the
added ones; the covariates are in neither, and are dropped from the table.

**Weights** are those of an error variance sigma^2 / w_i: every row is multiplied by w_i^1/2 before
and divided after.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sparsesel.knockoffs._gaussian_draws import DenseDraws
from sparsesel.knockoffs._model import (
    BY_CONSTRUCTION,
    HOLDS,
    UNCHECKED,
    VIOLATED,
    Assumptions,
    PairedTable,
    as_covariates,
    as_weights,
    condition,
)
from sparsesel.knockoffs.s_vectors import SVector, SVectorStatus, solve_s_vector


@dataclass(frozen=True)
class FixedXModel:
    """Copies with the second moments of the features, for the squared error only.

    Parameters
    ----------
    s_vector : {"mvr", "max_entropy", "sdp", "equicorrelated"}, default="mvr"
        The rule for the distance of copies.
    add_rows : bool, default=True
        Whether rows are added below 2 p + 1 + covariates, which makes the control approximate.

    Notes
    -----
    Constant features, features that the covariates determine and features that repeat one another
    get no copy.  Rows of weight 0 are left out.

    References
    ----------
    Barber and Candes 2015, "Controlling the false discovery rate via knockoffs", Annals of
    Statistics 43, sections 1.2 and 2.1.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import FixedXModel
    >>> generator = np.random.default_rng(0)
    >>> X = generator.standard_normal((30, 3))
    >>> copies = FixedXModel().fit(X).sample(X, generator)
    >>> centred, moved = X - X.mean(0), copies - copies.mean(0)
    >>> bool(np.allclose(moved.T @ moved, centred.T @ centred))
    True
    """

    s_vector: str = "mvr"
    add_rows: bool = True

    def fit(
        self,
        X: np.ndarray,
        *,
        covariates: np.ndarray | None = None,
        sample_weight: np.ndarray | None = None,
    ) -> FittedFixedX:
        """Project the features, find their s-vector and prepare the copies.

        Parameters
        ----------
        X : ndarray of shape (n_rows, n_features)
            The features.
        covariates : ndarray of shape (n_rows, n_covariates), default=None
            Columns that are in every regression.
        sample_weight : ndarray of shape (n_rows,), default=None
            Weights of the rows.

        Returns
        -------
        FittedFixedX
            The copies of these very rows, up to a random rotation.

        Raises
        ------
        ValueError
            If there are too few rows, or features are linear combinations of others.
        """
        Z = as_covariates(covariates, len(X))
        weights = as_weights(sample_weight, len(X))
        conditioning = condition(X, Z, weights)
        seen, has_copy = weights > 0, conditioning.has_copy
        root = np.sqrt(weights[seen] * seen.sum())[:, None]
        fixed = np.column_stack([np.ones(len(X)), Z, X[:, conditioning.repeated]])
        basis = _orthonormal(fixed[seen] * root)
        features = np.asarray(X[np.ix_(seen, has_copy)], dtype=np.float64) * root
        explained = basis @ (basis.T @ features)
        left = features - explained
        length = np.linalg.norm(left, axis=0)
        missing = 2 * left.shape[1] + basis.shape[1] - len(left)
        self._check_rows(len(left), left.shape[1], basis.shape[1])
        s = np.zeros(X.shape[1])
        solution = SVector(s[has_copy], self.s_vector, 0.0, 0, SVectorStatus.CONVERGED, 0.0)
        draws = None
        if has_copy.any():
            correlation = (left / length).T @ (left / length)
            solution = solve_s_vector(correlation, self.s_vector)
            _check_rank(solution.shrinkage)
            draws = DenseDraws.prepare(correlation, solution.s)
        s[has_copy] = solution.s
        own = np.linalg.qr(left)[0]
        projected = _Projected(basis, explained, left / length, own, length, root, seen, draws)
        return FittedFixedX(self, s, has_copy, solution, max(missing, 0), projected)

    def _check_rows(self, n_rows: int, n_copied: int, n_fixed: int) -> None:
        needed = 2 * n_copied + n_fixed if not self.add_rows else n_copied + n_fixed + 1
        if n_copied and n_rows < needed:
            rule = "twice the features" if not self.add_rows else "the features and one more"
            raise ValueError(
                f"{n_rows} rows were given for {n_copied} features and {n_fixed} columns of "
                f"intercept and covariates; fixed-X copies need at least {needed}: {rule}, and "
                "one for each of the intercept and the covariates. Use a model-X feature model, "
                "such as GaussianModel, or fewer features."
            )


def _check_rank(shrinkage: float) -> None:
    if shrinkage > 0:
        raise ValueError(
            "Some features are linear combinations of others (the smallest eigenvalue of their "
            "correlation matrix is below 1e-8); fixed-X copies exist only for independent "
            "columns. Leave out the columns that follow from others, or use a model-X feature "
            "model, such as GaussianModel."
        )


@dataclass(frozen=True)
class _Projected:
    """The weighted table, split into what is fixed and unit columns orthogonal to it.

    ``basis`` and ``own`` are orthonormal bases of what is fixed and of the unit columns ``left``.
    """

    basis: np.ndarray
    explained: np.ndarray
    left: np.ndarray
    own: np.ndarray
    length: np.ndarray
    root: np.ndarray
    seen: np.ndarray
    draws: DenseDraws | None


@dataclass(frozen=True)
class FittedFixedX:
    """Fixed-X copies of one table.

    Attributes
    ----------
    s : ndarray of shape (n_features,)
        1 - correlation of a feature with its copy, given the covariates; 0 without a copy.
    has_copy : ndarray of shape (n_features,), bool
        Which features have a copy of their own.
    solution : SVector
        The s-vector of the copied features with its certified gap.
    n_added_rows : int
        Rows that `draw` adds; 0 where the control is exact.
    """

    settings: FixedXModel
    s: np.ndarray
    has_copy: np.ndarray
    solution: SVector
    n_added_rows: int
    _projected: _Projected

    def sample(
        self,
        X: np.ndarray,
        generator: np.random.Generator,
        *,
        covariates: np.ndarray | None = None,
    ) -> np.ndarray:
        """One draw of copies of the rows of the fit, not rotated.

        Parameters
        ----------
        X : ndarray of shape (n_rows, n_features)
            The features of the fit.
        generator : numpy.random.Generator
            Source of the basis U.
        covariates : ndarray, default=None
            Not used: the fit has projected them out.

        Returns
        -------
        ndarray of shape (n_rows, n_features)
            The copies; rows of weight 0 are returned as they are.

        Raises
        ------
        ValueError
            If there are not enough rows for exact copies, or X has other rows than the fit.
        """
        if self.n_added_rows:
            raise ValueError(
                f"{self.n_added_rows} rows are missing for copies of the rows as they are; `draw` "
                "adds them and returns the longer table. Use `draw`, or a model-X feature model."
            )
        part = self._projected
        if len(X) != len(part.seen):
            raise ValueError(
                f"{len(X)} rows were given and the model was fitted to {len(part.seen)}; fixed-X "
                "copies exist for the rows of the fit only. Fit the model to these rows."
            )
        copies = np.array(X, dtype=np.float32 if X.dtype == np.float32 else np.float64)
        if part.draws is not None:
            span = np.column_stack([part.basis, part.own])
            moved = self._moved(part.left, span, generator) * part.length + part.explained
            copies[np.ix_(part.seen, self.has_copy)] = moved / part.root
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
        """Copies beside the features, rotated, with the rows that are missing added.

        Parameters
        ----------
        X : ndarray of shape (n_rows, n_features)
            The features of the fit.
        y : ndarray of shape (n_rows,)
            The response.
        generator : numpy.random.Generator
            Source of the copies, the rotation and the response of added rows.
        covariates : ndarray of shape (n_rows, n_covariates), default=None
            The covariates of the fit.
        sample_weight : ndarray of shape (n_rows,), default=None
            The weights of the fit.

        Returns
        -------
        PairedTable
            Of the rows of positive weight; with added rows, without covariates and weights.
        """
        if self.n_added_rows:
            return self._augmented(np.asarray(y, dtype=np.float64), generator)
        part, n_copied = self._projected, int(self.has_copy.sum())
        copies = np.array(self.sample(X, generator)[part.seen], dtype=np.float64)
        features = np.array(X[part.seen], dtype=np.float64)
        response = np.asarray(y, dtype=np.float64)[part.seen]
        # features without a copy lie in the span of what the rotation fixes
        moving = [features[:, self.has_copy], copies[:, self.has_copy], response]
        rotated = _rotate(np.column_stack(moving) * part.root, part.basis, generator) / part.root
        features[:, self.has_copy] = rotated[:, :n_copied]
        copies[:, self.has_copy] = rotated[:, n_copied:-1]
        weight = None if sample_weight is None else np.asarray(sample_weight)[part.seen]
        Z = as_covariates(covariates, len(X))[part.seen]
        return PairedTable(features, copies, rotated[:, -1], Z, weight)

    def _moved(
        self, left: np.ndarray, span: np.ndarray, generator: np.random.Generator
    ) -> np.ndarray:
        """Equation (1) for unit columns; ``span`` is a basis of them and of what is fixed."""
        draws = self._projected.draws
        assert draws is not None
        free = _random_basis(span, left.shape[1], generator)
        return left - left @ draws.shift + free @ draws.root.T

    def _augmented(self, y: np.ndarray, generator: np.random.Generator) -> PairedTable:
        """Add the missing rows in the space orthogonal to what is fixed, then rotate."""
        part, count = self._projected, self.n_added_rows
        response = y[part.seen] * part.root[:, 0]
        response = response - part.basis @ (part.basis.T @ response)
        unexplained = response - part.own @ (part.own.T @ response)
        freedom = len(response) - part.basis.shape[1] - part.own.shape[1]
        sigma = np.linalg.norm(unexplained) / np.sqrt(freedom)
        response = np.concatenate([response, sigma * generator.standard_normal(count)])
        span = np.column_stack([part.basis, part.own])
        left = np.vstack([part.left, np.zeros((count, part.left.shape[1]))])
        copies = self._moved(left, np.vstack([span, np.zeros((count, span.shape[1]))]), generator)
        # one row more than there are dimensions, so that an intercept changes nothing
        free = len(left) - part.basis.shape[1]
        ones = np.full((free + 1, 1), 1.0 / np.sqrt(free + 1))
        moving = np.column_stack([left * part.length, copies * part.length, response])
        rotated = _embed(_root(moving, free), ones, generator)
        n_copied = left.shape[1]
        pair = np.zeros((2, free + 1, len(self.has_copy)))
        pair[0][:, self.has_copy] = rotated[:, :n_copied]
        pair[1][:, self.has_copy] = rotated[:, n_copied:-1]
        return PairedTable(pair[0], pair[1], rotated[:, -1], np.empty((free + 1, 0)), None)

    def assumptions(self) -> Assumptions:
        """What the model assumes: (statement, state, detail) each."""
        linear = (
            "the outcome is linear in the features and covariates, with independent Gaussian "
            "errors of one variance (over the sample weights)",
            UNCHECKED,
            "",
        )
        moments = (
            "copies have the second moments of the features",
            BY_CONSTRUCTION,
            "rows rotated at random, so that tuned importances keep the symmetry",
        )
        exact = (
            "the rows are at least twice the features, plus one, plus the covariates",
            VIOLATED if self.n_added_rows else HOLDS,
            f"{self.n_added_rows} rows were added with an estimated error variance; the control is "
            "approximate"
            if self.n_added_rows
            else "",
        )
        return (linear, moments, exact)


def _orthonormal(columns: np.ndarray) -> np.ndarray:
    """Orthonormal basis of the span, columns that others determine left out."""
    length = np.linalg.norm(columns, axis=0)
    left, size, _ = np.linalg.svd(columns[:, length > 0] / length[length > 0], full_matrices=False)
    return left[:, size > 1e-10 * size[0]]


def _random_basis(fixed: np.ndarray, count: int, generator: np.random.Generator) -> np.ndarray:
    """Uniformly distributed orthonormal columns orthogonal to an orthonormal basis."""
    free = generator.standard_normal((len(fixed), count))
    for _ in range(2):  # the second pass removes what rounding leaves of the first
        free -= fixed @ (fixed.T @ free)
    columns, triangle = np.linalg.qr(free)
    # signs that make the triangle's diagonal positive turn Householder's basis into a uniform one
    return columns * np.where(np.diagonal(triangle) < 0, -1.0, 1.0)


def _root(columns: np.ndarray, rank: int) -> np.ndarray:
    """R with R'R = columns'columns, of at most ``rank`` rows, which bounds the rank of columns."""
    if columns.shape[1] <= rank:
        return np.asarray(np.linalg.qr(columns, mode="r"))
    _, size, right = np.linalg.svd(columns, full_matrices=False)
    return size[:rank, None] * right[:rank]


def _embed(root: np.ndarray, fixed: np.ndarray, generator: np.random.Generator) -> np.ndarray:
    """Random columns orthogonal to ``fixed`` whose products are those of the root."""
    return _random_basis(fixed, len(root), generator) @ root


def _rotate(columns: np.ndarray, basis: np.ndarray, generator: np.random.Generator) -> np.ndarray:
    """Rotate columns by a random orthogonal matrix that fixes the span of ``basis``."""
    explained = basis @ (basis.T @ columns)
    root = _root(columns - explained, len(columns) - basis.shape[1])
    return explained + _embed(root, basis, generator)
