"""Checks of a study that no single key can make."""

from __future__ import annotations

import re
from collections.abc import Iterator
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from pipeline.core.findings import Finding, Severity
from pipeline.registry import ESTIMATORS, EXPECTED_RETURNS, entry
from pipeline.study.bounds import bounds_checks
from pipeline.study.doubt_rules import doubt_checks
from pipeline.study.outcome import outcome_checks
from pipeline.study.papers import papers_checks
from pipeline.study.plan_events import event_checks
from pipeline.study.plan_prices import price_checks
from pipeline.study.plan_returns import returns_checks
from pipeline.study.schema import Study
from pipeline.study.sources import source_checks

# Columns that the results have beside the variables.
TAKEN = {"constant", "in_regression", "_row"}
OUTCOME_NAME = re.compile(r"(car|bhar)_m?\d+_m?\d+")


def cross_checks(study: Study, file: str) -> list[Finding]:
    """All findings about how the parts of a study fit together."""
    return [
        *_windows(study, file),
        *_circles(study, file),
        *_reserved(study, file),
        *_roles(study, file),
        *_columns(study, file),
        *_needs(study, file),
        *_zone(study, file),
        *bounds_checks(study, file),
        *outcome_checks(study, file),
        *event_checks(study, file),
        *price_checks(study, file),
        *source_checks(study, file),
        *doubt_checks(study, file),
        *returns_checks(study, file),
        *papers_checks(study.papers),
    ]


def _error(rule: str, file: str, key: str, got: str, expected: str, remedy: str) -> Finding:
    return Finding(rule, Severity.ERROR, file, got, expected, remedy, column=key)


def _windows(study: Study, file: str) -> Iterator[Finding]:
    estimation = study.event_time.estimation_window
    for window in study.event_time.all_windows:
        if window.overlaps(estimation) or window.start <= estimation.end:
            yield _error(
                "overlapping_windows",
                file,
                "event_time",
                f"window {window.label} and estimation window {estimation.label}",
                f"windows that start after session {estimation.end}",
                f"End the estimation window before session {window.start}, or shorten the window.",
            )
    if len(estimation) < study.event_time.minimum_observations:
        yield _error(
            "bad_value",
            file,
            "event_time.minimum_observations",
            str(study.event_time.minimum_observations),
            f"at most {len(estimation)}, the sessions of the estimation window",
            "Lower it, or lengthen the estimation window.",
        )
    first = min(window.start for window in study.event_time.all_windows)
    for name, item in study.characteristics.items():
        if item.window is not None and item.window[1] >= min(first, 0):
            yield _error(
                "overlapping_windows",
                file,
                f"characteristics.{name}.window",
                f"sessions {item.window[0]} to {item.window[1]}",
                f"sessions that end before {min(first, 0)}, where the event windows begin",
                "A control measured during the event would absorb the reaction: end it earlier.",
            )


def _circles(study: Study, file: str) -> Iterator[Finding]:
    """Interactions that lead back to themselves."""
    made_of = {name: item.interaction or [] for name, item in study.characteristics.items()}
    for name in made_of:
        reached: set[str] = set()
        waiting = list(made_of[name])
        while waiting:
            part = waiting.pop()
            if part not in reached:
                reached.add(part)
                waiting += made_of.get(part, [])
        if name in reached:
            yield _error(
                "bad_value",
                file,
                f"characteristics.{name}.interaction",
                f"{made_of[name]}, which lead back to '{name}'",
                "columns, or characteristics made of others",
                "Give the characteristic another name than what it multiplies.",
            )


def _reserved(study: Study, file: str) -> Iterator[Finding]:
    """Names that the tables of a run give to columns of their own."""
    regression = study.regression
    named = [("characteristics", name) for name in study.characteristics]
    if regression is not None:
        parts = (regression.treatment, *regression.controls, *regression.fixed_effects)
        named += [("regression", name) for name in parts]
    for key, name in dict.fromkeys(named):
        if name in TAKEN or OUTCOME_NAME.fullmatch(name):
            yield _error(
                "reserved_name",
                file,
                key,
                f"'{name}'",
                "a name that no column of the results has",
                f"Give '{name}' another name; a column is renamed under [inputs.columns.deals].",
            )


def _roles(study: Study, file: str) -> Iterator[Finding]:
    regression = study.regression
    if regression is None:
        return
    outcome = [regression.treatment, *regression.controls]
    for name in sorted({name for name in outcome if outcome.count(name) > 1}):
        yield _error(
            "duplicate_variable",
            file,
            "regression.controls",
            f"'{name}' twice among treatment and controls",
            "each variable once",
            f"Take one '{name}' out.",
        )
    for name in (*regression.fixed_effects, *regression.clusters):
        if name in study.characteristics:
            yield _error(
                "bad_value",
                file,
                "regression.fixed_effects",
                f"'{name}', a characteristic",
                "columns of the deals, whose values are groups",
                f"Name a column of the deals in place of '{name}'.",
            )
    if study.report.groups[0] == study.report.groups[1]:
        yield _error(
            "bad_value",
            file,
            "report.groups",
            f"'{study.report.groups[0]}' for both groups",
            "two different words: untreated, treated",
            "Name the two values of the treatment.",
        )
    yield from _instruments(study, file, outcome)
    yield from _also_chosen(study, file)
    yield from _exclusions(study, file, outcome)


def _instruments(study: Study, file: str, outcome: list[str]) -> Iterator[Finding]:
    """Instruments that explain the outcome as well, or move another variable."""
    regression = study.regression
    if study.instruments is not None and regression is not None:
        for name in study.instruments.use:
            if name in outcome or name in regression.fixed_effects:
                yield _error(
                    "instrument_is_control",
                    file,
                    "instruments.use",
                    f"'{name}', which also explains the outcome",
                    "instruments that reach the outcome through the treatment alone",
                    f"Take '{name}' out of regression or out of instruments.use.",
                )
        if study.instruments.treatment != regression.treatment:
            yield _error(
                "bad_value",
                file,
                "instruments.for",
                f"'{study.instruments.treatment}'",
                f"'{regression.treatment}', the treatment of the regression",
                "Name the same variable in both places.",
            )


def _also_chosen(study: Study, file: str) -> Iterator[Finding]:
    """Further variables the instruments move: controls, enough instruments, columns that can."""
    regression, instruments = study.regression, study.instruments
    if regression is None or instruments is None or not instruments.also_for:
        return
    chosen = [regression.treatment, *instruments.also_for]
    for name in instruments.also_for:
        if name not in regression.controls or chosen.count(name) > 1:
            yield _error(
                "bad_value",
                file,
                "instruments.also_for",
                f"'{name}'",
                "names of regression.controls, each once",
                f"Add '{name}' to regression.controls, or take it out of instruments.also_for.",
            )
    if len(instruments.use) < len(chosen):
        yield _error(
            "under_identified",
            file,
            "instruments.use",
            f"{len(instruments.use)} for {len(chosen)} variables ({', '.join(chosen)})",
            f"at least {len(chosen)} instruments",
            "Name more instruments, or take variables out of instruments.also_for.",
        )
    for key in regression.columns:
        known = entry(ESTIMATORS, key)
        if "instruments" in known.needs and not known.several:
            yield _error(
                "bad_value",
                file,
                "regression.columns",
                f"'{key}', which takes one chosen variable",
                "columns for several: two_stage_least_squares and the like",
                f"Take '{key}' out, or take instruments.also_for out.",
            )


def _exclusions(study: Study, file: str, outcome: list[str]) -> Iterator[Finding]:
    """Excluded variables that explain the outcome as well."""
    if study.selection is not None:
        for name in study.selection.excluded:
            if name in outcome:
                yield _error(
                    "excluded_is_control",
                    file,
                    "selection.excluded",
                    f"'{name}', which also explains the outcome",
                    "variables that move the decision to bid and nothing else",
                    f"Take '{name}' out of regression.controls or out of selection.excluded.",
                )


def _columns(study: Study, file: str) -> Iterator[Finding]:
    words = {
        "effects": ("fixed effects", bool(study.regression and study.regression.fixed_effects)),
        "selection": ("[selection]", study.selection is not None),
        "instruments": ("[instruments]", study.instruments is not None),
    }
    for key in study.regression.columns if study.regression else ():
        for need in entry(ESTIMATORS, key).needs:
            name, there = words[need]
            if not there:
                yield _error(
                    "bad_value",
                    file,
                    "regression.columns",
                    f"'{key}' in a study without {name}",
                    f"{name}, which that column is made of",
                    f"Add {name}, or take '{key}' out.",
                )


def _needs(study: Study, file: str) -> Iterator[Finding]:
    parts = {"selection": study.selection, "instruments": study.instruments}
    for name, part in parts.items():
        if part is not None and study.regression is None:
            yield _error(
                "bad_value",
                file,
                name,
                f"[{name}] without [regression]",
                "a regression for it to serve",
                f"Add [regression], or delete [{name}].",
            )
    if study.selection is not None and study.inputs.candidates is None:
        yield _error(
            "bad_value",
            file,
            "inputs.candidates",
            "nothing",
            "the table of companies that could have announced, needed by [selection]",
            "Name the file, or delete [selection].",
        )
    for key in study.expected_returns.all_models:
        if "factors" in entry(EXPECTED_RETURNS, key).needs and study.inputs.factors is None:
            yield _error(
                "bad_value",
                file,
                "inputs.factors",
                "nothing",
                f"the factor returns, needed by {key}",
                f"Name the file, or take {key} out of [expected_returns].",
            )


def _zone(study: Study, file: str) -> Iterator[Finding]:
    zone = study.inputs.timestamp_zone
    if not zone:
        return
    try:
        ZoneInfo(zone)
    except (ZoneInfoNotFoundError, ValueError):
        yield _error(
            "bad_value",
            file,
            "inputs.timestamp_zone",
            f"'{zone}'",
            "the name of a time zone, such as America/New_York",
            "Correct the name.",
        )
