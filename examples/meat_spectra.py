"""Which wavelengths carry the fat of meat? A list of regions from 100 nearly identical channels.

Near-infrared spectra of 215 samples of chopped meat, recorded on a Tecator Infratec analyser
(Borggaard and Thodberg 1992), 850 to 1050 nm in steps of about 2 nm; neighbouring channels
correlate at 0.9998 and more. Fat has an absorption band near 930 nm, an overtone of the C-H
stretch, so the answer is known, as a region: which of two neighbours is picked is a toss-up, and
no list of single channels should be read otherwise.

Run it from a clone of the repository, which holds the data: python examples/meat_spectra.py
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from sklearn.linear_model import LinearRegression
from sklearn.model_selection import GridSearchCV, train_test_split
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import FunctionTransformer

from sparsesel import KnockoffSelector, NullModelFallback, StabilitySelector

DATA = Path(__file__).resolve().parents[1] / "tests" / "data" / "meats.csv.gz"


def load() -> tuple[pd.DataFrame, pd.Series]:
    """Spectra with one column per wavelength, and fat in percent."""
    table = pd.read_csv(DATA)
    spectra = table.filter(like="x_")
    spectra.columns = [f"{850 + 2 * channel} nm" for channel in range(spectra.shape[1])]
    return spectra, table["fat"]


def standardise_rows(spectra: pd.DataFrame) -> pd.DataFrame:
    """Centre and scale every spectrum by itself, which removes most of the scatter of light."""
    centred = spectra.sub(spectra.mean(axis=1), axis=0)
    return centred.div(spectra.std(axis=1), axis=0)


def regions(names: list[str]) -> list[tuple[int, int]]:
    """Runs of neighbouring channels, as first and last wavelength."""
    wavelengths = np.sort([int(name.removesuffix(" nm")) for name in names])
    runs = np.split(wavelengths, np.flatnonzero(np.diff(wavelengths) > 2) + 1)
    return [(int(run[0]), int(run[-1])) for run in runs if run.size]


def search() -> GridSearchCV:
    """Standardise rows, select, regress; every fold of the search selects for itself."""
    pipeline = make_pipeline(
        FunctionTransformer(standardise_rows, feature_names_out="one-to-one"),
        StabilitySelector(n_pairs=25, random_state=0),
        NullModelFallback(LinearRegression()),
    )
    # The target of the error control is searched like any parameter: how long a list predicts best?
    return GridSearchCV(pipeline, {"stabilityselector__pfer": [0.1, 0.3, 1.0]}, cv=5)


def main() -> dict[str, object]:
    """Search on three quarters of the samples, test on the rest; then the list of all samples."""
    spectra, fat = load()
    seen, unseen, fat_seen, fat_unseen = train_test_split(spectra, fat, random_state=0)
    fitted = search().fit(seen, fat_seen)
    r2 = fitted.score(unseen, fat_unseen)
    print(f"Searched with the selection inside every fold: {fitted.best_params_}")
    print(f"R2 on {len(unseen)} samples that neither selection nor search has seen: {r2:.3f}\n")

    corrected = standardise_rows(spectra)
    stable = StabilitySelector(random_state=0).fit(corrected, fat)
    found = regions(list(stable.get_feature_names_out()))
    print("Stable regions of all samples, with the largest share of votes in each:")
    votes = pd.Series(stable.selection_probability_, index=corrected.columns)
    for first, last in found:
        print(f"  {first} to {last} nm  {votes[f'{first} nm' : f'{last} nm'].max():.2f}")
    print(f"\n{stable.claim_}\n")

    knockoffs = KnockoffSelector(fdr=0.2, random_state=0).fit(corrected, fat)
    print("Knockoffs at a false discovery rate of 0.2, for comparison:")
    print(knockoffs.claim_)
    return {
        "r2": r2,
        "regions": found,
        "claim": stable.claim_,
        "knockoff_claim": knockoffs.claim_,
    }


if __name__ == "__main__":
    main()
