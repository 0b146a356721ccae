"""One coefficient under every treatment of its errors: how much hangs on who moves with whom."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed, Shape
from pipeline.core.findings import InputProblem
from pipeline.estimators import wild, wild_two_way
from pipeline.estimators.errors import choose_errors
from pipeline.estimators.least_squares import fixed_effects, ols
from pipeline.estimators.sample import Sample, plain, within

NAN = float("nan")
FEW_TREATED = 3
FEW_EITHER_WAY = 20
"""Below it the two-way bootstrap was measured to reject 7 to 9% at a nominal 5%."""


@dataclass(frozen=True, slots=True)
class Rung:
    """One treatment of the errors of one coefficient.

    Attributes:
        name: the covariance or bootstrap, in words.
        std_error: in the coefficient's unit; NaN where there is none.
        df: degrees of freedom of t; NaN for a bootstrap.
        p: two-sided, of a coefficient of zero.
        low, high: the interval at the level asked for; infinite ends where nothing is rejected.
        note: what a reader must know, or why the rung is empty.
    """

    name: str
    std_error: float
    df: float
    p: float
    low: float
    high: float
    note: str = ""


def ladder(design: Design, options: FitOptions, *, draws: int = wild.DRAWS) -> tuple[Rung, ...]:
    """The treatment's coefficient of least squares, its error and p under one assumption each.

    The design's effects are absorbed if it has any. Rungs, in order: HC1 and HC3; for each
    cluster dimension CR1 with t(G - 1), CR2 with Satterthwaite's degrees of freedom, CR3 with
    t(G - 1) and the wild cluster restricted bootstrap (with few clusters also on Webb's six
    weights); two dimensions at once for each pair, with t and with the bootstrap. The
    coefficient is the same on every rung.
    A rung that has no answer says why in its note. ``options`` give the level alone.

    Sources: those of the covariances (:mod:`~pipeline.estimators.covariance`,
    :mod:`~pipeline.estimators.few_clusters`, :mod:`~pipeline.estimators.wild`,
    :mod:`~pipeline.estimators.wild_two_way`); the report of
    several levels side by side follows Cameron and Miller (2015).

    Raises:
        InputProblem: whatever keeps the coefficient itself from being estimated.
        EstimationFailed: likewise.
    """
    _fit(design, FitOptions(level=options.level, covariance="hc1"))
    return tuple(_rungs(design, options.level, draws))


def _fit(design: Design, options: FitOptions) -> Rung:
    fit = fixed_effects if design.effects else ols
    column = fit(design, options)
    term = column.term(design.treatment)
    return Rung(
        name=column.covariance_name,
        std_error=term["std_error"],
        df=column.df,
        p=term["p_value"],
        low=term["ci_low"],
        high=term["ci_high"],
        note=" ".join(note for note in column.notes if "cluster" in note.lower()),
    )


def _rungs(design: Design, level: float, draws: int) -> Iterator[Rung]:
    yield _tried(design, FitOptions(level=level, covariance="hc1"), "HC1")
    if len(design.effects) > 1:
        yield _empty("HC3", "Not made where several effects are absorbed.")
    else:
        yield _tried(design, FitOptions(level=level, covariance="hc3"), "HC3")
    names = list(design.clusters)
    for name in names:
        one = replace(design, clusters={name: design.clusters[name]})
        lonely = _varies_in_few(design, name)
        for kind in ("cr1", "cr2", "cr3"):
            options = FitOptions(level=level, cluster=True)
            if kind != "cr1":
                options = FitOptions(level=level, covariance=kind)
            rung = _tried(one, options, f"clustered by {name} ({kind.upper()})")
            yield _with_note(rung, lonely)
        for rung in _bootstraps(one, name, level, draws):
            yield _with_note(rung, lonely)
    for at, first in enumerate(names):
        for second in names[at + 1 :]:
            pair = {n: design.clusters[n] for n in (first, second)}
            both = FitOptions(level=level, cluster=True)
            label = f"two-way clustered by {first} and {second}"
            joint = replace(design, clusters=pair)
            yield _tried(joint, both, label)
            yield _two_way_bootstrap(joint, level, draws)


def _varies_in_few(design: Design, name: str) -> str:
    """A sentence when the treatment leaves its commonest value in three clusters or fewer.

    No treatment of the errors holds its level then: some reject far too often, others hardly
    ever (MacKinnon and Webb 2017, from memory).
    """
    column = design.X[:, design.names.index(design.treatment)]
    values, counts = np.unique(column, return_counts=True)
    unusual = column != values[int(counts.argmax())]
    found = len(np.unique(design.clusters[name][unusual]))
    if found > FEW_TREATED:
        return ""
    return (
        f"{design.treatment} differs from its commonest value in {found} of the clusters by "
        f"{name}: no error or bootstrap holds its level here."
    )


def _with_note(rung: Rung, note: str) -> Rung:
    return replace(rung, note=f"{rung.note} {note}".strip())


def _tried(design: Design, options: FitOptions, name: str) -> Rung:
    try:
        return _fit(design, options)
    except InputProblem as problem:
        finding = problem.findings[0]
        return _empty(name, f"{finding.got}: {finding.remedy}")
    except EstimationFailed as failure:
        return _empty(name, failure.reason)


def _empty(name: str, note: str) -> Rung:
    return Rung(name, NAN, NAN, NAN, NAN, NAN, note)


def _bootstraps(design: Design, name: str, level: float, draws: int) -> Iterator[Rung]:
    """The bootstrap on signs and, with few clusters, on six points, which give finer p-values."""
    label = f"wild cluster bootstrap by {name}"
    try:
        sample = _clustered(design)
    except InputProblem as problem:
        yield _empty(label, problem.findings[0].got)
        return
    ((_, codes),) = sample.rule.clusters.items()
    (groups,) = sample.rule.counts.values()
    kinds = (wild.SIGNS, wild.WEBB) if groups <= wild.FEW_FOR_SIGNS else (wild.SIGNS,)
    for kind in kinds:
        title = f"{label}, six-point weights" if kind == wild.WEBB else label
        try:
            found = wild.bootstrap(sample, design, codes, level=level, draws=draws, kind=kind)
        except InputProblem as problem:
            yield _empty(title, problem.findings[0].got)
            continue
        yield _rung(title, found)


def _two_way_bootstrap(design: Design, level: float, draws: int) -> Rung:
    """Weights by the dimension with fewer clusters, errors by both."""
    label = f"wild cluster bootstrap of two-way errors, by {' and '.join(design.clusters)}"
    try:
        sample = _clustered(design)
        first, second = sample.rule.clusters.values()
        found = wild_two_way.bootstrap(sample, design, first, second, level=level, draws=draws)
    except InputProblem as problem:
        return _empty(label, problem.findings[0].got)
    rung = _rung(label, found)
    fewest = min(sample.rule.counts.values())
    note = f"With {fewest} clusters in one dimension it may still reject somewhat too often."
    return _with_note(rung, note) if fewest < FEW_EITHER_WAY else rung


def _clustered(design: Design) -> Sample:
    if design.effects:
        return within(design, FitOptions(cluster=True))
    rule = choose_errors(design.clusters, design.n, FitOptions(cluster=True), otherwise="hc1")
    return plain(design, rule)


def _rung(title: str, found: wild.Bootstrapped) -> Rung:
    line = found.set.shape is Shape.LINE
    low, high = (-float("inf"), float("inf")) if line else (found.set.low, found.set.high)
    notes = [f"All {found.draws} sign vectors." if found.enumerated else f"{found.draws} draws."]
    if line:
        notes.append("No value of the coefficient is rejected: there are too few clusters.")
    return Rung(title, found.std_error, NAN, found.p_value, low, high, " ".join(notes))
