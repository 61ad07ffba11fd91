"""The engine: many penalised regressions over one table, each answer with its proof."""

from __future__ import annotations

from sparsesel.engine.bank import (
    ENGINE_FORMAT,
    BankResult,
    solve_bank,
    warn_failures,
)
from sparsesel.engine.design import DesignMatrix, as_design
from sparsesel.engine.path import PathResult, penalized_path
from sparsesel.engine.problems import Keep, Problems
from sparsesel.engine.status import Status

__all__ = [
    "ENGINE_FORMAT",
    "BankResult",
    "DesignMatrix",
    "Keep",
    "PathResult",
    "Problems",
    "Status",
    "as_design",
    "penalized_path",
    "solve_bank",
    "warn_failures",
]
