"""The record of everything the demo data were made from."""

from __future__ import annotations

from dataclasses import asdict

import numpy as np
from demo_market import Companies, Grid
from demo_params import (
    COMPANIES,
    EXCHANGES,
    FIRST_DAY,
    FIRST_YEAR,
    INDUSTRIES,
    LAST_DAY,
    YEARS,
    Parameters,
    as_record,
)
from demo_tables import (
    CODES,
    DUPLICATED_DEAL,
    deal_ids,
    role_sessions,
    session_dates,
    stamp_texts,
)
from demo_timing import KINDS, ROLES, Schedule

NOTES = (
    "All companies, deals and numbers are invented.",
    "The seed was picked for legibility: with it the naive and the instrumented estimate differ "
    "plainly. Other seeds give the same picture with more or less contrast.",
    "Run-up and market value are measured on prices before announcement effects, so the weak "
    "variant has the same deals on the same sessions.",
    "Market values of candidates are in millions of USD at the fixed rates listed here.",
    "Event rule: at or before the close of a session of the exchange, that session; after the "
    "close or outside sessions, the next session; a bare date that is a session, that session.",
    "The announcement effect is added to simple returns on sessions -1, 0 and +1.",
    "Hidden overvaluation and signal spread the effects across deals beyond the event noise: the "
    "variance of three-session abnormal returns grows to over three times its usual size.",
)
STAMP_DEFECTS = {
    "after_close": "after_close",
    "weekend": "weekend",
    "exchange_holiday": "exchange_holiday",
    "date_only": "date_only",
    "date_only_weekend": "date_only",
}


def _records(grid: Grid, companies: Companies, plan: Schedule) -> list[dict[str, str]]:
    """Identity, stamp and true event session of every deal, in order of announcement."""
    sessions = session_dates(grid, companies, plan, plan.event)
    return [
        {
            "deal_id": deal,
            "security": str(CODES[company]),
            "announced_at": stamp,
            "event_session": session,
        }
        for deal, company, stamp, session in zip(
            deal_ids(plan), plan.company, stamp_texts(plan), sessions, strict=True
        )
    ]


def _price_defects(
    params: Parameters, grid: Grid, companies: Companies, plan: Schedule
) -> list[dict[str, str]]:
    """Defects of the price file, each with the deal it disturbs and its dates."""
    names = {
        "untraded": ("untraded_stretch", "first_missing", "last_missing"),
        "short": ("short_history", "first_row", "event"),
        "delisting": ("delisting_inside_window", "event", "last_row"),
        "split": ("unadjusted_split", "first_split_row", "first_split_row"),
    }
    records, out = _records(grid, companies, plan), []
    for role, (company, first, last) in role_sessions(params, plan).items():
        kind, first_name, last_name = names[role]
        own = grid.sessions[companies.exchange[company]]
        deal = int(np.flatnonzero(plan.role == ROLES.index(role))[0])
        dates = {first_name: str(grid.days[own[first]]), last_name: str(grid.days[own[last]])}
        dates.pop("event", None)
        out.append({"kind": kind, **records[deal], **dates})
    return out


def defect_records(
    params: Parameters, grid: Grid, companies: Companies, plan: Schedule
) -> list[dict[str, str]]:
    """Every planted defect: its kind, deal, security and dates (ISO text). Raises nothing."""
    records = _records(grid, companies, plan)
    out = [
        {"kind": STAMP_DEFECTS[KINDS[kind]], **record}
        for kind, record in zip(plan.kind, records, strict=True)
        if KINDS[kind] in STAMP_DEFECTS
    ]
    out += _price_defects(params, grid, companies, plan)
    first, second = (records[k] for k in np.flatnonzero(plan.role == ROLES.index("pair")))
    other = {"other_deal_id": second["deal_id"], "other_event_session": second["event_session"]}
    out.append({"kind": "two_deals_within_fortnight", **first, **other})
    releases = session_dates(grid, companies, plan, plan.earnings)
    for k in np.flatnonzero(np.abs(plan.earnings - plan.event) <= 1):
        release = {"earnings_release": releases[k]}
        out.append({"kind": "earnings_within_one_session", **records[k], **release})
    copy = next(r for r in records if r["deal_id"] == DUPLICATED_DEAL)
    out.append({"kind": "duplicate_row", **copy})
    return out


def truth_record(
    params: Parameters, seed: int, grid: Grid, companies: Companies, plan: Schedule
) -> dict[str, object]:
    """All the demo data were made from, as plain JSON types. Raises nothing."""
    return {
        "notes": list(NOTES),
        "seed": seed,
        "variant": "standard" if params.weak_shrinkage == 1.0 else "weak_instruments",
        "first_day": FIRST_DAY,
        "last_day": LAST_DAY,
        "first_year": FIRST_YEAR,
        "years": YEARS,
        "companies": COMPANIES,
        "deals": int(plan.event.size),
        "industries": list(INDUSTRIES),
        "exchanges": [asdict(e) for e in EXCHANGES],
        "parameters": as_record(params),
        "defects": defect_records(params, grid, companies, plan),
    }
