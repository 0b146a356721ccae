"""The one engine that fits every expected-return model: gathered windows, batched closed form."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.prices import Booleans, Floats, Integers, PricePanel
from pipeline.core.window import Window
from pipeline.returns.expected import MeanModel

# Small enough for the windows of a chunk to stay in the processor's cache.
CHUNK = 256
SINGULAR = 1e-12
ROUNDING = 1e-24
Arrays = dict[str, np.ndarray]


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
    name: str,
    model: MeanModel,
    panel: PricePanel,
    events: Events,
    estimation: Window,
    span: Window,
) -> AbnormalReturns:
    """Abnormal returns of every event of one exchange under one model; see :func:`fit_into`."""
    n = len(events.deals)
    arrays = blank(n, model, estimation, span)
    fit_into(arrays, np.arange(n), model, panel, events, estimation, span)
    return AbnormalReturns(model=name, deals=events.deals, span=span, **arrays)


def blank(n: int, model: MeanModel, estimation: Window, span: Window) -> Arrays:
    """Empty arrays of :class:`AbnormalReturns` for n events."""
    width, length = len(span), len(estimation)
    d = model.regressors.shape[1] if model.aggregate is None else 2
    day = "datetime64[D]"
    return {
        "returns": np.empty((n, width)),
        "days": np.empty((n, width), dtype=day),
        "regressors": np.empty((n, width, d)),
        "bread": np.empty((n, d, d)),
        "parameters": np.empty((n, d)),
        "residual_variance": np.empty(n),
        "observations": np.empty(n, dtype=np.int64),
        "estimation_returns": np.empty((n, length)),
        "estimation_days": np.empty((n, length), dtype=day),
        "expected": np.empty((n, width)),
    }


def fit_into(
    arrays: Arrays,
    rows: Integers,
    model: MeanModel,
    panel: PricePanel,
    events: Events,
    estimation: Window,
    span: Window,
) -> None:
    """Fit every event and write it to its row of ``arrays``.

    Ordinary least squares an event over its estimation window, deviations from the means first
    so that no digits are lost; s² = e'e / (M - d). Sessions without a return, or masked, are not
    used. MacKinlay 1997, JEL 35, sec. 5; forecast errors in
    :class:`~pipeline.core.abnormal.AbnormalReturns`.

    Args:
        arrays: from :func:`blank`; row ``rows[i]`` belongs to event i.
        rows: (N,) rows to fill.
        model: offset and regressors on the panel's sessions.
        panel: prices of the exchange.
        events: N events; neighbours in memory when sorted by column.
        estimation: sessions of the estimation window.
        span: event days wanted.
    """
    for part in _chunks(len(events.deals)):
        values = _fit_chunk(model, panel, events, part, estimation, span)
        for name, value in values.items():
            arrays[name][rows[part]] = value


def _chunks(n: int) -> Iterator[slice]:
    for at in range(0, n, CHUNK):
        yield slice(at, at + CHUNK)


def _fit_chunk(
    model: MeanModel,
    panel: PricePanel,
    events: Events,
    part: slice,
    estimation: Window,
    span: Window,
) -> Arrays:
    column, position = events.column[part], events.position[part]
    slopes = model.regressors[:, int(model.constant) :].T
    y = _windows(panel.returns.T, column, position, estimation)
    if model.offset.any():
        y = y - _windows(model.offset[None], None, position, estimation)
    x = (
        np.stack([_windows(each[None], None, position, estimation) for each in slopes])
        if len(slopes)
        else np.empty((0, *y.shape))
    )
    used = _usable(y, x, events.masked[part])
    parameters, bread, residuals = least_squares(y, x, used, model.constant)
    d = parameters.shape[1]
    forecast = slopes
    if model.aggregate is not None:
        everything = np.ones(y.shape, dtype=np.bool_) if used is None else used
        parameters = model.aggregate(parameters, y, x, everything)
        market = len(slopes) // 2
        residuals = y - parameters[:, :1] - parameters[:, 1:] * x[market]
        bread = np.zeros((len(y), 2, 2))
        forecast = slopes[market : market + 1]
    if used is not None:
        residuals = np.where(used, residuals, np.nan)
    observations = np.full(len(y), y.shape[1]) if used is None else used.sum(axis=1)
    event = _event(model, panel, column, position, span, parameters, forecast)
    return {
        **event,
        "bread": bread,
        "parameters": parameters,
        "residual_variance": _variance(residuals, observations - d, used),
        "observations": observations,
        "estimation_returns": residuals,
        "estimation_days": _days(panel, position, estimation),
    }


def _variance(residuals: Floats, free: Integers, used: Booleans | None) -> Floats:
    clean = residuals if used is None else np.where(used, residuals, 0.0)
    squares = np.einsum("ne,ne->n", clean, clean)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(free > 0, squares / free, np.nan)


def _event(
    model: MeanModel,
    panel: PricePanel,
    column: Integers,
    position: Integers,
    span: Window,
    parameters: Floats,
    slopes: Floats,
) -> Arrays:
    """Expected and abnormal returns of the event days, with their regressors."""
    realised = _windows(panel.returns.T, column, position, span)
    x = [_windows(each[None], None, position, span) for each in slopes]
    ones = [np.ones_like(realised)] if parameters.shape[1] > len(x) else []
    shape = (*realised.shape, 0)
    regressors = np.stack([*ones, *x], axis=2) if ones or x else np.empty(shape)
    expected = np.einsum("nld,nd->nl", regressors, parameters)
    expected += _windows(model.offset[None], None, position, span)
    return {
        "returns": realised - expected,
        "expected": expected,
        "regressors": regressors,
        "days": _days(panel, position, span),
    }


def _windows(series: Floats, column: Integers | None, position: Integers, window: Window) -> Floats:
    """(n, L) values of contiguous rows around positions; NaN beyond the ends.

    ``series`` is (S, T), one security a row; ``column`` None takes its single row.
    """
    length, sessions = len(window), series.shape[1]
    row = np.zeros(len(position), dtype=np.int64) if column is None else column
    first = position + window.start
    inside = (first >= 0) & (first + length <= sessions)
    if sessions < length or not inside.any():
        return _ragged(series, row, first, length)
    views = sliding_window_view(series, length, axis=1)
    if inside.all():
        return np.asarray(views[row, first])
    out = np.empty((len(position), length))
    out[inside] = views[row[inside], first[inside]]
    out[~inside] = _ragged(series, row[~inside], first[~inside], length)
    return out


def _ragged(series: Floats, row: Integers, first: Integers, length: int) -> Floats:
    at = first[:, None] + np.arange(length)
    exists = (at >= 0) & (at < series.shape[1])
    values = series[row[:, None], np.clip(at, 0, series.shape[1] - 1)]
    return np.where(exists, values, np.nan)


def _days(panel: PricePanel, position: Integers, window: Window) -> np.ndarray:
    at = position[:, None] + np.arange(window.start, window.end + 1)
    exists = (at >= 0) & (at < len(panel.sessions))
    if exists.all():
        return np.asarray(panel.sessions[at])
    days = panel.sessions[np.clip(at, 0, len(panel.sessions) - 1)]
    return np.where(exists, days, np.datetime64("NaT"))


def _usable(y: Floats, x: Floats, masked: Booleans) -> Booleans | None:
    """(n, E) sessions with all values and no mask; None if that is every one."""
    complete = np.isfinite(y.sum()) and np.isfinite(x.sum()) and not masked.any()
    if complete:
        return None
    return np.asarray(np.isfinite(y) & np.isfinite(x).all(axis=0) & ~masked)


def least_squares(
    y: Floats, x: Floats, used: Booleans | None = None, constant: bool = True
) -> tuple[Floats, Floats, Floats]:
    """Batched least squares, one regression a row.

    Args:
        y: (n, E); values where ``used`` is false are ignored.
        x: (k, n, E) regressors but the constant; k may be 0.
        used: (n, E), or None for every value.
        constant: whether each regression has a constant, its first parameter.

    Returns:
        (n, d) parameters, (n, d, d) inverse of X'X and (n, E) residuals, d = k + constant. NaN
        for a row whose regressors are collinear or whose observations are too few.
    """
    n, k = len(y), len(x)
    if used is None:
        count = np.full(n, float(y.shape[1]))
    else:
        count = used.sum(axis=1).astype(np.float64)
        count[count == 0] = np.nan
        y, x = np.where(used, y, 0.0), np.where(used, x, 0.0)
    y_mean = y.sum(axis=1) / count if constant else np.zeros(n)
    x_mean = x.sum(axis=2) / count if constant else np.zeros((k, n))
    yc, xc = y - y_mean[:, None], x - x_mean[:, :, None]
    if used is not None:
        yc, xc = np.where(used, yc, 0.0), np.where(used, xc, 0.0)
    inverse = _inverses(xc, x_mean)
    cross = (
        np.stack([np.einsum("ne,ne->n", each, yc) for each in xc], axis=1)
        if k
        else (np.zeros((n, 0)))
    )
    slope = np.einsum("nij,nj->ni", inverse, cross)
    residuals = yc
    for at in range(k):
        residuals = residuals - slope[:, at, None] * xc[at]
    if not constant:
        return slope, inverse, residuals
    parameters = np.column_stack([y_mean - (x_mean.T * slope).sum(axis=1), slope])
    bread = np.empty((n, k + 1, k + 1))
    lean = np.einsum("nij,jn->ni", inverse, x_mean)
    bread[:, 0, 0] = 1 / count + (lean * x_mean.T).sum(axis=1)
    bread[:, 0, 1:] = bread[:, 1:, 0] = -lean
    bread[:, 1:, 1:] = inverse
    return parameters, bread, residuals


def _inverses(x: Floats, mean: Floats) -> Floats:
    """(n, k, k) inverses of the moments of (k, n, E); NaN where singular to working precision.

    ``mean`` (k, n) was taken off: what is left of a constant is rounding, not movement.
    """
    k, n, length = x.shape
    moments = np.empty((n, k, k))
    for i in range(k):
        for j in range(i, k):
            moments[:, i, j] = moments[:, j, i] = np.einsum("ne,ne->n", x[i], x[j])
    spread = np.einsum("nii->ni", moments)
    moves = (spread > ROUNDING * length * mean.T**2) & (spread > 0)
    if k <= 1:
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(moves[:, :, None], 1 / moments, np.nan)
    scale = np.sqrt(spread)
    with np.errstate(divide="ignore", invalid="ignore"):
        correlation = moments / (scale[:, :, None] * scale[:, None, :])
    good = np.isfinite(correlation).all(axis=(1, 2)) & moves.all(axis=1)
    good[good] = np.linalg.eigvalsh(correlation[good])[:, 0] > SINGULAR
    inverse = np.full_like(moments, np.nan)
    outer = scale[good][:, :, None] * scale[good][:, None, :]
    inverse[good] = np.linalg.inv(correlation[good]) / outer
    return inverse
