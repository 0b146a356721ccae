"""How far around an event a study looks at prices: no other row leaves the price table."""

from __future__ import annotations

from pipeline.inputs.reach import Reach
from pipeline.registry import EXPECTED_RETURNS, entry
from pipeline.returns.placebo import FARTHEST
from pipeline.study.plan import span
from pipeline.study.schema import Study

# Sessions kept on either side of what is asked for: the return into the first one needs the close
# before it, and without a price on some session the next one may count.
SPARE = 10
SPARE_TRADE_TO_TRADE = 60


def reach(study: Study) -> Reach:
    """The sessions around announcements, and around the dates of candidates' values."""
    whole = _why_whole(study)
    if whole:
        return Reach(whole=whole)
    time, days = study.event_time, span(study)
    measured = [
        list(item.window or time.estimation)
        for item in study.characteristics.values()
        if item.price is not None
    ]
    spare = SPARE_TRADE_TO_TRADE if time.missing == "trade_to_trade" else SPARE
    moved = FARTHEST if study.placebo.draws else 0
    held = [study.calendar_time.first_session + most for most in study.calendar_time.horizons]
    first = min(time.estimation_window.start, days.start, *(window[0] for window in measured), 0)
    candidates = min((window[0] for window in measured), default=None)
    return Reach(
        before=-first + moved + spare,
        after=max(days.end, *held, 0) + moved + study.screens.longest_halt + spare,
        candidate_before=None if candidates is None else spare - candidates,
        whole="",
    )


def _why_whole(study: Study) -> str:
    """What needs the whole history of each security; '' if nothing does."""
    if study.inputs.history == "whole":
        return "inputs.history says so"
    models = study.expected_returns.all_models
    if any("peers" in entry(EXPECTED_RETURNS, key).needs for key in models):
        return "the companies a deal's is compared with are needed on its dates"
    if study.matched_control.windows:
        return "a control is held over the dates of another company's deal"
    if study.inputs.delistings is not None:
        return "a delisting is told by the last price of all"
    return ""
