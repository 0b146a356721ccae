"""The finding: at most 120 words that lead the report, and what did not fit into them."""

from __future__ import annotations

import math

import pandas as pd

from pipeline.core.estimate import NotApplicable
from pipeline.core.outcome import MONEY
from pipeline.core.results import Results
from pipeline.report.document import Bullets, Paragraph, Piece, Section
from pipeline.report.grade import grade, grade_callout, signs_differ, tests_disagree
from pipeline.report.material import (
    Material,
    capital,
    effect_digits,
    embedded,
    headline_result,
    named,
    prose,
    taken,
)
from pipeline.report.numerals import BP, bp_digits, digits_for, unit_digits
from pipeline.report.wording import money_pieces, set_pieces

LIMIT = 120
Pieces = tuple[Piece, ...]

# What may move out of the finding into the list under it, first the words of others.
_MOVES = ((), ("reason",), ("reason", "estimand"), ("reason", "estimand", "threat"),
          ("reason", "estimand", "threat", "money"),
          ("reason", "estimand", "threat", "money", "others"))  # fmt: skip


def finding_section(material: Material) -> Section:
    """The finding, what did not fit into it, and the confidence grade."""
    paragraph, moved = finding(material)
    rest = _rest(material, moved)
    blocks = (paragraph, *((Bullets(rest),) if rest else ()), grade_callout(material))
    return Section("Finding", blocks)


def finding(material: Material) -> tuple[Paragraph, tuple[str, ...]]:
    """The finding in at most :data:`LIMIT` words, and the names of what was moved below it."""
    for moved in _MOVES:
        paragraph = prose(*_sentences(material, moved))
        if paragraph.words <= LIMIT:
            return paragraph, moved
    return paragraph, moved


def finding_text(results: Results) -> str:
    """The finding as plain text, for the screen."""
    return finding(Material.of(results))[0].text


def _sentences(material: Material, moved: tuple[str, ...]) -> list[Piece | Pieces]:
    found: list[Piece | Pieces] = []
    if signs_differ(material):
        found.append("The columns differ in sign. ")
    if material.ready:
        found.append(outcome_sentence(material))
    else:
        found.append(reaction_sentence(material, with_reason="reason" not in moved))
        found.append(time_sentence(material))
        found.append(agreement_sentence(material))
    found.append(feature_sentence(material, with_estimand="estimand" not in moved))
    for name, sentence in (("others", others_sentence), ("money", money_sentence)):
        if name not in moved:
            found.append(sentence(material))
    if "threat" not in moved:
        found += ["Main threat: ", _sentence_of(threat(material)), " "]
    found.append(f"Confidence grade: {grade(material).letter}.")
    return found


def _rest(material: Material, moved: tuple[str, ...]) -> tuple[Paragraph, ...]:
    items = []
    if "reason" in moved and material.study.headline_test_reason:
        reason = taken(material.study.headline_test_reason, "study")
        items.append(prose("Chosen because it ", _sentence_of(reason), lead="The test."))
    if not material.ready and material.tests.n > 1:
        items.append(prose(
            "It is the interval of the plain mean, from the deals' own spread; a test that weighs "
            "deals by how precisely they are measured need not agree with it.",
            lead="The interval.",
        ))  # fmt: skip
    if "estimand" in moved and material.lead is not None:
        estimand = taken(capital(material.in_words(material.lead.estimand)), "estimate")
        items.append(prose(_sentence_of(estimand), lead="What the lead column estimates."))
    if "others" in moved:
        items.append(prose(others_sentence(material), lead="Other columns."))
    if "money" in moved:
        items.append(prose(money_sentence(material), lead="In money."))
    if "threat" in moved:
        items.append(prose(_sentence_of(threat(material)), lead="Main threat."))
    return tuple(item for item in items if item.text.strip())


def outcome_sentence(material: Material) -> Pieces:
    """The mean of an outcome that the deal list held, with its interval and number of deals."""
    unit, (_, low, high) = material.unit, material.mean
    digits = unit_digits((high - low) / 4, unit)
    middle, *ends = (
        material.summary(name, scale=unit.scale, digits=digits)
        for name in ("mean", "ci_low", "ci_high")
    )
    reach: Pieces = ("no interval",)
    if math.isfinite(high - low):
        level = material.percent("confidence_level")
        reach = (*level, " interval ", unit.before, ends[0], " to ", unit.before, ends[1],
                 unit.level)  # fmt: skip
    return (
        "The mean ", embedded(material.outcome, "study"), " was ", unit.before, middle, unit.level,
        " (", *reach, "; ", material.summary("n"), " deals). ",
    )  # fmt: skip


def reaction_sentence(material: Material, *, with_reason: bool = True) -> Pieces:
    """The mean reaction with its interval, window, number of deals and leading test."""
    digits = reaction_digits(material)
    mean = material.event("mean", scale=BP, digits=digits)
    deals = material.event("n")
    whom = (
        ("The abnormal return of the one deal over sessions ", material.window(), " was ")
        if deals.value == 1
        else ("The mean abnormal return over sessions ", material.window(), " was ")
    )
    facts: Pieces = () if deals.value == 1 else ("; ", deals, " deals")
    return (
        *_flat(*whom), mean, " bp (", *_interval(material, digits), *facts, ")",
        *_test_words(material, with_reason), ". ",
    )  # fmt: skip


def time_sentence(material: Material) -> Pieces:
    """How many deals have a date and no time, so that their day zero is in doubt."""
    unknown = material.number("deals_of_unknown_time")
    if not unknown.value:
        return ()
    return ("Time unknown: ", unknown, " deal. " if unknown.value == 1 else " deals. ")


def reaction_digits(material: Material) -> int:
    """Decimals of the mean reaction in basis points, from the reach of its interval."""
    low, high = material.tests.interval
    return bp_digits(BP * (high - low) / 4, material.unit.decimals)


def _interval(material: Material, digits: int) -> Pieces:
    if not all(math.isfinite(end) for end in material.tests.interval):
        return ("no interval",)
    level = material.percent("mean_reaction", "level")
    return (*level, " interval ", *set_pieces(material, "mean_reaction", digits))


def _test_words(material: Material, with_reason: bool) -> Pieces:
    result = headline_result(material)
    if result is None:
        return ("; the test declared was not made",)
    name = embedded(named(result.name), "test")
    if isinstance(result, NotApplicable):
        return ("; ", name, " has no answer: ", embedded(result.reason, "test"))
    why: Pieces = ()
    if with_reason and material.study.headline_test_reason:
        why = (", chosen because it ", embedded(material.study.headline_test_reason, "study"))
    if not math.isfinite(result.p_value):
        return ("; ", name, " gives no p-value", *why)
    p = material.p_value()
    # The quoted text may be "<0.001"; the sign and its number stay on one line.
    sign = "p\u00a0" if p.text.startswith("<") else "p\u00a0=\u00a0"
    return (", ", sign, p, " by the test ", name, *why)


def agreement_sentence(material: Material) -> Pieces:
    """Whether the tests of the headline window agree."""
    made, rejecting = material.number("tests_made"), material.number("tests_rejecting")
    at = (" at ", *material.percent("significance_level"))
    if not made.value:
        return ()
    if tests_disagree(material):
        return (
            "Tests disagree: ",
            rejecting,
            " of the ",
            made,
            " valid here reject a zero mean",
            *at,
            ". ",
        )
    if made.value == 1:
        verb = "rejects" if rejecting.value else "does not reject"
        return (f"The one test valid here {verb} a zero mean", *at, ". ")
    if rejecting.value:
        return ("All ", made, " tests valid here reject a zero mean", *at, ". ")
    return ("None of ", made, " tests valid here rejects a zero mean", *at, ". ")


def feature_sentence(material: Material, *, with_estimand: bool = True) -> Pieces:
    """The feature's effect by the lead column, its confidence set and its estimand."""
    if not material.study.treatment or not material.results.columns:
        return ()
    lead = material.lead
    feature = embedded(capital(material.feature), "study")
    if lead is None:
        return _lead_missing(material)
    digits = effect_digits(lead, material.unit)
    estimand: Pieces = ()
    if with_estimand:
        estimand = ("; it estimates: ", embedded(material.in_words(lead.estimand), "estimate"))
    name = "feature_effect"
    return (
        feature, f" {lead.claim} ", material.unit.before, material.coefficient(lead),
        f"{material.unit.change} (",
        *material.percent(name, "level"), " set: ", *set_pieces(material, name, digits),
        ") in the column ",
        embedded(named(lead.title), "estimate"), *estimand, ". ",
    )  # fmt: skip


def _lead_missing(material: Material) -> Pieces:
    at = material.results.lead
    for column in material.withheld:
        if 0 <= at < len(material.results.columns) and material.results.columns[at] is column:
            title = embedded(named(column.title), "estimate")
            return ("The lead column, ", title, ", gives no number: ",
                    embedded(material.in_words(column.reason), "estimate"), ". ")  # fmt: skip
    return ("No column was declared to lead. ",)


def others_sentence(material: Material) -> Pieces:
    """The range of the other columns."""
    if not material.results.columns:
        return ()
    others = material.number("others_estimated")
    if not others.value:
        return ("No other column holds a number. ",)
    rest = [e for e in material.estimates if e is not material.lead]
    digits = max(effect_digits(e, material.unit) for e in rest)
    if others.value == 1:
        return ("The one other column gives ", *material.effect("others_low", digits), ". ")
    reach = material.span(("others_low", "others_high"), digits)
    return ("The ", others, " other columns run from ", *reach, ". ")


def money_sentence(material: Material) -> Pieces:
    """The effect in money at the median deal, with its confidence set."""
    name = "feature_money" if material.known("feature_money") else "mean_reaction_money"
    if not material.known(name):
        return ()
    low, high = (material.number(name, end).value for end in ("ci_low", "ci_high"))
    value = material.number(name).value
    reach = (high - low) / 4 if math.isfinite(high - low) else abs(value) / 10
    digits = digits_for(abs(reach), 2)
    middle = material.number("median_market_value")
    what = "the effect" if name == "feature_money" else f"the mean {material.outcome}"
    base = material.study.words(material.study.outcome.base)
    return (
        "At the median ", embedded(base, "study"), " (", *money_pieces(middle, material),
        f") {what} is ",
        *money_pieces(material.number(name, digits=digits), material), " (",
        *set_pieces(material, name, digits, MONEY), "). ",
    )  # fmt: skip


def threat(material: Material) -> Piece:
    """The main threat: a check of the lead column that fails, or else the choice itself."""
    frame = material.results.diagnostics
    lead = material.lead.title if material.lead else ""
    for subject in (lead, ""):
        check = _failed(frame, subject)
        if check:
            return taken(material.in_words(check), "check")
    if material.study.treatment:
        moved = material.outcome if material.ready else "price"
        return f"companies choose the feature, and reasons nobody recorded may move the {moved}."
    if material.ready:
        return "an average says nothing of what it would have been otherwise."
    return "other news of the same sessions cannot be told from the announcement."


def _failed(frame: pd.DataFrame, subject: str) -> str:
    """The first check that fails, of a subject if one is named, as a clause; '' if none does."""
    if frame.empty:
        return ""
    rows = frame[(frame["verdict"] == "fail") & (frame["subject"].eq(subject) | (not subject))]
    if rows.empty:
        return ""
    first = rows.iloc[0]
    meaning = str(first["meaning"])
    return (
        f"a check fails ({first['subject']}, {first['check']}): {meaning[:1].lower()}{meaning[1:]}"
    )


def _sentence_of(piece: Piece) -> Pieces:
    text = piece if isinstance(piece, str) else piece.text
    return (piece,) if text.endswith((".", "!", "?")) else (piece, ".")


def _flat(*pieces: Piece | Pieces) -> Pieces:
    return tuple(p for piece in pieces for p in (piece if isinstance(piece, tuple) else (piece,)))
