r"""Filters that turn knockoff contrasts into a list with a controlled error.

Letters, as in the papers: ``W_j`` the contrast of feature ``j`` of ``p``, large and positive where
the feature beats its copy; ``q`` the target false discovery rate; ``T`` a threshold, the list
being ``{j : W_j >= T}``; ``v`` how many negative contrasts are met before the list is closed;
``M`` draws of the copies; ``e_j`` e-values; ``Pi_j`` the share of draws that select ``j``.

Every filter rests on one property (Barber and Candès 2015, Lemma 1; Candès et al. 2018, Lemma
3.3): given the magnitudes ``|W|`` and the signs of the other features, the signs of the null
features with ``W_j != 0`` are independent fair coins. A null feature above ``t`` is then mirrored
by one below ``-t``, and ``#{W_j <= -t}`` estimates the false ones among ``#{W_j >= t}``.

**FDR.** ``T = min{t in {|W_j|} without 0 : (a + #{W_j <= -t}) / max(1, #{W_j >= t}) <= q}``, and
infinity if there is none. With ``a = 1`` (knockoff+) the false discovery rate ``E[V / max(R, 1)]``
of ``V`` false among ``R`` selected is at most ``q``; with ``a = 0`` (knockoff) only ``E[V / (R +
1/q)]`` is.

**Stopping at a negative.** Go down the magnitudes and stop at the ``v``-th negative contrast. The
null features passed are dominated by a negative binomial ``NB(v, 1/2)``, the heads of fair coins
before the ``v``-th tail: their mean is at most ``v`` (PFER), and ``P(V >= k)`` at most ``P(NB(v,
1/2) >= k) = I_{1/2}(k, v)``, the regularised incomplete beta function (k-FWER). Where the target
falls between two integers, ``v + 1`` instead of ``v`` with the right probability uses it up.

**Draws combined by e-values.** With the knockoff+ threshold ``T`` of one draw at its own level,
``e_j = p 1{W_j >= T} / (1 + #{W_j <= -T})`` has ``sum over nulls of E e_j <= p``. Averages over
draws keep that, and the step-up rule of Wang and Ramdas (2022) on them, which selects the ``k``
largest for the largest ``k`` with ``e_(k) >= p / (q k)``, has false discovery rate at most ``q``,
whatever the dependence between the draws and whatever the level of each draw.

**Draws combined by selection frequency.** Every draw stops at its ``v``-th negative, so ``sum over
nulls of E Pi_j <= v``. If ``P(Pi_j >= eta) <= gamma E Pi_j`` for every null feature, the list
``{Pi_j >= eta}`` has PFER at most ``gamma v``. Markov's inequality gives, on the lattice of ``M``
draws and with ``c = ceil(eta M)``, ``gamma = M / c`` without any condition. Where the law of
``Pi_j`` on ``{0, 1/M, ..., 1}`` is nonincreasing for every null feature it is a mixture of uniform
laws on ``{0, ..., k} / M``, and ``gamma = max over k >= c of 2 M (k + 1 - c) / (k (k + 1))``,
which is exactly 1 at ``eta = 1/2`` for an odd number of draws.

Ties and zeros. A zero contrast is evidence of nothing: it is never selected and never counted.
Tied magnitudes stand or fall together; the filters that stop at a negative contrast leave out the
positive ones tied with it, a subset of what any order among the ties would select. Contrasts that
are not finite are an error.

References
----------
Barber, R. F. and Candès, E. J. (2015). Controlling the false discovery rate via knockoffs. *Annals
of Statistics* 43, 2055-2085. Definitions 3 and 4, Theorems 1 and 2.

Candès, E., Fan, Y., Janson, L. and Lv, J. (2018). Panning for gold: 'model-X' knockoffs for high
dimensional controlled variable selection. *Journal of the Royal Statistical Society B* 80,
551-577.

Janson, L. and Su, W. (2016). Familywise error rate control via knockoffs. *Electronic Journal of
Statistics* 10, 960-975.

Ren, Z. and Barber, R. F. (2024). Derandomised knockoffs: leveraging e-values for false discovery
rate control. *Journal of the Royal Statistical Society B* 86, 122-154.

Ren, Z., Wei, Y. and Candès, E. (2023). Derandomizing knockoffs. *Journal of the American
Statistical Association* 118, 948-958.

Wang, R. and Ramdas, A. (2022). False discovery rate control with e-values. *Journal of the Royal
Statistical Society B* 84, 822-852.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import betainc

__all__ = [
    "FILTER_MEASURES",
    "FILTER_SOURCES",
    "derandomized_selection",
    "draw_negatives",
    "e_bh",
    "frequency_factor",
    "frequency_pfer",
    "knockoff_e_values",
    "knockoff_threshold",
    "least_candidates",
    "least_selection",
    "negatives_for_frequency",
    "negatives_for_kfwer",
    "select",
    "selection_frequency",
    "smallest_fdr",
    "smallest_pfer",
    "stopping_threshold",
    "why_none_frequent",
    "why_none_passed",
    "why_none_stopped",
]

FILTER_MEASURES: Mapping[str, str] = MappingProxyType(
    {
        "knockoff+": "false discovery rate, the expected share of false selections in the list",
        "knockoff": (
            "modified false discovery rate, the expected ratio of the false selections to the "
            "length of the list plus 1/fdr"
        ),
        "e_values": "false discovery rate, the expected share of false selections in the list",
        "k_fwer": "probability of k or more false selections (k-FWER)",
        "pfer": "expected number of false selections (PFER)",
        "frequency": "expected number of false selections (PFER)",
    }
)

FILTER_SOURCES: Mapping[str, str] = MappingProxyType(
    {
        "knockoff+": "Barber and Candès 2015, Theorem 2",
        "knockoff": "Barber and Candès 2015, Theorem 1",
        "e_values": "Ren and Barber 2024, with the step-up rule of Wang and Ramdas 2022",
        "k_fwer": "Janson and Su 2016",
        "pfer": "Janson and Su 2016",
        "frequency": "Ren, Wei and Candès 2023",
    }
)

# Averages of draws carry rounding; without this slack a list would hang on the last bit.
_E_VALUE_SLACK = 1e-12

# Targets that an empty list is tried at; beyond a half a list says nothing.
_USUAL_FDR = (0.05, 0.1, 0.15, 0.2, 0.25, 0.3, 0.4, 0.5)


def _checked_contrast(contrast: ArrayLike, n_dimensions: int = 1) -> np.ndarray:
    values = np.asarray(contrast, dtype=float)
    if values.ndim != n_dimensions or values.size == 0:
        shape = "(p,)" if n_dimensions == 1 else "(n_draws, p)"
        raise ValueError(
            f"contrast has shape {values.shape}; needed is {shape} with at least one entry. Pass "
            "one contrast per candidate" + (", one row per draw." if n_dimensions == 2 else ".")
        )
    bad = np.flatnonzero(~np.isfinite(np.atleast_2d(values)).all(axis=0))
    if bad.size:
        raise ValueError(
            f"contrast is not finite at {bad.size} of {values.shape[-1]} candidates, the first at "
            f"position {bad[0]}; every contrast must be a finite number. Check that the importance "
            "measure converged, and give a candidate without evidence the contrast 0."
        )
    return values


def _check_share(value: float, name: str) -> None:
    if not 0 < value < 1:
        raise ValueError(
            f"{name}={value!r} must lie strictly between 0 and 1. Usual values are 0.1 and 0.2."
        )


def _check_vote(threshold: float, n_draws: int) -> None:
    if not (0 < threshold <= 1 and n_draws >= 1):
        raise ValueError(
            f"threshold={threshold!r} with n_draws={n_draws!r}: the threshold must lie above 0 and "
            "at most at 1, and there must be at least one draw. Use 0.5 and 31 draws."
        )


def _counts(contrast: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Distinct nonzero magnitudes t, ascending, with #{W >= t} and #{W <= -t} for each."""
    magnitudes = np.unique(np.abs(contrast[contrast != 0]))
    positive, negative = np.sort(contrast[contrast > 0]), np.sort(-contrast[contrast < 0])
    above = positive.size - np.searchsorted(positive, magnitudes, side="left")
    below = negative.size - np.searchsorted(negative, magnitudes, side="left")
    return magnitudes, above, below


def _first(magnitudes: np.ndarray, allowed: np.ndarray) -> float:
    return float(magnitudes[np.argmax(allowed)]) if allowed.any() else math.inf


def knockoff_threshold(contrast: ArrayLike, fdr: float, plus: bool = True) -> float:
    r"""Find the threshold of the knockoff (+) filter.

    .. math:: T = \min\{t : (a + \#\{W_j \le -t\}) / \max(1, \#\{W_j \ge t\}) \le q\}

    Parameters
    ----------
    contrast : array_like of shape (p,)
        Contrasts of the candidates with their copies.
    fdr : float
        Target q, strictly between 0 and 1.
    plus : bool, default=True
        True for knockoff+ (a = 1), False for knockoff (a = 0).

    Returns
    -------
    float
        T, a nonzero magnitude that occurs in `contrast`; infinity where the list is empty.

    Raises
    ------
    ValueError
        If a contrast is not finite or `fdr` is out of range.

    Notes
    -----
    knockoff+ controls the false discovery rate, knockoff the modified rate E[V / (R + 1/q)], both
    in finite samples, provided that the signs of null contrasts are fair coins given the rest.

    References
    ----------
    Barber and Candès (2015), Definitions 3 and 4, Theorems 1 and 2.

    Examples
    --------
    >>> from sparsesel.error_control import knockoff_threshold
    >>> knockoff_threshold([10, 9, 8, -1, 7, 6, -2, 5, 0.5, -0.3], fdr=0.2)
    5.0
    """
    values = _checked_contrast(contrast)
    _check_share(fdr, "fdr")
    magnitudes, above, below = _counts(values)
    # Division, as printed: 1/5 is then exactly the number 0.2 that was asked for.
    estimates = (int(plus) + below) / np.maximum(1, above)
    return _first(magnitudes, (estimates <= fdr) & (above > 0))


def select(contrast: ArrayLike, threshold: float) -> np.ndarray:
    """Select the candidates that reach a threshold.

    Parameters
    ----------
    contrast : array_like of shape (p,)
        Contrasts.
    threshold : float
        Positive; infinity selects nothing.

    Returns
    -------
    ndarray of bool of shape (p,)
        True where contrast >= threshold.

    Raises
    ------
    ValueError
        If a contrast is not finite or the threshold is not positive.

    Examples
    --------
    >>> from sparsesel.error_control import select
    >>> select([3.0, 0.0, -2.0], 1.0).tolist()
    [True, False, False]
    """
    values = _checked_contrast(contrast)
    if not threshold > 0:
        raise ValueError(
            f"threshold={threshold!r} must be positive: a contrast of 0 is evidence of nothing. "
            "Take it from knockoff_threshold or stopping_threshold."
        )
    return values >= threshold


def least_selection(fdr: float, plus: bool = True) -> int:
    """Find the least number of features that a filter can select, other than none.

    Parameters
    ----------
    fdr : float
        Target, strictly between 0 and 1.
    plus : bool, default=True
        knockoff+ or knockoff.

    Returns
    -------
    int
        For knockoff+ the smallest k with 1/k <= fdr; 1 for knockoff.

    Examples
    --------
    >>> from sparsesel.error_control import least_selection
    >>> least_selection(0.2), least_selection(0.1), least_selection(0.2, plus=False)
    (5, 10, 1)
    """
    _check_share(fdr, "fdr")
    if not plus:
        return 1
    least = math.ceil(1 / fdr)
    # 1 / fdr may round to just above an integer; the filter itself compares 1/k with fdr.
    return least - 1 if least > 1 and 1 / (least - 1) <= fdr else least


def smallest_fdr(contrast: ArrayLike, plus: bool = True) -> float:
    """Find the smallest target at which the list would not have been empty.

    Parameters
    ----------
    contrast : array_like of shape (p,)
        Contrasts.
    plus : bool, default=True
        knockoff+ or knockoff.

    Returns
    -------
    float
        The smallest estimate of the false discovery proportion over all thresholds with a nonempty
        list; infinity if no contrast is positive. It can exceed 1. A target chosen by it after
        seeing the contrasts controls nothing.

    Examples
    --------
    >>> from sparsesel.error_control import smallest_fdr
    >>> smallest_fdr([10, 9, 8, -1, 7])
    0.25
    """
    _, above, below = _counts(_checked_contrast(contrast))
    some = above > 0
    return float(np.min((int(plus) + below[some]) / above[some])) if some.any() else math.inf


def negatives_for_kfwer(k: int, level: float) -> float:
    r"""Find at which negative contrast to stop for a k-familywise error rate.

    Parameters
    ----------
    k : int
        At least k false selections are the error, k >= 1.
    level : float
        Its probability is at most this, strictly between 0 and 1.

    Returns
    -------
    float
        v + w: v the largest integer with P(NB(v, 1/2) >= k) <= level, w in [0, 1) the probability
        with which v + 1 is used instead, so that the level is used up (see `draw_negatives`).

    Raises
    ------
    ValueError
        If k or level is out of range.

    References
    ----------
    Janson and Su (2016).

    Examples
    --------
    >>> from sparsesel.error_control import negatives_for_kfwer
    >>> negatives_for_kfwer(1, 0.5)
    1.0
    >>> negatives_for_kfwer(1, 0.05)
    0.1
    """
    _check_share(level, "level")
    if not (k >= 1 and int(k) == k):
        raise ValueError(
            f"k={k!r} must be a positive integer: k = 1 bounds the probability of any false "
            "selection."
        )
    v, reached = 0, 0.0
    while (following := float(betainc(k, v + 1, 0.5))) <= level:
        v, reached = v + 1, following
    return v + (level - reached) / (following - reached)


def draw_negatives(n_negatives: float, generator: np.random.Generator | None = None) -> int:
    """Turn a stopping number that need not be whole into a whole one.

    Parameters
    ----------
    n_negatives : float
        v + w with 0 <= w < 1: a PFER target, or what `negatives_for_kfwer` returned.
    generator : numpy.random.Generator, optional
        Draws v + 1 with probability w, which keeps the error at its target exactly. Without one the
        number is rounded down, which keeps it below.

    Returns
    -------
    int
        The whole number.

    Examples
    --------
    >>> from sparsesel.error_control import draw_negatives
    >>> draw_negatives(2.7)
    2
    """
    if not 0 <= n_negatives < math.inf:
        raise ValueError(
            f"n_negatives={n_negatives!r} must be a finite number from 0: the negative contrast at "
            "which the list is closed, for example the PFER target."
        )
    whole = math.floor(n_negatives)
    if generator is None:
        return whole
    return whole + int(generator.random() < n_negatives - whole)


def stopping_threshold(contrast: ArrayLike, n_negatives: int) -> float:
    r"""Find the threshold that stops above the v-th largest negative contrast.

    .. math:: T = \min\{t \in \{|W_j|\} \setminus 0 : \#\{W_j \le -t\} < v\}

    Parameters
    ----------
    contrast : array_like of shape (p,)
        Contrasts.
    n_negatives : int
        v. With v = 0 nothing is selected.

    Returns
    -------
    float
        T; infinity where the list is empty.

    Raises
    ------
    ValueError
        If a contrast is not finite or `n_negatives` is not a whole number from 0.

    Notes
    -----
    The number of false selections V is dominated by NB(v, 1/2): E V <= v, and
    P(V >= k) <= P(NB(v, 1/2) >= k). Positive contrasts tied with the v-th negative one are left
    out.

    References
    ----------
    Janson and Su (2016), the v-knockoff procedure.

    Examples
    --------
    >>> from sparsesel.error_control import stopping_threshold
    >>> stopping_threshold([10, 9, 8, -1, 7, 6, -2, 5, 0.5, -0.3], 1)
    5.0
    """
    values = _checked_contrast(contrast)
    if int(n_negatives) != n_negatives or n_negatives < 0:
        raise ValueError(
            f"n_negatives={n_negatives!r} must be a whole number from 0. Pass it through "
            "draw_negatives."
        )
    magnitudes, above, below = _counts(values)
    return _first(magnitudes, (below < n_negatives) & (above > 0))


def smallest_pfer(contrast: ArrayLike) -> float:
    """Find the smallest whole PFER target at which the list would not have been empty.

    Parameters
    ----------
    contrast : array_like of shape (p,)
        Contrasts.

    Returns
    -------
    float
        One more than the negative contrasts at least as large as the largest positive one; infinity
        if none is positive. Chosen after seeing the contrasts it controls nothing.

    Examples
    --------
    >>> from sparsesel.error_control import smallest_pfer
    >>> smallest_pfer([-5.0, -4.0, 3.0])
    3.0
    """
    values = _checked_contrast(contrast)
    largest = values.max()
    return float(1 + np.sum(values <= -largest)) if largest > 0 else math.inf


def knockoff_e_values(contrasts: ArrayLike, draw_fdr: float) -> np.ndarray:
    r"""Average the e-values of several knockoff draws.

    .. math:: e_j = p\, 1\{W_j \ge T\} / (1 + \#\{W_j \le -T\})

    in each draw, T its knockoff+ threshold at level `draw_fdr`.

    Parameters
    ----------
    contrasts : array_like of shape (n_draws, p)
        One row of contrasts per draw of the copies.
    draw_fdr : float
        Level of each draw, strictly between 0 and 1. It influences power only.

    Returns
    -------
    ndarray of shape (p,)
        Averages, between 0 and p. Over the null candidates they sum to at most p in expectation.

    Raises
    ------
    ValueError
        If a contrast is not finite or the level is out of range.

    References
    ----------
    Ren and Barber (2024).

    Examples
    --------
    >>> from sparsesel.error_control import knockoff_e_values
    >>> knockoff_e_values([[3.0, 2.0, -1.0], [3.0, -2.0, 1.0]], draw_fdr=0.5).tolist()
    [1.5, 1.5, 0.0]
    """
    draws = _checked_contrast(contrasts, 2)
    values = np.zeros(draws.shape)
    for value, contrast in zip(values, draws, strict=True):
        threshold = knockoff_threshold(contrast, draw_fdr)
        value[contrast >= threshold] = contrast.size / (1 + np.sum(contrast <= -threshold))
    return values.mean(axis=0)


def e_bh(e_values: ArrayLike, fdr: float) -> np.ndarray:
    r"""Select by the step-up rule on e-values.

    .. math:: \hat k = \max\{k : e_{(k)} \ge p / (q k)\}

    Parameters
    ----------
    e_values : array_like of shape (p,)
        Nonnegative.
    fdr : float
        Target q, strictly between 0 and 1.

    Returns
    -------
    ndarray of bool of shape (p,)
        True for the k largest.

    Raises
    ------
    ValueError
        If an e-value is negative or NaN, or the target out of range.

    Notes
    -----
    The false discovery rate is at most q under any dependence if the e-values of the nulls sum to
    at most p in expectation.

    References
    ----------
    Wang and Ramdas (2022).

    Examples
    --------
    >>> from sparsesel.error_control import e_bh
    >>> e_bh([20.0, 9.0, 1.0, 0.0], fdr=0.25).tolist()
    [True, True, False, False]
    """
    values = _checked_e_values(e_values)
    _check_share(fdr, "fdr")
    order = np.sort(values)[::-1]
    reached = order * fdr * np.arange(1, values.size + 1) >= values.size * (1 - _E_VALUE_SLACK)
    if not reached.any():
        return np.zeros(values.size, dtype=bool)
    return values >= order[np.flatnonzero(reached)[-1]]


def _checked_e_values(e_values: ArrayLike) -> np.ndarray:
    values = np.asarray(e_values, dtype=float)
    if values.ndim != 1 or values.size == 0 or not np.all(values >= 0):
        raise ValueError(
            f"e_values has shape {values.shape} and smallest value "
            f"{values.min() if values.size else None}: needed is (p,), every entry 0 or more and "
            "none NaN. Take them from knockoff_e_values."
        )
    return values


def derandomized_selection(
    contrasts: ArrayLike, fdr: float, draw_fdr: float | None = None
) -> np.ndarray:
    """Select from several knockoff draws with a controlled false discovery rate.

    Parameters
    ----------
    contrasts : array_like of shape (n_draws, p)
        One row of contrasts per draw of the copies.
    fdr : float
        Target, strictly between 0 and 1.
    draw_fdr : float, optional
        Level of each draw; fdr / 2 by default. At fdr itself a candidate must be selected in almost
        every draw without a negative contrast, and most lists are empty.

    Returns
    -------
    ndarray of bool of shape (p,)
        The selected candidates.

    Notes
    -----
    The false discovery rate is at most `fdr` under the condition of `knockoff_threshold` in every
    draw; nothing is assumed about the dependence between draws.

    References
    ----------
    Ren and Barber (2024).

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.error_control import derandomized_selection
    >>> draws = np.tile(np.r_[np.full(8, 2.0), -1.0, 1.0], (3, 1))
    >>> int(derandomized_selection(draws, fdr=0.25).sum())
    8
    """
    level = fdr / 2 if draw_fdr is None else draw_fdr
    return e_bh(knockoff_e_values(contrasts, level), fdr)


def least_candidates(fdr: float, draw_fdr: float | None = None) -> int:
    """Find the least number of candidates for which `derandomized_selection` can select anything.

    Parameters
    ----------
    fdr : float
        Target, strictly between 0 and 1.
    draw_fdr : float, optional
        Level of each draw; fdr / 2 by default.

    Returns
    -------
    int
        A draw that is not empty holds at least 1/draw_fdr candidates, and the combined list, whose
        e-values are at most p, at least 1/fdr.

    Examples
    --------
    >>> from sparsesel.error_control import least_candidates
    >>> least_candidates(0.1)
    20
    """
    level = fdr / 2 if draw_fdr is None else draw_fdr
    return max(least_selection(level), least_selection(fdr))


def selection_frequency(
    contrasts: ArrayLike,
    n_negatives: float,
    generator: np.random.Generator | None = None,
) -> np.ndarray:
    """Measure how often each candidate is selected when every draw stops at a negative contrast.

    Parameters
    ----------
    contrasts : array_like of shape (n_draws, p)
        One row of contrasts per draw of the copies.
    n_negatives : float
        v of every draw. Where it is not whole, each draw rounds it by itself (`draw_negatives`).
    generator : numpy.random.Generator, optional
        For that rounding; without one it is rounded down.

    Returns
    -------
    ndarray of shape (p,)
        Shares of draws, multiples of 1 / n_draws.

    References
    ----------
    Ren, Wei and Candès (2023).

    Examples
    --------
    >>> from sparsesel.error_control import selection_frequency
    >>> selection_frequency([[3.0, 2.0, -1.0], [3.0, -2.0, 1.0]], 1).tolist()
    [1.0, 0.5, 0.0]
    """
    draws = _checked_contrast(contrasts, 2)
    votes = np.zeros(draws.shape[1])
    for contrast in draws:
        votes += contrast >= stopping_threshold(contrast, draw_negatives(n_negatives, generator))
    return votes / draws.shape[0]


def frequency_factor(threshold: float, n_draws: int, nonincreasing: bool = False) -> float:
    r"""Find the factor between the PFER of one draw and that of the list by frequency.

    Parameters
    ----------
    threshold : float
        A candidate is selected if its frequency is at least this, eta, in (0, 1].
    n_draws : int
        Number of draws, M.
    nonincreasing : bool, default=False
        Assume that for every null candidate the law of its frequency on {0, 1/M, ..., 1} is
        nonincreasing. False assumes nothing.

    Returns
    -------
    float
        gamma with P(frequency >= eta) <= gamma E(frequency) for every null candidate. With
        c = ceil(eta M): M/c by Markov's inequality, or
        max over k = c..M of 2M(k + 1 - c) / (k (k + 1)).

    References
    ----------
    Ren, Wei and Candès (2023), PFER at most gamma v under that inequality. The maximum is derived
    in the module's docstring; it is 1 at eta = 1/2 for odd M.

    Examples
    --------
    >>> from sparsesel.error_control import frequency_factor
    >>> frequency_factor(0.5, 31, nonincreasing=True)
    1.0
    >>> frequency_factor(0.5, 50)
    2.0
    """
    _check_vote(threshold, n_draws)
    least = _least_votes(threshold, n_draws)
    if not nonincreasing:
        return n_draws / least
    k = np.arange(least, n_draws + 1.0)
    return float(np.max(2 * n_draws * (k + 1 - least) / (k * (k + 1))))


def _least_votes(threshold: float, n_draws: int) -> int:
    # 0.7 * 10 must stay 7 votes.
    return math.ceil(threshold * n_draws - 1e-9)


def frequency_pfer(
    n_negatives: float, threshold: float, n_draws: int, nonincreasing: bool = False
) -> float:
    """Bound the expected number of false selections by frequency.

    Parameters
    ----------
    n_negatives : float
        v of every draw, nonnegative.
    threshold : float
        On the frequency, in (0, 1].
    n_draws : int
        Number of draws.
    nonincreasing : bool, default=False
        As in `frequency_factor`.

    Returns
    -------
    float
        gamma v.

    References
    ----------
    Ren, Wei and Candès (2023).

    Examples
    --------
    >>> from sparsesel.error_control import frequency_pfer
    >>> frequency_pfer(1, 0.5, 31, nonincreasing=True)
    1.0
    """
    return frequency_factor(threshold, n_draws, nonincreasing) * n_negatives


def negatives_for_frequency(
    pfer: float, threshold: float, n_draws: int, nonincreasing: bool = False
) -> float:
    """Find the v of every draw that gives the list by frequency a PFER target.

    Parameters
    ----------
    pfer : float
        Target, positive.
    threshold : float
        On the frequency, in (0, 1].
    n_draws : int
        Number of draws.
    nonincreasing : bool, default=False
        As in `frequency_factor`.

    Returns
    -------
    float
        pfer / gamma; where it is not whole, pass a generator to `selection_frequency`.

    Raises
    ------
    ValueError
        If an argument is out of range.

    Examples
    --------
    >>> from sparsesel.error_control import negatives_for_frequency
    >>> negatives_for_frequency(1.0, 0.5, 31, nonincreasing=True)
    1.0
    """
    if not 0 < pfer < math.inf:
        raise ValueError(
            f"pfer={pfer!r} must be a positive number: the expected number of false selections "
            "that is allowed. Use 1.0 if in doubt."
        )
    return pfer / frequency_factor(threshold, n_draws, nonincreasing)


def why_none_passed(contrasts: ArrayLike, fdr: float, plus: bool = True) -> tuple[str, str | None]:
    """Explain an empty list of a false discovery rate filter, and name the nearest target.

    Parameters
    ----------
    contrasts : array_like of shape (p,) or (n_draws, p)
        Contrasts of one draw, or of the draws that `derandomized_selection` combined.
    fdr : float
        The target.
    plus : bool, default=True
        knockoff+ or knockoff, for one draw.

    Returns
    -------
    reason : str
        Why nothing was selected.
    nearest_target : str or None
        The nearest target below 1 that would have filled the list, if there is one.

    Examples
    --------
    >>> from sparsesel.error_control import why_none_passed
    >>> why_none_passed([10, 9, 8, -1, 7], fdr=0.1)[1]
    'fdr 0.25'
    """
    values = np.asarray(contrasts, dtype=float)
    if values.ndim == 2:
        return _why_no_e_value(_checked_contrast(values, 2), fdr)
    values = _checked_contrast(values)
    least, nearest = least_selection(fdr, plus), smallest_fdr(values, plus)
    if values.size < least:
        reason = (
            f"a list at fdr {fdr:.3g} holds at least {least} and there are {values.size} candidates"
        )
    elif not np.any(values > 0):
        reason = "no candidate beat its copy"
    else:
        reason = (
            f"no threshold brings the estimated false discovery proportion down to {fdr:.3g} (a "
            f"list at this target holds at least {least}; {int(np.sum(values > 0))} of "
            f"{values.size} candidates beat their copies, and the smallest estimate is "
            f"{nearest:.3g})"
        )
    return reason, _named_fdr(nearest)


def _why_no_e_value(contrasts: np.ndarray, fdr: float) -> tuple[str, str | None]:
    n_draws, n_candidates = contrasts.shape
    thresholds = [knockoff_threshold(contrast, fdr / 2) for contrast in contrasts]
    empty = int(np.sum(np.isinf(thresholds)))
    if n_candidates < least_candidates(fdr):
        reason = (
            f"{n_draws} draws combined by e-values at fdr {fdr:.3g} need at least "
            f"{least_candidates(fdr)} candidates and there are {n_candidates}"
        )
    else:
        reason = (
            f"{empty} of {n_draws} draws are empty at their level {fdr / 2:.3g}, half of the "
            f"target (a draw that is not empty holds at least {least_selection(fdr / 2)})"
        )
        if empty < n_draws:
            reason += f", and the others agree too little for the target {fdr:.3g}"
    # The e-values change with the target, so usual targets are tried instead of solving for one.
    for target in _USUAL_FDR:
        if target > fdr and derandomized_selection(contrasts, target).any():
            return reason, _named_fdr(target)
    return reason, None


def _named_fdr(nearest: float) -> str | None:
    """Three digits rounded up, so that the target printed is one that can be met."""
    rounded = math.ceil(nearest * 1000 - 1e-9) / 1000 if math.isfinite(nearest) else math.inf
    return f"fdr {rounded:.3g}" if rounded < 1 else None


def why_none_stopped(contrast: ArrayLike, n_negatives: int) -> tuple[str, str | None]:
    """Explain an empty list of the filter that stops at a negative contrast.

    Parameters
    ----------
    contrast : array_like of shape (p,)
        Contrasts.
    n_negatives : int
        Where the filter stopped, v.

    Returns
    -------
    reason : str
        Why nothing was selected.
    nearest_target : str or None
        The nearest whole PFER target that would have filled the list, if there is one.

    Examples
    --------
    >>> from sparsesel.error_control import why_none_stopped
    >>> why_none_stopped([-3.0, 2.0, 1.0], 1)
    ('the list closes at negative contrast number 1, and none that is positive is larger', 'pfer 2')
    """
    nearest = smallest_pfer(contrast)
    if math.isinf(nearest):
        return "no candidate beat its copy", None
    if n_negatives == 0:
        return "the stopping number is 0, at which every list is empty", f"pfer {nearest:.0f}"
    return (
        f"the list closes at negative contrast number {n_negatives}, and none that is positive is "
        "larger"
    ), f"pfer {nearest:.0f}"


def why_none_frequent(
    frequency: ArrayLike,
    threshold: float,
    n_draws: int,
    n_negatives: float,
    nonincreasing: bool = False,
) -> tuple[str, str | None]:
    """Explain an empty list by selection frequency, and name the nearest target.

    Parameters
    ----------
    frequency : array_like of shape (p,)
        From `selection_frequency`.
    threshold : float
        On the frequency, in (0, 1].
    n_draws : int
        Number of draws.
    n_negatives : float
        v of every draw.
    nonincreasing : bool, default=False
        As in `frequency_factor`.

    Returns
    -------
    reason : str
        Why nothing was selected.
    nearest_target : str or None
        The threshold that would have filled the list and its PFER; None where no draw selected
        anything.

    Examples
    --------
    >>> from sparsesel.error_control import why_none_frequent
    >>> why_none_frequent([0.4, 0.1], 0.5, n_draws=10, n_negatives=1)[1]
    'threshold 0.4 on the frequency with the same draws, that is pfer 2.5'
    """
    _check_vote(threshold, n_draws)
    largest = float(np.max(np.asarray(frequency, dtype=float)))
    reason = (
        f"the largest selection frequency is {largest:.3g}, below the threshold {threshold:.3g}"
    )
    if largest == 0:
        return reason, None
    pfer = frequency_pfer(n_negatives, largest, n_draws, nonincreasing)
    return reason, (
        f"threshold {largest:.3g} on the frequency with the same draws, that is pfer {pfer:.3g}"
    )
