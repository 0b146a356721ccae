"""The comparison of two runs as a document: what moved, what differs, what explains it."""

from __future__ import annotations

from collections.abc import Mapping

import pandas as pd

from pipeline.core.contrast import Contrast, Kind
from pipeline.core.outcome import Unit
from pipeline.report.document import (
    Block,
    Cell,
    Column,
    Document,
    Key,
    Paragraph,
    Quote,
    Section,
    Table,
    Text,
)
from pipeline.report.house import styled
from pipeline.report.material import prose, quote, taken
from pipeline.report.numerals import count, in_unit, percent
from pipeline.report.wording import joined, spoken

WORDS = {
    "mean_reaction": "Mean reaction",
    "mean_outcome": "Mean outcome",
    "deals_kept": "Deals in the regression",
    "together": "Only together, beyond each alone",
}
KINDS = {Kind.INPUT: "table read", Kind.SETTING: "study file", Kind.VERSION: "program"}
LARGE_SHARE = 0.1


def frames(contrast: Contrast) -> dict[str, pd.DataFrame]:
    """The frames the document quotes, by name."""
    return {
        "numbers": contrast.numbers,
        "explained": contrast.explained,
        "deals": contrast.deals,
        "moved": contrast.moved,
        "differences": pd.DataFrame(
            [[str(d.kind), d.where, d.first, d.second] for d in contrast.differences],
            columns=["kind", "where", "first", "second"],
            dtype="str",
        ),
    }


def document(contrast: Contrast) -> Document:
    """What moved first, then what differs, what each difference explains, and the deals."""
    sections = (
        Section("What moved", (_finding(contrast), _numbers(contrast))),
        Section("What differs", (_differences(contrast),)),
        Section("What each difference moved", _explained(contrast)),
        Section("Deals", (_deals(contrast), _moved(contrast))),
    )
    title = f"{contrast.first} and {contrast.second}"
    return styled(Document(title, "Two runs side by side", sections, contrast.house))


def label(contrast: Contrast, number: str) -> str:
    """A followed number in words."""
    return WORDS.get(number, f"Effect: {contrast.titles.get(number, spoken(number))}")


def _place(where: str) -> str:
    """A difference in words: the study file's table and key, or what the table holds."""
    return WORDS.get(where, where.replace(".", ": ").replace("_", " "))


def _finding(contrast: Contrast) -> Paragraph:
    if not contrast.differences:
        return prose("The two runs read the same tables under the same settings and programs.")
    found = contrast.numbers["number"].tolist()
    mean, unit = _mean_of(contrast), contrast.outcome.unit
    if mean not in found:
        return prose("The runs share no headline number.")
    all_frames = frames(contrast)
    first, second, move = (
        _quoted(all_frames, "numbers", side, {"number": mean}, unit, signed=side == "move")
        for side in ("first", "second", "move")
    )
    what = contrast.outcome.words if contrast.outcome.ready else "reaction"
    return prose(
        "The mean ", taken(what, "study"), " was ", unit.before, first, f"{unit.level} in “",
        taken(contrast.first, "study"), "” and is ", unit.before, second, f"{unit.level} in “",
        taken(contrast.second, "study"), "”, a move of ", unit.before, move, f"{unit.change}. ",
        _carrier(contrast), _deal_words(contrast),
    )  # fmt: skip


def _mean_of(contrast: Contrast) -> str:
    """The name of the mean among the numbers followed."""
    return "mean_outcome" if contrast.outcome.ready else "mean_reaction"


def _quoted(
    all_frames: Mapping[str, pd.DataFrame],
    table: str,
    column: str,
    where: Mapping[str, Key],
    unit: Unit,
    signed: bool = False,
) -> Quote:
    return quote(
        all_frames, table, column, where, scale=unit.scale, digits=unit.decimals, signed=signed
    )


def _carrier(contrast: Contrast) -> str:
    """The differences that move the mean, the largest first, in words."""
    own = contrast.explained[contrast.explained["number"] == _mean_of(contrast)]
    own = own[own["difference"] != "together"]
    large = own[own["share"].abs() >= LARGE_SHARE]
    if own.empty:
        return "No difference was made again alone. "
    if large.empty:
        return "No single difference explains a tenth of it. "
    order = large["move"].abs().sort_values(ascending=False).index
    names = [f"“{_place(name)}”" for name in large.loc[order, "difference"]]
    verb = "moves" if len(names) == 1 else "each move"
    return f"Made again alone, {joined(names)} {verb} a tenth of that or more. "


def _deal_words(contrast: Contrast) -> str:
    if contrast.deals.empty:
        return "Both keep the same deals."
    return f"{len(contrast.deals)} deals stand in one run only."


def _numbers(contrast: Contrast) -> Table:
    columns = (
        Column("Number"),
        Column("Unit"),
        Column(contrast.first),
        Column(contrast.second),
        Column("Move"),
    )
    rows = []
    for item in contrast.numbers.to_dict("records"):
        counted = bool(item["unit"] == "deals")
        cells = [
            _value(float(item[side]), counted, contrast.outcome.unit)
            for side in ("first", "second", "move")
        ]
        unit = "deals" if counted else contrast.outcome.unit.short
        rows.append((Text(label(contrast, str(item["number"]))), Text(unit), *cells))
    note = prose("A blank stands where a run has no such column or withheld it.")
    return Table("numbers", prose("Headline numbers of both runs"), columns, tuple(rows), (note,))


def _value(value: float, counted: bool, unit: Unit) -> Cell:
    if value != value:
        return None
    return count(round(value)) if counted else in_unit(value, unit, unit.decimals)


def _differences(contrast: Contrast) -> Table:
    columns = (
        Column("Where"),
        Column("Kind"),
        Column(contrast.first, prose=True),
        Column(contrast.second, prose=True),
        Column("Can move an estimate"),
    )
    rows = tuple(
        (
            Text(_place(item.where)),
            Text(KINDS[item.kind]),
            Text(item.first),
            Text(item.second),
            Text("yes" if item.moves else "no"),
        )
        for item in contrast.differences
    )
    note = prose("In brackets after a file: the beginning of its SHA-256, which names its content.")
    return Table("differences", prose("Tables, settings and programs that are not the same"),
                 columns, rows, (note,))  # fmt: skip


def _explained(contrast: Contrast) -> tuple[Block, ...]:
    notes = tuple(prose(taken(note, "check")) for note in contrast.notes)
    if contrast.explained.empty:
        return (prose("Nothing was made again."), *notes)
    numbers = list(dict.fromkeys(contrast.explained["number"]))
    differences = list(dict.fromkeys(contrast.explained["difference"]))
    own, unit = contrast.explained.set_index(["difference", "number"]), contrast.outcome.unit
    columns = (
        Column("Difference"),
        *(Column(label(contrast, n), "" if n == "deals_kept" else unit.short) for n in numbers),
    )
    moves = tuple(
        (
            Text(_place(name)),
            *(_value(float(own.loc[(name, n), "move"]), n == "deals_kept", unit) for n in numbers),
        )
        for name in differences
    )
    shares = tuple(
        (
            Text(_place(name)),
            *(percent(float(own.loc[(name, n), "share"])) for n in numbers),
        )
        for name in differences
    )
    how = prose(
        "The first run was made again with one difference at a time as in the second. What the "
        "differences move only when they come together stands in the last row."
    )
    plain = tuple(Column(column.title, "%" if at else "") for at, column in enumerate(columns))
    title = prose("Move of each difference alone")
    as_share = prose("The same as a share of the whole move")
    return (
        how,
        Table("explained", title, columns, moves, notes),
        Table("shares", as_share, plain, shares),
    )


def _deals(contrast: Contrast) -> Table:
    columns = (
        Column("Deal"),
        Column(contrast.first, prose=True),
        Column(contrast.second, prose=True),
    )
    rows = tuple(
        (Text(str(row.deal)), Text(str(row.first)), Text(str(row.second)))
        for row in contrast.deals.itertuples()
    )
    return Table("deals", prose("Deals that only one run keeps"), columns, rows, shown=40)


def _moved(contrast: Contrast) -> Table:
    unit = contrast.outcome.unit
    columns = (
        Column("Deal"),
        Column(contrast.first, unit.heading),
        Column(contrast.second, unit.heading),
        Column("Move", unit.short),
    )
    rows = tuple(
        (
            Text(str(row["deal"])),
            *(
                in_unit(float(row[side]), unit, unit.decimals - 1)
                for side in ("first", "second", "move")
            ),
        )
        for row in contrast.moved.to_dict("records")
    )
    what = contrast.outcome.words if contrast.outcome.ready else "reaction"
    title = prose("Deals of both whose ", taken(what, "study"), " moved most")
    return Table("moved", title, columns, rows)
