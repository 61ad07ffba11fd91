"""Sparse feature selection with a stated error, as scikit-learn estimators."""

from __future__ import annotations

__version__ = "0.1.0"
