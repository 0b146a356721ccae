"""What is found wrong with a benchmark: each rule on a panel spoiled for it, and none without."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from pipeline.core.findings import Finding, Severity
from pipeline.core.ledger import Action
from pipeline.core.prices import PricePanel
from pipeline.core.rules import RULES
from pipeline.returns.benchmarks import (
    BenchmarkLimits,
    benchmark_findings,
    benchmark_fits,
    dominated,
)
from tests.returns.panels import invented_panel

LIMITS = BenchmarkLimits()
T, S = 320, 6
Spoil = Callable[[PricePanel], PricePanel]


def placed(*columns: int) -> pd.DataFrame:
    n = len(columns)
    return pd.DataFrame(
        {
            "deal_id": [f"D{at}" for at in range(n)],
            "security": [f"S{column:02d}" for column in columns],
            "exchange": "XLON",
            "column": columns,
            "day_zero": np.datetime64("2016-01-04", "s"),
            "market_value": np.linspace(10, 60, n),
        }
    )


LOCATED = placed(*range(S))


def found_in(panel: PricePanel) -> list[Finding]:
    panels = {"XLON": panel}
    return benchmark_findings(panels, benchmark_fits(panels, LOCATED), LIMITS)


def moved(lag: int) -> Spoil:
    """The benchmark dated ``lag`` sessions late."""
    return lambda panel: replace(panel, benchmark=np.roll(panel.benchmark, lag))


def other_market(panel: PricePanel) -> PricePanel:
    return replace(panel, benchmark=np.random.default_rng(99).normal(0, 0.01, T))


def still(panel: PricePanel) -> PricePanel:
    return replace(panel, benchmark=np.full(T, 0.0002))


def the_share(panel: PricePanel) -> PricePanel:
    return replace(panel, benchmark=panel.returns[:, 2] * 1.3 + 0.0001)


def annual(panel: PricePanel) -> PricePanel:
    return replace(panel, factors={**panel.factors, "risk_free": np.full(T, 0.03)})


CASES: dict[str, tuple[Spoil, str, Severity]] = {
    "no movement": (still, "benchmark_constant", Severity.ERROR),
    "the share itself": (the_share, "benchmark_is_the_share", Severity.ERROR),
    "annual rate": (annual, "risk_free_not_daily", Severity.ERROR),
    "another region": (other_market, "benchmark_unrelated", Severity.WARNING),
    "a session late": (moved(1), "benchmark_shifted", Severity.ERROR),
    "a session early": (moved(-1), "benchmark_shifted", Severity.ERROR),
}


@pytest.fixture(scope="module")
def panel() -> PricePanel:
    return invented_panel(T, S)


def test_a_sound_benchmark_is_not_doubted(panel: PricePanel) -> None:
    assert found_in(panel) == []


@pytest.mark.parametrize("case", CASES)
def test_each_fault_is_told_by_its_rule(case: str, panel: PricePanel) -> None:
    spoil, rule, severity = CASES[case]
    (finding,) = found_in(spoil(panel))
    assert (finding.rule, finding.severity) == (rule, severity)
    assert finding.rule in RULES
    assert finding.got
    assert finding.remedy


def test_which_session_fits_is_said(panel: PricePanel) -> None:
    (late,), (early,) = found_in(moved(1)(panel)), found_in(moved(-1)(panel))
    assert "session after" in late.got
    assert "session before" in early.got


def test_a_benchmark_that_fits_both_sessions_is_a_warning(panel: PricePanel) -> None:
    """Half of it dated right: the other half wins, and the run may go on."""
    mixed = 0.3 * panel.benchmark + np.roll(panel.benchmark, 1)
    (finding,) = found_in(replace(panel, benchmark=mixed))
    assert (finding.rule, finding.severity) == ("benchmark_shifted", Severity.WARNING)


@pytest.mark.parametrize("seed", range(20))
def test_noise_is_not_taken_for_a_shift(seed: int, panel: PricePanel) -> None:
    """Of three correlations of nothing the middle one is rarely the largest."""
    noise = np.random.default_rng(seed).normal(0, 0.01, T)
    assert {f.rule for f in found_in(replace(panel, benchmark=noise))} <= {"benchmark_unrelated"}


def test_correlations_are_numpys_over_common_days(panel: PricePanel) -> None:
    returns = panel.returns.copy(order="F")
    returns[40:60, 1] = np.nan
    fit = benchmark_fits({"XLON": replace(panel, returns=returns)}, LOCATED)["XLON"]
    known = np.isfinite(returns[:, 1]) & np.isfinite(panel.benchmark)
    same = np.corrcoef(returns[known, 1], panel.benchmark[known])[0, 1]
    assert fit.of(1) == pytest.approx(same, rel=1e-10)
    after = known[:-1] & known[1:]
    ahead = np.corrcoef(returns[:-1][after, 3], panel.benchmark[1:][after])[0, 1]
    assert fit.lags[2, 3] == pytest.approx(ahead, abs=0.02)


def test_a_share_with_few_returns_is_left_alone(panel: PricePanel) -> None:
    returns = panel.returns.copy(order="F")
    returns[50:] = np.nan
    returns[:50] = panel.benchmark[:50, None]
    assert found_in(replace(panel, returns=returns)) == []


def alike(panel: PricePanel) -> PricePanel:
    """S02 is most of the index."""
    noise = np.random.default_rng(4).normal(0, 0.002, T)
    return replace(panel, benchmark=panel.returns[:, 2] * 0.9 + noise)


def test_a_company_that_is_its_benchmark_is_flagged(panel: PricePanel) -> None:
    panels = {"XLON": alike(panel)}
    fits = benchmark_fits(panels, LOCATED)
    assert benchmark_findings(panels, fits, LIMITS) == []
    (finding,), stage = dominated(LOCATED, fits, pd.DataFrame(), LIMITS)
    assert (finding.rule, finding.severity) == ("benchmark_dominated", Severity.WARNING)
    (entry,) = stage.entries
    assert (entry.deal, entry.rule, entry.action) == ("D2", "benchmark_dominated", Action.FLAGGED)
    assert stage.rows_kept == S


def test_a_known_weight_goes_before_the_symptom(panel: PricePanel) -> None:
    """The last market value before day zero counts, and a small company is not suspected."""
    fits = benchmark_fits({"XLON": alike(panel)}, LOCATED)
    levels = pd.DataFrame(
        {
            "exchange": "XLON",
            "date": pd.to_datetime(["2015-12-31", "2016-01-04"]),
            "market_value": [520.0, 1.0],
        }
    )
    findings, stage = dominated(LOCATED, fits, levels, LIMITS)
    assert [entry.deal for entry in stage.entries] == ["D5"]
    assert stage.entries[0].value == "12% of the benchmark"
    assert "S05" in findings[0].got
    unknown = LOCATED.assign(market_value=np.nan)
    assert [e.deal for e in dominated(unknown, fits, levels, LIMITS)[1].entries] == ["D2"]
    none, quiet = dominated(LOCATED, fits, levels.assign(market_value=1e6), LIMITS)
    assert (none, quiet.entries) == ([], ())
