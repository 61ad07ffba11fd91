"""Simulated tables with known truth, and the demonstration table of apple lots."""

from __future__ import annotations

from sparsesel.datasets.orchard import OrchardTable, make_orchard
from sparsesel.datasets.simulated import (
    COVARIANCE_FAMILIES,
    Autoregressive,
    Blocks,
    Covariance,
    Equicorrelated,
    FactorModel,
    Independent,
    Signal,
    SimulatedTable,
    TableDesign,
    make_sparse_classification,
    make_sparse_regression,
    table_covariance,
)

__all__ = [
    "COVARIANCE_FAMILIES",
    "Autoregressive",
    "Blocks",
    "Covariance",
    "Equicorrelated",
    "FactorModel",
    "Independent",
    "OrchardTable",
    "Signal",
    "SimulatedTable",
    "TableDesign",
    "make_orchard",
    "make_sparse_classification",
    "make_sparse_regression",
    "table_covariance",
]
