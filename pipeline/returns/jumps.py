"""Moves of a close that are no returns: splits, prices in other units, rows of two downloads."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from pipeline.core.findings import Finding, Severity
from pipeline.core.prices import Booleans, Floats, Integers, PricePanel, blocks
from pipeline.returns.limits import DEFAULT_LIMITS, ScreenLimits
from pipeline.returns.policies import since_last_close

SPLIT_FACTORS = np.array([2, 3, 4, 5, 10, 20, 1 / 2, 1 / 3, 1 / 4, 1 / 5, 1 / 10, 1 / 20])
UNIT_FACTORS = np.array([100, 1 / 100])
SUSPECT_FROM = 0.3
UNIT_TOLERANCE = 0.1
FEWEST = 5
Jumps = dict[str, list[np.datetime64]]


def suspected_splits(panel: PricePanel, limits: ScreenLimits = DEFAULT_LIMITS) -> Jumps:
    """Security -> sessions whose close moved by a whole factor while the benchmark was calm.

    A ratio to the benchmark's near 2, 3, 4, 5, 10, 20 or an inverse: common practice, no source.
    The close is held against the last one before, over a gap if need be.
    """
    return _jumps(panel, SPLIT_FACTORS, limits.split_tolerance, limits.calm_benchmark)


def unit_jumps(panel: PricePanel, limits: ScreenLimits = DEFAULT_LIMITS) -> list[Finding]:
    """An error for closes that move by a hundred: pence and pounds, cents and rand."""
    found = _jumps(panel, UNIT_FACTORS, UNIT_TOLERANCE, limits.calm_benchmark)
    return [
        Finding(
            "price_unit",
            Severity.ERROR,
            "prices",
            got=f"{security} moved by a factor of about 100 on {dates(days)}",
            expected="one unit of money in all closes of a security",
            remedy="Convert the closes, for example from pence to pounds.",
            column="close",
        )
        for security, days in found.items()
    ]


def _jumps(panel: PricePanel, factors: Floats, tolerance: float, calm: float) -> Jumps:
    found: Jumps = {}
    wild = ~(np.abs(panel.benchmark) < calm)
    places = [_large(panel, block, wild) for block in blocks(len(panel.securities))]
    rows, columns, sizes = (np.concatenate(part) for part in zip(*places, strict=True))
    for at in np.lexsort((columns, rows)):
        ratio = (1 + sizes[at]) / (1 + panel.benchmark[rows[at]])
        if (np.abs(ratio / factors - 1) < tolerance).any():
            days = found.setdefault(panel.securities[columns[at]], [])
            days.append(panel.sessions[rows[at]])
    return found


def _large(panel: PricePanel, block: slice, wild: Booleans) -> tuple[Integers, Integers, Floats]:
    """Session, column and size of the large moves of some securities while the benchmark is calm.

    ``wild`` (T,) says when it is not.
    """
    moves, _ = since_last_close(panel.close[:, block])
    moves[np.abs(moves) <= SUSPECT_FROM] = np.nan
    if panel.delisted is not None:
        delisted = panel.delisted[block]
        known = np.flatnonzero(delisted >= 0)
        moves[delisted[known], known] = np.nan
    moves[wild] = np.nan
    rows, columns = np.nonzero(np.isfinite(moves))
    return rows, columns + block.start, moves[rows, columns]


def jumps_together(panel: PricePanel, limits: ScreenLimits = DEFAULT_LIMITS) -> list[Finding]:
    """A warning for sessions on which many securities jump and the benchmark does not.

    Closes adjusted at two dates, put one below the other, move by each company's own dividends
    and splits where the downloads meet.
    """
    jumped, quoted = (np.zeros(len(panel.sessions), dtype=np.int64) for _ in range(2))
    for block in blocks(len(panel.securities)):
        moves = np.abs(panel.returns[:, block] - panel.benchmark[:, None])
        known = np.isfinite(moves)
        moves = np.where(known, moves, 0.0)
        with np.errstate(invalid="ignore", divide="ignore"):
            usual = moves.sum(axis=0) / known.sum(axis=0)
            jumped += (moves > limits.together_jump * usual).sum(axis=1)
        quoted += known.sum(axis=1)
    enough = np.maximum(FEWEST, limits.together_share * quoted)
    days = panel.sessions[(jumped >= enough) & (np.abs(panel.benchmark) < limits.calm_benchmark)]
    if days.size == 0:
        return []
    return [
        Finding(
            "prices_of_two_downloads",
            Severity.WARNING,
            "prices",
            got=f"{panel.exchange}: many closes jump and the benchmark does not on {dates(days)}",
            expected="closes adjusted at one date, all downloaded together",
            remedy="Download the whole history again at once, or look at the dates named.",
            column="close",
        )
    ]


def dates(days: Iterable[np.datetime64], shown: int = 4) -> str:
    """The first few of some dates, and how many more there are."""
    listed = sorted(set(map(str, days)))
    more = f" and {len(listed) - shown} more" if len(listed) > shown else ""
    return ", ".join(listed[:shown]) + more
