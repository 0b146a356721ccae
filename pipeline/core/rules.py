"""The one catalogue of rules that a finding or a ledger entry may name, in words.

Thresholds live with the checks; here is what each rule means to the person who reads it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Rule:
    """A rule's key, its title for tables, what it does, why it matters and what to do."""

    key: str
    title: str
    what: str
    why: str
    remedy: str


def _catalogue(*rules: Rule) -> Mapping[str, Rule]:
    return {rule.key: rule for rule in rules}


RULES: Mapping[str, Rule] = _catalogue(
    Rule(
        "unknown_key",
        "Unknown key in the study file",
        "The study file holds a key that no part of the run reads.",
        "A misspelt key would otherwise be ignored and the default used without a word.",
        "Correct the key to the nearest known one, or delete it.",
    ),
    Rule(
        "bad_value",
        "Value of the wrong kind in the study file",
        "A key of the study file holds a value outside what the key allows.",
        "A guess at what was meant could change the numbers.",
        "Write a value of the kind and range stated.",
    ),
    Rule(
        "overlapping_windows",
        "Event window overlaps the estimation window",
        "A window of the study shares sessions with the estimation window.",
        "The normal return would be estimated from days the announcement moved.",
        "End the estimation window earlier, or shorten the window named.",
    ),
    Rule(
        "missing_file",
        "File not found",
        "A file named in the study does not exist at the place stated.",
        "Nothing can be measured without it.",
        "Correct the path; paths count from the folder of the study file.",
    ),
    Rule(
        "unreadable_file",
        "File cannot be read",
        "The file exists, and is not a table of the kind its name says.",
        "Reading on could lose rows without a trace.",
        "Save it again as csv (UTF-8), parquet or xlsx.",
    ),
    Rule(
        "missing_column",
        "Column not found",
        "A table lacks a column the study needs.",
        "The quantity named in the study cannot be made without it.",
        "Add the column, or say under [inputs.columns] what yours is called.",
    ),
    Rule(
        "ambiguous_column",
        "Two columns of one name",
        "Two columns of a table have the same name, but for case and spaces.",
        "Nothing tells which of them holds the right values.",
        "Rename or delete one, or name yours under [inputs.columns].",
    ),
    Rule(
        "error_cell",
        "Formula that failed",
        "A cell holds a spreadsheet's error, such as #DIV/0!.",
        "Reading it as missing would drop the deal without a word.",
        "Correct the formula, or empty the cell.",
    ),
    Rule(
        "empty_table",
        "Table without rows",
        "A table holds a header and nothing else.",
        "There is nothing to measure.",
        "Export the table again with its rows.",
    ),
    Rule(
        "unparseable_date",
        "Date or time that cannot be read",
        "A cell that should hold a date holds something else.",
        "A date guessed wrong by a day moves the whole reaction out of the window.",
        "Write dates as YYYY-MM-DD, times as YYYY-MM-DD HH:MM.",
    ),
    Rule(
        "date_out_of_range",
        "Date outside any plausible range",
        "A date lies in the future, or before the price history could begin.",
        "Such dates are mostly fill values of a data base.",
        "Correct the date, or delete the row.",
    ),
    Rule(
        "unparseable_number",
        "Number that cannot be read",
        "A cell that should hold a number holds something else.",
        "Reading it as missing would drop the deal without a word.",
        "Write plain numbers with a decimal point, and leave unknown cells empty.",
    ),
    Rule(
        "missing_zone",
        "Time of day without a time zone",
        "An announcement has a time of day, and neither an offset nor a zone.",
        "The same clock time is a different session in another zone.",
        "Fill the column timestamp_zone (for example America/New_York).",
    ),
    Rule(
        "impossible_local_time",
        "Local time that does not exist or exists twice",
        "The clocks changed that night: the local time was skipped or repeated.",
        "The instant cannot be told from the wall clock.",
        "Write the time with its offset, for example 2021-11-07T01:30:00-05:00.",
    ),
    Rule(
        "unknown_exchange",
        "Unknown exchange code",
        "A listing names an exchange for which no calendar is known.",
        "Day zero cannot be placed without the exchange's sessions.",
        "Use the ISO 10383 code of the listing, for example XNYS or XLON.",
    ),
    Rule(
        "missing_value",
        "Required cell is empty",
        "A column that must be filled has an empty cell.",
        "The deal cannot be placed in time or on an exchange.",
        "Fill the cell, or delete the row.",
    ),
    Rule(
        "conflicting_deal",
        "Two different rows with one deal identifier",
        "An identifier stands on two rows that differ.",
        "One of them is wrong, and no rule can tell which.",
        "Keep one row an identifier.",
    ),
    Rule(
        "duplicate_deal",
        "Exact duplicate row",
        "The row repeats an earlier one in every column.",
        "Counting a deal twice makes the mean look more certain than it is.",
        "None needed: the first row is kept.",
    ),
    Rule(
        "mixed_currencies",
        "Money in more than one currency",
        "A money column holds more than one currency.",
        "Sizes in different currencies cannot stand in one regression.",
        "Convert all money to one currency at the rate before the announcement.",
    ),
    Rule(
        "conflicting_price",
        "Two different prices on one date",
        "A security has two closes on one date that differ.",
        "One of them is wrong.",
        "Keep one row a security and date.",
    ),
    Rule(
        "nonpositive_price",
        "Price of zero or below",
        "A close is zero or negative.",
        "No return can be made from it.",
        "Leave the cell empty when there was no price.",
    ),
    Rule(
        "price_off_session",
        "Price on a day the exchange was closed",
        "The price file holds dates that are no sessions of the exchange.",
        "Many of them mean that the exchange code is wrong.",
        "Check the exchange of the listing; single dates are left out.",
    ),
    Rule(
        "session_without_prices",
        "Session on which most securities have no price",
        "The calendar says the exchange was open, and most prices are missing.",
        "The exchange may have closed that day without notice.",
        "Check the date with the exchange.",
    ),
    Rule(
        "suspected_split",
        "Jump that looks like an unadjusted split",
        "A close moved by a whole factor in one session and the benchmark did not.",
        "A split read as a return would swamp every other number.",
        "Adjust the prices for splits; the deals it touches are dropped until then.",
    ),
    Rule(
        "benchmark_gap",
        "Benchmark missing",
        "The benchmark has no level on a session the study needs.",
        "An abnormal return needs the market's return of the same day.",
        "Complete the benchmark file.",
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
        "missing_characteristic",
        "A characteristic of the deal is missing",
        "A variable of the regression has no finite value for the deal.",
        "Columns of one table must stand on the same rows.",
        "Fill the variable, or leave it out of the study.",
    ),
    Rule(
        "candidate_missing",
        "Deal without a candidate row",
        "The company and year of the deal are not in the table of candidates.",
        "The selection model needs every announcer among those that could have announced.",
        "Add the company's row to the candidates.",
    ),
    Rule(
        "second_in_year",
        "Second deal of the company in the year",
        "The company-year's row among the candidates stands for another deal.",
        "The decision to bid is modelled once a company and year.",
        "None needed: the first deal of the year is kept in the regressions.",
    ),
    Rule(
        "candidates_used",
        "Candidates in the selection equation",
        "How many company-years enter the selection equation.",
        "A selection model speaks of the candidates it was shown.",
        "None needed.",
    ),
    Rule(
        "no_variation",
        "Treatment without variation",
        "The deal feature has one value, or fewer than five deals with one of its values.",
        "There is nothing to compare.",
        "Widen the sample, or ask about another feature.",
    ),
    Rule(
        "instrument_is_control",
        "Instrument listed as a control",
        "A variable is both an instrument and a regressor of the outcome.",
        "An instrument must move the outcome through the treatment alone.",
        "Take it out of one of the two lists.",
    ),
    Rule(
        "excluded_is_control",
        "Excluded variable listed as a control",
        "A variable excluded from the outcome stands among its controls.",
        "The exclusion is what identifies the selection model.",
        "Take it out of one of the two lists.",
    ),
    Rule(
        "selection_lacks_control",
        "Company variable missing from the selection equation",
        "A control known for every candidate is not in selection.explained_by.",
        "Leaving it out makes the correction absorb its effect.",
        "Add it to selection.explained_by.",
    ),
    Rule(
        "unknown_variable",
        "Variable that nothing defines",
        "The study names a variable that is neither a column nor a characteristic.",
        "It cannot enter a regression.",
        "Correct its name, or define it under [characteristics].",
    ),
    Rule(
        "transform_impossible",
        "Transform without a finite value",
        "A log, ratio or power has no finite value for the rows named.",
        "The log of zero is not a number to average over.",
        "Correct the cells, or leave the transform out.",
    ),
    Rule(
        "collinear",
        "Regressors that repeat one another",
        "A regressor is a combination of the others.",
        "Its coefficient has no value.",
        "Take one of them out.",
    ),
    Rule(
        "under_identified",
        "Fewer instruments than treatments",
        "There are not enough instruments for the endogenous variable.",
        "The effect has no value.",
        "Name at least one instrument.",
    ),
    Rule(
        "separation",
        "Perfect separation",
        "A variable predicts the decision without error.",
        "The probit has no finite coefficient for it.",
        "Take the variable out, or merge its levels.",
    ),
    Rule(
        "one_cluster",
        "Fewer than two clusters",
        "A cluster dimension has a single value.",
        "Clustered errors need several clusters.",
        "Choose another cluster variable.",
    ),
    Rule(
        "no_deals_left",
        "No deal left",
        "Every deal was dropped before the abnormal returns.",
        "There is nothing to test.",
        "Read the ledger from the top; the stage that drops most is the place to look.",
    ),
)


def rule_title(key: str) -> str:
    """The title of a rule, or its key in plain words if it is not in the catalogue."""
    rule = RULES.get(key)
    return rule.title if rule else key.replace("_", " ").capitalize()
