"""From findings and a ledger to the rows that somebody has to look at."""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Mapping, Sequence

from pipeline.core.findings import Finding, Severity
from pipeline.core.ledger import Action, Ledger
from pipeline.core.offending import Offending, OffendingTable, Remark
from pipeline.core.rules import RULES, rule_title
from pipeline.inputs.own_rows import numbers_of, own_rows
from pipeline.inputs.source import Source
from pipeline.study import plan
from pipeline.study.schema import Study

# What a list says of a company on it may itself be confidential, and the file is sent on.
NEVER_SENT = ("restricted_company",)
NOTHING_TO_DO = "None"
DUPLICATE = re.compile(r"\(row (\d+)\)$")
Marked = tuple[str, Remark]


def offending_rows(study: Study, findings: Sequence[Finding], ledger: Ledger | None) -> Offending:
    """The rows that findings name and that the ledger dropped or flagged, table by table.

    Entries of the ledger that ask for nothing are left out, and so is all that touches the
    restricted list.
    """
    sources = plan.sources(study)
    told = [finding for finding in findings if finding.rule not in NEVER_SENT]
    marked = [*_from_findings(told, sources)]
    if ledger is not None:
        marked += _from_ledger(ledger, sources["deals"])
    tables = [_table(sources[name], marked, name) for name in sources
              if any(table == name for table, _ in marked)]  # fmt: skip
    whole = tuple(
        (finding.file, finding.column, _remark(finding, 0, ()))
        for finding in told
        if not finding.rows and finding.severity is not Severity.NOTE
    )
    return Offending(tuple(tables), whole)


def _table(source: Source, marked: Iterable[Marked], name: str) -> OffendingTable:
    remarks = sorted((remark for table, remark in marked if table == name), key=lambda r: r.row)
    columns, cells = own_rows(source, {remark.row for remark in remarks})
    return OffendingTable(source.file, columns, cells, tuple(remarks))


def _from_findings(findings: Iterable[Finding], sources: Mapping[str, Source]) -> Iterator[Marked]:
    named = {source.file: name for name, source in sources.items()}
    for finding in findings:
        table = finding.file if finding.file in sources else named.get(finding.file, "")
        columns = tuple(part.strip() for part in finding.column.split(",") if part.strip())
        own = sources[table].columns if table else {}
        columns = tuple(own.get(name, name) for name in columns)
        for row in finding.rows if table else ():
            yield table, _remark(finding, row, columns)


def _remark(finding: Finding, row: int, columns: tuple[str, ...]) -> Remark:
    return Remark(
        row,
        columns,
        rule_title(finding.rule),
        finding.severity is Severity.ERROR,
        finding.got,
        finding.expected,
        finding.remedy,
    )


def _from_ledger(ledger: Ledger, deals: Source) -> Iterator[Marked]:
    """What stages dropped or flagged, where somebody can do something about it."""
    rows = numbers_of(deals)
    for stage in ledger.stages:
        for entry in stage.entries:
            rule = RULES.get(entry.rule)
            if rule is None or rule.remedy.startswith(NOTHING_TO_DO):
                continue
            if entry.action not in (Action.DROPPED, Action.FLAGGED):
                continue
            second = DUPLICATE.search(entry.deal)
            row = int(second.group(1)) if second else rows.get(entry.deal.split(" (")[0], 0)
            if row:
                yield "deals", Remark(
                    row, (), rule.title, False, entry.value, entry.threshold, rule.remedy
                )  # fmt: skip
