"""What a study asks of the scrutiny, in its own terms. No data is read here."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from pipeline.core.design import FitOptions
from pipeline.core.prices import Integers
from pipeline.scrutiny.anticipation import Expected
from pipeline.scrutiny.directions import Suspect
from pipeline.scrutiny.options import ScrutinyOptions
from pipeline.study.plan import labels
from pipeline.study.schema import Study

LEFT_OUT = ("security", "day_zero")
"""Columns of every deal list whose groups are left out in turn: company and announcement day."""
OWN_WORDS = {"security": "company", "day_zero": "announcement day"}
UNMEASURED: Mapping[str, Any] = {
    "misplaced": (),
    "expected": (),
    "known_before": (),
    "completion": (),
}
"""Doubts about announcements, which an outcome that came with the deals does not raise."""


def scrutiny_options(
    study: Study,
    groups: Mapping[str, Sequence[str]],
    dimensions: Mapping[str, Integers] | None = None,
) -> ScrutinyOptions:
    """The doubts to go through; ``groups`` gives the words of the codes of each dimension.

    ``dimensions`` are ways to group the deals beside the design's clusters and effects.
    """
    asked = study.scrutiny
    about: dict[str, Any] = {
        "misplaced": tuple(asked.misplaced),
        "expected": tuple(Expected(one, none) for one, none in asked.known_unequally),
        "known_before": tuple(asked.known_before),
        "completion": tuple(asked.completion),
    }
    return ScrutinyOptions(
        fit=FitOptions(level=study.level),
        suspects=tuple(
            Suspect(item.factor, item.on_outcome, item.on_treatment, item.evidence)
            for item in asked.suspects
        ),
        reliability=dict(asked.reliability),
        benchmarks=tuple(asked.benchmarks),
        multiples=tuple(asked.multiples),
        largest_r2=tuple(asked.largest_r2),
        violations=tuple(asked.violations),
        misclassified=tuple((missed, false) for missed, false in asked.misclassified),
        correlations=tuple(asked.correlations),
        resamples=asked.resamples,
        simex=asked.simulate_errors,
        seed=study.seed,
        labels={**OWN_WORDS, **labels(study)},
        groups=groups,
        dimensions=dimensions or {},
        reverse=tuple(asked.reverse),
        outcome="return" if study.outcome is None else labels(study)[study.outcome.column],
        **(about if study.outcome is None else UNMEASURED),
    )
