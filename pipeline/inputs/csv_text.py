"""How a csv file is written: its encoding and its mark, declared or told without a doubt."""

from __future__ import annotations

import codecs
import csv
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from tempfile import TemporaryDirectory

from pipeline.core.findings import InputProblem, problem
from pipeline.inputs.faults import MARKS
from pipeline.inputs.source import Source

HEAD = 1 << 18
CHUNK = 1 << 22
ROWS = 200
BOMS = {
    codecs.BOM_UTF8: "utf-8-sig", codecs.BOM_UTF32_LE: "utf-32", codecs.BOM_UTF32_BE: "utf-32",
    codecs.BOM_UTF16_LE: "utf-16", codecs.BOM_UTF16_BE: "utf-16",
}  # fmt: skip
NAMES = {",": "comma", ";": "semicolon", "\t": "tab", "|": "bar"}


def key(source: Source, name: str) -> str:
    """A key of the study file about how a table is written."""
    return f"inputs.source.{source.table}.{name}"


@contextmanager
def as_utf8(source: Source, whole: bool = True) -> Iterator[Path]:
    """The file in UTF-8: itself, or a copy that lives as long as the context.

    Without ``whole`` nothing but its first rows will be read, and bytes of zero are not looked for.

    Raises:
        InputProblem: if it cannot be read as declared, or holds bytes that no text has.
    """
    marked = _byte_order_mark(source.at)
    encoding = marked or source.encoding or "utf-8"
    if whole:
        _refuse_nulls(source, encoding)
    if codecs.lookup(encoding).name in ("utf-8", "utf-8-sig", "ascii"):
        yield source.at
        return
    if not marked:
        _refuse_utf8(source)
    with TemporaryDirectory(prefix="dealwake_") as folder:
        yield _decoded(source, encoding, Path(folder) / source.at.name)


def _byte_order_mark(path: Path) -> str:
    """The encoding that the first bytes declare; '' if they declare none."""
    with path.open("rb") as file:
        first = file.read(4)
    return next((name for mark, name in BOMS.items() if first.startswith(mark)), "")


def _decoded(source: Source, encoding: str, target: Path) -> Path:
    decode = codecs.getincrementaldecoder(encoding)("strict").decode
    row = 1
    with source.at.open("rb") as file, target.open("w", encoding="utf-8", newline="") as text:
        while True:
            block = file.read(CHUNK)
            try:
                part = decode(block, not block)
            except UnicodeError as fault:
                before = block[: getattr(fault, "start", 0)].count(b"\n")
                raise _undecodable(source, encoding, row + before) from None
            row += part.count("\n")
            text.write(part)
            if not block:
                return target


def _undecodable(source: Source, encoding: str, row: int) -> InputProblem:
    return problem(
        "unreadable_file",
        source.file,
        got=f"a character that {encoding} does not have",
        expected=f"text in {encoding}, as {key(source, 'encoding')} or its first bytes say",
        remedy=f"Correct {key(source, 'encoding')}, or save the table again as CSV in UTF-8.",
        row=str(row),
        column=key(source, "encoding"),
    )


def _refuse_utf8(source: Source) -> None:
    """Refuse another encoding for a file whose letters beyond ASCII are UTF-8 throughout."""
    check = codecs.getincrementaldecoder("utf-8")("strict")
    beyond = False
    with source.at.open("rb") as file:
        while block := file.read(CHUNK):
            beyond = beyond or not block.isascii()
            try:
                check.decode(block)
            except UnicodeDecodeError:
                return
    if not beyond:
        return
    raise problem(
        "unreadable_file",
        source.file,
        got=f"{key(source, 'encoding')} = '{source.encoding}' for a file written in UTF-8",
        expected="the encoding the file is written in",
        remedy="Delete the key.",
        column=key(source, "encoding"),
    )


def _refuse_nulls(source: Source, encoding: str) -> None:
    if encoding.replace("-", "").replace("_", "").lower().startswith(("utf16", "utf32")):
        return
    at = _first_null(source.at)
    if at < 0:
        return
    with source.at.open("rb") as file:
        row = 1 + file.read(at).count(b"\n") if at < CHUNK else 0
    raise problem(
        "unreadable_file",
        source.file,
        got=f"a byte of zero, byte {at + 1} of the file, which text does not have",
        expected="a table in plain text",
        remedy="Export the table again; if it is UTF-16, set "
        f"{key(source, 'encoding')} = 'utf-16'.",
        row=str(row) if row else "",
    )


def _first_null(path: Path) -> int:
    """Where the first byte of zero stands; -1 if there is none."""
    done = 0
    with path.open("rb") as file:
        while block := file.read(CHUNK):
            at = block.find(b"\0")
            if at >= 0:
                return done + at
            done += len(block)
    return -1


def delimiter(source: Source, path: Path) -> str:
    """The mark between cells: the declared one, or the one that fits the first rows alone.

    '' where none does: lines may stand above the header, or a row is of another length.

    Raises:
        InputProblem: ``ambiguous_delimiter`` if several marks give the rows equally many cells.
    """
    if source.delimiter:
        return source.delimiter
    lines = _first_lines(path, source.header_row)
    fits = [mark for mark in MARKS if _cells(lines, mark) > 1]
    if len(fits) > 1:
        raise problem(
            "ambiguous_delimiter",
            source.file,
            got="rows that " + " and ".join(NAMES[mark] for mark in fits) + " both part evenly",
            expected="one mark that parts the cells",
            remedy=f"Set {key(source, 'delimiter')} to it.",
            column=key(source, "delimiter"),
        )
    return fits[0] if fits else ""


def _first_lines(path: Path, header_row: int) -> list[str]:
    """The header and the rows below it, as far as whole lines were read."""
    with path.open("rb") as file:
        block = file.read(HEAD)
    text = block.decode("utf-8-sig", errors="replace")
    lines = text.splitlines(keepends=True)
    if len(block) == HEAD and len(lines) > 1:
        lines.pop()
    return lines[header_row - 1 :]


def _cells(lines: list[str], mark: str) -> int:
    """How many cells each of the first rows has; 0 if they differ."""
    found: set[int] = set()
    try:
        for number, row in enumerate(csv.reader(lines, delimiter=mark)):
            if number == ROWS:
                break
            if row:
                found.add(len(row))
    except csv.Error:
        return 0
    return found.pop() if len(found) == 1 else 0
