"""An outcome that the deal list held: its mean, its spread and how its groups differ."""

from __future__ import annotations

from pipeline.report.document import Block, Column, Interval, Section, Table, Text
from pipeline.report.finding import outcome_sentence
from pipeline.report.graphs import distribution_figure
from pipeline.report.material import Material, capital, prose, taken
from pipeline.report.numerals import count, in_unit, percent, unit_digits
from pipeline.report.wording import level_words


def outcome_section(material: Material) -> Section:
    """The mean in words, the spread over deals, and the table by group."""
    blocks: list[Block] = [prose(outcome_sentence(material))]
    figure = distribution_figure(material)
    blocks += [figure] if figure is not None else []
    return Section(f"The {material.outcome}", (*blocks, summary_table(material)))


def summary_table(material: Material) -> Table:
    """One row a group of deals, all of them first."""
    level, unit = level_words(material.study.level), material.unit
    columns = (
        Column("Deals"), Column("Deals", "n"), Column(f"Mean with {level} interval", unit.heading),
        Column("Median", unit.heading), Column("Standard deviation", unit.short),
        Column("Share above zero", "%"),
    )  # fmt: skip
    rows = []
    for _, row in material.results.summary.iterrows():
        reach = (float(row["ci_high"]) - float(row["ci_low"])) / 4
        digits = unit_digits(reach, unit)
        middle, low, high, median, spread = (
            in_unit(float(row[name]), unit, digits)
            for name in ("mean", "ci_low", "ci_high", "median", "std_dev")
        )
        rows.append(
            (
                Text(capital(str(row["group"]))), count(int(row["n"])),
                Interval(middle, low, high), median, spread,
                percent(float(row["share_positive"])),
            )
        )  # fmt: skip
    note = prose(
        "Nothing is held fixed here: groups may differ in much else. ", _independence(material)
    )
    title = prose("The ", taken(material.outcome, "study"), " by group")
    return Table("outcome", title, columns, tuple(rows), (note,))


def _independence(material: Material) -> str:
    if material.study.outcome.date:
        return "Intervals take deals of one date to move together."
    return "Intervals take deals as independent."
