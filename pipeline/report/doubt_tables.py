"""The tables of the doubts, one a question: what each assumption would need to be true."""

from __future__ import annotations

import math
from collections.abc import Mapping

import pandas as pd

from pipeline.core.outcome import Unit
from pipeline.report.deal_names import page_links
from pipeline.report.document import Column, Interval, Row, Table, Text
from pipeline.report.material import Material, capital, embedded, named, prose, taken
from pipeline.report.numerals import (
    PERCENT,
    count,
    in_unit,
    p_value,
    percent,
    plain,
    show,
    unit_digits,
)
from pipeline.report.wording import level_words

TOP_DEALS, TOP_GROUPS = 5, 2
VERDICTS = {"holds": "beyond it", "gives": "within it"}


def breakdowns_table(material: Material) -> Table:
    """One row a statement: what would have to be true for it to fall, and how much that is."""
    columns = (
        Column("Statement", prose=True), Column("Assumption", prose=True),
        Column("It falls if", prose=True), Column("Measured by", prose=True), Column("Lies"),
        Column("Source", prose=True),
    )  # fmt: skip
    rows = tuple(
        (
            Text(str(row["statement"])), Text(str(row["assumption"])),
            Text(capital(_filled(row))), Text(capital(str(row["compared"]))),
            Text(VERDICTS[str(row["verdict"])]), Text(str(row["source"])),
        )
        for _, row in material.frames["breakdowns"].iterrows()
    )  # fmt: skip
    notes = (
        prose("Beyond it: more would be needed than what it is measured by. A control is the "
              "measure for lack of a better one: what nobody recorded may be stronger than any "
              "control. The numbers stand in ", taken("breakdowns.parquet", "file"), " too."),
    )  # fmt: skip
    return Table("breakdowns", prose("What would need to be true"), columns, rows, notes)


def _filled(row: pd.Series[float]) -> str:
    """The clause with its number, or that nothing does it."""
    value = float(row["value"])
    if math.isinf(value):
        return f"nothing does it: {str(row['needed']).replace('{}', 'any share')}"
    if value == 0:
        return "it does not hold as it is"
    return str(row["needed"]).replace("{}", in_words(value, str(row["unit"])))


def in_words(value: float, unit: str) -> str:
    """A share as ``25%``, anything else with two decimals."""
    if unit == "share":
        return f"{show(value * PERCENT, share_digits(value))}%"
    return show(value, 2)


def _with_notes(columns: tuple[Column, ...], rows: tuple[Row, ...]) -> tuple[Column, ...]:
    """The columns, without a last one of notes that is empty throughout."""
    return columns if any(row[-1] != Text("") for row in rows) else columns[:-1]


def _cell(row: pd.Series[float], unit: Unit, digits: int) -> Interval:
    """An effect above its interval."""
    names = ("estimate", "ci_low", "ci_high")
    middle, low, high = (in_unit(float(row[name]), unit, digits) for name in names)
    return Interval(middle, low, high)


def _digits(material: Material, errors: pd.Series[float]) -> int:
    return unit_digits(float(errors.abs().median()), material.unit)


def _level_digits(material: Material, target: str, default: int) -> int:
    """Decimals that the error of a varied number deserves, from its intervals in the variants."""
    frame = material.results.sensitivity
    if frame.empty or "target" not in frame:
        return default
    own = frame[frame["target"] == target]
    reach = (own["ci_high"] - own["ci_low"]).astype(float).dropna() / 4
    return unit_digits(float(reach.median()), material.unit) if len(reach) else default


def strengths_table(material: Material) -> Table | None:
    """Confounders likened to controls."""
    frame = material.frames.get("hidden_strengths")
    if frame is None or frame.empty:
        return None
    unit = material.unit
    digits = _digits(material, (frame["ci_high"] - frame["ci_low"]).astype(float) / 4)
    columns = (
        Column("As strong as"), Column("Times"), Column("Explains of the feature", "%"),
        Column("Explains of the outcome", "%"),
        Column(f"Effect with {level_words(material.study.level)} interval", unit.short),
        Column("Note", prose=True),
    )  # fmt: skip
    rows: tuple[Row, ...] = tuple(
        (
            Text(capital(material.study.words(str(row["control"])))), plain(row["multiple"]),
            percent(row["with_treatment"], 1), percent(row["with_outcome"], 1),
            _cell(row, unit, digits),
            Text(str(row["note"])),
        )
        for _, row in frame.iterrows()
    )  # fmt: skip
    kept = _with_notes(columns, rows)
    rows = tuple(row[: len(kept)] for row in rows)
    return Table("hidden_strengths", prose("A hidden factor likened to a control"), kept, rows)


def selection_table(material: Material) -> Table | None:
    """Selection on what is hidden, for growing largest R²."""
    frame = material.frames.get("largest_r2")
    if frame is None or frame.empty:
        return None
    unit = material.unit
    reach = (frame["ci_high"] - frame["ci_low"]).astype(float)
    digits = unit_digits(float(reach.median()) / 4, unit)
    columns = (
        Column("Largest R² taken as"), Column("Largest R²"), Column("Strength that gives zero"),
        Column("Effect at strength one", unit.short), Column("By the approximation", unit.short),
        Column("All roots", unit.short), Column("Note", prose=True),
    )  # fmt: skip
    rows = tuple(_r2_row(row, material, digits) for _, row in frame.iterrows())
    notes = (
        prose("Strength one: what is hidden selects as strongly as all controls together. The "
              "exact effects are roots of a cubic; the one chosen lies on the side to which the "
              "controls moved the effect. An outcome leaves most to chance, so a largest R² near "
              "that of the controls asks for little: read the rows further down."),
    )  # fmt: skip
    kept = _with_notes(columns, rows)
    rows = tuple(row[: len(kept)] for row in rows)
    return Table("largest_r2", prose("Selection on what is hidden"), kept, rows, notes)


def _r2_row(row: pd.Series[float], material: Material, digits: int) -> Row:
    unit = material.unit
    middle = in_unit(float(row["estimate"]), unit, digits)
    bounded = math.isfinite(float(row["ci_low"]))
    low, high = (
        in_unit(float(row[n]), unit, digits) if bounded else None for n in ("ci_low", "ci_high")
    )
    roots = [float(root) for root in str(row["roots"]).split(", ") if root]
    listed = "; ".join(_shown(root, material, digits) for root in roots)
    return (
        Text(str(row["rule"])), plain(float(row["largest_r2"]), 2),
        plain(float(row["strength_for_zero"]), 2), Interval(middle, low, high),
        in_unit(float(row["approximation"]), unit, digits), Text(listed), Text(str(row["note"])),
    )  # fmt: skip


def _shown(value: float, material: Material, digits: int) -> str:
    return f"{value * material.unit.scale:,.{digits}f}"


def controls_table(material: Material) -> Table | None:
    """The identity short = long + delta × gamma for each control."""
    frame = material.frames.get("controls_left_out")
    if frame is None or frame.empty:
        return None
    unit = material.unit
    digits = unit.decimals
    errors = material.results.ladder
    level = _digits(material, errors["std_error"]) if len(errors) else digits
    columns = (
        Column("Control left out"), Column("Effect without it", unit.short),
        Column("Effect with it", unit.short), Column("What it does to the outcome", unit.short),
        Column("How it moves with the feature"), Column("Product", unit.short),
    )  # fmt: skip
    rows = tuple(
        (
            Text(capital(material.study.words(str(row["control"])))),
            in_unit(row["short"], unit, level), in_unit(row["long"], unit, level),
            in_unit(row["gamma"], unit, level), plain(row["delta"]),
            in_unit(row["gamma"] * row["delta"], unit, digits),
        )
        for _, row in frame.iterrows()
    )  # fmt: skip
    notes = (
        prose("The effect without a control is the effect with it plus the product, exactly "
              "until they are rounded. A hidden factor would work the same way: only its two "
              "parts are not known."),
    )  # fmt: skip
    return Table("controls_left_out", prose("What each control does"), columns, rows, notes)


def expectations_table(material: Material) -> Table | None:
    """What was known beforehand against the chance to close, for each number."""
    frame = material.frames.get("expectations")
    if frame is None or frame.empty:
        return None
    unit = material.unit
    chances = list(dict.fromkeys(frame["completion"]))
    digits = unit_digits(float((frame["ci_high"] - frame["ci_low"]).median()) / 4, unit)
    columns = (
        Column("Number"), Column("Known beforehand", "%"),
        *(Column(f"Chance to close {100 * c:.0f}%", unit.short) for c in chances),
    )  # fmt: skip
    rows = []
    for (target, known), part in frame.groupby(["target", "known_before"], sort=False):
        cells = [_cell(row, unit, digits) for _, row in part.iterrows()]
        rows.append((Text(capital(str(target))), percent(float(str(known))), *cells))
    notes = (
        prose("The effect of the feature on the value of a deal, were that share of the news in "
              "the price before and that the chance to close; the same for all deals. What was "
              "reported is the row and column of none known and all closing."),
    )  # fmt: skip
    title = prose("Half-known news and deals that may not close")
    return Table("expectations", title, columns, tuple(rows), notes)


def left_out_table(material: Material) -> Table | None:
    """The deals, and the groups of deals, that move the answer most."""
    frame = material.frames.get("left_out")
    if frame is None or frame.empty:
        return None
    unit = material.unit
    top = [
        part.head(TOP_DEALS if dimension == "deal" else TOP_GROUPS)
        for (_, dimension), part in frame.groupby(["target", "dimension"], sort=False)
    ]
    shown = pd.concat(top, ignore_index=True)
    digits = _digits(material, shown["change"].astype(float) / 5)
    targets = dict.fromkeys(shown["target"].astype(str))
    levels = {target: _level_digits(material, target, digits) for target in targets}
    columns = (
        Column("Number"), Column("Left out"), Column("Which"), Column("Deals", "n"),
        Column("Without it", unit.short), Column("Change", unit.short),
    )  # fmt: skip
    pages = page_links(material)
    rows = tuple(
        (
            Text(capital(str(row["target"]))), Text(f"one {row['dimension']}"),
            Text(str(row["group"]), _page(row, pages)), count(int(row["deals"])),
            in_unit(float(row["estimate"]), unit, levels[str(row["target"])]),
            in_unit(float(row["change"]), unit, digits),
        )
        for _, row in shown.iterrows()
    )  # fmt: skip
    notes = (prose("The largest of each kind; the data file ", taken("left_out.parquet", "file"),
                   " holds every one."),)  # fmt: skip
    return Table("left_out", prose("What moves the answer most"), columns, rows, notes)


def _page(row: pd.Series[float], pages: Mapping[str, str]) -> str:
    return pages.get(str(row["group"]), "") if str(row["dimension"]) == "deal" else ""


def both_ways_table(material: Material) -> Table | None:
    """Choice and outcome as two equations; None unless the study asked."""
    frame = material.frames.get("both_ways")
    if frame is None or frame.empty:
        return None
    columns = (
        Column("Equation"), Column("Variable"),
        *(Column(f"By {method}") for method in dict.fromkeys(frame["method"])),
        Column("p, by three stages"),
    )  # fmt: skip
    explained = {"outcome": material.study.outcome.words, "choice": material.feature}
    rows = []
    for (equation, term), part in frame.groupby(["equation", "term"], sort=False):
        cells = [
            Interval(plain(row["coefficient"]), plain(row["ci_low"]), plain(row["ci_high"]))
            for _, row in part.iterrows()
        ]
        words = Text(capital(material.study.words(str(term))))
        last = p_value(float(part["p_value"].iloc[-1]))
        rows.append((Text(capital(explained[str(equation)])), words, *cells, last))
    level = taken(level_words(material.study.level), "study")
    notes = (
        prose("Coefficients with ", level, " intervals, the outcome as a decimal number. The "
              "instruments tell what the choice does to the outcome; the controls named for it "
              "tell what the outcome does to the choice. ", _answer(frame)),
    )  # fmt: skip
    feature = embedded(named(material.feature), "study")
    return Table("both_ways", prose("The outcome and ", feature, " as two equations"), columns,
                 tuple(rows), notes)  # fmt: skip


def _answer(frame: pd.DataFrame) -> str:
    """Which way least squares is pushed if the choice answers the outcome.

    The bias has the sign of what the outcome does to the choice, while their product is below one
    (Wooldridge 2010, sec. 9.1).
    """
    rows = frame[frame["equation"] == "choice"]
    row = rows[rows["term"] == rows["term"].iloc[0]].iloc[-1]
    if row["ci_low"] <= 0 <= row["ci_high"]:
        return "What the outcome does to the choice cannot be told from nothing here."
    way = "up" if row["coefficient"] > 0 else "down"
    return f"The outcome moves the choice {way}, and with it pushes the least-squares effect {way}."


def share_digits(value: float) -> int:
    """Decimals of a share printed in percent."""
    return 0 if value * PERCENT >= 10 or value == 0 else 1
