"""When prices are doubted: the thresholds of all screens."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class ScreenLimits:
    """Thresholds of the screens; all common practice, no source.

    Attributes:
        zero_returns_flag, zero_returns_drop: shares of unchanged prices before the deal.
        no_trade_flag: share of sessions without a share traded before the deal.
        stale_run: sessions in a row with one price, before the deal.
        gaps_flag: share of sessions without a return before the deal.
        large_return: a return to look at, decimal.
        split_tolerance: how near a move must come to a whole factor.
        calm_benchmark: a benchmark's return below which the market did not move, decimal.
        off_session_share: share of prices on days without a session that is an error.
        closed_share: a session with fewer prices than this share was perhaps none.
        benchmark_gaps: share of sessions without a benchmark that is an error.
        together_share: share of securities that jump on one session.
        together_jump: such a jump, in mean absolute returns of the security.
        sparse_sessions: sessions between two prices from which on a file is not daily.
        without_prices: share of deals whose security has no prices that is an error.
    """

    zero_returns_flag: float = 0.2
    zero_returns_drop: float = 0.5
    no_trade_flag: float = 0.2
    stale_run: int = 5
    gaps_flag: float = 0.05
    large_return: float = 0.5
    split_tolerance: float = 0.03
    calm_benchmark: float = 0.05
    off_session_share: float = 0.02
    closed_share: float = 0.5
    benchmark_gaps: float = 0.02
    together_share: float = 0.2
    together_jump: float = 8.0
    sparse_sessions: int = 4
    without_prices: float = 0.2


DEFAULT_LIMITS = ScreenLimits()
