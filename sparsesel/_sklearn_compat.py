"""The one place that imports scikit-learn's private modules.

Each name here has no public counterpart in scikit-learn 1.6 to 1.9. When one moves, only this
file changes.
"""

from __future__ import annotations

from typing import Any

from sklearn.utils._param_validation import HasMethods, Interval, StrOptions
from sklearn.utils._set_output import _get_output_config

__all__ = ["HasMethods", "Interval", "StrOptions", "configured_container"]


def configured_container(estimator: Any) -> str:
    """Container that `transform` of this estimator is configured to return.

    Parameters
    ----------
    estimator : estimator
        Any transformer with `set_output`.

    Returns
    -------
    str
        "default", "pandas" or "polars".
    """
    return _get_output_config("transform", estimator=estimator)["dense"]
