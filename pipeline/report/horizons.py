"""Longer horizons: portfolios in calendar time, and buy-and-hold returns over matched companies."""

from __future__ import annotations

import math

import pandas as pd

from pipeline.core.window import Window
from pipeline.report.document import (
    Block,
    Cell,
    Column,
    Interval,
    Paragraph,
    Row,
    Section,
    Table,
    Text,
)
from pipeline.report.material import Material, prose
from pipeline.report.numerals import BP, bp, bp_digits, count, p_value, percent, plain
from pipeline.report.wording import level_words, window_label

WEIGHTS = {"equal": "equal weights", "value": "market-value weights"}


SOURCES = {
    "calendar_time": "Jaffe 1974; Mandelker 1974; Fama 1998",
    "buy_and_hold": "Barber and Lyon 1997; Lyon, Barber and Tsai 1999",
    "several_windows": "Holm 1979; Benjamini and Hochberg 1995; Romano and Wolf 2005",
}


def horizon_sources(material: Material) -> list[str]:
    """The published sources of longer horizons and several windows, as far as the run has them."""
    return [text for name, text in SOURCES.items() if len(getattr(material.results, name))]


def horizons_section(material: Material) -> Section | None:
    """The tables of longer horizons with how to read them; None if the study asks for none."""
    tables = (calendar_time_table(material), buy_and_hold_table(material))
    found: list[Block] = [table for table in tables if table is not None]
    if not found:
        return None
    opening: Paragraph = prose(
        "Over months the error of any model of normal returns adds up and deals overlap. A "
        "portfolio in calendar time is the right answer where deals crowd together, and has "
        "little power: finding nothing there says little. Buy-and-hold returns are what an "
        "investor lived through, and their tests take deals as independent, which those of "
        "overlapping windows are not. Where the two disagree, trust the portfolio.",
        lead="How to read it.",
    )
    return Section("Over longer horizons", (opening, *found))


def calendar_time_table(material: Material) -> Table | None:
    """One row a horizon, weighting and regression; None if not asked for."""
    frame = material.results.calendar_time
    if frame.empty:
        return None
    level = level_words(material.study.level)
    columns = (
        Column("Held for", "sessions"), Column("Portfolio"), Column("Regression"),
        Column("Deals", "n"), Column("Sessions used", "n"), Column("Left out", "n"),
        Column("Companies held", "mean"), Column("Abnormal return a session", "bp"),
        Column("t"), Column("p"), Column(f"Times the horizon, with {level} interval", "bp"),
    )  # fmt: skip
    rows = tuple(_portfolio_row(row, material.unit.decimals) for _, row in frame.iterrows())
    notes = [
        prose("Each session holds every company whose deal came in the sessions before, and the "
              "portfolio's return over the risk-free rate (over zero where the factor file has "
              "none) is regressed on the market's or the factors'. The constant is the mean "
              "abnormal return a session; times the horizon it is the average effect of a deal, "
              "whatever moved deals together. Sessions that hold fewer companies than the study "
              "asks for are left out."),
        prose("Errors: ", str(frame["errors"].iloc[0]), ". The second regression of each "
              "portfolio weighs a session by the companies it holds."),
    ]  # fmt: skip
    silent = frame[frame["reason"] != ""]
    if len(silent):
        notes.append(prose("No answer where fewer sessions hold enough companies than a "
                           "regression needs."))  # fmt: skip
    return Table("calendar_time", prose("Portfolios in calendar time"), columns, rows,
                 tuple(notes))  # fmt: skip


def _portfolio_row(row: pd.Series, most: int) -> Row:
    horizon, error = int(row["horizon"]), float(row["std_error"])
    daily, whole = (bp_digits(error * BP * span, most) for span in (1, horizon))
    answer: tuple[Cell, ...] = (Text("no answer"), None, None, None)
    if not row["reason"]:
        answer = (
            bp(float(row["alpha"]), daily),
            plain(float(row["statistic"]), 2),
            p_value(float(row["p_value"])),
            Interval(
                bp(float(row["effect"]), whole), bp(float(row["ci_low"]), whole),
                bp(float(row["ci_high"]), whole),
            ),
        )  # fmt: skip
    return (
        count(horizon, "sessions"), Text(WEIGHTS[str(row["weighting"])]),
        Text(str(row["regression"])), count(int(row["deals"])),
        count(int(row["sessions"]), "sessions"), count(int(row["sessions_left_out"]), "sessions"),
        plain(float(row["mean_holdings"]), 1, "companies"), *answer,
    )  # fmt: skip


def buy_and_hold_table(material: Material) -> Table | None:
    """One row a window; None if not asked for."""
    frame = material.results.buy_and_hold
    if frame.empty:
        return None
    level = level_words(material.study.level)
    columns = (
        Column("Held over", "sessions"), Column("Deals with a control", "n"),
        Column("Without one", "n"), Column("Deal's company", "%"), Column("Control", "%"),
        Column(f"Mean difference with {level} interval", "bp"), Column("Median", "bp"),
        Column("t"), Column("p"), Column("Skewness"), Column("p, skewness-adjusted"),
    )  # fmt: skip
    rows = tuple(_window_row(row, material.unit.decimals) for _, row in frame.iterrows())
    notes = (
        prose("The return of holding the deal's company less that of holding the candidate of the "
              "same year and exchange that was most alike before the deal in the columns the "
              "study names. Companies with a deal of their own inside the window are no controls; "
              "when a control's prices end the next nearest takes its place. The ledger names "
              "the deals without a control and the controls that were replaced."),
        prose("The skewness-adjusted p is bootstrapped. Every test here takes deals as "
              "independent."),
    )  # fmt: skip
    title = prose("Buy-and-hold returns over matched companies")
    return Table("buy_and_hold", title, columns, rows, notes)


def _window_row(row: pd.Series, most: int) -> Row:
    low, high = float(row["ci_low"]), float(row["ci_high"])
    digits = bp_digits(BP * (high - low) / 4, most) if math.isfinite(high - low) else 0
    window = Window(int(row["window_start"]), int(row["window_end"]))
    n = int(row["n"])
    return (
        Text(window_label(window.label)), count(n), count(int(row["deals"]) - n),
        percent(float(row["own_return"]), 1), percent(float(row["control_return"]), 1),
        Interval(bp(float(row["mean"]), digits), bp(low, digits), bp(high, digits)),
        bp(float(row["median"]), digits), plain(float(row["statistic"]), 2),
        p_value(float(row["p_value"])), plain(float(row["skewness"]), 2),
        p_value(float(row["skewness_adjusted_p"])),
    )  # fmt: skip
