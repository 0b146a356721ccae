"""The committed figures of size and power: what they claim, and that they are not stale.

Valid tests reject 5% of true nulls within a point and a half, and those known to fail under
event-induced variance or same-day dependence are seen to fail: Boehmer, Musumeci and Poulsen
1991; Kolari and Pynnönen 2010.
"""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest

from tests.benchmarks import one_date_size
from tests.benchmarks.event_tests_size import FIGURES, LEVEL, WORLDS, simulated_rates

COMMITTED: dict[str, Any] = json.loads(FIGURES.read_text(encoding="utf-8"))
SIMULATED = COMMITTED["simulated"]
VARIANCE = ("event variance x2", "event variance x4")
SAME_DAY = ("same day, r = .1", "same day, r = .1, event variance x2")
VALID = {
    "cross_sectional": ("null", *VARIANCE),
    "patell": ("null",),
    "standardised": ("null", *VARIANCE),
    "dependence_adjusted": ("null", *VARIANCE, *SAME_DAY, "within 40 sessions, r = .1"),
    "dependence_adjusted_patell": ("null", "same day, r = .1", "within 40 sessions, r = .1"),
    "rank_event_variance": ("null", *VARIANCE, *SAME_DAY),
    "generalised_rank_z": ("null", *VARIANCE),
    "skewness_transformed": ("null", *VARIANCE, "skewed residuals"),
    "deal_bootstrap": ("null", *VARIANCE, "skewed residuals"),
}
INVALID = {
    "cross_sectional": SAME_DAY,
    "patell": (*VARIANCE, *SAME_DAY),
    "standardised": SAME_DAY,
    "dependence_adjusted_patell": VARIANCE,
    "rank_event_variance": ("skewed residuals",),
    "generalised_rank_z": (*SAME_DAY, "skewed residuals"),
    "skewness_transformed": SAME_DAY,
    "deal_bootstrap": SAME_DAY,
}


def pairs(table: dict[str, tuple[str, ...]]) -> list[tuple[str, str]]:
    return [(test, world) for test, worlds in table.items() for world in worlds]


@pytest.mark.parametrize(("test", "world"), pairs(VALID))
def test_tests_that_hold(test: str, world: str) -> None:
    assert abs(SIMULATED[world][test]["rate"] - LEVEL) <= 0.015


@pytest.mark.parametrize(("test", "world"), pairs(INVALID))
def test_tests_that_do_not(test: str, world: str) -> None:
    assert SIMULATED[world][test]["rate"] > 0.1


def test_power_rises_with_the_effect() -> None:
    for test in VALID:
        rates = [SIMULATED[world][test]["rate"] for world in ("null", "effect of 0.5%")]
        rates.append(SIMULATED["effect of 1%"][test]["rate"])
        assert rates == sorted(rates)
        assert rates[2] > 0.4


def test_real_prices_lie_inside_the_bands_of_other_code() -> None:
    cells = [cell for tests in COMMITTED["real_prices"].values() for cell in tests.values()]
    assert len(cells) == 42
    for cell in cells:
        assert cell["band"][0] <= cell["rate"] <= cell["band"][1]


@pytest.mark.parametrize("world", ["event variance x2", "same day, r = .1"])
def test_the_figures_are_those_of_this_code(world: str) -> None:
    """150 fresh draws within four standard errors of the difference."""
    fresh, draws = simulated_rates(WORLDS[world], 150, seed=1), COMMITTED["replications"]
    assert set(fresh) == set(SIMULATED[world])
    for test, cell in fresh.items():
        known = SIMULATED[world][test]["rate"]
        error = np.sqrt(known * (1 - known) * (1 / 150 + 1 / draws))
        assert abs(cell["rate"] - known) <= 4 * error


@pytest.fixture(scope="module")
def one_date() -> dict[str, dict[str, Any]]:
    """The committed rates of real prices with every deal on one date."""
    content: dict[str, Any] = json.loads(one_date_size.FIGURES.read_text())
    rates: dict[str, dict[str, Any]] = content["rates"]
    return rates


def test_one_date_of_real_prices_keeps_the_leading_tests_size(
    one_date: dict[str, dict[str, Any]],
) -> None:
    """Where a test was said not to hold it rejects too often; where it was, not by much."""
    lead = one_date["dependence_adjusted"]
    assert lead["held"] == 1.0
    assert abs(lead["rate"] - 0.05) < 4 * lead["standard_error"]
    for key in ("standardised", "patell", "cross_sectional", "signed_rank", "time_series"):
        held, not_held = one_date[key]["where_it_held"], one_date[key]["where_not"]
        assert not_held["rate"] > 0.05 + 2 * not_held["standard_error"], key
        assert held["rate"] < 0.05 + 4 * held["standard_error"], key
    # Two rank tests are a little liberal with twenty deals of one date, and are held to that.
    assert max(item["rate"] for item in one_date.values()) < 0.11


def test_the_one_date_figures_are_those_of_this_code(one_date: dict[str, dict[str, Any]]) -> None:
    draws = 150
    live = one_date_size.rates(one_date_size.samples(draws, seed=3))
    for key, known in one_date.items():
        error = max(0.02, float(np.sqrt(known["rate"] * (1 - known["rate"]) / draws)))
        assert abs(float(live[key]["rate"]) - known["rate"]) < 4 * error, key
