"""From contrasts to a list: which filter a target asks for, and what it decides.

A target is a false discovery rate, an expected number of false selections (PFER), or a probability
of k or more of them (k-FWER); draws of the copies are one or several. Each combination that has a
published procedure is made here, on the formulas of `sparsesel.error_control`:

=============  ===========================  =====================================
target         one draw                     several draws
=============  ===========================  =====================================
``fdr``        knockoff+, or knockoff       averaged e-values, step-up
``pfer``       stop at the v-th negative    share of draws that select
``k_fwer``     stop at the v-th negative    none; Markov: PFER of k times the level
=============  ===========================  =====================================
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import partial
from numbers import Integral, Real
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sparsesel.claim import Assumption, Scale, State
from sparsesel.error_control import (
    FILTER_MEASURES,
    FILTER_SOURCES,
    draw_negatives,
    e_bh,
    frequency_pfer,
    knockoff_e_values,
    knockoff_threshold,
    least_candidates,
    least_selection,
    negatives_for_frequency,
    negatives_for_kfwer,
    select,
    selection_frequency,
    stopping_threshold,
    why_none_frequent,
    why_none_passed,
    why_none_stopped,
)

FloatArray = NDArray[np.float64]

# A list by frequency holds what more than half of the draws select; for an odd number of draws the
# bound is then the stopping number itself.
_FREQUENCY = 0.5

_ONE_DRAW = "The list rests on one random draw of copies; another draw can give another."
_FILLED: tuple[str | None, str | None] = (None, None)


@dataclass(frozen=True)
class Decision:
    """What a filter decided.

    Attributes
    ----------
    selected : ndarray of shape (n_units,), bool
        The list.
    threshold : float
        What the deciding measure has to reach; infinity where the list is empty.
    measures : mapping of str to ndarray of shape (n_units,)
        Further measures per unit, such as e-values.
    notes : tuple of str
        Full sentences on how it was decided.
    why_none : tuple of str and (str or None)
        For an empty list the reason and the nearest target.
    """

    selected: NDArray[np.bool_]
    threshold: float
    measures: Mapping[str, FloatArray] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    why_none: tuple[str | None, str | None] = _FILLED


@dataclass(frozen=True)
class KnockoffFilter:
    """A procedure with its target.

    Attributes
    ----------
    key : str
        Of its measure and source in `sparsesel.error_control`.
    target : float
        The target, which is also the bound that holds.
    method : str
        The procedure as the subject of a sentence.
    decide : callable
        Takes contrasts of shape (n_draws, n_units) and a generator, returns a Decision.
    scale : Scale
        What the target is a number of.
    least : int
        The least number of candidates of which it can select any.
    other_bounds : mapping of str to float
        Further bounds on the same measure.
    assumptions : tuple of Assumption
        What the procedure assumes beyond exchangeable copies.
    """

    key: str
    target: float
    method: str
    decide: Callable[[FloatArray, np.random.Generator], Decision]
    scale: Scale = Scale.SHARE
    least: int = 1
    other_bounds: Mapping[str, float] = field(default_factory=dict)
    assumptions: tuple[Assumption, ...] = ()

    @property
    def measure(self) -> str:
        """The error measure, as a noun phrase."""
        return FILTER_MEASURES[self.key]

    @property
    def source(self) -> str:
        """Where the bound is proved."""
        return FILTER_SOURCES[self.key]


# ---------------------------------------------------------------------------------------------
# False discovery rate
# ---------------------------------------------------------------------------------------------


def _rate_filter(fdr: float, plus: bool) -> KnockoffFilter:
    """knockoff+ or knockoff on one draw."""
    key = "knockoff+" if plus else "knockoff"
    decide = partial(_decide_by_rate, fdr, plus)
    return KnockoffFilter(key, fdr, f"The {key} filter", decide, least=least_selection(fdr, plus))


def _decide_by_rate(
    fdr: float, plus: bool, contrasts: FloatArray, generator: np.random.Generator
) -> Decision:
    contrast = contrasts[0]
    threshold = knockoff_threshold(contrast, fdr, plus)
    selected = select(contrast, threshold)
    why = _FILLED if selected.any() else why_none_passed(contrast, fdr, plus)
    return Decision(selected, threshold, notes=(_ONE_DRAW,), why_none=why)


def _e_value_filter(fdr: float, n_draws: int) -> KnockoffFilter:
    """Several draws combined by e-values, each at half of the target."""
    return KnockoffFilter(
        "e_values",
        fdr,
        f"The knockoff+ filter over {n_draws} draws of copies, combined by e-values,",
        partial(_decide_by_e_values, fdr),
        least=least_candidates(fdr),
    )


def _decide_by_e_values(
    fdr: float, contrasts: FloatArray, generator: np.random.Generator
) -> Decision:
    level = fdr / 2
    e_values = knockoff_e_values(contrasts, level)
    selected = e_bh(e_values, fdr)
    votes = [select(contrast, knockoff_threshold(contrast, level)) for contrast in contrasts]
    count = int(selected.sum())
    return Decision(
        selected,
        len(e_values) / (fdr * count) if count else np.inf,
        {"e_value": e_values, "selection_probability": np.mean(votes, axis=0)},
        (f"Every draw was filtered at {level:.3g}, half of the target.",),
        _FILLED if count else why_none_passed(contrasts, fdr),
    )


# ---------------------------------------------------------------------------------------------
# Number of false selections
# ---------------------------------------------------------------------------------------------


def _stopping_filter(limit: float, k: int = 0) -> KnockoffFilter:
    """One draw, closed at the v-th negative contrast; k is 0 for the PFER."""
    return KnockoffFilter(
        "k_fwer" if k else "pfer",
        limit,
        "The knockoff filter that stops at a negative contrast" + (f", k = {k}," if k else ""),
        partial(_decide_by_stopping, negatives_for_kfwer(k, limit) if k else limit),
        Scale.PROBABILITY if k else Scale.COUNT,
    )


def _decide_by_stopping(
    wanted: float, contrasts: FloatArray, generator: np.random.Generator
) -> Decision:
    v = draw_negatives(wanted, generator)
    threshold = stopping_threshold(contrasts[0], v)
    selected = select(contrasts[0], threshold)
    drawn = "" if wanted == int(wanted) else f", drawn at random with mean {wanted:.3g}"
    note = f"The list closes at negative contrast number {v}{drawn}."
    why = _FILLED if selected.any() else why_none_stopped(contrasts[0], v)
    return Decision(selected, threshold, notes=(note, _ONE_DRAW), why_none=why)


def _frequency_filter(pfer: float, n_draws: int) -> KnockoffFilter:
    """What at least half of the draws select, each closed at the v-th negative contrast."""
    v = negatives_for_frequency(pfer, _FREQUENCY, n_draws, nonincreasing=True)
    law = (
        "a null feature is selected by many of the draws no more probably than by few (the law of "
        "its frequency does not increase)"
    )
    return KnockoffFilter(
        "frequency",
        pfer,
        f"The knockoff filter over {n_draws} draws of copies, combined by frequency,",
        partial(_decide_by_frequency, v),
        Scale.COUNT,
        other_bounds={
            "without the assumption on frequencies": frequency_pfer(v, _FREQUENCY, n_draws)
        },
        assumptions=(Assumption(law, State.UNCHECKED),),
    )


def _decide_by_frequency(
    v: float, contrasts: FloatArray, generator: np.random.Generator
) -> Decision:
    shares = selection_frequency(contrasts, v, generator)
    # Shares are whole votes over their number: the slack is for that division alone.
    selected = shares >= _FREQUENCY - 1e-9
    why: tuple[str | None, str | None] = _FILLED
    if not selected.any():
        why = why_none_frequent(shares, _FREQUENCY, len(contrasts), v, nonincreasing=True)
    note = (
        f"Every draw closes at negative contrast number {v:.3g}; selected is what a share of at "
        f"least {_FREQUENCY:g} of the draws selected."
    )
    threshold = _FREQUENCY if selected.any() else np.inf
    return Decision(selected, threshold, {"selection_probability": shares}, (note,), why)


# ---------------------------------------------------------------------------------------------
# The choice
# ---------------------------------------------------------------------------------------------


def choose_filter(fdr: float, plus: bool, pfer: Any, k_fwer: Any, n_draws: int) -> KnockoffFilter:
    """Find the procedure that a selector's parameters ask for.

    Parameters
    ----------
    fdr : float
        The target, unless one of the other two is given.
    plus : bool
        knockoff+ or knockoff.
    pfer : float or None
        Expected number of false selections.
    k_fwer : (int, float) or None
        k and the probability of k or more false selections.
    n_draws : int
        Number of draws.

    Returns
    -------
    KnockoffFilter
        The procedure.

    Raises
    ------
    ValueError
        If the parameters contradict each other, or there is no such procedure.
    """
    if pfer is not None and k_fwer is not None:
        raise ValueError(
            f"pfer={pfer!r} and k_fwer={k_fwer!r} were both given. One target is allowed at a "
            "time: leave the other at None."
        )
    if k_fwer is not None:
        k, level = _checked_k_fwer(k_fwer)
        if n_draws > 1:
            raise ValueError(
                f"k_fwer={k_fwer!r} with n_draws={n_draws}. The k-FWER filter takes one draw: use "
                f"n_draws=1, or pfer={k * level:.3g} with these draws, which implies it (Markov's "
                "inequality)."
            )
        return _stopping_filter(level, k)
    if pfer is not None:
        return _stopping_filter(pfer) if n_draws == 1 else _frequency_filter(pfer, n_draws)
    if n_draws == 1:
        return _rate_filter(fdr, plus)
    if not plus:
        raise ValueError(
            f"plus=False with n_draws={n_draws}. Draws are combined by the e-values of knockoff+ "
            "only: use plus=True, or n_draws=1."
        )
    return _e_value_filter(fdr, n_draws)


def _checked_k_fwer(k_fwer: Any) -> tuple[int, float]:
    try:
        k, level = k_fwer
        numbers = isinstance(k, Integral) and isinstance(level, Real)
        valid = numbers and int(k) >= 1 and 0 < float(level) < 1
    except (TypeError, ValueError):
        valid = False
    if not valid:
        raise ValueError(
            f"k_fwer={k_fwer!r} is not a pair (k, level). k is a whole number from 1, and level "
            "the probability of k or more false selections, between 0 and 1: (1, 0.1), say."
        )
    return int(k), float(level)
