"""Longer horizons than the windows: portfolios in calendar time, and matched companies."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from pipeline.core.ledger import StageLedger
from pipeline.core.tables import no_frame
from pipeline.flow.measured import Measured
from pipeline.returns.events import locate_candidates
from pipeline.returns.matched import matched_controls
from pipeline.significance.buy_and_hold import buy_and_hold
from pipeline.significance.calendar_time import calendar_time
from pipeline.study import plan_returns
from pipeline.study.schema import Study


@dataclass(frozen=True, slots=True)
class Horizons:
    """What the longer horizons gave; empty where the study asks for none."""

    calendar_time: Any
    matched: Any
    buy_and_hold: Any
    stages: tuple[StageLedger, ...] = ()


def longer_horizons(study: Study, measured: Measured) -> Horizons:
    """The frames of calendar time and of matched companies, and what the ledger gains by them."""
    portfolios = no_frame()
    if study.calendar_time.horizons:
        options = plan_returns.calendar_time_options(study)
        portfolios = calendar_time(measured.panels, measured.deals, options)
    candidates = measured.tables.candidates
    if not study.matched_control.windows or candidates is None:
        return Horizons(portfolios, no_frame(), no_frame())
    matched, stage = matched_controls(
        measured.deals,
        measured.located,
        locate_candidates(candidates, measured.panels),
        measured.panels,
        plan_returns.match_options(study),
    )
    return Horizons(portfolios, matched, buy_and_hold(matched, study.level, study.seed), (stage,))
