"""What a study declares about columns of its deal list: shares, and words they may hold."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping, Sequence

import pandas as pd

from pipeline.core.findings import Finding
from pipeline.core.ledger import Action, LedgerEntry
from pipeline.inputs.files import Source
from pipeline.inputs.typed import finding
from pipeline.inputs.wanted import DealRules

WHOLE = (1.0, 100.0)
SLACK = 0.01
EXACT = 1e-6
LARGEST_FRACTION = 1.5


def share_findings(deals: pd.DataFrame, source: Source, rules: DealRules) -> Iterator[Finding]:
    """Columns of shares whose size speaks of the other unit: common practice, no source."""
    for name in rules.fractions:
        if float(deals[name].abs().median()) > LARGEST_FRACTION:
            yield _wrong_unit(deals, source, name, "fractions", "percent")
    for name in rules.percents:
        filled = deals[name].dropna().abs()
        if len(filled) > 1 and float(filled.max()) <= 1 and float(filled.max()) > 0:
            yield _wrong_unit(deals, source, name, "percent", "fractions")


def _wrong_unit(
    deals: pd.DataFrame, source: Source, name: str, declared: str, seems: str
) -> Finding:
    values = deals[name].dropna()
    return finding(
        "share_unit", deals[deals[name].notna()], source, (name,),
        (f"cells from {values.min():g} to {values.max():g}, half of them below "
         f"{values.median():g}", f"{declared}, as declared under [deal_list]",
         f"Move the column to the list of {seems}, or correct its cells."),
    )  # fmt: skip


def whole_payment(
    deals: pd.DataFrame, source: Source, rules: DealRules
) -> tuple[pd.DataFrame, list[LedgerEntry], list[Finding]]:
    """The deals with payment shares that add up; those within a hundredth are scaled.

    The whole is 1 or 100, whichever most deals are nearer to. An empty cell beside a filled one is
    a share of zero; a deal without any share is left as it is.
    """
    names = list(rules.payment_shares)
    if not names:
        return deals, [], []
    sums = deals[names].sum(axis=1, min_count=1)
    whole = min(WHOLE, key=lambda total: abs(float(sums.median()) - total))
    off = (sums / whole - 1).abs()
    wrong = sums.notna() & (off > SLACK + 1e-12)
    findings = []
    if wrong.any():
        findings.append(
            finding(
                "payment_shares", deals[wrong], source, tuple(names),
                (f"shares that add up to {', '.join(f'{s:g}' for s in sums[wrong][:3])}",
                 f"{whole:g}, give or take {SLACK:.0%} of it",
                 "Correct the shares, or add the one that is missing."),
            )
        )  # fmt: skip
    scaled = sums.notna() & ~wrong & (off > EXACT)
    changed = deals.copy()
    changed.loc[scaled, names] = deals.loc[scaled, names].mul(whole / sums[scaled], axis=0)
    entries = [
        LedgerEntry(str(deal), "payment_scaled", Action.CHANGED, f"sum {total:g}", f"{whole:g}")
        for deal, total in zip(deals.loc[scaled, "deal_id"], sums[scaled], strict=True)
    ]
    return changed, entries, findings


def one_spelling(
    deals: pd.DataFrame,
    source: Source,
    columns: Iterable[str],
    levels: Mapping[str, Sequence[str]],
) -> tuple[pd.DataFrame, list[LedgerEntry], list[Finding]]:
    """The deals with one spelling a word, case and spaces aside.

    A column with declared levels takes their spelling, and any other word in it is an error; the
    others take the spelling most cells have.
    """
    changed, entries, findings = deals, [], []
    for name in dict.fromkeys(columns):
        words = deals[name].astype(str)
        known = {_loose(word): word for word in levels.get(name, ())}
        spelling = known or _commonest(words)
        read = words.map(lambda word, spelling=spelling: spelling.get(_loose(word), word))
        unknown = (words != "") & ~words.map(_loose).isin(spelling)
        if unknown.any():
            findings.append(_unknown_level(deals[unknown], source, name, levels[name]))
        differs = (read != words) & (words != "")
        entries += [
            LedgerEntry(str(deal), "one_spelling", Action.CHANGED, f"{name}: '{old}'", f"'{new}'")
            for deal, old, new in zip(
                deals.loc[differs, "deal_id"], words[differs], read[differs], strict=True
            )
        ]
        changed = changed.assign(**{name: read.astype("str")})
    return changed, entries, findings


def _loose(word: str) -> str:
    return re.sub(r"\s+", " ", word).strip().casefold()


def _commonest(words: pd.Series) -> dict[str, str]:
    """Loose word -> its most frequent spelling, the first in the alphabet among equals."""
    counts = Counter(words)
    found: dict[str, str] = {}
    for word in sorted(counts, key=lambda word: (-counts[word], word)):
        found.setdefault(_loose(word), word)
    return found


def _unknown_level(rows: pd.DataFrame, source: Source, name: str, known: Sequence[str]) -> Finding:
    shown = ", ".join(f"'{word}'" for word in rows[name].unique()[:3])
    return finding(
        "unknown_level", rows, source, (name,),
        (shown, "one of " + ", ".join(f"'{word}'" for word in known),
         f"Correct the cells, or add the word to deal_list.levels.{name}."),
    )  # fmt: skip


def declared(
    deals: pd.DataFrame, source: Source, rules: DealRules, words: Iterable[str]
) -> tuple[pd.DataFrame, list[LedgerEntry], list[Finding]]:
    """The deals after all that the study declares of them, the changes, and the findings.

    Args:
        deals: the typed deal list.
        source: its file.
        rules: what is declared.
        words: the study's columns of words, codes of companies apart.
    """
    found = list(share_findings(deals, source, rules))
    paid, entries, more = whole_payment(deals, source, rules)
    found += more
    spelt, changes, more = one_spelling(paid, source, [*words, *rules.levels], rules.levels)
    return spelt, entries + changes, found + more
