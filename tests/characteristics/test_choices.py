"""Outcomes and samples that a specification curve may choose."""

from __future__ import annotations

import numpy as np

from pipeline.characteristics.outcomes import outcomes_by_choice, samples_without
from pipeline.core.ledger import Action, Ledger, LedgerEntry, StageLedger
from pipeline.core.window import Window
from tests.significance.samples import clustered


def test_outcomes_of_every_window_and_model_in_the_order_of_the_rows() -> None:
    abnormal = clustered(deals=6, gaps=0)
    rows = [abnormal.deals[at] for at in (4, 0, 2)]
    windows = (Window(-1, 1), Window(0, 0))
    made = outcomes_by_choice({"market_model": abnormal, "other": abnormal}, windows, 1.0, rows)
    assert list(made) == [
        "[-1, +1], market model", "[0, 0], market model", "[-1, +1], other", "[0, 0], other",
    ]  # fmt: skip
    np.testing.assert_array_equal(
        made["[-1, +1], market model"], abnormal.car(Window(-1, 1))[[4, 0, 2]]
    )


def test_samples_leave_out_flagged_deals_once_there_are_any() -> None:
    entry = LedgerEntry("D1", "confounded", Action.FLAGGED, "0 sessions", "1")
    ledger = Ledger((StageLedger("day zero", 3, (entry,)),))
    rules = {"confounded": "without news", "thin_trading": "without thin shares"}
    made = samples_without(ledger, ["D0", "D1", "D2"], rules)
    assert list(made) == ["all deals", "without news"]
    assert made["without news"].tolist() == [True, False, True]
