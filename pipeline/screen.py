"""What the terminal shows: progress, the finding, ledger totals and problems of the input."""

from __future__ import annotations

import json
import math
import os
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import TYPE_CHECKING, Any

from rich.console import Console
from rich.table import Table

from pipeline.core.rules import RULES, Rule, rule_title

if TYPE_CHECKING:
    import pandas as pd

    from pipeline.core.contrast import Contrast
    from pipeline.core.findings import Finding, InputProblem
    from pipeline.core.ledger import Ledger
    from pipeline.core.results import Results
    from pipeline.progress import Told
    from pipeline.report.document import Table as DocumentTable


@dataclass(frozen=True, slots=True)
class Screen:
    """Where a command speaks: progress on standard error, results on standard output."""

    quiet: bool
    as_json: bool

    @contextmanager
    def progress(self) -> Iterator[Told]:
        """A bar over the stages with the time left, unless machines are listening."""
        from pipeline.progress import Silent, bars

        if self.quiet or self.as_json:
            yield Silent()
            return
        with bars() as told:
            yield told

    def finished(
        self, results: Results, folder: Path, written: Sequence[str], shown: bool | None = None
    ) -> None:
        """The finding, the ledger's totals and where the documents are.

        ``shown`` says whether the page was opened, None if nobody asked for it.
        """
        from pipeline.report.finding import finding_text

        text = finding_text(results)
        ledger = results.ledger
        if self.as_json:
            content = {
                "finding": text,
                "rows_read": ledger.rows_in,
                "rows_kept": ledger.rows_kept,
                "folder": str(folder),
                "files": list(written),
                **({} if shown is None else {"opened": shown}),
            }
            print(json.dumps(content, ensure_ascii=False))
            return
        console = Console(highlight=False, markup=False)
        console.print()
        console.print(text)
        console.print()
        _ledger_totals(console, ledger)
        console.print()
        first = folder / start_with(written)
        console.print(f"Written to {folder}: start with {first}", soft_wrap=True)
        if shown is False:
            where = first.resolve()
            words = f"No browser could be opened here; open {where} yourself."
            console.print(words, soft_wrap=True)
        console.print("Research, not advice; see the cautions in the report.")

    def checked(self, ledger: Ledger, findings: Sequence[Finding]) -> None:
        """Findings and ledger of a check."""
        if self.as_json:
            content = {
                "rows_read": ledger.rows_in,
                "rows_kept": ledger.rows_kept,
                "findings": [finding_dict(finding) for finding in findings],
            }
            print(json.dumps(content, ensure_ascii=False))
            return
        console = Console(highlight=False, markup=False)
        for finding in findings:
            show_finding(console, finding)
        _ledger_totals(console, ledger)

    def power(self, frame: pd.DataFrame, smallest: float, deals: int) -> None:
        """The smallest true mean found four times in five, then power by size of the true mean."""
        if self.as_json:
            found = smallest if math.isfinite(smallest) else None
            print(json.dumps({"deals": deals, "smallest": found, "power": _records(frame)}))
            return
        console = Console(highlight=False, markup=False)
        if frame.empty:
            console.print("Power needs at least two deals.")
            return
        console.print(
            f"A true mean of {basis_points(smallest)} bp is the smallest that is found four times "
            "in five."
        )
        console.print(f"{deals} deals, those that move together counted for less; 5% two-sided.\n")
        table = Table(box=None, pad_edge=False, header_style="")
        for name in ("true mean, bp", "chance of finding it", "deals needed for 80%"):
            table.add_column(name, justify="right")
        columns = (frame[name].astype(float) for name in ("effect", "power", "deals_needed"))
        for effect, chance, needed in zip(*columns, strict=True):
            count = f"{needed:,.0f}" if math.isfinite(needed) else "never"
            table.add_row(f"{effect * 1e4:.0f}", f"{chance:.0%}", count)
        console.print(table)
        if not all(map(math.isfinite, frame["deals_needed"])):
            console.print("\nNever: deals that move together as these do stop adding information.")

    def contrasted(self, found: Contrast, folder: Path, written: Sequence[str]) -> None:
        """What moved between two runs, and what explains it."""
        if self.as_json:
            content = {
                "differences": [asdict(item) for item in found.differences],
                "numbers": _records(found.numbers),
                "explained": _records(found.explained),
                "notes": found.notes,
                "folder": str(folder),
                "files": list(written),
            }
            print(json.dumps(content, ensure_ascii=False))
            return
        from pipeline.report.contrast import document
        from pipeline.report.document import Table as DocumentTable

        console = Console(highlight=False, markup=False)
        for section in document(found).sections[:3]:
            console.print(f"\n{section.heading}")
            for block in section.blocks:
                shown = plain_table(block) if isinstance(block, DocumentTable) else None
                console.print(shown or getattr(block, "text", ""))
        console.print(f"\nWritten to {folder}: start with contrast.html there", soft_wrap=True)

    def problem(self, fault: InputProblem) -> None:
        """Every finding on one screen."""
        if self.as_json:
            print(json.dumps({"findings": [finding_dict(f) for f in fault.findings]}))
            return
        console = Console(stderr=True, highlight=False, markup=False)
        count = len(fault.findings)
        noun = "problem" if count == 1 else "problems"
        console.print(f"{count} {noun} in the input; nothing was written.\n")
        for finding in fault.findings:
            show_finding(console, finding)


def start_with(written: Sequence[str]) -> str:
    """The document a reader opens first; the manifest where there is none."""
    for name in ("report.html", "memo.pdf", "memo.docx", "tables.xlsx"):
        if name in written:
            return name
    return "manifest.json"


def open_document(path: Path) -> bool:
    """Show a document in the person's browser; False where none can be opened."""
    import webbrowser

    graphical = sys.platform in ("win32", "darwin") or any(
        os.environ.get(name) for name in ("DISPLAY", "WAYLAND_DISPLAY", "BROWSER")
    )
    try:
        return graphical and webbrowser.open(path.resolve().as_uri())
    except (webbrowser.Error, OSError):
        return False


def _records(frame: pd.DataFrame) -> Any:
    """A frame's rows for JSON, which knows no NaN."""
    return json.loads(frame.to_json(orient="records", double_precision=15))


def plain_table(block: DocumentTable) -> Table:
    """A document's table for the terminal."""
    from pipeline.report.numerals import lines

    table = Table(box=None, pad_edge=False, header_style="", title=None)
    for at, column in enumerate(block.columns):
        table.add_column(column.heading, justify="right" if at else "left")
    for row in block.page_rows:
        table.add_row(*("\n".join(lines(cell)) for cell in row))
    return table


def basis_points(value: float) -> str:
    """A decimal return in basis points, with a true minus sign; blank where there is none."""
    return f"{value * 1e4:,.0f}".replace("-", "−") if value == value else ""


def finding_dict(finding: Finding) -> dict[str, str]:
    """A finding for machines."""
    names = ("rule", "severity", "file", "row", "column", "got", "expected", "remedy")
    return {name: str(getattr(finding, name)) for name in names}


def show_finding(console: Console, finding: Finding) -> None:
    """A finding for a person: where, found, expected, do."""
    console.print(f"{rule_title(finding.rule)} [{finding.rule}]")
    lines = (
        ("where", finding.where),
        ("found", finding.got),
        ("expected", finding.expected),
        ("do", finding.remedy),
    )
    for label, text in lines:
        console.print(f"  {label:<9}{text}", soft_wrap=True)
    console.print()


def _ledger_totals(console: Console, ledger: Ledger) -> None:
    table = Table(box=None, pad_edge=False, header_style="")
    for name, side in (("Stage", "left"), ("in", "right"), ("lost", "right"), ("kept", "right")):
        table.add_column(name, justify=side)  # type: ignore[arg-type]
    table.add_column("why")
    for stage in ledger.stages:
        reasons = sorted({entry.rule for entry in stage.dropped})
        why = "; ".join(rule_title(rule) for rule in reasons)
        lost = len(stage.dropped)
        table.add_row(stage.stage, str(stage.rows_in), str(lost), str(stage.rows_kept), why)
    console.print(table)


def explain_rule(key: str, as_json: bool = False) -> bool:
    """Print a rule's page, or all keys if ``key`` is empty; False if there is no such rule."""
    console = Console(highlight=False, markup=False)
    if as_json:
        known = [rule for rule in RULES.values() if key in ("", rule.key)]
        print(json.dumps([asdict(rule) for rule in known], ensure_ascii=False))
        return bool(known)
    if not key:
        for rule in RULES.values():
            console.print(f"{rule.key:<26}{rule.title}")
        return True
    page: Rule | None = RULES.get(key)
    if page is None:
        near = ", ".join(get_close_matches(key, RULES, 3, 0.5))
        nearest = f" Did you mean {near}?" if near else ""
        console.print(f"No rule '{key}'.{nearest} dealwake explain lists all of them.")
        return False
    console.print(f"{page.title} [{page.key}]")
    for label, text in (
        ("What it means", page.meaning),
        ("Why it matters", page.why),
        ("For example", page.example),
        ("What to do", page.remedy),
    ):
        console.print(f"{label}\n  {text}", soft_wrap=True)
    return True
