"""Renderer of the tables for LaTeX: one file a table, for the packages booktabs and array."""

from __future__ import annotations

import re
from itertools import zip_longest

from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.document import Cell, Table
from pipeline.report.numerals import MINUS, broken, clean, lines

_ESCAPES = {
    "\\": r"\textbackslash{}",
    "{": r"\{",
    "}": r"\}",
    "$": r"\$",
    "&": r"\&",
    "#": r"\#",
    "%": r"\%",
    "_": r"\_",
    "^": r"\textasciicircum{}",
    "~": r"\textasciitilde{}",
    "<": r"\textless{}",
    ">": r"\textgreater{}",
    "|": r"\textbar{}",
    '"': r"\textquotedbl{}",
    "[": "{[}",
    "]": "{]}",
    MINUS: "$-$",
    "–": "--",
    "—": "---",
    "’": "'",
    "‘": "`",
    "“": "``",
    "”": "''",
    "…": r"\ldots{}",
    "≤": r"$\leq$",
    "≥": r"$\geq$",
    "±": r"$\pm$",
    "×": r"$\times$",
    "²": r"\textsuperscript{2}",
    "§": r"\S{}",
    "χ": r"$\chi$",
    "α": r"$\alpha$",
    "β": r"$\beta$",
    "δ": r"$\delta$",
    "λ": r"$\lambda$",
    "ρ": r"$\rho$",
    "σ": r"$\sigma$",
    "τ": r"$\tau$",
    "ω": r"$\omega$",
}  # fmt: skip
_SPECIAL = re.compile("|".join(re.escape(mark) for mark in _ESCAPES))
# Characters of the small type that fit beside one another in an ordinary text width.
ROOM = 84
LONGEST = 24


def render(results: Results) -> dict[str, bytes]:
    """``tables/<name>.tex`` for every table that is not to be filled in by hand."""
    document = report(results)
    tables = (table for table in document.tables if not table.form)
    return {
        f"tables/{table.name}.tex": tabular(table, document.house.footer).encode()
        for table in tables
    }


def tabular(table: Table, footer: str = "") -> str:
    """A table environment to be read with ``\\input``; needs booktabs and array.

    The house's ``footer`` stands below the notes, because the page is somebody else's.
    """
    size = r"\centering\footnotesize" if len(table.columns) < 7 else r"\centering\scriptsize"
    wraps = _wraps(table)
    rows = enumerate(table.page_rows)
    body = [line for at, row in rows for line in _row(table, at, row, wraps)]
    put = breakable if wraps else escape
    head = " & ".join(put(column.heading) for column in table.columns)
    below = [*(note.text for note in table.notes), *([footer] if footer else [])]
    notes = [rf"{{\par\footnotesize\raggedright {escape(text)}\par}}" for text in below]
    return "\n".join(
        [
            r"\begin{table}[htbp]", size, r"\setlength{\tabcolsep}{4pt}",
            rf"\caption{{{escape(table.title.text)}}}", rf"\label{{tab:{table.name}}}",
            rf"\begin{{tabular}}{{@{{}}{_alignment(table)}@{{}}}}", r"\toprule",
            rf"{head} \\", r"\midrule", *body, r"\bottomrule", r"\end{tabular}",
            *notes, r"\end{table}", "",
        ]
    )  # fmt: skip


def escape(text: str) -> str:
    """``text`` as LaTeX prints it: every command character disarmed, on one line."""
    flat = " ".join(clean(text).split())
    return _SPECIAL.sub(lambda found: _ESCAPES[found.group()], flat)


def breakable(text: str) -> str:
    """``text`` as :func:`escape` makes it, with places to break in words no column could hold."""
    words = (broken(word, LONGEST) for word in clean(text).split())
    return " ".join(r"\allowbreak{}".join(map(escape, pieces)) for pieces in words)


def _wraps(table: Table) -> bool:
    """Whether the table is too wide for columns of their natural width."""
    needs = [_need(table, at) for at in range(len(table.columns))]
    return sum(needs) + 2 * len(needs) > ROOM


def _alignment(table: Table) -> str:
    """Natural columns where the table fits; columns of a share of the text width where not."""
    needs = [_need(table, at) for at in range(len(table.columns))]
    if not _wraps(table):
        return "".join("r" if table.numeric(at) else "l" for at in range(len(needs)))
    words = [_longest_word(table, at) + 4 for at in range(len(needs))]
    narrow = [float(max(word, min(need + 3, 28))) for word, need in zip(words, needs, strict=True)]
    shares = (need / sum(narrow) for need in narrow)
    return "".join(_paragraphs(share) for share in shares)


def _paragraphs(share: float) -> str:
    width = rf"\dimexpr {share:.4f}\textwidth-2\tabcolsep\relax"
    return rf">{{\raggedright\arraybackslash}}p{{{width}}}"


def _need(table: Table, at: int) -> int:
    """Characters a column would like to have."""
    cells = (line for row in table.page_rows for line in lines(row[at]))
    return max((len(text) for text in (table.columns[at].heading, *cells)), default=1) or 1


def _longest_word(table: Table, at: int) -> int:
    cells = (line for row in table.page_rows for line in lines(row[at]))
    texts = (table.columns[at].heading, *cells)
    longest = max((len(word) for text in texts for word in text.split()), default=1)
    return min(longest, LONGEST)


def _row(table: Table, at: int, row: tuple[Cell, ...], wraps: bool) -> list[str]:
    """The lines of one row; the second line of a cell inside it, or below where cells are flat."""
    if wraps:
        cells = (r" \newline ".join(breakable(line) for line in lines(cell)) for cell in row)
        found = [" & ".join(cells) + r" \\"]
    else:
        stacked = zip_longest(*(lines(cell) or ("",) for cell in row), fillvalue="")
        found = [" & ".join(escape(text) for text in line) + r" \\" for line in stacked]
    return [r"\midrule", *found] if at == table.footer and at else found
