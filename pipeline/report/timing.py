"""Day zero, deal by deal: how announcements lie to the sessions, and the mean under other dates."""

from __future__ import annotations

from collections.abc import Mapping

import pandas as pd

from pipeline.report.deal_names import all_deals, page_links
from pipeline.report.document import Block, Column, Interval, Section, Statistic, Table, Text
from pipeline.report.material import MOST_ROWS, Material, capital, prose, rows_left_out
from pipeline.report.numerals import BP, bp, bp_digits, count, p_value, plain
from pipeline.report.sample_graphs import calendar_figure
from pipeline.report.wording import level_words

SHOWN = 12
KNOWN = ("before the open", "during the session", "too near the close", "after the close")
NEEDED = ("timing", "day_zero", "day_zero_close", "day_zero_reason", "announced_local")


def timing_section(material: Material) -> Section | None:
    """Counts by kind of timing, each deal's sentence, and the headline under other choices.

    None for deals without a day zero.
    """
    deals = material.results.deals
    if material.ready or not set(NEEDED) <= set(deals):
        return None
    opening = prose(
        "A deal can move the price only once it is public. Day zero is the first session whose "
        "close could hold the news, on the clock of the exchange where the deal is measured."
    )
    more = all_deals(material)
    if more is not None:
        opening = prose(*opening.pieces, " There is ", more, ".")
    blocks: list[Block] = [opening, kinds_table(deals), day_zero_table(deals, page_links(material))]
    drawn = calendar_figure(material)
    if drawn is not None:
        blocks.append(drawn)
    if len(material.results.readings):
        blocks.append(readings_table(material))
    return Section("Day zero", tuple(blocks))


def kinds_table(deals: pd.DataFrame) -> Table:
    """How many deals were announced when, with one deal's sentence for each kind."""
    columns = (
        Column("Announced"), Column("Deals", "n"), Column("For example", prose=True),
    )  # fmt: skip
    kinds = deals["timing"].value_counts()
    order = [kind for kind in KNOWN if kind in kinds] + sorted(set(kinds.index) - set(KNOWN))
    first = deals.drop_duplicates("timing").set_index("timing")
    examples = first["deal"].astype(str) + ": " + first["day_zero_reason"].astype(str)
    rows = tuple(
        (
            Text(capital(kind)), count(int(kinds[kind])),
            Text(f"{examples[kind]}."),
        )
        for kind in order
    )  # fmt: skip
    return Table("day_zero_kinds", prose("When the deals were announced"), columns, rows)


def day_zero_table(deals: pd.DataFrame, pages: Mapping[str, str]) -> Table:
    """One row a deal; a page shows the first, the workbook all."""
    columns = (
        Column("Deal"), Column("Exchange"), Column("Announced, its clock"), Column("Kind"),
        Column("Day zero"), Column("Close that day"), Column("Why", prose=True),
    )  # fmt: skip
    names = ["deal", "exchange", "announced_local", "timing", "day_zero", "day_zero_close",
             "day_zero_reason"]  # fmt: skip
    rows = tuple(
        (
            Text(str(deal), pages.get(str(deal), "")), Text(exchange), Text(stamp),
            Text(capital(kind)), Text(f"{day:%Y-%m-%d}"), Text(close), Text(f"{why}."),
        )
        for deal, exchange, stamp, kind, day, close, why
        in deals[names].head(MOST_ROWS).itertuples(index=False)
    )  # fmt: skip
    title, notes = prose("Day zero of each deal, and why"), rows_left_out(len(deals), "deals")
    return Table("day_zero", title, columns, rows, notes, shown=SHOWN)


def readings_table(material: Material) -> Table:
    """The headline beside the same deals with one choice about their events made differently."""
    level = level_words(material.study.level)
    columns = (
        Column("Reading", prose=True), Column("Deals", "n"), Column("Of them changed", "n"),
        Column(f"Mean with {level} interval", "bp"), Column("Leading test"),
        Column("No answer because", prose=True),
    )  # fmt: skip
    low, high = material.tests.interval
    digits = bp_digits(BP * (high - low) / 4, material.unit.decimals)
    rows = []
    for row in material.results.readings.to_dict("records"):
        statistic = plain(float(row["statistic"]), 2)
        mean, start, end = (bp(float(row[name]), digits) for name in ("mean", "ci_low", "ci_high"))
        rows.append(
            (
                Text(capital(str(row["reading"]))), count(int(row["n"])),
                count(int(row["changed"])), Interval(mean, start, end),
                Statistic(statistic, p_value(float(row["p_value"]))) if statistic else None,
                Text(str(row["reason"])),
            )
        )  # fmt: skip
    title = prose("The headline under another date or listing")
    note = prose("The statistic stands above its p-value. Deals without another date or listing "
                 "count in each row as they do in the headline.")  # fmt: skip
    return Table("readings", title, columns, tuple(rows), (note,))
