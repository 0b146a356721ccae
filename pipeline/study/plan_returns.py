"""What a study asks about benchmarks, peers and longer horizons, in the stages' own terms."""

from __future__ import annotations

from collections.abc import Iterator

from pipeline.core.findings import Finding, Severity
from pipeline.core.window import Window
from pipeline.registry import EXPECTED_RETURNS, entry
from pipeline.returns.benchmarks import BenchmarkLimits
from pipeline.returns.matched import MatchOptions
from pipeline.significance.calendar_time import CalendarTimeOptions
from pipeline.study.schema import Study


def calendar_time_options(study: Study) -> CalendarTimeOptions:
    """What is asked of the portfolios in calendar time."""
    asked = study.calendar_time
    return CalendarTimeOptions(
        horizons=tuple(asked.horizons),
        weightings=tuple(dict.fromkeys(asked.weightings)),
        first_session=asked.first_session,
        fewest_holdings=asked.fewest_holdings,
        factors=asked.regressors == "factors",
        newey_west=asked.errors == "newey_west",
        level=study.level,
    )


def match_options(study: Study) -> MatchOptions:
    """Which windows matched companies are held over, and what makes one alike."""
    asked = study.matched_control
    windows = tuple(dict.fromkeys(Window(*pair) for pair in asked.windows))
    return MatchOptions(windows, tuple(asked.within), tuple(asked.nearest))


def benchmark_limits(study: Study) -> BenchmarkLimits:
    """When a benchmark is doubted."""
    asked = study.benchmark_checks
    return BenchmarkLimits(
        largest_weight=asked.largest_weight,
        dominating=asked.dominating_correlation,
        identical=asked.identical_correlation,
        lowest=asked.lowest_correlation,
        highest_rate=asked.highest_risk_free,
    )


def uses_candidates(study: Study) -> bool:
    """Whether longer horizons or peers need the table of candidates."""
    return bool(study.matched_control.windows or peers_column(study))


def peers_column(study: Study) -> tuple[str, ...]:
    """The column whose equals are peers; none if no model needs it."""
    asked = study.expected_returns
    needed = any("peers" in entry(EXPECTED_RETURNS, key).needs for key in asked.all_models)
    return (asked.peers,) if needed and asked.peers and study.inputs.peers is None else ()


def candidate_columns(study: Study) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """The candidates' columns that controls are matched by, and peers: numbers, and words."""
    asked = study.matched_control
    numbers, texts = (asked.nearest, asked.within) if asked.windows else ([], [])
    return tuple(numbers), tuple(dict.fromkeys((*texts, *peers_column(study))))


def returns_checks(study: Study, file: str) -> Iterator[Finding]:
    """How longer horizons fit with the tables a study names."""
    if study.calendar_time.regressors == "factors" and study.inputs.factors is None:
        yield _absent(file, "inputs.factors", "the factor returns, needed by [calendar_time]")
    if study.matched_control.windows and study.inputs.candidates is None:
        wanted = "the table of companies a control is chosen from, needed by [matched_control]"
        yield _absent(file, "inputs.candidates", wanted)
    for key in study.expected_returns.all_models:
        lacking = study.inputs.peers is None and not study.expected_returns.peers
        if "peers" in entry(EXPECTED_RETURNS, key).needs and lacking:
            wanted = f"the column whose equals are peers (or inputs.peers), needed by {key}"
            yield _absent(file, "expected_returns.peers", wanted)


def _absent(file: str, key: str, expected: str) -> Finding:
    remedy = f"Give {key}, or take out what needs it."
    return Finding("bad_value", Severity.ERROR, file, "nothing", expected, remedy, column=key)
