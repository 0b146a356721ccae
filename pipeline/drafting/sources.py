"""Lines about files, columns and dates."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from pathlib import Path

from pipeline.drafting.dates import Dating
from pipeline.drafting.kinds import Recognised, Sorted
from pipeline.drafting.lines import Line
from pipeline.drafting.matching import Match
from pipeline.drafting.roles import PROVES, SECURITY_CODES
from pipeline.drafting.signs import COMMA, Signs

# A cell that is a time of day, and the share of them that makes a column of such.
CLOCK = r"(?i)\d{1,2}:\d{2}(:\d{2})?( ?[ap]\.?m\.?)?"
CLOCKS = 0.8
DATE_KEY, ZONE_KEY = "inputs.date_format", "inputs.timestamp_zone"
READ_DATES = ("announced_at", "date", "as_of", "rumoured_at", "completed_at", "withdrawn_at",
              "amended_at", "earnings_release")  # fmt: skip


def table_of(kind: str) -> str:
    """The key under [inputs] for a kind of table."""
    return "deals" if kind == "ready" else kind


def source_lines(kinds: Sorted, base: Path) -> list[Line]:
    """Files, sheets and columns."""
    paths = [_path_line(kind, item, base) for kind, item in kinds.by_kind.items()]
    sheets = [
        Line("inputs.sheets", table_of(kind), item.found.source.sheet)
        for kind, item in kinds.by_kind.items()
        if item.found.source.sheet
    ]
    layouts = [line for kind, item in kinds.by_kind.items() for line in _layout(kind, item)]
    troubles = [line for kind, item in kinds.by_kind.items() for line in _troubles(kind, item)]
    spelled = [line for kind, item in kinds.by_kind.items() for line in _spelling(kind, item)]
    columns = [line for kind, item in kinds.by_kind.items() for line in _columns(kind, item)]
    return [*paths, *troubles, *sheets, *layouts, *spelled, *columns]


def _spelling(kind: str, item: Recognised) -> Iterator[Line]:
    """How the file is written where it is not plainly; the analyst's own answers replace these."""
    source, section = item.found.source, f"inputs.source.{table_of(kind)}"
    if source.encoding:
        reason = "It is not UTF-8; this is what many spreadsheets write. Look at accented letters."
        yield Line(section, "encoding", source.encoding, reason, doubtful=True)
    if source.header_row > 1:
        reason = "The first row that names every column; what stands above it is not read."
        yield Line(section, "header_row", source.header_row, reason, doubtful=True)


def _path_line(kind: str, item: Recognised, base: Path) -> Line:
    path = Path(os.path.relpath(item.found.source.path.resolve(), base.resolve())).as_posix()
    reason = f"{item.reason[0].upper()}{item.reason[1:]}."
    if item.rival:
        reason += f" It might also be a table of {item.rival}."
    return Line("inputs", table_of(kind), path, reason, doubtful=bool(item.rival))


def _layout(kind: str, item: Recognised) -> Iterator[Line]:
    """Closes, levels or rates side by side, whose headings are the codes."""
    source = item.found.source
    if source.wide:
        section = f"inputs.source.{table_of(kind)}"
        reason = f"One column a {source.code}, headed with its code."
        yield Line(section, "layout", "wide", reason)
        if source.columns["date"] != "date":
            section = f"inputs.columns.{table_of(kind)}"
            yield Line(section, "date", source.columns["date"], "The one column of dates.")


def _columns(kind: str, item: Recognised) -> Iterator[Line]:
    for role, found in item.matches.items():
        if found.column == role:
            continue
        table = table_of(kind)
        reason = f"{_evidence(found, item.found.signs[found.column])}"
        if found.rival:
            reason += f"; '{found.rival}' would do nearly as well"
        yield Line(
            f"inputs.columns.{table}", role, found.column, reason[0].upper() + reason[1:] + ".",
            doubtful=bool(found.rival) or (found.said == 0 and found.shown < PROVES),
        )  # fmt: skip


def _troubles(kind: str, item: Recognised) -> Iterator[Line]:
    """Columns that look like numbers and that no reader takes for numbers as they stand."""
    for name, signs in item.found.signs.items():
        if not signs.trouble:
            continue
        example = signs.levels[0] if signs.levels else item.found.frame[name].iloc[0]
        told = f"'{name}' of {item.found.source.file} holds {signs.trouble}, such as '{example}'."
        if signs.trouble == COMMA and item.found.source.kind == ".csv":
            section = f"inputs.source.{table_of(kind)}"
            told += " Is the comma the decimal mark?"
            yield Line(section, "decimal", None, told, example='","')
        else:
            told += " No key settles that: write plain numbers with a decimal point to use it."
            yield Line("inputs", "", None, told)


def _evidence(found: Match, signs: Signs) -> str:
    """What speaks for a column: its cells, its name or both."""
    shown = {
        "isin": "cells whose check digits are right (ISO 6166)",
        "exchange": "cells that are exchange codes (ISO 10383)",
        "currency": "cells that are currency codes",
        "zone": "cells that are names of time zones",
    }.get(signs.code, "")
    if signs.kind == "date":
        shown = f"cells such as '{signs.dating.example}' are dates"
    elif not shown and signs.kind == "number":
        shown = f"numbers from {signs.low:,.6g} to {signs.high:,.6g}"
    elif not shown:
        shown = f"{signs.distinct:,} different words in {signs.rows:,} rows"
    if found.role == "security" and found.shown == PROVES and signs.code not in SECURITY_CODES:
        return f"its codes are those of the price file ({shown})"
    if found.said == 0:
        return shown + "; its name does not say so"
    return f"its name, and {shown}"


def date_lines(kinds: Sorted, answers: Mapping[str, object]) -> list[Line]:
    """How dates are written and in which zone times of day are: read from the cells, or asked."""
    named = [
        (item, role, item.found.signs[item.column(role)])
        for item in kinds.by_kind.values()
        for role in READ_DATES
        if item.column(role)
    ]
    lines = [*_format_lines([(item, signs.dating) for item, _, signs in named], answers)]
    for item, role, signs in named:
        if role == "announced_at":
            lines += [*_zone_lines(item, signs), *_clock_lines(item, signs)]
    return lines


def _format_lines(
    named: list[tuple[Recognised, Dating]], answers: Mapping[str, object]
) -> Iterator[Line]:
    declared = {d.declared: (item, d) for item, d in named if d.declared}
    alone = _alone(named)
    open_ones = [(item, d) for item, d in named if d.open]
    troubled = [(item, d) for item, d in named if d.trouble]
    for item, dating in troubled:
        yield Line("inputs", "", None, f"{item.found.source.file} holds dates such as "
                   f"'{dating.example}': {dating.trouble}. No key can settle that; write the "
                   "column as YYYY-MM-DD.")  # fmt: skip
    if open_ones and DATE_KEY not in answers:
        item, dating = open_ones[0]
        choices = " or ".join(f"'{choice}'" for choice in dating.open)
        yield Line(
            "inputs", "date_format", None,
            f"every date of {item.found.source.file}, such as '{dating.example}', reads two ways: "
            f"{choices}. Which one is it?",
            example=f'"{dating.open[0]}"',
        )  # fmt: skip
    elif declared:
        pattern, (item, dating) = next(iter(declared.items()))
        others = [f"'{other}' in {found.found.source.file}"
                  for other, (found, _) in declared.items()
                  if other != pattern and found.kind not in alone]  # fmt: skip
        reason = f"{item.found.source.file} writes dates as '{dating.example}'."
        if others:
            reason += f" Other files differ: {', '.join(others)}; bring them to one format."
        yield Line("inputs", "date_format", pattern, reason, doubtful=bool(others))
        for kind, own in alone.items():
            if own != pattern:
                reason = "This table writes its dates in a way of its own."
                yield Line(f"inputs.source.{table_of(kind)}", "date_format", own, reason)


def _alone(named: list[tuple[Recognised, Dating]]) -> dict[str, str]:
    """Kind -> the one format of all its dates, for tables that have one."""
    formats: dict[str, set[str]] = {}
    for item, dating in named:
        formats.setdefault(item.kind, set()).add(dating.declared)
    return {
        kind: next(iter(found)) for kind, found in formats.items()
        if len(found) == 1 and found != {""}
    }  # fmt: skip


def _zone_lines(deals: Recognised, signs: Signs) -> Iterator[Line]:
    """Times of day need a zone; nothing in a cell tells which."""
    if not signs.dating.timed or signs.dating.offset or deals.column("timestamp_zone"):
        return
    yield Line(
        "inputs", "timestamp_zone", None,
        f"announcements such as '{signs.dating.example}' have a time of day, and neither an "
        "offset nor a column of zones. In which time zone were they written down?",
        example='"Europe/London"',
    )  # fmt: skip


def _clock_lines(deals: Recognised, signs: Signs) -> Iterator[Line]:
    """Times of day in a column of their own, beside dates: no reader joins the two."""
    if signs.dating.timed:
        return
    for name in deals.found.signs:
        cells = deals.found.frame[name].dropna().astype(str).str.strip()
        cells = cells[cells != ""]
        if len(cells) and cells.str.fullmatch(CLOCK).mean() >= CLOCKS:
            yield Line(
                "inputs", "", None,
                f"'{name}' of {deals.found.source.file} holds times of day, such as "
                f"'{cells.iloc[0]}', beside the dates of '{signs.name}'. No key joins the two, and "
                "without a time of day every deal counts as date only: write both into one cell "
                "(2024-03-08 17:45) to use them.",
            )  # fmt: skip
