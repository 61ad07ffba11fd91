r"""Bounds on the false selections of stability selection, and its calibration without an outcome.

Letters, as in Shah and Samworth (2013): ``p`` features; ``q`` the most features one half-sample
may pick; ``theta = q / p``; ``B`` complementary pairs, hence ``2B`` halves; ``Pi_k`` the share of
the ``2B`` halves that pick feature ``k``; ``tau`` the threshold on ``Pi_k``; ``p_k`` the
probability that a half-sample picks ``k``; ``L_theta = {k : p_k <= theta}`` the features picked
rarely.

Every bound here is on ``E |S_tau & L_theta|``, the expected number of *rarely picked* features
among the selected ones. It is a bound on false selections as far as the features without effect
belong to ``L_theta``. Nothing is assumed about the selection rule inside a half.

**Worst case.** Let ``P_k`` be the share of pairs whose two halves both pick ``k``. Each pair adds
0, 1 or 2 votes, so ``P_k >= 2 Pi_k - 1``. The halves of a pair hold different rows, so they are
independent and ``E P_k = p_k^2 <= theta^2`` on ``L_theta``. Markov's inequality gives ``P(Pi_k >=
tau) <= theta^2 / (2 tau - 1)``, and the sum over at most ``p`` features ``theta^2 p / (2 tau -
1)``.

**Unimodal.** Where the law of ``P_k`` on ``{0, 1/B, ..., 1}`` is unimodal, Markov's inequality
sharpens by a factor of about two, under conditions on ``theta`` and ``tau`` that are checked.

**r-concave.** A law ``f`` on a lattice is r-concave (``r < 0``) when ``f^r`` is convex (``0^r`` is
infinity). Let ``D(eta, t, B, r)`` be the largest ``P(X >= t)`` over the r-concave laws on ``{0,
1/B, ..., 1}`` with mean at most ``eta``. With ``r = -1/2`` for ``P_k`` and ``r = -1/4`` for
``Pi_k`` the bound is ``p min{D(theta^2, 2 tau - 1, B, -1/2), D(theta, tau, 2B, -1/4)}``.

**How D is found.** Write ``s = -1/r``, ``f = g^{-s}`` with ``g`` convex, positions ``0..B``, ``M =
eta B < T = t B``. (1) For affine ``psi``, ``(f + e g^{-s-1} psi)^r = g (1 + e psi / g)^{-1/s}`` is
the perspective of a convex function and so convex: ``f`` can be moved both ways inside the class
along every affine ``psi``, and along a hinge at every kink of ``g``. Mass and mean fix two
directions, so a law whose ``g`` has a kink is the middle of two others, and ``P(X >= t)``, linear
in ``f``, is largest at a law whose ``g`` is affine on its support ``{l, ..., k}`` and whose mean
is exactly ``M``. (2) ``l = 0`` is enough. Against an affine law ``f`` on ``{l, ..., k}``, ``0 < l
< M``, take the laws ``f_u`` of mean ``M``, affine from 0 to ``u`` with a partial last point, ``T
<= u <= k``. The difference ``f_u - f`` has the signs +, -, + and then, where ``u < k``, -; equal
mass and mean allow no fewer changes. Its tail sums add to zero and turn upwards to one inner peak,
which therefore is positive and lies where the second + begins. If the tail sum at ``T``
is negative for ``u = k``, that place is right of ``T``; for ``u = T`` it is not; it moves
continuously with ``u`` (two equal values of affine functions would make them one), so some ``u``
puts the peak at ``T`` and is at least as good as ``f``. By (1) a law without a partial point is as
good as that one. Hence ``D`` is the largest, over ``k = T..B``, of the tails of the one affine law
on ``{0, ..., k}`` whose mean is ``M``: one scalar equation for each ``k``.

References
----------
Meinshausen, N. and Bühlmann, P. (2010). Stability selection. *Journal of the Royal Statistical
Society B* 72, 417-473. Theorem 1.

Shah, R. D. and Samworth, R. J. (2013). Variable selection with error control: another look at
stability selection. *Journal of the Royal Statistical Society B* 75, 55-80. Theorem 1, worst case;
Theorem 2, unimodal; equation (8), r-concave.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from types import MappingProxyType

import numpy as np

__all__ = [
    "BOUND_ASSUMPTIONS",
    "BOUND_SOURCES",
    "NEIGHBOUR_NOTE",
    "Calibration",
    "bounded_quantity",
    "calibrate",
    "expected_false_selections",
    "grid_threshold",
    "largest_features_per_fit",
    "r_concave_bound",
    "r_concave_tail",
    "unimodal_bound",
    "why_none_stable",
    "worst_case_bound",
]

DEFAULT_THRESHOLD = 0.75
LOWEST_AUTOMATIC_THRESHOLD = 0.60

# Multiples such as 0.7 * 100 = 70.00000000000001 must stay on their grid point.
_GRID_SLACK = 1e-9

_INDEPENDENT_ROWS = "the rows (or the groups of rows) are independent draws from one population"

BOUND_SOURCES: Mapping[str, str] = MappingProxyType(
    {
        "worst_case": "Shah and Samworth 2013, Theorem 1 (worst case over all laws)",
        "unimodal": "Shah and Samworth 2013, Theorem 2 (unimodal laws)",
        "r_concave": "Shah and Samworth 2013, equation 8 (r-concave laws)",
    }
)

BOUND_ASSUMPTIONS: Mapping[str, tuple[str, ...]] = MappingProxyType(
    {
        "worst_case": (_INDEPENDENT_ROWS,),
        "unimodal": (
            _INDEPENDENT_ROWS,
            "for each rarely picked feature, the share of pairs whose two halves both pick it has "
            "a unimodal law",
        ),
        "r_concave": (
            _INDEPENDENT_ROWS,
            "for each rarely picked feature, the share of pairs whose two halves both pick it has "
            "an r-concave law with r = -1/2, and the share of halves that pick it one with "
            "r = -1/4",
        ),
    }
)

NEIGHBOUR_NOTE = (
    "A feature without an effect of its own that stands in for a correlated true one can be picked "
    "more often than that; it is then outside this count, so with correlated features the number "
    "of selected features without effect can exceed the bound."
)


def bounded_quantity(features_per_fit: float, n_features: int, unit: str = "feature") -> str:
    """Say in words what every bound of this module is on.

    Parameters
    ----------
    features_per_fit : float
        The most features a half-sample may pick, q.
    n_features : int
        Number of candidates, p.
    unit : str, default="feature"
        What is selected, in the singular.

    Returns
    -------
    str
        A noun phrase, for the error measure of a claim.

    Examples
    --------
    >>> from sparsesel.error_control import bounded_quantity
    >>> print(bounded_quantity(50, 1000, "gene"))
    expected number of selected genes that a half-sample picks with probability at most 50/1,000
    """
    return (
        f"expected number of selected {unit}s that a half-sample picks with probability at most "
        f"{features_per_fit:,.6g}/{n_features:,}"
    )


def _check_sizes(features_per_fit: float, n_features: int) -> None:
    if not n_features >= 1:
        raise ValueError(
            f"n_features={n_features!r}: there must be at least one candidate feature. Leave at "
            "least one column out of the covariates."
        )
    if not 0 < features_per_fit <= n_features:
        raise ValueError(
            f"features_per_fit={features_per_fit!r} must lie between 1 and the number of candidate "
            f"features, {n_features}. Lower it, or leave it None to have it calibrated."
        )


def _check_threshold(threshold: float) -> None:
    if not 0.5 < threshold <= 1:
        raise ValueError(
            f"threshold={threshold!r} must lie above 0.5 and at most at 1: at half of the votes or "
            "less no bound holds. Use a value from 0.6 to 0.9, or None to have it calibrated."
        )


def _votes(threshold: float, n_pairs: int) -> int:
    """The least number of the 2B halves that reaches the threshold."""
    _check_threshold(threshold)
    if n_pairs < 1:
        raise ValueError(
            f"n_pairs={n_pairs!r} must be a positive integer; 50 pairs are the usual choice."
        )
    return math.ceil(2 * n_pairs * threshold - _GRID_SLACK)


def grid_threshold(threshold: float, n_pairs: int) -> float:
    """Round a threshold up on the grid of selection probabilities.

    A selection probability is a multiple of 1 / (2 n_pairs), so a feature reaches the threshold
    exactly if it reaches the next grid point: rounding up changes no selection.

    Parameters
    ----------
    threshold : float
        In (0.5, 1].
    n_pairs : int
        Number of complementary pairs, B.

    Returns
    -------
    float
        The smallest multiple of 1 / (2 n_pairs) that is not below `threshold`.

    Examples
    --------
    >>> from sparsesel.error_control import grid_threshold
    >>> grid_threshold(0.755, 50)
    0.76
    """
    return _votes(threshold, n_pairs) / (2 * n_pairs)


def worst_case_bound(features_per_fit: float, n_features: int, threshold: float) -> float:
    r"""Bound the expected number of rarely picked features selected, whatever their law.

    .. math:: \theta^2 p / (2 \tau - 1), \quad \theta = q / p

    Parameters
    ----------
    features_per_fit : float
        The most features a half-sample may pick, q, in (0, n_features].
    n_features : int
        Number of candidates, p.
    threshold : float
        Threshold on the selection probability, in (0.5, 1].

    Returns
    -------
    float
        The bound.

    Raises
    ------
    ValueError
        If an argument is outside its range.

    Notes
    -----
    Assumes independent rows and complementary pairs; nothing about exchangeability of the features,
    which Meinshausen and Bühlmann (2010), Theorem 1, need for the same expression to bound all
    false selections.

    References
    ----------
    Shah and Samworth (2013), Theorem 1.

    Examples
    --------
    >>> from sparsesel.error_control import worst_case_bound
    >>> worst_case_bound(50, 1000, 0.75)
    5.0
    """
    _check_sizes(features_per_fit, n_features)
    _check_threshold(threshold)
    return features_per_fit**2 / ((2 * threshold - 1) * n_features)


def _lowest_unimodal_threshold(rate: float, n_pairs: int) -> float:
    """The value that the threshold must exceed for the unimodal bound to hold."""
    return min(0.5 + rate**2, 0.5 + 1 / (2 * n_pairs) + 0.75 * rate**2)


def _unimodal_holds(rate: float, votes: int, n_pairs: int) -> bool:
    above = votes / (2 * n_pairs) - _lowest_unimodal_threshold(rate, n_pairs)
    return rate <= 1 / math.sqrt(3) and above > 1e-12


def _unimodal_factor(votes: int, n_pairs: int) -> float:
    """The factor C(tau, B) of the unimodal bound C theta^2 p."""
    tau, step = votes / (2 * n_pairs), 1 / (2 * n_pairs)
    if tau <= 0.75:
        return 1 / (2 * (2 * tau - 1 - step))
    return 4 * (1 - tau + step) / (1 + 2 * step)


def unimodal_bound(
    features_per_fit: float, n_features: int, threshold: float, n_pairs: int
) -> float:
    r"""Bound the expected number of rarely picked features selected, for unimodal laws.

    .. math::

        C(\tau, B)\, \theta^2 p, \quad C = \frac{1}{2 (2\tau - 1 - 1/2B)} \text{ for } \tau \le 3/4,
        \quad C = \frac{4 (1 - \tau + 1/2B)}{1 + 1/B} \text{ above}

    Parameters
    ----------
    features_per_fit : float
        The most features a half-sample may pick, q, in (0, n_features].
    n_features : int
        Number of candidates, p.
    threshold : float
        Threshold on the selection probability, in (0.5, 1]; rounded up on its grid.
    n_pairs : int
        Number of complementary pairs, B.

    Returns
    -------
    float
        The bound.

    Raises
    ------
    ValueError
        If an argument is outside its range or the bound does not hold there: it needs
        q/p <= 1/sqrt(3) and a threshold above
        min(1/2 + (q/p)^2, 1/2 + 1/(2B) + 3/4 (q/p)^2).

    Notes
    -----
    Assumes independent rows, complementary pairs, and for each rarely picked feature a unimodal law
    of the share of pairs whose two halves both pick it.

    References
    ----------
    Shah and Samworth (2013), Theorem 2.

    Examples
    --------
    >>> from sparsesel.error_control import unimodal_bound
    >>> round(unimodal_bound(50, 1000, 0.75, 50), 4)
    2.551
    """
    _check_sizes(features_per_fit, n_features)
    votes = _votes(threshold, n_pairs)
    rate = features_per_fit / n_features
    if not _unimodal_holds(rate, votes, n_pairs):
        raise ValueError(
            f"The unimodal bound does not hold for features_per_fit={features_per_fit} of "
            f"{n_features} features, threshold={votes / (2 * n_pairs):.4g}, n_pairs={n_pairs}: it "
            f"needs features_per_fit at most {math.floor(n_features / math.sqrt(3))} and here a "
            f"threshold above {_lowest_unimodal_threshold(rate, n_pairs):.4g}. Raise the "
            "threshold, lower features_per_fit, or use bound='r_concave' or bound='worst_case'."
        )
    return _unimodal_factor(votes, n_pairs) * rate**2 * n_features


def _affine_laws(
    log_ratio: np.ndarray, last: np.ndarray, positions: np.ndarray, s: float
) -> tuple[np.ndarray, np.ndarray]:
    """Laws f = g^-s, g affine on {0..k}, one row for each k, with g(k) / g(0) = exp(log_ratio).

    Returns f, of mass one, and the share of g that the far end contributes, d log g / d log_ratio.
    """
    far = np.exp(log_ratio)[:, None] * positions
    near = last[:, None] - positions
    inside = near >= 0
    g = np.where(inside, near + far, np.inf)
    f = (g / g.min(axis=1, keepdims=True)) ** -s
    return f / f.sum(axis=1, keepdims=True), np.where(inside, far / g, 0.0)


def _laws_of_mean(mean: float, last: np.ndarray, n_points: int, s: float) -> np.ndarray:
    """The affine law on {0..k} of the given mean, for every k in `last` (all above the mean).

    The mean falls monotonically in the log ratio of the two ends of g. Newton's method acts on the
    logarithm of the mean, which is almost straight where the mean is small; a step that leaves the
    bracket is replaced by a bisection.
    """
    positions = np.arange(n_points + 1.0)
    ratio = np.zeros(last.shape)
    low, high = np.full(last.shape, -600.0), np.full(last.shape, 600.0)
    for _ in range(200):
        f, share = _affine_laws(ratio, last, positions, s)
        means = f @ positions
        slope = -s * ((f * share) @ positions - means * (f * share).sum(axis=1))
        low = np.where(means > mean, ratio, low)
        high = np.where(means < mean, ratio, high)
        with np.errstate(divide="ignore", invalid="ignore"):
            newton = ratio - np.log(means / mean) * means / slope
        # Judged before the bracket: at the root rounding throws steps out of it. A NaN, from a mean
        # that underflowed, fails every comparison and is bisected.
        settled = np.abs(newton - ratio) <= 1e-13 * (1 + np.abs(ratio))
        if settled.all():
            break
        bisected = np.where((newton > low) & (newton < high), newton, (low + high) / 2)
        ratio = np.where(settled, ratio, bisected)
    return _affine_laws(ratio, last, positions, s)[0]


@lru_cache(maxsize=1024)
def _r_concave_tails(mean: float, n_points: int, r: float, first: int) -> np.ndarray:
    """D for every position T = first..B at once, in an array indexed by T; M = eta B = `mean`."""
    tails = np.zeros(n_points + 1)
    reached = min(math.floor(mean * (1 + 1e-12)), n_points)
    tails[: reached + 1] = 1.0
    start = max(reached + 1, first)
    if mean > 0 and start <= n_points:
        laws = _laws_of_mean(mean, np.arange(float(start), n_points + 1), n_points, -1 / r)
        beyond = np.cumsum(laws[:, ::-1], axis=1)[:, ::-1]
        tails[start:] = np.minimum(beyond.max(axis=0)[start:], 1.0)
    tails.setflags(write=False)
    return tails


def _tail_from(mean: float, n_points: int, r: float, position: int) -> float:
    """D at one position. Whole quarters of the lattice are computed, and kept for neighbours."""
    first = position - position % max(1, n_points // 4)
    return float(_r_concave_tails(mean, n_points, r, first)[position])


def r_concave_tail(mean: float, threshold: float, n_points: int, r: float) -> float:
    """Find the largest tail of an r-concave law with a bounded mean, D(eta, t, B, r).

    Parameters
    ----------
    mean : float
        The mean is at most this, eta, in [0, 1].
    threshold : float
        Where the tail begins, t; rounded up on the lattice.
    n_points : int
        The law lives on {0, 1/B, ..., 1}, B = n_points.
    r : float
        In [-1, 0): f^r is convex. The nearer to 0, the smaller the class.

    Returns
    -------
    float
        The largest P(X >= t) over the class.

    Raises
    ------
    ValueError
        If an argument is outside its range.

    Notes
    -----
    Exact up to rounding: the module's docstring derives that one scalar equation per support is
    enough. Where t <= mean the value is 1 (a point mass at t is in the class).

    References
    ----------
    Shah and Samworth (2013), section 3.3 and equation (8).

    Examples
    --------
    >>> from sparsesel.error_control import r_concave_tail
    >>> round(r_concave_tail(0.1, 5 / 8, 8, -1 / 2), 7)
    0.0467485
    """
    if not (0 <= mean <= 1 and n_points >= 1 and -1 <= r < 0):
        raise ValueError(
            f"mean={mean!r}, n_points={n_points!r}, r={r!r}: needed are a mean from 0 to 1, at "
            "least one point and r from -1 to below 0. Pass q/p or its square as the mean."
        )
    position = math.ceil(threshold * n_points - _GRID_SLACK)
    if position > n_points:
        return 0.0
    return _tail_from(float(mean * n_points), n_points, float(r), max(position, 0))


def r_concave_bound(
    features_per_fit: float, n_features: int, threshold: float, n_pairs: int
) -> float:
    r"""Bound the expected number of rarely picked features selected, for r-concave laws.

    .. math:: p \min\{D(\theta^2, 2\tau - 1, B, -1/2),\; D(\theta, \tau, 2B, -1/4)\}

    Parameters
    ----------
    features_per_fit : float
        The most features a half-sample may pick, q, in (0, n_features].
    n_features : int
        Number of candidates, p.
    threshold : float
        Threshold on the selection probability, in (0.5, 1]; rounded up on its grid.
    n_pairs : int
        Number of complementary pairs, B.

    Returns
    -------
    float
        The bound.

    Raises
    ------
    ValueError
        If an argument is outside its range.

    Notes
    -----
    Assumes independent rows, complementary pairs, and for each rarely picked feature an r-concave
    law with r = -1/2 of the share of pairs whose halves both pick it, and with r = -1/4 of the
    share of halves that pick it.

    References
    ----------
    Shah and Samworth (2013), equation (8).

    Examples
    --------
    >>> from sparsesel.error_control import r_concave_bound
    >>> round(r_concave_bound(50, 1000, 0.75, 50), 5)
    0.64785
    """
    _check_sizes(features_per_fit, n_features)
    votes, rate = _votes(threshold, n_pairs), features_per_fit / n_features
    both = _tail_from(rate**2 * n_pairs, n_pairs, -0.5, votes - n_pairs)
    either = _tail_from(rate * 2 * n_pairs, 2 * n_pairs, -0.25, votes)
    return n_features * min(both, either)


def _worst_case_on_grid(
    features_per_fit: float, n_features: int, threshold: float, n_pairs: int
) -> float:
    return worst_case_bound(features_per_fit, n_features, grid_threshold(threshold, n_pairs))


_BOUNDS: Mapping[str, Callable[[float, int, float, int], float]] = MappingProxyType(
    {
        "worst_case": _worst_case_on_grid,
        "unimodal": unimodal_bound,
        "r_concave": r_concave_bound,
    }
)


def expected_false_selections(
    bound: str, features_per_fit: float, n_features: int, threshold: float, n_pairs: int
) -> float:
    """Evaluate one of the bounds by its name.

    Parameters
    ----------
    bound : {"worst_case", "unimodal", "r_concave"}
        Which laws of the votes are allowed; each is contained in the one before.
    features_per_fit : float
        The most features a half-sample may pick, q, in (0, n_features].
    n_features : int
        Number of candidates, p.
    threshold : float
        Threshold on the selection probability, in (0.5, 1]; rounded up on its grid.
    n_pairs : int
        Number of complementary pairs, B.

    Returns
    -------
    float
        The bound on what `bounded_quantity` names.

    Raises
    ------
    ValueError
        If an argument is outside its range, or the unimodal bound does not hold there.

    References
    ----------
    Shah and Samworth (2013), Theorems 1 and 2, equation (8).

    Examples
    --------
    >>> from sparsesel.error_control import expected_false_selections
    >>> expected_false_selections("worst_case", 20, 1000, 0.9, 50)
    0.5
    """
    if bound not in _BOUNDS:
        raise ValueError(
            f"bound={bound!r} is not known; allowed are {', '.join(map(repr, _BOUNDS))}. Use "
            "'r_concave', or 'worst_case' to assume nothing about the votes."
        )
    return _BOUNDS[bound](features_per_fit, n_features, threshold, n_pairs)


@dataclass(frozen=True)
class Calibration:
    """The settings of one stability selection and what they guarantee.

    Parameters
    ----------
    features_per_fit : int
        The most features a half-sample may pick, q.
    threshold : float
        On the grid of selection probabilities.
    bound : str
        The bound that was chosen.
    value : float
        The chosen bound at these settings.
    worst_case : float
        The worst-case bound at these settings.
    capped : bool
        True where the number of rows, not the target, limited `features_per_fit`.
    """

    features_per_fit: int
    threshold: float
    bound: str
    value: float
    worst_case: float
    capped: bool


def largest_features_per_fit(
    half_size: int, n_covariates: int = 0, rarer_class: int | None = None
) -> int:
    """Find the most features that a half-sample of this size can be asked for.

    A lasso path on m degrees of freedom cannot hold more than m features and orders the last ones
    arbitrarily; four fifths are used.

    Parameters
    ----------
    half_size : int
        The smallest number of rows in a half.
    n_covariates : int, default=0
        Columns that are always in the model.
    rarer_class : int, optional
        For two classes, the smallest number of rows of the rarer one in a half.

    Returns
    -------
    int
        floor(0.8 m), m = half_size - 1 - n_covariates, and at most floor(0.8 rarer_class).

    Raises
    ------
    ValueError
        If no feature can be asked for.

    Examples
    --------
    >>> from sparsesel.error_control import largest_features_per_fit
    >>> largest_features_per_fit(100)
    79
    """
    room = half_size - 1 - n_covariates
    if rarer_class is not None:
        room = min(room, rarer_class)
    if room < 2:
        rarer = "" if rarer_class is None else f", {rarer_class} of them in the rarer class"
        raise ValueError(
            f"A half-sample has {half_size} rows{rarer}, with {n_covariates} covariates: too few "
            "to pick a feature. Needed are two rows more than the intercept and the covariates "
            "take, and two rows of each class, in every half. Give more rows or fewer covariates."
        )
    # In integers: 0.8 * 5 times a power of ten need not be exact.
    return 4 * room // 5


@dataclass(frozen=True)
class _Setting:
    """What stays fixed while a calibration searches."""

    bound: str
    n_features: int
    n_pairs: int

    def value(self, features_per_fit: int, threshold: float) -> float:
        """The bound, infinite where it does not hold."""
        if self.bound == "unimodal":
            votes = _votes(threshold, self.n_pairs)
            if not _unimodal_holds(features_per_fit / self.n_features, votes, self.n_pairs):
                return math.inf
        return expected_false_selections(
            self.bound, features_per_fit, self.n_features, threshold, self.n_pairs
        )

    def largest(self, pfer: float, threshold: float) -> int:
        """The largest q whose bound is at most pfer, 0 if there is none; the bound grows with q."""
        fits, fails = 0, self.n_features + 1
        while fails - fits > 1:
            middle = (fits + fails) // 2
            if self.value(middle, threshold) <= pfer:
                fits = middle
            else:
                fails = middle
        return fits

    def smallest_threshold(self, pfer: float, features_per_fit: int) -> float | None:
        """The smallest grid value from 0.60 up whose bound is at most pfer."""
        halves = 2 * self.n_pairs
        for votes in range(_votes(LOWEST_AUTOMATIC_THRESHOLD, self.n_pairs), halves + 1):
            if self.value(features_per_fit, votes / halves) <= pfer:
                return votes / halves
        return None


def calibrate(
    pfer: float,
    n_features: int,
    largest_fit: int,
    n_pairs: int,
    bound: str = "r_concave",
    threshold: float | None = None,
    features_per_fit: int | None = None,
) -> Calibration:
    """Choose how many features a half may pick and the threshold, without looking at the outcome.

    - Neither given: features_per_fit is the largest value whose bound at threshold 0.75 is at most
      pfer, or `largest_fit` where that is smaller; the threshold is 0.75, or, where `largest_fit`
      binds, the smallest grid value from 0.60 up whose bound is at most pfer.
    - threshold given: the same features_per_fit, at that threshold.
    - features_per_fit given: the smallest grid threshold from 0.60 up whose bound is at most pfer.
    - Both given: pfer is a ceiling that they must respect.

    Parameters
    ----------
    pfer : float
        Target: the bound is at most this. Positive.
    n_features : int
        Number of candidates, p.
    largest_fit : int
        The most features a half can be asked for (see `largest_features_per_fit`). It limits
        an automatic features_per_fit only.
    n_pairs : int
        Number of complementary pairs.
    bound : {"worst_case", "unimodal", "r_concave"}, default="r_concave"
        The bound to use.
    threshold : float, optional
        In (0.5, 1].
    features_per_fit : int, optional
        From 1 to n_features.

    Returns
    -------
    Calibration
        The settings, the chosen bound there, and the worst-case bound beside it.

    Raises
    ------
    ValueError
        If the target cannot be met. The message names the largest features_per_fit that meets it,
        or the nearest target.

    References
    ----------
    Meinshausen and Bühlmann (2010), section 3.2; Shah and Samworth (2013), section 3.4.

    Examples
    --------
    >>> from sparsesel.error_control import calibrate
    >>> calibrate(1.0, n_features=20_000, largest_fit=1_000, n_pairs=50).features_per_fit
    288
    >>> calibrate(1.0, n_features=20_000, largest_fit=79, n_pairs=50).threshold
    0.6
    """
    setting = _checked_setting(pfer, n_features, largest_fit, n_pairs, bound)
    capped = False
    if features_per_fit is not None:
        _check_sizes(features_per_fit, n_features)
        if threshold is None:
            threshold = _threshold_for(setting, pfer, features_per_fit)
        else:
            _check_ceiling(setting, pfer, features_per_fit, threshold)
    else:
        start = DEFAULT_THRESHOLD if threshold is None else threshold
        wanted = setting.largest(pfer, start)
        if wanted == 0:
            raise ValueError(_unreachable(setting, pfer, start))
        capped = wanted > largest_fit
        features_per_fit = min(wanted, largest_fit)
        if threshold is None:
            threshold = _threshold_for(setting, pfer, features_per_fit) if capped else start
    threshold = grid_threshold(threshold, n_pairs)
    return Calibration(
        features_per_fit=int(features_per_fit),
        threshold=threshold,
        bound=bound,
        value=setting.value(features_per_fit, threshold),
        worst_case=worst_case_bound(features_per_fit, n_features, threshold),
        capped=capped,
    )


def _checked_setting(
    pfer: float, n_features: int, largest_fit: int, n_pairs: int, bound: str
) -> _Setting:
    if not 0 < pfer < math.inf:
        raise ValueError(
            f"pfer={pfer!r} must be a positive number: the expected number of false selections "
            "that is allowed. Use 1.0 if in doubt."
        )
    if largest_fit < 1:
        raise ValueError(
            f"largest_fit={largest_fit!r}: a half must be able to pick at least one feature. "
            "Give more rows."
        )
    setting = _Setting(bound, n_features, n_pairs)
    setting.value(1, DEFAULT_THRESHOLD)
    return setting


def _unreachable(setting: _Setting, pfer: float, threshold: float) -> str:
    nearest = setting.value(1, threshold)
    reachable = (
        f"the nearest target at this threshold is pfer={_rounded_up(nearest)}"
        if math.isfinite(nearest)
        else "this bound holds for no features_per_fit at this threshold"
    )
    return (
        f"pfer={pfer} cannot be met with threshold={threshold} and bound={setting.bound!r} for "
        f"{setting.n_features} features, even with one feature per half: {reachable}. Raise pfer "
        "or the threshold."
    )


def _rounded_up(value: float) -> str:
    """Three digits, never below the value: a target printed here can be typed in and met."""
    digits = 2 - math.floor(math.log10(value))
    return f"{math.ceil(value * 10**digits) / 10**digits:.6g}"


def _threshold_for(setting: _Setting, pfer: float, features_per_fit: int) -> float:
    threshold = setting.smallest_threshold(pfer, features_per_fit)
    if threshold is None:
        nearest = setting.value(features_per_fit, 1.0)
        reachable = (
            f"the nearest target is pfer={_rounded_up(nearest)}"
            if math.isfinite(nearest)
            else "this bound does not hold for so many"
        )
        raise ValueError(
            f"pfer={pfer} cannot be met with features_per_fit={features_per_fit} of "
            f"{setting.n_features} features and bound={setting.bound!r} at any threshold: "
            f"{reachable}; the largest features_per_fit for this pfer is "
            f"{setting.largest(pfer, 1.0)}. Lower features_per_fit or raise pfer."
        )
    return threshold


def _check_ceiling(setting: _Setting, pfer: float, features_per_fit: int, threshold: float) -> None:
    value = setting.value(features_per_fit, threshold)
    if value <= pfer:
        return
    largest = setting.largest(pfer, threshold)
    if largest == 0:
        raise ValueError(_unreachable(setting, pfer, threshold))
    allowed = (
        f"allow up to {value:.4g} expected false selections, above pfer={pfer}"
        if math.isfinite(value)
        else f"are outside the conditions of bound={setting.bound!r}"
    )
    raise ValueError(
        f"features_per_fit={features_per_fit} and threshold={threshold} {allowed}. The largest "
        f"features_per_fit for this pfer and threshold is {largest}. Lower features_per_fit to "
        "it, raise the threshold, or leave one of the two None."
    )


def why_none_stable(
    largest_probability: float, calibration: Calibration, n_features: int, n_pairs: int
) -> tuple[str, str | None]:
    """Explain an empty list, and name the nearest target that would have filled it.

    Parameters
    ----------
    largest_probability : float
        The largest selection probability of a candidate, in [0, 1].
    calibration : Calibration
        The settings that were used.
    n_features : int
        Number of candidates.
    n_pairs : int
        Number of complementary pairs.

    Returns
    -------
    reason : str
        Why nothing was selected.
    nearest_target : str or None
        The nearest target, None where no bound holds at the largest probability.

    Examples
    --------
    >>> from sparsesel.error_control import calibrate, why_none_stable
    >>> settings = calibrate(1.0, n_features=1_000, largest_fit=100, n_pairs=50)
    >>> why_none_stable(0.62, settings, n_features=1_000, n_pairs=50)[0]
    'the largest selection probability is 0.62, below the threshold 0.75'
    """
    reason = (
        f"the largest selection probability is {largest_probability:.3g}, below the threshold "
        f"{calibration.threshold:.3g}"
    )
    if largest_probability <= 0.5:
        return reason, None
    setting = _Setting(calibration.bound, n_features, n_pairs)
    value = setting.value(calibration.features_per_fit, largest_probability)
    if not math.isfinite(value):
        return reason, None
    return reason, (
        f"threshold {largest_probability:.3g} with the same features_per_fit, that is "
        f"pfer {_rounded_up(value)}"
    )
