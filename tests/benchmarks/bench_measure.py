"""Clock, disturbance, private memory and what the hardware can do; all from Linux's /proc.

A timed run is *disturbed* when processes other than this one and its descendants used more than a
tenth of a core meanwhile: the busy ticks of all processors, less the ticks of our own, over the
wall clock. Ticks are 10 ms, so two of them are allowed for rounding. Disturbed runs are repeated
a bounded number of times; a median that still holds one is marked.

Private memory is RssAnon: pages of a mapped file count as resident and are nobody's allocation.
"""

from __future__ import annotations

import ctypes
import gc
import os
import statistics
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

_TICKS = os.sysconf("SC_CLK_TCK")
_ALLOWED_SHARE = 0.1
_SAMPLE_SECONDS = 0.002


@dataclass(frozen=True)
class Timing:
    """Seconds of the repeats of one side, and how many of them others disturbed."""

    seconds: tuple[float, ...]
    disturbed: int

    @property
    def median(self) -> float:
        return statistics.median(self.seconds)


@dataclass(frozen=True)
class Hardware:
    """What one core can do: bytes read per second, double operations per second in a product."""

    bandwidth: float
    operations: float


def _busy_ticks() -> int:
    """Ticks in which some processor did something, of any process."""
    fields = [int(field) for field in Path("/proc/stat").read_text().split("\n", 1)[0].split()[1:]]
    user, nice, system, _idle, _iowait, irq, softirq, steal = fields[:8]
    return user + nice + system + irq + softirq + steal


def _own_ticks() -> int:
    """Ticks of this process and its descendants, also those that ended."""
    parent, ticks = {}, {}
    for path in Path("/proc").glob("[0-9]*/stat"):
        try:
            fields = path.read_text().rpartition(")")[2].split()
        except OSError:  # ended meanwhile
            continue
        pid = int(path.parent.name)
        parent[pid], ticks[pid] = int(fields[1]), sum(map(int, fields[11:15]))
    ours = {os.getpid()}
    while grown := {pid for pid, above in parent.items() if above in ours} - ours:
        ours |= grown
    return sum(ticks[pid] for pid in ours if pid in ticks)


def time_once(work: Callable[[], Any]) -> tuple[float, bool]:
    """Seconds of one run, and whether others disturbed it."""
    gc.collect()
    busy, own = _busy_ticks(), _own_ticks()
    start = time.perf_counter()
    work()
    seconds = time.perf_counter() - start
    others = (_busy_ticks() - busy) - (_own_ticks() - own)
    return seconds, others - 2 > _ALLOWED_SHARE * seconds * _TICKS


def time_undisturbed(work: Callable[[], Any], retries: int) -> tuple[float, bool]:
    """As `time_once`, again after a pause while disturbed, at most `retries` times."""
    seconds, disturbed = time_once(work)
    for _ in range(retries):
        if not disturbed:
            break
        time.sleep(1.0)
        seconds, disturbed = time_once(work)
    return seconds, disturbed


def alternate(sides: list[Callable[[], Any]], repeats: int, retries: int) -> list[Timing]:
    """Time the sides in turn, so that a slow spell of the machine meets all of them."""
    runs: list[list[tuple[float, bool]]] = [[] for _ in sides]
    for _ in range(repeats):
        for side, kept in zip(sides, runs, strict=True):
            kept.append(time_undisturbed(side, retries))
    return [
        Timing(tuple(seconds for seconds, _ in kept), sum(disturbed for _, disturbed in kept))
        for kept in runs
    ]


def _private_bytes() -> int:
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("RssAnon:"):
            return 1024 * int(line.split()[1])
    raise RuntimeError("/proc/self/status has no RssAnon; the benchmarks need Linux 4.5 or newer.")


def give_memory_back() -> None:
    """Return what is free to the system, so that a peak starts from what is in use."""
    gc.collect()
    ctypes.CDLL(None).malloc_trim(0)


def peak_memory(work: Callable[[], Any]) -> tuple[Any, int]:
    """The answer of a run, and the bytes of private memory at its peak beyond those before."""
    give_memory_back()
    before = peak = _private_bytes()
    done = threading.Event()

    def sample() -> None:
        nonlocal peak
        while not done.wait(_SAMPLE_SECONDS):
            peak = max(peak, _private_bytes())

    sampler = threading.Thread(target=sample, daemon=True)
    sampler.start()
    try:
        answer = work()
    finally:
        peak = max(peak, _private_bytes())
        done.set()
        sampler.join()
    return answer, peak - before


def measure_hardware(megabytes: int = 256) -> Hardware:
    """Bandwidth of reading a vector once, and the rate of a product as wide as a chunk.

    On one BLAS thread if the caller holds it to one. The best of several runs: a floor is what
    the machine can do, not what it did while busy.
    """
    vector = np.ones(megabytes << 17)
    rows, table = np.ones((50, 200)), np.ones((200, 20_000), order="F")
    reading = min(time_once(lambda: vector @ vector)[0] for _ in range(7))
    product = min(time_once(lambda: rows @ table)[0] for _ in range(7))
    return Hardware(vector.nbytes / reading, 2.0 * rows.size * table.shape[1] / product)
