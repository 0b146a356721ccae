"""The measurement variance of the outcome reaches the design row by row."""

from __future__ import annotations

import numpy as np
import pytest

from pipeline.core.design import Design
from tests.characteristics.test_designs_made import RECIPES, ROLES, candidates, deals, prepare

MEASURED = {"run_up": np.arange(60.0)}


def made(spread: object) -> tuple[Design, np.ndarray]:
    table = deals()
    if spread is not None:
        table["car_m1_1_std_dev"] = spread
    found = prepare(table, candidates(table), RECIPES, MEASURED, {}, ROLES)
    kept = table.set_index("deal_id").loc[list(found.design.rows)]
    return found.design, kept.get("car_m1_1_std_dev", kept["cap"]).to_numpy()


def test_squares_of_the_deals_own_errors() -> None:
    design, spread = made(np.linspace(0.01, 0.05, 60))
    assert design.outcome_variance is not None
    np.testing.assert_allclose(design.outcome_variance, spread**2, rtol=1e-14)


@pytest.mark.parametrize("spread", [None, [np.nan, *[0.02] * 59], "0.02 or so"])
def test_none_unless_every_deal_has_one(spread: object) -> None:
    assert made(spread)[0].outcome_variance is None
