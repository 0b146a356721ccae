"""What the terminal says of power: the smallest mean first, then the table, in words and JSON."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest

from pipeline.screen import Screen
from pipeline.significance.power import detectable, power_frame
from tests.significance.samples import linked


def shown(weighted: float, as_json: bool, capsys: pytest.CaptureFixture[str]) -> str:
    link = linked(weighted)
    smallest = detectable(0.03, 40, link)
    Screen(quiet=False, as_json=as_json).power(power_frame(0.03, 40, link), smallest, 40)
    return capsys.readouterr().out


def test_the_smallest_mean_comes_before_the_table(capsys: pytest.CaptureFixture[str]) -> None:
    """2.8 standard errors of .03 / sqrt(40) are 133 basis points."""
    text = shown(0.0, False, capsys)
    assert (
        text.index("A true mean of 133 bp") < text.index("40 deals") < text.index("true mean, bp")
    )
    assert "never" not in text.lower()


def test_effects_that_no_number_of_deals_finds(capsys: pytest.CaptureFixture[str]) -> None:
    text = shown(0.05, False, capsys)
    rows = {line.split()[0]: line.split()[-1] for line in text.splitlines() if "%" in line[20:]}
    assert rows["150"] == "never"
    assert rows["300"].isdigit()
    assert "stop adding information" in text
    found = json.loads(shown(0.05, True, capsys))
    needed = {round(row["effect"] * 1e4): row["deals_needed"] for row in found["power"]}
    assert needed[150] is None
    assert needed[300] == int(rows["300"])
    assert found["smallest"] == pytest.approx(detectable(0.03, 40, linked(0.05)), rel=1e-9)


def test_one_deal_has_no_power(capsys: pytest.CaptureFixture[str]) -> None:
    empty = power_frame(np.nan, 1, linked(0.0)).iloc[:0]
    Screen(quiet=False, as_json=False).power(empty, np.nan, 1)
    assert "at least two deals" in capsys.readouterr().out
    Screen(quiet=False, as_json=True).power(pd.DataFrame(empty), np.nan, 1)
    assert json.loads(capsys.readouterr().out) == {"deals": 1, "smallest": None, "power": []}
