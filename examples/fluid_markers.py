"""Which proteins in the fluid mark impairment? A relative of a marker loses its votes to it.

Cerebrospinal fluid of 333 people, 91 of them with mild cognitive impairment: 127 proteins, age and
sex (Craig-Schapiro et al. 2011). The established markers are tau (raised), its phosphorylated form
p_tau (raised) and the peptide Ab_42 (lowered). tau and p_tau correlate at 0.91.

Stability selection answers "which columns does the rest of the table not replace?". tau replaces
p_tau, so p_tau gets no votes although it differs between the two classes more than any other
protein but tau and Ab_42. A column that is not selected is not a column without association.

Run it from a clone of the repository, which holds the data: python examples/fluid_markers.py
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd
from sklearn.linear_model import LogisticRegression
from sklearn.model_selection import GridSearchCV, train_test_split
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler

from sparsesel import KnockoffSelector, NullModelFallback, StabilitySelector

DATA = Path(__file__).resolve().parents[1] / "tests" / "data" / "alzheimer_csf.csv.gz"


def load() -> tuple[pd.DataFrame, pd.Series]:
    """Proteins, age and sex, and the class."""
    table = pd.read_csv(DATA)
    return table.drop(columns=["Class", "Genotype"]), table["Class"]


def search() -> GridSearchCV:
    """Select, scale, classify; every fold of the search selects for itself."""
    pipeline = make_pipeline(
        StabilitySelector(n_pairs=25, random_state=0).set_output(transform="pandas"),
        StandardScaler(),
        NullModelFallback(LogisticRegression()),
    )
    grid = {"stabilityselector__pfer": [0.2, 1.0]}
    return GridSearchCV(pipeline, grid, scoring="roc_auc", cv=5)


def votes(markers: pd.DataFrame, label: pd.Series) -> tuple[pd.Series, StabilitySelector]:
    """Share of the half-samples that pick each column, in decreasing order."""
    selector = StabilitySelector(random_state=0).fit(markers, label)
    shares = pd.Series(selector.selection_probability_, index=markers.columns)
    return shares.sort_values(ascending=False), selector


def main() -> dict[str, object]:
    """Search on three quarters of the people, test on the rest; then the list of all people."""
    markers, label = load()
    seen, unseen, label_seen, label_unseen = train_test_split(
        markers, label, stratify=label, random_state=0
    )
    fitted = search().fit(seen, label_seen)
    auc = fitted.score(unseen, label_unseen)
    print(f"Searched with the selection inside every fold: {fitted.best_params_}")
    print(f"AUC on {len(unseen)} people that neither selection nor search has seen: {auc:.2f}\n")

    shares, stable = votes(markers, label)
    print(f"Votes of all people:\n{shares.head(8).to_string()}\n\n{stable.claim_}\n")

    without_tau, _ = votes(markers.drop(columns="tau"), label)
    correlation = markers["tau"].corr(markers["p_tau"])
    print(f"tau and p_tau correlate at {correlation:.2f}.")
    print(f"Votes of p_tau: {shares['p_tau']:.2f}; without tau: {without_tau['p_tau']:.2f}\n")

    knockoffs = KnockoffSelector(fdr=0.2, random_state=0).fit(markers, label)
    print("Knockoffs at a false discovery rate of 0.2, for comparison:")
    print(knockoffs.claim_)
    return {
        "auc": auc,
        "correlation": correlation,
        "shares": shares,
        "without_tau": without_tau,
        "claim": stable.claim_,
        "knockoff_claim": knockoffs.claim_,
    }


if __name__ == "__main__":
    main()
