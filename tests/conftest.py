"""Settings shared by all tests; read before any of them imports NumPy."""

from __future__ import annotations

import os

# Two pytest workers with two BLAS threads each would fight over two cores. Tests about the number
# of threads set it themselves.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("MPLBACKEND", "Agg")

from hypothesis import settings

# Examples are derived from the test itself, so that a run can be repeated; compiling a kernel in
# the first example takes longer than any deadline meant for the others.
settings.register_profile("repeatable", derandomize=True, deadline=None)
settings.load_profile("repeatable")
