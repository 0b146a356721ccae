"""What others call the columns and tables we read: common practice, no source."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

COLUMNS: Final[Mapping[str, tuple[str, ...]]] = {
    "deal_id": ("deal id", "deal", "deal number", "deal no", "docno", "doc no", "id", "identifier",
                "transaction id", "transaction", "case", "case id", "reference", "ref", "bid id",
                "event", "event id"),
    "security": ("security", "acquirer code", "acquirer", "acquiror", "bidder", "buyer", "ticker",
                 "symbol", "company", "company code", "firm", "firm id", "permno", "gvkey", "code",
                 "share", "stock", "instrument", "isin", "ric", "permco", "issuer", "listing"),
    "exchange": ("exchange", "mic", "market", "venue", "exchange code", "listing venue",
                 "stock exchange", "place"),
    "announced_at": ("announced at", "announced", "announcement", "announcement date",
                     "date announced", "announce date", "ann date", "event date", "date",
                     "announced on", "public date", "event day"),
    "timestamp_zone": ("timestamp zone", "zone", "time zone", "timezone", "tz"),
    "currency": ("currency", "ccy", "cur", "iso currency", "currency code"),
    "market_value": ("market value", "market cap", "mcap", "market capitalisation",
                     "market capitalization", "acquirer market value", "equity value", "mktcap"),
    "deal_value": ("deal value", "transaction value", "value", "consideration", "price paid",
                   "deal size", "bid value", "offer value"),
    "earnings_release": ("earnings release", "earnings date", "results date", "earnings"),
    "status": ("status", "deal status", "outcome status", "state"),
    "counterparty": ("counterparty", "target", "target code", "seller", "target name"),
    "side": ("side", "role", "party"),
    "year": ("year", "fiscal year", "fyear", "fy", "calendar year"),
    "isin": ("isin", "isin code"), "cusip": ("cusip",), "sedol": ("sedol",),
    "rumoured_at": ("rumoured at", "rumour date", "rumor date", "rumoured", "rumored", "leak date"),
    "completed_at": ("completed at", "completion date", "closing date", "effective date",
                     "date completed"),
    "withdrawn_at": ("withdrawn at", "withdrawal date", "date withdrawn"),
    "amended_at": ("amended at", "amendment date"),
    "as_of": ("as of", "asof", "known at", "report date", "balance date", "period end"),
    "date": ("date", "day", "trade date", "trading date", "price date", "session", "dates",
             "datadate", "caldt"),
    "close": ("close", "adjusted close", "adj close", "closing price", "price", "last", "px last",
              "prc", "level", "index level", "settle", "index", "value"),
    "return": ("return", "returns", "ret", "daily return", "total return", "r"),
    "volume": ("volume", "vol", "shares traded", "turnover", "px volume"),
    "rate": ("rate", "fx", "fx rate", "exchange rate", "spot"),
    "reason": ("reason", "cause", "delisting reason", "code"),
    "kind": ("kind", "type", "news type", "category", "event type"),
    "line": ("line", "listing", "listing code", "line code", "quote"),
    "primary": ("primary", "is primary", "primary listing"),
    "home": ("home", "home market", "is home"),
    "peer": ("peer", "peer code", "comparable", "peer company", "competitor"),
    "risk_free": ("risk free", "rf", "riskfree", "risk free rate", "cash rate"),
}  # fmt: skip
TABLES: Final[Mapping[str, tuple[str, ...]]] = {
    "deals": ("deals", "deal list", "bids", "offers", "transactions", "acquisitions", "mergers",
              "events", "announcements"),
    "prices": ("prices", "price", "quotes", "closes", "history", "returns", "shares"),
    "benchmarks": ("benchmarks", "benchmark", "index", "indices", "market", "levels"),
    "candidates": ("candidates", "universe", "companies", "firms", "panel"),
    "factors": ("factors", "factor"),
    "rates": ("rates", "fx", "currencies", "exchange rates"),
    "delistings": ("delistings", "delisted", "delisting"),
    "listings": ("listings", "lines"),
    "news": ("news", "releases", "events"),
    "peers": ("peers", "comparables", "competitors"),
    "restricted": ("restricted", "restricted list"),
}  # fmt: skip
OUTCOMES: Final = (
    "premium", "bid premium", "bidprem", "prem", "offer premium", "car", "cars", "abnormal return",
    "abnormal", "reaction", "announcement return", "break fee", "fee", "synergy", "outcome",
)  # fmt: skip
CHOICES: Final = (
    "paid in shares", "stock payment", "share payment", "payment", "paid", "stock", "all cash",
    "all stock", "cash only", "payment method", "consideration type", "hostile", "friendly",
    "whtknght", "white knight", "earn out", "earnout", "tender", "tender offer", "toehold",
    "collar", "consideration", "method",
)  # fmt: skip
AFTERWARDS: Final = (
    "completed", "takeover", "taken over", "success", "successful", "failed", "withdrawn",
    "numbids", "bids", "number of bids", "weeks", "days to close", "duration", "closed",
    "target hit", "competing bids", "competing", "synergies realised", "post", "final",
)  # fmt: skip
"""Variables settled after the announcement, which no control may be."""
