"""Variables made by declared steps. Winsorising on the rows used, before interactions: common
practice, no source; quantiles checked against pandas and scipy."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy.stats import mstats

from pipeline.characteristics.recipes import (
    Recipe,
    finish,
    impossible,
    makeable,
    needed,
    ordered,
    raw_values,
    raw_variables,
    winsorised,
)
from pipeline.core.findings import Finding


@pytest.fixture
def table() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "deal_id": ["D1", "D2", "D3", "D4"],
            "security": ["A", "A", "B", "A"],
            "year": [2019.0, 2020.0, 2020.0, 2022.0],
            "value": [10.0, 20.0, np.nan, 5.0],
            "size": [100.0, 0.0, 50.0, 2.0],
            "payment": ["cash", "shares", "", "cash"],
        }
    )


@pytest.mark.parametrize(
    ("recipe", "wanted"),
    [
        (Recipe("v", "column", ("value",)), [10, 20, np.nan, 5]),
        (Recipe("v", "column", ("value",), log=True), np.log([10, 20, np.nan, 5])),
        (Recipe("v", "ratio", ("value", "size")), [0.1, np.inf, np.nan, 2.5]),
        (Recipe("v", "indicator", ("payment",), equals="cash"), [1, 0, np.nan, 1]),
        (Recipe("v", "indicator", ("size",), equals=2), [0, 0, 0, 1]),
        (Recipe("v", "indicator", ("value",), above=9.0), [1, 1, np.nan, 0]),
        # The company's own value of the year before; 2021 is missing for the last row.
        (Recipe("v", "column", ("value",), lag=1), [np.nan, 10, np.nan, np.nan]),
        (Recipe("v", "column", ("value",), lag=2), [np.nan, np.nan, np.nan, 20]),
        (Recipe("v", "price"), [1, 2, 3, 4]),
    ],
)
def test_sources_and_steps_before_the_sample(
    recipe: Recipe, wanted: list[float], table: pd.DataFrame
) -> None:
    measured = {"v": np.array([1.0, 2.0, 3.0, 4.0])}
    np.testing.assert_allclose(raw_values(recipe, table, measured, table), wanted)


@pytest.mark.parametrize("share", [0.01, 0.05, 0.2])
def test_winsorising_sets_to_quantiles_of_the_rows_used(share: float) -> None:
    """pandas' clip at its quantiles; scipy's winsorising, whose ranks are whole on 101 values."""
    stream = np.random.default_rng(1)
    values = stream.standard_t(2, 120)
    used = np.arange(120) < 101
    values[used] = stream.permutation(values[used])
    found = winsorised(values, used, share)
    own = pd.Series(values[used])
    known = own.clip(own.quantile(share), own.quantile(1 - share))
    np.testing.assert_allclose(found[used], known, rtol=1e-12)
    np.testing.assert_allclose(
        np.sort(found[used]), np.sort(mstats.winsorize(values[used], (share, share))), rtol=1e-12
    )
    low, high = own.quantile(share), own.quantile(1 - share)
    np.testing.assert_allclose(found[~used], np.clip(values[~used], low, high), rtol=1e-12)


def test_steps_on_the_sample_come_in_order() -> None:
    """Winsorise, then standardise, then multiply what came of both."""
    raw = {"a": np.array([1.0, 2.0, 3.0, 100.0, 7.0]), "b": np.array([1.0, 0.0, 1.0, 1.0, 0.0])}
    used = np.array([True, True, True, True, False])
    recipes = [
        Recipe("a", "column", ("a",), winsorise=0.25, standardise=True),
        Recipe("ab", "interaction", ("a", "b")),
    ]
    done = finish(recipes, raw, used)
    clipped = np.clip(raw["a"], *np.quantile(raw["a"][:4], [0.25, 0.75]))
    scaled = (clipped - clipped[:4].mean()) / clipped[:4].std(ddof=1)
    np.testing.assert_allclose(done["a"], scaled)
    np.testing.assert_allclose(done["ab"], scaled * raw["b"])
    np.testing.assert_array_equal(raw["a"], [1, 2, 3, 100, 7])


def test_a_row_not_used_does_not_move_the_others() -> None:
    raw = {"a": np.array([1.0, 2.0, 3.0, 4.0, 1e9])}
    recipe = [Recipe("a", "column", ("a",), winsorise=0.1, standardise=True)]
    used = np.array([True] * 4 + [False])
    without = finish(recipe, {"a": raw["a"][:4]}, used[:4])
    np.testing.assert_allclose(finish(recipe, raw, used)["a"][:4], without["a"])


def test_interactions_come_after_what_they_multiply() -> None:
    book = {
        "abc": Recipe("abc", "interaction", ("ab", "c")),
        "ab": Recipe("ab", "interaction", ("a", "b")),
        "a": Recipe("a", "column", ("a",)),
    }
    names = [recipe.name for recipe in ordered(book)]
    assert names.index("ab") < names.index("abc")
    assert names[0] == "a"
    assert needed(["abc", "a"], book) == ["a", "b", "ab", "c", "abc"]
    raw = dict.fromkeys(("a", "b"), np.ones(2))
    assert [recipe.name for recipe in makeable(book, raw)] == ["a", "ab"]
    circle = {
        "x": Recipe("x", "interaction", ("y", "a")),
        "y": Recipe("y", "interaction", ("x", "a")),
    }
    with pytest.raises(ValueError, match="circle"):
        ordered(circle)


def verdict(recipe: Recipe, table: pd.DataFrame) -> list[Finding]:
    return impossible(recipe, table, raw_values(recipe, table, {}), "deal_id", "deals")


def test_a_log_or_ratio_without_a_value_is_an_error(table: pd.DataFrame) -> None:
    (ratio,) = verdict(Recipe("v", "ratio", ("value", "size")), table)
    assert (ratio.rule, ratio.file, ratio.column) == (
        "transform_impossible", "deals", "characteristics.v",
    )  # fmt: skip
    assert ratio.got.endswith("D2")
    (log,) = verdict(Recipe("v", "column", ("size",), log=True), table)
    assert log.got.endswith("D2")


def test_a_missing_input_is_no_error(table: pd.DataFrame) -> None:
    """The deal leaves with an entry in the ledger instead."""
    assert verdict(Recipe("v", "column", ("value",), log=True), table) == []
    assert verdict(Recipe("v", "indicator", ("payment",), equals="cash"), table) == []
    assert verdict(Recipe("v", "indicator", ("value",), above=7.0), table) == []


def test_many_rows_without_a_value_are_counted() -> None:
    table = pd.DataFrame({"deal_id": [f"D{at}" for at in range(8)], "size": 0.0})
    (finding,) = verdict(Recipe("v", "column", ("size",), log=True), table)
    assert finding.got == "no finite value for D0, D1, D2, D3, D4 and 3 more"


def test_raw_variables_of_names_and_columns(table: pd.DataFrame) -> None:
    book = {
        "relative": Recipe("relative", "ratio", ("value", "size")),
        "both": Recipe("both", "interaction", ("relative", "year")),
        "run_up": Recipe("run_up", "price"),
    }
    measured = {"run_up": np.arange(4.0)}
    kept = table.drop(index=1)
    values = {"run_up": measured["run_up"][[0, 2, 3]]}
    raw, findings = raw_variables(
        kept, book, ["both", "size", "run_up"], values, "deal_id", "deals"
    )
    assert findings == []
    assert list(raw) == ["relative", "year", "size", "run_up"]
    _, unknown = raw_variables(table, {}, ["weight", "value"], {}, "deal_id", "deals")
    (finding,) = unknown
    assert (finding.rule, finding.file, finding.column) == ("unknown_variable", "deals", "weight")
