"""Between a column and its normal scores: monotone maps for smooth, tied and discrete columns.

A value with weight c, after values of weight b in all (weights sum to one), has the score
Phi^-1(b + c/2).  A value that many rows share is an atom: all scores in

    (Phi^-1(b), Phi^-1(b + c))                                                                (1)

stand for it, so that a latent normal variable reproduces its frequency.  Columns of few distinct
values, two-valued and count columns among them, consist of atoms only.  Back from scores, values
are interpolated between neighbours; beyond the outermost a smooth column goes on with the slope of
its outer twentieth, so that copies may exceed the largest value seen as new rows would.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtri

# A value shared by more than this share of the rows is an atom.
_ATOM = 0.05

# Scores are kept within this, which a standard normal variable does not leave.
_FARTHEST = 8.0


@dataclass(frozen=True)
class Marginal:
    """The map of one column.

    ``scores`` and ``values`` are the knots in increasing order, two for an atom; ``atoms`` the
    values that are atoms, with the ends ``lower`` and ``upper`` of their intervals (1); ``slopes``
    the growth of the values per score below the first and above the last knot.
    """

    scores: np.ndarray
    values: np.ndarray
    atoms: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    slopes: tuple[float, float]
    discrete: bool
    whole: bool

    def bounds(self, column: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Ends of the interval of scores of each entry; equal where it is a single score."""
        if self.discrete:
            middle = 0.5 * (self.atoms[1:] + self.atoms[:-1])
            nearest = np.searchsorted(middle, column)
            return self.lower[nearest], self.upper[nearest]
        score = np.interp(column, self.values, self.scores)
        for end, slope in zip((0, -1), self.slopes, strict=True):
            excess = column - self.values[end]
            beyond = excess < 0 if end == 0 else excess > 0
            if slope > 0:
                score[beyond] = self.scores[end] + excess[beyond] / slope
        score = np.clip(score, -_FARTHEST, _FARTHEST)
        low, high = score, score.copy()
        for atom, lower, upper in zip(self.atoms, self.lower, self.upper, strict=True):
            low[column == atom], high[column == atom] = lower, upper
        return low, high

    def back(self, score: np.ndarray) -> np.ndarray:
        """Values that scores stand for."""
        if self.discrete:
            return self.atoms[np.searchsorted(self.upper[:-1], score)]
        column = np.interp(score, self.scores, self.values)
        column += self.slopes[0] * np.minimum(score - self.scores[0], 0.0)
        column += self.slopes[1] * np.maximum(score - self.scores[-1], 0.0)
        return np.rint(column) if self.whole else column


def marginal(column: np.ndarray, weights: np.ndarray) -> Marginal:
    """The map of a column whose rows have positive weights that sum to one."""
    values, which, counts = np.unique(column, return_inverse=True, return_counts=True)
    weight = np.bincount(which, weights)
    after = np.minimum(np.cumsum(weight), 1.0)
    before = np.concatenate([[0.0], after[:-1]])
    after[-1] = 1.0
    whole = bool(np.all(values == np.rint(values)))
    discrete = 2 * len(values) <= len(column) and (whole or counts.min() > 1 or len(values) <= 10)
    atomic = np.full(len(values), True) if discrete else weight > _ATOM
    lower, upper = ndtri(before[atomic]), ndtri(after[atomic])
    centre = ndtri(0.5 * (before + after))
    scores = np.concatenate([centre[~atomic], lower, upper])
    knots = np.concatenate([values[~atomic], values[atomic], values[atomic]])
    order = np.lexsort((scores, knots))
    scores = np.clip(scores[order], -_FARTHEST, _FARTHEST)
    slopes = (0.0, 0.0) if discrete else _outer_slopes(centre, values, atomic)
    return Marginal(scores, knots[order], values[atomic], lower, upper, slopes, discrete, whole)


def _outer_slopes(
    scores: np.ndarray, values: np.ndarray, atomic: np.ndarray
) -> tuple[float, float]:
    """Slope over the outer twentieth at each end (at least five points), 0 where an atom ends."""
    count = min(len(values), max(5, len(values) // 20)) - 1
    first = 0.0 if atomic[0] else (values[count] - values[0]) / (scores[count] - scores[0])
    last = 0.0 if atomic[-1] else (values[-1] - values[~count]) / (scores[-1] - scores[~count])
    return float(first), float(last)
