"""Running many independent tasks: workers, BLAS threads, seeds, resume and progress.

Everything that this package repeats (chunks of a bank of problems, draws of knockoffs, cells of a
study, repetitions of a rehearsal) goes through :func:`run_tasks`, so that one place answers for
four promises:

* **The same bits for any number of workers.** Items are fixed by the caller, results come back in
  the order of the items, seeds are drawn in the parent (:func:`draw_seed`, :func:`spawn`), and the
  linear algebra runs on one thread everywhere, because one and two BLAS threads differ in the last
  bits. The number of BLAS threads belongs to the process, not to the thread that sets it: workers
  that each set and restore it would undo one another. :func:`one_blas_thread` therefore counts who
  is inside, sets the bound for the first and restores it after the last.
* **The user's choice of backend.** Tasks run under whatever ``joblib.parallel_config`` says:
  threads, processes, or a cluster.
* **A stopped run goes on where it was.** The parent stores each result as it comes under the
  fingerprint of the whole fit and the item's position. Hashing the data once per fit, not once per
  task, is what makes the look-up cheap.
* **Progress that can be read in a log.** Plain lines on standard error, or a callback.
"""

from __future__ import annotations

import dataclasses
import enum
import functools
import hashlib
import importlib.metadata
import numbers
import os
import pickle
import re
import sys
import tempfile
import threading
import time
import warnings
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import joblib
import numpy as np
import scipy.linalg  # noqa: F401  (loads scipy's own BLAS before its threads are first bounded)
import scipy.sparse as sp
from sklearn.utils import check_random_state
from sklearn.utils.parallel import Parallel, delayed
from threadpoolctl import ThreadpoolController

__all__ = [
    "TaskSettings",
    "draw_seed",
    "fingerprint",
    "one_blas_thread",
    "run_tasks",
    "spawn",
]


@dataclasses.dataclass(frozen=True)
class TaskSettings:
    """How a list of tasks is run; none of it changes a result.

    Parameters
    ----------
    n_jobs : int or None, default=None
        Number of workers, as in scikit-learn: None is 1 unless ``joblib.parallel_config`` says
        otherwise, -1 is all processors.
    memory : str, path, joblib.Memory or None, default=None
        Where results are kept so that a stopped run can go on. Stored results are unpickled:
        point it only at a directory that nobody else can write to.
    verbose : int, default=0
        0 is silent, 1 prints a progress line every few seconds, 2 one line per task.
    label : str, default=""
        What the tasks are, for the progress lines.
    fingerprint : str or None, default=None
        Names everything the results depend on, see :func:`fingerprint`. Results are kept only
        where both this and `memory` are given.
    progress : callable or None, default=None
        Called in the parent as ``progress(done, total)`` after each task.
    prefer : {"threads", "processes"} or None, default=None
        Hint for joblib where the user chose no backend: "threads" for compiled work that releases
        the interpreter's lock, which saves starting processes.
    """

    n_jobs: int | None = None
    memory: str | os.PathLike[str] | joblib.Memory | None = None
    verbose: int = 0
    label: str = ""
    fingerprint: str | None = None
    progress: Callable[[int, int], None] | None = None
    prefer: str | None = None


# ---------------------------------------------------------------------------------------------
# Running
# ---------------------------------------------------------------------------------------------


def run_tasks(
    function: Callable[..., Any], items: Iterable[Any], settings: TaskSettings = TaskSettings()
) -> list[Any]:
    """Apply a function to every item, in parallel, and return the results in order.

    Parameters
    ----------
    function : callable
        Called with one item. Large arrays that all tasks share belong into the arguments of a
        ``functools.partial``: backends then ship them once, not once per task.
    items : iterable
        The tasks, in a fixed order. Random tasks carry their own seed or generator.
    settings : TaskSettings
        Workers, resume and progress.

    Returns
    -------
    list
        ``[function(item) for item in items]``, the same bits for any backend on one machine.

    Raises
    ------
    ValueError
        If `settings.memory` or `settings.fingerprint` can't be used to keep results.

    Examples
    --------
    >>> from sparsesel.tasks import TaskSettings, run_tasks
    >>> run_tasks(abs, [-1, 2, -3])
    [1, 2, 3]
    """
    items = list(items)
    store = _open_store(settings)
    progress = _Progress(len(items), settings)
    results: list[Any] = [None] * len(items)
    missing = []
    for index in range(len(items)):
        found, results[index] = store.read(index) if store else (False, None)
        if found:
            progress.resume()
        else:
            missing.append(index)
    with one_blas_thread():
        for index, result in _run(function, [(index, items[index]) for index in missing], settings):
            results[index] = result
            if store:
                store.write(index, result)
            progress.advance()
    return results


def _run(
    function: Callable[..., Any], tasks: list[tuple[int, Any]], settings: TaskSettings
) -> Iterator[tuple[int, Any]]:
    """Yield (index, result) as results come, in any order."""
    if len(tasks) < 2 or joblib.effective_n_jobs(settings.n_jobs) == 1:
        for index, item in tasks:
            yield index, function(item)
        return
    shared = function if isinstance(function, functools.partial) else functools.partial(function)
    call = delayed(_run_one)
    calls = (
        call(shared.func, index, item, *shared.args, **shared.keywords) for index, item in tasks
    )
    yield from _parallel(settings)(calls)


def _run_one(
    function: Callable[..., Any], index: int, item: Any, /, *args: Any, **keywords: Any
) -> tuple[int, Any]:
    """Run one task in a worker, which may be a process with a BLAS bound of its own."""
    with one_blas_thread():
        return index, function(*args, item, **keywords)


def _parallel(settings: TaskSettings) -> Parallel:
    """Return workers that hand over results as they come, where the backend can do that."""
    try:
        return Parallel(
            n_jobs=settings.n_jobs, prefer=settings.prefer, return_as="generator_unordered"
        )
    except ValueError:
        return Parallel(n_jobs=settings.n_jobs, prefer=settings.prefer)


# ---------------------------------------------------------------------------------------------
# One BLAS thread
# ---------------------------------------------------------------------------------------------


class _BlasBound:
    """Holds BLAS at one thread while anybody is inside."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._inside = 0
        self._limiter: Any = None

    def enter(self) -> None:
        with self._lock:
            if self._inside == 0:
                self._limiter = _controller().limit(limits=1, user_api="blas")
            self._inside += 1

    def leave(self) -> None:
        with self._lock:
            self._inside -= 1
            if self._inside == 0:
                self._limiter.restore_original_limits()


_BLAS_BOUND = _BlasBound()


@functools.cache
def _controller() -> ThreadpoolController:
    # Finding the loaded libraries takes milliseconds, bounding them microseconds.
    return ThreadpoolController()


@contextmanager
def one_blas_thread() -> Iterator[None]:
    """Keep linear algebra on one thread inside the block; nests, and is safe across threads.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.tasks import one_blas_thread
    >>> with one_blas_thread():
    ...     float(np.ones(3) @ np.ones(3))
    3.0
    """
    _BLAS_BOUND.enter()
    try:
        yield
    finally:
        _BLAS_BOUND.leave()


# ---------------------------------------------------------------------------------------------
# Seeds
# ---------------------------------------------------------------------------------------------

# Sets our streams apart from those a user spawns from the same integer, for the data, say.
_STREAM = 0x53504152


def draw_seed(random_state: Any) -> int:
    """Turn a `random_state` into one integer seed, drawn once in the parent.

    Parameters
    ----------
    random_state : None, int, numpy.random.RandomState or numpy.random.Generator
        An integer below 2**31 is its own seed; the others are asked for one and so move on.
        None asks NumPy's global state, as scikit-learn does.

    Returns
    -------
    int
        In [0, 2**31).

    Raises
    ------
    ValueError
        If `random_state` is none of these.

    Examples
    --------
    >>> from sparsesel.tasks import draw_seed
    >>> draw_seed(7)
    7
    """
    if isinstance(random_state, np.random.Generator):
        return int(random_state.integers(2**31))
    if isinstance(random_state, int | np.integer) and 0 <= random_state < 2**31:
        return int(random_state)
    try:
        # Larger integers, RandomState, None and the numpy.random module are scikit-learn's to read.
        source = check_random_state(random_state)
    except (ValueError, TypeError) as error:
        raise ValueError(
            f"random_state={random_state!r} can't be used as a source of seeds. Allowed are None, "
            "an integer from 0 to 2**32 - 1, a numpy.random.RandomState and a "
            "numpy.random.Generator. Pass an integer to get the same result every time."
        ) from error
    return int(source.randint(2**31, dtype=np.int64))


def spawn(seed: int, count: int, *key: int) -> list[np.random.Generator]:
    """Return independent generators, the same for the same seed and key.

    Parameters
    ----------
    seed : int
        From :func:`draw_seed`.
    count : int
        How many. A larger count extends the list and leaves its beginning as it was.
    *key : int
        Non-negative integers that tell apart the purposes one seed serves.

    Returns
    -------
    list of numpy.random.Generator

    Examples
    --------
    >>> from sparsesel.tasks import spawn
    >>> first, second = spawn(0, 2)
    >>> bool(first.random() == second.random())
    False
    """
    return [
        np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(_STREAM, *key, index)))
        for index in range(count)
    ]


# ---------------------------------------------------------------------------------------------
# Fingerprints
# ---------------------------------------------------------------------------------------------

# Raise when the layout of stored results or of fingerprints changes.
_STORE_FORMAT = 1
_LIBRARIES = ("numpy", "scipy", "scikit-learn", "numba", "sparsesel")
# A tile of 512 x 512 doubles is 2 MB, and its rows (or columns) fill whole pages of a memory map
# in either storage order.
_TILE = 512


def fingerprint(*parts: Any) -> str:
    """Name a computation by all that its result depends on.

    Arrays are read once, tile by tile, in logical order: C and Fortran order, views, read-only
    arrays and memory maps of the same values have the same fingerprint, and no copy of the whole
    is made. The versions of the libraries that compute are always included.

    Parameters
    ----------
    *parts : object
        Arrays, sparse matrices, data frames, settings, seeds: plain values, containers of them,
        dataclasses, enum members, classes and scikit-learn estimators. A sparse matrix is taken
        as it is stored: CSR and CSC, or 32- and 64-bit indices, of one matrix differ.

    Returns
    -------
    str
        64 hexadecimal digits.

    Raises
    ------
    TypeError
        If a part has no value that could be compared between runs, like a function or a random
        generator.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel.tasks import fingerprint
    >>> X = np.arange(6.0).reshape(2, 3)
    >>> fingerprint(X, {"tol": 1e-7}) == fingerprint(np.asfortranarray(X), {"tol": 1e-7})
    True
    """
    return _combine("fingerprint", _versions(), *map(_digest, parts)).hex()


@functools.cache
def _versions() -> bytes:
    found = [f"format {_STORE_FORMAT}", f"python {sys.version_info[:2]}"]
    for name in _LIBRARIES:
        try:
            found.append(f"{name} {importlib.metadata.version(name)}")
        except importlib.metadata.PackageNotFoundError:
            # Run from its source tree, this package has no installed version.
            found.append(f"{name} not installed")
    return "; ".join(found).encode()


def _combine(tag: str, *pieces: bytes) -> bytes:
    """Hash a tag and pieces; their lengths go in, so that no two lists of pieces run together."""
    digest = hashlib.sha256()
    for piece in (tag.encode(), *pieces):
        digest.update(len(piece).to_bytes(8, "little"))
        digest.update(piece)
    return digest.digest()


@functools.singledispatch
def _digest(part: Any) -> bytes:
    """Hash one part by its value; the registrations below say how, by type."""
    name = f"{type(part).__module__}.{type(part).__qualname__}"
    if dataclasses.is_dataclass(part):
        values = {field.name: getattr(part, field.name) for field in dataclasses.fields(part)}
        return _combine("object", name.encode(), _digest(values))
    if hasattr(part, "get_params"):
        return _combine("object", name.encode(), _digest(part.get_params(deep=False)))
    if hasattr(part, "iloc") and hasattr(part, "columns"):
        return _digest_columns(name, part.columns, (part.iloc[:, j] for j in range(part.shape[1])))
    if hasattr(part, "get_columns"):
        return _digest_columns(name, part.columns, part.get_columns())
    if hasattr(part, "dtype") and hasattr(part, "to_numpy"):
        return _combine("column", name.encode(), str(part.dtype).encode(), _digest(part.to_numpy()))
    if name.endswith((".NAType", ".NaTType")):
        return _combine("missing", name.encode())
    raise TypeError(
        f"A value of type {name} can't be part of a fingerprint: it can't be compared between "
        "runs. Allowed are arrays, sparse matrices, data frames, plain values, containers of "
        "these, dataclasses, classes and scikit-learn estimators with such parameters. Replace "
        "it by the values it stands for, or set memory=None to do without stored results."
    )


def _digest_columns(name: str, labels: Iterable[Any], columns: Iterable[Any]) -> bytes:
    return _combine("table", name.encode(), _digest(list(labels)), *map(_digest, columns))


@_digest.register
def _(part: None) -> bytes:
    return _combine("none")


@_digest.register
def _(part: numbers.Number | np.generic) -> bytes:
    value = part.item() if isinstance(part, np.generic) else part
    return _combine("value", type(value).__name__.encode(), repr(value).encode())


@_digest.register
def _(part: str) -> bytes:
    return _combine("text", part.encode("utf-8", "surrogatepass"))


@_digest.register
def _(part: bytes) -> bytes:
    return _combine("bytes", part)


@_digest.register
def _(part: slice | range | np.dtype) -> bytes:
    return _combine("value", repr(part).encode())


@_digest.register
def _(part: type) -> bytes:
    return _combine("class", f"{part.__module__}.{part.__qualname__}".encode())


@_digest.register
def _(part: enum.Enum) -> bytes:
    return _combine("member", _digest(type(part)), part.name.encode())


@_digest.register
def _(part: os.PathLike) -> bytes:
    return _combine("path", os.fsencode(part))


@_digest.register
def _(part: list | tuple) -> bytes:
    return _combine("sequence", *map(_digest, part))


@_digest.register
def _(part: set | frozenset) -> bytes:
    return _combine("set", *sorted(map(_digest, part)))


@_digest.register
def _(part: Mapping) -> bytes:
    pairs = sorted(_digest(key) + _digest(value) for key, value in part.items())
    return _combine("mapping", *pairs)


@_digest.register
def _(part: sp.sparray | sp.spmatrix) -> bytes:
    stored: Any = part if getattr(part, "format", None) in ("csr", "csc") else sp.csr_array(part)
    arrays = (stored.indptr, stored.indices, stored.data)
    return _combine(stored.format, repr(stored.shape).encode(), *map(_digest, arrays))


@_digest.register
def _(part: np.ndarray) -> bytes:
    header = f"{part.dtype.str} {part.shape}".encode()
    if part.dtype.hasobject:
        return _combine("objects", header, _digest(part.ravel(order="C").tolist()))
    if part.ndim == 2:
        table, height, width = part, _TILE, _TILE
    else:
        table, height, width = part.reshape(1, -1), 1, _TILE * _TILE
    rows, columns = range(0, table.shape[0], height), range(0, table.shape[1], width)
    # Tiles are visited in storage order, so that a memory map is read once, front to back, and
    # joined in one fixed order.
    by_column = part.flags.f_contiguous
    corners = [(i, j) for j in columns for i in rows] if by_column else None
    digests = {
        (i, j): hashlib.sha256(table[i : i + height, j : j + width].tobytes("C")).digest()
        for i, j in corners or [(i, j) for i in rows for j in columns]
    }
    return _combine("array", header, *(digests[i, j] for i in rows for j in columns))


# ---------------------------------------------------------------------------------------------
# Resume
# ---------------------------------------------------------------------------------------------


class _Store:
    """The results of one fingerprint, one file each: a checksum, then the pickle.

    A file is written aside and moved into place, so that no reader meets half a result; the
    checksum catches what a crash of the machine can still leave. Whatever can't be read is
    computed again.
    """

    def __init__(self, directory: Path) -> None:
        self._directory = directory
        self._writable = True

    def read(self, index: int) -> tuple[bool, Any]:
        try:
            stored = self._path(index).read_bytes()
            if hashlib.sha256(stored[32:]).digest() == stored[:32]:
                return True, pickle.loads(stored[32:])
        except (OSError, pickle.UnpicklingError, EOFError, AttributeError, ImportError):
            pass
        return False, None

    def write(self, index: int, result: Any) -> None:
        if not self._writable:
            return
        payload = pickle.dumps(result, protocol=pickle.HIGHEST_PROTOCOL)
        try:
            handle, aside = tempfile.mkstemp(dir=self._directory, prefix="writing-")
            try:
                with open(handle, "wb") as file:
                    file.write(hashlib.sha256(payload).digest())
                    file.write(payload)
                os.replace(aside, self._path(index))
            except BaseException:
                os.unlink(aside)
                raise
        except OSError as error:
            self._writable = False
            warnings.warn(
                f"Results can no longer be kept in {self._directory}: {error}. The run goes on "
                "without, and its results are right; a repeated run will compute again what is "
                "missing. Free space there or choose another directory for memory.",
                RuntimeWarning,
                stacklevel=2,
            )

    def _path(self, index: int) -> Path:
        return self._directory / f"{index}.pickle"


def _open_store(settings: TaskSettings) -> _Store | None:
    if settings.memory is None or settings.fingerprint is None:
        return None
    if not re.fullmatch(r"[0-9A-Za-z_-]+", settings.fingerprint):
        raise ValueError(
            f"The fingerprint {settings.fingerprint!r} can't name a directory. Allowed are "
            "letters, digits, '-' and '_'. Use the value of sparsesel.tasks.fingerprint."
        )
    memory = settings.memory
    if isinstance(memory, str | os.PathLike):
        memory = _open_memory(memory)
    if not isinstance(memory, joblib.Memory):
        raise ValueError(
            f"memory={memory!r} can't keep results. Allowed are None, the path of a directory and "
            "a joblib.Memory. Pass the path of a directory that you can write to."
        )
    if memory.store_backend is None:
        return None
    # Inside joblib's own folder, so that memory.clear() clears these too.
    directory = Path(memory.store_backend.location) / "sparsesel" / settings.fingerprint
    directory.mkdir(parents=True, exist_ok=True)
    return _Store(directory)


def _open_memory(path: str | os.PathLike[str]) -> joblib.Memory:
    try:
        return joblib.Memory(os.fspath(path), verbose=0)
    except OSError as error:
        raise ValueError(
            f"memory={os.fspath(path)!r} can't keep results: {error}. Allowed is a directory, or "
            "a path where one can be made. Choose one that you can write to, or memory=None."
        ) from error


# ---------------------------------------------------------------------------------------------
# Progress
# ---------------------------------------------------------------------------------------------

_SECONDS_BETWEEN_LINES = 2.0


class _Progress:
    """Counts finished tasks, and tells a callback and standard error."""

    def __init__(self, total: int, settings: TaskSettings) -> None:
        self._total = total
        self._settings = settings
        self._done = 0
        self._resumed = 0
        self._started = self._told = time.monotonic()

    def resume(self) -> None:
        self._resumed += 1
        self.advance()

    def advance(self) -> None:
        self._done += 1
        if self._settings.progress is not None:
            self._settings.progress(self._done, self._total)
        if self._settings.verbose > 0:
            self._tell(time.monotonic())

    def _tell(self, now: float) -> None:
        last = self._done == self._total
        soon = now - self._told < _SECONDS_BETWEEN_LINES
        if soon and not last and self._settings.verbose < 2:
            return
        self._told = now
        print(self._line(now - self._started), file=sys.stderr, flush=True)

    def _line(self, elapsed: float) -> str:
        label = self._settings.label or "tasks"
        line = f"{label}: {self._done}/{self._total} in {_duration(elapsed)}"
        if self._resumed:
            line += f" ({self._resumed} kept from before)"
        computed = self._done - self._resumed
        if computed and self._done < self._total:
            left = elapsed / computed * (self._total - self._done)
            line += f", about {_duration(left)} left"
        return line


def _duration(seconds: float) -> str:
    if seconds < 60:
        return f"{seconds:.1f} s"
    minutes, seconds = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours} h {minutes:02d} min" if hours else f"{minutes} min {seconds:02d} s"
