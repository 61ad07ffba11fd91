"""The claim: what a selection does and does not say, in words that a reviewer can check.

A claim names what was selected and from what, the error measure with its target and the bound that
holds, each assumption with its state, and the usual caution. It is written by the selectors and
computes nothing about the data; the few judgements it makes (when a bound says nothing, what a
violated assumption does to it) are made here and nowhere else.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from typing import Any

__all__ = ["CAUTION", "Assumption", "Claim", "Scale", "State"]

CAUTION = (
    "Caution: to be selected is not to be a cause. Before this list informs a decision that can "
    "harm someone, validate it on samples that had no part in the selection and have it reviewed "
    "by a person qualified in the field."
)

# Without a guarantee of its own, a claim points to the selectors that have one.
_ALTERNATIVE = (
    "StabilitySelector bounds the expected number of false selections, KnockoffSelector the false "
    "discovery rate"
)

# Beyond half of the list (or of certainty) a bound no longer separates a finding from a guess.
_UNINFORMATIVE_SHARE = 0.5

_NAMES_SHOWN = 12

_UNITS = ("feature", "feature group")


class State(StrEnum):
    """How far an assumption has been checked."""

    BY_CONSTRUCTION = "by construction"
    HOLDS = "checked and fine"
    VIOLATED = "checked and violated"
    UNCHECKED = "can't be checked from the data"


class Scale(StrEnum):
    """What the target and the bound of a claim are numbers of."""

    COUNT = "count"
    SHARE = "share"
    PROBABILITY = "probability"


@dataclass(frozen=True)
class Assumption:
    """One condition of a claim.

    Parameters
    ----------
    statement : str
        The condition, as a clause without a full stop.
    state : State
        How far it has been checked.
    detail : str, default=""
        What the check showed.

    Examples
    --------
    >>> from sparsesel.claim import Assumption, State
    >>> print(Assumption("the rows are independent", State.UNCHECKED, "no groups were given"))
    the rows are independent: can't be checked from the data (no groups were given)
    """

    statement: str
    state: State
    detail: str = ""

    def __post_init__(self) -> None:
        object.__setattr__(self, "state", State(self.state))

    def __str__(self) -> str:
        detail = f" ({self.detail})" if self.detail else ""
        return f"{self.statement}: {self.state.value}{detail}"


@dataclass(frozen=True)
class Claim:
    """What one fitted selector claims.

    Parameters
    ----------
    method : str
        The procedure, as the subject of a sentence.
    unit : {"feature", "feature group"}
        What is selected.
    candidates : int
        How many units could have been selected.
    selected : tuple of str
        Names of the selected units.
    measure : str or None, default=None
        The error measure, as a noun phrase without article; None where there is no guarantee.
    target : float or None, default=None
        What was asked for, on the scale of the measure.
    bound : float or None, default=None
        What holds, on the same scale. Nonnegative and finite.
    bound_source : str, default=""
        Where the bound is proved.
    assumptions : tuple of Assumption, default=()
        Every condition of the bound.
    notes : tuple of str, default=()
        Full sentences for the reader.
    other_bounds : mapping of str to float, default={}
        Further bounds on the same measure, by name.
    empty_reason : str or None, default=None
        Why nothing was selected, as a clause; given exactly where `selected` is empty.
    nearest_target : str or None, default=None
        The nearest target that would have filled an empty list.
    scale : Scale, default=Scale.COUNT
        Whether target and bound count units, are a share of the list, or a probability.

    Attributes
    ----------
    guaranteed : bool
        There is a bound and none of its assumptions was found violated.
    uninformative : bool
        The bound says nothing about this list.
    violated : tuple of Assumption
        The assumptions that were checked and found violated.

    Raises
    ------
    ValueError
        If the parts contradict each other.

    Examples
    --------
    >>> from sparsesel.claim import Claim
    >>> claim = Claim("The adaptive lasso", "feature", candidates=8, selected=("lcavol", "svi"))
    >>> claim.guaranteed
    False
    """

    method: str
    unit: str
    candidates: int
    selected: tuple[str, ...]
    measure: str | None = None
    target: float | None = None
    bound: float | None = None
    bound_source: str = ""
    assumptions: tuple[Assumption, ...] = ()
    notes: tuple[str, ...] = ()
    other_bounds: Mapping[str, float] = field(default_factory=dict)
    empty_reason: str | None = None
    nearest_target: str | None = None
    scale: Scale = Scale.COUNT

    def __post_init__(self) -> None:
        for name in ("selected", "assumptions", "notes"):
            object.__setattr__(self, name, tuple(getattr(self, name)))
        object.__setattr__(self, "scale", Scale(self.scale))
        # A plain copy: a mapping proxy would not pickle with a fitted estimator.
        object.__setattr__(self, "other_bounds", dict(self.other_bounds))
        self._check()

    # The generated hash would fail on the mapping.
    def __hash__(self) -> int:
        return hash((self.method, self.unit, self.candidates, self.selected, self.bound))

    def _check(self) -> None:
        if self.unit not in _UNITS:
            raise ValueError(
                f"unit={self.unit!r}: allowed are 'feature' and 'feature group'. Name what was "
                "selected."
            )
        if len(self.selected) > self.candidates:
            raise ValueError(
                f"{len(self.selected)} selected of {self.candidates} candidates: a claim can't "
                "select more than there were. Count the candidates in the unit of the claim."
            )
        if (self.empty_reason is None) != bool(self.selected):
            raise ValueError(
                f"empty_reason={self.empty_reason!r} with {len(self.selected)} selected: an empty "
                "list needs its reason, any other has none. Pass empty_reason only for an empty "
                "list."
            )
        if self.measure is None and self.bound is not None:
            raise ValueError(
                f"bound={self.bound!r} without a measure: a bound must say what it is on. Pass "
                "the measure, or no bound."
            )
        if self.bound is not None and not 0 <= self.bound < math.inf:
            raise ValueError(
                f"bound={self.bound!r}: allowed are finite numbers from 0. Where no bound holds "
                "pass None and say why in notes."
            )

    @property
    def violated(self) -> tuple[Assumption, ...]:
        """The assumptions that were checked and found violated."""
        return tuple(a for a in self.assumptions if a.state is State.VIOLATED)

    @property
    def guaranteed(self) -> bool:
        """Whether there is a bound and no assumption of it was found violated."""
        return self.bound is not None and not self.violated

    @property
    def uninformative(self) -> bool:
        """Whether the bound says nothing: half of the list or more may be false.

        A bound on a count is held against the length of the list, a share or a probability against
        one. An empty list holds nothing false, so there is nothing to be informed about.
        """
        if self.bound is None or not self.selected:
            return False
        whole = len(self.selected) if self.scale is Scale.COUNT else 1
        return self.bound >= _UNINFORMATIVE_SHARE * whole

    def __str__(self) -> str:
        sentences = [self._selection(), *self._error(), *self.notes]
        parts = [" ".join(sentences)]
        if self.assumptions:
            parts.append("Assumptions:")
            parts.extend(f"- {assumption}" for assumption in self.assumptions)
        return "\n".join([*parts, CAUTION])

    def _selection(self) -> str:
        among = f"{self.candidates:,} candidate {_plural(self.unit, self.candidates)}"
        if self.selected:
            shown = ", ".join(self.selected[:_NAMES_SHOWN])
            hidden = len(self.selected) - _NAMES_SHOWN
            more = f" and {hidden:,} more" if hidden > 0 else ""
            return f"{self.method} selected {len(self.selected):,} of {among}: {shown}{more}."
        nearest = ""
        if self.nearest_target is not None:
            nearest = (
                f" The nearest target that would have filled the list: {self.nearest_target}; "
                "taken now, after seeing the data, it would be a description and no guarantee."
            )
        return f"{self.method} selected none of {among}, because {self.empty_reason}.{nearest}"

    def _error(self) -> list[str]:
        if self.measure is None:
            return [f"This list carries no guarantee about false selections; {_ALTERNATIVE}."]
        aim = "" if self.target is None else f"; the target was {_number(self.target)}"
        if self.bound is None:
            return [f"No bound holds on the {self.measure}{aim}."]
        source = f" ({self.bound_source})" if self.bound_source else ""
        holds = f"at most {_number(self.bound)}{source}{aim}"
        if self.violated:
            sentences = [
                "Not guaranteed: an assumption was checked and is violated. Otherwise the "
                f"{self.measure} would be {holds}."
            ]
        else:
            sentences = [f"The {self.measure} is {holds}."]
            if self.assumptions:
                sentences.append("This holds under the assumptions below.")
        if self.other_bounds:
            others = ", ".join(f"{name} {_number(x)}" for name, x in self.other_bounds.items())
            sentences.append(f"Beside it: {others}.")
        if self.uninformative:
            sentences.append(self._nothing_said())
        return sentences

    def _nothing_said(self) -> str:
        assert self.bound is not None
        if self.scale is Scale.COUNT:
            n_selected = len(self.selected)
            held = (
                f"up to {_number(self.bound)} expected among {n_selected:,} selected "
                f"{_plural(self.unit, n_selected)}"
            )
        else:
            held = f"a {self.scale.value} of up to {_number(self.bound)}"
        return f"This bound is uninformative: {held}, half or more, says nothing about the list."

    def to_dict(self) -> dict[str, Any]:
        """Give the claim as plain data that json can write.

        Returns
        -------
        dict
            Strings, numbers, booleans, None, and lists and dicts of them; the text of the claim
            under "text".

        Examples
        --------
        >>> from sparsesel.claim import Claim
        >>> Claim("The lasso", "feature", candidates=3, selected=("a",)).to_dict()["selected"]
        ['a']
        """
        return {
            "method": self.method,
            "unit": self.unit,
            "candidates": int(self.candidates),
            "selected": [str(name) for name in self.selected],
            "measure": self.measure,
            "scale": self.scale.value,
            "target": _plain(self.target),
            "bound": _plain(self.bound),
            "bound_source": self.bound_source,
            "guaranteed": self.guaranteed,
            "uninformative": bool(self.uninformative),
            "assumptions": [
                {"statement": a.statement, "state": a.state.value, "detail": a.detail}
                for a in self.assumptions
            ],
            "notes": list(self.notes),
            "other_bounds": {name: float(x) for name, x in self.other_bounds.items()},
            "empty_reason": self.empty_reason,
            "nearest_target": self.nearest_target,
            "caution": CAUTION,
            "text": str(self),
        }


def _plain(value: float | None) -> float | None:
    return None if value is None else float(value)


def _number(value: float) -> str:
    """Three digits, without an exponent for the sizes that occur in claims."""
    return f"{value:,.0f}" if value >= 1000 else f"{value:.3g}"


def _plural(unit: str, count: int) -> str:
    return unit if count == 1 else f"{unit}s"
