"""Who announces: the reviewers' questions to the selection model, and outcomes not seen."""

from __future__ import annotations

import math
from collections.abc import Iterator

import pandas as pd

from pipeline.report.document import (
    Block,
    Cell,
    Column,
    Figure,
    Interval,
    Row,
    Section,
    Table,
    Text,
)
from pipeline.report.material import Material, capital, prose, taken
from pipeline.report.numerals import (
    count,
    digits_for,
    in_unit,
    p_value,
    percent,
    plain,
    show,
    unit_digits,
)
from pipeline.report.sample_graphs import correction_figure
from pipeline.report.wording import level_words, per_unit

VERDICTS = {"pass": "pass", "warn": "warn", "fail": "fail", "reading": ""}
NOTHING = pd.DataFrame()


def selection_section(material: Material) -> Section | None:
    """The review of the selection model and what goes with it; None if nothing was asked for."""
    blocks = [*_review(material), *_gains(material), *_bounds(material)]
    return Section("Who announces, and what is not seen", tuple(blocks)) if blocks else None


def _frame(material: Material, name: str) -> pd.DataFrame:
    return material.results.selection.get(name, NOTHING)


def _review(material: Material) -> Iterator[Block]:
    if _frame(material, "selection_checks").empty:
        return
    yield prose("The selection model asks who announced before it compares returns. It is only "
                "as good as its first equation and as the argument for the variables that the "
                "second one leaves out; the tables below put the questions a reviewer "
                "asks.")  # fmt: skip
    yield first_stage_table(material)
    yield checks_table(material)
    yield versions_table(material)
    correction = correction_figure(material)
    if correction is not None:
        yield correction
    figure = profile_figure(_frame(material, "selection_likelihood"))
    if figure is not None:
        yield figure
        yield starts_table(_frame(material, "selection_likelihood"))


def first_stage_table(material: Material) -> Table:
    """The probit of announcing with average marginal effects."""
    columns = (
        Column("Variable"), Column("Declared excluded"), Column("Coefficient"),
        Column("Standard error"), Column("Statistic"), Column("p"),
        Column("Average change of the probability", "%"), Column("Its standard error", "%"),
        Column("For"),
    )  # fmt: skip
    frame = _frame(material, "selection_first_stage")
    rows = tuple(_first_row(material, row) for _, row in frame.iterrows())
    title = prose("Who announces: the probit over all candidates")
    note = prose("The change of the probability is averaged over all candidates, each at its own "
                 "figures.")  # fmt: skip
    return Table("selection_first_stage", title, columns, rows, (note,))


def _first_row(material: Material, row: pd.Series[float]) -> Row:
    digits = digits_for(float(row["std_error"]), 6)
    reach = digits_for(100 * float(row["marginal_std_error"]), 4)
    return (
        Text(capital(material.study.words(str(row["term"])))),
        Text("yes" if row["excluded"] else "no"),
        plain(float(row["coefficient"]), digits), plain(float(row["std_error"]), digits),
        plain(float(row["statistic"]), 2), p_value(float(row["p_value"])),
        percent(float(row["marginal_effect"]), reach),
        percent(float(row["marginal_std_error"]), reach), Text(str(row["step"])),
    )  # fmt: skip


def checks_table(material: Material) -> Table:
    """One row a question, its answer against its threshold."""
    columns = (
        Column("Part"), Column("Question"), Column("Value"), Column("p"), Column("Wanted"),
        Column("Verdict"), Column("What it means", prose=True), Column("Source", prose=True),
    )  # fmt: skip
    rows = tuple(
        (
            Text(str(row["part"])), Text(material.in_words(str(row["check"]))),
            plain(float(row["value"])), p_value(float(row["p_value"])),
            Text(str(row["threshold"])), Text(VERDICTS[str(row["verdict"])]),
            Text(material.in_words(str(row["meaning"]))), Text(str(row["source"])),
        )
        for _, row in _frame(material, "selection_checks").iterrows()
    )  # fmt: skip
    return Table("selection_checks", prose("What reviewers ask of it"), columns, rows)


def versions_table(material: Material) -> Table:
    """The feature's coefficient under each way to model who announces."""
    unit = material.unit
    heading = per_unit(unit)
    columns = (
        Column("What was varied"), Column("Version"),
        Column(f"Effect with {level_words(material.study.level)} interval", heading),
        Column("Standard error", heading), Column("Inverse Mills ratio", unit.short),
        Column("p of the correction"), Column("Deals", "n"),
        Column("No number because", prose=True), Column("Source", prose=True),
    )  # fmt: skip
    rows = tuple(
        _version_row(material, row) for _, row in _frame(material, "selection_versions").iterrows()
    )
    title = prose("The effect with and without the correction, and under other corrections")
    notes = (
        prose("A correction that is not significant is no proof that there is no selection: see "
              "its variance inflation above."),
        prose("Powers of the index leave the constant without a meaning; the effect keeps its "
              "own."),
    )  # fmt: skip
    return Table("selection_versions", title, columns, rows, notes)


def _version_row(material: Material, row: pd.Series[float]) -> Row:
    unit, error = material.unit, float(row["std_error"])
    digits = unit_digits(error, unit)
    words = (Text(str(row["kind"])), Text(material.in_words(str(row["version"]))))
    after = (Text(material.in_words(str(row["reason"]))), Text(str(row["source"])))
    if not math.isfinite(error):
        return (*words, None, None, None, None, None, *after)
    low, high = (in_unit(float(row[end]), unit, digits) for end in ("ci_low", "ci_high"))
    return (
        *words, Interval(in_unit(float(row["estimate"]), unit, digits), low, high),
        in_unit(error, unit, digits + 1), in_unit(float(row["correction"]), unit, digits),
        p_value(float(row["correction_p"])), count(int(row["n"])), *after,
    )  # fmt: skip


def profile_figure(frame: pd.DataFrame) -> Figure | None:
    """The likelihood over the correlation of the errors; None if it was not made."""
    if frame.empty:
        return None
    profile = frame[frame["kind"] == "profile"].reset_index(drop=True)
    data = profile[["rho", "log_likelihood"]]
    taken_up = frame[frame["agrees"]]
    peaks = _peaks(data)
    edge = 0 in peaks or len(data) - 1 in peaks
    words = (
        "keeps rising towards an end of its range there" if edge
        else "has one peak, inside its range" if len(peaks) == 1
        else "has several peaks"
    )  # fmt: skip
    caption = prose(
        "For each correlation between announcing and return, the highest log-likelihood of both "
        "equations, counted from the highest point seen. Values above the dashed line lie within "
        "the usual interval. Flat, the data say little of the correlation; several peaks or one at "
        "the end say that the model does not fit, and no estimate is shown at the end."
    )
    marks = {"estimate": float(taken_up["rho"].iloc[0])} if len(taken_up) else {}
    alt = f"Line of the log-likelihood over the correlation of the errors; it {words}."
    title = prose(f"The likelihood {words}")
    return Figure("selection_likelihood", "profile", title, caption, alt, data, marks)


def _peaks(data: pd.DataFrame) -> list[int]:
    """Places of the profile that are higher than their neighbours."""
    values = [-math.inf, *data["log_likelihood"].astype(float), -math.inf]
    return [
        at
        for at in range(len(data))
        if values[at + 1] >= values[at] and values[at + 1] > values[at + 2]
    ]


def starts_table(frame: pd.DataFrame) -> Table:
    """Where each start of the climb led."""
    columns = (
        Column("Started at a correlation of"), Column("Led to"),
        Column("Log-likelihood below the highest seen"), Column("Settled"),
        Column("The maximum shown"),
    )  # fmt: skip
    starts = frame[frame["kind"] == "start"]
    rows = tuple(
        (
            plain(float(row["began"]), 3), plain(float(row["rho"]), 3),
            plain(-float(row["log_likelihood"]), 3), Text("yes" if row["converged"] else "no"),
            Text("yes" if row["agrees"] else "no"),
        )
        for _, row in starts.iterrows()
    )  # fmt: skip
    title = prose("The climbs to the maximum of the likelihood")
    return Table("likelihood_starts", title, columns, rows)


def _gains(material: Material) -> Iterator[Block]:
    frame = _frame(material, "expected_gain")
    if frame.empty:
        return
    yield prose("If investors foresee some of the deals, a return shows only what they had not "
                "foreseen. The models below speak of the expected gain of a deal and of private "
                "news; their coefficients are no differences in returns and are not compared with "
                "those of the columns above.")  # fmt: skip
    level = level_words(material.study.level)
    columns = (
        Column("Model"), Column("Parameter"),
        Column(f"Estimate with {level} interval", material.unit.short),
        Column("Standard error", material.unit.short), Column("p"), Column("Deals", "n"),
        Column("What it estimates", prose=True), Column("Notes", prose=True),
        Column("Source", prose=True),
    )  # fmt: skip
    rows = tuple(_gain_row(material, row) for _, row in frame.iterrows())
    yield Table("expected_gain", prose("Returns read as surprises"), columns, rows)


def _gain_row(material: Material, row: pd.Series[float]) -> Row:
    unit, error = material.unit, float(row["std_error"])
    head = (Text(str(row["model"])), Text(capital(material.study.words(str(row["term"])))))
    if not math.isfinite(error):
        reason = Text(f"no number: {row['reason']}")
        return (*head, None, None, None, None, None, reason, Text(str(row["source"])))
    digits = unit_digits(error, unit)
    estimate, low, high = (
        in_unit(float(row[name]), unit, digits) for name in ("estimate", "ci_low", "ci_high")
    )
    return (
        *head, Interval(estimate, low, high), in_unit(error, unit, digits),
        p_value(float(row["p_value"])), count(int(row["n"])), Text(str(row["estimand"])),
        Text(material.in_words(str(row["note"]))), Text(str(row["source"])),
    )  # fmt: skip


def _bounds(material: Material) -> Iterator[Block]:
    frame = _frame(material, "bounds")
    if frame.empty:
        return
    yield prose("A sensitivity, not an estimate: if the feature decides whether a deal's outcome "
                "is seen at all, the deals seen with it and without it differ. If it is as good "
                "as random among all deals of the list and moves being seen in one direction "
                "only, the effect on the deals seen either way lies between the "
                "bounds.")  # fmt: skip
    level = level_words(material.study.level)
    columns = (
        Column("Version"), Column("Bounds", material.unit.short),
        Column(f"Interval for the effect, {level}", material.unit.short),
        Column("Difference of the deals seen", material.unit.short),
        Column("Seen with the feature", "%"), Column("Seen without it", "%"),
        Column("Set aside", "%"), Column("Of the deals"), Column("Deals of the list", "n"),
        Column("Seen", "n"), Column("Cells"), Column("Interval by", prose=True),
    )  # fmt: skip
    rows = tuple(_bounds_row(material, row) for _, row in frame.iterrows())
    source = prose(taken("Lee (2009).", "estimate"), lead="Source:")
    yield Table("bounds", prose("Bounds where outcomes are not seen"), columns, rows, (source,))


def _bounds_row(material: Material, row: pd.Series[float]) -> Row:
    unit = material.unit
    gap = float(row["ci_high"]) - float(row["ci_low"])
    digits = unit_digits(gap / 4, unit)

    def pair(low: str, high: str) -> Cell:
        if not math.isfinite(float(row[low])):
            return None
        first, last = (in_unit(float(row[end]), unit, digits) for end in (low, high))
        return Interval(None, first, last)

    cells = int(row["cells"])
    return (
        Text(material.in_words(str(row["version"]))), pair("lower", "upper"),
        pair("ci_low", "ci_high"), in_unit(float(row["difference"]), unit, digits),
        percent(float(row["seen_treated"]), 1), percent(float(row["seen_untreated"]), 1),
        percent(float(row["trimmed"]), 1), Text(str(row["trimmed_group"])),
        count(int(row["deals"])), count(int(row["seen"])),
        Text(show(cells) if cells else ""),
        Text(str(row["interval"]) or f"no number: {row['reason']}"),
    )  # fmt: skip
