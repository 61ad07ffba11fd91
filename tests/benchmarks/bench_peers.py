"""Cases that compare with scikit-learn's solvers on the same problems and penalties."""

from __future__ import annotations

from functools import partial

import numpy as np
import sklearn
from bench_gaps import L1Logistic, Lasso
from bench_line import Comparison, Floor, Options
from bench_tables import Table, classification_table, regression_table, sparse_table
from scipy import sparse
from sklearn.linear_model import LassoCV, LogisticRegression, lasso_path
from sklearn.model_selection import KFold
from sklearn.utils.fixes import parse_version

from sparsesel import StabilitySelector
from sparsesel.engine import BankResult, Keep, Problems, as_design, penalized_path, solve_bank
from sparsesel.resampling import complementary_pairs
from sparsesel.tasks import TaskSettings

N_HALVES, N_PENALTIES, RATIO = 100, 30, 0.1
# Halves of the peer's loop that are timed; all cost the same to within a few percent.
N_PEER_HALVES = 10


def label(family: str, n: int, p: int) -> str:
    """Name of a case on a table of this shape."""
    return f"{family}:{n}x{p}"


def centred(table: Table, rows: np.ndarray) -> Lasso:
    """The problem of some rows for a solver without an intercept."""
    X, y = table.X[rows], table.y[rows]
    return Lasso(np.asfortranarray(X - X.mean(axis=0)), y - y.mean(), intercept=False)


def of_rows(table: Table, rows: np.ndarray) -> Lasso:
    """The problem of some rows, with its intercept."""
    return Lasso(table.X[rows], table.y[rows], intercept=True)


def halves_of(table: Table, n_halves: int) -> np.ndarray:
    """Masks (n_halves, n) of complementary halves."""
    return complementary_pairs(table.y.size, n_halves // 2, 0)


def solve_halves(
    table: Table, halves: np.ndarray, tol: float, settings: TaskSettings | None = None
) -> BankResult:
    """30 penalties of every half down to a tenth of its own largest, coefficients kept."""
    return solve_bank(
        as_design(table.X),
        Problems("squared_error", table.y, sample_weight=halves.astype(np.float64)),
        N_PENALTIES,
        alpha_min_ratio=RATIO,
        tol=tol,
        settings=settings or TaskSettings(),
    )


def halves_gaps(table: Table, halves: np.ndarray, result: BankResult) -> np.ndarray:
    """Largest gap of every half."""
    largest = []
    for half, coef in zip(halves, result.coef or (), strict=True):
        problem = of_rows(table, half)
        largest.append(problem.gaps(problem.grid(N_PENALTIES, RATIO), coef).max())
    return np.array(largest)


def path_of(problem: Lasso, alphas: np.ndarray) -> np.ndarray:
    """The peer's coefficients (L, p)."""
    return lasso_path(problem.X, problem.y, alphas=alphas)[1].T


def halves_case(n: int, p: int, goal: str, options: Options) -> Comparison:
    """Many half-samples against a loop of `lasso_path` over halves that are ready for it."""
    table = regression_table(*options.shape(n, p))
    halves = halves_of(table, N_HALVES)
    parts = [centred(table, half) for half in halves[:N_PEER_HALVES]]
    grids = [part.grid(N_PENALTIES, RATIO) for part in parts]
    rows, columns = table.X.shape
    return Comparison(
        label("halves", rows, columns),
        goal,
        Floor(table.nbytes, 2.0 * (rows // 2) * columns * N_HALVES * N_PENALTIES),
        ours=partial(solve_halves, table, halves),
        peer=lambda: [path_of(part, grid) for part, grid in zip(parts, grids, strict=True)],
        our_gaps=lambda result, _tol: halves_gaps(table, halves, result),
        peer_gaps=lambda coefs: np.concatenate(
            [part.gaps(*one) for part, *one in zip(parts, grids, coefs, strict=True)]
        ),
        peer_share=N_PEER_HALVES / N_HALVES,
        notes=(f"peer: {N_PEER_HALVES} halves times {N_HALVES // N_PEER_HALVES}, cut and centred",),
    )


def path_case(n: int, p: int, goal: str, options: Options) -> Comparison:
    """One path of 100 penalties to a hundredth of the largest."""
    table = regression_table(*options.shape(n, p))
    ready = centred(table, np.arange(table.y.size))
    alphas = ready.grid(100, 0.01)
    problem = Lasso(table.X, table.y, intercept=True)
    rows, columns = table.X.shape
    return Comparison(
        label("path", rows, columns),
        goal,
        Floor(table.nbytes, 2.0 * rows * columns * alphas.size),
        ours=lambda tol: penalized_path(table.X, table.y, alphas=alphas, tol=tol),
        peer=lambda: path_of(ready, alphas),
        our_gaps=lambda path, _tol: problem.gaps(alphas, path.coef),
        peer_gaps=lambda coefs: ready.gaps(alphas, coefs),
        notes=("peer: centred",),
    )


def sparse_case(n: int, p: int, goal: str, options: Options) -> Comparison:
    """One path of a sparse table without an intercept, 50 penalties to a hundredth.

    Columns have 20 entries on average, at 20,000 rows a density of 0.001.
    """
    rows, columns = options.shape(n, p)
    table = sparse_table(rows, columns, 20 / rows)
    problem = Lasso(table.X, table.y, intercept=False)
    alphas = problem.grid(50, 0.01)
    return Comparison(
        label("sparse", rows, columns),
        goal,
        Floor(table.nbytes),
        ours=lambda tol: penalized_path(
            table.X, table.y, alphas=alphas, fit_intercept=False, tol=tol
        ),
        peer=lambda: path_of(problem, alphas),
        our_gaps=lambda path, _tol: problem.gaps(alphas, path.coef),
        peer_gaps=lambda coefs: problem.gaps(alphas, sparse.csr_array(coefs)),
        notes=(f"density {table.X.nnz / rows / columns:.3g}",),
    )


def folds_case(n: int, p: int, goal: str, options: Options) -> Comparison:
    """The penalty by 10 folds among 100 to a thousandth of the largest, and the final fit."""
    table = regression_table(*options.shape(n, p))
    rows, columns = table.X.shape
    splits = list(KFold(10).split(table.X))
    held_out = np.zeros((10, rows))
    for fold, (_, test) in zip(held_out, splits, strict=True):
        fold[test] = 1.0
    whole = Lasso(table.X, table.y, intercept=True)
    alphas = whole.grid(100, 1e-3)
    design, folds = as_design(table.X), Problems("squared_error", table.y, 1.0 - held_out)

    def ours(tol: float) -> tuple[float, np.ndarray]:
        losses = solve_bank(
            as_design(table.X), folds, alphas, keep=Keep(held_out=held_out), tol=tol
        ).held_out_loss
        assert losses is not None
        best = int(losses.mean(axis=0).argmin())
        final = penalized_path(table.X, table.y, alphas=alphas[: best + 1], tol=tol)
        return float(alphas[best]), final.coef[[best]].toarray()

    def our_gaps(answer: tuple[float, np.ndarray], tol: float) -> np.ndarray:
        paths = solve_bank(design, folds, alphas, tol=tol).coef or ()
        gaps = [
            of_rows(table, train).gaps(alphas, coef)
            for (train, _), coef in zip(splits, paths, strict=True)
        ]
        return np.concatenate([*gaps, whole.gaps(np.array([answer[0]]), answer[1])])

    def peer_gaps(model: LassoCV) -> np.ndarray:
        parts = [centred(table, train) for train, _ in splits]
        gaps = [part.gaps(alphas, path_of(part, alphas)) for part in parts]
        return np.concatenate([*gaps, whole.gaps(np.array([model.alpha_]), model.coef_[None, :])])

    return Comparison(
        label("folds", rows, columns),
        goal,
        Floor(table.nbytes, 2.0 * rows * columns * (9 + 1) * alphas.size),
        ours=ours,
        peer=lambda: LassoCV(alphas=alphas, cv=KFold(10)).fit(table.X, table.y),
        our_gaps=our_gaps,
        peer_gaps=peer_gaps,
        remarks=lambda answer, model: (
            f"penalties chosen: {answer[0]:.4g} and {model.alpha_:.4g}",
        ),
    )


def l1_options() -> dict[str, str | float]:
    """The L1 penalty in the words of this version."""
    if parse_version(sklearn.__version__) >= parse_version("1.8"):
        return {"l1_ratio": 1.0}
    return {"penalty": "l1"}


def logistic_case(n: int, p: int, goal: str, options: Options) -> Comparison:
    """L1 logistic regression without an intercept against liblinear, 15 penalties to a tenth."""
    table = classification_table(*options.shape(n, p))
    problem = L1Logistic(table.X, table.y)
    alphas = problem.grid(15, 0.1)
    rows, columns = table.X.shape

    def peer() -> np.ndarray:
        models = (
            LogisticRegression(
                **l1_options(),
                C=1.0 / (alpha * rows),
                solver="liblinear",
                fit_intercept=False,
                random_state=0,
            )
            for alpha in alphas
        )
        return np.vstack([model.fit(table.X, table.y).coef_ for model in models])

    return Comparison(
        label("logistic", rows, columns),
        goal,
        Floor(table.nbytes, 2.0 * rows * columns * alphas.size),
        ours=lambda tol: penalized_path(
            table.X, table.y, loss="log_loss", alphas=alphas, fit_intercept=False, tol=tol
        ),
        peer=peer,
        our_gaps=lambda path, _tol: problem.gaps(alphas, path.coef),
        peer_gaps=lambda coefs: problem.gaps(alphas, coefs),
    )


def selector_case(n: int, p: int, goal: str, options: Options) -> Comparison:
    """A whole `StabilitySelector` with its defaults against one default `lasso_path`."""
    table = regression_table(*options.shape(n, p))
    problem = Lasso(table.X, table.y, intercept=False)
    rows, columns = table.X.shape

    def remarks(selector: StabilitySelector, _: object) -> tuple[str, ...]:
        return (f"q = {selector.features_per_fit_}", f"X has {table.nbytes / 2**20:.0f} MB")

    return Comparison(
        label("selector", rows, columns),
        goal,
        Floor(table.nbytes),
        # The tolerance is the selector's default: tighter than the peer's gap.
        ours=lambda _tol: StabilitySelector(random_state=0).fit(table.X, table.y),
        peer=lambda: lasso_path(table.X, table.y),
        our_gaps=lambda selector, _tol: np.array([selector.tol]),
        peer_gaps=lambda path: problem.gaps(path[0], path[1].T),
        notes=("share of the peer's time <= 0.5 is a ratio >= 2; goal for memory: 2 X",),
        remarks=remarks,
    )
