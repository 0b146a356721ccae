"""A small live run: what is offered holds its level, what is not is seen to fail."""

from __future__ import annotations

import json

import pytest

from tests.benchmarks.draws import rates
from tests.benchmarks.instruments_size import DESIGNS, DRAWS, FIGURES, measure

LIVE = 40


@pytest.fixture(scope="module")
def committed() -> dict[tuple[str, str], float]:
    return rates(json.loads(FIGURES.read_text(encoding="utf-8")))


def test_committed_figures_hold_what_the_sets_claim(
    committed: dict[tuple[str, str], float],
) -> None:
    """Within four Monte-Carlo standard errors of the nominal rate, or below it."""
    allowed = 0.05 + 4 * (0.05 * 0.95 / DRAWS) ** 0.5
    assert {design for design, _ in committed} == set(DESIGNS)
    two_way = "two-way errors, wild bootstrap"
    for (design, procedure), rate in committed.items():
        if procedure == two_way:
            # Nearer to its level than t, and not quite at it with twelve clusters either way.
            assert rate < min(0.1, committed[design, "two-way errors, t(min G - 1)"])
            continue
        if procedure == "Anderson-Rubin" or ("bootstrap" in procedure and "not" not in procedure):
            assert rate <= allowed, (design, procedure)
    for groups in (8, 12):
        for L in ("1 weak instrument", "2 weak instruments", "5 weak instruments"):
            shortcut = "Anderson-Rubin, CR1 and F(L, G - 1) (not offered)"
            assert committed[f"{L}, {groups} acquirers", shortcut] > allowed
    assert committed["5 weak instruments, 30 acquirers", "two stages, t(G - 1)"] > allowed


@pytest.mark.parametrize(
    "design", ["2 weak instruments, 8 acquirers", "least squares, 8 acquirers and 20 months"]
)
def test_a_live_run_agrees_with_the_committed_figures(
    design: str, committed: dict[tuple[str, str], float]
) -> None:
    for key, rate in rates(measure(design, LIVE)).items():
        known = committed[key]
        error = (max(known * (1 - known), 0.05 * 0.95) * (1 / LIVE + 1 / DRAWS)) ** 0.5
        assert abs(rate - known) < 4 * error, key
