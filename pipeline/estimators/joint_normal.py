"""A choice and an outcome with jointly normal errors: the likelihood and its derivatives.

One likelihood serves two models: the outcome is seen for those who chose alone (selection), or
for all rows with the choice among its regressors (treatment).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from pipeline.core.prices import Floats, Integers
from pipeline.estimators.probit import LOG_ROOT_TWO_PI, mills


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
