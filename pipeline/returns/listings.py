"""Which of a company's listings a deal is measured on, and why."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity, raise_errors
from pipeline.core.ledger import Action, LedgerEntry
from pipeline.core.prices import PricePanel
from pipeline.core.window import Window


@dataclass(frozen=True, slots=True)
class Line:
    """One listing of a company.

    ``currency`` is '' where it is not known; ``primary`` and ``home`` as declared.
    """

    code: str
    exchange: str
    primary: bool
    home: bool
    currency: str


@dataclass(frozen=True, slots=True)
class Choice:
    """The line chosen, why, and the next one of the rule."""

    line: Line
    why: str
    second: Line | None


def lines_of(table: pd.DataFrame) -> dict[str, list[Line]]:
    """Company -> its listings, in the order of the table.

    Args:
        table: security, line, exchange, primary, home (1, 0 or NaN), currency.
    """
    found: dict[str, list[Line]] = {}
    names = ["security", "line", "exchange", "primary", "home", "currency"]
    for security, code, exchange, primary, home, currency in table[names].itertuples(index=False):
        line = Line(str(code), str(exchange), primary == 1, home == 1, str(currency))
        found.setdefault(str(security), []).append(line)
    return found


def choose_lines(
    companies: pd.Series,
    dates: pd.Series,
    table: pd.DataFrame,
    panels: Mapping[str, PricePanel],
    estimation: Window,
) -> dict[str, Choice]:
    """The listing that each company of the table is measured on.

    The rule, in order: declared primary; highest median turnover (close times volume) of the
    estimation window before the company's first date, where all its lines trade in one currency;
    home market. Common practice, no source. All dates of a company are measured on one line.

    Args:
        companies, dates: the company of each event and its date.
        table: the listings, see :func:`lines_of`.
        panels: exchange -> prices.
        estimation: sessions from the date.

    Raises:
        InputProblem: ``undecided_listing`` for companies that no step of the rule decides.
    """
    book = lines_of(table)
    first = dates.groupby(companies.astype(str).to_numpy()).min()
    found = {
        str(company): _choose(book[str(company)], np.datetime64(day, "D"), panels, estimation)
        for company, day in first.items()
        if str(company) in book
    }
    undecided = [company for company, choice in found.items() if choice is None]
    raise_errors(_undecided(company, book[company]) for company in undecided)
    return {company: choice for company, choice in found.items() if choice is not None}


def on_lines(rows: pd.DataFrame, choices: Mapping[str, Choice]) -> pd.DataFrame:
    """Rows of companies with ``line`` and the ``exchange`` of the listing chosen.

    A company without a choice keeps its code and its exchange.
    """
    codes = rows["security"].astype(str)
    line = {company: choice.line.code for company, choice in choices.items()}
    place = {company: choice.line.exchange for company, choice in choices.items()}
    return rows.assign(
        line=codes.map(line).fillna(codes), exchange=codes.map(place).fillna(rows["exchange"])
    )


def _choose(
    lines: list[Line], day: np.datetime64, panels: Mapping[str, PricePanel], window: Window
) -> Choice | None:
    turnover = {line.code: _turnover(line, day, panels, window) for line in lines}
    comparable = len({line.currency for line in lines} - {""}) == 1 and all(
        line.currency for line in lines
    )
    ranked = sorted(lines, key=lambda line: -np.nan_to_num(turnover[line.code], nan=-1.0))
    traded = comparable and np.isfinite(turnover[ranked[0].code])
    if len(lines) == 1:
        return Choice(lines[0], "its only listing", None)
    declared = [line for line in lines if line.primary]
    at_home = [line for line in lines if line.home]
    if declared:
        chosen, why = declared[0], "declared as the primary listing"
    elif traded:
        chosen, why = ranked[0], _turnover_words(ranked, turnover)
    elif at_home:
        chosen, why = at_home[0], "its home market, where turnover cannot be compared"
    else:
        return None
    others = [line for line in (ranked if traded else lines) if line is not chosen]
    return Choice(chosen, why, others[0])


def _turnover(
    line: Line, day: np.datetime64, panels: Mapping[str, PricePanel], window: Window
) -> float:
    """Median close times volume of the window before ``day``; NaN without one."""
    panel = panels.get(line.exchange)
    if panel is None or line.code not in panel.securities:
        return float("nan")
    at = int(np.searchsorted(panel.sessions, day))
    rows = slice(max(at + window.start, 0), max(at + window.end + 1, 0))
    column = panel.securities.index(line.code)
    traded = panel.close[rows, column] * panel.volume[rows, column]
    traded = traded[np.isfinite(traded)]
    return float(np.median(traded)) if traded.size else float("nan")


def _turnover_words(ranked: list[Line], turnover: Mapping[str, float]) -> str:
    first, second = (turnover[line.code] for line in ranked[:2])
    against = f"{second:,.4g}" if np.isfinite(second) else "none known"
    return f"highest median turnover, {first:,.4g} a session against {against}"


def _undecided(security: str, lines: list[Line]) -> Finding:
    named = ", ".join(f"{line.code} on {line.exchange}" for line in lines)
    return Finding(
        "undecided_listing",
        Severity.ERROR,
        "listings",
        got=f"'{security}' has {named}, none declared primary",
        expected="one primary listing, turnover in one currency, or a home market",
        remedy="Set primary = 1 for one line of the company, or home = 1.",
        column="primary",
    )


def line_entries(deals: pd.DataFrame, choices: Mapping[str, Choice]) -> tuple[LedgerEntry, ...]:
    """What was chosen for each deal whose company has several listings, and why."""
    pairs = zip(deals["deal_id"].astype(str), deals["security"].astype(str), strict=True)
    found = [(deal, choices[company]) for deal, company in pairs if company in choices]
    return tuple(
        LedgerEntry(
            deal,
            "line_chosen",
            Action.FLAGGED,
            f"{choice.line.code} on {choice.line.exchange}: {choice.why}",
            "one listing a company",
        )
        for deal, choice in found
        if choice.second is not None
    )


def on_second_lines(deals: pd.DataFrame, choices: Mapping[str, Choice]) -> pd.DataFrame:
    """The deals whose company has a second line, on that line; the order is kept."""
    second = {c: choice.second for c, choice in choices.items() if choice.second is not None}
    codes = deals["security"].astype(str)
    has = codes.isin(set(second)).to_numpy()
    lines = [second[company] for company in codes[has]]
    return deals[has].assign(
        line=[line.code for line in lines], exchange=[line.exchange for line in lines]
    )
