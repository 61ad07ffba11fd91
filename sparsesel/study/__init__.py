"""Studies of selections: whether the numbers are right."""

from __future__ import annotations

from sparsesel.study.cross_check import CrossCheckReport, cross_check

__all__ = ["CrossCheckReport", "cross_check"]
