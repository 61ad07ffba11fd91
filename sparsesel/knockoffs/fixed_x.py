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
covariates makes the rows carry nothing beyond these products.  The matrix is never formed: where
R'R are the products of the parts of [X X~ y] orthogonal to what is fixed, the rotated parts are
W R, W uniform among the orthonormal bases orthogonal to what is fixed.

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
    pair,
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
        feature_groups: np.ndarray | None = None,
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
        feature_groups : ndarray of shape (n_features,), default=None
            Labels of groups that are told from their copies as a whole.

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
        conditioning = condition(X, Z, weights, feature_groups)
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
            labels = None
            if feature_groups is not None:
                labels = np.asarray(feature_groups)[has_copy]
            solution = solve_s_vector(correlation, self.s_vector, feature_groups=labels)
            _check_rank(solution.shrinkage)
            draws = DenseDraws.prepare(correlation, solution.S)
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
            free = _random_basis(span, part.left.shape[1], generator)
            moved = part.left - part.left @ part.draws.shift + free @ part.draws.root.T
            moved = moved * part.length + part.explained
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
        part = self._projected
        if part.draws is None:
            return pair(X, np.array(X), y, covariates, sample_weight)
        response = np.asarray(y, dtype=np.float64)[part.seen] * part.root[:, 0]
        joint = self._joint_root(response, generator)
        if self.n_added_rows:
            # one row more than there are dimensions, so that an intercept changes nothing
            n_rows = 2 * int(self.has_copy.sum()) + 1
            fixed = np.full((n_rows, 1), 1.0 / np.sqrt(n_rows))
            rotated = _random_basis(fixed, len(joint), generator) @ joint
            wide = np.zeros((n_rows, len(self.has_copy)))
            return self._apart(rotated, wide, np.empty((n_rows, 0)), None)
        explained = part.basis @ (part.basis.T @ response)
        rotated = _random_basis(part.basis, len(joint), generator) @ joint
        rotated += np.column_stack([part.explained, part.explained, explained])
        weight = None if sample_weight is None else np.asarray(sample_weight)[part.seen]
        Z = as_covariates(covariates, len(X))[part.seen]
        wide = np.array(X[part.seen], dtype=np.float64)
        return self._apart(rotated / part.root, wide, Z, weight)

    def _joint_root(self, response: np.ndarray, generator: np.random.Generator) -> np.ndarray:
        """R with R'R the products of [X X~ y], all orthogonal to what is fixed.

        In an orthonormal frame of the features, of U, and of the rest, the columns are

            X = (A, 0, 0),    X~ = (A (I - Sigma^-1 S), C, 0),    y = (c, u, r),

        and as U is uniform, (u, r) is the part of y that the features leave, turned at random.
        Added rows enlarge that part by sigma^2 times a chi-squared variable.
        """
        part = self._projected
        assert part.draws is not None
        n_copied = part.own.shape[1]
        response = response - part.basis @ (part.basis.T @ response)
        along = part.own.T @ response
        square = float(np.sum((response - part.own @ along) ** 2))
        freedom = len(response) - part.basis.shape[1] - n_copied
        if self.n_added_rows:
            square *= 1.0 + generator.chisquare(self.n_added_rows) / freedom
        rest = max(freedom, n_copied) - n_copied
        turned = generator.standard_normal(n_copied + 1)
        turned[-1] = np.sqrt(generator.chisquare(rest)) if rest else 0.0
        turned *= np.sqrt(square) / np.linalg.norm(turned)

        joint = np.zeros((2 * n_copied + (rest > 0), 2 * n_copied + 1))
        inner = part.own.T @ part.left
        joint[:n_copied, :n_copied] = inner * part.length
        joint[:n_copied, n_copied:-1] = (inner - inner @ part.draws.shift) * part.length
        joint[n_copied : 2 * n_copied, n_copied:-1] = part.draws.root.T * part.length
        joint[:n_copied, -1] = along
        joint[n_copied:, -1] = turned[: len(joint) - n_copied]
        return joint

    def _apart(
        self,
        columns: np.ndarray,
        features: np.ndarray,
        covariates: np.ndarray,
        weight: np.ndarray | None,
    ) -> PairedTable:
        """Take [X X~ y] apart; features without a copy lie in what is fixed and stay."""
        copies, n_copied = features.copy(), int(self.has_copy.sum())
        features[:, self.has_copy] = columns[:, :n_copied]
        copies[:, self.has_copy] = columns[:, n_copied:-1]
        return PairedTable(features, copies, columns[:, -1], covariates, weight)

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
