"""What a fresh interpreter needs until it works; run as a script, prints seconds as JSON.

"import": `import sparsesel` after the part of scikit-learn that its estimators build on.
"everything": every kernel once for every kind of table, loss and selector, on tables so small that
the second time round, in the same interpreter, is what the work itself costs.
"""

from __future__ import annotations

import json
import sys
import time
import warnings
from typing import Any


def import_seconds() -> dict[str, float]:
    """Seconds of the import beyond scikit-learn's own."""
    import sklearn.feature_selection
    import sklearn.linear_model
    import sklearn.model_selection  # noqa: F401

    start = time.perf_counter()
    import sparsesel
    import sparsesel.selectors  # noqa: F401

    return {"import": time.perf_counter() - start}


def fit_everything() -> None:
    """Each selector, and the engine over each kind of table."""
    import numpy as np
    from scipy import sparse

    from sparsesel import (
        AdaptiveLassoSelector,
        KnockoffSelector,
        RandomizedLassoSelector,
        StabilitySelector,
    )
    from sparsesel.engine import penalized_path

    generator = np.random.default_rng(0)
    X = generator.standard_normal((60, 20))
    numbers = X[:, 0] - X[:, 1] + generator.standard_normal(60)
    outcomes = {"squared_error": numbers, "log_loss": (numbers > np.median(numbers)).astype(float)}
    kinds = (X, np.asfortranarray(X), X.astype(np.float32), sparse.csc_array(X))
    for loss, y in outcomes.items():
        for table in kinds:
            for l1_ratio in (1.0, 0.5):
                penalized_path(table, y, loss=loss, alphas=10, l1_ratio=l1_ratio)
        for selector in (
            AdaptiveLassoSelector(),
            StabilitySelector(n_pairs=3),
            RandomizedLassoSelector(n_pairs=3),
            *(KnockoffSelector(s_vector=rule) for rule in ("mvr", "max_entropy", "sdp")),
        ):
            selector.set_params(random_state=0).fit(X, y)
    fit_wide(generator)


def fit_wide(generator: Any) -> None:
    """What only tables of many columns reach: low-rank covariances, columns that leave again."""
    import numpy as np

    from sparsesel.engine import penalized_path
    from sparsesel.knockoffs import LowRankCovariance
    from sparsesel.knockoffs.s_vectors import s_vector

    wide = generator.standard_normal((40, 400))
    wide = wide[:, :1] + 0.3 * wide
    y = wide[:, :20].sum(axis=1) + np.abs(wide[:, 20])
    penalized_path(wide, y, alphas=50, l1_ratio=1.0)
    for rule in ("mvr", "max_entropy", "sdp"):
        s_vector(LowRankCovariance(np.full(600, 0.5), np.full((600, 1), np.sqrt(0.5))), rule)


def run_seconds() -> dict[str, float]:
    """Seconds of the first time and of the second."""
    import sparsesel  # noqa: F401

    taken = []
    for _ in range(2):
        start = time.perf_counter()
        fit_everything()
        taken.append(time.perf_counter() - start)
    return {"first": taken[0], "again": taken[1]}


if __name__ == "__main__":
    warnings.simplefilter("ignore")
    print(json.dumps(import_seconds() if sys.argv[1] == "import" else run_seconds()))
