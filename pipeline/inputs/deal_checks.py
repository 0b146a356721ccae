"""Checks of a deal list that look at whole deals: dates, companies, codes, money and words.

Limits are common practice, no source. Columns that the list lacks are not checked.
"""

from __future__ import annotations

import re
from collections.abc import Iterator

import numpy as np
import pandas as pd

from pipeline.core.findings import Finding, Severity
from pipeline.core.ledger import Action, LedgerEntry
from pipeline.inputs.codes import CHECKS
from pipeline.inputs.files import Source
from pipeline.inputs.typed import finding, theirs

UNIT_RATIO = (1e-6, 100.0)
ODD_SIZE = (1e-4, 10.0)
SAME_PAIR_DAYS = 365
SAME_PAIR_LIMIT = f"{SAME_PAIR_DAYS} days"
PERSONAL = re.compile(
    r"e_?mail|phone|mobile|passport|birth|social_security|national_id|home_address|"
    r"first_?name|last_?name|surname|salary|tax_id|gender"
)


def deal_findings(deals: pd.DataFrame, source: Source) -> list[Finding]:
    """All that is wrong or doubtful with the deals as such.

    Args:
        deals: the typed deal list with its ``_row`` numbers; optional columns may be absent.
        source: its file.
    """
    return [
        *_order(deals, source),
        *_survivors(deals, source),
        *_companies(deals, source),
        *_both_sides(deals, source),
        *_codes(deals, source),
        *_money(deals, source),
    ]


def _order(deals: pd.DataFrame, source: Source) -> Iterator[Finding]:
    """Dates of one deal that cannot follow one another in life."""
    announced = deals["announced_date"]
    if "rumoured_date" in deals:
        later = _later(deals, "rumoured", "announced")
        if later.any():
            yield finding(
                "rumour_after", deals[later], source, ("rumoured_at",),
                (f"{int(later.sum())} rumours later than their announcement",
                 "a rumour at or before the announcement",
                 "Correct the dates; empty the cell if there was no rumour."),
            )  # fmt: skip
    for name, what in (
        ("amended_at", "amended"), ("completed_at", "completed"), ("withdrawn_at", "withdrawn"),
    ):  # fmt: skip
        early = deals[name] < announced if name in deals else pd.Series(False, deals.index)
        if early.any():
            yield finding(
                "announced_too_late", deals[early], source, ("announced_at", name),
                (f"{int(early.sum())} deals {what} before they were announced",
                 f"a deal announced before it is {what}",
                 "Correct one of the two dates."),
            )  # fmt: skip
    if "as_of" in deals:
        late = deals["as_of"] > announced
        if late.any():
            yield finding(
                "known_too_late", deals[late], source, ("as_of",),
                (f"values of {int(late.sum())} deals that date from after the announcement",
                 "values known when the deal was announced",
                 "Take the values of the last report before the announcement."),
            )  # fmt: skip


def _later(deals: pd.DataFrame, one: str, other: str) -> pd.Series:
    """Whether one moment lies after the other: by the clock if both are known, else by date."""
    known = deals[f"{one}_utc"].notna() & deals[f"{other}_utc"].notna()
    by_clock = deals[f"{one}_utc"] > deals[f"{other}_utc"]
    return by_clock.where(known, deals[f"{one}_date"] > deals[f"{other}_date"])


def _survivors(deals: pd.DataFrame, source: Source) -> Iterator[Finding]:
    """A list of nothing but completed deals knows what nobody knew at the announcement."""
    status = deals["status"].str.strip().str.lower() if "status" in deals else None
    dated = deals["completed_at"].notna() if "completed_at" in deals else None
    said = status is not None and bool((status == "completed").all())
    shown = dated is not None and bool(dated.all())
    if len(deals) > 1 and (said or shown):
        yield Finding(
            "completed_only",
            Severity.WARNING,
            source.file,
            got=f"{len(deals)} deals, all of them completed",
            expected="withdrawn and pending deals too",
            remedy="Add the deals that were announced and not completed.",
            column=theirs(source, ("status" if said else "completed_at",)),
        )


def _companies(deals: pd.DataFrame, source: Source) -> Iterator[Finding]:
    """A company that buys itself, and a code that stands for two companies."""
    if "counterparty" in deals:
        alike = _plain(deals["counterparty"]) == _plain(deals["security"])
        alike &= deals["security"] != ""
        if alike.any():
            yield finding(
                "deal_with_itself", deals[alike], source, ("security", "counterparty"),
                ("the same company on both sides", "two different companies",
                 "Correct one of the two codes."),
            )  # fmt: skip
    if "isin" in deals:
        named = deals[(deals["isin"] != "") & (deals["security"] != "")]
        isins = named.groupby(["security", "exchange"])["isin"].transform("nunique")
        for security, rows in named[isins > 1].groupby("security", sort=True):
            yield finding(
                "recycled_code", rows, source, ("security", "isin"),
                (f"'{security}' with {', '.join(sorted(set(rows['isin'])))}",
                 "one company a code",
                 "A code given to another company later needs a code of its own in deals and "
                 "prices; a company that changed its ISIN needs one of them."),
            )  # fmt: skip


def _both_sides(deals: pd.DataFrame, source: Source) -> Iterator[Finding]:
    """Two companies on each other's side of one deal, in a list that does not tell the sides.

    A list with a column ``side`` comes here with the rows of one side.
    """
    if "side" in deals or "counterparty" not in deals:
        return
    own, other = _plain(deals["security"]), _plain(deals["counterparty"])
    rows = pd.DataFrame(
        {"own": own, "other": other, "day": deals["announced_date"], "at": range(len(deals))}
    )
    rows = rows[(own != "") & (other != "") & (own != other)]
    met = rows.merge(rows, left_on=["own", "other"], right_on=["other", "own"])
    near = (met["day_x"] - met["day_y"]).abs() <= pd.Timedelta(days=SAME_PAIR_DAYS)
    found = deals.iloc[sorted(set(met.loc[near, "at_x"]))]
    if len(found):
        first = found.iloc[0]
        yield finding(
            "side_not_named", found, source, ("security", "counterparty"),
            (f"{len(found)} rows of companies that are each other's counterparty within "
             f"{SAME_PAIR_LIMIT}, such as {first['security']} and {first['counterparty']}",
             "the one side of the deals that the study is about",
             "Add a column side, such as acquirer and target, and set event_time.side to one of "
             "its words. Two companies that each acquired from the other are acquirer twice."),
        )  # fmt: skip


def _plain(codes: pd.Series) -> pd.Series:
    return codes.str.strip().str.casefold()


def _codes(deals: pd.DataFrame, source: Source) -> Iterator[Finding]:
    """Identifiers whose check digit does not fit: a slip of the pen, or a lost leading zero."""
    for name, fits in CHECKS.items():
        if name not in deals:
            continue
        wrong = deals[name].map(lambda code, fits=fits: code != "" and not fits(code.upper()))
        wrong = wrong.astype(bool)
        if wrong.any():
            shown = ", ".join(f"'{code}'" for code in deals.loc[wrong, name].unique()[:3])
            yield finding(
                "check_digit", deals[wrong], source, (name,),
                (f"{shown}: the check digit does not fit", f"codes that are {name.upper()}s",
                 "Correct the codes; a spreadsheet may have cut leading zeros."),
            )  # fmt: skip


def _money(deals: pd.DataFrame, source: Source) -> Iterator[Finding]:
    """Amounts that are none, and sizes that speak of two different units."""
    for name in ("deal_value", "market_value"):
        wrong = deals[name] <= 0 if name in deals else pd.Series(False, deals.index)
        if wrong.any():
            yield finding(
                "nonpositive_value", deals[wrong], source, (name,),
                (f"{int(wrong.sum())} amounts of zero or below", "amounts above zero",
                 "Leave the cell empty if the amount was not disclosed."),
            )  # fmt: skip
    ratio = size_ratio(deals).dropna()
    if ratio.empty:
        return
    low, high = UNIT_RATIO
    typical = float(ratio.median())
    outside = ~ratio.between(low, high)
    if not low <= typical <= high or outside.any():
        severity = Severity.ERROR if not low <= typical <= high else Severity.WARNING
        rows = (
            deals.loc[ratio.index]
            if severity is Severity.ERROR
            else deals.loc[ratio.index][outside]
        )
        yield finding(
            "money_units", rows, source, ("deal_value", "market_value"),
            (f"deal values of {ratio[rows.index].median():.3g} times the company's market value",
             f"between {low:g} and {high:g} times",
             "Bring both columns to one unit, such as millions."), severity,
        )  # fmt: skip


def size_ratio(deals: pd.DataFrame) -> pd.Series:
    """Deal value over market value; NaN where one of them is missing or not above zero."""
    if "deal_value" not in deals or "market_value" not in deals:
        return pd.Series(np.nan, index=deals.index)
    value, market = (deals[name].where(deals[name] > 0) for name in ("deal_value", "market_value"))
    return value / market


def size_flags(deals: pd.DataFrame) -> Iterator[LedgerEntry]:
    """A flag for each deal that is very large or very small beside its company."""
    ratio = size_ratio(deals)
    low, high = ODD_SIZE
    for index in ratio.index[ratio.notna() & ~ratio.between(low, high)]:
        yield LedgerEntry(
            str(deals.at[index, "deal_id"]), "odd_size", Action.FLAGGED,
            f"{ratio[index]:.3g} times the market value", f"{low:g} to {high:g}",
        )  # fmt: skip


def same_pair_flags(deals: pd.DataFrame) -> Iterator[LedgerEntry]:
    """A flag for a second deal of one pair of companies within a year, mostly an amended offer."""
    if "counterparty" not in deals:
        return
    named = deals[(deals["counterparty"] != "") & deals["announced_date"].notna()]
    pairs = named.assign(_other=_plain(named["counterparty"]))
    for _, rows in pairs.groupby(["security", "_other"], sort=True):
        ordered = rows.sort_values(["announced_date", "deal_id"])
        days = ordered["announced_date"].diff().dt.days
        for at in range(1, len(ordered)):
            if days.iloc[at] <= SAME_PAIR_DAYS:
                value = f"{int(days.iloc[at])} days after {ordered['deal_id'].iloc[at - 1]}"
                deal = str(ordered["deal_id"].iloc[at])
                yield LedgerEntry(deal, "amended_offer", Action.FLAGGED, value, SAME_PAIR_LIMIT)


def personal_data(names: list[str], source: Source) -> list[Finding]:
    """A warning for columns whose names speak of persons."""
    found = [name for name in names if PERSONAL.search(str(name).lower().replace(" ", "_"))]
    if not found:
        return []
    return [
        Finding(
            "personal_data",
            Severity.WARNING,
            source.file,
            got="columns whose names speak of persons",
            expected="data about companies and deals",
            remedy="Delete the columns if the study does not need them.",
            column=", ".join(found),
        )
    ]
