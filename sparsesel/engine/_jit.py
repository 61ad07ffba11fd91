"""The one decorator through which readable Python becomes a compiled kernel.

Two kinds exist.  ``kernel`` may reorder and contract floating-point operations, which
lets sums run in vector registers; it never assumes that values are finite, because a NaN
must stay visible and an infinite penalty weight is a legal value.  ``exact_kernel``
allows nothing of the kind and is for certificates.

Compiled code is cached on disk.  Where the package lies on a read-only disk and no cache
folder is writable, the same kernel is compiled without a cache instead of failing.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

import numba

Function = TypeVar("Function", bound=Callable[..., Any])


def _compile(function: Function, fastmath: set[str] | bool) -> Function:
    options: dict[str, Any] = {"nogil": True, "error_model": "numpy", "fastmath": fastmath}
    try:
        return numba.njit(cache=True, **options)(function)
    except RuntimeError:
        return numba.njit(cache=False, **options)(function)


def kernel(function: Function) -> Function:
    """Compile a hot loop whose sums may be reordered."""
    return _compile(function, {"reassoc", "contract"})


def exact_kernel(function: Function) -> Function:
    """Compile a certificate: arithmetic exactly as written."""
    return _compile(function, False)
