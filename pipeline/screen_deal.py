"""What the terminal shows of one deal: its story, or all that the run makes of it."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import asdict, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from rich.console import Console
from rich.table import Table

from pipeline.core.rules import rule_title
from pipeline.screen import basis_points, plain_table

if TYPE_CHECKING:
    from pipeline.core.ledger import LedgerEntry
    from pipeline.core.outcome import Standing
    from pipeline.report.document import Document
    from pipeline.significance.story import Story


def show_deal(
    name: str,
    story: Story | Standing | None,
    row: Mapping[str, Any],
    told: Sequence[tuple[str, LedgerEntry]],
    *,
    as_json: bool,
) -> None:
    """One deal: its placing, its returns day by day, and what the ledger says of it."""
    if as_json:
        ledger = [{"stage": stage, **asdict(entry)} for stage, entry in told]
        content = {"deal": name, "story": asdict(story) if story else None, "ledger": ledger}
        print(json.dumps(content, default=str))
        return
    console = Console(highlight=False, markup=False)
    listing = " on ".join(str(row[key]) for key in ("security", "exchange") if row.get(key))
    console.print(f"{name}: {listing}" if listing else name)
    if "day_zero_reason" in row:
        console.print(f"Day zero {str(row['day_zero'])[:10]}: {row['day_zero_reason']}.")
    for stage, entry in told:
        title = rule_title(entry.rule)
        limit = f" (limit: {entry.threshold})" if entry.threshold else ""
        console.print(f"{stage}: {entry.action}, {title}: {entry.value}{limit}.")
    if story is None:
        console.print("It was left out: the ledger lines above say why.")
        return
    from pipeline.core.outcome import Standing

    if isinstance(story, Standing):
        _standing(console, story, row)
        return
    window = story.window.label.replace("-", "−")
    interval = f"{basis_points(story.low)} to {basis_points(story.high)} bp"
    scar = f"{story.scar:.2f}".replace("-", "−")
    console.print(
        f"CAR{window} {basis_points(story.car)} bp, its own interval {interval}, standardised "
        f"{scar}; rank {story.rank} of {story.deals}, 1 the largest. Estimated on "
        f"{story.observations} returns."
    )
    table = Table(box=None, pad_edge=False, header_style="")
    for head in ("day", "date", "abnormal, bp", "expected, bp", "band ±, bp", ""):
        table.add_column(head, justify="right")
    for day in story.days:
        outside = "outside" if abs(day.abnormal) > day.reach else ""
        cells = (basis_points(day.abnormal), basis_points(day.expected), basis_points(day.reach))
        table.add_row(f"{day.day:+d}" if day.day else "0", day.date, *cells, outside)
    console.print(table)


def show_deal_page(document: Document, file: Path | None, *, as_json: bool) -> None:
    """One deal with all that the run makes of it: in words and tables, or as a page."""
    if file is not None:
        from pipeline.core.disk import write_file
        from pipeline.report.html import page

        write_file(file, page(replace(document, ways=())).encode(), "--page")
    if as_json:
        content = {"deal": document.title, "page": str(file or ""), "told": _told(document)}
        print(json.dumps(content, ensure_ascii=False))
        return
    console = Console(highlight=False, markup=False)
    if file is not None:
        console.print(f"Written to {file}", soft_wrap=True)
        return
    console.print(document.title)
    _sections(console, document)


def _sections(console: Console, document: Document) -> None:
    """Headings, words and tables; a picture gives its takeaway."""
    from pipeline.report.document import Figure, Paragraph
    from pipeline.report.document import Table as DocumentTable

    for section in document.sections:
        console.print(f"\n{section.heading}")
        for block in section.blocks:
            if isinstance(block, DocumentTable):
                console.print(plain_table(block) if block.rows else "None.")
            elif isinstance(block, Figure | Paragraph):
                console.print(block.title.text if isinstance(block, Figure) else block.text)


def _told(document: Document) -> dict[str, list[dict[str, str]]]:
    """The tables of a document, by name: one row a line, its cells as printed."""
    from pipeline.report.numerals import lines

    return {
        table.name: [
            {
                column.heading: " ".join(lines(cell))
                for column, cell in zip(table.columns, row, strict=True)
            }
            for row in table.rows
        ]
        for table in document.tables
    }


def _standing(console: Console, story: Standing, row: Mapping[str, Any]) -> None:
    """One deal's ready outcome among the others, and what else the deal list says of it."""
    from pipeline.report.material import capital
    from pipeline.report.numerals import amount

    outcome, interval = story.outcome, ""
    if story.low == story.low:
        ends = f"{amount(story.low, outcome.unit)} to {amount(story.high, outcome.unit)}"
        interval = f", its own interval {ends}"
    console.print(
        f"{capital(outcome.words)} {amount(story.value, outcome.unit)}{interval}; rank "
        f"{story.rank} of {story.deals}, 1 the largest."
    )
    table = Table(box=None, pad_edge=False, show_header=False)
    own = ("deal_id", "_row", "announced_date", outcome.column, f"{outcome.column}_std_dev")
    for key, value in row.items():
        if key not in own and value == value:
            table.add_row(key, f"{value:.10g}" if isinstance(value, float) else str(value))
    console.print(table)
