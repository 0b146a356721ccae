"""What would overturn the finding: diagnostics, sensitivity, the size in money, and limits."""

from __future__ import annotations

import math
from dataclasses import replace

import pandas as pd

from pipeline.core.estimate import Estimate
from pipeline.core.outcome import Unit, money_in
from pipeline.report.curve import curve_blocks
from pipeline.report.document import (
    Block,
    Bullets,
    Cell,
    Column,
    Interval,
    Paragraph,
    Row,
    Section,
    Table,
    Text,
)
from pipeline.report.graphs import sensitivity_figure, variant_digits
from pipeline.report.headline import MEAN_REACTION, sensitivity_targets
from pipeline.report.material import Material, capital, effect_digits, embedded, prose, taken
from pipeline.report.numerals import count, digits_for, in_unit, p_value, plain, unit_digits
from pipeline.report.wording import any_cell, level_words, set_cell, set_words


def diagnostics_section(material: Material) -> Section:
    """Counts of verdicts and the table of checks."""
    frame = material.results.diagnostics
    if frame.empty:
        return Section("Diagnostics", (prose("The run made no diagnostics."),))
    passed, warned, failed = (
        material.number(f"diagnostics_{verdict}") for verdict in ("pass", "warn", "fail")
    )
    opening = prose("Checks that pass: ", passed, "; that warn: ", warned, "; that fail: ",
                    failed, ".")  # fmt: skip
    return Section("Diagnostics", (opening, diagnostics_table(material)))


def diagnostics_table(material: Material) -> Table:
    """One row a check, its verdict in words, worst first."""
    frame = material.results.diagnostics
    columns = (
        Column("Verdict"), Column("Subject"), Column("Check"), Column("Value"),
        Column("Threshold"), Column("What it means", prose=True), Column("Source", prose=True),
    )  # fmt: skip
    order = {"fail": 0, "warn": 1, "pass": 2}
    ranked = frame.assign(rank=frame["verdict"].map(order).fillna(3))
    ranked = ranked.sort_values("rank", kind="stable")
    names = ("verdict", "subject", "check", "value", "threshold", "meaning", "source")
    rows = tuple(
        tuple(_checked(material, row, name) for name in names) for _, row in ranked.iterrows()
    )
    return Table("diagnostics", prose("Diagnostics, the worst first"), columns, rows)


def _checked(material: Material, row: pd.Series, name: str) -> Cell:
    if name == "value" and str(row["check"]).endswith(", p"):
        return p_value(float(row["value"]))
    return any_cell(_worded(material, row[name]))


def _worded(material: Material, value: object) -> object:
    return material.in_words(value) if isinstance(value, str) else value


def sensitivity_section(material: Material) -> Section | None:
    """The numbers asked about under other choices; None if the run made no variants."""
    blocks: list[Block] = []
    for target in sensitivity_targets(material.results):
        blocks.append(_variants_sentence(material, target))
        if target == MEAN_REACTION or "breakdowns" not in material.frames:
            blocks.append(sensitivity_figure(material, target))
    if not blocks:
        return None
    more = [table for table in (ladder_table(material), directions_table(material)) if table.rows]
    silent = Bullets(tuple(prose(taken(note, "check")) for note in material.results.doubts))
    after = (*more, *((silent,) if silent.items else ()))
    blocks += curve_blocks(material)
    return Section("Sensitivity", (*blocks, sensitivity_table(material), *after))


def _variants_sentence(material: Material, target: str) -> Paragraph:
    ends = f"sensitivity_low: {target}", f"sensitivity_high: {target}"
    reach = material.span(ends, variant_digits(material, target))
    variants = material.number(f"sensitivity_variants: {target}")
    return prose("Over ", variants, " variants the ", taken(target, "check"), " runs from ", reach,
                 ".")  # fmt: skip


def ladder_table(material: Material) -> Table:
    """The least-squares effect's error under every treatment of it."""
    frame, unit = material.results.ladder, material.unit
    columns = (
        Column("Errors"), Column("Standard error", unit.short), Column("Degrees of freedom"),
        Column("Interval", unit.short), Column("p"), Column("Note", prose=True),
    )  # fmt: skip
    digits = unit_digits(float(frame["std_error"].median()), unit) if len(frame) else 0
    rows = tuple(
        (
            Text(capital(material.in_words(str(row["name"])))), 
            in_unit(row["std_error"], unit, digits + 1),
            plain(row["df"], 0),
            Interval(None, in_unit(row["low"], unit, digits), in_unit(row["high"], unit, digits))
            if math.isfinite(row["low"] + row["high"]) else None,
            p_value(row["p"]), Text(material.in_words(str(row["note"]))),
        )
        for _, row in frame.iterrows()
    )  # fmt: skip
    note = prose("One coefficient, the least-squares effect with the study's fixed effects: how "
                 "far its error hangs on who is taken to move with whom.")  # fmt: skip
    title = prose("The same effect under other treatments of its errors")
    return Table("ladder", title, columns, rows, (note,))


SIGNS = {"+": "up", "-": "down", "0": "none", "?": "not known"}


def directions_table(material: Material) -> Table:
    """Suspected factors nobody recorded, and which way each pushes the least-squares effect."""
    frame = material.results.directions
    columns = (
        Column("Suspected factor", prose=True), Column("Pushes the outcome"),
        Column("Pushes the choice"), Column("Bias of least squares"),
        Column("So the true effect is", prose=True), Column("The analyst's evidence", prose=True),
    )  # fmt: skip
    signs = ("on_outcome", "on_treatment", "bias")
    rows = tuple(
        (
            Text(str(row["factor"])), *(Text(SIGNS[str(row[name])]) for name in signs),
            Text(str(row["true_effect"])), Text(str(row["evidence"])),
        )
        for _, row in frame.iterrows()
    )  # fmt: skip
    note = prose("The bias has the sign of the two pushes multiplied. If companies choose the "
                 "feature in answer to the outcome they expect, least squares is pushed the same "
                 "way: up if they choose it for a good one, down if for a bad one.")  # fmt: skip
    title = prose("Which way a suspected factor would push")
    return Table("directions", title, columns, rows, (note,))


def sensitivity_table(material: Material) -> Table:
    """One row a variant, in the outcome's unit."""
    level = level_words(material.study.level)
    columns = (
        Column("Number"), Column("What was varied"), Column("Variant"),
        Column(f"Estimate with {level} interval", material.unit.short), Column("Deals", "n"),
    )  # fmt: skip
    rows = tuple(
        _variant_row(target, row, material.unit)
        for target, variants in sensitivity_targets(material.results).items()
        for _, row in variants.iterrows()
    )
    return Table("sensitivity", prose("Each variant"), columns, rows)


def _variant_row(target: str, row: pd.Series[float], unit: Unit) -> Row:
    estimate, low, high = (float(row[name]) for name in ("estimate", "ci_low", "ci_high"))
    digits = unit_digits((high - low) / 4, unit)
    middle, below, above = (in_unit(value, unit, digits) for value in (estimate, low, high))
    deals = float(row["n"])
    return (
        Text(target), any_cell(row["dimension"]), any_cell(row["variant"]),
        Interval(middle, below, above),
        count(int(deals)) if math.isfinite(deals) else None,
    )  # fmt: skip


def size_section(material: Material) -> Section | None:
    """The effect in money and against the spread; None without anything to scale it by."""
    tables = [t for t in (money_table(material), spread_table(material)) if t.rows]
    return Section("Economic size", tuple(tables)) if tables else None


MONEY_NOTE = prose(
    "The effect in basis points times the market value of the company; the interval likewise. A "
    "reaction over a few sessions is not a yearly return and is not scaled to one."
)


def money_table(material: Material) -> Table:
    """The mean outcome and the feature's effect in money at three sizes of deal."""
    unit = material.money_unit
    lead, base = material.lead, material.study.words(material.study.outcome.base)
    columns = [Column(f"At a {base} of"), Column(capital(base), unit),
               Column(f"Mean {material.outcome}", unit)]  # fmt: skip
    columns += [Column(f"Effect: {material.feature}", unit)] if lead else []
    names = {"quarter": "lower quartile", "median": "median", "three_quarter": "upper quartile"}
    rows: list[Row] = []
    for key, words in names.items():
        if material.known(f"{key}_market_value"):
            value = material.number(f"{key}_market_value").value
            start = (Text(f"the {words} deal"), plain(value, 0, unit))
            rows.append((*start, *_money_cells(material, value)))
    note = prose("The effect as a share times the ", taken(base, "study"), "; the interval "
                 "likewise.") if material.ready else MONEY_NOTE  # fmt: skip
    return Table("money", prose("In money"), tuple(columns), tuple(rows), (note,))


def _money_cells(material: Material, by: float) -> tuple[Interval, ...]:
    unit, (mean, low, high) = material.money_unit, material.mean
    digits = digits_for(by * (high - low) / 4, 2)
    ends = (plain(by * low, digits, unit), plain(by * high, digits, unit))
    cells = [Interval(plain(by * mean, digits, unit), *ends)]
    if material.lead is not None:
        cells.append(_money_set(material, material.lead, by))
    return tuple(cells)


def _money_set(material: Material, lead: Estimate, by: float) -> Interval:
    unit = material.money_unit
    term, found = lead.term(lead.treatment), lead.interval
    digits = digits_for(by * term["std_error"], 2)
    estimate = plain(by * term["coefficient"], digits, unit)
    if set_cell(0.0, found, 0).words:
        money = money_in(material.study.currency, material.house.money)
        words = set_words(found, digits, replace(money, scale=by))
        return Interval(estimate, None, None, words)
    return Interval(estimate, plain(by * found.low, digits), plain(by * found.high, digits))


def spread_table(material: Material) -> Table:
    """What one standard deviation of each variable goes with, by the lead column."""
    lead, deals = material.lead, material.results.deals
    columns = (
        Column("Variable"), Column("Standard deviation"),
        Column("One standard deviation goes with", material.unit.short),
        Column(f"As a share of the spread of the {material.outcome}", "%"),
    )  # fmt: skip
    names = [n for n in lead.names if n in deals] if lead else []
    rows = [_spread_row(material, lead, name) for name in names if lead is not None]
    title = prose("By one standard deviation, in the lead column")
    return Table("spread", title, columns, tuple(row for row in rows if row is not None))


def _spread_row(material: Material, lead: Estimate, name: str) -> Row | None:
    values = pd.to_numeric(material.results.deals[name], errors="coerce").astype(float)
    deviation = float(values.std())
    if not math.isfinite(deviation) or deviation == 0:
        return None
    term = lead.term(name)
    error = deviation * term["std_error"]
    unit = material.unit
    digits = effect_digits(lead, unit) if name == lead.treatment else unit_digits(error, unit)
    move = deviation * term["coefficient"]
    spread = material.spread
    return (
        Text(capital(material.study.words(name))), plain(deviation),
        in_unit(move, unit, digits),
        plain(100 * move / spread, 0, "%") if spread > 0 else None,
    )  # fmt: skip


def limits_section(material: Material) -> Section:
    """What the design cannot say."""
    return Section("Limits", (Bullets(limits(material)),))


def _ready_limits(material: Material) -> list[Paragraph]:
    """What an outcome that was computed elsewhere leaves open."""
    outcome = embedded(material.study.outcome.words, "study")
    return [
        prose("The ", outcome, " was computed elsewhere. Its errors, and what its makers chose, "
              "are in every number here.", lead="The outcome."),
    ]  # fmt: skip


def limits(material: Material) -> tuple[Paragraph, ...]:
    """The limits that follow from the results, then those of any such study."""
    found = _ready_limits(material) if material.ready else [
        prose("A price reaction is what investors thought at the time, less what they had "
              "expected. News that had leaked is not in it.", lead="Anticipation."),
        prose("A reaction around the announcement says nothing of how the deal turned out.",
              lead="Horizon."),
    ]  # fmt: skip
    if material.study.treatment:
        found.append(prose("The feature was chosen. Reasons for the choice that no column "
                           "controls for stand in the number.", lead="Choice."))  # fmt: skip
    if len(material.study.windows) > 1:
        found.append(prose("Several windows were looked at; only the headline one was declared "
                           "to lead.", lead="Many looks."))  # fmt: skip
    if material.number("deals_dropped").value:
        found.append(prose("Deals dropped: ", material.number("deals_dropped"), " of ",
                           material.number("deals_read"), ". They may differ from those kept.",
                           lead="Lost deals."))  # fmt: skip
    found.append(prose("The finding is an average of the deals in the sample. Other markets, "
                       "years and kinds of deal may differ.", lead="Reach."))  # fmt: skip
    found.append(prose("An interval that holds zero does not show that there is no effect; it "
                       "shows what the sample could not tell apart from none.",
                       lead="No effect."))  # fmt: skip
    warnings = [f for f in material.results.findings if f.severity != "note"]
    found += [prose(taken(f"{f.where}: {f.got}", "check"), lead="Input.") for f in warnings[:3]]
    return tuple(found)
