"""The one engine that fits every expected-return model: gathered windows, batched closed form."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pipeline.core.abnormal import AbnormalReturns, concatenate
from pipeline.core.prices import Booleans, Floats, Integers, PricePanel
from pipeline.core.window import Window

CHUNK = 256
FLAT = 1e-20


@dataclass(frozen=True, slots=True, eq=False)
class Events:
    """N events of one exchange, located in its panel.

    Attributes:
        deals: N identifiers.
        column: (N,) the security's column.
        position: (N,) the session of day zero.
        masked: (N, E) estimation sessions not to use (another deal of the company is near).
    """

    deals: tuple[str, ...]
    column: Integers
    position: Integers
    masked: Booleans


def fit_events(
    model: str,
    offset: Floats,
    regressors: Floats,
    panel: PricePanel,
    events: Events,
    estimation: Window,
    span: Window,
) -> AbnormalReturns:
    """Abnormal returns of every event under one model.

    Ordinary least squares an event over its estimation window, deviations from the means first
    so that no digits are lost; s² = e'e / (M - d). Sessions without a return, or masked, are not
    used. Equation numbers: MacKinlay 1997, JEL 35, sec. 5; forecast errors in
    :class:`~pipeline.core.abnormal.AbnormalReturns`.

    Args:
        model: key of the model.
        offset: (T,) part of the expected return that needs no parameter.
        regressors: (T, d), a constant first, or d = 0.
        panel: prices of the exchange.
        events: where they lie.
        estimation: sessions of the estimation window.
        span: event days wanted.
    """
    parts = [
        _chunk(model, offset, regressors, panel, events, slice(at, at + CHUNK), estimation, span)
        for at in range(0, max(len(events.deals), 1), CHUNK)
    ]
    return concatenate(parts)


def _chunk(
    model: str,
    offset: Floats,
    regressors: Floats,
    panel: PricePanel,
    events: Events,
    part: slice,
    estimation: Window,
    span: Window,
) -> AbnormalReturns:
    column, position = events.column[part], events.position[part]
    excess = panel.returns - offset[:, None] if offset.any() else panel.returns
    e_at, e_inside = _positions(position, estimation, len(panel.sessions))
    s_at, s_inside = _positions(position, span, len(panel.sessions))
    y = np.where(e_inside, excess[e_at, column[:, None]], np.nan)
    x = regressors[e_at]
    used = np.isfinite(y) & np.isfinite(x).all(axis=2) & ~events.masked[part]
    parameters, bread = least_squares(y, x, used)
    residuals = np.where(used, y, np.nan) - np.einsum("ned,nd->ne", x, parameters)
    observations = used.sum(axis=1)
    free = observations - x.shape[2]
    fitted = np.isfinite(parameters).all(axis=1) & (free > 0)
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = np.where(fitted, np.nansum(residuals**2, axis=1) / free, np.nan)
    x_event = np.where(s_inside[:, :, None], regressors[s_at], np.nan)
    expected = offset[s_at] + np.einsum("nld,nd->nl", x_event, parameters)
    expected = np.where(s_inside, expected, np.nan)
    realised = np.where(s_inside, panel.returns[s_at, column[:, None]], np.nan)
    not_a_day = np.datetime64("NaT")
    return AbnormalReturns(
        model=model,
        deals=events.deals[part],
        span=span,
        returns=realised - expected,
        days=np.where(s_inside, panel.sessions[s_at], not_a_day),
        regressors=x_event,
        bread=bread,
        parameters=parameters,
        residual_variance=variance,
        observations=observations.astype(np.int64),
        estimation_returns=residuals,
        estimation_days=np.where(e_inside, panel.sessions[e_at], not_a_day),
        expected=expected,
    )


def _positions(position: Integers, window: Window, sessions: int) -> tuple[Integers, Booleans]:
    """(N, L) session indices of a window, clipped, and which of them exist."""
    at = position[:, None] + np.arange(window.start, window.end + 1)
    inside = (at >= 0) & (at < sessions)
    return np.clip(at, 0, sessions - 1), inside


def least_squares(y: Floats, x: Floats, used: Booleans) -> tuple[Floats, Floats]:
    """Batched least squares with a constant as first regressor.

    Args:
        y: (N, E); values where ``used`` is false are ignored.
        x: (N, E, d), ones first; d may be 0.
        used: (N, E).

    Returns:
        (N, d) parameters and (N, d, d) inverse of X'X. NaN for an event whose regressors are
        collinear or whose observations are too few.
    """
    n, _, d = x.shape
    if d == 0:
        return np.zeros((n, 0)), np.zeros((n, 0, 0))
    count = used.sum(axis=1).astype(np.float64)
    count[count == 0] = np.nan
    weight = used[:, :, None]
    y_mean = np.where(used, y, 0.0).sum(axis=1) / count
    slopes = x[:, :, 1:]
    x_mean = np.where(weight, slopes, 0.0).sum(axis=1) / count[:, None]
    yc = np.where(used, y - y_mean[:, None], 0.0)
    xc = np.where(weight, slopes - x_mean[:, None, :], 0.0)
    moments = np.einsum("nei,nej->nij", xc, xc)
    # A regressor that never moves leaves only rounding around its mean.
    size = np.einsum("nei,nei->ni", xc, xc) + count[:, None] * x_mean**2
    moments[np.einsum("nii->ni", moments) <= FLAT * size] = np.nan
    inverse = _inverses(moments)
    slope = np.einsum("nij,nej,ne->ni", inverse, xc, yc)
    parameters = np.column_stack([y_mean - (x_mean * slope).sum(axis=1), slope])
    bread = np.empty((n, d, d))
    lean = np.einsum("nij,nj->ni", inverse, x_mean)
    bread[:, 0, 0] = 1 / count + (lean * x_mean).sum(axis=1)
    bread[:, 0, 1:] = bread[:, 1:, 0] = -lean
    bread[:, 1:, 1:] = inverse
    return parameters, bread


def _inverses(moments: Floats) -> Floats:
    """(N, k, k) inverses; NaN where the matrix is singular to working precision."""
    k = moments.shape[1]
    if k == 0:
        return moments
    scale = np.sqrt(np.einsum("nii->ni", moments))
    with np.errstate(divide="ignore", invalid="ignore"):
        correlation = moments / (scale[:, :, None] * scale[:, None, :])
    good = np.isfinite(correlation).all(axis=(1, 2))
    good[good] = np.linalg.eigvalsh(correlation[good])[:, 0] > 1e-12
    inverse = np.full_like(moments, np.nan)
    outer = scale[good][:, :, None] * scale[good][:, None, :]
    inverse[good] = np.linalg.inv(correlation[good]) / outer
    return inverse
