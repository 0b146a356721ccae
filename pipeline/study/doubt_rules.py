"""Checks of the doubts a study asks for, before any table is read."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from pipeline.core.findings import Finding, Severity
from pipeline.registry import ESTIMATORS, entry
from pipeline.study.questions import Regression
from pipeline.study.schema import Study


def doubt_checks(study: Study, file: str) -> Iterator[Finding]:
    """Findings about variables, columns and shares that the scrutiny names."""
    regression = study.regression
    if regression is None:
        return
    yield from _names(study, regression, file)
    yield from _shares(study, file)
    yield from _estimators(study, regression, file)
    if study.scrutiny.reverse and study.instruments is None:
        yield _error(
            "reverse_instrument",
            file,
            "scrutiny.reverse",
            "a study without [instruments]",
            "instruments, which tell what the choice does to the return",
            "Add [instruments], or take scrutiny.reverse out.",
        )


def _error(rule: str, file: str, key: str, got: str, expected: str, remedy: str) -> Finding:
    return Finding(rule, Severity.ERROR, file, got, expected, remedy, column=key)


def _names(study: Study, regression: Regression, file: str) -> Iterator[Finding]:
    asked = study.scrutiny
    controls = regression.controls
    some = f"some of {', '.join(controls)}" if controls else "controls, of which the study has none"
    lists: tuple[tuple[str, str, Iterable[str], Iterable[str]], ...] = (
        ("benchmark_not_control", "benchmarks", asked.benchmarks, controls),
        (
            "reliability_variable",
            "reliability",
            asked.reliability,
            (regression.treatment, *controls),
        ),
        (
            "grid_control",
            "grid.control_sets",
            (name for names in asked.grid.control_sets for name in names),
            controls,
        ),
        ("reverse_instrument", "reverse", asked.reverse, controls),
    )
    for rule, key, names, known in lists:
        for name in dict.fromkeys(names):
            if name not in known:
                yield _error(
                    rule,
                    file,
                    f"scrutiny.{key}",
                    f"'{name}', which is not a control of the study",
                    some,
                    f"Add '{name}' to regression.controls, or take it out here.",
                )


def _shares(study: Study, file: str) -> Iterator[Finding]:
    for name, value in study.scrutiny.reliability.items():
        if not 0 < value <= 1:
            yield _error(
                "reliability_range",
                file,
                f"scrutiny.reliability.{name}",
                f"{value:g}",
                "a share above 0 and at most 1",
                "Give true over recorded variance, for example from two independent records.",
            )
    for share in study.scrutiny.grid.winsorise:
        if not 0 <= share <= 0.25:
            yield _error(
                "winsorise_range",
                file,
                "scrutiny.grid.winsorise",
                f"{share:g}",
                "shares from 0 to .25",
                "Give the share of deals at either end.",
            )


def _estimators(study: Study, regression: Regression, file: str) -> Iterator[Finding]:
    has = {
        "effects": bool(regression.fixed_effects),
        "selection": study.selection is not None,
        "instruments": study.instruments is not None,
    }
    for key in study.scrutiny.grid.estimators:
        needs = entry(ESTIMATORS, key).needs
        lacking = [need for need in needs if not has.get(need, True)]
        if lacking or "selection" in needs:
            yield _error(
                "bad_value",
                file,
                "scrutiny.grid.estimators",
                f"'{key}', which needs {' and '.join(lacking) or 'the candidates of every cell'}",
                "estimators that the study's deals alone can make",
                f"Take '{key}' out of the grid.",
            )
