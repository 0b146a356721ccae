"""The logo: a picture is taken as it is, anything else is refused with what to do."""

from __future__ import annotations

import io
from pathlib import Path

import pytest
from PIL import Image

from pipeline.core.findings import Finding, InputProblem
from pipeline.inputs.logo import LARGEST, read_logo

SVG = '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 120 40">{}</svg>'


def written(path: Path, data: bytes | str) -> Path:
    path.write_bytes(data if isinstance(data, bytes) else data.encode())
    return path


def picture(kind: str, size: tuple[int, int] = (60, 20)) -> bytes:
    buffer = io.BytesIO()
    Image.new("RGB", size, (1, 2, 3)).save(buffer, kind)
    return buffer.getvalue()


def refused(path: Path) -> Finding:
    with pytest.raises(InputProblem) as caught:
        read_logo(path)
    (finding,) = caught.value.findings
    assert finding.column == "papers.logo"
    assert finding.expected
    assert finding.remedy
    return finding


@pytest.mark.parametrize(
    ("name", "kind"), [("a.png", "png"), ("A.JPG", "jpeg"), ("a.jpeg", "jpeg")]
)
def test_a_picture_is_taken_byte_for_byte(name: str, kind: str, tmp_path: Path) -> None:
    data = picture(kind)
    logo = read_logo(written(tmp_path / name, data))
    assert (logo.data, logo.kind, logo.shape) == (data, kind, 3.0)
    assert logo.words


@pytest.mark.parametrize(
    "head", ['viewBox="0 0 120 40"', 'width="90mm" height="30mm"', 'viewBox="0,0,6,2"']
)
def test_a_drawing_has_the_shape_it_says(head: str, tmp_path: Path) -> None:
    text = f'<svg xmlns="http://www.w3.org/2000/svg" {head}><rect width="9" height="9"/></svg>'
    assert read_logo(written(tmp_path / "a.svg", text)).shape == pytest.approx(3.0)


def test_a_file_that_is_not_there(tmp_path: Path) -> None:
    finding = refused(tmp_path / "logo.png")
    assert finding.rule == "missing_file"
    assert "logo.png" in finding.got


@pytest.mark.parametrize(
    ("name", "data", "words"),
    [
        ("a.gif", picture("gif"), "'.gif'"),
        ("a.png", picture("jpeg"), "no PNG"),
        ("a.png", picture("png")[:60], "no PNG"),
        ("a.jpg", b"", "no JPEG"),
        ("a.png", b"\0" * (LARGEST + 1), "2,000,001 bytes"),
        ("a.png", picture("png", (6000, 5000)), "6,000 by 5,000"),
        ("a.svg", "not xml", "no SVG"),
        ("a.svg", "<html/>", "another kind"),
        ("a.svg", '<svg xmlns="http://www.w3.org/2000/svg"/>', "without a size"),
        ("a.svg", SVG.format("<script>x()</script>"), "<script>"),
        ("a.svg", SVG.format('<rect onload="x()"/>'), "onload"),
        ("a.svg", SVG.format('<use href="https://example.org/x.svg#a"/>'), "href"),
        ("a.svg", SVG.format('<rect fill="url(https://example.org/x)"/>'), "fill"),
        ("a.svg", SVG.format("<style>@import 'x.css';</style>"), "style"),
        ("a.svg", SVG.format('<image href="data:image/png;base64,AA"/>'), "<image>"),
        ("a.svg", '<!DOCTYPE svg [<!ENTITY a "b">]>' + SVG.format("&a;"), "document type"),
    ],
)
def test_what_cannot_be_shown_is_refused(
    name: str, data: bytes | str, words: str, tmp_path: Path
) -> None:
    finding = refused(written(tmp_path / name, data))
    assert finding.rule == "unreadable_file"
    assert words in finding.got


def test_a_drawing_may_refer_to_its_own_parts(tmp_path: Path) -> None:
    body = (
        '<defs><g id="a"/></defs><use href="#a"/><rect fill="url(#b)"/><style>.c{fill:red}</style>'
    )
    assert read_logo(written(tmp_path / "a.svg", SVG.format(body))).kind == "svg"
