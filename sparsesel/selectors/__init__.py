"""Feature selectors in scikit-learn's sense, each with a stated claim about what it selected."""

from __future__ import annotations

from sparsesel.selectors._base import StatedProblem
from sparsesel.selectors._columns import correlation_groups
from sparsesel.selectors.adaptive import AdaptiveLassoSelector
from sparsesel.selectors.fallback import NullModelFallback
from sparsesel.selectors.knockoff import KnockoffSelector
from sparsesel.selectors.stability import RandomizedLassoSelector, StabilitySelector

__all__ = [
    "AdaptiveLassoSelector",
    "KnockoffSelector",
    "NullModelFallback",
    "RandomizedLassoSelector",
    "StabilitySelector",
    "StatedProblem",
    "correlation_groups",
]
