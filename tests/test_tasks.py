"""Contracts of the task runner: the same bits everywhere, one BLAS thread, resume, fingerprints."""

from __future__ import annotations

import dataclasses
import enum
import functools
import os
import threading
import time
from pathlib import Path

import joblib
import numpy as np
import pandas as pd
import polars as pl
import pytest
import scipy.sparse as sp
from sklearn.linear_model import Lasso, Ridge
from threadpoolctl import threadpool_info, threadpool_limits

from sparsesel.tasks import (
    TaskSettings,
    _aligned,
    draw_seed,
    fingerprint,
    one_blas_thread,
    run_tasks,
    spawn,
)


def blas_threads():
    return {
        library["num_threads"] for library in threadpool_info() if library["user_api"] == "blas"
    }


@pytest.fixture
def two_blas_threads():
    with threadpool_limits(2, user_api="blas"):
        if blas_threads() != {2}:
            pytest.skip("this BLAS was built for one thread")
        yield


def gram_and_place(X, seed):
    """A result with rounding in it, drawn numbers in it, and a word on where it was computed."""
    noise = np.random.default_rng(seed).normal(size=X.shape[1])
    return (X.T @ X) @ noise, blas_threads(), os.getpid()


# --- running ---------------------------------------------------------------------------------


def test_results_keep_the_order_of_the_items_whatever_finishes_first():
    def wait(seconds):
        time.sleep(seconds)
        return seconds

    items = [0.2, 0.0, 0.1, 0.0]
    with joblib.parallel_config("threading"):
        assert run_tasks(wait, items, TaskSettings(n_jobs=4)) == items


@pytest.mark.parametrize("backend", ["threading", "loky"])
def test_same_bits_and_one_blas_thread_on_every_backend(backend, two_blas_threads):
    X = np.random.default_rng(0).normal(size=(301, 257))
    task = functools.partial(gram_and_place, X)
    alone = run_tasks(task, range(6))
    inner = {"inner_max_num_threads": 2} if backend == "loky" else {}
    with joblib.parallel_config(backend, **inner):
        shared = run_tasks(task, range(6), TaskSettings(n_jobs=2))
    for (one, one_threads, _), (two, two_threads, _) in zip(alone, shared, strict=True):
        assert one.tobytes() == two.tobytes()
        assert one_threads == two_threads == {1}
    assert blas_threads() == {2}
    places = {place for *_, place in shared}
    assert (places == {os.getpid()}) == (backend == "threading")


def test_same_bits_on_a_cluster_of_two_processes():
    distributed = pytest.importorskip("distributed")
    X = np.random.default_rng(0).normal(size=(301, 257))
    task = functools.partial(gram_and_place, X)
    alone = run_tasks(task, range(6))
    cluster = distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None
    )
    with cluster, distributed.Client(cluster), joblib.parallel_config("dask"):
        shared = run_tasks(task, range(6))
    for (one, _, home), (two, threads, place) in zip(alone, shared, strict=True):
        assert one.tobytes() == two.tobytes()
        assert threads == {1}
        assert place != home


def test_a_hint_for_threads_is_taken_and_a_chosen_backend_wins_over_it():
    settings = TaskSettings(n_jobs=2, prefer="threads")
    assert set(run_tasks(lambda _: os.getpid(), range(4), settings)) == {os.getpid()}
    with joblib.parallel_config("loky"):
        assert os.getpid() not in run_tasks(lambda _: os.getpid(), range(4), settings)


def test_a_backend_that_only_returns_everything_at_once_is_served():
    from joblib._parallel_backends import ThreadingBackend

    class AllAtOnce(ThreadingBackend):
        supports_return_generator = False
        supports_retrieve_callback = False

    joblib.register_parallel_backend("all at once", AllAtOnce)
    with joblib.parallel_config("all at once"):
        assert run_tasks(abs, [-1, -2, -3], TaskSettings(n_jobs=2)) == [1, 2, 3]


def test_keywords_of_a_partial_may_have_any_name():
    def weigh(a, b, item, index, function):
        return a, b, item, index, function

    task = functools.partial(weigh, 1, 2, index=3, function=4)
    with joblib.parallel_config("threading"):
        assert run_tasks(lambda item: task(item), [5, 6]) == run_tasks(
            task, [5, 6], TaskSettings(n_jobs=2)
        )


def test_the_first_failure_reaches_the_caller_and_threads_come_back(two_blas_threads):
    def fail(item):
        raise ArithmeticError(f"item {item}")

    for n_jobs in (1, 2):
        with joblib.parallel_config("threading"), pytest.raises(ArithmeticError, match="item"):
            run_tasks(fail, range(8), TaskSettings(n_jobs=n_jobs))
        assert blas_threads() == {2}


def test_overhead_without_workers_is_small_against_any_task():
    run_tasks(abs, [1])
    started = time.perf_counter()
    run_tasks(abs, range(100_000))
    # Measured: half a microsecond a task. A hundred times that is still nothing beside a fit.
    assert time.perf_counter() - started < 5.0


@dataclasses.dataclass(frozen=True)
class Design:
    X: np.ndarray
    note: str


def test_arrays_at_odd_addresses_are_moved_at_any_depth():
    values = np.asfortranarray(np.arange(6.0).reshape(2, 3))
    message = np.zeros(values.nbytes + 64, dtype=np.uint8)
    start = (1 - message.ctypes.data) % 16
    odd = message[start : start + values.nbytes].view(float).reshape(2, 3, order="F")
    odd[...] = values
    sparse = sp.csr_array(values)
    sparse.data = odd.ravel(order="K")[1:]
    assert not odd.flags.aligned and not sparse.data.flags.aligned
    moved = _aligned(([Design(odd, "kept")], {"sparse": sparse}, values, blas_threads, Lasso(2.0)))
    design = moved[0][0]
    assert design.X.flags.aligned and design.X.flags.f_contiguous and design.note == "kept"
    np.testing.assert_array_equal(design.X, values)
    assert moved[1]["sparse"].data.flags.aligned
    assert moved[2] is values and moved[3] is blas_threads and moved[4].alpha == 2.0


def test_what_lies_well_is_not_copied():
    parts = ([Design(np.ones((2, 3)), "kept")], np.arange(3))
    assert _aligned(parts) is parts


# --- one BLAS thread --------------------------------------------------------------------------


def test_the_bound_holds_until_the_last_one_leaves(two_blas_threads):
    first_in, first_out, second_in = (threading.Event() for _ in range(3))
    seen = {}

    def first():
        with one_blas_thread():
            first_in.set()
            second_in.wait(10)
        first_out.set()

    def second():
        first_in.wait(10)
        with one_blas_thread():
            second_in.set()
            first_out.wait(10)
            seen["after the first left"] = blas_threads()

    threads = [threading.Thread(target=target) for target in (first, second)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert seen == {"after the first left": {1}}
    assert blas_threads() == {2}


def test_the_bound_nests_and_is_lifted_by_an_error(two_blas_threads):
    with pytest.raises(KeyError), one_blas_thread():
        with one_blas_thread():
            pass
        assert blas_threads() == {1}
        raise KeyError
    assert blas_threads() == {2}


# --- seeds -----------------------------------------------------------------------------------


def test_integer_seeds_are_their_own():
    assert [draw_seed(seed) for seed in (0, 5, np.int64(7), 2**31 - 1)] == [0, 5, 7, 2**31 - 1]
    large = draw_seed(2**32 - 1)
    assert large == draw_seed(2**32 - 1) and 0 <= large < 2**31


@pytest.mark.parametrize("make", [np.random.RandomState, np.random.default_rng])
def test_stateful_sources_move_on_and_repeat_from_the_start(make):
    source = make(3)
    first, second = draw_seed(source), draw_seed(source)
    assert first != second
    assert draw_seed(make(3)) == first
    assert 0 <= first < 2**31


def test_none_asks_the_global_state_as_scikit_learn_does(monkeypatch):
    monkeypatch.setattr(np.random.mtrand, "_rand", np.random.RandomState(11))
    same = np.random.RandomState(11)
    assert [draw_seed(None), draw_seed(np.random)] == [draw_seed(same), draw_seed(same)]


@pytest.mark.parametrize("wrong", [-1, 2**32, 1.5, "seed"])
def test_other_random_states_are_refused(wrong):
    with pytest.raises(ValueError, match=r"random_state=.* Allowed are None.* Pass an integer"):
        draw_seed(wrong)


def first_draws(generators):
    return [int(generator.integers(2**63)) for generator in generators]


def test_streams_repeat_extend_and_differ_by_key():
    five = first_draws(spawn(1, 5, 2))
    assert five == first_draws(spawn(1, 8, 2))[:5]
    others = [spawn(1, 5), spawn(1, 5, 0), spawn(1, 5, 2, 0), spawn(0, 5, 2)]
    draws = [*five, *(draw for other in others for draw in first_draws(other))]
    assert len(set(draws)) == 25


def test_streams_are_not_those_a_user_spawns_from_the_same_seed():
    # Someone who simulates a table from SeedSequence(0) must not select with the table's noise.
    users = [np.random.default_rng(child) for child in np.random.SeedSequence(0).spawn(5)]
    users.append(np.random.default_rng(0))
    assert not set(first_draws(users)) & set(first_draws(spawn(0, 5)))


# --- fingerprints -----------------------------------------------------------------------------


@pytest.mark.parametrize("dtype", [np.float32, np.float64, np.int64, bool])
@pytest.mark.parametrize("shape", [(3, 4), (700, 1300), (1, 600), (600, 1), (0, 5)])
def test_storage_does_not_matter_to_a_fingerprint(shape, dtype, tmp_path):
    X = np.random.default_rng(0).normal(size=shape).astype(dtype)
    wanted = fingerprint(X)
    fortran = np.asfortranarray(X)
    read_only = X.copy()
    read_only.flags.writeable = False
    view = np.empty((2 * shape[0], 3 * shape[1]), dtype)[::2, ::3]
    view[...] = X
    same = [fortran, read_only, view, X[::-1][::-1]]
    if X.size:
        for order in "CF":
            path = tmp_path / order
            stored = np.memmap(path, dtype=dtype, mode="w+", shape=shape, order=order)
            stored[...] = X
            stored.flush()
            same.append(np.memmap(path, dtype=dtype, mode="r", shape=shape, order=order))
    assert {fingerprint(other) for other in same} == {wanted}


def test_values_places_shapes_and_types_matter_to_a_fingerprint():
    X = np.random.default_rng(0).normal(size=(513, 514))
    changed = X.copy()
    changed[-1, -1] += 1e-15
    swapped = X[:, [1, 0, *range(2, 514)]]
    variants = [X, changed, swapped, X.T, X.ravel(), X.reshape(514, 513), X.astype(np.float32)]
    variants += [X[:512], X[:, :512]]
    assert len({fingerprint(variant) for variant in variants}) == len(variants)


def test_a_large_table_is_not_copied(tmp_path):
    import tracemalloc

    stored = np.memmap(tmp_path / "X", dtype=np.float32, mode="w+", shape=(4_000, 5_000), order="F")
    fingerprint(stored[:10])
    tracemalloc.start()
    fingerprint(stored)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < stored.nbytes / 10


class Colour(enum.Enum):
    RED = 1
    BLUE = 2


class Level(enum.IntEnum):
    LOW = 1


@dataclasses.dataclass(frozen=True)
class Setting:
    tol: float
    weights: np.ndarray


def test_settings_are_told_apart_by_value():
    parts = [
        (),
        (None,),
        (1,),
        (1.0,),
        (True,),
        ("1",),
        (b"1",),
        (1, 1),
        ((1, 1),),
        ([1], [1]),
        (-0.0,),
        (0.0,),
        (float("nan"),),
        ({"a": 1, "b": 2},),
        ({"a": 2, "b": 1},),
        ({1, 2},),
        (Colour.RED,),
        (Colour.BLUE,),
        (Level.LOW,),
        (Setting(1e-7, np.ones(2)),),
        (Setting(1e-7, np.zeros(2)),),
        (Lasso(),),
        (Lasso(alpha=2.0),),
        (Ridge(),),
        (Lasso,),
        (slice(1, 2),),
        (Path("a"),),
        (np.dtype("f4"),),
        (np.array(["a", "b"]),),
        (np.array(["a", 1, None], dtype=object),),
    ]
    assert len({fingerprint(*part) for part in parts}) == len(parts)


def test_equal_settings_have_equal_fingerprints():
    assert fingerprint({"a": 1, "b": 2}) == fingerprint({"b": 2, "a": 1})
    assert fingerprint([1, 2]) == fingerprint((1, 2))
    assert fingerprint(np.float64(0.5), np.int32(3)) == fingerprint(0.5, 3)
    assert fingerprint(Setting(1e-7, np.ones(2))) == fingerprint(Setting(1e-7, np.ones(2)))
    assert fingerprint(Lasso(alpha=2.0)) == fingerprint(Lasso(alpha=2.0))
    assert fingerprint({"x", "y", "z"}) == fingerprint({"z", "y", "x"})


@pytest.mark.parametrize("make", [sp.csr_array, sp.csc_array, sp.coo_array])
def test_sparse_tables_are_taken_as_stored(make):
    X = sp.random(50, 40, density=0.1, random_state=0, format="csr")
    assert fingerprint(make(X)) == fingerprint(make(X.copy()))
    changed = X.copy()
    changed.data[0] += 1.0
    assert fingerprint(make(X)) != fingerprint(make(changed))
    assert fingerprint(sp.csr_array(X)) == fingerprint(sp.csr_matrix(X))
    assert fingerprint(sp.csr_array(X)) != fingerprint(sp.csr_array(X.tocsc().T))


@pytest.mark.parametrize("frame", [pd.DataFrame, pl.DataFrame])
def test_data_frames_count_by_names_types_and_values(frame):
    base = {"a": [1.0, 2.0], "b": ["x", None], "c": [1, 2]}
    variants = [
        base,
        {**base, "a": [1.0, 3.0]},
        {**base, "b": ["x", "y"]},
        {**base, "c": [1.0, 2.0]},
        {"A": base["a"], "b": base["b"], "c": base["c"]},
    ]
    assert len({fingerprint(frame(variant)) for variant in variants}) == len(variants)
    assert fingerprint(frame(base)) == fingerprint(frame(base))


def test_columns_and_missing_values_of_pandas_can_be_fingerprinted():
    series = pd.Series([1, None], dtype="Int64")
    assert fingerprint(series) == fingerprint(series.copy())
    assert fingerprint(series) != fingerprint(series.fillna(2))
    categories = pd.Series(["a", "b"], dtype="category")
    assert fingerprint(categories) != fingerprint(categories.astype(object))


@pytest.mark.parametrize("part", [abs, lambda: None, np.random.default_rng(0), object()])
def test_what_has_no_lasting_value_is_refused(part):
    with pytest.raises(TypeError, match=r"can't be part.* Allowed are arrays.* memory=None"):
        fingerprint({"setting": [part]})


# --- resume ----------------------------------------------------------------------------------


class Counted:
    """A task that remembers what it was asked, and can be told to stop."""

    def __init__(self, stop_at=None):
        self.asked = []
        self.stop_at = stop_at

    def __call__(self, item):
        if item == self.stop_at:
            raise KeyboardInterrupt
        self.asked.append(item)
        return {"square": np.full(3, item**2)}


def squares(results):
    return [int(result["square"][0]) for result in results]


def result_files(directory):
    return sorted(Path(directory).rglob("*.pickle"))


def test_a_stopped_run_goes_on_where_it_was(tmp_path):
    settings = TaskSettings(memory=tmp_path, fingerprint=fingerprint("run"))
    with pytest.raises(KeyboardInterrupt):
        run_tasks(Counted(stop_at=3), range(6), settings)
    again = Counted()
    assert squares(run_tasks(again, range(6), settings)) == [0, 1, 4, 9, 16, 25]
    assert again.asked == [3, 4, 5]
    longer = Counted()
    assert squares(run_tasks(longer, range(8), settings))[6:] == [36, 49]
    assert longer.asked == [6, 7]
    other = Counted()
    run_tasks(other, range(2), dataclasses.replace(settings, fingerprint=fingerprint("other")))
    assert other.asked == [0, 1]


def test_interrupting_workers_keeps_what_they_finished(tmp_path):
    def stop(done, total):
        if done == 3:
            raise KeyboardInterrupt

    settings = TaskSettings(n_jobs=2, memory=tmp_path, fingerprint="stopped", progress=stop)
    with joblib.parallel_config("threading"), pytest.raises(KeyboardInterrupt):
        run_tasks(Counted(), range(20), settings)
    kept = {int(path.stem) for path in result_files(tmp_path)}
    assert len(kept) == 3
    again = Counted()
    run_tasks(again, range(20), dataclasses.replace(settings, n_jobs=1, progress=None))
    assert set(again.asked) == set(range(20)) - kept


@pytest.mark.parametrize("damage", ["truncated", "empty", "flipped", "foreign"])
def test_a_damaged_result_is_computed_again(damage, tmp_path):
    settings = TaskSettings(memory=tmp_path, fingerprint="damaged")
    run_tasks(Counted(), range(3), settings)
    victim = result_files(tmp_path)[1]
    content = bytearray(victim.read_bytes())
    if damage == "flipped":
        content[len(content) // 2] ^= 1
    content = {"truncated": content[:-5], "empty": b"", "foreign": b"x" * 100}.get(damage, content)
    victim.write_bytes(content)
    again = Counted()
    assert squares(run_tasks(again, range(3), settings)) == [0, 1, 4]
    assert again.asked == [1]
    settled = Counted()
    run_tasks(settled, range(3), settings)
    assert settled.asked == []


def test_no_partly_written_result_is_left_behind(tmp_path, monkeypatch):
    settings = TaskSettings(memory=tmp_path, fingerprint="full")

    def full(source, target):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.warns(
        RuntimeWarning, match=r"can no longer be kept.*its results are right"
    ) as told:
        assert squares(run_tasks(Counted(), range(3), settings)) == [0, 1, 4]
    assert len(told) == 1
    assert [path for path in tmp_path.rglob("*") if path.is_file()] == []


def test_memory_is_read_as_scikit_learn_reads_it(tmp_path):
    run_tasks(Counted(), range(2), TaskSettings(memory=str(tmp_path), fingerprint="shared"))
    memory = joblib.Memory(tmp_path, verbose=0)
    settings = TaskSettings(memory=memory, fingerprint="shared")
    again = Counted()
    run_tasks(again, range(2), settings)
    assert again.asked == []
    memory.clear(warn=False)
    run_tasks(again, range(2), settings)
    assert again.asked == [0, 1]


@pytest.mark.parametrize(
    "settings", [TaskSettings(memory=joblib.Memory(None), fingerprint="a"), TaskSettings()]
)
def test_nothing_is_kept_without_a_place(settings, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    run_tasks(Counted(), range(2), settings)
    assert list(tmp_path.iterdir()) == []


def test_memory_that_can_not_keep_results_is_refused(tmp_path):
    (tmp_path / "file").write_text("in the way")
    for memory in (tmp_path / "file", 3):
        with pytest.raises(ValueError, match=r"memory=.* can't keep results.* Allowed .*write to"):
            run_tasks(abs, [1], TaskSettings(memory=memory, fingerprint="a"))
    with pytest.raises(ValueError, match=r"'../a' can't name.* Allowed.* Use the value"):
        run_tasks(abs, [1], TaskSettings(memory=tmp_path, fingerprint="../a"))


# --- progress ---------------------------------------------------------------------------------


def test_progress_is_told_to_the_callback_and_to_standard_error(tmp_path, capsys):
    calls = []
    settings = TaskSettings(
        memory=tmp_path,
        fingerprint="told",
        verbose=2,
        label="half-samples",
        progress=lambda done, total: calls.append((done, total)),
    )
    run_tasks(Counted(), range(2), settings)
    capsys.readouterr()
    run_tasks(Counted(), range(4), settings)
    captured = capsys.readouterr()
    assert calls[2:] == [(1, 4), (2, 4), (3, 4), (4, 4)]
    lines = captured.err.splitlines()
    assert captured.out == ""
    assert len(lines) == 4
    assert lines[0] == "half-samples: 1/4 in 0.0 s (1 kept from before)"
    assert lines[2] == "half-samples: 3/4 in 0.0 s (2 kept from before), about 0.0 s left"
    assert lines[3] == "half-samples: 4/4 in 0.0 s (2 kept from before)"


@pytest.mark.parametrize(("verbose", "expected"), [(0, 0), (1, 1), (2, 5)])
def test_how_much_is_told(verbose, expected, capsys):
    run_tasks(abs, range(5), TaskSettings(verbose=verbose))
    assert len(capsys.readouterr().err.splitlines()) == expected


def test_the_time_left_is_extrapolated_from_the_tasks_computed(monkeypatch, capsys):
    clock = iter([0.0, 100.0, 200.0, 4000.0, 8000.0])
    monkeypatch.setattr(time, "monotonic", lambda: next(clock))
    run_tasks(abs, range(4), TaskSettings(verbose=1))
    lines = capsys.readouterr().err.splitlines()
    assert lines == [
        "tasks: 1/4 in 1 min 40 s, about 5 min 00 s left",
        "tasks: 2/4 in 3 min 20 s, about 3 min 20 s left",
        "tasks: 3/4 in 1 h 06 min, about 22 min 13 s left",
        "tasks: 4/4 in 2 h 13 min",
    ]
