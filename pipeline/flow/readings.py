"""The headline under the other date of rumoured deals, and on second listings."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import PricePanel
from pipeline.core.reading import Reading
from pipeline.flow.placed import Placed, unused_sessions
from pipeline.returns.confounding import news_days, without_news
from pipeline.returns.events import EventOptions
from pipeline.returns.measure import measure
from pipeline.returns.rumours import with_day_zero

OTHER_DATE = {
    True: "day zero at the announcement, though it was rumoured before",
    False: "day zero at the rumour, where there was one",
}
SECOND = "on the second listing, where there is one"


def readings_of(
    placed: Placed,
    deals: Any,
    panels: Mapping[str, PricePanel],
    model: tuple[str, Callable[..., Any]],
    options: EventOptions,
) -> tuple[Reading, ...]:
    """The deals kept, measured under each other choice that makes a difference to some of them.

    Args:
        placed: where the deals stand, and where else they could.
        deals: the deals kept.
        panels: exchange -> prices.
        model: key and function of the headline's expected return.
        options: as of the headline.
    """
    choices = (
        ("day zero", OTHER_DATE[options.earliest], placed.by_other_date, placed.located),
        ("listing", SECOND, placed.on_second_lines, _on_second_sessions(placed)),
    )
    found = []
    for dimension, words, other, located in choices:
        changed = _changed(deals, other, options)
        if changed is not None:
            moved = with_day_zero(deals, changed)
            measured = _measured(moved, located, placed, panels, model, options)
            found.append(Reading(dimension, words, len(changed), measured))
    return tuple(found)


def _on_second_sessions(placed: Placed) -> Any:
    """Every deal located, on the sessions of its company's second listing where it has one."""
    second = placed.on_second_lines
    return placed.located if second is None else with_day_zero(placed.located, second)


def _changed(deals: Any, other: Any, options: EventOptions) -> Any:
    """The rows of ``other`` that are among the deals and have room for the windows."""
    if other is None:
        return None
    first = options.estimation.start + options.minimum_observations
    kept = other[other["deal_id"].isin(set(deals["deal_id"])) & (other["position"] + first >= 0)]
    return kept if len(kept) else None


def _measured(
    moved: Any,
    located: Any,
    placed: Placed,
    panels: Mapping[str, PricePanel],
    model: tuple[str, Callable[..., Any]],
    options: EventOptions,
) -> AbnormalReturns:
    """The abnormal returns of ``moved``, apart from deals with too few returns to estimate on."""
    news = news_days(moved, panels, placed.tables.news)
    masked = unused_sessions(moved, located, options, news, panels)
    key, function = model
    abnormal = measure(key, function, moved, masked, panels, options.estimation, options.span)
    if options.confounding == "dummy":
        abnormal = without_news(abnormal, news.mask(moved, options.span))
    usable = abnormal.observations >= options.minimum_observations
    return abnormal.select(usable)
