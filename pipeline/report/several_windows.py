"""What looking at several windows costs: the p-values of each, adjusted in three ways."""

from __future__ import annotations

import pandas as pd

from pipeline.core.window import Window
from pipeline.report.document import Column, Row, Table, Text
from pipeline.report.material import Material, prose, taken
from pipeline.report.numerals import BP, bp, bp_digits, count, p_value, plain
from pipeline.report.wording import window_label

SEVERAL = "several_windows"


def several_windows_table(material: Material) -> Table | None:
    """One row a window under the headline model; None where only one was declared."""
    frame = material.results.several_windows
    if frame.empty:
        return None
    own = frame[frame["expected_return"] == material.study.models[0]]
    if len(own) < 2:
        return None
    columns = (
        Column("Window", "sessions"), Column("Declared as"), Column("Deals", "n"),
        Column("Dates", "n"), Column("Mean", "bp"), Column("t, by date"), Column("p"),
        Column("p, Holm"), Column("q, Benjamini–Hochberg"), Column("p, Romano–Wolf"),
    )  # fmt: skip
    rows = tuple(_row(row, material.unit.decimals) for _, row in own.iterrows())
    model = material.study.words(material.study.models[0])
    title = prose("What several windows cost, ", taken(model, "study"))
    notes = (
        prose("The statistic is the mean over its error clustered by date. Its distribution comes "
              "from resamples of whole dates with all their deals, the same dates for every "
              "window, about a mean of zero; so the adjusted value of Romano and Wolf knows how "
              "alike the windows are, which that of Holm does not."),
        prose("Holm and Romano–Wolf bound the chance of any false rejection among the secondary "
              "windows, the q-value the expected share of false ones among those called "
              "significant. The headline window was declared before looking and pays for none. "
              "Blank: too few dates to resample. Deals of different dates are taken as "
              "independent."),
    )  # fmt: skip
    return Table(SEVERAL, title, columns, rows, notes)


def _row(row: pd.Series, most: int) -> Row:
    mean, t = float(row["mean"]), float(row["statistic"])
    window = Window(int(row["window_start"]), int(row["window_end"])).label
    error = abs(mean / t) if t else 0.0
    adjusted = (p_value(float(row[name])) for name in ("p_holm", "q_value", "p_romano_wolf"))
    return (
        Text(window_label(window)), Text(str(row["declared"])), count(int(row["n"])),
        count(int(row["dates"]), "dates"), bp(mean, bp_digits(error * BP, most)), plain(t, 2),
        p_value(float(row["p_value"])), *adjusted,
    )  # fmt: skip
