"""The maximum of a joint-normal likelihood: its profile over ρ, its peaks, and several starts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators.algebra import solve
from pipeline.estimators.joint_normal import Derivatives, Joint, derivatives, scores

GRID = (0.0, 0.2, 0.4, 0.6, 0.8, 0.9, 0.95, 0.99, 0.999)
FINE_GRID = (*(at / 20 for at in range(20)), 0.975, 0.99)
MOST_STEPS = 200
CONVERGED = 1e-16
ON_THE_WAY = 1e-9
EDGE = 0.998
FLAT = 1e-6
WORST_CONDITION = 1e13


@dataclass(frozen=True, slots=True)
class Start:
    """A start at correlation ``began``, where it led, and the log-likelihood there.

    ``agrees`` says whether it led to the maximum taken.
    """

    began: float
    ended: float
    value: float
    converged: bool
    agrees: bool


@dataclass(frozen=True, slots=True, eq=False)
class Maximum:
    """The interior maximum.

    Attributes:
        gamma: (q,), beta: (k,), sigma, rho: the parameters.
        information: (p, p) inverse of the observed information of (γ, β, ln σ, atanh ρ).
        influence: (A, p) inverse information times the score of each row.
        value: the log-likelihood; ``value_independent`` the largest at ρ = 0.
        profile: ρ -> the largest log-likelihood at that ρ.
        starts: where each start began and where it led.
        higher: ρ and log-likelihood of the highest other point seen, if it is higher than here.
        gradient: size of the gradient left, in standard errors.
        condition: condition number of the information scaled to a unit diagonal.
    """

    gamma: Floats
    beta: Floats
    sigma: float
    rho: float
    information: Floats
    influence: Floats
    value: float
    value_independent: float
    profile: dict[float, float]
    starts: tuple[Start, ...]
    higher: tuple[float, float] | None
    gradient: float
    condition: float


@dataclass(frozen=True, slots=True, eq=False)
class Ascent:
    """Where a climb ended: (p,) parameters, log-likelihood, and whether it had settled."""

    theta: Floats
    value: float
    decrement: float
    converged: bool


def ascend(model: Joint, theta: Floats, free: Booleans, enough: float = CONVERGED) -> Ascent:
    """Newton's steps with the curvature's sign put right, halved while they overshoot."""
    theta = theta.copy()
    at = np.flatnonzero(free)
    decrement = np.inf
    here = derivatives(model, theta)
    for _ in range(MOST_STEPS):
        slope = here.gradient[at]
        values, vectors = np.linalg.eigh(-here.hessian[np.ix_(at, at)])
        size = np.maximum(np.abs(values), 1e-10 * np.abs(values).max())
        move = vectors @ ((vectors.T @ slope) / size)
        decrement = float(slope @ move)
        if not np.isfinite(decrement):
            break
        if decrement <= enough and values[0] > 0:
            theta[at] += move
            return Ascent(theta, here.value, decrement, True)
        moved = _halved(model, theta, at, move, here.value)
        if moved is None:
            break
        theta, here = moved
    return Ascent(theta, here.value, decrement, decrement <= 1e4 * enough)


def _halved(
    model: Joint, theta: Floats, at: Integers, move: Floats, value: float
) -> tuple[Floats, Derivatives] | None:
    size = min(1.0, 3.0 / max(float(np.abs(move).max()), 1e-300))
    while size > 1e-10:
        trial = theta.copy()
        trial[at] += size * move
        if abs(trial[-1]) < 12 and abs(trial[-2]) < 50:
            new = derivatives(model, trial)
            if np.isfinite(new.value) and new.value >= value - 1e-12 * abs(value):
                return trial, new
        size /= 2
    return None


def maximise(model: Joint, gamma: Floats, two_step: tuple[Floats, float, float]) -> Maximum:
    """The interior maximum of the likelihood, all its peaks looked at.

    Given ρ the likelihood has one maximum (Olsen 1982), so its profile over a grid of ρ is
    followed outward from ρ = 0; every peak of the profile and the two-step values (β, σ, ρ) are
    starts. Where they lead to several peaks, the one reached from the two-step values is taken:
    of several roots it is the one near a consistent estimate that is efficient (Lehmann and
    Casella 1998, sec. 6.4); a higher one elsewhere is recorded. ``gamma`` (q,) is the probit's.
    Columns and outcome are scaled inside.

    Raises:
        EstimationFailed: if no start leads to a maximum inside |ρ| < 1, or the information there
            is singular.
    """
    unit, units, profile, starts = looked_over(model, gamma, two_step, GRID)
    found = follow(unit, starts)
    rho = two_step[2]
    inside = [a for a in found if a.converged and abs(np.tanh(a.theta[-1])) < EDGE]
    if not inside:
        raise EstimationFailed(_reason(found, profile))
    chosen = found[0]
    if not any(a is chosen for a in inside):
        chosen = min(inside, key=lambda a: abs(float(np.tanh(a.theta[-1])) - rho))
    return _at(model, unit, units, chosen, profile, found, starts)


def looked_over(
    model: Joint, gamma: Floats, two_step: tuple[Floats, float, float], grid: tuple[float, ...]
) -> tuple[Joint, Floats, dict[float, Ascent], list[Floats]]:
    """The scaled model, its units, the profile over ``grid``, and the starts.

    The starts are the two-step values, then every peak of the profile.
    """
    unit, units = in_units(model)
    q = model.W.shape[1]
    profile = profile_of(unit, gamma * units[:q], grid)
    beta, sigma, rho = two_step
    start = np.concatenate([gamma, beta, [np.log(sigma)], [np.arctanh(np.clip(rho, -0.9, 0.9))]])
    return unit, units, profile, [to_units(start, units, q), *peaks(profile)]


@dataclass(frozen=True, slots=True)
class Survey:
    """The likelihood over ρ: its profile, and where each start led."""

    profile: dict[float, float]
    starts: tuple[Start, ...]


def survey(
    model: Joint,
    gamma: Floats,
    two_step: tuple[Floats, float, float],
    grid: tuple[float, ...] = FINE_GRID,
) -> Survey:
    """The profile on a fine grid and every start, also where no maximum may be shown.

    Arguments as of :func:`maximise`; ``grid`` holds sizes of ρ, 0 first.
    """
    unit, units, profile, starts = looked_over(model, gamma, two_step, grid)
    found = follow(unit, starts)
    shift = len(model.y) * float(np.log(units[-1]))
    inside = [a for a in found if a.converged and abs(np.tanh(a.theta[-1])) < EDGE]
    best = inside[0] if inside else None
    return Survey(
        {rho: a.value - shift for rho, a in profile.items()},
        starts_of(starts, found, best, shift),
    )


def follow(unit: Joint, starts: list[Floats]) -> list[Ascent]:
    """Where each start leads, all parameters free."""
    return [ascend(unit, theta, np.ones(len(theta), dtype=np.bool_)) for theta in starts]


def starts_of(
    starts: list[Floats], found: list[Ascent], chosen: Ascent | None, shift: float
) -> tuple[Start, ...]:
    """The starts as a reader sees them; ``shift`` takes the outcome's unit out of the values."""
    return tuple(
        Start(
            began=float(np.tanh(theta[-1])),
            ended=float(np.tanh(end.theta[-1])),
            value=end.value - shift,
            converged=end.converged,
            agrees=chosen is not None
            and end.converged
            and bool(np.allclose(end.theta, chosen.theta, rtol=1e-4, atol=1e-4)),
        )
        for theta, end in zip(starts, found, strict=True)
    )


def _reason(found: list[Ascent], profile: dict[float, Ascent]) -> str:
    peak = max(profile, key=lambda rho: profile[rho].value)
    if abs(peak) == GRID[-1]:
        return (
            "the likelihood keeps rising as the correlation of the errors approaches "
            f"{np.sign(peak):.0f}: it has no maximum that could be an estimate"
        )
    return (
        f"the likelihood did not converge from any of {len(found)} starts "
        "(two-step values and the peaks of the profile)"
    )


def in_units(model: Joint) -> tuple[Joint, Floats]:
    """Columns of unit mean square and an outcome of unit spread; the (p - 1,) units, ln σ's last.

    The units multiply: γ by those of W, β by those of X over the outcome's.
    """
    of_w = np.sqrt(np.mean(model.W**2, axis=0))
    of_x = np.sqrt(np.mean(model.X**2, axis=0))
    spread = float(np.std(model.y))
    scaled = Joint(model.signs, model.W / of_w, model.at, model.y / spread, model.X / of_x)
    return scaled, np.concatenate([of_w, of_x, [spread]])


def to_units(theta: Floats, units: Floats, q: int) -> Floats:
    """(p,) parameters ``theta`` carried to the scaled columns of :func:`in_units`.

    ``units`` (p - 1,) are those it returns, ``q`` the number of coefficients in γ.
    """
    spread = units[-1]
    inner = theta.copy()
    inner[:q] *= units[:q]
    inner[q:-2] *= units[q:-1] / spread
    inner[-2] -= np.log(spread)
    return inner


def profile_of(unit: Joint, gamma: Floats, grid: tuple[float, ...] = GRID) -> dict[float, Ascent]:
    """ρ -> the maximum given ρ, each side of zero warmed by its inner neighbour.

    ``grid`` holds the sizes of ρ looked at, 0 first.
    """
    beta, e, _ = solve(unit.X, unit.y)
    free = np.ones(unit.size, dtype=np.bool_)
    free[-1] = False
    size = float(np.log(np.sqrt(np.mean(e**2))))
    origin = ascend(unit, np.concatenate([gamma, beta, [size, 0.0]]), free)
    found = {0.0: origin}
    for side in (-1.0, 1.0):
        theta = origin.theta
        for rho in grid[1:]:
            theta = theta.copy()
            theta[-1] = np.arctanh(side * rho)
            found[side * rho] = ascend(unit, theta, free, ON_THE_WAY)
            theta = found[side * rho].theta
    return dict(sorted(found.items()))


def peaks(profile: dict[float, Ascent]) -> list[Floats]:
    """The parameters at every ρ whose likelihood is at least that of both its neighbours.

    ``profile`` is in ascending order of ρ; the ends have one neighbour.
    """
    values = np.array([a.value for a in profile.values()])
    padded = np.concatenate([[-np.inf], values, [-np.inf]])
    peak = (padded[1:-1] >= padded[:-2]) & (padded[1:-1] >= padded[2:])
    return [a.theta for a, top in zip(profile.values(), peak, strict=True) if top]


def _at(
    model: Joint,
    unit: Joint,
    units: Floats,
    best: Ascent,
    profile: dict[float, Ascent],
    found: list[Ascent],
    starts: list[Floats],
) -> Maximum:
    q, spread = model.W.shape[1], float(units[-1])
    here = derivatives(unit, best.theta)
    scale = np.sqrt(np.maximum(-np.diag(here.hessian), 1e-300))
    values = np.linalg.eigvalsh(-here.hessian / np.outer(scale, scale))
    if not values[0] * WORST_CONDITION > values[-1]:
        raise EstimationFailed("the information of the likelihood is singular at its maximum")
    inner = np.linalg.inv(-here.hessian)
    back = np.concatenate([1 / units[:q], spread / units[q:-1], [1.0, 1.0]])
    shift = len(model.y) * float(np.log(spread))
    theta = best.theta
    return Maximum(
        gamma=theta[:q] * back[:q],
        beta=theta[q:-2] * back[q:-2],
        sigma=float(np.exp(theta[-2])) * spread,
        rho=float(np.tanh(theta[-1])),
        information=np.asarray(inner * np.outer(back, back), dtype=np.float64),
        influence=(scores(unit, theta) @ inner) * back,
        value=here.value - shift,
        value_independent=profile[0.0].value - shift,
        profile={rho: a.value - shift for rho, a in profile.items()},
        starts=starts_of(starts, found, best, shift),
        higher=_higher(best, profile, found, shift),
        gradient=float(np.sqrt(max(best.decrement, 0.0))),
        condition=float(values[-1] / values[0]),
    )


def _higher(
    best: Ascent, profile: dict[float, Ascent], found: list[Ascent], shift: float
) -> tuple[float, float] | None:
    top = max((*found, *profile.values()), key=lambda a: a.value)
    if top.value <= best.value + FLAT:
        return None
    return float(np.tanh(top.theta[-1])), top.value - shift
