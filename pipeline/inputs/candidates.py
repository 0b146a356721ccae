"""The companies by year that could have announced."""

from __future__ import annotations

import pandas as pd

from pipeline.core.findings import Finding
from pipeline.inputs.contracts import Column
from pipeline.inputs.files import Source, read_table
from pipeline.inputs.typed import extra_columns, repeats, typed
from pipeline.inputs.wanted import Wanted


def read_candidates(
    source: Source, wanted: Wanted, date_format: str
) -> tuple[pd.DataFrame, list[Finding]]:
    """One row a company and year, and the findings."""
    fixed = [
        Column("security", "text", filled=True, why="the company's code in the price file"),
        Column("exchange", "text", filled=True, why="the ISO 10383 code of the listing"),
        Column("year", "number", filled=True, why="one row a company and year"),
        Column("as_of", "date", filled=True, why="the date its values were known"),
        Column("deal_id", "text", why="the year's first deal of the company, empty if none"),
    ]
    columns = fixed + extra_columns(fixed, wanted.candidate_numbers, wanted.candidate_texts)
    named_already = {column.name for column in columns}
    columns += [
        Column(name, "number", optional=True)
        for name in wanted.candidate_extras
        if name not in named_already
    ]
    table, findings = typed(read_table(source), source, columns, date_format)
    years = table[table.duplicated(["security", "year"], keep=False)]
    named = table[table["deal_id"] != ""]
    deals = named[named.duplicated("deal_id", keep=False)]
    findings += repeats(years, source, ("security", "year"), "company and year")
    return table, findings + repeats(deals, source, ("deal_id",), "deal")
