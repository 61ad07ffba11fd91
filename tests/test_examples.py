"""The examples, run as they stand: what is known of their tables must come out.

Facts established outside any selector, with their sources in `tests/data/README.md`: fat absorbs
near 930 nm; tau, p_tau and Ab_42 are the established fluid markers of Alzheimer's disease. Each is
a single study, so that what is tested is that known answers are found, not an error rate.
"""

from __future__ import annotations

import contextlib
import importlib.util
import io
from pathlib import Path

import pytest

from sparsesel.claim import State

EXAMPLES = Path(__file__).resolve().parents[1] / "examples"


def run(name):
    """Facts that an example returns, and what it prints."""
    specification = importlib.util.spec_from_file_location(name, EXAMPLES / f"{name}.py")
    module = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(module)
    text = io.StringIO()
    with contextlib.redirect_stdout(text):
        facts = module.main()
    return facts, text.getvalue()


@pytest.fixture(scope="module")
def spectra():
    return run("meat_spectra")


@pytest.fixture(scope="module")
def markers():
    return run("fluid_markers")


def test_every_example_is_run_here():
    assert {path.stem for path in EXAMPLES.glob("*.py")} == {"meat_spectra", "fluid_markers"}


def test_the_band_of_fat_is_a_stable_region(spectra):
    facts, text = spectra
    assert any(first <= 940 and last >= 920 for first, last in facts["regions"])
    # Regions, not single channels: far fewer than there are channels in them.
    assert len(facts["regions"]) < len(facts["claim"].selected) < 25
    assert "to 898 nm" in text


def test_the_spectra_predict_fat_in_samples_that_the_search_has_not_seen(spectra):
    facts, _ = spectra
    assert facts["r2"] > 0.9


def test_tau_and_abeta_are_stable(markers):
    facts, text = markers
    assert {"tau", "Ab_42"} <= set(facts["claim"].selected)
    assert facts["claim"].bound <= 1
    assert str(facts["claim"]) in text


def test_p_tau_loses_its_votes_to_tau_and_has_them_without_it(markers):
    facts, text = markers
    assert facts["correlation"] == pytest.approx(0.914, abs=5e-4)
    assert facts["shares"]["p_tau"] < 0.1 < 0.9 < facts["without_tau"]["p_tau"]
    assert f"Votes of p_tau: {facts['shares']['p_tau']:.2f}" in text


def test_the_markers_predict_impairment_in_people_whom_the_search_has_not_seen(markers):
    facts, _ = markers
    assert facts["auc"] > 0.8


@pytest.mark.parametrize("example", ["spectra", "markers"])
def test_the_knockoff_list_beside_it_is_empty_and_says_why(example, request):
    facts, text = request.getfixturevalue(example)
    claim = facts["knockoff_claim"]
    assert claim.selected == ()
    assert claim.empty_reason in text and "no threshold brings" in claim.empty_reason
    assert claim.nearest_target is not None
    # Fewer than five rows per feature, and the claim does not pass over it.
    assert any(a.state is State.VIOLATED for a in claim.assumptions) and not claim.guaranteed
