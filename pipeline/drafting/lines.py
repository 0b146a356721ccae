"""The lines of a drafted study file, each with its reason, and the text they make."""

from __future__ import annotations

import json
import re
import textwrap
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

BARE = re.compile(r"[A-Za-z0-9_-]+")
WIDTH = 96
DOUBT = "Please confirm: "
OPEN = "Question: "


@dataclass(frozen=True, slots=True)
class Line:
    """One key of the study file.

    Attributes:
        section: the table it stands in, '' for the top.
        key, value: as in the file; a value that is None leaves the key to be filled in.
        reason: why it is so, in words.
        doubtful: whether another value is nearly as likely.
        example: what to write, for a key that is left open.
        answered: whether the analyst gave the value.
    """

    section: str
    key: str
    value: object
    reason: str = ""
    doubtful: bool = False
    example: str = ""
    answered: bool = False

    @property
    def path(self) -> str:
        """The dotted path of the key."""
        return f"{self.section}.{self.key}" if self.section else self.key

    @property
    def open(self) -> bool:
        """Whether only the analyst can give the value."""
        return self.value is None


def toml(value: object) -> str:
    """A value as TOML."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, dict):
        inner = ", ".join(f"{_key(name)} = {toml(item)}" for name, item in value.items())
        return "{ " + inner + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(toml(item) for item in value) + "]"
    return json.dumps(str(value), ensure_ascii=False)


def _key(name: str) -> str:
    return name if BARE.fullmatch(name) else json.dumps(name, ensure_ascii=False)


def _comment(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, initial_indent="# ", subsequent_indent="# ")


def written(lines: Sequence[Line], head: Iterable[str]) -> str:
    """The study file: comments, then each table with its keys, a reason above each."""
    text = [row for paragraph in head for row in (*_comment(paragraph), "")]
    for section in dict.fromkeys(line.section for line in lines):
        if section:
            text += ["", "[" + ".".join(_key(part) for part in section.split(".")) + "]"]
        for line in lines:
            if line.section == section:
                text += _rows(line)
    return "\n".join(text).strip() + "\n"


def _rows(line: Line) -> list[str]:
    mark = OPEN if line.open else DOUBT if line.doubtful else ""
    comment = _comment(mark + line.reason) if line.reason else []
    if not line.key:
        return comment
    if line.open:
        return [*comment, f"# {_key(line.key)} = {line.example}"]
    return [*comment, f"{_key(line.key)} = {toml(line.value)}"]


def answered(lines: Sequence[Line], answers: dict[str, object]) -> list[Line]:
    """The lines with the analyst's own values, those of other keys added at the end."""
    known = {line.path for line in lines if line.key}
    said = "Your own answer."
    changed = [
        Line(line.section, line.key, answers[line.path], said, answered=True)
        if line.key and line.path in answers
        else line
        for line in lines
    ]
    for path, value in answers.items():
        if path not in known:
            section, _, key = path.rpartition(".")
            changed.append(Line(section, key, value, said, answered=True))
    return changed
