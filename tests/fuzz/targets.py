"""What a reader is given, made from bytes, and what it may answer: a table or a refusal in words.

Each target takes bytes, writes the file they stand for and reads it. Anything but a result or an
:class:`InputProblem` whose findings are of the catalogue is a fault.
"""

from __future__ import annotations

import io
import zipfile
from collections.abc import Callable, Mapping
from functools import cache
from pathlib import Path

import openpyxl
import pandas as pd

from pipeline.core.findings import Finding, InputProblem
from pipeline.core.rules import RULES
from pipeline.inputs.deals import read_deals
from pipeline.inputs.files import read_table
from pipeline.inputs.market import read_benchmarks, read_prices
from pipeline.inputs.moments import read_moments
from pipeline.inputs.sheet_shape import sheet_findings
from pipeline.inputs.source import ROW, Source, only
from pipeline.inputs.wanted import Wanted
from pipeline.study.load import load_study

DEALS = (
    "deal_id,security,exchange,announced_at,timestamp_zone,shares,market_value\n"
    'D1,A,XLON,2021-03-08 10:00,Europe/London,1,"1,250.5"\n'
    'D2,B,XLON,2021-03-09,"",0,\n'
)
PRICES = (
    "security,date,close,volume\nA,2021-03-05,10.5,100\nA,2021-03-08,11,\n"
    'B,2021-03-05,"20",5\nB,2021-03-08,,0\n'
)
WANTED = Wanted(deal_numbers=("shares", "market_value"), deal_texts=("industry",))
ENCODINGS = ("", "utf-8", "cp1252", "utf-16", "ascii")
DELIMITERS = ("", ",", ";", "\t", "|")
FORMATS = ("", "%d/%m/%Y", "%m/%d/%Y %H:%M", "excel", "excel 1904", "%d.%m.%y")
ZONES = ("", "Europe/London", "America/New_York", "nowhere", "../etc/passwd", "UTC")
SPANS = pd.DataFrame(
    {
        "security": ["A", "B"],
        "first": pd.to_datetime(["2021-03-01"] * 2).as_unit("s"),
        "last": pd.to_datetime(["2021-03-31"] * 2).as_unit("s"),
    }
)
ONLY = only(["A", "B", "5"], SPANS)
SHEET_PARTS = (
    "xl/worksheets/sheet1.xml", "xl/sharedStrings.xml", "xl/styles.xml", "xl/workbook.xml",
    "[Content_Types].xml", "xl/_rels/workbook.xml.rels",
)  # fmt: skip
SHARED = (
    b'<?xml version="1.0"?><sst xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main" '
    b'count="1" uniqueCount="1"><si><t>D1</t></si></sst>'
)
# Inputs that broke a reader before it was mended, by kind; the tests run them.
FOUND: Mapping[str, tuple[str, bytes]] = {
    "a sheet without content": ("xlsx", bytes([24])),
    "a style sheet that is no markup": ("xlsx", bytes([26]) + b"no markup"),
    "a cell beyond the last row, for which a million rows were made": ("xlsx", b"\x90\x24\0"),
    "a cell beyond the last column, for which 16,385 columns were made": ("xlsx", b"\x90\x1e"),
}
# Words of each kind of file, which chance alone would take long to write.
WORDS: Mapping[str, tuple[str, ...]] = {
    "csv": ('""', '",', "2021-03-08", "D1", ";", "1e309", "nan", "-0.0"),
    "xlsx": (
        "<row r='2'>", "<mergeCell ref='A1:B9'/>", "<dimension ref='A1:XFD1048576'/>", "hidden='1'",
        "<numFmt numFmtId='164' formatCode='000'/>", "<xf numFmtId='14'/>", "date1904='1'",
        "<sheet name='B' sheetId='2' r:id='rId9'/>", "Target='/xl/x.xml'",
    ),
    "parquet": ("PAR1",),
    "study": (
        "[inputs]", "[[", "]]", "= [", "= {", "inf", "nan", "-1", "0x7fffffffffffffff",
        "base = 'given.toml'", "[selection]", "[placebo]", "draws = ", "[screens]", "[report]",
        "formats = ", "[scrutiny]", "[outcome]", "[calendars.XLON]", "closed = [2018-12-31]",
        "[characteristics.x]", "[series]",
    ),
    "moments": ("2021-03-28T01:30", "+25:00", "Z", "24:00", "9999-12-31", "0001-01-01", "1e308"),
}  # fmt: skip
# Parts of a sheet, each of which a byte may choose.
PARTS = (
    "<c><v>1</v></c>", "<c t='n'><v>44263.5</v></c>", "<c t='s'><v>0</v></c>",
    "<c t='s'><v>99</v></c>", "<c t='s'/>", "<c t='b'><v>1</v></c>", "<c t='b'><v>x</v></c>",
    "<c t='e'><v>#REF!</v></c>", "<c t='d'><v>2021-03-08T10:00:00</v></c>",
    "<c t='d'><v>2021-13-08</v></c>", "<c t='str'><v>D1</v></c>", "<c t='nothing'><v>1</v></c>",
    "<c t='inlineStr'><is><t>XLON</t></is></c>", "<c t='inlineStr'><is><r><t>A</t></r></is></c>",
    "<c t='inlineStr'/>", "<c s='1'><v>44263</v></c>", "<c s='99'><v>1</v></c>",
    "<c s='1'><v>-1</v></c>", "<c s='1'><v>1e308</v></c>", "<c><v>1e999</v></c>",
    "<c><v>nan</v></c>", "<c><v>x</v></c>", "<c><f>1+1</f></c>", "<c><f>1+1</f><v>2</v></c>",
    "<c><f t='shared' si='0'/></c>", "<c><f t='array' ref='A1:B2'>A1</f></c>", "<c/>",
    "<c r='ZZ9'><v>1</v></c>", "<c r='A1'><v>1</v></c>", "<c r='1A'><v>1</v></c>",
    "<c r='XFE1'><v>1</v></c>", "</row><row>", "</row><row r='9'>", "</row><row r='1'>",
    "</row><row r='x'>", "</row><row hidden='1'>", "</row><row r='1048577'>",
)  # fmt: skip
STUDY = """title = "Small"
question = "Does it matter?"
[inputs]
deals = "deals.csv"
prices = "prices.csv"
benchmarks = "benchmarks.csv"
timestamp_zone = "Europe/London"
[event_time]
estimation = [-150, -21]
headline = [-1, 1]
windows = [[0, 1]]
[regression]
treatment = "shares"
controls = ["size"]
columns = ["ols"]
"""


class UnworthyRefusal(Exception):
    """A refusal that does not say what the person is to do, or names no rule of the catalogue."""


def _worthy(findings: tuple[Finding, ...] | list[Finding]) -> None:
    for finding in findings:
        if finding.rule not in RULES or not (finding.got and finding.expected and finding.remedy):
            raise UnworthyRefusal(repr(finding))


def answered(read: Callable[[], object]) -> None:
    """Run a reader; a refusal is an answer if it is worth showing to a person."""
    try:
        read()
    except InputProblem as refusal:
        if not refusal.findings:
            raise UnworthyRefusal("no findings") from None
        _worthy(refusal.findings)


def _read_as(choice: int, source: Source, date_format: str = "") -> None:
    """The file as one of the tables that a study may call it."""
    readers: tuple[Callable[[], object], ...] = (
        lambda: read_deals(source, WANTED, "Europe/London", date_format),
        lambda: read_prices(source, ONLY, date_format),
        lambda: read_prices(source, None, date_format),
        lambda: read_benchmarks(source, date_format),
        lambda: read_table(source),
    )
    answered(readers[choice % len(readers)])


def csv(data: bytes, folder: Path) -> None:
    """Two bytes say how the file is declared and which table it is; the rest is the file."""
    how, which, content = *(data[:2] + b"\0\0")[:2], data[2:]
    path = folder / "given.csv"
    path.write_bytes(content)
    source = Source(
        "prices" if which % 5 in (1, 2) else "deals",
        path,
        delimiter=DELIMITERS[how % 5],
        encoding=ENCODINGS[how // 5 % 5],
        decimal="," if how // 25 % 3 == 1 else "",
        header_row=1 + how // 75 % 3,
        wide=True if which // 5 % 4 == 1 else None,
    )
    _read_as(which, source, FORMATS[which // 20 % len(FORMATS)])


@cache
def _sheets() -> Mapping[str, bytes]:
    book = openpyxl.Workbook()
    for row in pd.read_csv(io.StringIO(DEALS), header=None).itertuples(index=False):
        book.active.append([None if pd.isna(cell) else cell for cell in row])
    made = io.BytesIO()
    book.save(made)
    with zipfile.ZipFile(made) as archive:
        return {name: archive.read(name) for name in archive.namelist()}


def _sheet_of_parts(chosen: bytes) -> bytes:
    heads = DEALS.splitlines()[0].split(",")
    header = "".join(f"<c t='inlineStr'><is><t>{head}</t></is></c>" for head in heads)
    cells = "".join(PARTS[byte % len(PARTS)] for byte in chosen)
    space = "http://schemas.openxmlformats.org/spreadsheetml/2006/main"
    rows = f"<row r='1'>{header}</row><row>{cells}</row>"
    return f"<worksheet xmlns='{space}'><sheetData>{rows}</sheetData></worksheet>".encode()


def xlsx(data: bytes, folder: Path) -> None:
    """A sound workbook with one of its parts replaced, or bytes in the place of a workbook.

    Half of the sheets are made of :data:`PARTS`, since bytes alone seldom make markup.
    """
    how, content = (data[:1] + b"\0")[0], data[1:]
    path = folder / "given.xlsx"
    if how >= 240:
        path.write_bytes(content)
    else:
        part = SHEET_PARTS[how % len(SHEET_PARTS)] if how < 120 else SHEET_PARTS[0]
        content = content if how < 120 else _sheet_of_parts(content)
        with zipfile.ZipFile(path, "w") as archive:
            for name, sound in {**_sheets(), part: b""}.items():
                archive.writestr(name, content if name == part else sound)
    source = Source("deals", path, header_row=1 + how // 60 % 2)
    _read_as(how // 6, source)
    answered(lambda: _worthy(sheet_findings(source)))


def parquet(data: bytes, folder: Path) -> None:
    """One byte says which table it is; the rest is the file."""
    which = (data[:1] + b"\0")[0]
    path = folder / "given.parquet"
    path.write_bytes(data[1:])
    _read_as(which, Source("prices" if which % 5 in (1, 2) else "deals", path))


def study(data: bytes, folder: Path) -> None:
    """A study file as it stands."""
    path = folder / "given.toml"
    path.write_bytes(data)
    answered(lambda: load_study(path))


def moments(data: bytes, folder: Path) -> None:
    """Two bytes choose zone and format; each further line is the cell of a deal."""
    zone, form = (data[:2] + b"\0\0")[:2]
    cells = data[2:].decode("utf-8", errors="replace").split("\n")
    zones = [ZONES[(zone + at) % len(ZONES)] for at in range(len(cells))]
    deals = pd.DataFrame({"announced_at": cells, "timestamp_zone": zones, ROW: range(len(cells))})
    source = Source("deals", folder / "deals.csv")
    default, date_format = ZONES[zone // 8 % len(ZONES)], FORMATS[form % len(FORMATS)]
    answered(lambda: _worthy(read_moments(deals, source, default, date_format)[1]))


TARGETS: Mapping[str, Callable[[bytes, Path], None]] = {
    "csv": csv,
    "xlsx": xlsx,
    "parquet": parquet,
    "study": study,
    "moments": moments,
}


def _parquet_bytes(text: str) -> bytes:
    made = io.BytesIO()
    pd.read_csv(io.StringIO(text), dtype=str).to_parquet(made)
    return made.getvalue()


def seeds() -> Mapping[str, list[bytes]]:
    """Sound files of each kind, from which broken ones are made."""
    cells = "2021-03-08 10:00\n2021-03-28T01:30\n08/03/2021\n44263.5\n2021-03-08T10:00+01:00"
    root = Path(__file__).resolve().parents[2]
    return {
        "csv": [
            *(bytes([0, which]) + DEALS.encode() for which in (0, 4)),
            *(bytes([0, which]) + PRICES.encode() for which in (1, 2, 3)),
            bytes([2, 0]) + DEALS.replace(",", ";").encode(),
            bytes([15, 0]) + DEALS.encode("utf-16"),
            bytes([0, 6]) + b"date,A,B\n2021-03-08,1,2\n2021-03-09,,4\n",
        ],
        "xlsx": [
            bytes([1]) + SHARED,
            *(bytes([120 + which]) + bytes(range(len(PARTS))) for which in (0, 6, 24)),
            *(
                bytes([at + which]) + _sheets().get(name, b"")
                for which in (0, 24)
                for at, name in enumerate(SHEET_PARTS)
            ),
        ],
        "parquet": [
            bytes([0]) + _parquet_bytes(DEALS),
            *(bytes([which]) + _parquet_bytes(PRICES) for which in (1, 2, 4)),
        ],
        "study": [STUDY.encode(), (root / "configs" / "demo.toml").read_bytes()],
        "moments": [bytes([1, form]) + cells.encode() for form in range(len(FORMATS))],
    }
