"""Speed, gaps and memory beside scikit-learn's: ``python tests/benchmarks/run.py``.

To be run from a checkout that is installed, alone on a quiet machine, on Linux. It says what each
case took and what its goal is, and judges nothing: the exit code is 0. Cases are named in full or
by their beginning (``halves``, ``path:200``); ``--list`` names them.

What holds for all cases: both sides have one BLAS thread; they take turns, and medians of the
repeats are compared; our tolerance is the largest relative duality gap that the peer leaves, but
never looser than its own criterion for the lasso; gaps of both sides are computed from their
coefficients by the same formula; memory is private memory at its peak beyond what the table and
this process held before; "x pass" is our time over one pass over the table at the measured
bandwidth, "x products" over one gradient per problem and penalty at the measured rate of matrix
products.
"""

from __future__ import annotations

import argparse
import traceback
from collections.abc import Callable, Iterator
from functools import partial

from bench_line import Comparison, Line, Options, header
from bench_measure import Hardware, give_memory_back, measure_hardware
from bench_peers import (
    folds_case,
    halves_case,
    logistic_case,
    path_case,
    selector_case,
    sparse_case,
)
from bench_scaling import cold_start, growth_in_columns, growth_in_pairs, memory_map, workers_case

from sparsesel.tasks import one_blas_thread

Case = Callable[[Options, Hardware], Iterator[Line]]


def compared(
    build: Callable[[Options], Comparison], options: Options, hw: Hardware
) -> Iterator[Line]:
    """The line of a comparison, whose table is made only now."""
    yield build(options).line(options, hw)


def peer(build: Callable[..., Comparison], n: int, p: int, goal: str, **more: str) -> Case:
    """A case that compares two sides."""
    return partial(compared, partial(_built, build, n, p, goal, more))


def _built(
    build: Callable[..., Comparison],
    n: int,
    p: int,
    goal: str,
    more: dict[str, str],
    options: Options,
) -> Comparison:
    return build(n, p, goal, **more, options=options)


CASES: dict[str, Case] = {
    "halves:200x20000": peer(halves_case, 200, 20_000, ">= 30"),
    "halves:1000x5000": peer(halves_case, 1_000, 5_000, ">= 25"),
    "halves:200x2000": peer(halves_case, 200, 2_000, ">= 15"),
    "halves:2000x500": peer(halves_case, 2_000, 500, ">= 10"),
    "path:200x20000": peer(path_case, 200, 20_000, ">= 10"),
    "path:1000x5000": peer(path_case, 1_000, 5_000, ">= 10"),
    "folds:200x20000": peer(folds_case, 200, 20_000, ">= 20"),
    "logistic:200x20000": peer(logistic_case, 200, 20_000, ">= 40"),
    "logistic:5000x200": peer(logistic_case, 5_000, 200, ">= 10"),
    "sparse:20000x100000": peer(sparse_case, 20_000, 100_000, ">= 5"),
    "selector:200x20000": peer(selector_case, 200, 20_000, ">= 2"),
    **{
        f"{workers}:{n}x{p}": peer(workers_case, n, p, goal, workers=workers)
        for workers in ("threads", "processes")
        for n, p, goal in (
            (200, 20_000, ">= 1.7"),
            (1_000, 5_000, ">= 1.7"),
            (200, 2_000, ">= 1.4"),
        )
    },
    "growth:columns": growth_in_columns,
    "growth:pairs": growth_in_pairs,
    "map": memory_map,
    "cold": cold_start,
}


def chosen_cases(wanted: list[str]) -> list[str]:
    """Names that begin with one of those wanted; all without any."""
    return [name for name in CASES if not wanted or name.startswith(tuple(wanted))]


def lines(names: list[str], options: Options, hardware: Hardware) -> Iterator[Line]:
    """Measure case after case; nothing of one is in memory when the next begins.

    A case that fails is a line too: the others took too long to be lost.
    """
    for name in names:
        give_memory_back()
        try:
            yield from CASES[name](options, hardware)
        except Exception as error:
            traceback.print_exc()
            yield Line(name, notes=(f"FAILED: {error}",))


def parsed(arguments: list[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=(__doc__ or "").partition("\n")[0])
    parser.add_argument("cases", nargs="*", metavar="CASE", help="beginnings of names; all if none")
    parser.add_argument("--list", action="store_true", help="name the cases and stop")
    parser.add_argument("--repeats", type=int, default=5, help="timed runs of each side")
    parser.add_argument("--retries", type=int, default=3, help="most repeats of a disturbed run")
    parser.add_argument("--tol", type=float, help="our tolerance instead of the peer's largest gap")
    parser.add_argument("--scale", type=float, default=1.0, help="shrinks every table, to try this")
    parser.add_argument("--gigabytes", type=float, default=1.0, help="size of the mapped table")
    parser.add_argument("--directory", help="where it is written; a disk, not memory")
    return parser.parse_args(arguments)


def main(arguments: list[str] | None = None) -> None:
    """Print the table."""
    given = parsed(arguments)
    names = chosen_cases(given.cases)
    if given.list or not names:
        print("\n".join(CASES))
        return
    options = Options(
        given.repeats, given.retries, given.tol, given.scale, given.gigabytes, given.directory
    )
    with one_blas_thread():
        hardware = measure_hardware()
    print(
        f"one core: {hardware.bandwidth / 1e9:.1f} GB/s read, "
        f"{hardware.operations / 1e9:.1f} GFlop/s in products\n{header()}",
        flush=True,
    )
    for line in lines(names, options, hardware):
        print(line, flush=True)


if __name__ == "__main__":
    main()
