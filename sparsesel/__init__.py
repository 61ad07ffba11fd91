"""Sparse feature selection with a stated error, as scikit-learn estimators."""

from __future__ import annotations

from sparsesel.claim import Claim
from sparsesel.engine import PathResult, Status, penalized_path
from sparsesel.selectors import (
    AdaptiveLassoSelector,
    KnockoffSelector,
    NullModelFallback,
    RandomizedLassoSelector,
    StabilitySelector,
    correlation_groups,
)
from sparsesel.study import CrossCheckReport, cross_check

__version__ = "0.1.0"

__all__ = [
    "AdaptiveLassoSelector",
    "Claim",
    "CrossCheckReport",
    "KnockoffSelector",
    "NullModelFallback",
    "PathResult",
    "RandomizedLassoSelector",
    "StabilitySelector",
    "Status",
    "correlation_groups",
    "cross_check",
    "penalized_path",
]
