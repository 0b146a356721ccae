"""A small invented market in files, spoilt in one place, and what the study says of it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd

from pipeline.core.clock import Clock
from pipeline.core.findings import Finding, InputProblem
from pipeline.flow.measured import Measured, measure_deals
from pipeline.returns.sessions import sessions_between
from pipeline.study.load import load_study

SESSIONS = sessions_between("XLON", "2018-01-02", "2018-12-31").days
EVENT = 180
DAY = "2018-09-18"
DEALS = 6
STUDY = """
title = "Market"
question = "Does it matter?"

[inputs]
history = "whole"
deals = "deals.parquet"
prices = "prices.parquet"
benchmarks = "benchmarks.parquet"

[event_time]
estimation = [-120, -21]
minimum_observations = 80
headline = [-1, 1]
windows = [[0, 5]]
"""


def unseen(stage: str) -> None:
    """The progress of a stage, not shown."""


@dataclass
class Market:
    """Tables of six companies of one exchange; the first, ``S0``, is the one to spoil.

    ``closes`` is wide, session by security; ``volumes`` likewise. ``keys`` is added to the study,
    ``more`` are further tables; ``raw`` overrides a table as it is written.
    """

    closes: pd.DataFrame
    volumes: pd.DataFrame
    level: pd.Series
    deals: pd.DataFrame
    study: str = STUDY
    more: dict[str, pd.DataFrame] = field(default_factory=dict)
    raw: dict[str, pd.DataFrame] = field(default_factory=dict)

    def key(self, table: str, line: str) -> None:
        """Add a line to a table of the study file."""
        head = f"[{table}]"
        if head in self.study:
            self.study = self.study.replace(head, f"{head}\n{line}", 1)
        else:
            self.study += f"\n{head}\n{line}\n"

    def add(self, name: str, table: pd.DataFrame) -> None:
        """Name a further table in the study."""
        self.more[name] = table
        self.key("inputs", f'{name} = "{name}.parquet"')

    @property
    def prices(self) -> pd.DataFrame:
        """security, date, close, volume."""
        long = self.closes.rename_axis("date").reset_index()
        table = long.melt("date", None, "security", "close")
        amounts = self.volumes.rename_axis("date").reset_index()
        table["volume"] = amounts.melt("date", None, "security", "volume")["volume"]
        return table.dropna(subset="close")[["security", "date", "close", "volume"]]

    @property
    def benchmarks(self) -> pd.DataFrame:
        """exchange, date, close."""
        table = self.level.rename("close").rename_axis("date").reset_index()
        return table.assign(exchange="XLON")[["exchange", "date", "close"]]

    def returns(self) -> pd.DataFrame:
        """security, date, return in place of closes."""
        moves = self.closes.pct_change(fill_method=None).rename_axis("date").reset_index()
        return moves.melt("date", None, "security", "return").dropna(subset="return")

    def write(self, folder: Path) -> Path:
        """All files; the study file's path."""
        tables = {
            "prices": self.prices, "benchmarks": self.benchmarks, "deals": self.deals, **self.more,
        }  # fmt: skip
        for name, table in {**tables, **self.raw}.items():
            table.to_parquet(folder / f"{name}.parquet", index=False)
        path = folder / "market.toml"
        path.write_text(self.study)
        return path


def market(seed: int = 5) -> Market:
    """Companies with betas of about one, announced in the session of 18 September 2018."""
    assert str(SESSIONS[EVENT]) == DAY
    stream = np.random.default_rng(seed)
    codes = [f"S{at}" for at in range(DEALS)]
    days = pd.Index(SESSIONS.astype(str), name="date")
    common = stream.normal(0.0003, 0.008, len(days))
    moves = common[:, None] * stream.uniform(0.7, 1.3, DEALS)
    moves = moves + stream.normal(0, 0.01, (len(days), DEALS))
    closes = pd.DataFrame(100 * np.cumprod(1 + moves, axis=0), days, codes)
    return Market(
        closes=closes,
        volumes=pd.DataFrame(1000.0, days, codes),
        level=pd.Series(1000 * np.cumprod(1 + common), days),
        deals=pd.DataFrame(
            {
                "deal_id": [f"D{at}" for at in range(DEALS)],
                "security": codes,
                "exchange": "XLON",
                "announced_at": f"{DAY}T10:00:00+01:00",
            }
        ),
    )


@dataclass(frozen=True)
class Said:
    """What a study said: findings, ledger entries as (deal, rule, action), and what it measured."""

    findings: tuple[Finding, ...]
    ledger: tuple[tuple[str, str, str], ...] = ()
    measured: Measured | None = None

    def rules(self) -> dict[str, str]:
        """Rule -> severity of each finding."""
        return {finding.rule: str(finding.severity) for finding in self.findings}

    def text(self, rule: str) -> str:
        """All that the findings of a rule say."""
        return " ".join(f"{f.where} {f.got} {f.remedy}" for f in self.findings if f.rule == rule)


def said(folder: Path, made: Market) -> Said:
    """Measure the deals of a market, or the findings that stop it."""
    try:
        measured = measure_deals(load_study(made.write(folder)), Clock(unseen))
    except InputProblem as problem:
        return Said(problem.findings)
    entries = tuple((item.deal, item.rule, str(item.action)) for _, item in measured.ledger)
    return Said(measured.findings, entries, measured)


Spoil = Callable[[Market], None]
