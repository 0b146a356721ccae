"""What the tests do where nothing happened, and what the sample could have seen."""

from __future__ import annotations

import pandas as pd

from pipeline.report.document import Block, Column, Figure, Interval, Paragraph, Table, Text
from pipeline.report.material import Material, prose
from pipeline.report.numerals import BP, PERCENT, count, percent, show
from pipeline.report.sample_graphs import placebo_figure

EMPIRICAL = "mean"


def placebo_table(material: Material) -> Table | None:
    """How often each test rejects on dates without an announcement; None if not asked for."""
    frame = material.results.placebo
    sizes = frame[frame["test"] != EMPIRICAL] if len(frame) else frame
    if sizes.empty:
        return None
    columns = (
        Column("Test"), Column("Samples drawn", "n"), Column("Rejected, with two errors", "%"),
        Column("Nominal", "%"),
    )  # fmt: skip
    rows = tuple(
        (
            Text(str(row["title"])),
            count(int(row["draws"]), "samples"),
            _rate(row),
            percent(float(row["nominal"]), 0),
        )
        for _, row in sizes.iterrows()
    )
    notes = (
        prose("Each sample moves the same deals to other sessions, deals of one date together, far "
              "from any announcement of their companies; a test whose rate lies far from the "
              "nominal one does not hold in this sample. The range is two Monte-Carlo standard "
              "errors to each side."),
    )  # fmt: skip
    title = prose("Tests on dates without an announcement")
    return Table("placebo", title, columns, rows, notes)


def _rate(row: pd.Series) -> Interval:
    rate, error = float(row["rate"]), float(row["std_error"])
    low, high = max(0.0, rate - 2 * error), min(1.0, rate + 2 * error)
    return Interval(percent(rate, 1), percent(low, 1), percent(high, 1))


def placebo_sentence(material: Material) -> Paragraph | None:
    """How far the sample's mean lies from those of the drawn samples, in words."""
    if placebo_table(material) is None or "placebo_draws" not in material.headline_names:
        return None
    return prose(
        "Of ", material.number("placebo_draws"), " samples on dates without an announcement, ",
        material.number("placebo_farther"),
        " had a mean at least as far from zero: an empirical p-value of ",
        material.number("placebo_p", digits=3), ".",
    )  # fmt: skip


def power_figure(material: Material) -> Figure | None:
    """The chance of finding a mean of a given size with these deals; None without a spread."""
    frame = material.results.power
    if frame.empty or "detectable_mean" not in material.headline_names:
        return None
    data = pd.DataFrame(
        {
            "effect_bp": frame["effect"].astype(float) * BP,
            "power_percent": frame["power"].astype(float) * PERCENT,
            "deals_needed": frame["deals_needed"].astype(float),
        }
    )
    found = material.number("detectable_mean", scale=BP, digits=0)
    title = prose("A true mean of about ", found, " bp is found four times in five")
    caption = prose(
        "The chance that a two-sided test at ", material.percent("significance_level"),
        " rejects a zero mean, by the size of the true mean in basis points, with the deals of the "
        "headline window, those that move together counted for less. A smaller mean is likely to "
        "look like nothing.",
    )  # fmt: skip
    words = ", ".join(
        f"{show(row['effect_bp'])} bp {show(row['power_percent'])}%"
        for _, row in data.iloc[::3].iterrows()
    )
    alt = f"Rising curve of power by size of the true mean: {words}."
    marks = {"detectable": float(found.value) * BP}
    return Figure("power", "curve", title, caption, alt, data, marks)


def proof_blocks(material: Material) -> list[Block]:
    """Placebo sizes and power, as far as the run has them."""
    found = (
        placebo_sentence(material),
        placebo_table(material),
        placebo_figure(material),
        power_figure(material),
    )
    return [block for block in found if block is not None]
