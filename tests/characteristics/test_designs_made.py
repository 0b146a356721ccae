"""From a deal table to arrays: one sample, one mask, and an entry for every deal lost."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from pipeline.characteristics.design import Prepared, Roles, prepare
from pipeline.characteristics.outcomes import (
    car_column,
    deals_frame,
    group_names,
    with_outcomes,
)
from pipeline.characteristics.recipes import Recipe
from pipeline.core.findings import Finding, InputProblem, Severity
from pipeline.core.window import Window
from tests.significance.samples import clustered

N = 60
ROLES = Roles(
    outcome="car_m1_1",
    outcome_label="CAR[-1, +1]",
    treatment="shares",
    controls=("relative", "run_up"),
    effects=("industry",),
    clusters=("security",),
    instruments=("spare",),
    selection=("leverage",),
    excluded=("for_sale",),
)
RECIPES = {
    "relative": Recipe("relative", "ratio", ("value", "cap"), log=True, winsorise=0.05),
    "run_up": Recipe("run_up", "price"),
}


def deals() -> pd.DataFrame:
    stream = np.random.default_rng(2)
    return pd.DataFrame(
        {
            "deal_id": [f"D{at:02d}" for at in range(N)],
            "security": [f"S{at % 20:02d}" for at in range(N)],
            "year": [2018.0 + at // 20 for at in range(N)],
            "industry": [("jam", "tin", "soap")[at % 3] for at in range(N)],
            "shares": stream.integers(0, 2, N).astype(float),
            "value": stream.uniform(5, 50, N),
            "cap": stream.uniform(100, 900, N),
            "spare": stream.normal(size=N),
            "car_m1_1": stream.normal(0, 0.03, N),
        }
    )


def candidates(listed: pd.DataFrame) -> pd.DataFrame:
    """The deals' own company-years and twenty that did not announce."""
    stream = np.random.default_rng(3)
    quiet = pd.DataFrame(
        {"deal_id": "", "security": [f"Q{at}" for at in range(20)], "year": 2018.0}
    )
    table = pd.concat([listed[["deal_id", "security", "year"]], quiet], ignore_index=True)
    return table.assign(
        leverage=stream.uniform(0, 1, len(table)), for_sale=stream.normal(size=len(table))
    )


def made(
    change: Callable[[pd.DataFrame], None] = lambda _: None,
    among: Callable[[pd.DataFrame], None] | None = lambda _: None,
    roles: Roles = ROLES,
) -> Prepared:
    """The design of the deals after ``change``, with candidates after ``among``, or without."""
    listed = deals()
    universe = None
    if among is not None:
        universe = candidates(listed)
        among(universe)
    change(listed)
    run_up = np.linspace(-0.2, 0.2, N)
    return prepare(listed, universe, RECIPES, {"run_up": run_up}, {}, roles)


def refusal(**how: object) -> list[Finding]:
    with pytest.raises(InputProblem) as caught:
        made(**how)  # type: ignore[arg-type]
    return list(caught.value.findings)


def test_arrays_in_the_order_of_the_deals() -> None:
    found = made()
    design, listed = found.design, deals()
    assert design.n == N
    assert design.names == ("constant", "shares", "relative", "run_up")
    assert design.rows == tuple(listed["deal_id"])
    np.testing.assert_array_equal(design.y, listed["car_m1_1"])
    np.testing.assert_array_equal(design.X[:, 0], 1.0)
    np.testing.assert_array_equal(design.X[:, 1], listed["shares"])
    relative = np.log(listed["value"] / listed["cap"])
    clipped = relative.clip(relative.quantile(0.05), relative.quantile(0.95))
    np.testing.assert_allclose(design.X[:, 2], clipped, rtol=1e-12)
    np.testing.assert_array_equal(design.X[:, 3], np.linspace(-0.2, 0.2, N))
    np.testing.assert_array_equal(design.Z[:, 0], listed["spare"])
    codes = listed["industry"].map({"jam": 0, "soap": 1, "tin": 2})
    np.testing.assert_array_equal(design.effects["industry"], codes)
    assert design.clusters["security"].max() == 19
    assert found.ledger.entries == ()
    assert found.deals["in_regression"].tolist() == [1] * N
    np.testing.assert_allclose(found.deals["relative"], clipped, rtol=1e-12)


def test_a_deal_with_a_gap_leaves_every_column() -> None:
    def spoil(table: pd.DataFrame) -> None:
        table.loc[3, "spare"] = np.nan
        table.loc[5, "industry"] = ""
        table.loc[[5, 9], "value"] = np.nan

    found = made(spoil)
    entries = {entry.deal: entry for entry in found.ledger.entries}
    assert {deal: entry.value for deal, entry in entries.items()} == {
        "D03": "spare", "D05": "relative, industry", "D09": "relative",
    }  # fmt: skip
    assert {entry.rule for entry in entries.values()} == {"missing_characteristic"}
    assert found.design.n == found.ledger.rows_kept == N - 3
    lost = found.deals["in_regression"].to_numpy() == 0
    assert np.flatnonzero(lost).tolist() == [3, 5, 9]
    assert found.deals.loc[lost, "relative"].isna().all()
    # The loss of a deal moves the quantiles of the rest.
    relative = np.log(deals()["value"] / deals()["cap"])[~lost]
    wanted = relative.clip(relative.quantile(0.05), relative.quantile(0.95))
    np.testing.assert_allclose(found.design.X[:, 2], wanted, rtol=1e-12)


def test_a_deal_without_a_cluster_stops_the_run() -> None:
    def spoil(table: pd.DataFrame) -> None:
        table.loc[[3, 7], "security"] = ""
        table.loc[7, "spare"] = np.nan  # D07 leaves anyway, so its cluster is not asked for
        table["_row"] = range(2, N + 2)

    with pytest.raises(InputProblem) as caught:
        made(spoil, among=None)
    (found,) = caught.value.findings
    assert (found.rule, found.severity) == ("cluster_missing", Severity.ERROR)
    assert (found.row, found.column) == ("5", "security")
    assert found.got == "no security for D03"


def test_clusters_within_clusters_are_told() -> None:
    found = made(
        lambda table: table.insert(0, "group", table["security"].str[-1]),
        among=None,
        roles=replace(ROLES, clusters=("security", "group")),
    )
    (warning,) = found.findings
    assert (warning.rule, warning.severity) == ("nested_clusters", Severity.WARNING)
    assert warning.got == "each security within one group"
    crossed = made(among=None, roles=replace(ROLES, clusters=("security", "year")))
    assert crossed.findings == ()


def test_candidates_stand_beside_the_deals() -> None:
    found = made()
    rows = found.design.selection
    assert rows is not None
    assert rows.names == ("constant", "leverage", "for_sale")
    assert rows.excluded == ("for_sale",)
    assert rows.W.shape == (N + 20, 3)
    assert rows.selected.tolist() == [True] * N + [False] * 20
    assert rows.outcome_row.tolist() == [*range(N), *[-1] * 20]
    assert rows.clusters["security"].shape == (N + 20,)
    (note,) = found.findings
    assert (note.rule, note.severity) == ("candidates_used", Severity.NOTE)
    assert note.got.startswith("80 of 80")


def test_deals_without_a_candidate_row_leave_and_say_why() -> None:
    def lose(table: pd.DataFrame) -> None:
        table.loc[0, ["deal_id", "security"]] = ["", "Q99"]  # nobody for D00
        table.loc[1, "deal_id"] = ""  # the company-year is there and stands for no deal
        table.loc[2, "deal_id"] = "D99"  # or for another one
        table.loc[4, "leverage"] = np.nan  # or has a gap

    found = made(among=lose)
    assert [(entry.deal, entry.rule) for entry in found.ledger.entries] == [
        ("D00", "candidate_missing"),
        ("D01", "second_in_year"),
        ("D02", "second_in_year"),
        ("D04", "missing_characteristic"),
    ]
    assert found.ledger.rows_kept == found.design.n == N - 4
    rows = found.design.selection
    assert rows is not None
    # D02's row announced a deal that was not measured, D04's has a gap: neither is evidence.
    assert len(rows.W) == N + 20 - 2
    assert rows.selected.sum() == N - 4
    kept = [deal for deal in deals()["deal_id"] if deal not in ("D00", "D01", "D02", "D04")]
    assert found.design.rows == tuple(kept)
    np.testing.assert_array_equal(np.sort(rows.outcome_row[rows.selected]), np.arange(N - 4))


def test_candidates_of_a_deal_lost_elsewhere_leave() -> None:
    def spoil(table: pd.DataFrame) -> None:
        table.loc[3, "value"] = np.nan

    rows = made(spoil).design.selection
    assert rows is not None
    assert len(rows.W) == N + 20 - 1
    assert rows.selected.sum() == N - 1


def test_without_candidates_there_is_no_selection() -> None:
    found = made(among=None)
    assert found.design.selection is None
    assert found.findings == ()


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ([1.0] * N, "60 deals with 1"),
        ([1.0] * (N - 4) + [0.0] * 4, "4 deals with 0, 56 deals with 1"),
        ([np.nan] * N, "no deal left for the regression"),
    ],
)
def test_a_treatment_that_compares_nothing(values: list[float], words: str) -> None:
    def spoil(table: pd.DataFrame) -> None:
        table["shares"] = values

    (finding,) = refusal(change=spoil)
    assert (finding.rule, finding.file, finding.column) == ("no_variation", "deals", "shares")
    assert finding.got == words


def test_a_treatment_of_many_values_is_no_group() -> None:
    def spoil(table: pd.DataFrame) -> None:
        table["shares"] = np.linspace(0, 1, N)

    (finding,) = refusal(change=spoil)
    assert (finding.rule, finding.column) == ("treatment_not_binary", "shares")
    assert made(spoil, roles=replace(ROLES, continuous=True)).design.n == N


def test_a_deal_alone_in_an_effect_leaves_every_column() -> None:
    def spoil(table: pd.DataFrame) -> None:
        table.loc[4, ROLES.effects[0]] = "a class of its own"

    found = made(spoil)
    assert found.design.n == N - 1
    (entry,) = found.ledger.dropped
    assert (entry.rule, entry.deal) == ("singleton", str(deals()["deal_id"].iloc[4]))


def test_too_few_deals_for_the_coefficients() -> None:
    listed = deals().iloc[:25]
    with pytest.raises(InputProblem) as caught:
        prepare(listed, None, RECIPES, {"run_up": np.linspace(-0.2, 0.2, 25)}, {}, ROLES)
    assert caught.value.findings[0].rule == "few_rows"


def test_faults_of_deals_and_candidates_together() -> None:
    def spoil(table: pd.DataFrame) -> None:
        table.loc[2, "value"] = 0.0
        del table["spare"]

    def lose(table: pd.DataFrame) -> None:
        del table["for_sale"]
        table["run_up"] = 0.0

    found = refusal(change=spoil, among=lose)
    assert {(finding.rule, finding.column) for finding in found} == {
        ("transform_impossible", "characteristics.relative"),
        ("unknown_variable", "spare"),
        ("unknown_variable", "for_sale"),
        ("selection_lacks_control", "selection.explained_by"),
    }
    (control,) = [finding for finding in found if finding.rule == "selection_lacks_control"]
    assert "'run_up'" in control.got


def test_outcomes_beside_the_deals() -> None:
    abnormal = clustered(deals=16, gaps=0)
    returns = abnormal.returns.copy()
    returns[4, 9] = np.nan
    returns[6, [0, 10]] = np.nan
    object.__setattr__(abnormal, "returns", returns)
    windows = [Window(-1, 1), Window(-5, 5), Window(0, 4)]
    listed = pd.DataFrame({"deal_id": abnormal.deals})
    found = with_outcomes(listed, abnormal, windows, 0.9)
    assert [car_column(window) for window in windows] == ["car_m1_1", "car_m5_5", "car_0_4"]
    np.testing.assert_allclose(found["car_m1_1"], abnormal.car(windows[0]))
    # Of eleven days ten are more than 90%, nine are not; of five, four are not.
    assert np.flatnonzero(found["car_m5_5"].isna()).tolist() == [6]
    assert np.flatnonzero(found["car_0_4"].isna()).tolist() == [4]
    np.testing.assert_allclose(found["car_m1_1_std_dev"] ** 2, abnormal.car_variance(windows[0]))
    np.testing.assert_array_equal(found["estimation_returns"], abnormal.observations)
    np.testing.assert_allclose(found["scar_m1_1"], abnormal.standardised(windows[0]))
    np.testing.assert_allclose(found["bhar_m1_1"], abnormal.bhar(windows[0]))
    for name in ("scar_m5_5", "bhar_m5_5"):
        assert found[name].isna().tolist() == found["car_m5_5"].isna().tolist()
    logs = with_outcomes(listed, abnormal, windows, 0.9, log=True)
    np.testing.assert_allclose(logs["bhar_m1_1"], abnormal.bhar(windows[0], log=True))


def test_groups_in_words() -> None:
    table = pd.DataFrame({"shares": [1.0, 0.0, np.nan], "size": [1.0, 2.0, 3.0]})
    words = ("cash", "shares")
    assert group_names(table, "shares", words).tolist() == ["shares", "cash", "not known"]
    for treatment in ("size", "absent", ""):
        assert set(group_names(table, treatment, words)) == {"all deals"}


def test_the_deal_table_as_written() -> None:
    days = pd.to_datetime(["2021-03-01"]).astype("datetime64[s]")
    table = pd.DataFrame(
        {
            "deal_id": ["D1"], "column": [3], "position": [200], "_row": [2],
            "announced_utc": pd.to_datetime(["2021-03-01T10:00"], utc=True),
            "announced_date": days, "day_zero": days, "earnings_release": pd.NaT,
        }
    )  # fmt: skip
    found = deals_frame(table, pd.Series(["cash"]))
    assert list(found.columns) == [
        "deal", "announced_date", "day_zero", "earnings_release", "group",
    ]  # fmt: skip
    assert found["group"].tolist() == ["cash"]
    assert found["earnings_release"].dtype == "datetime64[s]"


def test_a_control_the_instruments_move_is_endogenous() -> None:
    design = made(roles=replace(ROLES, also_endogenous=("relative",))).design
    assert design.endogenous == ("shares", "relative")
    assert made().design.endogenous == ("shares",)
