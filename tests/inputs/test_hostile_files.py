"""Files that are broken, or made to break things: each gives one clear finding, none a crash.

What a spreadsheet or an export may do to a file: common practice, no source.
"""

from __future__ import annotations

import zipfile
from pathlib import Path

import duckdb
import openpyxl
import pandas as pd
import pytest

from pipeline.core.findings import Finding, InputProblem
from pipeline.inputs.contracts import Column, apply_contract
from pipeline.inputs.files import read_table
from pipeline.inputs.market import read_prices
from pipeline.inputs.source import Source, only

TEXT = "deal_id;name\nD1;Jam\nD2;Café\n"
CODE, SIZE = Column("deal_id", "text"), Column("size", "number")


def csv(folder: Path, content: str | bytes, **keys: object) -> Source:
    path = folder / "deals.csv"
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return Source("deals", path, **keys)  # type: ignore[arg-type]


def refusal(source: Source) -> Finding:
    with pytest.raises(InputProblem) as caught:
        read_table(source)
    (finding,) = caught.value.findings
    return finding


def findings(source: Source, *columns: Column) -> list[Finding]:
    return apply_contract(read_table(source), source, columns)[1]


@pytest.mark.parametrize("encoding", ["cp1252", "utf-16", "utf-16-le", "utf-32", "mac_roman"])
def test_a_declared_encoding(encoding: str, tmp_path: Path) -> None:
    table = read_table(csv(tmp_path, TEXT.encode(encoding), encoding=encoding))
    assert table["name"].tolist() == ["Jam", "Café"]


@pytest.mark.parametrize("encoding", ["utf-8-sig", "utf-16", "utf-32"])
def test_a_mark_of_byte_order_declares_the_encoding(encoding: str, tmp_path: Path) -> None:
    table = read_table(csv(tmp_path, TEXT.encode(encoding)))
    assert table["name"].tolist() == ["Jam", "Café"]
    assert next(iter(table.columns)) == "deal_id"


@pytest.mark.parametrize(
    ("content", "declared", "row"),
    [
        (TEXT.encode("cp1252"), "ascii", "3"),
        (TEXT.encode("cp1252"), "utf-8", "3"),
        (b"deal_id,name\nD1,x\x81\n", "cp1252", "2"),
        (TEXT.encode(), "cp1252", ""),
        (TEXT.encode("utf-16-le")[:-1], "utf-16-le", ""),
    ],
    ids=["ascii", "utf-8", "cp1252", "utf-8 called cp1252", "cut in two"],
)
def test_a_wrong_encoding(content: bytes, declared: str, row: str, tmp_path: Path) -> None:
    finding = refusal(csv(tmp_path, content, encoding=declared))
    assert finding.rule == "unreadable_file"
    assert finding.row == row or not row
    assert "encoding" in finding.expected + finding.remedy + finding.column


@pytest.mark.parametrize("mark", [",", ";", "\t", "|"])
def test_a_mark_is_told_from_the_rows(mark: str, tmp_path: Path) -> None:
    content = f"deal_id{mark}name\nD1{mark}x\nD2{mark}y\n"
    assert read_table(csv(tmp_path, content))["name"].tolist() == ["x", "y"]
    assert read_table(csv(tmp_path, content, delimiter=mark))["name"].tolist() == ["x", "y"]


def test_two_marks_that_fit_are_never_guessed(tmp_path: Path) -> None:
    content = "deal_id,a;size,b\nD1,5;1,5\nD2,5;2,5\n"
    finding = refusal(csv(tmp_path, content))
    assert (finding.rule, finding.column) == (
        "ambiguous_delimiter",
        "inputs.source.deals.delimiter",
    )
    assert "comma and semicolon" in finding.got
    table = read_table(csv(tmp_path, content, delimiter=";"))
    assert list(table.columns)[:2] == ["deal_id,a", "size,b"]


def test_mixed_marks_name_the_row(tmp_path: Path) -> None:
    finding = refusal(csv(tmp_path, "deal_id;size\nD1;1\nD2,2\nD3;3\n"))
    assert (finding.rule, finding.row, finding.got) == ("unreadable_file", "3", "1 cells")


@pytest.mark.parametrize("row", [2, 30_000])
def test_a_byte_of_zero(row: int, tmp_path: Path) -> None:
    lines = [b"deal_id,size", *(b"D%d,1" % at for at in range(40_000))]
    lines[row - 1] = b"D\0,1"
    finding = refusal(csv(tmp_path, b"\n".join(lines) + b"\n"))
    assert (finding.rule, finding.row) == ("unreadable_file", str(row))
    assert "byte of zero" in finding.got
    assert "utf-16" in finding.remedy


@pytest.mark.parametrize(
    "content",
    ["deal_id,size\nD1," + "9" * 3_000_000 + "\n", "x" * 3_000_000],
    ids=["a cell", "the header"],
)
def test_an_enormous_cell(content: str, tmp_path: Path) -> None:
    finding = refusal(csv(tmp_path, content))
    assert (finding.rule, finding.got) == ("unreadable_file", "a cell that goes on and on")
    assert finding.row in ("1", "2")


def test_a_quotation_mark_that_is_never_closed(tmp_path: Path) -> None:
    content = 'deal_id,size\nD0,1\nD1,"never closed\n' + "D2,1\n" * 1000
    finding = refusal(csv(tmp_path, content))
    assert (finding.rule, finding.row) == ("unreadable_file", "3")
    assert "never closed" in finding.got


UNCLOSED, ODD = (
    "a quotation mark that is never closed",
    "letters after a quotation mark that closes",
)


@pytest.mark.parametrize(
    ("content", "row", "got"),
    [
        ('deal_id,size\nD1,1\nD2,"open', "3", UNCLOSED),
        ('deal_id,"size\nD1,1\nD2,2\n', "1", UNCLOSED),
        ('deal_id\nD1\n"D2\nD3\n', "3", UNCLOSED),
        ('deal_id,size\n"D1,1\nD2,2\nD3,1\n', "2", UNCLOSED),
        ('deal_id,size,z\nD0,"1,x\nD1,2,x\nD2,3,"\nD3,4,x\n', "2", "2 cells"),
        ('deal_id,size\nD1,1\nD2,"a"b\n', "3", ODD),
        ('deal_id,size\nD1,"' + "9\n" + "D2,1\n" * 700_000, "2", "a cell that goes on and on"),
    ],
    ids=["last", "header", "one column", "first", "paired by chance", "letters after", "huge"],
)
def test_quotation_marks_out_of_pairs(content: str, row: str, got: str, tmp_path: Path) -> None:
    """An open mark is no letter of the cell, whatever mark parts the cells and however long."""
    finding = refusal(csv(tmp_path, content))
    assert (finding.rule, finding.row) == ("unreadable_file", row)
    assert got in finding.got


def test_a_quotation_mark_within_a_cell_is_a_letter(tmp_path: Path) -> None:
    table = read_table(csv(tmp_path, 'deal_id,size\nD1,5" pipe\nD2,6\n'))
    assert table["size"].tolist() == ['5" pipe', "6"]


def test_decimal_commas_are_refused_until_declared(tmp_path: Path) -> None:
    content = "deal_id;size\nD1;1,5\nD2;1.234,5\nD3;\nD4;1 234\nD5;-0,25\nD6;7\n"
    (finding,) = findings(csv(tmp_path, content), SIZE)
    assert finding.rule == "unparseable_number"
    assert finding.remedy.endswith("inputs.source.deals.decimal = ','.")
    source = csv(tmp_path, content, decimal=",")
    table, said = apply_contract(read_table(source), source, [SIZE])
    assert said == []
    assert table["size"].fillna(-1).tolist() == [1.5, 1234.5, -1, 1234, -0.25, 7]


@pytest.mark.parametrize("cell", ["1.5", "1,5,0", "12.34,5", "1,234.5", "1'234"])
def test_a_point_under_a_decimal_comma_is_never_guessed(cell: str, tmp_path: Path) -> None:
    source = csv(tmp_path, f"deal_id;size\nD1;{cell}\n", decimal=",")
    (finding,) = findings(source, SIZE)
    assert (finding.rule, finding.row) == ("unparseable_number", "2")


def test_a_header_further_down(tmp_path: Path) -> None:
    content = "Exported on Monday\n;\ndeal_id;name\nD1;x\n"
    table = read_table(csv(tmp_path, content, header_row=3))
    assert table["deal_id"].tolist() == ["D1"]
    assert table["_row"].tolist() == [4]


@pytest.mark.parametrize("cell", ["1.23E+11", "9E+15"])
def test_codes_that_lost_their_digits(cell: str, tmp_path: Path) -> None:
    (finding,) = findings(csv(tmp_path, f"deal_id,size\nD1,1\n{cell},2\n"), CODE)
    assert (finding.rule, finding.row) == ("lost_digits", "3")


def workbook(path: Path, *rows: list[object], formats: dict[str, str] | None = None) -> Source:
    book = openpyxl.Workbook()
    for row in rows:
        book.active.append(row)
    for cell, shown in (formats or {}).items():
        book.active[cell].number_format = shown
    book.save(path)
    return Source("deals", path)


def test_identifiers_of_a_workbook_keep_their_zeros(tmp_path: Path) -> None:
    rows = (["deal_id"], ["007"], [7], [12345], ["123456789012345678"])
    source = workbook(tmp_path / "deals.xlsx", *rows, formats={"A3": "000000"})
    table, said = apply_contract(read_table(source), source, [CODE])
    assert said == []
    assert table["deal_id"].tolist() == ["007", "000007", "12345", "123456789012345678"]


def test_long_identifiers_kept_as_numbers_are_refused(tmp_path: Path) -> None:
    source = workbook(tmp_path / "deals.xlsx", ["deal_id"], [1234567890123456])
    (finding,) = findings(source, CODE)
    assert (finding.rule, finding.row) == ("lost_digits", "2")


def test_formulas_without_a_result_are_no_empty_cells(tmp_path: Path) -> None:
    """A library that writes formulas saves no results; text that begins with = stays text."""
    source = workbook(tmp_path / "deals.xlsx", ["deal_id", "size"], ["D1", "=1+1"], ["D2", 3])
    (finding,) = findings(source, CODE, SIZE)
    assert (finding.rule, finding.row, finding.column) == ("error_cell", "2", "size")
    (said,) = findings(csv(tmp_path, "deal_id,size\nD1,=1+1\n"), SIZE)
    assert said.rule == "unparseable_number"


def test_an_archive_made_to_fill_the_memory(tmp_path: Path) -> None:
    path = tmp_path / "deals.xlsx"
    workbook(path, ["deal_id"], ["D1"])
    with zipfile.ZipFile(path, "a", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("xl/worksheets/sheet9.xml", b" " * (64 << 20))
    finding = refusal(Source("deals", path))
    assert (finding.rule, finding.file) == ("archive_too_large", "deals.xlsx")
    assert "MB" in finding.got


def test_a_sheet_that_states_more_cells_than_it_has(tmp_path: Path) -> None:
    path = tmp_path / "deals.xlsx"
    workbook(tmp_path / "small.xlsx", ["deal_id"], ["D1"])
    with zipfile.ZipFile(tmp_path / "small.xlsx") as old, zipfile.ZipFile(path, "w") as new:
        for name in old.namelist():
            content = old.read(name).replace(b'ref="A1:A2"', b'ref="A1:XFD1048576"')
            new.writestr(name, content)
    assert read_table(Source("deals", path))["deal_id"].tolist() == ["D1"]


def test_a_stray_cell_in_the_last_row_and_column(tmp_path: Path) -> None:
    """As a slip of the hand leaves it: no table of a million rows or of 16,384 columns is made."""
    rows = (["deal_id", "size"], ["D1", 1], [], ["D2", 2])
    workbook(tmp_path / "deals.xlsx", *rows)
    book = openpyxl.load_workbook(tmp_path / "deals.xlsx")
    book.active["XFD1048576"] = "x"
    book.save(tmp_path / "deals.xlsx")
    table = read_table(Source("deals", tmp_path / "deals.xlsx"))
    assert table.shape == (3, 4)
    assert table["_row"].tolist() == [2, 4, 1_048_576]


@pytest.mark.parametrize("name", ["deals.xlsx", "deals.parquet", "deals.duckdb"])
@pytest.mark.parametrize("content", [b"", b"\0" * 5000, b"PK\x03\x04 no archive", b"PAR1 no table"])
def test_a_file_of_nonsense(name: str, content: bytes, tmp_path: Path) -> None:
    path = tmp_path / name
    path.write_bytes(content)
    relation = "deals" if name.endswith("duckdb") else ""
    assert refusal(Source("deals", path, relation=relation)).rule == "unreadable_file"


@pytest.fixture
def base(tmp_path: Path) -> Path:
    path = tmp_path / "file.duckdb"
    (tmp_path / "private.csv").write_text("deal_id\nsecret\n")
    with duckdb.connect(str(path)) as made:
        made.execute("CREATE SCHEMA desk")
        made.execute("CREATE TABLE desk.deals AS SELECT '007' AS deal_id, 1.5 AS size")
        made.execute(f"CREATE VIEW spying AS SELECT * FROM read_csv('{tmp_path / 'private.csv'}')")
    return path


def test_a_table_and_a_query_of_a_data_base_file(base: Path) -> None:
    for keys in ({"relation": "desk.deals"}, {"query": "SELECT * FROM desk.deals;"}):
        table = read_table(Source("deals", base, **keys))  # type: ignore[arg-type]
        assert table["deal_id"].tolist() == ["007"]
        assert table["_row"].tolist() == [2]


@pytest.mark.parametrize(
    "keys",
    [
        {"relation": "no_such_table"},
        {"relation": "spying"},
        {"query": "SELECT * FROM read_csv('{folder}/private.csv')"},
        {"query": "DROP TABLE desk.deals"},
        {"query": "SELECT 1); DROP TABLE desk.deals; SELECT * FROM (SELECT 1"},
        {"query": "SELECT error('no')"},
    ],
)
def test_what_a_data_base_file_may_not(keys: dict[str, str], base: Path) -> None:
    """It is opened for reading, and no statement in it reads another file of the machine."""
    keys = {name: text.replace("{folder}", str(base.parent)) for name, text in keys.items()}
    finding = refusal(Source("deals", base, **keys))  # type: ignore[arg-type]
    assert finding.rule == "unreadable_file"
    assert "secret" not in repr(finding)
    with duckdb.connect(str(base), read_only=True) as kept:
        assert kept.execute("SELECT count(*) FROM desk.deals").fetchone() == (1,)


def test_a_wide_table_is_recognised_and_says_so(tmp_path: Path) -> None:
    path = tmp_path / "prices.csv"
    path.write_text("Day,A ,B,C\n2021-03-01,1,2,3\n2021-03-02,4,,6\n2021-03-03,7,8,9\n")
    named = Source("prices", path, {"date": "Day"})
    table, (said,) = read_prices(named, only(["A", "B", "X"]), "")
    assert (said.rule, str(said.severity)) == ("wide_table", "note")
    assert "layout = 'wide'" in said.remedy
    found = table.sort_values(["security", "date"])
    assert found["security"].tolist() == ["A", "A", "A", "B", "B"]
    assert found["close"].tolist() == [1, 4, 7, 2, 8]
    assert found["volume"].isna().all()


@pytest.mark.parametrize("kind", ["csv", "parquet", "xlsx"])
def test_a_declared_wide_table_of_every_kind(kind: str, tmp_path: Path) -> None:
    frame = pd.DataFrame({"date": ["2021-03-01", "2021-03-02"], "A": [1.5, 2], "B": [None, 4.5]})
    path = tmp_path / f"prices.{kind}"
    {"csv": frame.to_csv, "parquet": frame.to_parquet, "xlsx": frame.to_excel}[kind](
        path, index=False
    )
    table, said = read_prices(Source("prices", path, wide=True), only(["A", "B"]), "")
    assert said == []
    cells = set(zip(table["security"].astype(str), table["close"], strict=True))
    assert cells == {("A", 1.5), ("A", 2.0), ("B", 4.5)}


def test_a_wide_table_without_dates(tmp_path: Path) -> None:
    path = tmp_path / "prices.csv"
    path.write_text("A,B\n1,2\n")
    with pytest.raises(InputProblem) as caught:
        read_prices(Source("prices", path, wide=True), only(["A"]), "")
    assert [finding.rule for finding in caught.value.findings] == ["missing_column"]


def test_a_wide_table_with_a_cell_that_is_no_number(tmp_path: Path) -> None:
    path = tmp_path / "prices.csv"
    path.write_text("date,A,B\n2021-03-01,1,2\n2021-03-02,oops,3\n")
    _, said = read_prices(Source("prices", path, wide=True), only(["A", "B"]), "")
    assert [(finding.rule, finding.row) for finding in said] == [("unparseable_number", "3")]
