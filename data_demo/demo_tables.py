"""From the simulated arrays to the tables of the demo, and from tables to files."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import xlsxwriter
from demo_deals import CompanyYears, Terms
from demo_market import Companies, Factors, Grid, price_paths
from demo_params import (
    COMPANIES,
    EXCHANGES,
    FIRST_YEAR,
    INDUSTRIES,
    YEARS,
    BoolArray,
    FloatArray,
    IntArray,
    Parameters,
)
from demo_timing import ROLES, Schedule

FIXED_DATE = datetime(2025, 3, 3)
CODES = np.array([f"C{k:03d}" for k in range(1, COMPANIES + 1)], dtype=object)
VENUES = np.array([e.code for e in EXCHANGES], dtype=object)
DUPLICATED_DEAL = "D200"


def deal_ids(plan: Schedule) -> list[str]:
    """Deal codes D001, D002, ... in order of announcement, one per deal. Raises nothing."""
    return [f"D{k:03d}" for k in range(1, plan.event.size + 1)]


def stamp_texts(plan: Schedule) -> list[str]:
    """Local wall clock "YYYY-MM-DD HH:MM", or the date alone for date-only stamps."""
    return [
        f"{day}" if minute < 0 else f"{day} {minute // 60:02d}:{minute % 60:02d}"
        for day, minute in zip(plan.stamp_day, plan.stamp_minute, strict=True)
    ]


def session_dates(grid: Grid, companies: Companies, plan: Schedule, at: IntArray) -> list[str]:
    """ISO dates of session positions `at` (n,) on the venues of the deals. Raises nothing."""
    return [str(d) for d in grid.days[grid.sessions[companies.exchange[plan.company], at]]]


def deal_table(
    grid: Grid,
    companies: Companies,
    years: CompanyYears,
    plan: Schedule,
    terms: Terms,
    in_shares: BoolArray,
) -> pd.DataFrame:
    """Deals in order of announcement, one exact duplicate row included; raises nothing.

    Money in millions of USD at the fixed rates, so that sizes compare across exchanges;
    `treasury_shares` in percent, dates as ISO text.
    """
    i, y = plan.company, plan.year
    venue = companies.exchange[i]
    rate = np.array([e.usd_rate for e in EXCHANGES])[venue]
    frame = pd.DataFrame(
        {
            "deal_id": deal_ids(plan),
            "security": CODES[i],
            "exchange": VENUES[venue],
            "announced_at": stamp_texts(plan),
            "timestamp_zone": np.array([e.zone for e in EXCHANGES], dtype=object)[venue],
            "deal_value": np.round(terms.deal_value * rate, 3),
            "market_value": np.round(terms.market_value * rate, 3),
            "currency": "USD",
            "industry": np.array(INDUSTRIES, dtype=object)[companies.industry[i]],
            "year": FIRST_YEAR + y,
            "paid_in_shares": in_shares.astype(np.int64),
            "treasury_shares": terms.treasury,
            "fast_placement": terms.placement.astype(np.int64),
            "target_listed": terms.listed.astype(np.int64),
            "cross_border": terms.cross_border.astype(np.int64),
            "leverage": years.leverage[i, y],
            "cash": years.cash[i, y],
            "earnings_release": session_dates(grid, companies, plan, plan.earnings),
            "status": np.where(terms.withdrawn, "withdrawn", "completed").astype(object),
        }
    )
    at = int(np.flatnonzero(frame["deal_id"] == DUPLICATED_DEAL)[0])
    rows = np.insert(np.arange(len(frame)), at, at)
    return frame.iloc[rows].reset_index(drop=True)


def _role_position(plan: Schedule, role: str) -> tuple[int, int]:
    """Company and event position of the first deal that carries a role."""
    at = int(np.flatnonzero((plan.role == ROLES.index(role)) & ~plan.second)[0])
    return int(plan.company[at]), int(plan.event[at])


def role_sessions(params: Parameters, plan: Schedule) -> dict[str, tuple[int, int, int]]:
    """Company, first and last session position of each planted change of the price file.

    Keys: `untraded` (rows missing from first to last), `short` (first row at first), `delisting`
    (last row at last), `split` (raw prices doubled before first). Raises nothing.
    """
    company, event = _role_position(plan, "untraded")
    start = event + params.untraded_start
    out = {"untraded": (company, start, start + params.untraded_sessions - 1)}
    company, event = _role_position(plan, "short")
    out["short"] = (company, event - params.short_history_sessions, event)
    company, event = _role_position(plan, "delisting")
    out["delisting"] = (company, event, event + 1)
    company, event = _role_position(plan, "split")
    out["split"] = (company, event + params.split_session, event + params.split_session)
    return out


def _traded(params: Parameters, grid: Grid, companies: Companies, plan: Schedule) -> BoolArray:
    """Which security and weekday (300, T) has a row: sessions less the planted gaps."""
    keep = grid.is_open[companies.exchange].copy()
    for role, (company, first, last) in role_sessions(params, plan).items():
        own = grid.sessions[companies.exchange[company]]
        if role == "untraded":
            keep[company, own[first] : own[last] + 1] = False
        elif role == "short":
            keep[company, : own[first]] = False
        elif role == "delisting":
            keep[company, own[last] + 1 :] = False
    return keep


def price_table(
    params: Parameters,
    grid: Grid,
    companies: Companies,
    plan: Schedule,
    returns: FloatArray,
    volumes: FloatArray,
) -> pd.DataFrame:
    """Prices by security and session: close in local currency, volume in shares.

    `returns` and `volumes` are (300, T). Raises nothing.
    """
    closes, volumes = price_paths(companies, returns), volumes.copy()
    split, first, _ = role_sessions(params, plan)["split"]
    before = slice(0, int(grid.sessions[companies.exchange[split], first]))
    closes[split, before] *= 2.0
    volumes[split, before] *= 0.5
    for venue, exchange in enumerate(EXCHANGES):
        rows = companies.exchange == venue
        closes[rows] = np.round(closes[rows], exchange.price_decimals)
    who, when = np.nonzero(_traded(params, grid, companies, plan))
    return pd.DataFrame(
        {
            "security": CODES[who],
            "date": grid.days[when].astype("datetime64[s]"),
            "close": closes[who, when],
            "volume": np.round(volumes[who, when] / 100.0).astype(np.int64) * 100,
        }
    )


def benchmark_table(grid: Grid, factors: Factors) -> pd.DataFrame:
    """Total-return index level of each venue's benchmark, 1000 before the first session."""
    levels = np.round(1000.0 * np.cumprod(1.0 + factors.benchmark, axis=1), 4)
    venue, when = np.nonzero(grid.is_open)
    return pd.DataFrame(
        {
            "exchange": VENUES[venue],
            "date": grid.days[when].astype("datetime64[s]"),
            "close": levels[venue, when],
        }
    )


def factor_table(grid: Grid, factors: Factors) -> pd.DataFrame:
    """Factor returns of each venue, decimals per day."""
    venue, when = np.nonzero(grid.is_open)
    style, risk_free = factors.style[venue, when], factors.risk_free[venue, when]
    return pd.DataFrame(
        {
            "exchange": VENUES[venue],
            "date": grid.days[when].astype("datetime64[s]"),
            "market_excess": np.round(factors.benchmark[venue, when] - risk_free, 8),
            "size": style[:, 0],
            "value": style[:, 1],
            "momentum": style[:, 2],
            "risk_free": risk_free,
        }
    )


def candidate_table(
    grid: Grid, companies: Companies, years: CompanyYears, announced: BoolArray, plan: Schedule
) -> pd.DataFrame:
    """Company-years by security and year: 3,000 rows, `market_value` in millions of USD."""
    who, when = np.divmod(np.arange(COMPANIES * YEARS), YEARS)
    venue = companies.exchange[who]
    ids = np.full((COMPANIES, YEARS), "", dtype=object)
    first = ~plan.second
    ids[plan.company[first], plan.year[first]] = np.array(deal_ids(plan), dtype=object)[first]
    days = grid.days[grid.sessions[venue, years.as_of[who, when]]]
    return pd.DataFrame(
        {
            "security": CODES[who],
            "exchange": VENUES[venue],
            "industry": np.array(INDUSTRIES, dtype=object)[companies.industry[who]],
            "year": FIRST_YEAR + when,
            "as_of": days.astype("datetime64[s]"),
            "market_value": years.value[who, when],
            "leverage": years.leverage[who, when],
            "cash": years.cash[who, when],
            "divisions_for_sale": years.divisions[who, when],
            "announced": announced[who, when].astype(np.int64),
            "deal_id": ids[who, when],
        }
    )


def write_parquet(frame: pd.DataFrame, path: Path) -> None:
    """Write a table as zstd parquet: dates as date32, text as string. OSError on failure."""
    columns = {}
    for name, series in frame.items():
        if series.dtype.kind == "M":
            columns[str(name)] = pa.array(series.to_numpy().astype("datetime64[D]"))
        elif series.dtype.kind in "if":
            columns[str(name)] = pa.array(series.to_numpy())
        else:
            columns[str(name)] = pa.array(series.tolist(), type=pa.string())
    text = [n for n, c in columns.items() if c.type == pa.string()]
    table = pa.table(columns)
    pq.write_table(table, path, compression="zstd", compression_level=9, use_dictionary=text)


def write_deals(frame: pd.DataFrame, path: Path) -> None:
    """Write the deals to sheet "deals" with fixed document properties. OSError on failure."""
    book = xlsxwriter.Workbook(str(path))
    book.set_properties({"title": "Demo deals", "created": FIXED_DATE})
    sheet = book.add_worksheet("deals")
    bold = book.add_format({"bold": True})
    for column, name in enumerate(frame.columns):
        sheet.write_string(0, column, name, bold)
        values = frame[name].tolist()
        for row, value in enumerate(values, start=1):
            if isinstance(value, str):
                sheet.write_string(row, column, value)
            else:
                sheet.write_number(row, column, value)
    sheet.freeze_panes(1, 1)
    sheet.set_column(0, len(frame.columns) - 1, 17)
    book.close()
