"""Rules about what a deal list and the tables beside it hold."""

from __future__ import annotations

from pipeline.core.rules.rule import Rule

RULES = (
    Rule(
        "undecided_listing",
        "Several listings and no primary one",
        "A company has several listings, and nothing says which one counts.",
        "Each has its own sessions, currency and benchmark.",
        "Mark one as primary, or its home market, in the table of listings.",
    ),
    Rule(
        "conflicting_listing",
        "Listings that contradict one another",
        "A line stands there twice, or a company has two primary or two home lines.",
        "Only one of them can be measured.",
        "Correct the table of listings.",
    ),
    Rule(
        "side_not_named",
        "List of both sides, study of none",
        "The deal list has a column side, and the study does not name one of its sides; or it "
        "has none, and two companies are each other's counterparty within a year.",
        "Acquirers and targets hear the same news; they are never pooled in one mean.",
        "Set event_time.side, and make one study a side; add the column if there is none.",
    ),
    Rule(
        "rumour_after",
        "Rumour later than the announcement",
        "A rumour is dated after the announcement.",
        "A rumour of what is public is none; one of the dates is wrong.",
        "Correct the dates, or empty the rumour's cell.",
    ),
    Rule(
        "announced_too_late",
        "Announcement after the deal had gone on",
        "A deal was amended, completed or withdrawn before its announcement.",
        "One of the dates is wrong, and with it perhaps day zero.",
        "Correct the dates.",
    ),
    Rule(
        "known_too_late",
        "Values dated after the announcement",
        "The values of a company or deal were known only after the announcement.",
        "They may hold the market's answer, which they are meant to explain.",
        "Take the values of the last report before the announcement.",
    ),
    Rule(
        "completed_only",
        "List of completed deals alone",
        "All deals of the list were completed.",
        "Nobody knew at the announcement which would be; the sample looks into the future.",
        "Add the deals that were withdrawn or are pending.",
    ),
    Rule(
        "deal_with_itself",
        "Company on both sides of its deal",
        "Buyer and counterparty are the same code.",
        "One of them is wrong, or it is no deal between two companies.",
        "Correct the code.",
    ),
    Rule(
        "recycled_code",
        "One code for two companies",
        "A security's code stands with two ISINs.",
        "A code given on to another company would join the prices of the two.",
        "Give each company a code of its own in deals and prices.",
    ),
    Rule(
        "check_digit",
        "Identifier whose check digit does not fit",
        "The last sign of an ISIN, CUSIP or SEDOL does not follow from the others.",
        "The code belongs to no security, or to another one.",
        "Correct the code; a spreadsheet may have cut leading zeros.",
    ),
    Rule(
        "nonpositive_value",
        "Amount of zero or below",
        "A deal value or market value is zero or negative.",
        "No size can be made of it.",
        "Leave the cell empty if the amount was not disclosed.",
    ),
    Rule(
        "money_units",
        "Amounts in two units",
        "Deal values are a hundred times the market value and more, or less than a millionth.",
        "One column in units and one in millions make every size wrong.",
        "Bring both columns to one unit.",
    ),
    Rule(
        "share_unit",
        "Share in the other unit",
        "The cells of a column of shares have the size of the other unit.",
        "A share of 30 where 0.3 is meant is off by a hundred.",
        "Correct the cells, or the list under [deal_list].",
    ),
    Rule(
        "payment_shares",
        "Payment shares that do not add up",
        "The shares of payment add up to more or less than the whole.",
        "One of them is wrong or missing.",
        "Correct the shares.",
    ),
    Rule(
        "unknown_level",
        "Word that the column may not hold",
        "A cell holds a word that is not among those declared for its column.",
        "It would make a group of its own, or none.",
        "Correct the cell, or declare the word.",
    ),
    Rule(
        "restricted_company",
        "Company on the restricted list",
        "A deal of the study touches a company on the house's restricted list.",
        "Whether such a study may be made, kept or shown is not the analyst's to decide.",
        "Stop and ask compliance.",
    ),
)
