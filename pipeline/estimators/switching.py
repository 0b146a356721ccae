"""Two outcomes, one a choice: the switching regression and the averages it implies."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import Estimate, EstimationFailed, Tested
from pipeline.core.prices import Booleans, Floats
from pipeline.estimators import diagnostics
from pipeline.estimators.algebra import refuse_dependent, solve
from pipeline.estimators.balance import overlap
from pipeline.estimators.column import Found, Labels, large_sample
from pipeline.estimators.errors import (
    ErrorRule,
    cautions,
    choose_errors,
    of_influence,
    positive,
    words,
)
from pipeline.estimators.likelihood_report import multiplier
from pipeline.estimators.probit import ProbitFit, fit_probit, limits, probit_estimate
from pipeline.estimators.sample import plain
from pipeline.estimators.treatment import (
    RESIDUAL,
    Chosen,
    chosen_of,
    excluded_from_outcome,
    generalised_residual,
)

ON_TREATED, ON_UNTREATED = "effect_on_the_treated", "effect_on_the_untreated"
CITATION = "Maddala (1983), sec. 8.3; Wooldridge (2010), sec. 21.4.2"
SUPPORTED = ("hc0", "hc1")
EXACT = 1e-10


@dataclass(frozen=True, slots=True, eq=False)
class Regime:
    """The outcome equation of one arm.

    Attributes:
        coefficients: (k,) of the controls, then of the generalised residual.
        influence: (n, k) of every deal, through both steps.
        rows: deals in the arm.
    """

    coefficients: Floats
    influence: Floats
    rows: int


def switching_regression(design: Design, options: FitOptions) -> Estimate:
    """Least squares in each arm with the generalised residual h, then three average effects.

    With b₁ and b₀ the coefficients of r = (x, h) in the arms, h = φ/Φ for the treated and
    -φ/(1 - Φ) for the others: ATE = mean of x'(β₁ - β₀); ATT and ATU = mean of r'(b₁ - b₀) over
    the treated and over the others (Maddala 1983, sec. 8.3; Heckman, Tobias and Vytlacil 2003).
    Each effect's influence runs through the probit, both regressions and the average (Newey and
    McFadden 1994, theorem 6.1), so errors are always of the sandwich kind: HC1 with n/(n - 1) by
    default, ``hc0`` or ``cluster``. Read against the normal, t(G - 1) with clusters.

    ``names``: the treatment (ATE), effect_on_the_treated, effect_on_the_untreated. ``fit``:
    treated, residual_treated and residual_untreated (coefficients of h), least_squares,
    small_sample_factor, facts of :func:`~pipeline.estimators.balance.overlap`. ``tests``:
    equal_effects (ATT = ATU), excluded_variables. ``stages``: the probit and both arms.

    Raises:
        InputProblem: see :func:`~pipeline.estimators.treatment.chosen_of`; ``collinear`` or
            ``few_rows`` in an arm; ``separation``, ``no_variation``, a problem of clusters or
            covariance.
        EstimationFailed: if the probit does not converge, an arm is fitted exactly or a variance
            is not positive.
    """
    rule = choose_errors(design.clusters, design.n, options, otherwise="hc1", supported=SUPPORTED)
    notes = plain(design, rule).notes
    chosen = chosen_of(design, options)
    first = fit_probit(chosen.equation)
    h = generalised_residual(chosen.D, first.index)
    r = np.column_stack([chosen.controls, h])
    regimes = [_regime(design, chosen, first, r, arm) for arm in (chosen.D, ~chosen.D)]
    effects, influence = average_effects(chosen, first, r, regimes[0], regimes[1])
    names = (design.treatment, ON_TREATED, ON_UNTREATED)
    errors = of_influence(rule, influence, 1)
    V = positive(errors.covariance, names)
    stage = probit_estimate(first, chosen.equation, rule, options)
    facts, warned = overlap(np.asarray(special.ndtr(first.index)), chosen.D)
    column = large_sample(design, options, rule, _labels(design, rule), Found(names, effects, V))
    return replace(
        column,
        fit={**_facts(design, chosen, regimes), **facts, **multiplier(rule)},
        tests={
            "equal_effects": _equal_effects(influence, effects, rule, column.df),
            "excluded_variables": excluded_from_outcome(design, stage),
        },
        stages=(stage, *_arms(design, chosen, regimes, rule, options)),
        scores=influence,
        notes=(*notes, *cautions(rule, errors.floored), *warned),
    )


def _labels(design: Design, rule: ErrorRule) -> Labels:
    return Labels(
        estimator="switching_regression",
        title="Switching regression",
        estimand=f"average effect of {design.treatment} on {design.outcome} over all deals (ATE), "
        "over the deals that chose it (ATT) and over the others (ATU), under joint normality of "
        f"choice and both outcomes and {_moved(design)}",
        covariance=f"stacked moments of all steps, {words(rule)}",
        citation=CITATION,
    )


def _moved(design: Design) -> str:
    if design.instruments:
        return f"{' and '.join(design.instruments)} moving the choice and neither outcome"
    return "nothing else: the curvature of the normal distribution alone identifies it"


def _regime(design: Design, chosen: Chosen, first: ProbitFit, r: Floats, arm: Booleans) -> Regime:
    names = (*chosen.control_names, RESIDUAL)
    X, W, h = r[arm], chosen.equation.W[arm], r[arm, -1]
    refuse_dependent(X, names)
    b, e, bread = solve(X, design.y[arm])
    if not float(e @ e) > EXACT**2 * float(np.var(design.y)) * len(e):
        raise EstimationFailed("the regressors fit the outcome exactly in one arm")
    weighted = (h * (h + first.index[arm]))[:, None] * W
    derivative = b[-1] * X.T @ weighted
    derivative[-1] -= e @ weighted
    moments = first.influence @ derivative.T
    moments[arm] += X * e[:, None]
    return Regime(b, np.asarray(moments @ bread), int(arm.sum()))


def average_effects(
    chosen: Chosen, first: ProbitFit, r: Floats, one: Regime, other: Regime
) -> tuple[Floats, Floats]:
    """ATE, ATT and ATU (3,) and the influence (n, 3) of every deal on them.

    ``r`` (n, k) holds the controls and the generalised residual. The average over an arm moves
    with γ through h too: dh/dγ = -h(h + w'γ)w'.
    """
    gap, moved = one.coefficients - other.coefficients, one.influence - other.influence
    D, W, h = chosen.D, chosen.equation.W, r[:, -1]
    slope = -(h * (h + first.index))[:, None] * W
    effects, influence = [], []
    for rows, hidden in ((np.ones(len(D), dtype=np.bool_), 0.0), (D, 1.0), (~D, 1.0)):
        use = r.copy()
        use[:, -1] *= hidden
        each = use @ gap
        effect = float(each[rows].mean())
        own = np.where(rows, each - effect, 0.0) / rows.sum()
        through = first.influence @ (hidden * gap[-1] * slope[rows].mean(axis=0))
        effects.append(effect)
        influence.append(own + moved @ use[rows].mean(axis=0) + through)
    return np.array(effects), np.column_stack(influence)


def _facts(design: Design, chosen: Chosen, regimes: list[Regime]) -> dict[str, float]:
    alone = solve(design.X, design.y)[0]
    return {
        "treated": float(chosen.D.sum()),
        "residual_treated": float(regimes[0].coefficients[-1]),
        "residual_untreated": float(regimes[1].coefficients[-1]),
        "least_squares": float(alone[design.names.index(design.treatment)]),
    }


def _equal_effects(influence: Floats, effects: Floats, rule: ErrorRule, df: float) -> Tested:
    difference = influence[:, 1:2] - influence[:, 2:3]
    return diagnostics.wald(
        "Effect on the treated less effect on the untreated",
        "deals that chose the treatment gain as much from it as the others would",
        effects[1:2] - effects[2:3],
        of_influence(rule, difference, 1).covariance,
        df,
        "Wald (1943)",
    )


def _arms(
    design: Design, chosen: Chosen, regimes: list[Regime], rule: ErrorRule, options: FitOptions
) -> tuple[Estimate, ...]:
    df, sentence = limits(rule)
    names = (*chosen.control_names, RESIDUAL)
    return tuple(
        Estimate(
            estimator="switching_arm",
            title=f"Outcome of the {who}",
            estimand=f"difference in mean {design.outcome} associated with one more unit of a "
            f"control, as the {who} would have it",
            names=names,
            coefficients=regime.coefficients,
            covariance=positive(of_influence(rule, regime.influence, 1).covariance, names),
            df=df,
            df_rule=sentence,
            covariance_name=f"stacked moments of both steps, {words(rule)}",
            n=regime.rows,
            treatment=RESIDUAL,
            outcome=design.outcome,
            clusters=rule.counts,
            citation=CITATION,
            level=options.level,
        )
        for who, regime in zip(("treated", "untreated"), regimes, strict=True)
    )
