"""Several deals of one company: the first alone, one event made of them, or all.

Which of them counts is a choice of the study; common practice, no source.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from pipeline.core.ledger import Action, StageLedger
from pipeline.core.window import Window
from pipeline.returns.repeats import settle_repeats

HEADLINE = Window(-1, 1)


def listed(*rows: tuple[str, str, int, float, int]) -> pd.DataFrame:
    """Deal, company, session of day zero, value, and a feature."""
    names = ["deal_id", "security", "position", "deal_value", "shares"]
    return pd.DataFrame(rows, columns=names).assign(timing="during the session", exchange="XLON")


def said(ledger: StageLedger) -> list[tuple[str, str, Action, str]]:
    return [(entry.deal, entry.rule, entry.action, entry.value) for entry in ledger.entries]


CHAIN = listed(
    ("D1", "A", 200, 10.0, 0), ("D2", "A", 201, 70.0, 1), ("D3", "A", 204, 5.0, 1),
    ("D4", "B", 201, 3.0, 0),
)  # fmt: skip


def test_the_first_is_kept() -> None:
    kept, ledger = settle_repeats(CHAIN, HEADLINE, "keep_first")
    assert kept["deal_id"].tolist() == ["D1", "D3", "D4"]
    assert said(ledger) == [
        ("D2", "overlapping_event", Action.DROPPED, "1 sessions after D1"),
    ]


def test_one_event_made_of_two() -> None:
    """Day zero of the first, the sum of the values, the features of the larger."""
    kept, ledger = settle_repeats(CHAIN, HEADLINE, "merge")
    assert kept["deal_id"].tolist() == ["D1", "D3", "D4"]
    merged = kept.iloc[0]
    assert (merged["position"], merged["deal_value"], merged["shares"]) == (200, 80.0, 1)
    assert kept["deal_value"].tolist()[1:] == [5.0, 3.0]
    assert said(ledger) == [
        (
            "D1",
            "merged_event",
            Action.CHANGED,
            "with D2; deal value together 80; features of D2",
        ),
        ("D2", "merged_event", Action.DROPPED, "part of D1"),
    ]
    assert ledger.rows_kept == len(kept)
    assert CHAIN["deal_value"].tolist() == [10.0, 70.0, 5.0, 3.0]  # the table given is left alone


def test_merging_keeps_the_kinds_of_the_columns() -> None:
    kept, _ = settle_repeats(CHAIN, HEADLINE, "merge")
    assert kept.dtypes.to_dict() == CHAIN.dtypes.to_dict()


def test_merging_without_values() -> None:
    kept, ledger = settle_repeats(CHAIN.drop(columns="deal_value"), HEADLINE, "merge")
    assert kept["shares"].tolist() == [0, 1, 0]
    assert ledger.entries[0].value == "with D2; features of D1"
    unknown, _ = settle_repeats(CHAIN.assign(deal_value=np.nan), HEADLINE, "merge")
    assert unknown["deal_value"].isna().all()


def test_all_are_kept_but_for_twins_of_one_session() -> None:
    table = pd.concat(
        [CHAIN, listed(("D5", "A", 201, 90.0, 0), ("D0", "B", 201, 3.0, 0))], ignore_index=True
    )
    kept, ledger = settle_repeats(table, HEADLINE, "keep_all")
    assert kept["deal_id"].tolist() == ["D1", "D3", "D5", "D0"]
    assert said(ledger) == [
        ("D5", "overlapping_kept", Action.FLAGGED, "1 sessions after D1"),
        ("D2", "overlapping_event", Action.DROPPED, "same session as D5, which is larger"),
        ("D4", "overlapping_event", Action.DROPPED, "same session as D0, which is named first"),
    ]


@pytest.mark.parametrize(
    ("values", "first", "why"),
    [
        ((5.0, 9.0), "D2", "which is larger"),
        ((9.0, 5.0), "D1", "which is larger"),
        ((np.nan, 5.0), "D2", "which is larger"),
        ((5.0, 5.0), "D1", "which is named first"),
        ((np.nan, np.nan), "D1", "which is named first"),
    ],
)
def test_ties_go_to_the_larger_deal_then_by_name(
    values: tuple[float, float], first: str, why: str
) -> None:
    table = listed(("D1", "A", 200, values[0], 0), ("D2", "A", 200, values[1], 0))
    kept, ledger = settle_repeats(table, HEADLINE)
    assert kept["deal_id"].tolist() == [first]
    assert ledger.entries[0].value == f"same session as {first}, {why}"
