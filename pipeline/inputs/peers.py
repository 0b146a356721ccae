"""Peers named one by one: which companies a company is compared with."""

from __future__ import annotations

import pandas as pd

from pipeline.core.findings import Finding
from pipeline.inputs.contracts import Column
from pipeline.inputs.files import ROW, Source, read_table
from pipeline.inputs.typed import typed


def read_peers(source: Source) -> tuple[pd.DataFrame, list[Finding]]:
    """One row a pair: security, peer, and the peer's exchange ('' for that of the security)."""
    columns = [
        Column("security", "text", filled=True, why="the company that is compared"),
        Column("peer", "text", filled=True, why="a company it is compared with"),
        Column("exchange", "text", optional=True),
    ]
    table, findings = typed(read_table(source), source, columns, "")
    return table.drop(columns=ROW).drop_duplicates(ignore_index=True), findings


def listed_peers(peers: pd.DataFrame, listings: pd.DataFrame) -> pd.DataFrame:
    """security, exchange of the peers that ``listings`` does not hold.

    A peer without an exchange of its own is taken to be listed where its company is.
    """
    place = listings.drop_duplicates("security").set_index("security")["exchange"]
    home = peers["security"].map(place)
    exchange = peers["exchange"].where(peers["exchange"] != "", home)
    found = pd.DataFrame({"security": peers["peer"], "exchange": exchange}).dropna()
    return found[~found["security"].isin(place.index)].drop_duplicates("security")
