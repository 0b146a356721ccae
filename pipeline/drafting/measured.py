"""Lines for deals whose returns are measured from prices."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace

import numpy as np

from pipeline.core.findings import Finding, Severity
from pipeline.drafting.dates import Dating
from pipeline.drafting.features import numbers
from pipeline.drafting.history import DAILY, History, Windows, history_of, windows_of
from pipeline.drafting.kinds import Recognised, Sorted
from pipeline.drafting.lines import Line
from pipeline.drafting.outcomes import regression
from pipeline.inputs.quoted import LARGEST, SMALLEST

MOST_PRICED = 0.8
WAITING = (
    "No windows: they wait until the dates of the deals can be read; answer the question about "
    "dates and draft again."
)


Made = tuple[list[Line], list[Finding]]


def measured_lines(kinds: Sorted, answers: Mapping[str, object]) -> Made:
    """Windows, models, price measures and the regression; windows need a readable history."""
    have = kinds.by_kind
    lines = [line for kind in ("prices", "benchmarks", "factors") if kind in have
             for line in _given(kind, have[kind])]  # fmt: skip
    if any(kind not in have for kind in ("deals", "prices")) or have["deals"].lacking:
        return lines, []
    deals, prices = have["deals"], have["prices"]
    if deals.column("side"):
        words = ", ".join(f"'{word}'" for word in deals.found.signs[deals.column("side")].levels)
        lines.append(Line("event_time", "side", None, f"the list holds {words}. Which side of the "
                          "deals is the study about?", example='"acquirer"'))  # fmt: skip
    dating = deals.found.signs[deals.column("announced_at")].dating
    if dating.trouble or (dating.open and "inputs.date_format" not in answers):
        return [*lines, Line("", "", "", WAITING)], []
    deals = _answered(deals, answers)
    history = history_of(deals, prices)
    windows = windows_of(history)
    problems = [*_history_findings(history, deals, prices, windows)]
    if windows is None:
        return lines, problems
    lines += _window_lines(windows)
    also = ["market_adjusted", "constant_mean", *(["factor_model"] if "factors" in have else [])]
    lines += [
        Line("expected_returns", "headline", "market_model",
             "The share's usual move with its market, from the estimation window."),
        Line("expected_returns", "also", also, "Shown beside it."),
    ]  # fmt: skip
    lines += _money(deals)
    return regression(lines, deals, deals.others, [*_measures(windows)], answers), problems


def _money(deals: Recognised) -> Iterator[Line]:
    """In which currency and scale amounts are: no cell tells the scale."""
    amounts = [deals.column(role) for role in ("market_value", "deal_value") if deals.column(role)]
    if amounts:
        signs = deals.found.signs[amounts[0]]
        code = deals.column("currency")
        codes = deals.found.signs[code].levels if code else ()
        currency = codes[0] if len(codes) == 1 else "USD"
        yield Line(
            "report", "currency", None,
            f"'{amounts[0]}' holds amounts about {signs.middle:,.4g}. In which currency and scale? "
            "Without an answer no amount of money is printed.",
            example=f'"{currency} million"',
        )  # fmt: skip


def _answered(deals: Recognised, answers: Mapping[str, object]) -> Recognised:
    """The deal list with its dates read as the analyst said."""
    said = answers.get("inputs.date_format")
    if not isinstance(said, str):
        return deals
    column = deals.column("announced_at")
    signs = replace(deals.found.signs[column], dating=Dating(said))
    found = replace(deals.found, signs={**deals.found.signs, column: signs})
    return replace(deals, found=found)


def _history_findings(
    history: History, deals: Recognised, prices: Recognised, windows: Windows | None
) -> Iterator[Finding]:
    file = prices.found.source.file
    if history.gap >= DAILY:
        yield Finding(
            "not_daily", Severity.ERROR, file,
            got=f"{history.gap:g} days between two dates of a company",
            expected="a price a session",
            remedy="Export daily prices.",
        )  # fmt: skip
    elif history.priced < MOST_PRICED * history.deals:
        yield Finding(
            "many_without_prices", Severity.ERROR, file,
            got=f"prices of {history.priced} of {history.deals} deals, compared by "
            f"'{deals.column('security')}' and '{prices.column('security')}'",
            expected=f"prices of at least {MOST_PRICED:.0%} of them",
            remedy="Add the prices that are missing, or bring both columns to the same codes.",
        )  # fmt: skip
    elif windows is None:
        yield Finding(
            "outside_history", Severity.ERROR, file,
            got=f"{history.before} sessions of prices before the deals",
            expected="at least 42: thirty returns for an estimate, and ten sessions of distance",
            remedy="Let the price file begin earlier.",
        )  # fmt: skip


def _window_lines(windows: Windows) -> list[Line]:
    return [
        Line("event_time", "estimation", list(windows.estimation), windows.reason),
        Line("event_time", "minimum_observations", windows.minimum,
             "Returns a deal must have in that window."),
        Line("event_time", "headline", list(windows.headline),
             "The session before, of and after the announcement: declare it before you look.",
             doubtful=True),
        Line("event_time", "windows", [list(pair) for pair in windows.secondary],
             "Secondary windows, adjusted for how many there are."),
    ]  # fmt: skip


def _measures(windows: Windows) -> Iterator[Line]:
    if windows.run_up is not None:
        yield Line("characteristics.run_up", "price", "run_up",
                   "Return over the market before the windows begin.")  # fmt: skip
        yield Line("characteristics.run_up", "window", list(windows.run_up))
    yield Line("characteristics.volatility", "price", "volatility",
               "How much the share moves by itself, from the estimation window.")  # fmt: skip


def _given(kind: str, item: Recognised) -> Iterator[Line]:
    """Whether a file holds closes or returns, and in which unit returns are."""
    if kind == "factors":
        used = {match.column for match in item.matches.values()}
        columns = [name for name in item.found.of_kind("number") if name not in used]
    elif not item.returns:
        return
    else:
        columns = [item.column("return")]
        yield Line(f"series.{kind}", "given", "returns", "The column lies on both sides of zero: "
                   "returns, not closes.")  # fmt: skip
    spreads = [float(np.nanstd(numbers(item, name))) for name in columns]
    yield _return_unit(kind, max(spreads))


def _return_unit(kind: str, spread: float) -> Line:
    """The unit of daily returns if their spread leaves one alone, else a question."""
    fit = [unit for unit, scale in (("decimal", 1.0), ("percent", 100.0))
           if SMALLEST <= spread / scale <= LARGEST]  # fmt: skip
    told = f"a standard deviation of {spread:.3g} a day"
    if len(fit) == 1:
        reason = f"{told[0].upper()}{told[1:]}: no market moves so in the other unit."
        return Line(f"series.{kind}", "unit", fit[0], reason)
    return Line(f"series.{kind}", "unit", None, f"{told} may be decimals (0.01 for one percent) or "
                "percent. Which one is it?", example='"decimal"')  # fmt: skip
