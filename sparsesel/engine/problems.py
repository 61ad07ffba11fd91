"""What a bank is asked: the problems, and what to keep of every answer."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sparsesel.engine.design import FloatArray


@dataclass(frozen=True)
class Problems:
    """The problems of a bank; a leading axis B on any array makes it one row per problem.

    Parameters
    ----------
    loss : {"squared_error", "log_loss"}
    response : array (n,) or (B, n)
        For the log loss 0 or 1.
    sample_weight : array (n,) or (B, n), or None
        Not negative, positive somewhere.  None: all one.
    penalty_weights : array (p,) or (B, p), or None
        From 0 (unpenalised) to inf (left out).  None: all one.
    offset : array (n,), or None
        Added to the predictor.
    l1_ratio : float in (0, 1]
    fit_intercept, standardize : bool
    """

    loss: str
    response: FloatArray
    sample_weight: FloatArray | None = None
    penalty_weights: FloatArray | None = None
    offset: FloatArray | None = None
    l1_ratio: float = 1.0
    fit_intercept: bool = True
    standardize: bool = False

    @property
    def count(self) -> int:
        """B, the number of problems."""
        counts = {
            len(array)
            for array in (self.response, self.sample_weight, self.penalty_weights)
            if array is not None and np.ndim(array) == 2
        }
        if len(counts) > 1:
            raise ValueError(
                f"The arrays of a bank have {sorted(counts)} rows; all two-dimensional ones must "
                "have one row per problem. Give each the same number of rows."
            )
        return counts.pop() if counts else 1

    def part(self, chosen: slice) -> Problems:
        """The problems of a slice of the bank."""
        cut = {
            name: getattr(self, name)[chosen]
            for name in ("response", "sample_weight", "penalty_weights")
            if np.ndim(getattr(self, name)) == 2
        }
        return replace(self, **cut)


@dataclass(frozen=True)
class Keep:
    """What is kept of every problem.

    Parameters
    ----------
    coefficients : bool
        Coefficients and intercepts at every penalty.
    entries : int
        The order in which columns enter, up to this many; the path of a problem stops once
        that many have entered.  Of columns that enter at the same grid point the larger
        standardised absolute coefficient comes first, then the position.  Unpenalised
        columns never enter.
    entry_units : int array (p,), or None
        Unit of every column: the order of entry is then one of units.
    held_out : array (B, n), or None
        Weights of the rows over which the loss is averaged at every penalty.
    """

    coefficients: bool = False
    entries: int = 0
    entry_units: NDArray[np.int64] | None = None
    held_out: FloatArray | None = None

    def part(self, chosen: slice) -> Keep:
        """What is kept of a slice of the bank."""
        if self.held_out is None:
            return self
        return replace(self, held_out=self.held_out[chosen])
