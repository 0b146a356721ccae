"""Pseudo-events: far from every announcement, deals of one date together, the same every time."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from pipeline.core.prices import PricePanel
from pipeline.core.window import Window
from pipeline.returns import placebo
from pipeline.returns.expected import market_model
from pipeline.returns.measure import measure
from pipeline.returns.placebo import (
    draw_shifts,
    free_to_move,
    pseudo_events,
    without_announcements,
)
from tests.returns.panels import invented_panel

WINDOW, ESTIMATION = Window(-1, 1), Window(-100, -11)


@pytest.fixture(scope="module")
def panels() -> dict[str, PricePanel]:
    return {"XLON": invented_panel(sessions=900)}


@pytest.fixture(scope="module")
def located(panels: dict[str, PricePanel]) -> pd.DataFrame:
    days = panels["XLON"].sessions
    position = np.array([400, 400, 450, 500, 700])
    return pd.DataFrame(
        {
            "deal_id": [f"D{at}" for at in range(5)],
            "security": ["S00", "S01", "S02", "S00", "S03"],
            "exchange": "XLON",
            "column": [0, 1, 2, 0, 3],
            "position": position,
            "day_zero": days[position],
        }
    )


def test_deals_of_one_date_move_together(located: pd.DataFrame) -> None:
    shifts = draw_shifts(located["day_zero"], 300, 60, 1)
    assert shifts.shape == (300, 5)
    assert (shifts[:, 0] == shifts[:, 1]).all()
    assert (shifts[:, 0] != shifts[:, 2]).any()
    assert (np.abs(shifts) >= 60).all()
    assert {-1, 1} == set(np.sign(shifts).ravel())


def test_no_draw_comes_near_an_announcement_of_the_company(
    located: pd.DataFrame, panels: dict[str, PricePanel]
) -> None:
    shifts = draw_shifts(located["day_zero"], 300, 60, 1)
    free = free_to_move(located, shifts, 60, panels, WINDOW)
    target = located["position"].to_numpy() + shifts
    for row, security in enumerate(located["security"]):
        own = located.loc[located["security"] == security, "position"].to_numpy()
        near = (np.abs(target[:, row, None] - own) < 60).any(axis=1)
        inside = (target[:, row] >= 2) & (target[:, row] + 1 < 900)
        np.testing.assert_array_equal(free[:, row], inside & ~near)
    assert not free[:, 0].all(), "the company's other deal must stand in the way of some draws"


def test_samples_are_the_returns_of_the_moved_dates(
    located: pd.DataFrame, panels: dict[str, PricePanel]
) -> None:
    how: dict[str, object] = {"draws": 6, "distance": 60, "minimum_observations": 60, "seed": 5}
    how |= {"announced": located, "around": 5}
    drawn = list(
        pseudo_events("m", market_model, located, panels, ESTIMATION, WINDOW, **how)  # type: ignore[arg-type]
    )
    assert len(drawn) == 6
    again = list(
        pseudo_events("m", market_model, located, panels, ESTIMATION, WINDOW, **how)  # type: ignore[arg-type]
    )
    shifts = draw_shifts(located["day_zero"], 6, 60, 5)
    days = panels["XLON"].sessions
    for at, ((rows, one), (_, other)) in enumerate(zip(drawn, again, strict=True)):
        assert one.deals == tuple(located["deal_id"].iloc[rows])
        np.testing.assert_array_equal(one.returns, other.returns)
        for row, deal in enumerate(one.deals):
            place = int(deal[1:])
            moved = located["position"].iloc[place] + shifts[at, place]
            assert one.days[row, 1] == days[moved]


def test_a_sample_is_the_fit_of_the_deals_moved(
    located: pd.DataFrame, panels: dict[str, PricePanel], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Draw by draw through the ordinary fit; the same whatever the batch."""
    how: dict[str, object] = {"draws": 7, "distance": 60, "minimum_observations": 60, "seed": 5}
    how |= {"announced": located, "around": 5}
    position = located["position"].to_numpy()
    shifts = draw_shifts(located["day_zero"], 7, 60, 5)
    free = free_to_move(located, shifts, 60, panels, WINDOW)
    quiet = without_announcements(panels, located, 5)
    for events in (1, 12, 4_000):
        monkeypatch.setattr(placebo, "BATCH_EVENTS", events)
        drawn = pseudo_events("m", market_model, located, panels, ESTIMATION, WINDOW, **how)  # type: ignore[arg-type]
        for at, (_, sample) in enumerate(drawn):
            moved = located.assign(position=position + shifts[at])[free[at]]
            masked = np.zeros((len(moved), len(ESTIMATION)), dtype=np.bool_)
            plain = measure("m", market_model, moved, masked, quiet, ESTIMATION, WINDOW)
            kept = plain.select((plain.observations >= 60) & plain.complete(WINDOW))
            assert sample.deals == kept.deals
            np.testing.assert_array_equal(sample.returns, kept.returns)
            np.testing.assert_array_equal(sample.estimation_returns, kept.estimation_returns)
            np.testing.assert_array_equal(sample.estimation_days, kept.estimation_days)
        assert at == 6


def test_the_real_reactions_are_not_in_the_windows_of_the_pseudo_events(
    located: pd.DataFrame, panels: dict[str, PricePanel]
) -> None:
    """A jump of 40% at each real announcement changes nothing on the dates without one."""
    panel = panels["XLON"]
    jumped = panel.returns.copy(order="F")
    jumped[located["position"], located["column"]] += 0.4
    shocked = {"XLON": replace(panel, returns=jumped)}
    how: dict[str, object] = {"draws": 20, "distance": 60, "minimum_observations": 60, "seed": 5}
    how |= {"announced": located, "around": 5}
    for (_, calm), (_, other) in zip(
        pseudo_events("m", market_model, located, panels, ESTIMATION, WINDOW, **how),  # type: ignore[arg-type]
        pseudo_events("m", market_model, located, shocked, ESTIMATION, WINDOW, **how),  # type: ignore[arg-type]
        strict=True,
    ):
        np.testing.assert_array_equal(calm.residual_variance, other.residual_variance)
        np.testing.assert_array_equal(calm.returns, other.returns)
