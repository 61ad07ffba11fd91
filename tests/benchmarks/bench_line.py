"""Two sides compared, and the line that is printed of it."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from bench_measure import Hardware, alternate, peak_memory
from numpy.typing import NDArray
from sklearn.exceptions import ConvergenceWarning

from sparsesel.tasks import one_blas_thread

#: Our tolerance is the peer's largest gap, and never looser than this: the coordinate descent of
#: scikit-learn stops at a gap of 1e-4 ||y||^2, in units of the null objective ||y||^2 / 2.
LOOSEST = 2e-4
_TIGHTEST = 1e-12

_COLUMNS = (
    ("case", "<24"),
    ("ours", ">9"),
    ("peer", ">9"),
    ("ratio", ">7"),
    ("goal", ">8"),
    ("our gap", ">8"),
    ("peer gap", ">8"),
    ("our MB", ">7"),
    ("peer MB", ">7"),
    ("x pass", ">8"),
    ("x products", ">10"),
)


@dataclass(frozen=True)
class Options:
    """What the command line chose."""

    repeats: int = 5
    retries: int = 3
    tol: float | None = None
    scale: float = 1.0
    gigabytes: float = 1.0
    directory: str | None = None

    def shape(self, n: int, p: int) -> tuple[int, int]:
        """The shape to use for a table of the suite: smaller ones try the suite itself."""
        return max(40, round(n * self.scale)), max(60, round(p * self.scale))


@dataclass(frozen=True)
class Line:
    """One line of the table; what does not apply stays empty."""

    case: str
    cells: dict[str, str] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    def __str__(self) -> str:
        cells = {"case": self.case, **self.cells}
        row = "  ".join(f"{cells.get(name, '-'):{width}}" for name, width in _COLUMNS)
        return row.rstrip() + ("  | " + "; ".join(self.notes) if self.notes else "")


def header() -> str:
    """The names of the columns."""
    return "  ".join(f"{name:{width}}" for name, width in _COLUMNS)


def seconds(value: float) -> str:
    """Seconds with three digits."""
    return f"{value * 1e3:.3g} ms" if value < 1 else f"{value:.3g} s"


def disturbed_note(count: int, of: int) -> tuple[str, ...]:
    """Whether the line has to be read with care."""
    return (f"DISTURBED {count} of {of} runs",) if count else ()


@dataclass(frozen=True)
class Floor:
    """What the hardware can't do without: bytes of one pass, operations of the products.

    The products are one gradient of every problem at every penalty.
    """

    nbytes: int = 0
    operations: float = 0.0

    def cells(self, took: float, hardware: Hardware) -> dict[str, str]:
        cells = {}
        if self.nbytes:
            cells["x pass"] = f"{took * hardware.bandwidth / self.nbytes:.3g}"
        if self.operations:
            cells["x products"] = f"{took * hardware.operations / self.operations:.3g}"
        return cells


@dataclass(frozen=True)
class Comparison:
    """The same work for two sides.

    ``ours`` is given a tolerance. The gaps are those of the answers, judged alike. The peer may do
    a part of the work, which ``peer_share`` says.
    """

    case: str
    goal: str
    floor: Floor
    ours: Callable[[float], Any]
    peer: Callable[[], Any]
    our_gaps: Callable[[Any, float], NDArray[np.float64]]
    peer_gaps: Callable[[Any], NDArray[np.float64]]
    peer_share: float = 1.0
    notes: tuple[str, ...] = ()
    remarks: Callable[[Any, Any], tuple[str, ...]] | None = None

    def line(self, options: Options, hardware: Hardware) -> Line:
        """Measure and report.

        The first run of each side, which compiles, gives the peer's gap and so our tolerance; the
        second gives memory, because watching it would disturb the timed ones.
        """
        with one_blas_thread(), failures_counted() as failures:
            theirs, peer_memory = peak_memory(self.peer)
            peer_gap = float(self.peer_gaps(theirs).max())
            peer_failed = failures()
            tol = options.tol or float(np.clip(peer_gap, _TIGHTEST, LOOSEST))
            self.ours(tol)
            answer, memory = peak_memory(lambda: self.ours(tol))
            our_gap = float(self.our_gaps(answer, tol).max())
            failed = failures() - peer_failed
            remarks = self.remarks(answer, theirs) if self.remarks else ()
            del answer, theirs
            ours, peer = alternate(
                [lambda: self.ours(tol), self.peer], options.repeats, options.retries
            )
        whole = peer.median / self.peer_share
        cells = {
            "ours": seconds(ours.median),
            "peer": seconds(whole),
            "ratio": f"{whole / ours.median:.3g}",
            "goal": self.goal,
            "our gap": f"{our_gap:.1e}",
            "peer gap": f"{peer_gap:.1e}",
            "our MB": f"{memory / 2**20:.0f}",
            "peer MB": f"{peer_memory / 2**20:.0f}",
            **self.floor.cells(ours.median, hardware),
        }
        notes = (
            *disturbed_note(ours.disturbed + peer.disturbed, 2 * options.repeats),
            *self.notes,
            *remarks,
            *(
                (f"peer warned {peer_failed} times that it did not converge",)
                if peer_failed
                else ()
            ),
            *(("OURS DID NOT CONVERGE",) if failed else ()),
        )
        return Line(self.case, cells, notes)


@contextmanager
def failures_counted() -> Iterator[Callable[[], int]]:
    """Keep warnings off the table, and count those of solvers that did not converge."""
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        yield lambda: sum(issubclass(w.category, ConvergenceWarning) for w in caught)
