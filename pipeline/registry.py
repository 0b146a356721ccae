"""The one table of everything a study file may name.

An entry names its function by dotted path, so that nothing heavy is imported before it is used.
Adding an estimator, a test, a model, a measure or a format is one file and one line here.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from importlib import import_module
from typing import Any

EXPECTED_RETURNS = "expected_returns"
TESTS = "tests"
PRICE_MEASURES = "price_measures"
ESTIMATORS = "estimators"
FORMATS = "formats"


@dataclass(frozen=True, slots=True)
class Entry:
    """A thing a study file may name.

    ``needs`` lists parts of the study without which the entry makes no sense (estimators:
    ``effects``, ``selection``, ``instruments``; models: factor columns). ``answers`` ranks the
    estimators by how much of the choice of the treatment they account for (who announces is
    another choice): the highest one leads the finding.
    ``why`` says in a clause what a test is chosen for, to follow "chosen because it"; ``assumes``
    names what the test takes for granted, checked against each sample. An entry that is not
    ``default`` is used only when the study names it; one that ``resamples`` is left out where a
    test is repeated many times. A model of ``one_session`` needs returns that cover one session
    each. ``several`` says that an instrumented column takes further
    endogenous variables beside the treatment.
    """

    key: str
    path: str
    needs: tuple[str, ...] = ()
    answers: int = 0
    why: str = ""
    assumes: tuple[str, ...] = ()
    default: bool = True
    resamples: bool = False
    several: bool = False
    one_session: bool = False

    def load(self) -> Callable[..., Any]:
        """Import the function the entry names."""
        module, _, name = self.path.partition(":")
        function: Callable[..., Any] = getattr(import_module(module), name)
        return function


TABLE: dict[str, tuple[Entry, ...]] = {
    EXPECTED_RETURNS: (
        Entry("market_model", "pipeline.returns.expected:market_model"),
        Entry("market_adjusted", "pipeline.returns.expected:market_adjusted"),
        Entry("constant_mean", "pipeline.returns.expected:constant_mean"),
        Entry("factor_model", "pipeline.returns.expected:factor_model", needs=("factors",)),
        Entry("excess_return", "pipeline.returns.expected:excess_return", needs=("factors",)),
        Entry("local_and_global", "pipeline.returns.expected:local_and_global", needs=("factors",)),
        Entry(
            "peer_adjusted",
            "pipeline.returns.expected:peer_adjusted",
            needs=("peers",),
            one_session=True,
        ),
        Entry("scholes_williams", "pipeline.returns.expected:scholes_williams", one_session=True),
        Entry("dimson", "pipeline.returns.expected:dimson", one_session=True),
        Entry("huber", "pipeline.returns.expected:huber", one_session=True),
    ),
    TESTS: (
        Entry(
            "dependence_adjusted",
            "pipeline.significance.parametric:dependence_adjusted",
            why="allows for deals that move together and for variance that rises at the event",
        ),
        Entry(
            "standardised",
            "pipeline.significance.parametric:standardised_cross_sectional",
            why="weighs deals by precision and stays right when variance rises at the event",
            assumes=("independent",),
        ),
        Entry(
            "cross_sectional",
            "pipeline.significance.parametric:cross_sectional",
            why="uses the deals' own spread, so a rise of variance at the event does no harm",
            assumes=("independent",),
        ),
        Entry(
            "patell",
            "pipeline.significance.parametric:patell",
            why="weighs each deal by how precisely its return is forecast",
            assumes=("independent", "constant_variance"),
        ),
        Entry(
            "time_series",
            "pipeline.significance.parametric:time_series",
            why="takes dependence from the portfolio's own daily series",
            assumes=("one_date", "constant_variance"),
        ),
        Entry(
            "joint_date",
            "pipeline.significance.joint_date:joint_date",
            why="takes dependence among deals of one date from their joint residuals",
            assumes=("one_date", "constant_variance"),
        ),
        Entry(
            "rank",
            "pipeline.significance.ranks:rank",
            why="needs no normal returns",
            assumes=("aligned", "constant_variance"),
        ),
        Entry(
            "generalised_rank",
            "pipeline.significance.ranks:generalised_rank",
            why="needs no normal returns and allows for variance that rises at the event",
            assumes=("aligned", "symmetric_before"),
        ),
        Entry(
            "generalised_sign",
            "pipeline.significance.ranks:generalised_sign",
            why="asks how many deals rise, whatever the size",
            assumes=("independent",),
        ),
        Entry(
            "signed_rank",
            "pipeline.significance.ranks:signed_rank",
            why="needs no normal returns",
            assumes=("independent", "symmetric"),
        ),
        Entry(
            "skewness_adjusted",
            "pipeline.significance.resampled:skewness_adjusted",
            why="allows for skewed returns",
            assumes=("independent",),
            resamples=True,
        ),
        Entry(
            "date_bootstrap",
            "pipeline.significance.resampled:date_bootstrap",
            why="resamples whole dates, so that deals of one date may move together",
            assumes=("aligned",),
            resamples=True,
        ),
        Entry(
            "single_event",
            "pipeline.significance.parametric:single_event",
            why="is made for one deal with normal returns",
        ),
        Entry(
            "sample_quantile",
            "pipeline.significance.resampled:sample_quantile",
            why="compares a handful of deals with their own past, whatever the distribution",
        ),
        Entry(
            "dependence_adjusted_patell",
            "pipeline.significance.parametric:dependence_adjusted_patell",
            why="weighs deals by precision and allows for those that move together",
            assumes=("constant_variance",),
            default=False,
        ),
        Entry(
            "rank_event_variance",
            "pipeline.significance.ranks:rank_event_variance",
            why="needs no normal returns and allows for variance that rises at the event",
            assumes=("aligned", "symmetric_daily"),
            default=False,
        ),
        Entry(
            "generalised_rank_z",
            "pipeline.significance.ranks:generalised_rank_z",
            why="needs no normal returns and allows for variance that rises at the event",
            assumes=("independent", "symmetric_before"),
            default=False,
        ),
        Entry(
            "skewness_transformed",
            "pipeline.significance.resampled:skewness_transformed",
            why="allows for skewed returns",
            assumes=("independent",),
            default=False,
            resamples=True,
        ),
        Entry(
            "deal_bootstrap",
            "pipeline.significance.resampled:deal_bootstrap",
            why="takes the distribution of the mean from the deals themselves",
            assumes=("independent",),
            default=False,
            resamples=True,
        ),
    ),
    PRICE_MEASURES: (
        Entry("run_up", "pipeline.characteristics.measures:run_up"),
        Entry("volatility", "pipeline.characteristics.measures:volatility"),
        Entry("beta", "pipeline.characteristics.measures:beta"),
        Entry("illiquidity", "pipeline.characteristics.measures:illiquidity"),
    ),
    ESTIMATORS: (
        Entry("ols", "pipeline.estimators.least_squares:ols", answers=1),
        Entry(
            "fixed_effects",
            "pipeline.estimators.least_squares:fixed_effects",
            needs=("effects",),
            answers=2,
        ),
        Entry(
            "heckman_two_step",
            "pipeline.estimators.selection:heckman_two_step",
            needs=("selection",),
            answers=1,
        ),
        Entry(
            "two_stage_least_squares",
            "pipeline.estimators.instruments:two_stage_least_squares",
            needs=("instruments",),
            answers=4,
            several=True,
        ),
        Entry(
            "heckman_likelihood",
            "pipeline.estimators.selection_ml:heckman_likelihood",
            needs=("selection",),
            answers=1,
            default=False,
        ),
        Entry(
            "weighting",
            "pipeline.estimators.weighting:weighting",
            answers=1,
            default=False,
        ),
        Entry(
            "weighting_treated",
            "pipeline.estimators.weighting:weighting_treated",
            answers=1,
            default=False,
        ),
        Entry(
            "entropy_balancing",
            "pipeline.estimators.weighting:entropy_balancing",
            answers=1,
            default=False,
        ),
        Entry(
            "matching",
            "pipeline.estimators.matching:matching",
            answers=1,
            default=False,
        ),
        Entry(
            "matching_treated",
            "pipeline.estimators.matching:matching_treated",
            answers=1,
            default=False,
        ),
        Entry(
            "doubly_robust",
            "pipeline.estimators.doubly_robust:doubly_robust",
            answers=1,
            default=False,
        ),
        Entry(
            "doubly_robust_treated",
            "pipeline.estimators.doubly_robust:doubly_robust_treated",
            answers=1,
            default=False,
        ),
        Entry(
            "partially_linear",
            "pipeline.estimators.doubly_robust:partially_linear",
            answers=1,
            default=False,
        ),
        Entry(
            "treatment_two_step",
            "pipeline.estimators.treatment:treatment_two_step",
            needs=("instruments",),
            answers=3,
            default=False,
        ),
        Entry(
            "treatment_likelihood",
            "pipeline.estimators.treatment_ml:treatment_likelihood",
            needs=("instruments",),
            answers=3,
            default=False,
        ),
        Entry(
            "switching_regression",
            "pipeline.estimators.switching:switching_regression",
            needs=("instruments",),
            answers=3,
            default=False,
        ),
        Entry(
            "fitted_probability_instrument",
            "pipeline.estimators.treatment:fitted_probability_instrument",
            needs=("instruments",),
            answers=4,
            default=False,
        ),
        Entry(
            "selection_two_stage",
            "pipeline.estimators.selection_iv:selection_two_stage",
            needs=("selection", "instruments"),
            answers=5,
            default=False,
        ),
        Entry(
            "variance_weighted",
            "pipeline.estimators.variance_weighted:variance_weighted",
            answers=1,
            default=False,
        ),
        Entry(
            "median",
            "pipeline.estimators.robust_location:median",
            answers=1,
            default=False,
        ),
        Entry(
            "huber",
            "pipeline.estimators.robust_location:huber",
            answers=1,
            default=False,
        ),
        Entry(
            "limited_information",
            "pipeline.estimators.k_class:limited_information",
            needs=("instruments",),
            answers=4,
            several=True,
            default=False,
        ),
        Entry(
            "fuller",
            "pipeline.estimators.k_class:fuller",
            needs=("instruments",),
            answers=4,
            several=True,
            default=False,
        ),
        Entry(
            "two_step_gmm",
            "pipeline.estimators.gmm:two_step_gmm",
            needs=("instruments",),
            answers=4,
            several=True,
            default=False,
        ),
    ),
    FORMATS: (
        Entry("html", "pipeline.report.html:render"),
        Entry("docx", "pipeline.report.docx:render"),
        Entry("xlsx", "pipeline.report.xlsx:render"),
        Entry("tex", "pipeline.report.tex:render"),
        Entry("svg", "pipeline.report.svg:render"),
        Entry("pdf", "pipeline.report.pdf:render", default=False),
    ),
}


def keys(kind: str) -> tuple[str, ...]:
    """The names of one kind, in the table's order."""
    return tuple(entry.key for entry in TABLE[kind])


def entry(kind: str, key: str) -> Entry:
    """The entry of that kind and name.

    Raises:
        KeyError: if there is none.
    """
    for candidate in TABLE[kind]:
        if candidate.key == key:
            return candidate
    raise KeyError(f"{kind}: {key}")
