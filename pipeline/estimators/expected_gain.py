"""Returns read as surprises: what a deal gains when investors foresee some of the deals.

Two models of a manager who announces when what he knows is good enough. In both the coefficients
speak of gains or of private information, never of differences in returns.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from scipy import optimize, special

from pipeline.core.design import Design, FitOptions, SelectionRows
from pipeline.core.estimate import EstimationFailed, t_reach, t_tail
from pipeline.core.findings import InputProblem
from pipeline.core.prices import Floats, Integers
from pipeline.core.selection import GainTerm
from pipeline.estimators.algebra import refuse_dependent, scaled, solve
from pipeline.estimators.errors import ErrorRule, choose_errors, of_influence, positive, words
from pipeline.estimators.probit import Equation, ProbitFit, fit_probit, limits, mills
from pipeline.estimators.sample import plain
from pipeline.estimators.selection_rows import checked_selection

FORESEEN, PRIVATE = "Foreseen gain", "Private news"
EMW = "Eckbo, Maksimovic and Williams (1990)"
ACHARYA = "Acharya (1988); Prabhala (1997)"
NEWS_MOVES = "how far the news a company announces on moves its price, in returns"
NEWS = (
    (("private news, π",), (NEWS_MOVES,)),
    (
        ("private news, π, beside a constant", "constant"),
        (NEWS_MOVES, "zero if returns hold nothing but that news; if not, the model does not fit"),
    ),
)
NAN = float("nan")
STARTS = ((0.5, 1.0), (1.0, 0.0), (2.0, -0.5), (0.25, 2.0))
WORST_CONDITION = 1e6
CLOSE = 1e-9
FARTHEST_INDEX = 6.0
AS_GOOD = 3.84
Makes = Callable[[Design, FitOptions], tuple[GainTerm, ...]]


@dataclass(frozen=True, slots=True, eq=False)
class Gain:
    """The fit of the foreseen gain.

    Attributes:
        gamma: (k,) coefficients of the gain.
        omega: standard deviation of what investors do not know of it.
        influence: (n, k + 1) of each deal on (γ, ω).
        residuals: (n,).
        agreeing: how many of the starts led here, of ``starts``.
        condition: condition number of the scaled derivatives.
    """

    gamma: Floats
    omega: float
    influence: Floats
    residuals: Floats
    starts: int
    agreeing: int
    condition: float


def mean_surprise(X: Floats, theta: Floats) -> tuple[Floats, Floats]:
    """E[return | x, announced] (n,) and its derivatives (n, k + 1) by θ = (γ, ln ω).

    A gain y = x'γ + η, η ~ N(0, ω²), is announced when it is positive; before, the price holds
    Pr(y > 0) of it, so the return is (x'γ + ω φ(a)/Φ(a))(1 - Φ(a)), a = x'γ/ω (Eckbo,
    Maksimovic and Williams 1990).
    """
    omega = float(np.exp(theta[-1]))
    a = X @ theta[:-1] / omega
    m, survival = mills(a), special.ndtr(-a)
    density = np.exp(-0.5 * a**2) / np.sqrt(2 * np.pi)
    level = (a + m) * survival
    # d/da of (a + m)(1 - Φ), with m' = -m(m + a).
    slope = (1 - m * (m + a)) * survival - (a + m) * density
    derivatives = np.column_stack([slope[:, None] * X, omega * (level - a * slope)])
    return np.asarray(omega * level), np.asarray(derivatives)


def foreseen_gain(y: Floats, X: Floats) -> Gain:
    """Least squares of returns ``y`` (n,) on their model given ``X`` (n, k), announcers alone.

    With normal errors of equal variance it is maximum likelihood. Levenberg and Marquardt's
    steps from several starts, the lowest sum of squares taken.

    Raises:
        EstimationFailed: if the mean return is not positive, if no start converges, if two minima
            fit about as well (sums of squares within 3.84/n of one another, the 95% point of
            χ²(1)), or if the returns cannot tell a large gain that was foreseen from a small one
            that was not.
    """
    if not float(y.mean()) > 0:
        raise EstimationFailed(
            "the mean return is not positive, and in this model every announced deal is on the "
            "average a good surprise: it does not fit"
        )
    unit, length = scaled(X)
    unit, length = unit * np.sqrt(len(y)), length / np.sqrt(len(y))
    spread = float(y.std())
    target = y / spread

    def misfit(theta: Floats) -> Floats:
        return mean_surprise(unit, theta)[0] - target

    def slopes(theta: Floats) -> Floats:
        return mean_surprise(unit, theta)[1]

    found = [
        ended
        for start in _starts(unit, target)
        if (ended := _climbed(misfit, slopes, start)) is not None
    ]
    theta, agreeing = _lowest(found, len(y))
    J, e = slopes(theta), -misfit(theta)
    condition = _told_apart(J, unit, theta)
    omega = float(np.exp(theta[-1]))
    back = np.append(spread / length, spread * omega)
    influence = (J * e[:, None]) @ np.linalg.inv(J.T @ J) * back
    return Gain(
        theta[:-1] * spread / length, omega * spread, influence, e * spread, len(STARTS),
        agreeing, condition,
    )  # fmt: skip


def _lowest(found: list[tuple[Floats, float]], n: int) -> tuple[Floats, int]:
    """The parameters of the lowest sum of squares, and how many starts led there."""
    if not found:
        raise EstimationFailed("the model of a foreseen gain did not converge from any start")
    theta, least = min(found, key=lambda item: item[1])
    apart = [item for item in found if not np.allclose(item[0], theta, rtol=1e-3, atol=1e-3)]
    if apart and min(item[1] for item in apart) < least * (1 + AS_GOOD / n):
        raise EstimationFailed(
            "two different sets of gains fit the returns about as well as one another"
        )
    return theta, len(found) - len(apart)


def _told_apart(J: Floats, X: Floats, theta: Floats) -> float:
    """The condition number of the scaled derivatives, if the parameters can be told apart."""
    values = np.linalg.svd(scaled(J)[0], compute_uv=False)
    condition = float(values[0] / values[-1]) if values[-1] > 0 else np.inf
    index = X @ theta[:-1] / np.exp(theta[-1])
    if not condition < WORST_CONDITION or float(np.median(np.abs(index))) > FARTHEST_INDEX:
        raise EstimationFailed(
            "the returns cannot tell a large gain that was foreseen from a small one that was not"
        )
    return condition


def _starts(X: Floats, y: Floats) -> Iterator[Floats]:
    """Gains along the least-squares slopes, at several sizes of what is not known."""
    b = solve(X, y)[0]
    constant = np.flatnonzero(np.ptp(X, axis=0) == 0)
    for omega, level in STARTS:
        gamma = 2 * b
        if constant.size:
            gamma[constant[0]] = level * omega
        yield np.append(gamma, np.log(omega))


def _climbed(
    misfit: Callable[[Floats], Floats], slopes: Callable[[Floats], Floats], start: Floats
) -> tuple[Floats, float] | None:
    """Where Levenberg and Marquardt end, and the sum of squares; None if they do not settle."""
    try:
        with np.errstate(over="ignore", invalid="ignore"):
            ended = optimize.least_squares(
                misfit, start, jac=slopes, method="lm", xtol=1e-14, ftol=1e-14, gtol=1e-14,
                max_nfev=2000, x_scale="jac",
            )  # fmt: skip
    except (ValueError, np.linalg.LinAlgError):
        return None
    e, J = misfit(ended.x), slopes(ended.x)
    fitted = J @ np.linalg.lstsq(J, e, rcond=None)[0]
    settled = bool(np.isfinite(e).all()) and float(fitted @ fitted) <= CLOSE * float(e @ e)
    return (ended.x, float(e @ e)) if settled else None


def foreseen_terms(design: Design, options: FitOptions) -> tuple[GainTerm, ...]:
    """The foreseen gain's coefficients γ and ω, errors HC1 or clustered."""
    rule = _rule(design.clusters, design.n, options)
    plain(design, rule)
    refuse_dependent(design.X, design.names)
    fit = foreseen_gain(design.y, design.X)
    names = (*design.names, "what investors do not know (standard deviation)")
    V = positive(of_influence(rule, fit.influence, len(names)).covariance, names)
    estimand = (
        "expected gain of the deal, of which the return shows only what investors had not foreseen"
    )
    note = (
        f"{fit.agreeing} of {fit.starts} starts led here; errors {words(rule)}. It takes "
        "gains to be normal and investors to know all that the regressors say."
    )
    values = np.append(fit.gamma, fit.omega)
    return tuple(
        _term(FORESEEN, name, "return", values[at], V[at, at], rule, design.n, estimand, note, EMW,
              options.level)
        for at, name in enumerate(names)
    )  # fmt: skip


def private_terms(design: Design, options: FitOptions) -> tuple[GainTerm, ...]:
    """π of E[return | x, announced] = π φ(θ'w)/Φ(θ'w), and whether the mean is nothing else.

    Probit of announcing on all candidates, then least squares without a constant on its inverse
    Mills ratio (Acharya 1988; Prabhala 1997); π > 0 if what the market learns from
    an announcement is good news. Errors by the stacked moments of both steps (Newey and McFadden
    1994, theorem 6.1), HC1 or clustered. The second row adds a constant, zero under the model.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.selection_rows.checked_selection`, and the
            probit's.
        EstimationFailed: if the probit does not converge or a variance is not positive.
    """
    selection = checked_selection(design)
    rule = _rule(selection.clusters, len(selection.selected), options)
    key = (*selection.excluded, *selection.names[::-1])[0]
    first = fit_probit(
        Equation(selection.selected, selection.W, selection.names, "announcing a deal", key)
    )
    note = f"Errors of both steps, {words(rule)}. It takes the news to be normal."
    found = []
    for names, meanings in NEWS:
        b, influence = _on_ratio(design, selection, first, len(names))
        V = positive(of_influence(rule, influence, 1).covariance, names)
        found += [
            _term(PRIVATE, name, "return", b[at], V[at, at], rule, design.n, meanings[at], note,
                  ACHARYA, options.level)
            for at, name in enumerate(names)
        ]  # fmt: skip
    return tuple(found)


def _on_ratio(
    design: Design, selection: SelectionRows, first: ProbitFit, columns: int
) -> tuple[Floats, Floats]:
    """Returns on the inverse Mills ratio, and a constant if two columns are asked for.

    Coefficients (c,) and the influence (A, c) of every candidate on them, through both steps.
    """
    chosen = selection.selected
    y, W, index = design.y[selection.outcome_row[chosen]], selection.W[chosen], first.index[chosen]
    ratio = mills(index)
    slope = -ratio * (ratio + index)
    X = np.column_stack([ratio, np.ones(len(y))])[:, :columns]
    b, e, bread = solve(X, y)
    derivative = -b[0] * X.T @ (slope[:, None] * W)
    derivative[0] += (e * slope) @ W
    moments = first.influence @ derivative.T
    moments[chosen] += X * e[:, None]
    return b, np.asarray(moments @ bread)


def gain_terms(design: Design, options: FitOptions) -> tuple[GainTerm, ...]:
    """Both models; one that cannot be estimated keeps a row that says why."""
    models: dict[str, tuple[Makes, str]] = {FORESEEN: (foreseen_terms, EMW)}
    if design.selection is not None:
        models[PRIVATE] = (private_terms, ACHARYA)
    rows: list[GainTerm] = []
    for model, (make, source) in models.items():
        try:
            rows += make(design, options)
        except EstimationFailed as failure:
            rows.append(_without(model, failure.reason, source))
        except InputProblem as refused:
            rows.append(_without(model, "; ".join(f.got for f in refused.findings), source))
    return tuple(rows)


def _without(model: str, reason: str, source: str) -> GainTerm:
    return GainTerm(model, "", "return", NAN, NAN, NAN, NAN, NAN, 0, "", "", reason, source)


def _rule(clusters: dict[str, Integers], n: int, options: FitOptions) -> ErrorRule:
    free = replace(options, covariance="auto", cluster=False)
    return choose_errors(
        clusters, n, free, otherwise="hc1", cluster_by_default=True, supported=("hc1",)
    )


def _term(
    model: str, term: str, unit: str, value: float, variance: float, rule: ErrorRule, n: int,
    estimand: str, note: str, source: str, level: float,
) -> GainTerm:  # fmt: skip
    df, _ = limits(rule)
    error = float(np.sqrt(variance))
    half = t_reach(level, df) * error
    p = t_tail(float(value) / error, df)
    return GainTerm(
        model, term, unit, float(value), error, p, float(value) - half, float(value) + half, n,
        estimand, note, "", source,
    )  # fmt: skip
