"""Warnings about samples of few events, or of few dates."""

from __future__ import annotations

import pandas as pd

from pipeline.core.findings import Finding, Severity

FEW_EVENTS = 10
FEW_DATES = 3


def few_events(deals: pd.DataFrame, file: str) -> tuple[Finding, ...]:
    """A warning for fewer than 10 deals, and one for several deals on fewer than 3 dates.

    Limits are common practice, no source.

    Args:
        deals: the deals kept, with ``day_zero``.
        file: the deal list, as named in findings.
    """
    found = []
    if len(deals) < FEW_EVENTS:
        found.append(
            Finding(
                "few_events",
                Severity.WARNING,
                file,
                got=f"{len(deals)} deals in the tests",
                expected=f"at least {FEW_EVENTS}",
                remedy="Rest on the tests made for few deals, and say so.",
            )
        )
    dates = deals["day_zero"].nunique()
    if len(deals) > dates and dates < FEW_DATES:
        found.append(
            Finding(
                "few_dates",
                Severity.WARNING,
                file,
                got=f"{len(deals)} deals on {dates} date" + ("s" if dates > 1 else ""),
                expected=f"at least {FEW_DATES} dates",
                remedy="Rest on tests that allow for deals moving together; a fixed effect of "
                "dates cannot be told from the deals.",
            )
        )
    return tuple(found)
