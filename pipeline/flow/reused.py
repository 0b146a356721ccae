"""What decides the prices of a study and the abnormal returns of its deals, as one text each."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

from pipeline.keeping import Shelf, code_digest, shelf_for
from pipeline.study import plan
from pipeline.study.plan_reach import reach
from pipeline.study.schema import Study

# Parts of a study that neither reading nor measuring looks at. What they want from the tables
# (columns, dates around an event) stands in the keys by itself; any part added later counts.
LATER: set[str] = {
    "name", "title", "question", "labels", "seed", "level", "tests", "placebo", "calendar_time",
    "matched_control", "characteristics", "regression", "selection", "instruments", "bounds",
    "fit", "scrutiny", "report", "papers", "compute",
}  # fmt: skip
AFTER_PRICES = {"headline", "estimation", "minimum_observations"}
AFTER_RETURNS = {"windows", "share_of_days"}


def shelf_of(study: Study, fresh: bool) -> Shelf:
    """Where the study's long results are kept."""
    return shelf_for(study.compute.keep, fresh)


def price_key(study: Study, content: Mapping[str, str]) -> str:
    """Everything that decides the tables and the price panels; '' where that is not known yet.

    What a server answers is not known before it is asked, and a file that is missing never is.

    Args:
        study: the study.
        content: table -> SHA-256 of its file.
    """
    sources = plan.sources(study)
    if not set(sources) <= set(content):
        return ""
    held = {name: content[name] for name in sorted(sources)}
    wanted = (repr(sources), repr(plan.wanted(study)), repr(reach(study)))
    left_out = {"expected_returns", "benchmark_checks"}
    read = _part(study, left_out, AFTER_PRICES | AFTER_RETURNS)
    return json.dumps(["prices", code_digest(), held, wanted, read])


def return_key(study: Study, prices: str) -> str:
    """Everything that decides the abnormal returns of the deals kept; '' without a price key."""
    if not prices:
        return ""
    options = repr(plan.event_options(study))
    return json.dumps(["returns", prices, options, _part(study, set(), AFTER_RETURNS)])


def _part(study: Study, without: set[str], times: set[str]) -> dict[str, Any]:
    left_out: dict[str, Any] = dict.fromkeys(LATER | without, True)
    return study.model_dump(mode="json", by_alias=True, exclude={**left_out, "event_time": times})
