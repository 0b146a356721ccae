"""Return and choice determined together: each equation with the other's outcome on its right.

The return is y = αD + x'β + ε, the choice D = θy + w'δ + Zπ + v. The instruments Z move the choice
alone and identify α; controls that move the return alone, which w lacks, identify θ. Both by two
stages, one equation at a time, and by three stages, which weigh the equations by the covariance
of their errors (Zellner and Theil 1962).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import t_reach, t_tail
from pipeline.core.prices import Floats
from pipeline.estimators.algebra import partial_out, refusal, refuse_dependent, solve
from pipeline.estimators.errors import degrees_of_freedom, of_influence
from pipeline.estimators.stages import Parts, parts_of
from pipeline.scrutiny.ground import row_sums

CITATION = "Zellner and Theil (1962)"
TWO, THREE = "two stages", "three stages"


@dataclass(frozen=True, slots=True, eq=False)
class Equation:
    """One equation: its words, outcome (n,), regressors (n, k) and their names."""

    words: str
    y: Floats
    X: Floats
    names: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Term:
    """A coefficient of one equation by one method, with its error and t interval."""

    equation: str
    method: str
    term: str
    coefficient: float
    std_error: float
    p_value: float
    ci_low: float
    ci_high: float
    n: int


def both_ways(design: Design, alone: Sequence[str], options: FitOptions) -> tuple[Term, ...]:
    """Every coefficient of both equations by both methods, fixed effects taken out of all.

    ``alone`` are the controls that move the return and not the choice. Errors are clustered as in
    two stages; coefficients are in the units of the variables, the return decimal.

    Raises:
        InputProblem: ``reverse_instrument`` for a name that is not a varying control,
            ``collinear``, or as :func:`~pipeline.estimators.stages.parts_of`.
    """
    parts = parts_of(design, options)
    equations = _equations(design, parts, tuple(alone))
    everything = np.column_stack([parts.controls, parts.sample.Z])
    refuse_dependent(everything, (*parts.control_names, *parts.instruments))
    fitted = [e.X - partial_out(e.X, everything) for e in equations]
    single = _two_stages(equations, fitted)
    left = np.column_stack([e.y - e.X @ b for e, b in zip(equations, single, strict=True)])
    found: list[Term] = []
    inverse = np.asarray(np.linalg.inv(left.T @ left / len(left)), dtype=np.float64)
    for method, weight in ((TWO, np.eye(len(equations))), (THREE, inverse)):
        found += _terms(parts, equations, fitted, method, weight, options.level)
    return tuple(found)


def _equations(design: Design, parts: Parts, alone: tuple[str, ...]) -> tuple[Equation, Equation]:
    known = [n for n, x in zip(parts.control_names, parts.controls.T, strict=True) if np.ptp(x)]
    for name in alone:
        if name not in known:
            raise refusal(
                "reverse_instrument",
                "scrutiny.reverse",
                f"'{name}', not a control that varies",
                f"some of {', '.join(known)}",
                "name controls that move the return and not the choice",
            )
    stay = [at for at, name in enumerate(parts.control_names) if name not in alone]
    sample = parts.sample
    D = sample.X[:, parts.at]
    return (
        Equation(
            "outcome",
            sample.y,
            np.column_stack([D, parts.controls]),
            (design.treatment, *parts.control_names),
        ),
        Equation(
            "choice",
            D,
            np.column_stack([sample.y, parts.controls[:, stay], sample.Z]),
            (design.outcome, *(parts.control_names[at] for at in stay), *parts.instruments),
        ),
    )


def _two_stages(equations: Sequence[Equation], fitted: Sequence[Floats]) -> list[Floats]:
    return [solve(hat, e.y)[0] for e, hat in zip(equations, fitted, strict=True)]


def _terms(
    parts: Parts,
    equations: Sequence[Equation],
    fitted: Sequence[Floats],
    method: str,
    W: Floats,
    level: float,
) -> list[Term]:
    """Coefficients with W the inverse of the equations' error covariance, or the identity.

    b = (X̂'(W ⊗ I)X̂)⁻¹X̂'(W ⊗ I)y; each row's influence is X̂'(W ⊗ I)e of that row.
    """
    sizes = np.cumsum([0, *(e.X.shape[1] for e in equations)])
    blocks = [slice(a, b) for a, b in pairwise(sizes)]
    scale = np.concatenate([np.linalg.norm(hat, axis=0) for hat in fitted])
    hats = [hat / scale[block] for hat, block in zip(fitted, blocks, strict=True)]
    inner = np.block([[W[i, j] * a.T @ b for j, b in enumerate(hats)] for i, a in enumerate(hats)])
    outer = np.concatenate(
        [a.T @ sum(W[i, j] * e.y for j, e in enumerate(equations)) for i, a in enumerate(hats)]
    )
    b = np.linalg.solve(inner, outer) / scale
    left = np.column_stack([e.y - e.X @ b[at] for e, at in zip(equations, blocks, strict=True)])
    scores = np.concatenate([a * (left @ W[i])[:, None] for i, a in enumerate(hats)], axis=1)
    influence = np.linalg.solve(inner, scores.T).T / scale
    sample = parts.sample
    rule = row_sums(sample.rule)
    found = []
    for e, at in zip(equations, blocks, strict=True):
        k = e.X.shape[1]
        V = of_influence(rule, influence[:, at], k + sample.counted).covariance
        df, _ = degrees_of_freedom(rule, k + sample.absorbed)
        for name, value, error in zip(e.names, b[at], np.sqrt(np.diag(V)), strict=True):
            half = t_reach(level, df) * error
            p = t_tail(value / error, df)
            numbers = (float(value), float(error), p, float(value - half), float(value + half))
            found.append(Term(e.words, method, name, *numbers, sample.n))
    return found
