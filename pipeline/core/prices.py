"""Daily prices of the securities of one exchange, on that exchange's own sessions."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Dates = NDArray[np.datetime64]
Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

# Columns of the factor file that are no factors.
RISK_FREE = "risk_free"
GLOBAL = "global_market"

# Securities looked at together where what is made of a whole panel would take several times its
# memory; their columns stay in the processor's cache.
AT_ONCE = 128


def blocks(columns: int) -> Iterator[slice]:
    """Slices that go through ``columns`` columns; one empty slice if there are none."""
    for start in range(0, max(columns, 1), AT_ONCE):
        yield slice(start, min(start + AT_ONCE, columns))


@dataclass(frozen=True, slots=True, eq=False)
class PricePanel:
    """Closes, volumes and simple returns, one contiguous column a security.

    Attributes:
        exchange: ISO 10383 code.
        sessions: (T,) ``datetime64[D]``, the exchange's sessions in order.
        securities: S codes, the columns.
        close: (T, S) in the listing's currency; NaN where nothing was quoted.
        volume: (T, S) shares; NaN where unknown.
        returns: (T, S) simple returns; NaN on a session without a close and on the first
            session after one, so that no return spans a gap unseen.
        benchmark: (T,) simple returns of the exchange's benchmark.
        factors: name -> (T,) simple daily returns, decimal.
        spans: (T, S) sessions each return covers, from 1 on; None if every return covers one.
        delisted: (S,) session that holds the return of the delisting, -1 where there is none; None
            without a table of delistings.
        asked: (T, S) whether the price of the session was read; None if all were.
    """

    exchange: str
    sessions: Dates
    securities: tuple[str, ...]
    close: Floats
    volume: Floats
    returns: Floats
    benchmark: Floats
    factors: dict[str, Floats]
    spans: Integers | None = None
    delisted: Integers | None = None
    asked: Booleans | None = None

    def __post_init__(self) -> None:
        shape = (len(self.sessions), len(self.securities))
        for name in ("close", "volume", "returns"):
            if getattr(self, name).shape != shape:
                raise ValueError(f"{name} has shape {getattr(self, name).shape}, expected {shape}")
        if self.benchmark.shape != shape[:1]:
            raise ValueError(f"benchmark has shape {self.benchmark.shape}, expected {shape[:1]}")
        if self.spans is not None and (self.spans.shape != shape or (self.spans < 1).any()):
            raise ValueError(f"spans must be whole numbers from 1 on, of shape {shape}")

    def position(self, day: np.datetime64) -> int:
        """Index of the first session on or after ``day``; T if there is none."""
        return int(np.searchsorted(self.sessions, day))

    def column(self, security: str) -> int:
        """Index of the security's column.

        Raises:
            KeyError: if the security is not in the panel.
        """
        try:
            return self.securities.index(security)
        except ValueError:
            raise KeyError(security) from None
