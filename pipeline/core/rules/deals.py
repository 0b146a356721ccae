"""Rules about deals, their prices and their day zero."""

from __future__ import annotations

from pipeline.core.rules.rule import Rule

RULES = (
    Rule(
        "duplicate_deal",
        "Exact duplicate row",
        "The row repeats an earlier one in every column.",
        "Counting a deal twice makes the mean look more certain than it is.",
        "None needed: the first row is kept.",
    ),
    Rule(
        "suspected_split",
        "Jump that looks like an unadjusted split",
        "A close moved by a whole factor in one session and the benchmark did not.",
        "A split read as a return would swamp every other number.",
        "Adjust the prices for splits; the deals it touches are dropped until then.",
    ),
    Rule(
        "no_prices",
        "No prices for the security",
        "The price file does not hold the deal's security.",
        "No return can be measured.",
        "Add the security's prices, or correct its code.",
    ),
    Rule(
        "outside_history",
        "Announcement outside the price history",
        "The windows of the deal reach outside the price file.",
        "No return can be measured there.",
        "Extend the price file, or shorten the windows.",
    ),
    Rule(
        "short_estimation",
        "Too few returns before the deal",
        "Fewer returns than the study's minimum lie in the estimation window.",
        "The normal return would be a guess.",
        "Extend the price history, or lower minimum_observations with a reason.",
    ),
    Rule(
        "gaps_in_estimation",
        "Gaps in the estimation window",
        "More than a twentieth of the estimation window's sessions have no return.",
        "The share was not traded, or the price file has a hole.",
        "Complete the prices if the share traded; the deal is kept.",
    ),
    Rule(
        "thin_trading",
        "Too many unchanged prices before the deal",
        "More than half of the estimation window's returns are exactly zero.",
        "The share hardly traded: its returns do not show what the market thought.",
        "None, unless the prices are stale copies.",
    ),
    Rule(
        "event_missing",
        "No price in the headline window",
        "The share did not trade on a day of the headline window.",
        "A missing day is not a return of zero.",
        "Complete the prices, or declare a shorter headline window.",
    ),
    Rule(
        "overlapping_event",
        "Second deal of the company within the same window",
        "An earlier deal of the company has a headline window that shares sessions with this one.",
        "One price move cannot be given to two deals.",
        "None needed: the first deal is kept.",
    ),
    Rule(
        "moved_to_session",
        "Day zero moved to the next session",
        "The announcement came after the close or on a day without trading.",
        "The first price that could react is that of the next session.",
        "None needed.",
    ),
    Rule(
        "time_unknown",
        "Announcement with a date and no time",
        "Only the date is known, so day zero or the session after may hold the reaction.",
        "A window of day zero alone could miss it.",
        "Add the time of the announcement.",
    ),
    Rule(
        "confounded",
        "Earnings release next to the announcement",
        "The company released earnings within the days stated of the announcement.",
        "The price move belongs to both pieces of news.",
        "None needed: the deal is kept and flagged; the sensitivity table leaves it out.",
    ),
    Rule(
        "delisted",
        "Prices end inside a window",
        "The security's prices end inside the windows after the announcement.",
        "Longer windows hold fewer days than they should.",
        "Add the delisting return if it is known.",
    ),
    Rule(
        "masked_sessions",
        "Another deal inside the estimation window",
        "Sessions around another deal of the company were left out of estimation.",
        "They would be read as normal returns.",
        "None needed.",
    ),
    Rule(
        "large_return",
        "Daily return above one half",
        "A return of more than 50% in either direction lies in the deal's windows.",
        "Real jumps happen; so do errors of the price file.",
        "Look at the dates named.",
    ),
    Rule(
        "no_deals_left",
        "No deal left",
        "Every deal was dropped before the abnormal returns.",
        "There is nothing to test.",
        "Read the ledger from the top; the stage that drops most is the place to look.",
    ),
    Rule(
        "two_exchanges",
        "One security on two exchanges",
        "A security code stands with two exchange codes.",
        "Its sessions and its benchmark would be another market's.",
        "Give each listing its own code, or correct the exchange.",
    ),
)
