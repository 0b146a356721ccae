"""The treatment's coefficient with who announces modelled in one way after another."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace
from functools import partial

import numpy as np

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Estimate, EstimationFailed, TestResult, t_reach, t_tail
from pipeline.core.findings import InputProblem
from pipeline.core.selection import SelectionVersion
from pipeline.estimators.diagnostics import wald
from pipeline.estimators.errors import CLUSTER, ErrorRule
from pipeline.estimators.least_squares import ols
from pipeline.estimators.probit import ProbitFit, limits
from pipeline.estimators.selection import LAMBDA, heckman_two_step
from pipeline.estimators.selection_bootstrap import CITATION as BOOTSTRAP
from pipeline.estimators.selection_bootstrap import Resampled
from pipeline.estimators.selection_controls import (
    NEWEY,
    OLSEN,
    Control,
    controlled,
    powers,
    straight_line,
)
from pipeline.estimators.selection_ml import heckman_likelihood

NAN = float("nan")
NONE, ERRORS, LIKELIHOOD = "No correction", "Errors of the two steps", "Likelihood"
LEFT_OUT, SHAPE = "One excluded variable left out", "Shape of the correction"
Gives = Callable[[], SelectionVersion]
Fits = Callable[[Design, FitOptions], Estimate]
CORRECTIONS: dict[Fits, str] = {heckman_two_step: LAMBDA, heckman_likelihood: "lambda"}


def versions_of(
    design: Design,
    selection: SelectionRows,
    first: ProbitFit,
    rule: ErrorRule,
    options: FitOptions,
    drawn: Resampled | str,
) -> Iterator[SelectionVersion]:
    """Without the correction, with it under each kind of error, and with other corrections.

    ``rule`` is that of the candidates; ``drawn`` the replications, why there are none, or ''.
    A version that cannot be estimated keeps its row and says why.
    """
    kind = "cluster" if rule.kind == CLUSTER else "hc1"
    robust = _errors(options, kind)

    def fitted(group: str, version: str, fit: Fits, on: Design, asked: FitOptions) -> Gives:
        return partial(_of_estimate, group, version, fit, on, asked)

    plain = _errors(options, kind if design.clusters else "hc1")
    yield _row(NONE, "Least squares", fitted(NONE, "Least squares", ols, design, plain))
    for words, errors in _kinds(rule):
        asked = _errors(options, errors)
        yield _row(ERRORS, words, fitted(ERRORS, words, heckman_two_step, design, asked))
    if drawn:
        yield _resampled(design, drawn, options.level)
    words = "Both equations at once"
    yield _row(LIKELIHOOD, words, fitted(LIKELIHOOD, words, heckman_likelihood, design, robust))
    for name in selection.excluded:
        words, fewer = f"Without {name}", _less(design, selection, name)
        yield _row(LEFT_OUT, words, fitted(LEFT_OUT, words, heckman_two_step, fewer, robust))
    for words, make, source in _shapes(selection, first):
        give = partial(_with_control, design, selection, make, rule, options.level, words, source)
        yield _row(SHAPE, words, give)


def _kinds(rule: ErrorRule) -> Iterator[tuple[str, str]]:
    yield "Corrected formula", "classical"
    yield "Stacked moments, HC1", "hc1"
    if rule.kind == CLUSTER:
        yield "Stacked moments, clustered", "cluster"


def _shapes(
    selection: SelectionRows, first: ProbitFit
) -> tuple[tuple[str, Callable[[], Control], str], ...]:
    return (
        ("Straight line in the probability", partial(straight_line, selection), OLSEN),
        ("Powers of the index, up to 2", partial(powers, selection, first, 2), NEWEY),
        ("Powers of the index, up to 3", partial(powers, selection, first, 3), NEWEY),
    )


def _errors(options: FitOptions, kind: str) -> FitOptions:
    if kind == "cluster":
        return replace(options, covariance="auto", cluster=True)
    return replace(options, covariance=kind, cluster=False)


def _row(kind: str, version: str, give: Gives) -> SelectionVersion:
    """The version, or its row with the reason why it has no number."""
    try:
        return give()
    except EstimationFailed as failure:
        reason = failure.reason
    except InputProblem as refused:
        reason = "; ".join(finding.got for finding in refused.findings)
    return SelectionVersion(kind, version, NAN, NAN, NAN, NAN, 0, NAN, NAN, reason, "")


def _of_estimate(
    kind: str, version: str, fit: Fits, design: Design, options: FitOptions
) -> SelectionVersion:
    column, correction = fit(design, options), CORRECTIONS.get(fit, "")
    term = column.term(column.treatment)
    value = p = NAN
    if correction == LAMBDA:
        found = column.term(LAMBDA)
        value, p = found["coefficient"], found["p_value"]
    elif correction:
        value = column.fit[correction]
        test = column.tests["no_selection"]
        p = test.p_value if isinstance(test, TestResult) else NAN
    return SelectionVersion(
        kind, version, term["coefficient"], term["std_error"], term["ci_low"], term["ci_high"],
        column.n, value, p, "", column.citation,
    )  # fmt: skip


def _resampled(design: Design, drawn: Resampled | str, level: float) -> SelectionVersion:
    kind, version = ERRORS, "Bootstrap of both steps"
    if isinstance(drawn, str):
        return SelectionVersion(kind, version, NAN, NAN, NAN, NAN, 0, NAN, NAN, drawn, BOOTSTRAP)
    at = design.names.index(design.treatment)
    errors, intervals = drawn.errors(), drawn.intervals(level)
    p = t_tail(float(drawn.point[-1] / errors[-1]), float("inf"))
    return SelectionVersion(
        kind, version, float(drawn.point[at]), float(errors[at]), float(intervals[at, 0]),
        float(intervals[at, 1]), design.n, float(drawn.point[-1]), p, "", BOOTSTRAP,
    )  # fmt: skip


def _less(design: Design, selection: SelectionRows, name: str) -> Design:
    """The design with one excluded variable out of the selection equation."""
    keep = [at for at, other in enumerate(selection.names) if other != name]
    fewer = replace(
        selection,
        W=selection.W[:, keep],
        names=tuple(selection.names[at] for at in keep),
        excluded=tuple(other for other in selection.excluded if other != name),
    )
    return replace(design, selection=fewer)


def _with_control(
    design: Design,
    selection: SelectionRows,
    make: Callable[[], Control],
    rule: ErrorRule,
    level: float,
    version: str,
    source: str,
) -> SelectionVersion:
    names, b, V = controlled(design, selection, make(), rule)
    at, k = names.index(design.treatment), len(design.names)
    df, _ = limits(rule)
    error = float(np.sqrt(V[at, at]))
    half = t_reach(level, df) * error
    test = wald("", "", b[k:], V[k:, k:], df)
    p = test.p_value if isinstance(test, TestResult) else NAN
    return SelectionVersion(
        SHAPE, version, float(b[at]), error, float(b[at]) - half,
        float(b[at]) + half, design.n, NAN, p, "", source,
    )  # fmt: skip
