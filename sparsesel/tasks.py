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
import io
import numbers
import os
import pickle
import re
import sys
import tempfile
import threading
import time
import uuid
import warnings
from collections.abc import Callable, Generator, Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import BuiltinFunctionType, FunctionType
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
    tasks = [(index, items[index]) for index in missing]
    with one_blas_thread(), _closed(_run(function, tasks, settings)) as finished:
        for index, result in finished:
            results[index] = result
            if store:
                store.write(index, result)
            progress.advance()
    return results


@contextmanager
def _closed(
    finished: Generator[tuple[int, Any], None, None],
) -> Iterator[Generator[tuple[int, Any], None, None]]:
    """Call off what is left when a run is interrupted, before BLAS threads come back."""
    try:
        yield finished
    finally:
        with warnings.catch_warnings():
            # joblib's advice on tasks called off is for those who meant to stop early.
            warnings.simplefilter("ignore", UserWarning)
            finished.close()


def _run(
    function: Callable[..., Any], tasks: list[tuple[int, Any]], settings: TaskSettings
) -> Generator[tuple[int, Any], None, None]:
    """Yield (index, result) as results come, in any order."""
    if len(tasks) < 2 or joblib.effective_n_jobs(settings.n_jobs) == 1:
        for index, item in tasks:
            yield index, function(item)
        return
    shared = function if isinstance(function, functools.partial) else functools.partial(function)
    call = delayed(_run_one)
    calls = (
        call(shared.func, index, item, _PROCESS, *shared.args, **shared.keywords)
        for index, item in tasks
    )
    for process, index, result in _parallel(settings)(calls):
        yield index, result if process == _PROCESS else _aligned(result)


def _run_one(
    function: Callable[..., Any], index: int, item: Any, home: str, /, *args: Any, **keywords: Any
) -> tuple[str, int, Any]:
    """Run one task in a worker, which may be a process with a BLAS bound of its own."""
    if home != _PROCESS:
        function, item, args, keywords = _aligned((function, item, args, keywords))
    with one_blas_thread():
        return _PROCESS, index, function(*args, item, **keywords)


# Tells processes apart, on different machines too.
_PROCESS = uuid.uuid4().hex


class _Taker(pickle.Pickler):
    """Takes an object apart; arrays, and what is found by name, are set aside whole."""

    def __init__(self, frame: io.BytesIO) -> None:
        super().__init__(frame, protocol=pickle.HIGHEST_PROTOCOL)
        self.aside: list[Any] = []

    def persistent_id(self, part: Any) -> int | None:
        if not isinstance(part, np.ndarray | type | FunctionType | BuiltinFunctionType):
            return None
        self.aside.append(part)
        return len(self.aside) - 1


class _Rebuilder(pickle.Unpickler):
    """Puts an object together again around the parts that were set aside."""

    def __init__(self, frame: io.BytesIO, aside: list[Any]) -> None:
        super().__init__(frame)
        self._aside = aside

    def persistent_load(self, position: int) -> Any:
        return self._aside[position]


def _aligned(shipped: Any) -> Any:
    """Return what came from another process with every array at an aligned address.

    Some backends unpack arrays wherever they lie in the message. At an odd address the same
    product takes another way through NumPy and BLAS, and so has other bits, and a compiled kernel
    needs another specialisation.
    """
    frame = io.BytesIO()
    taker = _Taker(frame)
    taker.dump(shipped)
    odd = [isinstance(part, np.ndarray) and not part.flags.aligned for part in taker.aside]
    if not any(odd):
        return shipped
    aside = [
        np.array(part, order="K") if is_odd else part
        for part, is_odd in zip(taker.aside, odd, strict=True)
    ]
    return _Rebuilder(io.BytesIO(frame.getvalue()), aside).load()


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


class _SharedBound:
    """Holds the BLAS libraries that count threads per process at one, while anybody is inside."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._inside = 0
        self._before: list[int] = []

    def enter(self, libraries: Sequence[Any]) -> None:
        with self._lock:
            if self._inside == 0:
                self._before = _set_threads(libraries, [1] * len(libraries))
            self._inside += 1

    def leave(self, libraries: Sequence[Any]) -> None:
        with self._lock:
            self._inside -= 1
            if self._inside == 0:
                _set_threads(libraries, self._before)
                _release(libraries)


_SHARED_BOUND = _SharedBound()


@functools.cache
def _blas_libraries() -> tuple[list[Any], list[Any]]:
    """Return the loaded BLAS libraries that count threads per process, and those per thread."""
    # Finding them takes milliseconds, bounding them microseconds: hence the cache.
    libraries = ThreadpoolController().select(user_api="blas").lib_controllers
    per_thread = [
        library
        for library in libraries
        if library.internal_api == "mkl"
        or (library.internal_api == "openblas" and library.threading_layer == "openmp")
    ]
    return [library for library in libraries if library not in per_thread], per_thread


def _set_threads(libraries: Sequence[Any], counts: Sequence[int]) -> list[int]:
    """Set the number of threads of each library and return the numbers before."""
    before = [library.num_threads for library in libraries]
    _release(libraries)
    for library, count in zip(libraries, counts, strict=True):
        library.set_num_threads(count)
    return before


def _release(libraries: Sequence[Any]) -> None:
    # threadpoolctl lets the first thread that ever set a number go on doing so and ignores all
    # others. Here the one that enters first need not be the one that leaves last.
    for library in libraries:
        if hasattr(library, "clear_controlling_thread"):
            library.clear_controlling_thread(force=True)


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
    per_process, per_thread = _blas_libraries()
    _SHARED_BOUND.enter(per_process)
    before = _set_threads(per_thread, [1] * len(per_thread))
    try:
        yield
    finally:
        _set_threads(per_thread, before)
        _SHARED_BOUND.leave(per_process)


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
    stored = part if part.format in ("csr", "csc") else part.tocsr()
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
        except Exception:  # unpickling what another version wrote can raise anything
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
    location = _location(settings.memory)
    if location is None:
        return None
    directory = location / "sparsesel" / settings.fingerprint
    try:
        directory.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise ValueError(
            f"memory={settings.memory!r} can't keep results: {error}. Allowed is a directory, or a "
            "path where one can be made. Choose one that you can write to, or memory=None."
        ) from error
    return _Store(directory)


def _location(memory: Any) -> Path | None:
    if isinstance(memory, str | os.PathLike):
        memory = os.fspath(memory)
    elif isinstance(memory, joblib.Memory):
        memory = memory.location
    else:
        raise ValueError(
            f"memory={memory!r} can't keep results. Allowed are None, the path of a directory and "
            "a joblib.Memory. Pass the path of a directory that you can write to."
        )
    # joblib keeps its results in a folder of this name: beside them, memory.clear() clears ours.
    return None if memory is None else Path(memory) / "joblib"


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
