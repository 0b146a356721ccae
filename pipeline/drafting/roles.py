"""What each column of each kind of table must look like."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

from pipeline.drafting.signs import Signs
from pipeline.inputs.quoted import LARGEST

PROVES, ALLOWS, NEVER = 1.0, 0.5, 0.0
SECURITY_CODES = ("isin", "cusip", "sedol")
Fit = Callable[[Signs], float]


@dataclass(frozen=True, slots=True)
class Role:
    """A column that a kind of table has.

    ``fits`` says what the cells allow: 1 if they prove it, 0.5 if they allow it, 0 if not;
    ``named`` that cells which merely allow it are not enough without the name; ``layout`` what a
    cell looks like.
    """

    name: str
    fits: Fit
    must: bool = False
    named: bool = True
    layout: str = ""


def _when(found: bool) -> float:
    return ALLOWS if found else NEVER


def _code(signs: Signs) -> float:
    """A company's code: letters or whole numbers that are no other code."""
    if signs.code in SECURITY_CODES:
        return PROVES
    plain = signs.kind == "text" and not signs.code and not signs.trouble
    return _when(plain or (signs.kind == "number" and signs.whole and signs.distinct > 2))


def _is(code: str) -> Fit:
    return lambda signs: PROVES if signs.code == code else NEVER


def _exchange(signs: Signs) -> float:
    return PROVES if signs.code == "exchange" else NEVER


def _date(signs: Signs) -> float:
    return PROVES if signs.kind == "date" else NEVER


def _optional_date(signs: Signs) -> float:
    return _when(signs.kind == "date")


def _identifier(signs: Signs) -> float:
    """No two alike; a mere count of the rows is the weakest of identifiers."""
    fine = signs.unique and signs.filled == 1 and signs.kind in ("text", "number")
    if not fine or (signs.kind == "number" and not signs.whole) or signs.trouble:
        return NEVER
    return 0.3 if signs.counted else 0.8


def _positive(signs: Signs) -> float:
    return _when(signs.kind == "number" and signs.low > 0 and signs.varies and not signs.flag)


def _return(signs: Signs) -> float:
    """Both signs, a median near zero beside the spread."""
    number = signs.kind == "number" and signs.low < 0 < signs.high and not signs.whole
    return _when(number and abs(signs.middle) < signs.spread)


def _year(signs: Signs) -> float:
    return PROVES if signs.is_year else NEVER


def _number(signs: Signs) -> float:
    return _when(signs.kind == "number" and signs.low >= 0)


def _flag(signs: Signs) -> float:
    return _when(signs.flag or (signs.kind == "number" and not signs.varies))


def _few_words(signs: Signs) -> float:
    return _when(signs.kind == "text" and not signs.code and 0 < len(signs.levels) <= 50)


def _words(signs: Signs) -> float:
    return _when(signs.kind == "text" and not signs.code)


def small(signs: Signs) -> bool:
    """Whether numbers may be returns, in decimals or in percent."""
    return _return(signs) > 0 and signs.spread < 100 * LARGEST


SECURITY = Role("security", _code, True, layout="the company's code, the same in every table")
EXCHANGE = Role("exchange", _exchange, True, layout="ISO 10383 code: XNYS, XLON")
DATE = Role("date", _date, True, False, layout="YYYY-MM-DD")
NUMBER_DATES = ("rumoured_at", "completed_at", "withdrawn_at", "amended_at", "earnings_release")
CODES = (Role("isin", _is("isin")), Role("cusip", _is("cusip")), Role("sedol", _is("sedol")))
DEALS = (
    Role("announced_at", _date, True, False, "2024-03-08 17:45, or the date alone"),
    Role("exchange", _exchange, True, False, EXCHANGE.layout),
    Role("deal_id", _identifier, True, False, "a name for each deal that no other has"),
    SECURITY,
    Role("timestamp_zone", _is("zone"), named=False),
    Role("currency", _is("currency"), named=False),
    *CODES,
    *(Role(name, _optional_date) for name in (*NUMBER_DATES, "as_of")),
    Role("market_value", _positive),
    Role("deal_value", _positive),
    Role("year", _year, named=False),
    Role("counterparty", _code),
    Role("side", _few_words),
    Role("status", _few_words),
)
READY = tuple(
    Role(role.name, role.fits, role.name == "deal_id", role.named, role.layout) for role in DEALS
)
KINDS: Final[Mapping[str, tuple[Role, ...]]] = {
    "deals": DEALS,
    "ready": READY,
    "prices": (
        DATE,
        Role("security", _code, True, False, SECURITY.layout),
        Role("close", _positive, True, False, "the day's last price, above zero"),
        Role("volume", _number),
        Role("currency", _is("currency"), named=False),
    ),
    "benchmarks": (
        DATE,
        Role("exchange", _exchange, True, False, EXCHANGE.layout),
        Role("close", _positive, True, False, "the index level, above zero"),
        Role("market_value", _positive),
        Role("currency", _is("currency"), named=False),
    ),
    "factors": (
        DATE,
        Role("exchange", _exchange, True, False, EXCHANGE.layout),
        Role("risk_free", lambda signs: _when(signs.kind == "number")),
    ),
    "candidates": (
        SECURITY,
        Role("exchange", _exchange, True, False, EXCHANGE.layout),
        Role("year", _year, True, False, "2024"),
        Role("as_of", _date, True, False, "the date its values were known"),
        Role("deal_id", lambda s: _when(s.unique and s.filled < 1), True, False,
             "the year's first deal of the company, empty if none"),
        Role("currency", _is("currency"), named=False),
        Role("market_value", _positive),
    ),
    "rates": (
        DATE,
        Role("currency", _is("currency"), True, False, "ISO 4217 code: EUR"),
        Role("rate", _positive, True, False, "what one unit costs in the common currency"),
    ),
    "delistings": (
        SECURITY,
        DATE,
        Role("return", lambda s: _when(s.kind in ("number", "empty")), True),
        Role("reason", _few_words),
    ),
    "listings": (
        SECURITY,
        Role("line", _code, True, True, "the listing's code among the prices"),
        Role("exchange", _exchange, True, False, EXCHANGE.layout),
        Role("primary", _flag),
        Role("home", _flag),
        Role("currency", _is("currency"), named=False),
    ),
    "news": (SECURITY, DATE, Role("kind", _few_words, True, False, "what the news was")),
    "peers": (
        SECURITY,
        Role("peer", _words, True, True, "a company it is compared with"),
        Role("exchange", _exchange, named=False),
    ),
    "restricted": (Role("security", _code, True, False, SECURITY.layout),),
}  # fmt: skip
GIVEN_AS_RETURNS: Final = Role("return", _return, True, False, "the day's return")
