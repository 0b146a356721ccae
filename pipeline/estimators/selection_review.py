"""What reviewers ask of a selection model, answered in one place.

The list follows Lennox, Francis and Wang (2012) and Leung and Yu (1996): the first stage in full,
whether the excluded variables move announcing, whether the correction can be told apart from the
regressors, and whether the answer survives other ways to write the model.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import Estimate, EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.core.selection import FirstStageTerm, LikelihoodPoint, SelectionReview
from pipeline.estimators.errors import choose_errors
from pipeline.estimators.likelihood_maximum import survey
from pipeline.estimators.marginal import average_effects
from pipeline.estimators.probit import Equation, ProbitFit, fit_probit, probit_estimate
from pipeline.estimators.selection_bootstrap import Resampled, bootstrap_both_steps
from pipeline.estimators.selection_checks import checklist
from pipeline.estimators.selection_ml import joint_model
from pipeline.estimators.selection_rows import checked_selection
from pipeline.estimators.selection_versions import versions_of

NAN = float("nan")


def review_selection(design: Design, options: FitOptions, draws: int) -> SelectionReview:
    """The review of the design's selection model; ``draws`` replications of both steps, 0 for none.

    Errors of the first stage and of the versions are clustered if the candidates have clusters,
    HC1 otherwise; the corrected two-step covariance stands beside them. A version that cannot be
    estimated keeps its row and says why.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.selection.heckman_two_step`.
        EstimationFailed: if the probit does not converge.
    """
    free = replace(options, allow_functional_form=True, covariance="auto", cluster=False)
    selection = checked_selection(design)
    rule = choose_errors(
        selection.clusters,
        len(selection.selected),
        free,
        otherwise="hc1",
        cluster_by_default=True,
        supported=("hc1",),
    )
    key = (*selection.excluded, *selection.names[::-1])[0]
    equation = Equation(selection.selected, selection.W, selection.names, "announcing a deal", key)
    first = fit_probit(equation)
    stage = probit_estimate(first, equation, rule, free)
    drawn = _drawn(design, selection, first, equation, draws, options.seed)
    resampled = drawn if isinstance(drawn, Resampled) else None
    return SelectionReview(
        _first_stage(stage, selection),
        checklist(design, free, stage, resampled),
        tuple(versions_of(design, selection, first, rule, free, drawn)),
        _likelihood(design, selection),
    )


def _drawn(
    design: Design,
    selection: SelectionRows,
    first: ProbitFit,
    equation: Equation,
    draws: int,
    seed: int,
) -> Resampled | str:
    if not draws:
        return ""
    try:
        return bootstrap_both_steps(design, selection, first, equation, draws, seed)
    except EstimationFailed as failure:
        return failure.reason


def _first_stage(stage: Estimate, selection: SelectionRows) -> tuple[FirstStageTerm, ...]:
    effects = {
        found.name: found
        for found in average_effects(
            selection.W, selection.names, stage.coefficients, stage.covariance
        )
    }
    rows = []
    for name in stage.names:
        term, effect = stage.term(name), effects.get(name)
        rows.append(
            FirstStageTerm(
                term=name,
                excluded=name in selection.excluded,
                coefficient=term["coefficient"],
                std_error=term["std_error"],
                statistic=term["statistic"],
                p_value=term["p_value"],
                marginal_effect=effect.effect if effect else NAN,
                marginal_std_error=effect.std_error if effect else NAN,
                step=effect.step if effect else "",
            )
        )
    return tuple(rows)


def _likelihood(design: Design, selection: SelectionRows) -> tuple[LikelihoodPoint, ...]:
    try:
        found = survey(*joint_model(design, selection))
    except (EstimationFailed, InputProblem, np.linalg.LinAlgError):
        return ()
    top = max(*found.profile.values(), *(start.value for start in found.starts))
    profile = [
        LikelihoodPoint("profile", rho, rho, value - top, True, False)
        for rho, value in found.profile.items()
    ]
    starts = [
        LikelihoodPoint("start", s.began, s.ended, s.value - top, s.converged, s.agrees)
        for s in found.starts
    ]
    return (*profile, *starts)
