"""A small live run: what is offered holds its level, what is not is seen to fail."""

from __future__ import annotations

import json

import pytest

from tests.benchmarks.draws import rates
from tests.benchmarks.weights_and_clusters_size import DESIGNS, DRAWS, FIGURES, measure

LIVE = 150


@pytest.fixture(scope="module")
def committed() -> dict[tuple[str, str], float]:
    return rates(json.loads(FIGURES.read_text(encoding="utf-8")))


def test_committed_figures_hold_what_the_columns_claim(
    committed: dict[tuple[str, str], float],
) -> None:
    """Four Monte-Carlo standard errors of 1,000 draws are 2.8 points."""
    allowed = 0.05 + 4 * (0.05 * 0.95 / DRAWS) ** 0.5
    for groups in (6, 8, 12, 30):
        design = f"{groups} acquirers"
        for procedure in ("CR2, Satterthwaite", "CR3, t(G - 1)", "wild bootstrap interval"):
            assert committed[design, procedure] <= allowed
        assert committed[design, "CR1, normal (not offered)"] > allowed
    noise = "returns measured with uneven error"
    assert committed[noise, "known variances, HC3"] <= allowed
    assert committed[noise, "weights 1/omega, classical (not offered)"] > allowed
    weak = "five weak instruments, 50 acquirers"
    assert committed[weak, "two-stage least squares, t interval"] > allowed
    assert committed[weak, "LIML, t interval"] <= allowed
    assert {design for design, _ in committed} == set(DESIGNS)


@pytest.mark.parametrize("design", ["8 acquirers", "returns measured with uneven error"])
def test_a_live_run_agrees_with_the_committed_figures(
    design: str, committed: dict[tuple[str, str], float]
) -> None:
    for key, rate in rates(measure(design, LIVE)).items():
        known = committed[key]
        error = (max(known * (1 - known), 0.05 * 0.95) * (1 / LIVE + 1 / DRAWS)) ** 0.5
        assert abs(rate - known) < 4 * error
