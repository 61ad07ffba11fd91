"""How a solve ended; the advice of a failure is part of the member."""

from __future__ import annotations

from enum import IntEnum


class Status(IntEnum):
    """How the solve at one penalty ended.

    ``CONVERGED``: the relative duality gap is at most ``tol``.  ``NOT_REACHED``: the path
    stopped before this penalty, as asked.  The others are failures, and ``advice`` says
    what to do.
    """

    CONVERGED = 0
    NOT_REACHED = 1
    MAX_ITER = 2
    STALLED = 3

    @property
    def failed(self) -> bool:
        """Whether the answer is without its proof."""
        return self in (Status.MAX_ITER, Status.STALLED)

    @property
    def advice(self) -> str:
        """What to do about it; empty where nothing needs doing."""
        return {
            Status.MAX_ITER: "raise max_iter or tol, or stop the path at a larger penalty",
            Status.STALLED: (
                "raise tol, standardise the columns, or drop columns that repeat each other: the "
                "gap can't fall further in double precision"
            ),
        }.get(self, "")
