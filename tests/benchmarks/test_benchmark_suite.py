"""The benchmarks themselves, at the size of toys: what they judge by has to be right."""

from __future__ import annotations

from functools import partial

import bench_measure
import numpy as np
import pytest
import run
from bench_gaps import L1Logistic, Lasso
from bench_measure import measure_hardware, peak_memory, time_once
from bench_tables import CORRELATION, classification_table, fill_autoregressive, regression_table
from oracles import Problem, certified_gap, null_objective

from sparsesel.engine import penalized_path


def test_a_case_reports_both_sides_and_our_gap_is_not_the_larger(monkeypatch, capsys):
    monkeypatch.setattr(run, "measure_hardware", partial(measure_hardware, 4))
    run.main(["halves:2000x500", "--repeats", "1", "--retries", "0", "--scale", "0.01"])
    *_, names, line = capsys.readouterr().out.splitlines()
    cells = line.partition("|")[0]

    def cell(name):
        """What stands under a name; columns other than the first are aligned on the right."""
        return cells[: names.index(f" {name}  ") + len(name) + 1].split()[-1]

    assert cells.startswith("halves:40x60")
    assert float(cell("ratio")) > 0
    assert 0 < float(cell("our gap")) <= float(cell("peer gap"))


def test_a_case_that_fails_is_a_line_among_the_others(monkeypatch, capsys):
    def failing(options, hardware):
        raise RuntimeError("no such table")

    monkeypatch.setitem(run.CASES, "map", failing)
    monkeypatch.setattr(run, "measure_hardware", lambda: run.Hardware(1.0, 1.0))
    run.main(["map"])
    assert "FAILED: no such table" in capsys.readouterr().out


def test_a_name_stands_for_all_cases_that_begin_with_it():
    assert run.chosen_cases(["path"]) == ["path:200x20000", "path:1000x5000"]
    assert run.chosen_cases([]) == list(run.CASES)


@pytest.mark.parametrize("loss", ["squared_error", "log_loss"])
def test_gaps_are_those_of_the_oracle(loss):
    """At a point near the optimum the two choices of a dual point differ, both bound the excess."""
    logistic = loss == "log_loss"
    table = (classification_table if logistic else regression_table)(50, 30)
    stated = L1Logistic(table.X, table.y) if logistic else Lasso(table.X, table.y, True)
    alphas = stated.grid(6, 0.05)
    settings = {"loss": loss, "alphas": alphas, "fit_intercept": not logistic}
    coefs = penalized_path(table.X, table.y, tol=1e-3, **settings).coef.toarray()
    best = penalized_path(table.X, table.y, tol=1e-10, **settings)
    problem = Problem(table.X, table.y, loss, fit_intercept=not logistic)
    null = null_objective(problem)
    for alpha, coef, gap, optimum, b0 in zip(
        alphas, coefs, stated.gaps(alphas, coefs), best.coef.toarray(), best.intercept, strict=True
    ):
        intercept = 0.0 if logistic else float(np.mean(table.y - table.X @ coef))
        least = problem.objective(optimum, b0, alpha)
        excess = (problem.objective(coef, intercept, alpha) - least) / null
        assert excess - 1e-9 <= gap
        assert gap <= certified_gap(problem, coef, intercept, alpha) / null + 1e-12


def test_columns_are_autoregressive_of_variance_one():
    X = np.empty((4_000, 40), order="F")
    fill_autoregressive(X, 0)
    lags = np.abs(np.subtract.outer(np.arange(40), np.arange(40)))
    # The largest of 1,600 correlations of 4,000 rows: 5 standard errors.
    assert np.abs(np.corrcoef(X.T) - CORRELATION**lags).max() < 5 / np.sqrt(4_000)


def test_private_memory_sees_an_array_while_it_lives():
    def work():
        return float(np.ones(8 << 20).sum())

    total, peak = peak_memory(work)
    assert total == 8 << 20
    assert 60 << 20 < peak < 90 << 20


@pytest.mark.parametrize(("busy", "disturbed"), [(1_000, False), (1_200, True)])
def test_others_work_disturbs_and_our_own_does_not(busy, disturbed, monkeypatch):
    """Ten seconds, 995 ticks of them ours, beside 5 or 205 ticks of others; 100 are allowed."""
    monkeypatch.setattr(bench_measure, "_TICKS", 100)
    monkeypatch.setattr(bench_measure, "_busy_ticks", iter([0, busy]).__next__)
    monkeypatch.setattr(bench_measure, "_own_ticks", iter([0, 995]).__next__)
    monkeypatch.setattr(bench_measure.time, "perf_counter", iter([0.0, 10.0]).__next__)
    assert time_once(lambda: None) == (10.0, disturbed)
