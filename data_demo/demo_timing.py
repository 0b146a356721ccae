"""When the deals are announced: event sessions, stamps, earnings releases, planted roles."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from demo_market import EARLY_CLOSE_MINUTE, Companies, Grid
from demo_params import (
    COMPANIES,
    FIRST_YEAR,
    YEARS,
    BoolArray,
    DateArray,
    FloatArray,
    IntArray,
    Parameters,
)

# Sessions kept free at both ends of a year, so that stamp and session share the year and deals
# of neighbouring years stay more than a fortnight apart.
MARGIN = 6
SHORT_HISTORY_POSITION = 10
# Mid-year events keep a planted gap or split clear of the run-up before the year's first session.
MIDDLE = (130, 200)
ROLES = ("none", "untraded", "split", "short", "delisting", "pair")
KINDS = ("in_hours", "after_close", "weekend", "exchange_holiday", "date_only", "date_only_weekend")
ONE_DAY = np.timedelta64(1, "D")


@dataclass(frozen=True, slots=True)
class Schedule:
    """Timing of the deals (n,) in order of announcement.

    `company` and `year` index the company-year (`year` counts from 2015), `second` marks the
    second deal of a company-year, `role` and `kind` index `ROLES` and `KINDS`, `event` is the
    true event session as a position on the venue, `earnings` that of the nearest earnings
    release, `stamp_minute` local minutes after midnight or -1 for a date-only stamp.
    """

    company: IntArray
    year: IntArray
    second: BoolArray
    role: IntArray
    kind: IntArray
    event: IntArray
    stamp_day: DateArray
    stamp_minute: IntArray
    earnings: IntArray


def _assign_roles(announced: BoolArray, rng: np.random.Generator) -> IntArray:
    """Roles (300, 10) of the deals that carry a planted defect of the price file."""
    roles = np.zeros(announced.shape, dtype=np.int64)
    single = announced.sum(axis=1) == 1
    wanted = {"short": {0}, "delisting": {YEARS - 1}}
    for code, role in enumerate(ROLES[1:], start=1):
        years = wanted.get(role, set(range(1, YEARS - 1)))
        pool = [i for i in np.flatnonzero(single) if int(np.argmax(announced[i])) in years]
        chosen = pool[int(rng.integers(len(pool)))]
        roles[chosen, int(np.argmax(announced[chosen]))] = code
        single[chosen] = False
    return roles


def _assign_kinds(params: Parameters, roles: IntArray, rng: np.random.Generator) -> IntArray:
    """Stamp kinds (n,): fixed numbers of each kind, only plain stamps for the planted roles."""
    amounts = (
        params.after_close_deals,
        params.weekend_deals,
        params.holiday_deals,
        params.date_only_deals,
        params.date_only_weekend_deals,
    )
    kinds = np.zeros(roles.size, dtype=np.int64)
    free = rng.permutation(np.flatnonzero(roles == 0))
    codes = np.repeat(np.arange(1, len(KINDS)), amounts)
    kinds[free[: codes.size]] = codes
    return kinds


def _eligible(grid: Grid, venue: int, year: int, kind: str, role: str) -> IntArray:
    """Session positions on which a deal of this kind and role may have its event."""
    positions = grid.in_year(venue, year)
    if role == "short":
        return positions[SHORT_HISTORY_POSITION : SHORT_HISTORY_POSITION + 1]
    low, high = MIDDLE if role != "none" else (MARGIN, positions.size - MARGIN)
    positions = positions[low:high]
    here, before = grid.sessions[venue, positions], grid.sessions[venue, positions - 1]
    if kind in ("weekend", "date_only_weekend"):
        # The grid holds weekdays only: a gap of three days is a Monday after its weekend.
        fit = (grid.days[here] - grid.days[here - 1]).astype(np.int64) == 3
    elif kind == "exchange_holiday":
        fit = (before != here - 1) & grid.is_open[:, here - 1].any(axis=0)
    else:
        stamped = before if kind == "after_close" else here
        # Shortened sessions carry no stamps: sources of closing times disagree on them most.
        fit = grid.close_minute[venue, stamped] >= EARLY_CLOSE_MINUTE
    return np.asarray(positions[fit], dtype=np.int64)


def _stamp(
    grid: Grid, venue: int, event: int, kind: str, draws: FloatArray
) -> tuple[np.datetime64, int]:
    """Local date and minute of the announcement whose event session is `event`."""
    here, before = int(grid.sessions[venue, event]), int(grid.sessions[venue, event - 1])
    u, day, close = float(draws[0]), grid.days[here], grid.close_minute[venue]
    weekend = day - ONE_DAY * (1 + int(2 * draws[1]))
    if kind == "after_close":
        return grid.days[before], int(close[before]) + 10 + int(170 * u)
    if kind == "weekend":
        return weekend, 9 * 60 + int(660 * u)
    if kind == "exchange_holiday":
        return grid.days[here - 1], 8 * 60 + int(600 * u)
    if kind == "date_only":
        return day, -1
    if kind == "date_only_weekend":
        return weekend, -1
    opening = 7 * 60
    return day, opening + int((int(close[here]) - 15 - opening) * u)


def _earnings(params: Parameters, plan: Schedule, rng: np.random.Generator) -> IntArray:
    """Session position (n,) of the earnings release nearest to each announcement."""
    n = plan.event.size
    gap = rng.integers(3, 32, n) * rng.choice(np.array([-1, 1]), n)
    plain = rng.permutation(np.flatnonzero(plan.role == 0))[: params.earnings_deals]
    gap[plain] = rng.integers(-1, 2, plain.size)
    # Both deals of the planted pair share one release, three weeks before the first.
    gap[(plan.role == ROLES.index("pair")) & ~plan.second] = -15
    gap[plan.second] = -15 - params.pair_gap_sessions
    return np.asarray(plan.event + gap)


def _second_deal(plan: Schedule, params: Parameters) -> Schedule:
    """The schedule with one more deal at its end: the second of the planted pair, in hours."""
    first = int(np.flatnonzero(plan.role == ROLES.index("pair"))[0])
    pick = np.append(np.arange(plan.event.size), first)
    event, second = plan.event[pick], np.zeros(pick.size, dtype=np.bool_)
    event[-1] += params.pair_gap_sessions
    second[-1] = True
    return replace(
        plan,
        company=plan.company[pick],
        year=plan.year[pick],
        second=second,
        role=plan.role[pick],
        kind=plan.kind[pick],
        event=event,
    )


def _stamped(grid: Grid, companies: Companies, plan: Schedule, draws: FloatArray) -> Schedule:
    """The schedule with the stamps of its events, sorted by stamp."""
    stamps = [
        _stamp(grid, int(companies.exchange[i]), int(e), KINDS[k], draws[i, y])
        for i, y, e, k in zip(plan.company, plan.year, plan.event, plan.kind, strict=True)
    ]
    day = np.array([s[0] for s in stamps], dtype="datetime64[D]")
    minute = np.array([s[1] for s in stamps], dtype=np.int64)
    order = np.lexsort((np.arange(day.size), minute, day))
    return Schedule(
        company=plan.company[order],
        year=plan.year[order],
        second=plan.second[order],
        role=plan.role[order],
        kind=plan.kind[order],
        event=plan.event[order],
        stamp_day=day[order],
        stamp_minute=minute[order],
        earnings=np.zeros(order.size, dtype=np.int64),
    )


def draw_schedule(
    params: Parameters,
    grid: Grid,
    companies: Companies,
    announced: BoolArray,
    rngs: dict[str, np.random.Generator],
) -> Schedule:
    """Event sessions and stamps of the announced company-years (300, 10) plus one second deal.

    Event rule: a stamp at or before a session's close belongs to that session, any other to the
    next one; a bare date that is a session is that session. Raises IndexError when a year holds
    no session fit for a kind, ValueError when no company fits a role.
    """
    rng = rngs["timing"]
    company, year = np.nonzero(announced)
    role = _assign_roles(announced, rngs["defects"])[company, year]
    kind = _assign_kinds(params, role, rng)
    draws = rng.random((COMPANIES, YEARS, 3))
    event = []
    for i, y, k, r in zip(company, year, kind, role, strict=True):
        pool = _eligible(grid, int(companies.exchange[i]), FIRST_YEAR + int(y), KINDS[k], ROLES[r])
        event.append(int(pool[int(draws[i, y, 2] * pool.size)]))
    later = np.zeros(company.size, dtype=np.bool_)
    blank = np.zeros(company.size, dtype=np.int64)
    days = np.zeros(company.size, dtype="datetime64[D]")
    plan = Schedule(company, year, later, role, kind, np.array(event), days, blank, blank)
    plan = _stamped(grid, companies, _second_deal(plan, params), draws)
    return replace(plan, earnings=_earnings(params, plan, rng))
