"""The hundred ways in which input goes wrong, and the rule or the behaviour that answers each.

The list is common practice, no source. An entry names rules of the catalogue, each of which a test
shows (see ``test_rules.py``), or, where nothing is to be said, the test of what happens instead.
"""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from pipeline.core.rules import RULES

TESTS = Path(__file__).resolve().parents[1]
ANSWERS: dict[str, str] = {
    # Encoding and shape
    "1 text of another encoding": "unreadable_file",
    "2 byte order mark in the heading": "test_a_byte_order_mark_does_no_harm",
    "3 several delimiters": "ambiguous_delimiter unreadable_file",
    "4 decimal commas and marks of thousands": "unparseable_number",
    "5 signs and words in numbers": "unparseable_number",
    "6 columns missing or doubled": "missing_column ambiguous_column",
    "7 rows of unequal length": "unreadable_file",
    "8 what sheets hide": "merged_cells hidden_rows several_sheets error_cell",
    "9 identifiers cut by a spreadsheet": "lost_digits check_digit",
    "10 headings alone": "empty_table",
    "11 more than memory holds": "archive_too_large",
    # Dates and times
    "12 dates in several formats": "mixed_date_formats",
    "13 day or month first": "ambiguous_day_month",
    "14 days counted by a spreadsheet": "serial_date",
    "15 clock times without a zone": "missing_zone",
    "16 clock times that never were or were twice": "impossible_local_time",
    "17 midnights that are dates": "time_unknown",
    "18 announced on a day of rest": "moved_to_session",
    "19 announced on a day of storm": "moved_to_session session_without_prices",
    "20 dates that cannot be": "date_out_of_range",
    "21 announced after it was closed": "announced_too_late",
    "22 price dates in disorder or doubled": "conflicting_price",
    "23 years of two digits": "two_digit_year",
    "24 benchmark a day off": "benchmark_shifted",
    # Deals
    "25 one identifier twice": "conflicting_deal duplicate_deal",
    "26 amended offers": "amended_offer",
    "27 several deals of one company": "overlapping_event merged_event overlapping_kept",
    "28 codes given on or without an exchange": "recycled_code two_exchanges",
    "29 check digits": "check_digit",
    "30 a company that buys itself": "deal_with_itself",
    "31 no exchange, or an unknown one": "missing_value unknown_exchange",
    "32 amounts of the wrong unit or sign": "nonpositive_value money_units mixed_currencies",
    "33 sizes hard to believe": "odd_size",
    "34 payment that does not add up": "payment_shares payment_scaled",
    "35 percent for fraction": "share_unit outcome_unit",
    "36 spellings of one word": "one_spelling unknown_level",
    "37 a feature without variation": "no_variation",
    "38 a feature from after the deal": "known_too_late",
    "39 one date for all": "few_dates absorbed",
    "40 completed deals alone": "completed_only",
    "41 very few deals": "few_events few_rows",
    "42 data about persons": "personal_data",
    "43 rumours after the news": "rumour_after",
    "44 restricted companies": "restricted_company",
    # Prices and returns
    "45 prices of zero or below": "nonpositive_price",
    "46 splits not adjusted": "suspected_split",
    "47 dividends in one and not the other": "dividend_basis",
    "48 prices of two downloads": "prices_of_two_downloads",
    "49 pence for pounds": "price_unit",
    "50 stale prices": "stale_price no_trades thin_trading",
    "51 gaps before the deal": "short_estimation gaps_in_estimation",
    "52 no price on the day": "event_missing",
    "53 a young share": "short_estimation short_under_model outside_history",
    "54 delisted within the window": "delisted delisting_return traded_after_delisting",
    "55 trading halts": "halted",
    "56 percent for decimals": "return_unit",
    "57 returns of two kinds": "mixed_returns total_loss impossible_return",
    "58 very large returns": "large_return",
    "59 times within the day": "intraday_prices",
    "60 prices on days of rest": "price_off_session",
    "61 weeks or months": "not_daily",
    "62 gaps in the benchmark": "benchmark_gap",
    "63 a benchmark that stands still or is the share": "benchmark_constant benchmark_is_the_share",
    "64 a benchmark of another region": "benchmark_unrelated benchmark_dominated",
    "65 two benchmarks for one exchange": "conflicting_price",
    "66 a yearly rate for a daily one": "risk_free_not_daily",
    "67 no exchange rate": "missing_rate currency_unclear inverse_rate",
    "68 features that look ahead": "known_too_late overlapping_windows",
    "69 deals without prices": "no_prices many_without_prices no_deals_left",
    "70 candidates without the deals": "candidate_missing second_in_year",
    "71 a company and year twice": "conflicting_deal",
    # Regression
    "72 a choice predicted without error": "separation no_overlap",
    "73 regressors that repeat one another": "collinear duplicate_variable",
    "74 instruments that add nothing": "instrument_collinear",
    "75 an instrument that is the choice": "instrument_is_treatment",
    "76 too few instruments": "under_identified",
    "77 excluded and not excluded": "excluded_is_control instrument_is_control",
    "78 nothing excluded": "no_exclusion",
    "79 alone in a group": "singleton",
    "80 clusters missing or single": "cluster_missing one_cluster",
    "81 clusters within clusters": "nested_clusters",
    "82 logarithms of nothing": "transform_impossible",
    "83 weights that are none": "outcome_error test_an_infinite_weight_is_withheld",
    "84 likelihoods without a peak": "test_no_convergence_is_withheld",
    "85 a correction that repeats the regressors": "test_correlation_in_words",
    "86 chances near zero and one": "no_overlap",
    "87 hardly more rows than coefficients": "few_rows",
    "88 unbounded sets": "test_unbounded_sets_stay_unbounded",
    "89 regressors of very different scale": "test_the_scale_of_a_regressor_does_not_matter",
    # Study file and run
    "90 misspelt keys": "unknown_key",
    "91 windows that overlap or end before they start": "overlapping_windows bad_value",
    "92 a window twice": "test_a_window_named_twice_is_measured_once",
    "93 no seed": "test_the_same_seed_gives_the_same_numbers",
    "94 too few draws, levels out of range": "bad_value",
    "95 a folder of something else": "output_folder",
    "96 words that spreadsheets run": "test_words_never_become_formulas",
    "97 files missing or of other capitals": "missing_file",
    "98 dates beyond the calendar": "test_a_date_beyond_the_calendar_leaves_with_an_entry",
    "99 variables that are not there or are taken": "unknown_variable reserved_name",
    "100 numbers of the study file with commas": "unreadable_file bad_value",
}


def test_there_are_a_hundred() -> None:
    numbers = [int(way.split()[0]) for way in ANSWERS]
    assert numbers == list(range(1, 101))


@pytest.fixture(scope="module")
def known_tests() -> set[str]:
    texts = (path.read_text(encoding="utf-8") for path in TESTS.rglob("test_*.py"))
    return {name for text in texts for name in re.findall(r"^def (test_\w+)", text, re.M)}


@pytest.mark.parametrize("way", ANSWERS)
def test_each_way_has_an_answer(way: str, known_tests: set[str]) -> None:
    answers = ANSWERS[way].split()
    assert answers
    for answer in answers:
        assert answer in (known_tests if answer.startswith("test_") else RULES), answer
