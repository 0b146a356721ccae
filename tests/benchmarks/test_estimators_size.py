"""A small live run of the size figures: valid procedures hold, the others are seen to fail."""

from __future__ import annotations

import json

import pytest

from tests.benchmarks.estimators_size import FIGURES, measure

DRAWS = 300


def rates(design: str) -> dict[str, float]:
    return {
        str(row["procedure"]): float(row["rate"])  # type: ignore[arg-type]
        for row in measure(design, DRAWS)
        if "procedure" in row
    }


@pytest.mark.parametrize(
    ("design", "valid", "invalid"),
    [
        ("least squares, unequal variances, n = 80", "hc3", "classical"),
        ("three weak instruments", "anderson_rubin", "t interval"),
        ("one weak instrument, 40 acquirers", "headline set", "t interval"),
        ("selection, 800 candidates", "two-step covariance", "least squares on deals"),
    ],
)
def test_nominal_size(design: str, valid: str, invalid: str) -> None:
    found = rates(design)
    # Four Monte-Carlo standard errors of 300 draws at 5% are five points.
    assert found[valid] <= 0.05 + 0.05
    assert found[invalid] > 0.05 + 0.05


def test_committed_figures_are_those_of_the_designs() -> None:
    rows = json.loads(FIGURES.read_text(encoding="utf-8"))
    assert {row["draws"] for row in rows if "draws" in row} == {4000}
    chosen = {
        row["procedure"]: row
        for row in rows
        if row["design"] == "one strong instrument" and "procedure" in row
    }
    live = rates("one strong instrument")
    assert set(live) == set(chosen)
    # 300 draws against 4,000 of the same design: four standard errors of the difference.
    allowed = 4 * (0.05 * 0.95 * (1 / DRAWS + 1 / 4000)) ** 0.5
    for procedure, rate in live.items():
        assert abs(rate - chosen[procedure]["rate"]) < allowed
