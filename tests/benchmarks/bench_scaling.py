"""Cases without a peer: workers, growth, a memory map, and the first run of all."""

from __future__ import annotations

import json
import os
import shutil
import statistics
import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import joblib
import numpy as np
from bench_line import (
    LOOSEST,
    Comparison,
    Floor,
    Line,
    Options,
    disturbed_note,
    failures_counted,
    seconds,
)
from bench_measure import Hardware, alternate, peak_memory, time_once, time_undisturbed
from bench_peers import N_HALVES, halves_gaps, halves_of, label, solve_halves
from bench_tables import Table, fill_autoregressive, regression_table, with_numbers

import sparsesel
from sparsesel.engine import PathResult, penalized_path
from sparsesel.tasks import TaskSettings, one_blas_thread

_BACKENDS = {"threads": "threading", "processes": "loky"}
_WIDTHS = (2_000, 6_325, 20_000, 63_246, 200_000)
_PAIRS = (10, 20, 50, 100, 200)


def workers_case(n: int, p: int, goal: str, workers: str, options: Options) -> Comparison:
    """The half-samples on two workers; the peer is one worker."""
    table = regression_table(*options.shape(n, p))
    halves = halves_of(table, N_HALVES)
    tol = options.tol or LOOSEST
    one = partial(solve_halves, table, halves, tol)

    def two(_tol: float) -> object:
        with joblib.parallel_config(backend=_BACKENDS[workers]):
            return solve_halves(table, halves, tol, TaskSettings(n_jobs=2))

    return Comparison(
        label(f"{workers}", *table.X.shape),
        goal,
        Floor(table.nbytes),
        ours=two,
        peer=one,
        our_gaps=lambda result, _tol: halves_gaps(table, halves, result),
        peer_gaps=partial(halves_gaps, table, halves),
        notes=("two workers and one", "memory of this process only"),
    )


def _growth_line(
    case: str, sizes: Iterable[int], tables: Iterator[tuple[Table, int]], options: Options
) -> Line:
    """Time of the half-samples against size, and the slope on log-log axes."""
    medians, disturbed = [], 0
    tol = options.tol or LOOSEST
    with one_blas_thread():
        for table, n_halves in tables:
            work = partial(solve_halves, table, halves_of(table, n_halves), tol)
            work()
            timing = alternate([work], options.repeats, options.retries)[0]
            medians.append(timing.median)
            disturbed += timing.disturbed
    sizes = list(sizes)
    slope = np.polyfit(np.log(sizes), np.log(medians), 1)[0]
    points = ", ".join(f"{s:,}: {seconds(m)}" for s, m in zip(sizes, medians, strict=True))
    notes = (*disturbed_note(disturbed, len(sizes) * options.repeats), points)
    return Line(case, {"ratio": f"{slope:.3f}", "goal": "<= 1.05"}, ("ratio: slope", *notes))


def growth_in_columns(options: Options, _hardware: Hardware) -> Iterator[Line]:
    """100 half-samples of 200 rows, from 2,000 to 200,000 columns."""
    shapes = [options.shape(200, p) for p in _WIDTHS]
    tables = ((regression_table(*shape), N_HALVES) for shape in shapes)
    yield _growth_line("growth:columns", [p for _, p in shapes], tables, options)


def growth_in_pairs(options: Options, _hardware: Hardware) -> Iterator[Line]:
    """From 10 to 200 pairs of half-samples of one table."""
    table = regression_table(*options.shape(200, 20_000))
    tables = ((table, 2 * pairs) for pairs in _PAIRS)
    yield _growth_line("growth:pairs", _PAIRS, tables, options)


def memory_map(options: Options, hardware: Hardware) -> Iterator[Line]:
    """One default path over a mapped table of 1,000 rows, float32, Fortran order."""
    n = 1_000
    p = max(60, round(options.gigabytes * options.scale * 1e9 / (4 * n)))
    directory = options.directory or tempfile.gettempdir()
    case, free = label("map", n, p), shutil.disk_usage(directory).free
    if free < 1.2 * 4 * n * p:
        yield Line(case, notes=(f"skipped: {free / 1e9:.1f} GB free in {directory}",))
        return
    with tempfile.TemporaryDirectory(dir=directory) as folder, one_blas_thread():
        file = Path(folder, "table.float32")
        written = np.memmap(file, np.float32, "w+", shape=(n, p), order="F")
        fill_autoregressive(written, 0)
        y = with_numbers(written).y
        written.flush()
        del written
        X = np.memmap(file, np.float32, "r", shape=(n, p), order="F")
        tol = options.tol or 1e-7
        penalized_path(X[:, :60], y, tol=tol)  # compiles
        paths: list[PathResult] = []
        with failures_counted() as failures:
            (took, disturbed), memory = peak_memory(
                lambda: time_once(lambda: paths.append(penalized_path(X, y, tol=tol)))
            )
            failed = failures()
        path = paths[0]
        cells = {
            "ours": seconds(took),
            "our gap": f"{path.gap.max():.1e}",
            "our MB": f"{memory / 2**20:.0f}",
            **Floor(4 * n * p, 2.0 * n * p * path.alphas.size).cells(took, hardware),
        }
        goal = f"{4 * n * p / 1e9:.2g} GB table, one run; goal: private memory under 1,000 MB"
        failed_note = ("OURS DID NOT CONVERGE",) if failed else ()
        yield Line(case, cells, (*disturbed_note(int(disturbed), 1), goal, *failed_note))


@dataclass(frozen=True)
class _FirstRun:
    """What fresh interpreters reported, and how many of them others disturbed."""

    seconds: list[dict[str, float]]
    disturbed: int

    def line(self, case: str, goal: str, note: str) -> Line:
        """The median, of the import or of what the first time took beyond the second."""
        took = statistics.median(
            run["import"] if "import" in run else run["first"] - run["again"]
            for run in self.seconds
        )
        notes = (*disturbed_note(self.disturbed, len(self.seconds)), note)
        return Line(case, {"ours": seconds(took), "goal": goal}, notes)


def cold_start(options: Options, _hardware: Hardware) -> Iterator[Line]:
    """Import, compile and load, each in a fresh interpreter."""
    _fresh_interpreter("import")  # fills the disk's cache
    imports = _first_runs(partial(_fresh_interpreter, "import"), options.repeats, options.retries)
    yield imports.line("cold:import", "<= 0.4 s", "beyond scikit-learn's")
    with tempfile.TemporaryDirectory() as folder:
        compiling = _first_runs(
            lambda: _fresh_interpreter("everything", tempfile.mkdtemp(dir=folder)),
            1,
            options.retries,
        )
        yield compiling.line("cold:compile", "<= 12 s", "empty cache, once")
        full = str(next(Path(folder).iterdir()))
        loading = _first_runs(
            partial(_fresh_interpreter, "everything", full), options.repeats, options.retries
        )
    yield loading.line("cold:load", "<= 0.6 s", "full cache")


class _Kept:
    """Work whose last answer is kept."""

    def __init__(self, work: Callable[[], dict[str, float]]) -> None:
        self._work = work
        self.last: dict[str, float] = {}

    def __call__(self) -> None:
        self.last = self._work()


def _first_runs(start: Callable[[], dict[str, float]], repeats: int, retries: int) -> _FirstRun:
    """Repeat a fresh interpreter; of one that was disturbed only the last counts."""
    reports, n_disturbed = [], 0
    for _ in range(repeats):
        tried = _Kept(start)
        _, disturbed = time_undisturbed(tried, retries)
        reports.append(tried.last)
        n_disturbed += disturbed
    return _FirstRun(reports, n_disturbed)


def _fresh_interpreter(what: str, cache: str | None = None) -> dict[str, float]:
    """Seconds that a fresh interpreter reports, with one BLAS thread."""
    environment = dict(os.environ, OPENBLAS_NUM_THREADS="1", MKL_NUM_THREADS="1")
    environment["PYTHONPATH"] = str(Path(sparsesel.__file__).parents[1])
    if cache is not None:
        environment["NUMBA_CACHE_DIR"] = cache
    script = Path(__file__).with_name("bench_first_run.py")
    command = [sys.executable, str(script), what]
    answer = subprocess.run(command, env=environment, capture_output=True, text=True)
    if answer.returncode:
        raise RuntimeError(f"the fresh interpreter said: {answer.stderr.strip()[-300:]}")
    return json.loads(answer.stdout)
