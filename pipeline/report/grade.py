"""The confidence grade: a letter that follows from written rules, with the reasons that gave it."""

from __future__ import annotations

from dataclasses import dataclass

from pipeline.core.estimate import Shape
from pipeline.report.document import Callout, Paragraph
from pipeline.report.headline import sensitivity_targets
from pipeline.report.material import Material, embedded, named, prose

FEWEST, FEW = 5, 10
RULE = (
    "The grade is the worst that applies, and says nothing of the size of the effect. "
    "D: fewer than five deals, or the tests valid in the headline window disagree, or the "
    "lead column gives no number, or its confidence set is not a bounded interval. "
    "C: fewer than ten deals, or a diagnostic fails, or the columns differ in sign, or fewer "
    "than two tests are valid in the headline window. B: a diagnostic warns, or a sensitivity "
    "variant changes the sign, or fewer than two columns stand side by side. A: none of these."
)
READY_RULE = (
    "The grade is the worst that applies, and says nothing of the size of the effect. "
    "D: fewer than five deals, or the lead column gives no number, or its confidence set is not a "
    "bounded interval. C: fewer than ten deals, or a diagnostic fails, or the columns differ in "
    "sign. B: a diagnostic warns, or a sensitivity variant changes the sign, or fewer than two "
    "columns stand side by side. A: none of these."
)


@dataclass(frozen=True, slots=True)
class Grade:
    """The letter and why; no reasons under an A."""

    letter: str
    reasons: tuple[Paragraph, ...]


def grade(material: Material) -> Grade:
    """The grade of a run, by :data:`RULE`."""
    found = {"D": _ruin(material), "C": _doubt(material), "B": _reserve(material)}
    letter = next((letter for letter, reasons in found.items() if reasons), "A")
    return Grade(letter, tuple(found.get(letter, ())))


def grade_callout(material: Material) -> Callout:
    """The grade with its reasons and the rule."""
    given = grade(material)
    reasons = given.reasons or (prose("No rule below applies."),)
    rule = prose(READY_RULE if material.ready else RULE, lead="The rule.")
    return Callout(f"Confidence grade {given.letter}", (*reasons, rule))


def tests_disagree(material: Material) -> bool:
    """Whether some tests of the headline window reject a zero mean and others do not."""
    if material.ready:
        return False
    made = material.number("tests_made").value
    return 0 < material.number("tests_rejecting").value < made


def signs_differ(material: Material) -> bool:
    """Whether the feature's effect is above zero in one column and below it in another."""
    signs = [material.number(f"columns_{sign}").value for sign in ("negative", "positive")]
    return min(signs) > 0


def _ruin(material: Material) -> list[Paragraph]:
    reasons = []
    if material.deals < FEWEST:
        reasons.append(prose("There are fewer than five deals."))
    if tests_disagree(material):
        reasons.append(prose("The tests valid in the headline window disagree."))
    if material.study.treatment and material.results.columns and material.lead is None:
        reasons.append(prose("The lead column gives no number."))
    if material.lead is not None and material.lead.interval.shape is not Shape.INTERVAL:
        title = embedded(named(material.lead.title), "estimate")
        reasons.append(prose("The confidence set of ", title, " is not a bounded interval."))
    return reasons


def _doubt(material: Material) -> list[Paragraph]:
    reasons = _checks(material, "fail", "A check fails: ")
    if FEWEST <= material.deals < FEW:
        reasons.append(prose("There are fewer than ten deals."))
    if signs_differ(material):
        reasons.append(prose("The columns differ in sign."))
    if not material.ready and material.number("tests_made").value <= 1:
        reasons.append(prose("Fewer than two tests are valid in the headline window."))
    return reasons


def _reserve(material: Material) -> list[Paragraph]:
    reasons = _checks(material, "warn", "A check warns: ")
    if _sign_changes(material):
        reasons.append(prose("A sensitivity variant changes the sign."))
    if material.study.treatment and material.number("columns_estimated").value <= 1:
        reasons.append(prose("Fewer than two columns stand side by side."))
    return reasons


def _checks(material: Material, verdict: str, words: str) -> list[Paragraph]:
    frame = material.results.diagnostics
    if frame.empty:
        return []
    rows = frame[frame["verdict"] == verdict]
    return [
        prose(words, embedded(f"{subject}, {check.removesuffix(', p')}", "check"), ".")
        for subject, check in zip(rows["subject"], rows["check"], strict=True)
    ]


def _sign_changes(material: Material) -> bool:
    return any(
        material.number(f"sensitivity_low: {target}").value
        < 0
        < material.number(f"sensitivity_high: {target}").value
        for target in sensitivity_targets(material.results)
    )
