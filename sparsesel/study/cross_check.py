r"""Check a fitted selector against a general convex solver, on the user's own data.

A selector's result rests on many penalised regressions. `cross_check` rebuilds them from the
fitted `seed_` and asks three questions of independent code:

1. *Is every answer optimal?* The duality gap of each is computed again in plain numpy
   (`sparsesel.study._certificate`).
2. *Does another solver agree?* A random sample of the problems goes to cvxpy. Ours may lie above
   the optimum by the tolerance of the fit and no more; the reference's objective is never below
   the optimum, so ours less the reference's must be at most that tolerance. Supports are compared
   where both gaps together decide whether a column is zero.
3. *Does the fitted result follow from these problems?* Votes, coefficients and the choice of the
   penalty are derived again.

**Wide tables.** A general solver needs minutes for 20,000 columns. Above `_WHOLE` columns it is
given those whose gradient is nearest to their limit; its answer, with all others at zero, is then
held to a duality gap over all p columns, and columns that violate it are added until none does.
An answer with a small gap over all columns is the optimum of the whole problem, however the
columns given to the solver were chosen.
"""

from __future__ import annotations

import time
import warnings
from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sklearn.utils.validation import check_is_fitted

from sparsesel.engine.reference import ReferenceSolution, reference_solution
from sparsesel.selectors import StatedProblem
from sparsesel.selectors._base import BaseSparseSelector, FitInput
from sparsesel.selectors._knockoff_filters import choose_filter
from sparsesel.selectors._tuning import lowest, one_standard_error
from sparsesel.selectors.knockoff import _FILTER
from sparsesel.study._certificate import Audit, Certificate
from sparsesel.tasks import draw_seed, spawn

FloatArray = NDArray[np.float64]

# The most columns that a general solver is given at once, and how many at first where there are
# more: at 100 rows 1,000 columns take it about a second, 20,000 a minute or more.
_WHOLE, _FIRST = 1_000, 500
_MOST_ROUNDS = 20
# Two correct computations of one relative gap differ by rounding errors of the objective.
_ROUNDING = 1e-9
# Relative duality gap from which on the data are taken to be others than those of the fit; a
# solver that stopped too early leaves less.
_OTHER_DATA = 1e-2


@dataclass(frozen=True)
class CrossCheckReport:
    """What a cross-check found. Printed, a page for an auditor.

    All gaps and objectives are relative to the null objective: the optimum with the intercept, the
    offset and the unpenalised columns only.

    Attributes
    ----------
    selector : str
        Class of the selector.
    seed : int
        The `seed_` from which the problems were restated.
    n_problems : int
        Problems restated.
    n_columns : int
        Columns of the table of a problem; twice those of the fit with knockoffs.
    n_certified : int
        Problems whose duality gap was computed again.
    largest_gap : float
        The largest of these gaps.
    tol : float
        What the fit was asked for.
    n_drawn : int
        Problems drawn for the reference.
    solved : tuple of str
        Labels of the problems that the reference solved.
    unsolved : mapping of str to str
        Labels of the drawn problems that no solver could solve, with what they said.
    solver_statuses : mapping of str to int
        How often which solver gave which answer.
    largest_excess : float
        Largest objective of ours less the reference's.
    largest_reference_gap : float
        Largest duality gap of the reference, over all columns.
    n_compared : int
        Columns, over all solved problems, for which zero or not is decided.
    n_undecided : int
        Penalised columns for which it is not, at these gaps: ties.
    n_differences : int
        Compared columns at which ours is not what was decided.
    derived : mapping of str to bool
        Statements on the fitted attributes and whether they follow from the problems.
    max_seconds : float
        The limit given.
    out_of_time : bool
        Whether it was reached.
    """

    selector: str
    seed: int
    n_problems: int
    n_columns: int
    n_certified: int
    largest_gap: float
    tol: float
    n_drawn: int
    solved: tuple[str, ...]
    unsolved: Mapping[str, str]
    solver_statuses: Mapping[str, int]
    largest_excess: float
    largest_reference_gap: float
    n_compared: int
    n_undecided: int
    n_differences: int
    derived: Mapping[str, bool]
    max_seconds: float
    out_of_time: bool

    @property
    def n_solved(self) -> int:
        """Problems that the reference solved."""
        return len(self.solved)

    @property
    def agrees(self) -> bool:
        """Whether everything that was checked is as it must be, and something was.

        A NaN is no agreement.
        """
        allowed = self.tol + _ROUNDING
        return (
            self.n_solved > 0
            and not self.unsolved
            and bool(self.largest_gap <= allowed)
            and bool(self.largest_excess <= allowed)
            and self.n_differences == 0
            and all(self.derived.values())
        )

    def to_dict(self) -> dict[str, Any]:
        """Give the report as plain data that json can write.

        Returns
        -------
        dict
            The attributes, and the verdict under "agrees".
        """
        plain = {**asdict(self), "solved": list(self.solved)}
        return {"agrees": self.agrees, **plain}

    def __str__(self) -> str:
        verdict = "agreement" if self.agrees else "NO AGREEMENT"
        lines = [
            f"Cross-check of {self.selector}: {verdict}",
            f"  problems    {self.n_problems} restated from seed_ = {self.seed}, "
            f"{self.n_columns:,} columns each",
            f"  optimality  duality gap computed again for {self.n_certified} of them: at most "
            f"{self.largest_gap:.1e} (tolerance {self.tol:.0e})",
            *self._reference_lines(),
            *(
                f"  derived     {statement}: {'yes' if holds else 'NO'}"
                for statement, holds in self.derived.items()
            ),
            f"  left out    {self._left_out()}",
            "  Gaps and objectives are relative to the objective of the null model.",
        ]
        return "\n".join(lines)

    def _reference_lines(self) -> Iterator[str]:
        statuses = ", ".join(f"{name} {count}" for name, count in self.solver_statuses.items())
        yield f"  cvxpy       solved {self.n_solved}" + (f" ({statuses})" if statuses else "")
        if self.solved:
            yield (
                f"  objective   ours less the reference's: at most {self.largest_excess:.1e}; "
                f"gap of the reference: at most {self.largest_reference_gap:.1e}"
            )
            yield (
                f"  support     {self.n_differences} differences in {self.n_compared:,} columns "
                f"that both gaps decide; "
                f"{self.n_undecided:,} undecided"
            )
        for label, heard in self.unsolved.items():
            yield f"  unsolved    {label}: {heard}"

    def _left_out(self) -> str:
        parts = []
        if self.n_problems > self.n_drawn:
            parts.append(f"{self.n_problems - self.n_drawn} problems not drawn for cvxpy")
        late = self.n_drawn - self.n_solved - len(self.unsolved)
        if late:
            parts.append(f"{late} drawn but not reached within {self.max_seconds:g} seconds")
        if self.n_certified < self.n_problems:
            parts.append(
                f"{self.n_problems - self.n_certified} gaps not reached within "
                f"{self.max_seconds:g} seconds"
            )
        return "; ".join(parts) or "nothing"


@dataclass
class _Findings:
    """What has been found so far."""

    gaps: list[float] = field(default_factory=list)
    solved: list[str] = field(default_factory=list)
    unsolved: dict[str, str] = field(default_factory=dict)
    statuses: Counter[str] = field(default_factory=Counter)
    excess: list[float] = field(default_factory=list)
    reference_gaps: list[float] = field(default_factory=list)
    n_compared: int = 0
    n_undecided: int = 0
    n_differences: int = 0
    out_of_time: bool = False


def cross_check(
    selector: BaseSparseSelector,
    X: Any,
    y: Any,
    sample_weight: Any = None,
    groups: Any = None,
    *,
    n_problems: int = 10,
    max_seconds: float = 60.0,
    random_state: Any = 0,
) -> CrossCheckReport:
    """Check a fitted selector against cvxpy and against its own problems.

    Parameters
    ----------
    selector : selector of this package
        Fitted.
    X : {array-like, sparse, dataframe} of shape (n, p)
        The table that it was fitted to.
    y : array-like of shape (n,)
        The outcome that it was fitted to.
    sample_weight : array-like of shape (n,), default=None
        The weights that it was fitted with.
    groups : array-like of shape (n,), default=None
        The groups that it was fitted with.
    n_problems : int, default=10
        How many of the problems go to cvxpy: the first, and others drawn at random.
    max_seconds : float, default=60.0
        No problem is begun after this time. One problem takes cvxpy about a second at 100 x 1,000,
        more with many rows. Restating the problems costs what the fit cost, and is not counted.
    random_state : int, RandomState, Generator or None, default=0
        Draws the problems for cvxpy.

    Returns
    -------
    CrossCheckReport
        What was checked, what was found and what was left out. Its `agrees` is the verdict.

    Raises
    ------
    TypeError
        If `selector` is not one of this package.
    NotFittedError
        If it is not fitted.
    ImportError
        Without cvxpy, which the extra `reference` installs.
    ValueError
        If the data are not those of the fit, or the problems of this selector can't be restated.

    Notes
    -----
    Restated are: for stability selection and the randomized lasso the last problem of every half,
    which is the one that decides who was in time; for the adaptive lasso the final fit and those
    of the folds at its penalty; for knockoffs the problem that contrasts are read off, of at most
    five draws.

    Agreement says that the numbers are right. Whether the assumptions of a claim hold for the data
    is another matter, on which `claim_` says what can be said.

    Examples
    --------
    >>> import numpy as np
    >>> from sparsesel import AdaptiveLassoSelector, cross_check
    >>> X = np.random.default_rng(0).standard_normal((60, 20))
    >>> y = 2 * X[:, 1] - X[:, 4] + np.random.default_rng(1).standard_normal(60)
    >>> selector = AdaptiveLassoSelector("ebic").fit(X, y)
    >>> report = cross_check(selector, X, y)
    >>> report.agrees, report.n_solved
    (True, 1)
    """
    _check_call(selector, n_problems, max_seconds)
    with warnings.catch_warnings():
        # Said when the selector was fitted.
        warnings.filterwarnings("ignore", message="y has .* distinct whole numbers")
        data = selector._read(X, y, sample_weight, groups, selector.seed_, reset=False)
        stated = selector._stated_problems(X, y, sample_weight, groups)
    derived = _derived(selector, data, stated)
    drawn = _draw(len(stated), n_problems, random_state)
    findings = _examine(stated, data.X, drawn, time.monotonic() + max_seconds)
    return CrossCheckReport(
        selector=type(selector).__name__,
        seed=selector.seed_,
        n_problems=len(stated),
        n_columns=len(stated[0].coef),
        n_certified=len(findings.gaps),
        largest_gap=_largest(findings.gaps),
        tol=_tolerance(selector),
        n_drawn=len(drawn),
        solved=tuple(findings.solved),
        unsolved=findings.unsolved,
        solver_statuses=dict(findings.statuses),
        largest_excess=_largest(findings.excess),
        largest_reference_gap=_largest(findings.reference_gaps),
        n_compared=findings.n_compared,
        n_undecided=findings.n_undecided,
        n_differences=findings.n_differences,
        derived=derived,
        max_seconds=float(max_seconds),
        out_of_time=findings.out_of_time,
    )


def _check_call(selector: Any, n_problems: int, max_seconds: float) -> None:
    if not isinstance(selector, BaseSparseSelector):
        raise TypeError(
            f"selector is {type(selector).__name__}, whose problems are not known. A cross-check "
            "takes a fitted selector of this package; from a Pipeline take the step itself, "
            "pipeline[-2] say, and the table that reached it, pipeline[:-2].transform(X)."
        )
    check_is_fitted(selector)
    if not (n_problems >= 1 and max_seconds > 0):
        raise ValueError(
            f"n_problems is {n_problems!r} and max_seconds {max_seconds!r}. At least one problem "
            "and a positive time are needed to check anything; leave them out for 10 problems and "
            "60 seconds."
        )


def _tolerance(selector: BaseSparseSelector) -> float:
    return float(getattr(selector, "tol", 1e-7))


def _largest(values: list[float]) -> float:
    """The largest value, NaN where there is none or one is NaN."""
    return float(np.max(values)) if values else float("nan")


def _draw(n_stated: int, n_problems: int, random_state: Any) -> list[int]:
    """The first problem, which is the final fit where there is one, and others at random."""
    generator = spawn(draw_seed(random_state), 1)[0]
    others = 1 + generator.permutation(n_stated - 1)
    return [0, *map(int, others[: n_problems - 1])]


# ---------------------------------------------------------------------------------------------
# Every problem, and a sample by the reference
# ---------------------------------------------------------------------------------------------


def _examine(stated: list[StatedProblem], X: Any, drawn: list[int], deadline: float) -> _Findings:
    findings = _Findings()
    rest = [position for position in range(len(stated)) if position not in set(drawn)]
    for position in [*drawn, *rest]:
        # Something is always checked, whatever the limit.
        if findings.gaps and time.monotonic() > deadline:
            findings.out_of_time = True
            break
        audit = Audit(stated[position], X)
        own = audit.certify(audit.stated.coef, audit.stated.intercept)
        findings.gaps.append(_relative(own.gap, audit.null_objective))
        if position in drawn:
            _compare(audit, own, findings)
    return findings


def _relative(value: float, null_objective: float) -> float:
    """Relative to the null objective; where that is zero, so is the optimum."""
    return value / null_objective if null_objective > 0 else value


def _compare(audit: Audit, own: Certificate, findings: _Findings) -> None:
    """Solve one problem by the reference and note the agreement."""
    coef, intercept, label = audit.stated.coef, audit.stated.intercept, audit.stated.label
    try:
        solution, certificate = _solve_reference(audit, own)
    except RuntimeError as error:
        findings.unsolved[label] = str(error)
        return
    null = audit.null_objective
    findings.solved.append(label)
    findings.statuses[f"{solution.solver} {solution.status}"] += 1
    excess = audit.objective(coef, intercept) - solution.objective
    findings.excess.append(_relative(excess, null))
    findings.reference_gaps.append(_relative(certificate.gap, null))
    zero, nonzero = audit.decided(solution.coef, certificate, own.gap)
    findings.n_compared += int(np.sum(zero | nonzero))
    findings.n_undecided += int(np.sum(audit.penalised & ~zero & ~nonzero))
    findings.n_differences += int(np.sum((zero & (coef != 0)) | (nonzero & (coef == 0))))


def _solve_reference(audit: Audit, own: Certificate) -> tuple[ReferenceSolution, Certificate]:
    """The reference's answer and its certificate over all columns."""
    given = _first_columns(audit, own)
    for _ in range(_MOST_ROUNDS):
        solution = _solve_among(audit, given)
        certificate = audit.certify(solution.coef, solution.intercept)
        # Scaled to be feasible, the dual point has no column beyond its limit; those that had to
        # be scaled for are at it.
        outside = np.flatnonzero(~given & (certificate.slack <= 0) & audit.penalised)
        if not outside.size:
            break
        nearest = np.argsort(np.where(given, np.inf, certificate.slack), kind="stable")
        given[nearest[:_FIRST]] = True
    return solution, certificate


def _first_columns(audit: Audit, own: Certificate) -> NDArray[np.bool_]:
    """All columns of a narrow table; of a wide one the free, the used and those near entering."""
    if audit.n_columns <= _WHOLE:
        return np.ones(audit.n_columns, dtype=bool)
    given = (audit.allowed & ~audit.penalised) | (audit.stated.coef != 0)
    given[np.argsort(own.slack, kind="stable")[:_FIRST]] = True
    return given


def _solve_among(audit: Audit, given: NDArray[np.bool_]) -> ReferenceSolution:
    """The reference's answer with all other columns at zero."""
    settings = audit.settings
    weights = settings["penalty_weights"]
    if weights is not None:
        settings["penalty_weights"] = np.asarray(weights)[given]
    table = audit.table if given.all() else audit.table[:, np.flatnonzero(given)]
    solution = reference_solution(table, audit.y, **settings)
    coef = np.zeros(audit.n_columns)
    coef[given] = solution.coef
    return replace(solution, coef=coef)


# ---------------------------------------------------------------------------------------------
# What follows from the problems
# ---------------------------------------------------------------------------------------------


def _derived(
    selector: BaseSparseSelector, data: FitInput, stated: list[StatedProblem]
) -> dict[str, bool]:
    """Statements on fitted attributes that follow from the problems, each with its truth."""
    found: dict[str, bool] = {}
    for attribute, derive in _DERIVATIONS.items():
        if hasattr(selector, attribute):
            found |= derive(selector, data, stated)
            break
    units = np.asarray(selector.units_["selected"])
    named = set(np.asarray(selector.units_["unit"])[units])
    return found | {
        "selected_ and the claim name the selected units": bool(
            np.array_equal(selector.selected_, data.columns.over_columns(units, False))
            and named == set(selector.claim_.selected)
        )
    }


def _votes(selector: Any, data: FitInput, stated: list[StatedProblem]) -> dict[str, bool]:
    """Votes from what every half picked; that the restated halves pick it is known by now."""
    picks, q = selector._picks, selector.features_per_fit_
    n_units = data.columns.n_units
    counts = np.bincount(picks[picks >= 0], minlength=n_units)
    shares = data.columns.over_columns(counts / len(picks), np.nan)
    selected = counts >= round(selector.threshold_ * len(picks))
    return {
        "the restated halves cast the votes in selection_probability_": bool(
            np.array_equal(shares, selector.selection_probability_, equal_nan=True)
        ),
        "the selected units are those with threshold_ or more": bool(
            np.array_equal(selected, selector.units_["selected"])
        ),
        "no half with fewer than features_per_fit_ picks holds a unit it did not pick": all(
            set(_units_held(data, problem.coef)) <= set(picked)
            for problem, picked in zip(stated, picks, strict=True)
            if (picked >= 0).sum() < q
        ),
    }


def _units_held(data: FitInput, coef: FloatArray) -> NDArray[np.int64]:
    """Units with a nonzero coefficient."""
    return np.unique(data.columns.unit_of[(coef != 0) & data.columns.candidates])


def _coefficients(selector: Any, data: FitInput, stated: list[StatedProblem]) -> dict[str, bool]:
    """Support and choice of the penalty of one final fit."""
    _check_same_data(selector, data, stated[0])
    held = data.columns.any_over_units(selector.coef_ != 0)
    found = {
        "the selected units are those with a nonzero coefficient": bool(
            np.array_equal(held, selector.units_["selected"])
        )
    }
    if not hasattr(selector, "loss_path_"):
        return found
    position = int(np.flatnonzero(selector.alphas_ == selector.alpha_)[0])
    losses = [_held_out_loss(data, stated[0], fold) for fold in stated[1:]]
    rule = one_standard_error if selector.alpha == "one_se" else _lowest_mean
    # Predictions of two answers with a relative gap of tol differ by about the root of twice that.
    found["the folds have the held-out losses in loss_path_ at alpha_"] = bool(
        np.allclose(losses, selector.loss_path_[position], rtol=np.sqrt(2 * selector.tol))
    )
    found["alpha_ is what its rule picks from loss_path_"] = rule(selector.loss_path_) == position
    return found


def _lowest_mean(loss_path: FloatArray) -> int:
    return lowest(loss_path.mean(axis=1))


def _check_same_data(selector: Any, data: FitInput, final: StatedProblem) -> None:
    """Refuse data that give other penalty weights or, where none depend on them, another fit."""
    weights = np.asarray(final.problems.penalty_weights).reshape(-1)
    found = ""
    if not np.array_equal(weights, selector.weights_):
        found = "The penalty weights of this table are not those of the fit (weights_)"
    elif selector.initial_ == "none":
        audit = Audit(final, data.X)
        gap = _relative(audit.certify(final.coef, final.intercept).gap, audit.null_objective)
        if gap > _OTHER_DATA and selector.dual_gap_ <= selector.tol:
            found = (
                "On this table the coefficients of the fit have a relative duality gap of "
                f"{gap:.1e}, while the fit reported {selector.dual_gap_:.1e}"
            )
    if found:
        raise ValueError(
            f"{found}. A cross-check needs the very table, outcome, weights and groups that the "
            "selector was fitted to, and the same parameters: pass those."
        )


def _held_out_loss(data: FitInput, final: StatedProblem, fold: StatedProblem) -> float:
    """Mean loss of a fold's model over the rows that it has not seen."""
    whole = np.asarray(final.problems.sample_weight).reshape(-1)
    seen = np.asarray(fold.problems.sample_weight).reshape(-1) > 0
    weight = np.where(seen, 0.0, whole)
    eta = fold.intercept + data.X @ fold.coef
    if data.loss == "squared_error":
        rows = 0.5 * (data.response - eta) ** 2
    else:
        rows = np.logaddexp(0.0, eta) - data.response * eta
    return float(weight @ rows / weight.sum())


def _contrasts(selector: Any, data: FitInput, stated: list[StatedProblem]) -> dict[str, bool]:
    """The list from the contrasts; that the restated draws have them is known by now."""
    contrasts = selector._contrasts
    mean = data.columns.over_columns(contrasts.mean(axis=0), np.nan)
    rule = choose_filter(
        selector.fdr, selector.plus, selector.pfer, selector.k_fwer, selector.n_draws
    )
    decision = rule.decide(contrasts, spawn(selector.seed_, 1, _FILTER)[0])
    found = {
        "the restated draws have their contrasts, and contrast_ is the mean of all": bool(
            np.array_equal(mean, selector.contrast_, equal_nan=True)
        ),
        "the selected units are those that the filter takes from the contrasts": bool(
            np.array_equal(decision.selected, selector.units_["selected"])
        ),
    }
    if rule.key in ("knockoff", "knockoff+") and np.isfinite(selector.threshold_):
        # Barber and Candès (2015), Definitions 3 and 4, as they are printed.
        wins = np.sum(contrasts[0] >= selector.threshold_)
        losses = np.sum(contrasts[0] <= -selector.threshold_)
        share = (losses + (rule.key == "knockoff+")) / max(wins, 1)
        found["the estimated share of false discoveries at threshold_ is at most fdr"] = bool(
            share <= selector.fdr
        )
    return found


_DERIVATIONS = {
    "contrast_": _contrasts,
    "coef_": _coefficients,
    "selection_probability_": _votes,
}
