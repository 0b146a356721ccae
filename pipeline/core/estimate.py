"""What an estimator or a test hands back: numbers with their null, distribution and meaning."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from typing import Any

import numpy as np
from scipy import special

from pipeline.core.prices import Floats


class EstimationFailed(Exception):
    """A fit that was allowed to start and gave no number that may be shown; ``reason`` says why."""

    def __init__(self, reason: str):
        self.reason = reason
        super().__init__(reason)


@dataclass(frozen=True, slots=True)
class TestResult:
    """A statistic with its null hypothesis and distribution.

    ``distribution`` is ``t``, ``normal``, ``chi2``, ``F``, ``noncentral chi2`` or ``empirical``;
    ``df`` holds its parameters; ``caution`` says where the test does not hold.
    """

    __test__ = False

    name: str
    null: str
    statistic: float
    distribution: str
    p_value: float
    df: tuple[float, ...] = ()
    caution: str = ""
    citation: str = ""
    facts: Mapping[str, float] = field(default_factory=dict)
    doubt: str = ""


@dataclass(frozen=True, slots=True)
class NotApplicable:
    """A test that has no answer here, and why."""

    name: str
    reason: str


Tested = TestResult | NotApplicable


def t_tail(statistic: float, df: float) -> float:
    """Two-sided p of a Student t statistic, from its tail; the normal when ``df`` is infinite."""
    below = -abs(statistic)
    tail = special.ndtr(below) if np.isinf(df) else special.stdtr(df, below)
    return float(2 * tail)


def t_reach(level: float, df: float) -> float:
    """How many standard errors a two-sided interval at ``level`` reaches to each side."""
    tail = (1 - level) / 2
    return float(-(special.ndtri(tail) if np.isinf(df) else special.stdtrit(df, tail)))


def t_test(
    name: str,
    null: str,
    statistic: float,
    df: float,
    *,
    caution: str = "",
    citation: str = "",
    facts: Mapping[str, float] | None = None,
) -> TestResult:
    """A two-sided Student t result, p from the survival function."""
    p = t_tail(statistic, df)
    return TestResult(
        name, null, statistic, "t", p, (float(df),), caution, citation, dict(facts or {})
    )


def z_test(
    name: str,
    null: str,
    statistic: float,
    *,
    caution: str = "",
    citation: str = "",
    facts: Mapping[str, float] | None = None,
) -> TestResult:
    """A two-sided standard normal result, p from the survival function."""
    p = float(2 * special.ndtr(-abs(statistic)))
    return TestResult(name, null, statistic, "normal", p, (), caution, citation, dict(facts or {}))


def chi2_test(
    name: str, null: str, statistic: float, df: float, *, caution: str = "", citation: str = ""
) -> TestResult:
    """A chi-squared result."""
    p = float(special.chdtrc(df, statistic))
    return TestResult(name, null, statistic, "chi2", p, (float(df),), caution, citation)


def f_test(
    name: str,
    null: str,
    statistic: float,
    df1: float,
    df2: float,
    *,
    caution: str = "",
    citation: str = "",
    facts: Mapping[str, float] | None = None,
) -> TestResult:
    """An F result."""
    p = float(special.fdtrc(df1, df2, statistic))
    return TestResult(
        name,
        null,
        statistic,
        "F",
        p,
        (float(df1), float(df2)),
        caution,
        citation,
        dict(facts or {}),
    )


class Shape(StrEnum):
    """The shapes a confidence set can take."""

    INTERVAL = "interval"
    RAYS = "two rays"
    LINE = "the whole line"
    EMPTY = "empty"


@dataclass(frozen=True, slots=True)
class ConfidenceSet:
    """A confidence set for one coefficient.

    An interval is [low, high]; two rays are everything outside (low, high); the line and the
    empty set have no ends (NaN). ``method`` says how it was made.
    """

    shape: Shape
    low: float
    high: float
    level: float
    method: str

    def covers(self, value: float) -> bool:
        """Whether the set holds ``value``."""
        if self.shape is Shape.INTERVAL:
            return self.low <= value <= self.high
        if self.shape is Shape.RAYS:
            return value <= self.low or value >= self.high
        return self.shape is Shape.LINE


@dataclass(frozen=True, slots=True)
class Diagnostic:
    """One check of a sample or an estimate: what was found against what was hoped for.

    ``verdict`` is ``pass``, ``warn`` or ``fail``; ``meaning`` says what follows from it;
    ``source`` names where the threshold comes from.
    """

    subject: str
    check: str
    value: float
    threshold: str
    verdict: str
    meaning: str
    source: str


@dataclass(frozen=True, slots=True, eq=False)
class Estimate:
    """One column of the comparison table; t, p and intervals are derived, never stored.

    Attributes:
        estimator: the registry's key.
        title: how the column is called on a page.
        estimand: what the treatment coefficient estimates, in words.
        names: k coefficient names.
        coefficients: (k,) in the outcome's unit (decimal) per unit of the regressor.
        covariance: (k, k).
        df: degrees of freedom of t; infinite for the normal.
        df_rule: the sentence that says where df comes from.
        covariance_name: the covariance in words.
        n: outcome rows used.
        clusters: cluster dimension -> number of clusters.
        treatment: the name of the coefficient that answers the question.
        outcome: what the coefficients explain, in words.
        effects: fixed effect -> number of levels absorbed.
        fit: further facts by name (r_squared, sigma, rho, ...).
        tests: name -> result or why there is none.
        stages: first stages and selection equations, each an Estimate.
        robust_set: a confidence set for the treatment that replaces the t interval when set.
        checks: what was checked before this column may be believed.
        claim: the strongest words the design allows between the treatment and its coefficient.
        sets: further confidence sets for the treatment, by how they are made.
        scores: (n, k) influence of each row on the coefficients, or None.
        notes: sentences a reader must see.
        citation: the published source.
        level: confidence level of the intervals.
        df_each: (k,) degrees of freedom where each coefficient has its own, or None; ``df`` is
            then the treatment's.
    """

    estimator: str
    title: str
    estimand: str
    names: tuple[str, ...]
    coefficients: Floats
    covariance: Floats
    df: float
    df_rule: str
    covariance_name: str
    n: int
    treatment: str
    outcome: str
    clusters: Mapping[str, int] = field(default_factory=dict)
    effects: Mapping[str, int] = field(default_factory=dict)
    fit: Mapping[str, float] = field(default_factory=dict)
    tests: Mapping[str, Tested] = field(default_factory=dict)
    stages: tuple[Estimate, ...] = ()
    robust_set: ConfidenceSet | None = None
    sets: Mapping[str, ConfidenceSet] = field(default_factory=dict)
    scores: Floats | None = None
    notes: tuple[str, ...] = ()
    citation: str = ""
    level: float = 0.95
    checks: tuple[Diagnostic, ...] = ()
    claim: str = "is associated with"
    df_each: Floats | None = None

    def __post_init__(self) -> None:
        k = len(self.names)
        if self.coefficients.shape != (k,) or self.covariance.shape != (k, k):
            raise ValueError(f"{self.estimator}: {k} names, {self.coefficients.shape} values")
        if self.df_each is not None and self.df_each.shape != (k,):
            raise ValueError(f"{self.estimator}: {k} names, {self.df_each.shape} df_each")

    @property
    def dfs(self) -> Floats:
        """(k,) degrees of freedom of each coefficient's t."""
        return np.full(len(self.names), self.df) if self.df_each is None else self.df_each

    @property
    def std_errors(self) -> Floats:
        """(k,) square roots of the covariance's diagonal."""
        return np.asarray(np.sqrt(np.diag(self.covariance)), dtype=np.float64)

    @property
    def statistics(self) -> Floats:
        """(k,) coefficient over standard error."""
        return np.asarray(self.coefficients / self.std_errors, dtype=np.float64)

    @property
    def p_values(self) -> Floats:
        """(k,) two-sided, t with ``dfs`` degrees of freedom (the normal where infinite)."""
        pairs = zip(self.statistics, self.dfs, strict=True)
        return np.array([t_tail(float(value), float(df)) for value, df in pairs])

    @property
    def intervals(self) -> Floats:
        """(k, 2) two-sided intervals at ``level``."""
        reach = np.array([t_reach(self.level, float(df)) for df in self.dfs])
        half = reach * self.std_errors
        return np.column_stack([self.coefficients - half, self.coefficients + half])

    def term(self, name: str) -> dict[str, Any]:
        """Coefficient, std_error, statistic, p_value, ci_low and ci_high of one name."""
        at = self.names.index(name)
        low, high = self.intervals[at]
        return {
            "coefficient": float(self.coefficients[at]),
            "std_error": float(self.std_errors[at]),
            "statistic": float(self.statistics[at]),
            "p_value": float(self.p_values[at]),
            "ci_low": float(low),
            "ci_high": float(high),
        }

    @property
    def interval(self) -> ConfidenceSet:
        """The treatment's confidence set: the robust one if there is one, else the t interval."""
        if self.robust_set is not None:
            return self.robust_set
        term = self.term(self.treatment)
        return ConfidenceSet(
            Shape.INTERVAL, term["ci_low"], term["ci_high"], self.level, self.df_rule
        )


@dataclass(frozen=True, slots=True)
class Withheld:
    """An estimator that was asked for and gave no number, and why."""

    estimator: str
    title: str
    reason: str


Column = Estimate | Withheld
