"""Keys about an outcome that the deal list holds already, and how they fit with the others."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from pydantic import Field

from pipeline.core.findings import Finding, Severity
from pipeline.core.outcome import UNIT_KEYS, UNITS
from pipeline.study.part import Part
from pipeline.study.timing import EventTime

if TYPE_CHECKING:
    from pipeline.study.schema import Study

TABLES_READ = ("deals", "candidates", "restricted")
ASKED_OF_RETURNS = (
    "event_time",
    "expected_returns",
    "tests",
    "placebo",
    "calendars",
    "series",
    "currency",
    "screens",
    "benchmark_checks",
    "calendar_time",
    "matched_control",
)
WEIGHTED = "variance_weighted"
MOST_CLUSTERS = 2


class Outcome(Part):
    """An outcome computed elsewhere, such as a bid premium, in place of measured returns."""

    column: str = Field(min_length=1, description="The deal list's column that holds it.")
    unit: Literal[UNIT_KEYS] = Field(  # type: ignore[valid-type]
        description="What its cells are in: a premium of 35% is 35 in percent, 0.35 in decimal, "
        "3500 in basis points, 1.35 as a price ratio; log points are hundredths of a logarithm; "
        f"money is in report.currency. One of: {', '.join(UNIT_KEYS)}."
    )
    label: str = Field("", description="How it is called on a page; the column's name if empty.")
    standard_error: str = Field(
        "", description="Column of its known standard error, in the same unit."
    )
    date: str = Field(
        "", description="Column of dates; deals of one date are then taken to move together."
    )
    share_of: str = Field(
        "", description="Column of money that the outcome is a share of, to state it in money."
    )
    unit_is_certain: bool = Field(
        False, description="Keep the unit although the size of the cells speaks against it."
    )

    @property
    def columns(self) -> tuple[str, ...]:
        """The columns of the deal list it names."""
        named = (self.column, self.standard_error, self.date, self.share_of)
        return tuple(name for name in named if name)


def outcome_checks(study: Study, file: str) -> Iterator[Finding]:
    """How an outcome fits with what else the study asks for."""
    if study.outcome is None:
        yield from _prices_needed(study, file)
        return
    yield from _nothing_measured(study, file)
    yield from _own_columns(study.outcome, study, file)
    yield from _with_regression(study.outcome, study, file)


def _error(rule: str, file: str, key: str, got: str, expected: str, remedy: str) -> Finding:
    return Finding(rule, Severity.ERROR, file, got, expected, remedy, column=key)


def _prices_needed(study: Study, file: str) -> Iterator[Finding]:
    for name in ("prices", "benchmarks"):
        if getattr(study.inputs, name) is None:
            yield _error(
                "bad_value",
                file,
                f"inputs.{name}",
                "nothing",
                f"a value for 'inputs.{name}'",
                f"Add inputs.{name}, or, if the deal list holds the outcome, an [outcome] table.",
            )


def _nothing_measured(study: Study, file: str) -> Iterator[Finding]:
    """Keys that ask for returns, in a study that measures none."""
    remedy = "Delete it, or delete [outcome] to have returns measured from prices."
    expected = "nothing: the outcome is taken from the deal list and no return is measured"
    for name, path in study.inputs:
        if isinstance(path, Path) and name not in TABLES_READ:
            got = f"a file of {name} beside [outcome]"
            yield _error("outcome_and_returns", file, f"inputs.{name}", got, expected, remedy)
    for name in ASKED_OF_RETURNS:
        if _without_side(getattr(study, name)) != type(study).model_fields[name].get_default(
            call_default_factory=True
        ):
            got = f"[{name}] beside [outcome]"
            yield _error("outcome_and_returns", file, name, got, expected, remedy)
    for name, item in study.characteristics.items():
        if item.price is not None:
            yield _error(
                "outcome_and_returns",
                file,
                f"characteristics.{name}.price",
                f"a measure made from prices ('{item.price}') beside [outcome]",
                "a column of the deal list",
                "Add its values to the deal list as a column, or take the characteristic out.",
            )


def _without_side(part: object) -> object:
    """A part of the study but for the side of the deals, which speaks of the deal list."""
    return part.model_copy(update={"side": ""}) if isinstance(part, EventTime) else part


def _own_columns(asked: Outcome, study: Study, file: str) -> Iterator[Finding]:
    for name in sorted({name for name in asked.columns if asked.columns.count(name) > 1}):
        yield _error(
            "duplicate_variable",
            file,
            "outcome",
            f"'{name}' twice",
            "a column of its own for each of column, standard_error, date and share_of",
            "Correct one of them.",
        )
    if asked.column in study.characteristics:
        yield _error(
            "bad_value",
            file,
            "outcome.column",
            f"'{asked.column}', which is also a characteristic",
            "a column of the deal list that no characteristic is called after",
            f"Give the characteristic '{asked.column}' another name.",
        )
    if asked.unit == "money" and not study.report.currency:
        yield _error(
            "bad_value",
            file,
            "report.currency",
            "nothing",
            "the currency with its scale, such as USD million, of an outcome in money",
            "Add it under [report].",
        )
    if asked.share_of and not UNITS[asked.unit].relative:
        yield _error(
            "bad_value",
            file,
            "outcome.share_of",
            f"'{asked.share_of}' for an outcome in the unit {asked.unit}",
            "an outcome in percent or another relative unit",
            "Delete share_of, or correct the unit.",
        )


def _with_regression(asked: Outcome, study: Study, file: str) -> Iterator[Finding]:
    regression = study.regression
    if regression is None:
        return
    if asked.column in (regression.treatment, *regression.controls):
        yield _error(
            "duplicate_variable",
            file,
            "regression",
            f"'{asked.column}', the outcome, among treatment and controls",
            "variables other than the outcome",
            f"Take '{asked.column}' out of [regression].",
        )
    if regression.expected_gain:
        yield _error(
            "outcome_and_returns",
            file,
            "regression.expected_gain",
            "true, beside [outcome]",
            "false: only a return can be a surprise to those who foresaw the deal",
            "Delete it.",
        )
    if asked.date and len({asked.date, *regression.clusters}) > MOST_CLUSTERS:
        yield _error(
            "cluster_dimensions",
            file,
            "regression.clusters",
            f"{' and '.join(regression.clusters)}, and the date of [outcome]",
            f"at most {MOST_CLUSTERS} dimensions, the date among them",
            "Take one cluster out, or delete outcome.date.",
        )
    if WEIGHTED in regression.columns and not asked.standard_error:
        yield _error(
            "no_outcome_variance",
            file,
            "outcome.standard_error",
            f"nothing, and the column '{WEIGHTED}'",
            "the column of the deal list that holds each outcome's standard error",
            f"Name it, or take '{WEIGHTED}' out of regression.columns.",
        )
