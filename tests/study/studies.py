"""A small study file, and ways to spoil it."""

from __future__ import annotations

from pathlib import Path

import pytest

from pipeline.core.findings import Finding, InputProblem, Severity
from pipeline.study.load import load_study
from pipeline.study.schema import Study

BASE = """
title = "Base"
question = "Does it matter?"

[inputs]
deals = "tables/deals.xlsx"
prices = "tables/prices.csv"
benchmarks = "tables/benchmarks.csv"
candidates = "tables/candidates.csv"
timestamp_zone = "Europe/London"

[event_time]
estimation = [-150, -31]
minimum_observations = 100
headline = [-1, 1]
windows = [[0, 1], [-5, 5]]

[characteristics.relative_size]
label = "Relative size"
ratio = ["deal_value", "market_value"]
log = true

[characteristics.run_up]
price = "run_up"
window = [-25, -11]

[characteristics.big]
interaction = ["relative_size", "cash"]

[regression]
treatment = "shares"
controls = ["relative_size", "leverage"]
fixed_effects = ["industry"]
clusters = ["security"]

[selection]
explained_by = ["leverage", "run_up"]
excluded = ["for_sale"]
rationale = "Divisions come up for sale for reasons of their sellers."

[instruments]
for = "shares"
use = ["spare"]
rationale = "Spare shares were left over before the deal was conceived."
"""


def write(path: Path, text: str) -> Path:
    """Write a study file and its folder."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text, encoding="utf-8")
    return path


def changed(*pairs: tuple[str, str]) -> str:
    """The base with each old text, which must be there, replaced by a new one."""
    text = BASE
    for old, new in pairs:
        assert old in text, old
        text = text.replace(old, new, 1)
    return text


def loaded(folder: Path, *pairs: tuple[str, str]) -> Study:
    """The base, changed, as a study."""
    return load_study(write(folder / "study.toml", changed(*pairs)))


def refused(path: Path) -> tuple[Finding, ...]:
    """The findings that keep a study file from loading."""
    with pytest.raises(InputProblem) as caught:
        load_study(path)
    found: tuple[Finding, ...] = caught.value.findings
    assert all(finding.severity is Severity.ERROR for finding in found)
    return found


def one_refusal(folder: Path, *pairs: tuple[str, str]) -> Finding:
    """The only finding about the base, changed."""
    (finding,) = refused(write(folder / "study.toml", changed(*pairs)))
    assert finding.file == "study.toml"
    return finding
