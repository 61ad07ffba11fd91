"""On pure noise a pipeline that selects inside the validation is worth a coin, and no more.

60 rows of 5,000 columns that know nothing of the two classes. The held-out rows of a fold are
independent of everything that was done on the others, so the expected area under the curve is 0.5
exactly; the mean over tables must be within three standard errors of it, measured over the same
tables. The same selection made outside the validation is the control: it has to look excellent, or
the test would see nothing.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np
import pytest
from sklearn.feature_selection import SelectFromModel
from sklearn.linear_model import LogisticRegression
from sklearn.model_selection import StratifiedKFold, cross_validate
from sklearn.pipeline import make_pipeline

from sparsesel import AdaptiveLassoSelector, NullModelFallback, StabilitySelector
from sparsesel.tasks import spawn

N_ROWS, N_COLUMNS, FIXED = 60, 5_000, 10
LABEL = np.arange(N_ROWS) % 2
FOLDS = StratifiedKFold(5)

# The statistical tier repeats what the default one does, on more tables.
each_number = pytest.mark.parametrize(
    "n_tables", [100, pytest.param(300, marks=pytest.mark.statistical)]
)


def fixed_size():
    """The ten columns with the largest coefficients, whatever they are."""
    return SelectFromModel(
        AdaptiveLassoSelector(0.05, initial="marginal"),
        importance_getter="coef_",
        threshold=-np.inf,
        max_features=FIXED,
    )


SELECTIONS = {
    "stability selection": lambda: StabilitySelector(n_pairs=5, random_state=0),
    "adaptive lasso": lambda: AdaptiveLassoSelector(0.1, initial="marginal"),
    "fixed size": fixed_size,
}


def noise(generator):
    return generator.standard_normal((N_ROWS, N_COLUMNS), dtype=np.float32)


@dataclass(frozen=True)
class Scores:
    """Cross-validated AUC of every table, and the sizes of the selections behind them."""

    auc: np.ndarray
    sizes: np.ndarray

    @property
    def standard_error(self):
        return self.auc.std(ddof=1) / np.sqrt(len(self.auc))


def scores_inside(selection, n_tables):
    auc, sizes = [], []
    for generator in spawn(0, n_tables):
        model = make_pipeline(selection(), NullModelFallback(LogisticRegression()))
        scores = cross_validate(
            model, noise(generator), LABEL, cv=FOLDS, scoring="roc_auc", return_estimator=True
        )
        auc.append(scores["test_score"].mean())
        sizes += [fitted[0].get_support().sum() for fitted in scores["estimator"]]
    return Scores(np.array(auc), np.array(sizes))


@each_number
@pytest.mark.parametrize("name", SELECTIONS)
def test_selecting_inside_the_validation_scores_as_a_coin(name, n_tables):
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="No features were selected")
        scores = scores_inside(SELECTIONS[name], n_tables)
    assert abs(scores.auc.mean() - 0.5) <= 3 * scores.standard_error
    if name == "stability selection":
        # What a bound of one false selection in a table of noise is for.
        assert scores.sizes.mean() <= 1
    else:
        # Selections large enough that a leak would show, and scores that vary as those of noise.
        assert scores.sizes.mean() > 5 and scores.auc.std() > 0.05


def test_a_fixed_size_is_that_size():
    scores = scores_inside(fixed_size, 3)
    assert (scores.sizes == FIXED).all()


def test_selecting_outside_the_validation_looks_excellent():
    auc = []
    for generator in spawn(0, 100):
        X = noise(generator)
        chosen = fixed_size().fit_transform(X, LABEL)
        scores = cross_validate(LogisticRegression(), chosen, LABEL, cv=FOLDS, scoring="roc_auc")
        auc.append(scores["test_score"].mean())
    assert np.mean(auc) > 0.9
