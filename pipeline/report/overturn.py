"""What it would take to overturn the finding: one paragraph by rule, one picture, the tables."""

from __future__ import annotations

import math

import pandas as pd

from pipeline.report.document import Block, Callout, Paragraph, Piece, Quote, Section
from pipeline.report.doubt_graphs import (
    assumptions_figure,
    extrapolation_figures,
    hidden_figure,
    violations_figure,
)
from pipeline.report.doubt_tables import (
    both_ways_table,
    breakdowns_table,
    controls_table,
    expectations_table,
    left_out_table,
    selection_table,
    share_digits,
    strengths_table,
)
from pipeline.report.grade import grade
from pipeline.report.material import Material, embedded, prose, quote
from pipeline.report.numerals import PERCENT
from pipeline.report.sample_graphs import left_out_figures

Pieces = tuple[Piece, ...]
SCALES = {"share": (PERCENT, "%"), "times": (1.0, ""), "odds": (1.0, ""), "correlation": (1.0, "")}
RULE = (
    "The paragraph follows from the table below. A statement stands if more would have to be true "
    "for it to fall than what it is measured by; the assumption that carries the finding is the "
    "one with least to spare. Where instruments lead, the assumption is theirs, and least squares "
    "stands only if the two do not differ beyond the error of both."
)


def overturn_section(material: Material) -> Section | None:
    """The verdict, the picture and the tables; None if the run was not put to any doubt."""
    frame = material.frames.get("breakdowns")
    if frame is None or frame.empty:
        return None
    blocks: list[Block | None] = [
        Callout("Does the finding survive", (verdict(material), prose(RULE, lead="The rule."))),
        assumptions_figure(material),
        breakdowns_table(material),
        hidden_figure(material),
        strengths_table(material),
        selection_table(material),
        controls_table(material),
        *extrapolation_figures(material),
        violations_figure(material),
        both_ways_table(material),
        expectations_table(material),
        left_out_table(material),
        *left_out_figures(material),
    ]
    kept = tuple(block for block in blocks if block is not None)
    return Section("What it would take to overturn the finding", kept)


def survival_section(material: Material) -> Section | None:
    """The verdict alone, for the memo."""
    frame = material.frames.get("breakdowns")
    if frame is None or frame.empty:
        return None
    return Section("Does the finding survive", (verdict(material),))


def verdict(material: Material) -> Paragraph:
    """The closing paragraph, from the table of breakdowns by rule."""
    rows = {(str(row["target"]), str(row["key"])): row
            for _, row in material.frames["breakdowns"].iterrows()}  # fmt: skip
    reported = material.frames["reported"]
    lead = str(reported.loc[reported["lead"], "target"].iloc[0])
    if (lead, "exclusion_zero") in rows:
        found = _instrumented(material, rows, lead)
    else:
        own = [row for (target, _), row in rows.items() if target == lead]
        found = [] if own else ["What would overturn the column that leads was not computed; "
                                "this is of least squares. "]  # fmt: skip
        found += _plain(material, own or list(rows.values()))
    letter = f" Confidence grade: {grade(material).letter}."
    return prose(*found, letter)


def _instrumented(
    material: Material, rows: dict[tuple[str, str], pd.Series[float]], lead: str
) -> list[Piece | Pieces]:
    zero, other, difference = (
        rows[lead, f"exclusion_{name}"] for name in ("zero", "least_squares", "difference")
    )
    words = (
        "smaller than least squares says" if _smaller(material) else "not what least squares says"
    )
    found = _standing(material, "That there is an effect at all", zero,
                      "the set of the lead column holds zero")  # fmt: skip
    found += _standing(material, f"That it is {words}", other, "the set holds that too")
    found += _least_squares(material, rows, difference)
    carrier = str(zero["assumption"])
    found += ["The assumption that carries the finding: ", _decapitalised(carrier), "."]
    return found


def _standing(
    material: Material, statement: str, row: pd.Series[float], why_not: str
) -> list[Piece | Pieces]:
    """Whether a statement stands, and what it falls to."""
    if float(row["value"]) == 0:
        return [f"{statement} does not stand: {why_not}. "]
    how = "stands" if str(row["verdict"]) == "holds" else "stands only just"
    return [f"{statement} {how}; it falls if ", _clause(material, row), ". "]


def _least_squares(
    material: Material,
    rows: dict[tuple[str, str], pd.Series[float]],
    difference: pd.Series[float],
) -> list[Piece | Pieces]:
    """Whether least squares stands beside the instruments, and the hidden factor it takes."""
    row = next((r for (_, key), r in rows.items() if key == "confounder_interval"), None)
    if row is None or float(row["value"]) == 0:
        return ["The least-squares interval holds zero as it is. "] if row is not None else []
    if str(difference["verdict"]) == "holds":
        return [
            "Least squares itself does not survive: it differs from the instrumented effect "
            "beyond the error of both, and will unless ", _clause(material, difference), ". For "
            "its interval to hold zero it is enough that ", _clause(material, row), ". ",
        ]  # fmt: skip
    return ["The instruments hardly contradict least squares; its interval holds zero if ",
            _clause(material, row), ". "]  # fmt: skip


def _smaller(material: Material) -> bool:
    """Whether the lead's effect is smaller in size than least squares', of whatever sign."""
    lead = material.lead
    if lead is None or "least_squares" not in lead.fit:
        return False
    return abs(float(lead.term(lead.treatment)["coefficient"])) < abs(lead.fit["least_squares"])


def _plain(material: Material, rows: list[pd.Series[float]]) -> list[Piece | Pieces]:
    """A finding without instruments: what overturns it, and what has least to spare."""
    gives = [row for row in rows if str(row["verdict"]) == "gives"]
    found: list[Piece | Pieces] = []
    if gives:
        found.append("The finding does not survive every doubt. ")
        for row in gives:
            found += ["It falls if ", _clause(material, row), ". "]
    else:
        found.append("The finding survives every doubt put to it, by the measures in the table. ")
    spare = min(rows, key=_to_spare)
    if not gives:
        found += ["Nearest to overturning it: ", _clause(material, spare), ". "]
    carrier = str(spare["assumption"])
    found += ["The assumption that carries the finding: ", _decapitalised(carrier), "."]
    return found


def _to_spare(row: pd.Series[float]) -> float:
    """What would be needed over what it is measured by."""
    wanted = float(row["wanted"])
    return abs(float(row["value"])) / wanted if wanted > 0 else math.inf


def _decapitalised(text: str) -> Piece:
    return embedded(text[:1].lower() + text[1:], "check")


def _clause(material: Material, row: pd.Series[float]) -> Pieces:
    """The needed clause with its number quoted from the table."""
    before, _, after = str(row["needed"]).partition("{}")
    value = float(row["value"])
    if math.isinf(value):
        return (
            embedded(f"nothing of this kind is enough, not even that {before}all{after}", "check"),
        )
    return (_verbatim(before), *_number(material, row), _verbatim(after))


def _verbatim(text: str) -> Piece:
    """Words of the run inside a sentence, their spaces kept."""
    left, right = text[: len(text) - len(text.lstrip())], text[len(text.rstrip()) :]
    found = embedded(text, "check")
    return type(found)(f"{left}{found.text}{right}", "check")


def _number(material: Material, row: pd.Series[float]) -> tuple[Quote, str]:
    scale, after = SCALES[str(row["unit"])]
    value = float(row["value"])
    digits = share_digits(abs(value)) if after else 2
    where = {"target": str(row["target"]), "key": str(row["key"])}
    found = quote(material.frames, "breakdowns", "value", where, scale=scale, digits=digits)
    return found, after
