"""Loaders of the real tables in `tests/data`; sources and licences are in the README there."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

DATA = Path(__file__).parent / "data"


@dataclass(frozen=True, eq=False)
class RealTable:
    """Features and what was recorded besides them, row by row."""

    features: pd.DataFrame
    metadata: pd.DataFrame


@lru_cache
def _read(name: str, n_metadata: int) -> RealTable:
    table = pd.read_csv(DATA / name, dtype={"sample": str})
    return RealTable(table.iloc[:, n_metadata:], table.iloc[:, :n_metadata])


def load_meats() -> RealTable:
    """Spectra (215 × 100); metadata water, fat, protein."""
    return _read("meats.csv.gz", 3)


def meat_wavelengths() -> NDArray[np.int_]:
    """Wavelength of each channel of the meat spectra, in nm."""
    return 850 + 2 * np.arange(100)


def load_alzheimer_csf() -> RealTable:
    """Fluid markers (333 × 130, `Genotype` as text); metadata Class."""
    return _read("alzheimer_csf.csv.gz", 1)


def load_leukaemia_all() -> RealTable:
    """Expression (128 × 12,625); metadata of twelve columns, among them sex, BT and mol.biol."""
    return _read("leukaemia_all.csv.gz", 12)


def load_prostate() -> RealTable:
    """Eight predictors of 97 men; metadata lpsa and train, the latter as bool."""
    table = pd.read_csv(DATA / "prostate.csv")
    metadata = pd.DataFrame({"lpsa": table["lpsa"], "train": table["train"] == "T"})
    return RealTable(table.drop(columns=["lpsa", "train"]), metadata)
