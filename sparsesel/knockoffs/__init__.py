"""Models of the features: copies that are exchangeable with the originals."""

from __future__ import annotations

from sparsesel.knockoffs._model import PairedTable
from sparsesel.knockoffs.copula import CopulaModel, FittedCopula
from sparsesel.knockoffs.exchangeability import ExchangeabilityCheck, check_exchangeability
from sparsesel.knockoffs.fixed_x import FittedFixedX, FixedXModel
from sparsesel.knockoffs.gaussian import FittedGaussian, GaussianModel
from sparsesel.knockoffs.indistinct import IndistinctFeatures, indistinct_features
from sparsesel.knockoffs.low_rank import LowRankCovariance
from sparsesel.knockoffs.models import FEATURE_MODELS
from sparsesel.knockoffs.s_vectors import (
    S_VECTOR_METHODS,
    SVector,
    SVectorStatus,
    block_diagonal_s_vector,
    s_vector,
    solve_s_vector,
)

__all__ = [
    "FEATURE_MODELS",
    "S_VECTOR_METHODS",
    "CopulaModel",
    "ExchangeabilityCheck",
    "FittedCopula",
    "FittedFixedX",
    "FittedGaussian",
    "FixedXModel",
    "GaussianModel",
    "IndistinctFeatures",
    "LowRankCovariance",
    "PairedTable",
    "SVector",
    "SVectorStatus",
    "block_diagonal_s_vector",
    "check_exchangeability",
    "indistinct_features",
    "s_vector",
    "solve_s_vector",
]
