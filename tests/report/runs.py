"""Invented runs to report on: one with everything, one of a single deal, and their variations."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import (
    ConfidenceSet,
    Estimate,
    NotApplicable,
    Shape,
    TestResult,
    Withheld,
    f_test,
    t_test,
)
from pipeline.core.findings import Finding, Severity, findings_frame
from pipeline.core.ledger import Action, Ledger, LedgerEntry, StageLedger
from pipeline.core.results import Results, StudyFacts, WindowTests
from pipeline.core.sessions import SessionRuns
from pipeline.core.tables import estimates_frame, event_tests_frame
from pipeline.core.window import Window

HEADLINE, WIDE = Window(-1, 1), Window(-5, 5)
SPAN = Window(-10, 10)
GROUPS = ("paid in cash", "paid in shares")
DEALS = 60
RESET = f_test("RESET", "the relation is linear", 2.18, 2, 46, citation="Ramsey 1969")
NOT_HERE = NotApplicable("Agreement", "one instrument only")


def full_run() -> Results:
    """60 deals in two groups, five columns: one withheld, the leading one with two rays."""
    study = _study()
    abnormal = {model: _abnormal(model, seed) for seed, model in enumerate(study.models)}
    columns = (
        _estimate("plain", "Plain least squares", -0.0267, 0.0029),
        _estimate("grouped", "Within groups", -0.0289, 0.0031, effects={"industry": 3, "year": 10}),
        Withheld("corrected", "Corrected for selection", "no excluded variable was declared"),
        _estimate("moved", "Moved from outside", -0.0089, 0.0070, robust=_set(Shape.RAYS)),
        _estimate("matched", "Matched pairs", -0.0153, 0.0051, n=41),
    )
    return assembled(study, abnormal, _window_tests(abnormal), columns, lead=3)


def bare_run() -> Results:
    """One deal, no feature, no columns, no market value: most tests have no answer."""
    study = replace(
        _study(), treatment="", groups=("", ""), regressors=(), effects=(), clusters=(),
        instruments=(), excluded=(), selection=(), rationales={}, currency="", models=("market",),
        windows=(HEADLINE,), headline_test="single",
    )  # fmt: skip
    whole = _abnormal("market", 0)
    abnormal = {"market": whole.select(np.arange(DEALS) == 0)}
    car = float(abnormal["market"].car(HEADLINE)[0])
    tests = {
        "single": t_test("Single-deal t", "the deal's abnormal return is zero", -1.21, 118),
        "mean": NotApplicable("Mean t", "needs two deals; this sample has 1"),
    }
    found = (
        WindowTests(HEADLINE, "market", 1, car, car, np.nan, 0.0, (car - 0.04, car + 0.04), tests),
    )
    empty = assembled(study, abnormal, found, (), lead=-1)
    return replace(
        empty,
        deals=pd.DataFrame({"deal": list(abnormal["market"].deals)}),
        diagnostics=empty.diagnostics.iloc[:0],
        sensitivity=empty.sensitivity.iloc[:0],
        paths=empty.paths.iloc[:0],
        ledger=Ledger((StageLedger("deal list", 1),)),
        findings=(),
    )


def assembled(
    study: StudyFacts,
    abnormal: dict[str, AbnormalReturns],
    tests: tuple[WindowTests, ...],
    columns: tuple[Estimate | Withheld, ...],
    lead: int,
) -> Results:
    """A run of these parts, its frames made the way the pipeline makes them."""
    ledger, findings = _ledger(), _findings()
    results = Results(
        study=study, abnormal=abnormal, deals=_deals(), window_tests=tests, columns=columns,
        lead=lead, paths=_paths(), diagnostics=_diagnostics(), sensitivity=_sensitivity(),
        ledger=ledger, findings=findings, tables={},
    )  # fmt: skip
    return with_frames(results)


def with_frames(results: Results) -> Results:
    """The run with the frames of its own tests and columns."""
    tables = {
        "event_tests": event_tests_frame(results.window_tests),
        "estimates": estimates_frame(results.columns, results.study.explained),
        "ledger": results.ledger.frame(),
        "findings": findings_frame(results.findings),
        "diagnostics": results.diagnostics,
        "sensitivity": results.sensitivity,
        "deals": results.deals,
    }
    return replace(results, tables=tables)


def with_columns(results: Results, *columns: Estimate | Withheld, lead: int = 0) -> Results:
    """The run with other columns."""
    return with_frames(replace(results, columns=columns, lead=lead))


def with_tests(results: Results, *p_values: float) -> Results:
    """The run with headline tests of these p-values, the first one leading."""
    tests = {
        f"test_{at}": TestResult(f"Test {chr(65 + at)}", "zero", -2.0, "normal", p)
        for at, p in enumerate(p_values)
    }
    first = replace(results.window_tests[0], tests=tests, p_holm={})
    study = replace(results.study, headline_test="test_0")
    return with_frames(replace(results, study=study, window_tests=(first,)))


def estimate(title: str, effect: float, error: float = 0.005, **more: object) -> Estimate:
    """A column with this effect of the feature."""
    return replace(_estimate(title.lower(), title, effect, error), **more)  # type: ignore[arg-type]


def shaped(shape: Shape) -> Results:
    """The full run, its leading column with a confidence set of this shape."""
    run = full_run()
    lead = replace(run.columns[3], robust_set=_set(shape))  # type: ignore[type-var]
    return with_frames(replace(run, columns=(*run.columns[:3], lead, run.columns[4])))


def _set(shape: Shape) -> ConfidenceSet:
    ends = {Shape.INTERVAL: (-0.0227, 0.0048), Shape.RAYS: (-0.0310, 0.0120)}
    low, high = ends.get(shape, (np.nan, np.nan))
    return ConfidenceSet(shape, low, high, 0.95, "inversion of a test")


def _study() -> StudyFacts:
    return StudyFacts(
        name="sample",
        title="Paying in shares: 2 ways to pay",
        question="Does paying in shares cost the acquirer, in -5 to +5 sessions?",
        headline=HEADLINE,
        windows=(HEADLINE, WIDE),
        estimation=Window(-250, -31),
        minimum_observations=120,
        models=("market", "factor_3"),
        headline_test="mean",
        headline_test_reason="allows for deals that move together",
        treatment="paid_in_shares",
        groups=GROUPS,
        regressors=("paid_in_shares", "relative_size", "leverage"),
        effects=("industry", "year"),
        clusters=("security",),
        instruments=("treasury_shares",),
        excluded=("divisions_for_sale",),
        selection=("leverage",),
        rationales={"Why it is as good as chance": "A rule of 2017 changed\nfor all at once."},
        labels={"paid_in_shares": "Paid in shares", "security": "company"},
        notes=("Day zero is the first session whose close, less 15 minutes, could react.",),
        currency="USD million",
        seed=7,
    )


def _abnormal(model: str, seed: int) -> AbnormalReturns:
    rng = np.random.default_rng(seed + 11)
    width = len(SPAN)
    returns = rng.normal(0, 0.012, (DEALS, width))
    returns[:, 10] -= 0.01 * (np.arange(DEALS) % 2)
    first = np.datetime64("2019-01-07") + np.arange(DEALS)[:, None] * 9
    return AbnormalReturns(
        model=model,
        deals=tuple(f"D{i:03d}" for i in range(DEALS)),
        span=SPAN,
        returns=returns,
        days=first + np.arange(width),
        regressors=np.ones((DEALS, width, 1)),
        bread=np.full((DEALS, 1, 1), 1 / 150),
        parameters=np.zeros((DEALS, 1)),
        residual_variance=np.full(DEALS, 0.012**2),
        observations=np.full(DEALS, 150),
        estimation_returns=rng.normal(0, 0.012, (DEALS, 4)),
        estimation_sessions=SessionRuns(
            calendars=(np.datetime64("2018-06-01") + np.arange(4),),
            calendar=np.zeros(DEALS, dtype=np.int64),
            first=np.zeros(DEALS, dtype=np.int64),
            length=4,
        ),
        expected=np.zeros((DEALS, width)),
    )


def _window_tests(abnormal: dict[str, AbnormalReturns]) -> tuple[WindowTests, ...]:
    return tuple(
        _tested(measured, window) for measured in abnormal.values() for window in (HEADLINE, WIDE)
    )


def _tested(measured: AbnormalReturns, window: Window) -> WindowTests:
    car = measured.car(window)
    error = float(car.std(ddof=1) / np.sqrt(len(car)))
    mean = float(car.mean())
    statistic = mean / error
    tests = {
        "mean": t_test(
            "Mean t", "the mean is zero", statistic, len(car) - 1, citation="Brown and Warner 1980",
            caution="assumes independent deals",
        ),
        "ranks": t_test("Rank t", "the median is zero", 0.8 * statistic, 149),
        "one": NotApplicable("Single-deal t", f"is for one deal; this sample has {len(car)}"),
    }  # fmt: skip
    holm = {} if window == HEADLINE else {"mean": 0.0123, "ranks": 0.5}
    return WindowTests(
        window, measured.model, len(car), mean, float(np.median(car)), float(car.std(ddof=1)),
        float((car > 0).mean()), (mean - 2 * error, mean + 2 * error), tests, holm,
    )  # fmt: skip


def _estimate(
    key: str, title: str, effect: float, error: float, *, n: int = DEALS,
    effects: dict[str, int] | None = None, robust: ConfidenceSet | None = None,
) -> Estimate:  # fmt: skip
    names = ("paid_in_shares", "relative_size", "leverage")
    names = names if effects else ("constant", *names)
    values = {"constant": 0.0123, "relative_size": -0.00034, "leverage": 0.031}
    errors = {"constant": 0.01, "relative_size": 0.00021, "leverage": 0.0117}
    errors["paid_in_shares"] = error
    return Estimate(
        estimator=key,
        title=title,
        estimand="difference in mean CAR[-1, +1] associated with paid_in_shares, with controls",
        names=names,
        coefficients=np.array([{**values, "paid_in_shares": effect}[name] for name in names]),
        covariance=np.diag([errors[name] ** 2 for name in names]),
        df=49.0 if robust else np.inf,
        df_rule="Student t, clusters less one" if robust else "the normal, in large samples",
        covariance_name="clustered by security",
        n=n,
        treatment="paid_in_shares",
        outcome="CAR[-1, +1]",
        clusters={"security": 50} if robust else {},
        effects=effects or {},
        fit={"r_squared": 0.2004, "sigma": 0.0296, "alone.treasury_shares": -0.0002},
        tests={"reset": RESET} if robust else {"overid": NOT_HERE},
        stages=(_stage(),) if robust else (),
        robust_set=robust,
        sets={"inverted": robust} if robust else {},
        notes=("Rests on 1 instrument: treasury_shares.",),
        citation="Author 1999",
    )  # fmt: skip


def _stage() -> Estimate:
    return Estimate(
        estimator="stage", title="First stage", estimand="difference in paid_in_shares",
        names=("treasury_shares",), coefficients=np.array([0.0555]),
        covariance=np.array([[0.0065**2]]), df=49.0, df_rule="Student t",
        covariance_name="clustered by security", n=DEALS, treatment="treasury_shares",
        outcome="paid_in_shares", clusters={"security": 50}, fit={"partial_r_squared": 0.28},
        tests={"f": f_test("First-stage F", "the instruments do not move it", 73.1, 1, 49)},
    )  # fmt: skip


def _deals() -> pd.DataFrame:
    rng = np.random.default_rng(3)
    return pd.DataFrame(
        {
            "deal": [f"D{i:03d}" for i in range(DEALS)],
            "security": [f"C{i % 50:03d}" for i in range(DEALS)],
            "industry": [("packaging", "flavours", "consumables")[i % 3] for i in range(DEALS)],
            "year": 2015 + np.arange(DEALS) % 10,
            "paid_in_shares": np.arange(DEALS) % 2,
            "relative_size": rng.normal(-2, 1, DEALS),
            "leverage": rng.uniform(0, 0.6, DEALS),
            "treasury_shares": rng.uniform(0, 4, DEALS),
            "market_value": np.exp(rng.normal(7, 1, DEALS)),
        }
    )


def _paths() -> pd.DataFrame:
    days = np.arange(SPAN.start, SPAN.end + 1)
    frames = []
    for group, slope in zip(GROUPS, (0.0002, -0.0011), strict=True):
        mean = slope * (days - SPAN.start + 1)
        parts = {"n": 30, "mean": mean, "low": mean - 0.004, "high": mean + 0.004}
        frames.append(pd.DataFrame({"group": group, "day": days, **parts}))
    return pd.concat(frames, ignore_index=True)


def _diagnostics() -> pd.DataFrame:
    rows = [
        ("Sample", "Correlation of deals", 0.0189, "below 0.0014", "warn",
         "Deals move together.", "Kolari and Pynnönen 2010"),
        ("Moved from outside", "Strength of the instrument", 3.2, "above 23.1", "fail",
         "The instrument is weak: treasury_shares hardly moves the choice.", "Author 2013"),
        ("Sample", "Completed deals, share", np.nan, "below 1", "pass", "Fine.", "no source"),
    ]  # fmt: skip
    names = ["subject", "check", "value", "threshold", "verdict", "meaning", "source"]
    return pd.DataFrame(rows, columns=names)


def _sensitivity() -> pd.DataFrame:
    rows = [
        ("expected return", "market", -0.0081, -0.0130, -0.0032, 60),
        ("expected return", "factor_3", -0.0077, -0.0128, -0.0026, 60),
        ("deals", "without deals next to an earnings release", -0.0069, -0.0124, -0.0014, 52),
    ]
    return pd.DataFrame(
        rows, columns=["dimension", "variant", "estimate", "ci_low", "ci_high", "n"]
    )


def _ledger() -> Ledger:
    drop, flag, change = Action.DROPPED, Action.FLAGGED, Action.CHANGED
    return Ledger(
        (
            StageLedger("deal list", 64, (LedgerEntry("D900", "duplicate_deal", drop, "", ""),)),
            StageLedger(
                "estimation window",
                63,
                (
                    LedgerEntry("D901", "short_estimation", drop, "87", "120"),
                    LedgerEntry("D902", "short_estimation", drop, "44", "120"),
                    LedgerEntry("D903", "thin_trading", drop, "0.61", "0.50"),
                    LedgerEntry("D001", "confounded", flag, "-1", "1"),
                    LedgerEntry("D002", "moved_to_session", change, "2019-01-19", ""),
                ),
            ),
        )
    )


def _findings() -> tuple[Finding, ...]:
    return (
        Finding("large_return", Severity.WARNING, "prices.csv", "a return of 0.62", "below 0.5",
                "Look at the date.", row="812"),
        Finding("made_up_rule", Severity.NOTE, "deals.csv", "nothing", "nothing", "None needed."),
    )  # fmt: skip
