"""One document with every kind of block and cell, every odd set, and words that try to get out."""

from __future__ import annotations

import io
from datetime import date
from math import inf, nan

import pandas as pd
from PIL import Image

from pipeline.core.estimate import ConfidenceSet, Shape
from pipeline.core.house import FRENCH, PNG, House, Logo, Reviewer
from pipeline.report.closing import sign_off_table
from pipeline.report.document import (
    Block,
    Bracketed,
    Bullets,
    Callout,
    Column,
    Day,
    Document,
    Figure,
    Interval,
    Number,
    Paragraph,
    Quote,
    Reference,
    Section,
    Statistic,
    Table,
    Text,
    Verbatim,
)
from pipeline.report.house import styled
from pipeline.report.wording import set_cell

SYMBOLS = "χ² R² α β δ λ ρ σ τ ω ≤ ≥ ± × § … – — ’ ‘ “ ” − [−1, +1] Łódź Ω Ж é ß"
MARKUP = (
    "<script>alert(1)</script>",
    "\\end{tabular}\\input{x} $y^2$ 50% a_b ~ ^ & #1",
    '#set page(width: 1pt) *bold* _it_ @ref <label> `raw` $x$ "quoted" //',
    "{{ 7*7 }}{% raw %}",
    "&lt;b&gt; ]]> \x00\x0b\u202etxt.exe\ud800",
)
FORMULAS = ("=1+1", "+1", "-2+3", "@SUM(A1)", '=HYPERLINK("http://x","y")', "https://example.org")
LONG = "Nordwestmitteleuropäische" + "Beteiligungsverwaltungs" * 5 + "gesellschaft"
SETS = {
    Shape.INTERVAL: (-0.0123, 0.0045),
    Shape.RAYS: (-0.02, 0.03),
    Shape.LINE: (nan, nan),
    Shape.EMPTY: (nan, nan),
}


def kitchen() -> Document:
    """The document, in a style with nothing left as it is by default."""
    house = House(
        stars=True,
        brackets="t value",
        decimals=1,
        money="US$ {} m",
        dates=FRENCH,
        footer="Confidential & <internal> – 100% #1",
        page="Letter",
        logo=logo(),
        reviewers=(Reviewer("Ada <b>Example</b>", "Head & neck"), Reviewer("=1+1", "Model risk")),
    )
    sections = (
        Section("Words", words()),
        Section("Tables", (cells(), sets(), hostile(), blank(), shortened())),
        Section("A drawing", (drawing(),), 3),
        Section("On its side", (wide(),), 3, wide=True),
        Section("To sign", (sign_off_table(house),), fresh=True),
    )
    title = f"Every kind of block & {MARKUP[0]}"
    return styled(Document(title, f"Under it: {SYMBOLS}", sections, house, numbered=True))


def logo() -> Logo:
    """A plain sign of two colours."""
    picture = Image.new("RGB", (60, 20), (28, 74, 110))
    picture.paste((232, 179, 58), (5, 5, 15, 15))
    buffer = io.BytesIO()
    picture.save(buffer, "PNG")
    return Logo(buffer.getvalue(), PNG, 3.0, "Logo: two colours")


def words() -> tuple[Block, ...]:
    """Prose of every kind."""
    quoted = Quote("−51", -0.0051, "event_tests", "mean", (("window_start", -1),), 1e4, 0)
    first = Paragraph(
        ("The mean was ", quoted, " bp on 2024-03-08, as ", Verbatim("she: 2024-03-08", "study"),
         " wrote; see ", Reference("cells"), " and ", Reference("drawing"), "."),
        lead="Of a day.",
    )  # fmt: skip
    said = Paragraph((Verbatim(f"{MARKUP[0]} {MARKUP[1]}", "study"),), "By whom", quotation=True)
    items = tuple(Paragraph((text,), lead=f"Item {at}.") for at, text in enumerate(MARKUP, 1))
    inside = (Paragraph((SYMBOLS,)), Paragraph((LONG,), lead="Long."))
    return (first, said, Bullets(items), Callout("Set apart: <i>", inside))


def cells() -> Table:
    """Every kind of cell, numbers missing, tiny, huge and without end."""
    columns = (Column("What"), Column("Cell", "bp"), Column("Alone", "%"))
    rows = (
        (Text("number"), Number(-1234.5678, 1, "bp"), Number(0.0, 0)),
        (Text("marked"), Number(-255.04, 1, "bp", mark="***"), Number(-0.04, 1)),
        (Text("missing"), None, Number(nan, 2)),
        (Text("under the least"), Statistic(Number(-3.271, 2), Number(0.0000004, 3, "", 0.001),
                                            Number(0.0123, 3)), Number(1e9, 2)),
        (Text("interval"), Interval(Number(-51.2, 1), Number(-80.96, 1), Number(-20.4, 1)), None),
        (Text("no estimate"), Interval(None, Number(-1, 0), Number(2, 0)), None),
        (Text("half a line"), Interval(Number(5, 0), Number(-3, 0), Number(inf, 0)),
         Number(-inf, 0)),
        (Text("in brackets"), Bracketed(Number(-84.1, 1, mark="*"), Number(-1.89, 2)), None),
        (Text("a date"), Day(date(2024, 3, 1), FRENCH), Number(2024, 0)),
        (Text("a date in words"), Text("2024-02-29"), None),
        (Text("no such date"), Text("2023-02-29"), None),
    )  # fmt: skip
    notes = (
        Paragraph(("A note of ", Reference("sets"), " of 2024-12-31.")),
        Paragraph((f"Another: {SYMBOLS}",), lead="Note 2."),
    )
    return Table("cells", Paragraph(("Every kind of cell",)), columns, rows, notes, footer=8)


def sets() -> Table:
    """A confidence set of every shape under an estimate."""
    columns = (Column("Shape"), Column("Estimate and set", "bp"), Column("Deals", "n"))
    rows = tuple(
        (Text(shape.value), set_cell(-0.0051, ConfidenceSet(shape, *ends, 0.95, "m"), 1),
         Number(12, 0))
        for shape, ends in SETS.items()
    )  # fmt: skip
    return Table("sets", Paragraph(("Odd sets",)), columns, rows)


def hostile() -> Table:
    """Words that a sheet would run, a page would obey, and a column would be too narrow for."""
    columns = (Column(MARKUP[3]), Column(LONG, "=1+1", prose=True), Column("n"))
    texts = (*MARKUP, *FORMULAS, LONG, "line\nbreak", SYMBOLS)
    rows = tuple((Text(text), Text(text), Number(at, 0)) for at, text in enumerate(texts))
    title = Paragraph((Verbatim(MARKUP[1], "estimate"),))
    return Table("hostile", title, columns, rows)


def blank() -> Table:
    """No row at all."""
    return Table("blank", Paragraph(("No row",)), (Column("A"), Column("B")), ())


def shortened() -> Table:
    """More rows than a page shows."""
    rows = tuple((Text(f"row {at}"), Number(at, 0)) for at in range(1, 6))
    return Table("short", Paragraph(("Two of five",)), (Column("A"), Column("B")), rows, shown=2)


def wide() -> Table:
    """Nine columns, a footer, and more rows than fit on a page."""
    columns = (Column("Variable"), *(Column(f"Column {at}", "bp per unit") for at in range(1, 9)))
    rows = tuple(
        (Text(f"variable {row}"), *(Interval(Number(row * at * 10.25, 1), Number(-row, 0),
                                             Number(at, 0)) for at in range(1, 9)))
        for row in range(1, 31)
    )  # fmt: skip
    note = Paragraph(("Its heading stands on every page it takes.",))
    return Table("wide", Paragraph(("More than a page",)), columns, rows, (note,), footer=28)


def drawing() -> Figure:
    """An interval of every shape."""
    rows = [
        {"dimension": MARKUP[0], "label": "2024-03-08", "estimate": -51.0, "low": low * 1e4,
         "high": high * 1e4, "shape": shape.value, "lead": shape is Shape.RAYS}
        for shape, (low, high) in SETS.items()
    ]  # fmt: skip
    caption = Paragraph(("How to read it: ", Reference("cells"), "."))
    alt = f"Four sets {MARKUP[0]} & 2024-03-08"
    return Figure("drawing", "intervals", Paragraph(("Sets of all shapes",)), caption, alt,
                  pd.DataFrame(rows), axis="Effect (bp)")  # fmt: skip
