"""Runs that were put to every doubt: one from a real scrutiny, and tables of breakdowns by hand."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pandas as pd

from pipeline.core.design import FitOptions
from pipeline.core.results import Results
from pipeline.core.scrutiny import sensitivity_frame, table_frames
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.scrutiny.options import ScrutinyOptions
from pipeline.scrutiny.scrutinise import scrutinise
from tests.estimators.designs import deals, one_cluster_dimension, without
from tests.report.runs import full_run, with_frames

BASE, LEAD = "least-squares effect of Paid in shares", "effect of Paid in shares"


@cache
def doubted_run() -> Results:
    """60 deals on the page, the columns and doubts of an invented sample with two instruments."""
    design = one_cluster_dimension(without(deals(candidates=400), "selection"))
    design = replace(design, y=design.y - 0.03 * design.X[:, 1])
    columns = tuple(
        fit(design, FitOptions()) for fit in (ols, fixed_effects, two_stage_least_squares)
    )
    options = ScrutinyOptions(
        resamples=60,
        reliability={"run_up": 0.9},
        simex=True,
        reverse=("run_up",),
        labels={"paid_in_shares": "Paid in shares"},
    )
    found = scrutinise(design, columns, 2, options)
    run = full_run()
    sensitivity = pd.concat(
        [run.sensitivity.assign(target="mean reaction"), sensitivity_frame(found.variants)],
        ignore_index=True,
    )
    made = with_frames(replace(run, columns=columns, lead=2, sensitivity=sensitivity))
    return replace(made, tables={**made.tables, **found.tables})


def with_breakdowns(*rows: tuple[str, str, float], lead_instrumented: bool = True) -> Results:
    """The run with breakdowns (target, key, value) written by hand."""
    told = {
        "exclusion_zero": ("share", 0.1, "the instruments do {} of it by another way"),
        "exclusion_least_squares": ("share", 0.1, "the instruments do {} of it by another way"),
        "exclusion_difference": ("share", 0.1, "the instruments do {} of it by another way"),
        "confounder_interval": ("share", 0.02, "a hidden factor explains {} of what is left"),
        "hidden_odds": ("odds", 1.5, "one of two like deals is {} times as likely to have it"),
        "fewest_deals": ("share", 0.05, "{} of the deals are left out"),
    }
    frame = [
        {
            "key": key,
            "target": target,
            "statement": "It stands",
            "assumption": f"Nothing speaks against {key.replace('_', ' ')}",
            "needed": told[key][2],
            "value": value,
            "unit": told[key][0],
            "wanted": told[key][1],
            "compared": "what is usual",
            "verdict": "gives" if abs(value) <= told[key][1] else "holds",
            "source": "Author 2020",
        }
        for target, key, value in rows
    ]
    run = doubted_run()
    tables = {**run.tables, **table_frames({"breakdowns": frame})}
    return replace(run, lead=2 if lead_instrumented else 0, tables=tables)


def no_ends(run: Results) -> Results:
    """The run with unbounded instrumented intervals."""
    tables = dict(run.tables)
    tables["violations"] = tables["violations"].assign(ci_low=-np.inf, ci_high=np.inf)
    sensitivity = run.sensitivity.copy()
    of_lead = sensitivity["target"] == LEAD
    sensitivity.loc[of_lead, "ci_low"] = -np.inf
    sensitivity.loc[of_lead, "ci_high"] = np.inf
    return replace(run, tables={**tables, "sensitivity": sensitivity}, sensitivity=sensitivity)
