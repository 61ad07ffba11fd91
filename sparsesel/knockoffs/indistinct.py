"""Features that cannot be told from their copies, and the groups that would help.

2 Sigma - S >= 0 implies (Sigma^-1)_jj <= 2 / s_j: s_j is at most twice the variance that the other
features leave of feature j.  Where they leave next to nothing, the copy is nearly the feature
itself, its contrast is noise, and it has no power: not an error, but something to say, with the
remedy of selecting such features as a group.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from sparsesel.knockoffs._model import HOLDS, VIOLATED

# A copy that correlates at .95 with its feature is called indistinct.
LARGEST_S = 0.05

# Features that correlate at least this strongly are proposed as one group.
LINK = 0.9

_SHOWN = 5


@dataclass(frozen=True)
class IndistinctFeatures:
    """Clusters of features whose copies are nearly themselves.

    Attributes
    ----------
    n_features : int
        Features with a copy and an s below the limit.
    clusters : tuple of tuple of int
        Positions of these features together with those they correlate with, the largest cluster
        first.
    """

    n_features: int
    clusters: tuple[tuple[int, ...], ...]

    def assumption(self, names: Sequence[str] | None = None) -> tuple[str, str, str]:
        """The report as (statement, state, detail), with names where they are given."""
        statement = f"every feature moves from its copy (s at least {LARGEST_S})"
        if not self.n_features:
            return statement, HOLDS, ""
        shown = [
            "{" + ", ".join(str(j) if names is None else str(names[j]) for j in cluster) + "}"
            for cluster in (tuple(cluster[:_SHOWN]) for cluster in self.clusters[:_SHOWN])
        ]
        detail = (
            f"{self.n_features} features have next to no power, in {len(self.clusters)} clusters "
            f"such as {', '.join(shown)}; selected as feature_groups such clusters have power"
        )
        return statement, VIOLATED, detail


def indistinct_features(X: np.ndarray, s: np.ndarray, has_copy: np.ndarray) -> IndistinctFeatures:
    """Find features with s below 0.05 and cluster them with what they correlate with.

    Parameters
    ----------
    X : ndarray of shape (n_rows, n_features)
        The features.
    s : ndarray of shape (n_features,)
        The s-vector of a fitted model.
    has_copy : ndarray of shape (n_features,), bool
        Which features have a copy.

    Returns
    -------
    IndistinctFeatures
        Their number and the clusters: features linked by a correlation of at least 0.9, and every
        indistinct feature with the one it correlates with most.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.knockoffs import GaussianModel, indistinct_features
    >>> X = np.random.default_rng(0).standard_normal((500, 4))
    >>> X[:, 1] = X[:, 0] + 0.01 * X[:, 1]
    >>> fitted = GaussianModel().fit(X)
    >>> indistinct_features(X, fitted.s, fitted.has_copy).clusters
    ((0, 1),)
    """
    copied = np.flatnonzero(has_copy)
    weak = np.flatnonzero(has_copy & (s < LARGEST_S))
    if not len(weak) or len(copied) < 2:
        return IndistinctFeatures(len(weak), tuple((int(j),) for j in weak))
    columns = np.asarray(X[:, copied], dtype=np.float64)
    columns = columns - columns.mean(axis=0)
    columns /= np.linalg.norm(columns, axis=0)
    place = np.searchsorted(copied, weak)
    correlation = np.abs(columns[:, place].T @ columns)
    correlation[np.arange(len(weak)), place] = 0.0
    linked = correlation >= LINK
    linked[np.arange(len(weak)), correlation.argmax(axis=1)] = True
    rows, others = np.nonzero(linked)
    size = (len(copied), len(copied))
    graph = coo_array((np.ones(len(rows)), (place[rows], others)), shape=size)
    label = connected_components(graph, directed=False)[1]
    clusters = [tuple(int(j) for j in copied[label == value]) for value in np.unique(label[place])]
    return IndistinctFeatures(len(weak), tuple(sorted(clusters, key=lambda c: (-len(c), c))))
