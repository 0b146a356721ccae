"""The committed rates of windows, calendar time, one date and buy-and-hold, and a live draw."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest

from tests.benchmarks import event_models_size as figures

RATES: dict[str, Any] = json.loads(figures.FIGURES.read_text(encoding="utf-8"))["rates"]
WINDOWS = RATES["several windows, any of four significant"]
CALENDAR = RATES["calendar time, 60 sessions"]
DATE = RATES["one date"]
HOLDING = RATES["buy-and-hold over a matched company"]


def held(entry: dict[str, float], slack: float = 0.01) -> bool:
    """Whether a rate is the nominal one within four Monte-Carlo errors and a point."""
    return abs(entry["rate"] - figures.LEVEL) <= 4 * entry["standard_error"] + slack


@pytest.mark.parametrize(
    "entry",
    [
        WINDOWS["50 deals on 300 dates"]["Romano-Wolf"],
        CALENDAR["independent companies"]["every session alike"],
        CALENDAR["r = .1"]["every session alike"],
        DATE["30 deals, r = .2"]["joint_date"],
        DATE["90 deals, r = .2"]["joint_date"],
        DATE["30 deals, r = .2"]["each deal zero"],
        DATE["90 deals, r = .2"]["each deal zero"],
        HOLDING["200 deals"]["t"],
    ],
)
def test_rates_that_hold(entry: dict[str, float]) -> None:
    assert held(entry)


@pytest.mark.parametrize(
    "entry",
    [
        WINDOWS["50 deals on 300 dates"]["unadjusted"],
        CALENDAR["r = .1"]["deals taken as independent"],
        DATE["30 deals, r = .2"]["standardised"],
    ],
)
def test_what_ignores_number_or_dependence_is_seen_to_fail(entry: dict[str, float]) -> None:
    assert entry["rate"] > 2 * figures.LEVEL


def test_the_resampled_step_down_finds_no_less_than_holm() -> None:
    found = WINDOWS["effect of 1%, 300 dates"]
    assert found["Romano-Wolf"]["rate"] >= found["Holm"]["rate"] - 0.01
    assert found["Romano-Wolf"]["rate"] > 0.5


def test_the_figures_are_those_of_this_code(monkeypatch: pytest.MonkeyPatch) -> None:
    """100 fresh draws within four standard errors of the difference."""
    monkeypatch.setattr(figures, "REPLICATIONS", 100)
    fresh, known = figures.date_world(30, 0.2), DATE["30 deals, r = .2"]
    assert set(fresh) == set(known)
    for key, entry in known.items():
        rate = entry["rate"]
        spread = np.sqrt(rate * (1 - rate) * (1 / 100 + 1 / 2000))
        assert abs(fresh[key]["rate"] - rate) <= 4 * spread + 1e-9, key
