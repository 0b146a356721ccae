"""A choice and an outcome with jointly normal errors: likelihood, its maximum, its profile.

One likelihood serves two models: the outcome is seen for those who chose alone (selection), or
for all rows with the choice among its regressors (treatment).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators.algebra import solve
from pipeline.estimators.probit import LOG_ROOT_TWO_PI, mills

GRID = (0.0, 0.2, 0.4, 0.6, 0.8, 0.9, 0.95, 0.99, 0.999)
MOST_STEPS = 200
CONVERGED = 1e-16
ON_THE_WAY = 1e-9
EDGE = 0.998
FLAT = 1e-6
WORST_CONDITION = 1e13


@dataclass(frozen=True, slots=True, eq=False)
class Joint:
    """The rows of the model.

    Attributes:
        signs: (A,) 1 for who chose, -1 for who did not.
        W: (A, q) regressors of the choice.
        at: (n,) rows of the A whose outcome is seen; the others did not choose.
        y: (n,) their outcome.
        X: (n, k) its regressors.
    """

    signs: Floats
    W: Floats
    at: Integers
    y: Floats
    X: Floats

    @property
    def size(self) -> int:
        """Parameters: q of the choice, k of the outcome, ln σ, atanh ρ."""
        return int(self.W.shape[1] + self.X.shape[1] + 2)


@dataclass(frozen=True, slots=True, eq=False)
class Derivatives:
    """The log-likelihood, its (p,) gradient and (p, p) Hessian."""

    value: float
    gradient: Floats
    hessian: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Maximum:
    """The interior maximum.

    Attributes:
        gamma: (q,), beta: (k,), sigma, rho: the parameters.
        information: (p, p) inverse of the observed information of (γ, β, ln σ, atanh ρ).
        influence: (A, p) inverse information times the score of each row.
        value: the log-likelihood; ``value_independent`` the largest at ρ = 0.
        profile: ρ -> the largest log-likelihood at that ρ.
        starts: how many starts were followed, ``agreeing`` how many led here.
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
    starts: int
    agreeing: int
    higher: tuple[float, float] | None
    gradient: float
    condition: float


@dataclass(frozen=True, slots=True, eq=False)
class _Terms:
    """Derivatives of each row by the index a, the standardised error e and t = atanh ρ."""

    value: float
    e: Floats
    a: Floats
    aa: Floats
    of_e: Floats
    of_t: Floats
    ae: Floats
    ee: Floats
    a_t: Floats
    e_t: Floats
    tt: Floats
    scale: float


def _terms(model: Joint, theta: Floats) -> _Terms:
    """l = ln Φ(q(a cosh t + e sinh t)) - e²/2 - ln σ - ln √2π, or ln Φ(-a) without an outcome."""
    q = model.W.shape[1]
    at, signs = model.at, model.signs
    scale, cosh, sinh = np.exp(-theta[-2]), np.cosh(theta[-1]), np.sinh(theta[-1])
    index = model.W @ theta[:q]
    e = (model.y - model.X @ theta[q:-2]) * scale
    u, du = index[at] * cosh + e * sinh, index[at] * sinh + e * cosh
    m = signs * index
    m[at] = signs[at] * u
    ratio = mills(m)
    bend = -ratio * (ratio + m)
    pull = signs * ratio
    value = special.log_ndtr(m).sum() - 0.5 * e @ e
    value -= len(e) * (theta[-2] + LOG_ROOT_TWO_PI)
    a, aa = pull.copy(), bend.copy()
    a[at] *= cosh
    aa[at] *= cosh**2
    bend, pull = bend[at], pull[at]
    return _Terms(
        value=float(value),
        e=e,
        a=a,
        aa=aa,
        of_e=pull * sinh - e,
        of_t=pull * du,
        ae=bend * cosh * sinh,
        ee=bend * sinh**2 - 1,
        a_t=bend * cosh * du + pull * sinh,
        e_t=bend * sinh * du + pull * cosh,
        tt=bend * du**2 + pull * u,
        scale=float(scale),
    )


def scores(model: Joint, theta: Floats) -> Floats:
    """(A, p) derivative of each row's log-likelihood by (γ, β, ln σ, atanh ρ)."""
    t = _terms(model, theta)
    q = model.W.shape[1]
    rows = np.zeros((len(model.signs), model.size))
    rows[:, :q] = model.W * t.a[:, None]
    rows[model.at, q:-2] = -model.X * (t.of_e * t.scale)[:, None]
    rows[model.at, -2] = -t.e * t.of_e - 1
    rows[model.at, -1] = t.of_t
    return rows


def derivatives(model: Joint, theta: Floats) -> Derivatives:
    """Value, gradient and Hessian at ``theta`` (p,) = (γ, β, ln σ, atanh ρ).

    Heckman (1974) and Maddala (1983, secs. 5.7 and 9.2) write the likelihoods; with t = atanh ρ
    the correlation enters by cosh t and sinh t, smooth on the whole line.
    """
    t = _terms(model, theta)
    W, X, q = model.W, model.X * t.scale, model.W.shape[1]
    chose = W[model.at]
    gradient = np.concatenate(
        [W.T @ t.a, -X.T @ t.of_e, [-t.e @ t.of_e - len(t.e)], [t.of_t.sum()]]
    )
    H = np.zeros((model.size,) * 2)
    H[:q, :q] = (W * t.aa[:, None]).T @ W
    H[:q, q:-2] = -(chose * t.ae[:, None]).T @ X
    H[:q, -2] = -chose.T @ (t.e * t.ae)
    H[:q, -1] = chose.T @ t.a_t
    H[q:-2, q:-2] = (X * t.ee[:, None]).T @ X
    H[q:-2, -2] = X.T @ (t.of_e + t.e * t.ee)
    H[q:-2, -1] = -X.T @ t.e_t
    H[-2, -2] = t.e @ t.of_e + t.e**2 @ t.ee
    H[-2, -1] = -t.e @ t.e_t
    H[-1, -1] = t.tt.sum()
    return Derivatives(t.value, gradient, np.triu(H) + np.triu(H, 1).T)


@dataclass(frozen=True, slots=True, eq=False)
class _Ascent:
    theta: Floats
    value: float
    decrement: float
    converged: bool


def _ascend(model: Joint, theta: Floats, free: Booleans, enough: float = CONVERGED) -> _Ascent:
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
            return _Ascent(theta, here.value, decrement, True)
        moved = _halved(model, theta, at, move, here.value)
        if moved is None:
            break
        theta, here = moved
    return _Ascent(theta, here.value, decrement, decrement <= 1e4 * enough)


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
    unit, units = _scaled(model)
    q = model.W.shape[1]
    profile = _profile(unit, gamma * units[:q])
    beta, sigma, rho = two_step
    start = np.concatenate([gamma, beta, [np.log(sigma)], [np.arctanh(np.clip(rho, -0.9, 0.9))]])
    starts = [_to_unit(start, units, q), *_peaks(profile)]
    found = [_ascend(unit, theta, np.ones(len(theta), dtype=np.bool_)) for theta in starts]
    inside = [a for a in found if a.converged and abs(np.tanh(a.theta[-1])) < EDGE]
    if not inside:
        raise EstimationFailed(_reason(found, profile))
    chosen = found[0]
    if not any(a is chosen for a in inside):
        chosen = min(inside, key=lambda a: abs(float(np.tanh(a.theta[-1])) - rho))
    return _at(model, unit, units, chosen, profile, found)


def _reason(found: list[_Ascent], profile: dict[float, _Ascent]) -> str:
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


def _scaled(model: Joint) -> tuple[Joint, Floats]:
    """Columns of unit mean square and an outcome of unit spread; the (p - 1,) units, ln σ's last.

    The units multiply: γ by those of W, β by those of X over the outcome's.
    """
    of_w = np.sqrt(np.mean(model.W**2, axis=0))
    of_x = np.sqrt(np.mean(model.X**2, axis=0))
    spread = float(np.std(model.y))
    scaled = Joint(model.signs, model.W / of_w, model.at, model.y / spread, model.X / of_x)
    return scaled, np.concatenate([of_w, of_x, [spread]])


def _to_unit(theta: Floats, units: Floats, q: int) -> Floats:
    spread = units[-1]
    inner = theta.copy()
    inner[:q] *= units[:q]
    inner[q:-2] *= units[q:-1] / spread
    inner[-2] -= np.log(spread)
    return inner


def _profile(unit: Joint, gamma: Floats) -> dict[float, _Ascent]:
    """ρ -> the maximum given ρ, each side of zero warmed by its inner neighbour."""
    beta, e, _ = solve(unit.X, unit.y)
    free = np.ones(unit.size, dtype=np.bool_)
    free[-1] = False
    size = float(np.log(np.sqrt(np.mean(e**2))))
    origin = _ascend(unit, np.concatenate([gamma, beta, [size, 0.0]]), free)
    found = {0.0: origin}
    for side in (-1.0, 1.0):
        theta = origin.theta
        for rho in GRID[1:]:
            theta = theta.copy()
            theta[-1] = np.arctanh(side * rho)
            found[side * rho] = _ascend(unit, theta, free, ON_THE_WAY)
            theta = found[side * rho].theta
    return dict(sorted(found.items()))


def _peaks(profile: dict[float, _Ascent]) -> list[Floats]:
    values = np.array([a.value for a in profile.values()])
    padded = np.concatenate([[-np.inf], values, [-np.inf]])
    peak = (padded[1:-1] >= padded[:-2]) & (padded[1:-1] >= padded[2:])
    return [a.theta for a, top in zip(profile.values(), peak, strict=True) if top]


def _at(
    model: Joint,
    unit: Joint,
    units: Floats,
    best: _Ascent,
    profile: dict[float, _Ascent],
    found: list[_Ascent],
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
        starts=len(found),
        agreeing=sum(
            a.converged and bool(np.allclose(a.theta, theta, rtol=1e-4, atol=1e-4)) for a in found
        ),
        higher=_higher(best, profile, found, shift),
        gradient=float(np.sqrt(max(best.decrement, 0.0))),
        condition=float(values[-1] / values[0]),
    )


def _higher(
    best: _Ascent, profile: dict[float, _Ascent], found: list[_Ascent], shift: float
) -> tuple[float, float] | None:
    top = max((*found, *profile.values()), key=lambda a: a.value)
    if top.value <= best.value + FLAT:
        return None
    return float(np.tanh(top.theta[-1])), top.value - shift
