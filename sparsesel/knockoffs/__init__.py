"""Models of the features: copies that are exchangeable with the originals."""

from __future__ import annotations

from sparsesel.knockoffs._model import PairedTable
from sparsesel.knockoffs.copula import CopulaModel, FittedCopula
from sparsesel.knockoffs.exchangeability import ExchangeabilityCheck, check_exchangeability
from sparsesel.knockoffs.fixed_x import FittedFixedX, FixedXModel
from sparsesel.knockoffs.gaussian import FittedGaussian, GaussianModel
from sparsesel.knockoffs.low_rank import LowRankCovariance
from sparsesel.knockoffs.s_vectors import (
    S_VECTOR_METHODS,
    SVector,
    SVectorStatus,
    block_diagonal_s_vector,
    s_vector,
    solve_s_vector,
)

__all__ = [
    "S_VECTOR_METHODS",
    "CopulaModel",
    "ExchangeabilityCheck",
    "FittedCopula",
    "FittedFixedX",
    "FittedGaussian",
    "FixedXModel",
    "GaussianModel",
    "LowRankCovariance",
    "PairedTable",
    "SVector",
    "SVectorStatus",
    "block_diagonal_s_vector",
    "check_exchangeability",
    "s_vector",
    "solve_s_vector",
]
