"""A document as plain values, free of any format: what is said, not how it looks.

Words and numbers are kept apart. A paragraph is a run of pieces: words of the report's own,
quoted numbers that know the table they come from, and words taken over unchanged from the study
or an estimate. A table cell holds its number at full precision beside the digits to show.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from datetime import date

import pandas as pd

from pipeline.core.house import ISO, PLAIN, House

Key = str | int | float | bool


NOTHING = "None."
SHORTENED = "The first rows; all of them stand in tables.xlsx."


@dataclass(frozen=True, slots=True)
class Quote:
    """A number quoted in prose, and where it stands.

    Attributes:
        text: the number as printed.
        value: the number as stored.
        table: name of the frame, as written to ``data/<table>.parquet``.
        column: the frame's column.
        where: (column, value) pairs that pick the row.
        scale: what the stored value is multiplied by to print it (10,000 for basis points).
        digits: decimals printed.
    """

    text: str
    value: float
    table: str
    column: str
    where: tuple[tuple[str, Key], ...]
    scale: float = 1.0
    digits: int = 0


@dataclass(frozen=True, slots=True)
class Verbatim:
    """Words taken over unchanged; ``origin`` says from whom (the study, an estimate, a check).

    ``href`` is a page of the run they lead to, for the formats that have links.
    """

    text: str
    origin: str
    href: str = ""


@dataclass(frozen=True, slots=True)
class Reference:
    """A table or a figure of a numbered document, spoken of: ``Table 2``.

    ``name`` is the block's; ``text`` stays empty until the document gives it its number.
    """

    name: str
    text: str = ""


Piece = str | Quote | Verbatim | Reference


@dataclass(frozen=True, slots=True)
class Paragraph:
    """Prose. ``lead`` is a run-in heading; ``quotation`` marks somebody else's words."""

    pieces: tuple[Piece, ...]
    lead: str = ""
    quotation: bool = False

    @property
    def text(self) -> str:
        """The paragraph as read, without its run-in heading."""
        return "".join(piece if isinstance(piece, str) else piece.text for piece in self.pieces)

    @property
    def quotes(self) -> tuple[Quote, ...]:
        """The quoted numbers, in order."""
        return tuple(piece for piece in self.pieces if isinstance(piece, Quote))

    @property
    def own_text(self) -> str:
        """The paragraph without the words taken over from elsewhere and without references."""
        return "".join(
            piece if isinstance(piece, str) else piece.text
            for piece in self.pieces
            if not isinstance(piece, Verbatim | Reference)
        )

    @property
    def words(self) -> int:
        """How many words a reader reads, the run-in heading among them."""
        return len(f"{self.lead} {self.text}".split())


@dataclass(frozen=True, slots=True)
class Bullets:
    """A list of paragraphs."""

    items: tuple[Paragraph, ...]


@dataclass(frozen=True, slots=True)
class Callout:
    """Paragraphs set apart under a heading of their own."""

    heading: str
    paragraphs: tuple[Paragraph, ...]


@dataclass(frozen=True, slots=True)
class Text:
    """A cell of words; ``href`` is a page of the run they lead to."""

    text: str
    href: str = ""


@dataclass(frozen=True, slots=True)
class Number:
    """A cell with one number, in ``unit``, at full precision.

    ``digits`` are the decimals to show; a positive value under ``least`` is shown as "<least".
    ``mark`` stands behind the digits.
    """

    value: float
    digits: int = 0
    unit: str = ""
    least: float = 0.0
    mark: str = ""


@dataclass(frozen=True, slots=True)
class Day:
    """A cell with one date; ``dates`` says how the house shows it."""

    day: date
    dates: str = ISO


@dataclass(frozen=True, slots=True)
class Bracketed:
    """An estimate above another number in brackets, its t value or its standard error."""

    estimate: Number | None
    inside: Number | None


@dataclass(frozen=True, slots=True)
class Interval:
    """An estimate above its confidence set; ``words`` replaces the ends of an odd-shaped set."""

    estimate: Number | None
    low: Number | None
    high: Number | None
    words: str = ""


@dataclass(frozen=True, slots=True)
class Statistic:
    """A test statistic above its p-value, and the p-value adjusted for multiplicity."""

    value: Number
    p: Number | None
    adjusted: Number | None = None


Cell = Text | Number | Day | Interval | Bracketed | Statistic | None


@dataclass(frozen=True, slots=True)
class Column:
    """A table's column; ``prose`` columns hold sentences and may be wide."""

    title: str
    unit: str = ""
    prose: bool = False

    @property
    def heading(self) -> str:
        """The title with its unit."""
        return f"{self.title} ({self.unit})" if self.unit else self.title


Row = tuple[Cell, ...]


@dataclass(frozen=True, slots=True)
class Table:
    """Rows of cells; a cell of None stays blank.

    Attributes:
        name: short name, used for files and sheets.
        title: what it shows.
        columns: C columns; the first heads each row.
        rows: each of C cells.
        notes: printed below.
        footer: index of the first row of the footer, -1 without one.
        shown: rows printed on a page, the workbook holding all; 0 prints all.
        form: a table to be filled in by hand, which no data export holds.

    Raises:
        ValueError: if a row has another number of cells than there are columns.
    """

    name: str
    title: Paragraph
    columns: tuple[Column, ...]
    rows: tuple[Row, ...]
    notes: tuple[Paragraph, ...] = ()
    footer: int = -1
    shown: int = 0
    form: bool = False

    def __post_init__(self) -> None:
        if any(len(row) != len(self.columns) for row in self.rows):
            raise ValueError(f"table {self.name}: each row needs {len(self.columns)} cells")

    def numeric(self, at: int) -> bool:
        """Whether a column, not the first, holds single numbers alone."""
        cells = [row[at] for row in self.rows if row[at] is not None]
        return at > 0 and bool(cells) and all(isinstance(cell, Number) for cell in cells)

    @property
    def page_rows(self) -> tuple[Row, ...]:
        """The rows a page prints."""
        return self.rows[: self.shown] if self.shown else self.rows

    @property
    def shortened(self) -> bool:
        """Whether a page leaves rows out."""
        return bool(self.shown) and len(self.rows) > self.shown


@dataclass(frozen=True, slots=True, eq=False)
class Figure:
    """A picture as data.

    Attributes:
        name: short name, used for files.
        kind: which drawing, a key of the table of drawings.
        title: the takeaway.
        caption: what is drawn, and how to read it.
        alt: the picture in words.
        data: what is drawn, in the units drawn.
        marks: further positions on the axes, by name.
        axis: what the value axis shows, with its unit; empty where the drawing knows it.
        unit: the ending of the columns of ``data`` that hold amounts of the outcome.
        beside: group -> words printed in its part of the picture.
    """

    name: str
    kind: str
    title: Paragraph
    caption: Paragraph
    alt: str
    data: pd.DataFrame
    marks: Mapping[str, float] = field(default_factory=dict)
    axis: str = ""
    unit: str = "bp"
    beside: Mapping[str, str] = field(default_factory=dict)


Block = Paragraph | Bullets | Callout | Table | Figure


@dataclass(frozen=True, slots=True, eq=False)
class Section:
    """Blocks under a heading of level 2 or 3.

    A ``wide`` one wants a page on its side; a ``fresh`` one begins a page where there are pages.
    """

    heading: str
    blocks: tuple[Block, ...]
    level: int = 2
    wide: bool = False
    fresh: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Document:
    """A title, a line under it, and sections in order.

    ``house`` is the style it is shown in; the tables and figures of a ``numbered`` document carry
    numbers, by which references call them. ``ways`` are (words, page) beside it.
    """

    title: str
    subtitle: str
    sections: tuple[Section, ...]
    house: House = PLAIN
    numbered: bool = False
    ways: tuple[tuple[str, str], ...] = ()

    @property
    def blocks(self) -> Iterator[Block]:
        """All blocks in order."""
        return (block for section in self.sections for block in section.blocks)

    @property
    def tables(self) -> tuple[Table, ...]:
        """All tables in order."""
        return tuple(block for block in self.blocks if isinstance(block, Table))

    @property
    def figures(self) -> tuple[Figure, ...]:
        """All figures in order."""
        return tuple(block for block in self.blocks if isinstance(block, Figure))

    @property
    def numbers(self) -> dict[str, str]:
        """Name of a table or figure -> what it is called; empty unless the document is numbered."""
        if not self.numbered:
            return {}
        tables = [table for table in self.tables if not table.form]
        return {
            **{table.name: f"Table {at}" for at, table in enumerate(tables, 1)},
            **{figure.name: f"Figure {at}" for at, figure in enumerate(self.figures, 1)},
        }

    @property
    def paragraphs(self) -> Iterator[Paragraph]:
        """All prose: paragraphs, list items, callouts, titles, captions and notes."""
        for block in self.blocks:
            yield from _prose(block)


def _prose(block: Block) -> tuple[Paragraph, ...]:
    match block:
        case Paragraph():
            return (block,)
        case Bullets(items):
            return items
        case Callout(_, paragraphs):
            return paragraphs
        case Table():
            return (block.title, *block.notes)
        case Figure():
            return (block.title, block.caption)
