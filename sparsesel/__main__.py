"""A demonstration on an invented table with known truth: ``python -m sparsesel``.

Crates of apples from several orchards are measured before storage (a near-infrared spectrum,
volatile compounds, the orchard log); what is wanted is a short list of measurements that tell how
firm the apples will be afterwards, or whether their flesh will have browned. Because the table is
drawn by `sparsesel.datasets.make_orchard`, it can be said how many of the list are in truth false.
"""

from __future__ import annotations

import argparse
import textwrap
import time
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
from sklearn.compose import make_column_selector, make_column_transformer
from sklearn.linear_model import LogisticRegression, RidgeCV
from sklearn.model_selection import GroupKFold, cross_validate
from sklearn.pipeline import Pipeline
from sklearn.preprocessing import OneHotEncoder, StandardScaler

from sparsesel import __version__
from sparsesel.datasets import OrchardTable, make_orchard
from sparsesel.selectors import NullModelFallback, StabilitySelector
from sparsesel.study import cross_check

_WIDTH = 96
_N_FOLDS = 5
# Per outcome: enough to be convincing, few enough to be waited for.
_CROSS_CHECKED, _CHECK_SECONDS = 3, 15
_NEAR_MISSES = 4

_TITLES = {
    "firmness": "Firmness lost in store (newton)",
    "browning": "Internal browning after storage (yes or no)",
}
_SCORES = {
    "firmness": (
        ("r2", "share of the variance explained (R2)", 1.0),
        ("neg_root_mean_squared_error", "typical error (RMSE, newton)", -1.0),
    ),
    "browning": (
        ("roc_auc", "area under the ROC curve (0.5 is guessing)", 1.0),
        ("neg_log_loss", "log loss", -1.0),
    ),
}


def _pipeline(table: OrchardTable, n_jobs: int | None, seed: int) -> Pipeline:
    """Code the categories, select, scale, predict; pandas throughout, so that names survive."""
    encode = make_column_transformer(
        (
            OneHotEncoder(drop="if_binary", sparse_output=False),
            make_column_selector(dtype_exclude="number"),
        ),
        remainder="passthrough",
        verbose_feature_names_out=False,
    )
    predictor: Any = RidgeCV(np.logspace(-2, 3, 11))
    if table.outcome == "browning":
        predictor = LogisticRegression()
    return Pipeline(
        [
            ("encode", encode),
            (
                "select",
                StabilitySelector(
                    covariates=list(table.covariates), n_jobs=n_jobs, random_state=seed
                ),
            ),
            ("scale", StandardScaler()),
            ("predict", NullModelFallback(predictor)),
        ]
    ).set_output(transform="pandas")


def _outcome_report(outcome: str, seed: int, n_jobs: int | None) -> Iterator[str]:
    """The sections of one outcome, each as soon as it is known."""
    table = make_orchard(outcome, random_state=seed)
    lots, groups = table.frame(), table.groups
    pipeline = _pipeline(table, n_jobs, seed)
    yield _heading(_TITLES[outcome], "=")
    pipeline.fit(lots, table.y, select__groups=groups)
    selector = pipeline["select"]
    yield _panel(selector, table)
    yield _heading("The claim", "-") + _wrapped(str(selector.claim_))
    yield _performance(pipeline, lots, table)
    report = cross_check(
        selector,
        pipeline["encode"].transform(lots),
        table.y,
        groups=groups,
        n_problems=_CROSS_CHECKED,
        max_seconds=_CHECK_SECONDS,
    )
    yield _heading("Agreement with cvxpy on this very fit", "-") + str(report)


def _panel(selector: StabilitySelector, table: OrchardTable) -> str:
    """The chosen with their votes and their truth, the nearest misses, and the count."""
    share = dict(zip(selector.feature_names_in_, selector.selection_probability_, strict=True))
    ranked = sorted(
        (name for name in share if name not in table.covariates), key=lambda name: -share[name]
    )
    chosen = [name for name in ranked if name in selector.claim_.selected]
    missed = [name for name in ranked if name not in chosen][:_NEAR_MISSES]
    truth = _truth(table)
    counts = [
        f"{sum(truth[name] == kind for name in chosen)} {kind}"
        for kind in ("true", "related neighbour", "false")
    ]
    count = (
        f"Of {len(chosen)} chosen: {', '.join(counts)}. The outcome has {len(table.truth)} true "
        "columns beside the covariate."
    )
    next_best = f"Next, below the threshold of {selector.threshold_:.2f}: " + ", ".join(
        f"{name} {share[name]:.2f} ({truth[name]})" for name in missed
    )
    rows = [
        f"  {'chosen':<26}{'selection probability':>22}   in truth",
        *(f"  {name:<26}{share[name]:>22.2f}   {truth[name]}" for name in chosen),
        *([] if chosen else ["  (none)"]),
        *(f"  {name:<26}{'covariate, always in':>22}" for name in table.covariates),
        "",
        _wrapped(count),
        _wrapped(next_best),
    ]
    return "\n".join(rows)


def _truth(table: OrchardTable) -> dict[str, str]:
    """What every column is in truth."""
    true, related = set(table.truth), set(table.related)
    return {
        name: "true" if name in true else "related neighbour" if name in related else "false"
        for name in table.feature_names
    }


def _performance(pipeline: Pipeline, lots: Any, table: OrchardTable) -> str:
    """Cross-validated scores of everything from coding to prediction, by orchard."""
    metrics = _SCORES[table.outcome]
    scores = cross_validate(
        pipeline,
        lots,
        table.y,
        groups=table.groups,
        cv=GroupKFold(_N_FOLDS),
        scoring=[name for name, _, _ in metrics],
        # With metadata routing off, this is how groups reach a step's fit.
        params={"select__groups": table.groups},
        return_estimator=True,
        error_score="raise",
    )
    sizes = [len(fitted["select"].claim_.selected) for fitted in scores["estimator"]]
    title = f"Performance of the whole pipeline on orchards it has not seen ({_N_FOLDS} folds)"
    rows = [
        f"  {label:<44}{sign * scores[f'test_{name}'].mean():6.2f}   folds from "
        f"{min(sign * scores[f'test_{name}']):.2f} to {max(sign * scores[f'test_{name}']):.2f}"
        for name, label, sign in metrics
    ]
    rows.append(
        "  The selection was made again inside every fold; columns chosen there: "
        + ", ".join(map(str, sizes))
    )
    return _heading(title, "-") + "\n".join(rows)


def _heading(text: str, mark: str) -> str:
    return f"\n{text}\n{mark * len(text)}\n"


def _wrapped(text: str) -> str:
    """Paragraphs broken at the width of the page, list items with a hanging indent."""
    return "\n".join(
        textwrap.fill(
            paragraph,
            _WIDTH,
            initial_indent="  ",
            subsequent_indent="    " if paragraph.startswith("- ") else "  ",
        )
        for paragraph in text.splitlines()
    )


def _introduction(seed: int) -> str:
    table = make_orchard(random_state=seed)
    n_lots, n_columns = table.X.shape
    sizes = {
        prefix: sum(name.startswith(prefix) for name in table.feature_names)
        for prefix in ("nir_", "voc_")
    }
    text = (
        f"An invented table, so that the truth is known: {n_lots} lots of apples from "
        f"{len(np.unique(table.groups))} orchards and two seasons, measured before storage. "
        f"{n_columns} columns: {sizes['nir_']} channels of a near-infrared spectrum (nir_), "
        f"{sizes['voc_']} volatile compounds (voc_), and the orchard log. Which few of them tell "
        "what becomes of the apples? Lots of one orchard resemble one another and stay together "
        "whenever rows are split. Neighbouring channels and compounds of one pathway are "
        "correlated; one of these that was chosen in place of a true column is counted as a "
        "related neighbour."
    )
    return f"sparsesel {__version__}\n\n{textwrap.fill(text, _WIDTH)}"


def _arguments(arguments: Sequence[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(
        prog="python -m sparsesel",
        description="Select features of an invented table with known truth, and check the result.",
    )
    parser.add_argument(
        "--outcome",
        choices=[*_TITLES, "both"],
        default="both",
        help="what is to be predicted (default: both)",
    )
    parser.add_argument(
        "--seed", type=int, default=0, help="seed of the table and the selection (default: 0)"
    )
    parser.add_argument(
        "--n-jobs", type=int, default=None, help="workers, -1 for all processors (default: 1)"
    )
    return parser.parse_args(arguments)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the demonstration.

    Parameters
    ----------
    arguments : sequence of str, default=None
        Arguments of the command; None takes those of the process.

    Returns
    -------
    int
        0, the exit status.
    """
    started = time.monotonic()
    options = _arguments(arguments)
    outcomes = list(_TITLES) if options.outcome == "both" else [options.outcome]
    print(_introduction(options.seed), flush=True)
    for outcome in outcomes:
        for section in _outcome_report(outcome, options.seed, options.n_jobs):
            print(section, flush=True)
    print(f"\nDone in {time.monotonic() - started:.0f} seconds.")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
