"""Left-out deals by algebra against refits."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.scrutiny import influence
from pipeline.scrutiny.on_deals import KINDS
from tests.estimators.designs import deals, without

PLAIN = FitOptions()


@pytest.fixture(scope="module")
def design() -> Design:
    whole = without(deals(candidates=300), "selection")
    return replace(whole, outcome_variance=np.full(whole.n, 1e-4))


@pytest.mark.parametrize("key", KINDS)
def test_equals_a_refit_for_every_group(design: Design, key: str) -> None:
    kind = KINDS[key]
    moments = influence.moments_of(design, effects=kind.effects, instruments=kind.instruments)
    place = np.flatnonzero(moments.kept)
    half = np.arange(design.n) % 2
    for name, codes in influence.dimensions(design, moments.kept, {"half": half}).items():
        found = influence.leave_out(moments, codes, name)
        assert found.full == pytest.approx(_refit(kind, design), abs=1e-10)
        for at in np.unique(np.linspace(0, len(found.groups) - 1, 7).astype(int)):
            stays = np.ones(design.n, dtype=bool)
            stays[place[codes == found.groups[at]]] = False
            refit = _refit(kind, influence.rows_of(design, stays))
            assert found.effects[at] == pytest.approx(refit, abs=1e-10), (name, at)


def _refit(kind: object, design: Design) -> float:
    try:
        return float(kind.fit(design, PLAIN).term(design.treatment)["coefficient"])  # type: ignore[attr-defined]
    except (InputProblem, EstimationFailed):
        return float("nan")


def test_a_group_that_holds_all_the_treated_leaves_no_answer(design: Design) -> None:
    moments = influence.moments_of(design, effects=False, instruments=False)
    codes = design.X[:, 1].astype(np.int64)
    found = influence.leave_out(moments, codes, "treated")
    assert np.isnan(found.effects).all()


def test_refitting_gives_the_same(design: Design) -> None:
    moments = influence.moments_of(design, effects=True, instruments=True)
    codes = design.effects["year"]
    fast = influence.leave_out(moments, codes[moments.kept], "year")
    slow = influence.leave_out_refitting(
        design, codes, "year", lambda part: _refit(KINDS["two_stage_least_squares"], part)
    )
    assert slow.effects == pytest.approx(fast.effects, abs=1e-10)
    assert slow.full == pytest.approx(fast.full, abs=1e-10)
    assert slow.largest == fast.largest
    assert slow.sizes.sum() == design.n


def test_candidates_are_not_cut() -> None:
    whole = deals(candidates=200)
    with pytest.raises(ValueError, match="candidates"):
        influence.leave_out_refitting(whole, whole.effects["year"], "year", lambda _: 0.0)


def test_too_many_levels_are_said(design: Design) -> None:
    rng = np.random.default_rng(0)
    n = 1000
    big = Design(
        y=rng.normal(size=n),
        X=np.column_stack([np.ones(n), rng.normal(size=n)]),
        names=("constant", "D"),
        treatment="D",
        rows=tuple(map(str, range(n))),
        outcome="y",
        effects={"pair": np.arange(n) // 2},
    )
    with pytest.raises(ValueError, match="levels"):
        influence.moments_of(big, effects=True, instruments=False)


def test_few_planted_deals_are_found_and_turn_the_sign() -> None:
    """Six wild deals make the effect; without them it has the other sign."""
    rng = np.random.default_rng(8)
    n = 200
    D = rng.normal(size=n)
    y = 0.2 * D + 0.2 * rng.normal(size=n)
    D[:6], y[:6] = 4.0, -15.0
    design = Design(
        y=y,
        X=np.column_stack([np.ones(n), D]),
        names=("constant", "D"),
        treatment="D",
        rows=tuple(f"deal {at}" for at in range(n)),
        outcome="y",
    )
    moments = influence.moments_of(design, effects=False, instruments=False)
    found = influence.fewest_to_turn(moments, design.rows)
    assert found.turned
    assert set(found.deals) <= set(design.rows[:6])
    assert found.share == len(found.deals) / n
    stays = np.array([row not in found.deals for row in design.rows])
    refit = _refit(KINDS["ols"], influence.rows_of(design, stays))
    assert found.effect == pytest.approx(refit, abs=1e-10)
    before = np.array([row not in found.deals[:-1] for row in design.rows])
    assert _refit(KINDS["ols"], influence.rows_of(design, before)) < 0 < refit


def test_a_solid_effect_is_not_turned() -> None:
    rng = np.random.default_rng(9)
    n = 150
    D = rng.normal(size=n)
    design = Design(
        y=D + 0.1 * rng.normal(size=n),
        X=np.column_stack([np.ones(n), D]),
        names=("constant", "D"),
        treatment="D",
        rows=tuple(map(str, range(n))),
        outcome="y",
    )
    moments = influence.moments_of(design, effects=False, instruments=False)
    found = influence.fewest_to_turn(moments, design.rows)
    assert not found.turned
    assert found.share == pytest.approx(0.2)


def test_groups_are_named_by_their_deals() -> None:
    rows = ("A", "B", "C", "D", "E")
    codes = np.array([0, 1, 0, 0, 0])
    assert influence.named_by(rows, codes, 0) == "A, C, D and 1 more"
    assert influence.named_by(rows, codes, 1) == "B"
