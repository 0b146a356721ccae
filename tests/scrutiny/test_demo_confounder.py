"""The demo's own hidden factor, known to whoever made the data, against what scrutiny says."""

from __future__ import annotations

import importlib
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from pipeline.core.clock import Clock
from pipeline.core.design import Design, FitOptions
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.stages import parts_of
from pipeline.flow.explained import prepared_of
from pipeline.flow.measured import measure_deals
from pipeline.scrutiny import breakdown, confounder, exclusion
from pipeline.scrutiny.ground import Ground, ground_of, partial_r_squared
from pipeline.study.load import load_study

ROOT = Path(__file__).resolve().parents[2]
OPTIONS = FitOptions(cluster=True)


@dataclass(frozen=True, slots=True, eq=False)
class Demo:
    """The demo's design, its hidden overvaluation a row, and the effect it was made with."""

    design: Design
    hidden: np.ndarray
    effect: float
    ground: Ground


@pytest.fixture(scope="module")
def demo() -> Demo:
    study = load_study(ROOT / "configs" / "demo.toml")
    prepared = prepared_of(study, measure_deals(study, Clock(lambda _: None)))
    assert prepared is not None
    sys.path.insert(0, str(ROOT / "data_demo"))
    script = importlib.import_module("make_demo")
    params = importlib.import_module("demo_params").Parameters()
    tables = importlib.import_module("demo_tables")
    world = script.simulate(params, 3040)
    value = world.years.overvaluation[world.plan.company, world.plan.year]
    by_deal = dict(zip(tables.deal_ids(world.plan), value, strict=True))
    design = prepared.design
    hidden = np.array([by_deal[row] for row in design.rows])
    return Demo(design, hidden, params.effect_shares, ground_of(design, OPTIONS))


def strength(demo: Demo) -> tuple[float, float]:
    g = demo.ground
    with_outcome = partial_r_squared(g.y, demo.hidden, np.column_stack([g.D, g.W]))
    return partial_r_squared(g.D, demo.hidden, g.W), with_outcome


def test_a_confounder_weaker_than_the_real_one_overturns_least_squares(demo: Demo) -> None:
    """The value at which significance ends lies below what the hidden factor explains."""
    g = demo.ground
    t = g.estimate / g.classical
    reach = confounder.critical_reach(g.df, 0.95, g.robust / g.classical, g.robust_df)
    value = confounder.robustness_value(t, g.df, reach=reach)
    d, y = strength(demo)
    worst = confounder.bias(1.0, 1.0, np.array([d]), np.array([y]))[0]
    needed = confounder.bias(1.0, 1.0, np.array([value]), np.array([value]))[0]
    assert 0 < needed < worst


def test_its_strength_tells_the_bias_exactly(demo: Demo) -> None:
    g = demo.ground
    long = np.linalg.lstsq(np.column_stack([g.D, g.W, demo.hidden]), g.y)[0][0]
    d, y = strength(demo)
    told = confounder.adjusted_estimate(g, np.array([d]), np.array([y]))[0]
    assert told == pytest.approx(long, abs=1e-10)
    assert abs(long - demo.effect) < 0.25 * abs(g.estimate - demo.effect)


def test_the_instrumented_finding_survives_violations_up_to_a_share(demo: Demo) -> None:
    """Not that the effect differs from zero: its set holds zero. That least squares overstates it.

    The statement holds while the instruments do a tenth of what they do by another way, falls at
    the share found, and with the error of both estimates holds for longer still.
    """
    parts = parts_of(demo.design, FitOptions())
    other = breakdown.least_squares_of(parts)
    assert other < demo.effect < 0
    assert breakdown.breakdown_share(parts, 0.95) == 0.0
    assert breakdown.breakdown_share_anderson_rubin(parts, 0.95) == 0.0
    share = breakdown.breakdown_share_anderson_rubin(parts, 0.95, other)
    assert 0.1 < share < breakdown.breakdown_share(parts, 0.95, other) < 1
    assert share < breakdown.share_that_reconciles(parts, 0.95)
    pi = np.abs(exclusion.reduced_form(parts))
    for s, holds in ((0.98 * share, False), (1.02 * share, True)):
        found = exclusion.union_of_anderson_rubin(parts, -s * pi, s * pi, 0.95)
        assert found.covers(other) == holds
        assert found.covers(demo.effect)


def test_the_true_effect_is_within_the_union_at_every_share(demo: Demo) -> None:
    """The demo's instruments are clean: allowing violations only widens what holds the truth."""
    parts = parts_of(demo.design, FitOptions())
    pi = np.abs(exclusion.reduced_form(parts))
    last = two_stage_least_squares(demo.design, FitOptions()).sets["wald"]
    assert last.covers(demo.effect)
    for share in (0.1, 0.25, 0.5):
        wider = exclusion.union_of_intervals(parts, -share * pi, share * pi, 0.95)
        assert wider.low < last.low < demo.effect < last.high < wider.high
        last = wider
