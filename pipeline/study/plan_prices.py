"""What a study asks about prices and returns, in the stages' own terms."""

from __future__ import annotations

from collections.abc import Iterator

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.quoted import Quoted, QuotedFiles
from pipeline.registry import EXPECTED_RETURNS, entry
from pipeline.returns.limits import ScreenLimits
from pipeline.study.schema import Study

MONEY = ("market_value", "deal_value")
# Thresholds that the tables are read with, and day zero is placed with.
ELSEWHERE = {"nonpositive_share", "longest_halt"}
KINDS = {"simple": "simple", "log": "logarithmic"}
GAPS = {
    "drop": "A session without a price is a gap, never a return of zero",
    "trade_to_trade": "A price after a gap brings the return since the last one, matched with the "
    "benchmark over the same sessions (trade to trade); a session without a price has none",
    "lumped": "A session without a price between two others counts as a return of zero, and the "
    "next price takes the whole move, which understates variance and beta",
}
DELISTINGS = {
    "supplied": "A delisting return of the table of delistings belongs to the session after the "
    "last price",
    "shumway": "A delisting return belongs to the session after the last price; where a delisting "
    "for performance has none, -30% is taken in New York (Shumway 1997) and -55% on Nasdaq "
    "(Shumway and Warther 1999)",
    "drop": "Delisting returns are not used: a deal leaves the windows that need one",
}
BIAS = {
    True: "without dividends, against a benchmark with them: abnormal returns are too low by the "
    "dividends, most of all on days without a right to one",
    False: "with dividends, against a benchmark without them: abnormal returns are too high by "
    "the benchmark's dividends",
}


def quoted_files(study: Study) -> QuotedFiles:
    """What the study declares of its files of prices, benchmarks and factors."""
    series, converted = study.series, bool(study.currency.common)
    prices, benchmarks = (
        Quoted(item.given == "returns", item.returns == "log", item.unit, converted)
        for item in (series.prices, series.benchmarks)
    )
    factors = Quoted(True, series.factors.returns == "log", series.factors.unit)
    return QuotedFiles(prices, benchmarks, factors, study.screens.nonpositive_share)


def screen_limits(study: Study) -> ScreenLimits:
    """When prices are doubted."""
    return ScreenLimits(**study.screens.model_dump(exclude=ELSEWHERE))


def candidate_currency(study: Study, numbers: tuple[str, ...]) -> tuple[str, ...]:
    """The column that says what the candidates' money is in, if any of it is converted."""
    return ("currency",) if study.currency.common and set(MONEY) & set(numbers) else ()


def return_sentences(study: Study) -> tuple[str, ...]:
    """How returns are made, one sentence each."""
    time, currency = study.event_time, study.currency.common
    model = study.expected_returns.headline.replace("_", " ")
    closes = "adjusted closes" if study.series.prices.given == "closes" else "the price file itself"
    found = [
        f"Returns are {KINDS[time.returns]} daily returns of {closes}; the headline model is the "
        f"{model}, estimated over sessions {time.estimation_window.label} with at least "
        f"{time.minimum_observations} returns.",
        f"{GAPS[time.missing]}; a deal needs every day of the headline window and "
        f"{time.share_of_days:.0%} of the days of another window.",
    ]
    if time.returns == "log":
        found.append(
            "A sum of logarithmic returns lies below that of simple ones by about half the "
            "variance, so the mean of volatile companies is the lower for it."
        )
    if study.inputs.delistings is not None:
        found.append(f"{DELISTINGS[time.delisting]}.")
    if currency:
        found.append(
            f"Closes and benchmarks are in {currency} at the rate of their session; money is in "
            f"{currency} at the rate one session before the headline window."
        )
    return tuple(found)


def return_warnings(study: Study) -> list[Finding]:
    """What a reader must be warned of in the study's own choices about returns."""
    found = []
    prices, benchmarks = study.series.prices.dividends, study.series.benchmarks.dividends
    if prices and benchmarks and prices != benchmarks:
        found.append(
            Finding(
                "dividend_basis",
                Severity.WARNING,
                "prices and benchmarks",
                got=f"prices {BIAS[prices == 'left_out']}",
                expected="dividends in both, or in neither",
                remedy="Take the other version of the index, or of the prices.",
                column="series",
            )
        )
    if study.event_time.missing == "lumped":
        found.append(
            Finding(
                "lumped",
                Severity.WARNING,
                "study file",
                got="sessions without a price taken as returns of zero",
                expected="gaps left out, or trade-to-trade returns",
                remedy="Use it for comparison: it understates variance and beta.",
                column="event_time.missing",
            )
        )
    return found


def price_checks(study: Study, file: str) -> Iterator[Finding]:
    """How what is said about prices fits together."""
    yield from _gaps(study, file)
    yield from _kinds(study, file)
    yield from _tables(study, file)


def _error(file: str, key: str, got: str, expected: str, remedy: str) -> Finding:
    return Finding("bad_value", Severity.ERROR, file, got, expected, remedy, column=key)


def _gaps(study: Study, file: str) -> Iterator[Finding]:
    time = study.event_time
    if time.missing != "drop" and study.series.prices.given == "returns":
        yield _error(
            file,
            "event_time.missing",
            f"'{time.missing}' with a price file of returns",
            "closes, from which a return over a gap can be made",
            "Give closes, or set event_time.missing = 'drop'.",
        )
    if time.missing != "trade_to_trade":
        return
    if time.returns == "log":
        yield _error(
            file,
            "event_time.returns",
            "'log' with trade-to-trade returns",
            "simple returns, which are compounded over a gap",
            "Set event_time.returns = 'simple'.",
        )
    for key in study.expected_returns.all_models:
        if entry(EXPECTED_RETURNS, key).one_session:
            yield _error(
                file,
                "event_time.missing",
                f"'trade_to_trade' with the model {key}",
                "a model of the benchmark, factors or a constant",
                f"Take {key} out of [expected_returns], or set event_time.missing = 'drop'.",
            )


def _kinds(study: Study, file: str) -> Iterator[Finding]:
    """Returns of different kinds are never mixed."""
    prices, benchmarks, factors = study.series.prices, study.series.benchmarks, study.series.factors
    both = prices.given == benchmarks.given == "returns"
    if both and prices.returns != benchmarks.returns:
        yield Finding(
            "mixed_returns",
            Severity.ERROR,
            file,
            got=f"{KINDS[prices.returns]} returns of prices, {KINDS[benchmarks.returns]} ones of "
            "benchmarks",
            expected="returns of one kind in both files",
            remedy="Correct the declaration, or export one of the files again.",
            column="series",
        )
    models = study.expected_returns.all_models
    needed = [key for key in models if "factors" in entry(EXPECTED_RETURNS, key).needs]
    if needed and factors.returns != study.event_time.returns:
        yield Finding(
            "mixed_returns",
            Severity.ERROR,
            file,
            got=f"{KINDS[factors.returns]} factor returns, {KINDS[study.event_time.returns]} ones "
            "of securities",
            expected=f"returns of one kind, for {', '.join(needed)}",
            remedy="Set event_time.returns to the kind of the factors.",
            column="event_time.returns",
        )


def _tables(study: Study, file: str) -> Iterator[Finding]:
    common, money = study.currency.common.upper(), study.report.currency
    if study.event_time.delisting == "shumway" and study.inputs.delistings is None:
        yield _error(
            file,
            "inputs.delistings",
            "nothing",
            "the table of delistings with their reasons, needed by event_time.delisting",
            "Name the file, or set event_time.delisting = 'supplied'.",
        )
    if study.inputs.rates is not None and not common:
        yield _error(
            file,
            "currency.common",
            "nothing",
            "the currency that inputs.rates converts into",
            "Name it, or take inputs.rates out.",
        )
    if common and money and money.split()[0].upper() != common:
        yield _error(
            file,
            "report.currency",
            f"'{money}'",
            f"money in {common}, as currency.common says",
            "Name the same currency in both places.",
        )
    if common and study.series.factors.currency.upper() not in ("", common):
        yield _error(
            file,
            "series.factors.currency",
            f"'{study.series.factors.currency}'",
            f"factors in {common}, as all returns are",
            "Take factors of that currency.",
        )
