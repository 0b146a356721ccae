"""The whole list of deals with the treatment, outcomes seen or not, and what is refused."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from pipeline.characteristics.design import Roles
from pipeline.characteristics.observed import observed_deals
from pipeline.characteristics.recipes import Recipe
from pipeline.characteristics.universe import missing_controls, without_exclusion
from pipeline.core.findings import InputProblem
from pipeline.core.window import Window

ROLES = Roles("car", "CAR[-1, +1]", "shares", clusters=("security",))


def deal_list() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "deal_id": list("abcdefgh"),
            "security": list("xxyyzzww"),
            "shares": [1.0, 0, 1, 0, 1, 0, np.nan, 1],
            "completed": [1.0, 1, 1, 1, 0, 1, 1, 1],
            "sector": ["p", "q"] * 4,
        }
    )


def measured() -> pd.DataFrame:
    found = pd.DataFrame({"deal_id": list("hgfedcb"), "car": np.arange(7) / 100})
    return found.assign(car=found["car"].where(found["deal_id"] != "d"))


def refused(**changes: object) -> str:
    parts = {"flag": "completed", "recipes": {}, "listed": deal_list(), **changes}
    with pytest.raises(InputProblem) as caught:
        observed_deals(
            parts["listed"],
            measured(),
            parts["recipes"],
            ROLES,
            str(parts["flag"]),
            [],  # type: ignore[arg-type]
        )
    return caught.value.findings[0].rule


def test_seen_deals_keep_their_own_outcome() -> None:
    found = observed_deals(deal_list(), measured(), {}, ROLES, "", ["sector"])
    design, rows = found.design, found.design.selection
    assert rows is not None
    # g has no treatment; a was not measured and d has no outcome.
    assert design.rows == ("b", "c", "e", "f", "h")
    np.testing.assert_allclose(design.y, [0.06, 0.05, 0.03, 0.02, 0.0])
    assert rows.selected.tolist() == [False, True, True, False, True, True, True]
    assert rows.outcome_row.tolist() == [-1, 0, 1, -1, 2, 3, 4]
    assert rows.W[:, 1].tolist() == [1, 0, 1, 0, 1, 0, 1]
    assert found.cells.tolist() == [0, 1, 0, 1, 0, 1, 1]
    assert rows.clusters["security"].tolist() == [1, 1, 2, 2, 3, 3, 0]


def test_a_flag_takes_outcomes_out_of_sight() -> None:
    found = observed_deals(deal_list(), measured(), {}, ROLES, "completed", [])
    assert found.design.rows == ("b", "c", "f", "h")
    assert set(found.cells) == {0}


def test_refusals() -> None:
    price = {"shares": Recipe("shares", "price", measure="beta", window=Window(-50, -10))}
    assert refused(recipes=price) == "treatment_not_known"
    assert refused(listed=deal_list().assign(completed=0.5)) == "flag_not_binary"
    assert refused(listed=deal_list().assign(completed=np.nan)) == "flag_not_binary"
    assert refused(listed=deal_list().assign(shares=1.0)) == "no_variation"
    assert refused(listed=deal_list().drop(columns="shares")) == "unknown_variable"


def test_company_variables_of_the_outcome_belong_in_the_selection_equation() -> None:
    candidates = pd.DataFrame({"cap": [1.0, 2.0], "cash": [0.1, np.nan], "blank": [np.nan] * 2})
    recipes = {
        "size": Recipe("size", "column", ("cap",), log=True),
        "relative": Recipe("relative", "ratio", ("value", "cap")),
        "run_up": Recipe("run_up", "price", measure="run_up", window=Window(-42, -12)),
        "beta": Recipe("beta", "price", measure="beta", window=Window(-42, -12)),
    }
    measured = {"run_up": np.array([0.1, 0.2])}
    controls = ["size", "relative", "run_up", "beta", "cash", "blank", "abroad"]
    found = missing_controls(candidates, recipes, measured, controls, ["cash"])
    assert [finding.got.split("'")[1] for finding in found] == ["size", "run_up"]
    assert {finding.rule for finding in found} == {"selection_lacks_control"}


def test_no_excluded_variable_is_a_warning() -> None:
    (finding,) = without_exclusion(())
    assert (finding.rule, finding.severity.value) == ("no_exclusion", "warning")
    assert without_exclusion(("wave",)) == []
