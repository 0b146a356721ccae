"""What the terminal shows of a drafted study: recognised, asked, lacking."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

from rich.console import Console

from pipeline.screen import finding_dict, show_finding

if TYPE_CHECKING:
    from collections.abc import Sequence

    from pipeline.drafting.lines import Line
    from pipeline.flow.drafted import Drafted


def show_drafted(found: Drafted, *, as_json: bool) -> None:
    """Tables, questions, guesses to confirm, and what the check said."""
    if as_json:
        print(json.dumps(_content(found), ensure_ascii=False))
        return
    console = Console(highlight=False, markup=False)
    for name, words in found.draft.told:
        console.print(f"{name}: {words}.", soft_wrap=True)
    _listed(console, "Questions only you can answer", found.draft.questions)
    _listed(console, "Guesses to confirm", found.draft.doubtful)
    console.print()
    if not found.checked:
        for finding in found.findings:
            show_finding(console, finding)
        console.print(f"Written to {found.place}, and not ready to run.", soft_wrap=True)
        console.print("Answer by editing it, or draft again with --answer KEY=VALUE.")
        return
    warned = f"; {len(found.findings)} notes and warnings" if found.findings else ""
    console.print(f"Written to {found.place}; it passes the check{warned}.", soft_wrap=True)
    console.print(f"{found.kept[1]} of {found.kept[0]} rows would be used: read the file, then "
                  f"dealwake run {found.place}", soft_wrap=True)  # fmt: skip


def _listed(console: Console, title: str, lines: Sequence[Line]) -> None:
    if not lines:
        return
    console.print(f"\n{title}:")
    for line in lines:
        head = f"  {line.path}" if line.key else "  (no key)"
        said = "" if line.open or not line.key else f" = {line.value}"
        console.print(f"{head}{said}\n      {line.reason}", soft_wrap=True)


def _content(found: Drafted) -> dict[str, object]:
    draft = found.draft
    return {
        "study": str(found.place),
        "passes_check": found.checked,
        "tables": [{"table": name, "taken": words} for name, words in draft.told],
        "keys": [
            {
                "key": line.path,
                "value": line.value,
                "reason": line.reason,
                "open": line.open,
                "doubtful": line.doubtful,
                "answered": line.answered,
                "example": line.example,
            }
            for line in draft.lines
            if line.key or line.open
        ],
        "findings": [finding_dict(finding) for finding in found.findings],
    }
