"""The claim says what holds, what does not and what is not known."""

from __future__ import annotations

import json
import pickle

import pytest
from sklearn.base import clone

from sparsesel.claim import CAUTION, Assumption, Claim, Scale, State

INDEPENDENT = Assumption("the rows are independent", State.UNCHECKED)
VIOLATED = Assumption("at least five rows per feature", State.VIOLATED, "300 rows, 600 features")


def stability(**changes):
    parts = {
        "method": "Stability selection",
        "unit": "feature",
        "candidates": 1000,
        "selected": ("lcavol", "svi", "age"),
        "measure": "expected number of selected features that a half-sample picks with "
        "probability at most 50/1,000",
        "target": 1.0,
        "bound": 0.647846,
        "bound_source": "Shah and Samworth 2013, equation 8 (r-concave laws)",
        "assumptions": (INDEPENDENT,),
        "other_bounds": {"worst case": 5.0},
    }
    return Claim(**(parts | changes))


def test_a_claim_reads_as_a_paragraph_a_list_and_the_caution():
    assert str(stability()) == (
        "Stability selection selected 3 of 1,000 candidate features: lcavol, svi, age. The "
        "expected number of selected features that a half-sample picks with probability at most "
        "50/1,000 is at most 0.648 (Shah and Samworth 2013, equation 8 (r-concave laws)); the "
        "target was 1. This holds under the assumptions below. Beside it: worst case 5.\n"
        "Assumptions:\n"
        "- the rows are independent: can't be checked from the data\n" + CAUTION
    )


def test_without_a_guarantee_it_says_so_and_names_one_that_has_it():
    claim = Claim("The adaptive lasso", "feature", 8, ("svi",))
    assert not claim.guaranteed and not claim.uninformative
    assert "no guarantee about false selections" in str(claim)
    assert "StabilitySelector" in str(claim) and "KnockoffSelector" in str(claim)


def test_a_violated_assumption_takes_the_guarantee_away():
    claim = stability(assumptions=(INDEPENDENT, VIOLATED))
    assert claim.violated == (VIOLATED,) and not claim.guaranteed
    assert "Not guaranteed: an assumption was checked and is violated." in str(claim)
    assert "checked and violated (300 rows, 600 features)" in str(claim)
    assert "holds under" not in str(claim)
    assert stability().guaranteed


@pytest.mark.parametrize(
    ("scale", "bound", "n_selected", "says_nothing"),
    [
        (Scale.COUNT, 12.0, 15, True),
        (Scale.COUNT, 1.0, 2, True),
        (Scale.COUNT, 1.0, 3, False),
        (Scale.COUNT, 0.0, 1, False),
        (Scale.SHARE, 0.2, 1, False),
        (Scale.SHARE, 0.5, 40, True),
        (Scale.PROBABILITY, 0.05, 1, False),
        (Scale.PROBABILITY, 0.9, 9, True),
    ],
)
def test_a_bound_of_half_the_list_or_more_is_uninformative(scale, bound, n_selected, says_nothing):
    names = tuple(f"x{i}" for i in range(n_selected))
    claim = stability(selected=names, bound=bound, scale=scale)
    assert claim.uninformative is says_nothing
    assert ("uninformative" in str(claim)) is says_nothing


def test_uninformative_bounds_are_spelled_out():
    names = tuple(f"x{i}" for i in range(15))
    text = str(stability(selected=names, bound=12.0))
    assert "up to 12 expected among 15 selected features" in text
    assert ", x11 and 3 more." in text


def test_empty_is_an_answer():
    claim = stability(
        selected=(),
        empty_reason="the largest selection probability is 0.6, below the threshold 0.75",
        nearest_target="pfer 2.61",
    )
    assert not claim.uninformative
    text = str(claim)
    assert "selected none of 1,000 candidate features, because the largest selection" in text
    assert "nearest target that would have filled the list: pfer 2.61" in text
    assert "no guarantee" in text


def test_no_bound_with_a_measure_is_said():
    text = str(stability(bound=None, other_bounds={}))
    assert "No bound holds on the expected number" in text
    assert not stability(bound=None).guaranteed


def test_groups_are_counted_as_groups():
    assert "1 of 1 candidate feature group: a." in str(
        stability(unit="feature group", candidates=1, selected=("a",))
    )


def test_plain_data_pickles_copies_and_hash():
    claim = stability(assumptions=(INDEPENDENT, VIOLATED), notes=("Seen.",))
    data = json.loads(json.dumps(claim.to_dict(), allow_nan=False))
    assert data["assumptions"][1]["state"] == "checked and violated"
    assert data["other_bounds"] == {"worst case": 5.0} and data["text"] == str(claim)
    assert pickle.loads(pickle.dumps(claim)) == claim
    assert clone(claim, safe=False) == claim
    assert hash(claim) == hash(stability(assumptions=(INDEPENDENT, VIOLATED), notes=("Seen.",)))


def test_states_are_given_by_their_words_too():
    assert Assumption("a", "by construction").state is State.BY_CONSTRUCTION  # type: ignore[arg-type]
    with pytest.raises(ValueError, match="perhaps"):
        Assumption("a", "perhaps")  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"candidates": 2}, "3 selected of 2 candidates"),
        ({"selected": ()}, "an empty list needs its reason"),
        ({"empty_reason": "no"}, "any other has none"),
        ({"measure": None}, "without a measure"),
        ({"bound": float("nan")}, "finite numbers from 0"),
        ({"bound": -1.0}, "finite numbers from 0"),
        ({"unit": "row"}, "'feature' and 'feature group'"),
    ],
)
def test_contradictions_are_refused(changes, message):
    with pytest.raises(ValueError, match=message):
        stability(**changes)
