"""The demonstration: what it prints is what a fit of one's own gives, and the table's truth."""

from __future__ import annotations

import contextlib
import io
import re
import subprocess
import sys

import numpy as np
import pytest

from sparsesel import StabilitySelector, __version__
from sparsesel.__main__ import main
from sparsesel.datasets import make_orchard

pytest.importorskip("cvxpy", reason="the demonstration ends with the reference")

ROW = re.compile(r"^  (\S+) +(\d\.\d\d)   (true|related neighbour|false)$", re.MULTILINE)


@pytest.fixture(scope="module")
def printed():
    """What the command prints, for the outcome that is quicker."""
    text = io.StringIO()
    with contextlib.redirect_stdout(text):
        assert main(["--outcome", "browning", "--seed", "0"]) == 0
    return text.getvalue()


@pytest.fixture(scope="module")
def table():
    return make_orchard("browning", random_state=0)


def test_the_panel_is_that_of_a_selector_on_the_table_of_numbers(printed, table):
    """The pipeline codes the categories and so puts the columns in another order: same answer."""
    selector = StabilitySelector(
        covariates=[table.feature_names.index(name) for name in table.covariates], random_state=0
    ).fit(table.X, table.y, groups=table.groups)
    expected = {
        table.feature_names[j]: f"{selector.selection_probability_[j]:.2f}"
        for j in np.flatnonzero(selector.selected_)
    }
    assert {name: share for name, share, _ in ROW.findall(printed)} == expected
    assert len(expected) >= 2


def test_what_is_in_truth_false_is_counted_against_the_table(printed, table):
    rows = ROW.findall(printed)
    for name, _, truth in rows:
        in_truth = "true" if name in table.truth else "related neighbour"
        assert truth == (in_truth if name in {*table.truth, *table.related} else "false")
    kinds = [truth for _, _, truth in rows]
    counts = ", ".join(f"{kinds.count(k)} {k}" for k in ("true", "related neighbour", "false"))
    assert f"Of {len(rows)} chosen: {counts}." in printed
    assert kinds.count("true") >= 2


def test_claim_performance_and_agreement_are_there(printed):
    words = " ".join(printed.split())
    assert f"sparsesel {__version__}" in words
    assert "Stability selection with 50 complementary pairs selected" in words
    assert "26 groups were given and kept whole" in words
    auc = float(re.search(r"area under the ROC curve \(0.5 is guessing\) +(\d\.\d\d)", printed)[1])
    assert auc > 0.7
    sizes = re.search(r"columns chosen there: ([\d, ]+)", printed)[1].split(",")
    assert len(sizes) == 5
    assert "Cross-check of StabilitySelector: agreement" in printed
    assert re.search(r"cvxpy +solved 3 \(CLARABEL optimal 3\)", printed)


def test_lines_fit_a_page(printed):
    assert max(map(len, printed.splitlines())) <= 100


def test_the_command_explains_itself_and_refuses_the_unknown(capsys):
    done = subprocess.run(
        [sys.executable, "-m", "sparsesel", "--help"], capture_output=True, text=True, check=True
    )
    assert "--outcome" in done.stdout and "--n-jobs" in done.stdout
    with pytest.raises(SystemExit):
        main(["--outcome", "ripeness"])
    assert "firmness" in capsys.readouterr().err
