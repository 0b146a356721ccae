"""The tables for LaTeX: nothing but words between the commands, and the numbers of the tables."""

from __future__ import annotations

import re
import shutil
import subprocess
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.results import Results
from pipeline.report.content import report
from pipeline.report.document import Column, Number, Paragraph, Table, Text
from pipeline.report.tex import escape, render, tabular
from tests.report.runs import with_frames

COMMANDS = {
    "begin", "end", "centering", "footnotesize", "scriptsize", "setlength", "dimexpr", "relax",
    "tabcolsep", "caption", "label", "toprule", "midrule", "bottomrule", "par", "newline",
    "raggedright", "arraybackslash", "textwidth", "textbackslash", "textasciicircum",
    "textasciitilde", "textless", "textgreater", "textbar", "textquotedbl", "ldots", "leq", "geq",
    "pm", "times", "allowbreak", "textsuperscript", "S", "chi", "alpha", "beta", "delta", "lambda",
    "rho", "sigma", "tau", "omega",
}  # fmt: skip


def table(text: str) -> Table:
    columns = (Column(text), Column("value", "bp"))
    return Table("t", Paragraph((text,)), columns, ((Text(text), Number(-1.5, 1)),))


def test_one_file_a_table(full: Results, files: dict[str, bytes]) -> None:
    names = {name for name in files if name.startswith("tables/")}
    assert names == {f"tables/{t.name}.tex" for t in report(full).tables if not t.form}
    assert "tables/comparison.tex" in names


def test_special_characters_print_as_themselves() -> None:
    assert escape(r"50% of A&B_c #1 {x} ~ ^ $5 \input") == (
        r"50\% of A\&B\_c \#1 \{x\} \textasciitilde{} \textasciicircum{} \$5 "
        r"\textbackslash{}input"
    )
    assert escape("[−1, +1]") == "{[}$-$1, +1{]}"
    assert escape("R², χ²(2), ρ ≤ 1") == (
        r"R\textsuperscript{2}, $\chi$\textsuperscript{2}(2), $\rho$ $\leq$ 1"
    )


@settings(max_examples=200, deadline=None)
@given(st.text(st.characters(codec="utf-8"), max_size=60))
def test_no_text_can_smuggle_a_command(text: str) -> None:
    """After escaping, a backslash starts only a command of ours or an escaped character."""
    done = escape(text)
    assert set(re.findall(r"\\([A-Za-z]+)", done)) <= COMMANDS
    bare = re.sub(r"\\[A-Za-z]+|\\[{}$&#%_]", "", done)
    bare = re.sub(r"\$(-?)\$", "", bare)
    assert not re.search(r"[\\&#%_^~\n\r]", bare)
    assert bare.count("{") == bare.count("}")


@pytest.mark.parametrize("text", ["\\input{/etc/passwd}", "a & b \\\\", "%\n\\end{tabular}", "]["])
def test_a_table_of_hostile_words_keeps_its_shape(text: str) -> None:
    done = tabular(table(text))
    assert done.count(r"\begin{tabular}") == done.count(r"\end{tabular}") == 1
    assert r"\input" not in done
    rows = [line for line in done.splitlines() if line.endswith(r" \\")]
    assert all(len(re.findall(r"(?<!\\)&", row)) == 1 for row in rows)


def test_every_row_has_every_column(full: Results, files: dict[str, bytes]) -> None:
    for item in report(full).tables:
        if item.form:
            continue
        text = files[f"tables/{item.name}.tex"].decode()
        rows = [line for line in text.splitlines() if line.endswith(r" \\")]
        cells = {len(re.findall(r"(?<!\\)&", row)) + 1 for row in rows}
        assert cells == {len(item.columns)}, item.name


def test_the_numbers_are_there(full: Results, files: dict[str, bytes]) -> None:
    text = files["tables/comparison.tex"].decode()
    row = next(line for line in text.splitlines() if line.startswith("Paid in shares"))
    firsts = [cell.split(r"\newline")[0] for cell in re.split(r"(?<!\\)&", row)[1:]]
    assert [re.sub(r"[^\d]", "", first) for first in firsts] == ["267", "289", "", "89", "153"]
    assert "e-" not in text


def test_commands_are_known_and_braces_balance(files: dict[str, bytes]) -> None:
    for name, data in files.items():
        if not name.endswith(".tex"):
            continue
        text = data.decode()
        assert set(re.findall(r"\\([A-Za-z]+)", text)) <= COMMANDS, name
        bare = re.sub(r"\\[{}]", "", text)
        assert bare.count("{") == bare.count("}"), name


def test_labels_of_the_input_cannot_end_the_table(full: Results) -> None:
    evil = "\\end{tabular}\\input{x}"
    study = replace(full.study, labels={"paid_in_shares": evil})
    for name, data in render(with_frames(replace(full, study=study))).items():
        assert data.decode().count(r"\end{tabular}") == 1, name
        assert r"\input" not in data.decode()


@pytest.mark.skipif(shutil.which("pdflatex") is None, reason="needs a LaTeX installation")
def test_latex_accepts_every_table(files: dict[str, bytes], tmp_path: Path) -> None:
    names = [name for name in files if name.endswith(".tex")]
    hostile = tabular(table("\\ { } $ & # % _ ^ ~ < > | [ ] ² χ ≤ “x” é"))
    bodies = [*(files[name].decode() for name in names), hostile]
    packages = r"\usepackage[T1]{fontenc}\usepackage{booktabs,array}"
    page = "\\clearpage\n".join(bodies)
    (tmp_path / "all.tex").write_text(
        rf"\documentclass{{article}}{packages}\begin{{document}}" + page + r"\end{document}"
    )
    command = ["pdflatex", "-interaction=nonstopmode", "-halt-on-error", "all.tex"]
    done = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout[-2000:]
    assert f"({len(bodies)} pages" in done.stdout
