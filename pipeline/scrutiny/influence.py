"""Which deals carry the answer: everything left out in turn, without refitting what algebra gives.

Least squares and two stages are functions of second moments. A group's rows are taken out of the
moments, so that leaving out each of hundreds of deals, companies or levels costs one small solve.
The effects' indicators are columns here: leaving out rows then is what refitting would give.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import linalg

from pipeline.core.design import Design
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.estimators.absorb import without_singletons
from pipeline.estimators.algebra import partial_out, scaled
from pipeline.estimators.covariance import recoded

CITATION = "Belsley, Kuh and Welsch (1980)"
MOST_LEVELS = 400
RANK = 1e-9


@dataclass(frozen=True, slots=True, eq=False)
class Moments:
    """Columns whose second moments decide the effect; every fixed part is made orthonormal.

    Attributes:
        columns: (n, 2 + L + q) outcome, treatment, L instruments, q orthonormal controls.
        instruments: L; 0 for least squares.
        kept: (n_design,) rows of the design that are in.
    """

    columns: Floats
    instruments: int
    kept: Booleans


@dataclass(frozen=True, slots=True, eq=False)
class LeftOutGroups:
    """The effect without each group of a dimension.

    Attributes:
        dimension: what was left out, in words.
        groups: (G,) codes; sizes: (G,) rows of each.
        effects: (G,) the coefficient without the group; NaN where nothing identifies it.
        full: with everything.
    """

    dimension: str
    groups: Integers
    sizes: Integers
    effects: Floats
    full: float

    @property
    def largest(self) -> int:
        """Position of the group that moves the effect most."""
        return int(np.nanargmax(np.abs(self.effects - self.full)))


def moments_of(design: Design, *, effects: bool, instruments: bool) -> Moments:
    """The columns of a least-squares or two-stage fit of the design.

    With ``effects`` their indicators join the controls and rows alone in a level go, as in
    :func:`~pipeline.estimators.least_squares.fixed_effects`.

    Raises:
        ValueError: if the effects have more than 400 levels, too many for columns: refit; or if
            the instruments move other variables beside the treatment.
    """
    if instruments and len(design.endogenous) > 1:
        raise ValueError("the algebra is made for one chosen variable")
    kept = np.ones(design.n, dtype=np.bool_)
    at = design.names.index(design.treatment)
    controls = np.delete(design.X, at, axis=1)
    if effects and design.effects:
        kept = without_singletons(design.effects)
        levels = [recoded(codes[kept]) for codes in design.effects.values()]
        if sum(int(codes.max()) + 1 for codes in levels) > MOST_LEVELS:
            raise ValueError(f"more than {MOST_LEVELS} levels of fixed effects")
        dummies = [np.eye(int(codes.max()) + 1)[codes] for codes in levels]
        controls = np.column_stack([controls[kept], *dummies])
    Q = _basis(controls)
    Z = design.Z[kept] if instruments else np.empty((int(kept.sum()), 0))
    whole = np.column_stack([design.y[kept], design.X[kept, at], Z])
    return Moments(np.column_stack([partial_out(whole, Q), Q]), Z.shape[1], kept)


def _basis(controls: Floats) -> Floats:
    """(n, rank) orthonormal columns that span ``controls`` (n, m)."""
    Q, R, _ = linalg.qr(scaled(controls)[0], mode="economic", pivoting=True)
    size = np.abs(np.diag(R))
    return np.asarray(Q[:, size > RANK * size.max(initial=0.0)], dtype=np.float64)


def effects_of(moments: Floats, instruments: int) -> Floats:
    """(G,) treatment coefficients from second moments (G, p, p) in :class:`Moments` order."""
    first = 2 + instruments
    inner, cross, rest = moments[:, :first, :first], moments[:, :first, first:], moments[:, first:]
    inverse = np.linalg.pinv(rest[:, :, first:], rcond=RANK, hermitian=True)
    left = inner - cross @ inverse @ np.swapaxes(cross, 1, 2)
    y, D = left[:, 0], left[:, 1]
    if instruments:
        # A level that left takes its dummy with it, an instrument may follow: hence pinv.
        z = np.linalg.pinv(left[:, 2:, 2:], rcond=RANK, hermitian=True)
        weights = np.einsum("gl,glm->gm", D[:, 2:], z)
        above = np.einsum("gl,gl->g", weights, y[:, 2:])
        below = np.einsum("gl,gl->g", weights, D[:, 2:])
    else:
        above, below = y[:, 1], D[:, 1]
    whole = np.abs(moments[:, 1, 1])
    alive = np.abs(below) > RANK * np.where(whole > 0, whole, 1.0)
    return np.where(alive, above / np.where(alive, below, 1.0), np.nan)


def leave_out(moments: Moments, codes: Integers, dimension: str) -> LeftOutGroups:
    """The effect without each group of ``codes`` (n,), rows in the order of ``moments.columns``.

    Equals a refit on the other rows, but that rows become alone in their level of an effect,
    which move no coefficient, stay.
    """
    at = recoded(codes)
    size = moments.columns.shape[1]
    total = moments.columns.T @ moments.columns
    order = np.argsort(at, kind="stable")
    starts = np.searchsorted(at[order], np.arange(int(at.max()) + 1))
    rows = moments.columns[order]
    gone = np.add.reduceat(rows[:, :, None] * rows[:, None, :], starts, axis=0)
    full = float(effects_of(total.reshape(1, size, size), moments.instruments)[0])
    return LeftOutGroups(
        dimension=dimension,
        groups=np.asarray(codes[order][starts]),
        sizes=np.bincount(at).astype(np.int64),
        effects=effects_of(total - gone, moments.instruments),
        full=full,
    )


def leave_out_refitting(
    design: Design, codes: Integers, dimension: str, effect: Callable[[Design], float]
) -> LeftOutGroups:
    """The same for any estimator, by refitting; ``effect`` returns NaN where it has no answer.

    ``codes`` (n,) are in the design's order. A design with candidates is refused: their rows are
    not cut here.

    Raises:
        ValueError: if the design has a selection equation.
    """
    if design.selection is not None:
        raise ValueError("rows of a design with candidates cannot be left out one group at a time")
    groups = np.unique(codes)
    found = [effect(rows_of(design, codes != group)) for group in groups]
    sizes = np.array([int((codes == group).sum()) for group in groups])
    return LeftOutGroups(dimension, groups, sizes, np.array(found), effect(design))


def rows_of(design: Design, keep: Booleans) -> Design:
    """The design on the rows ``keep`` (n,), without its candidates."""
    return replace(
        design,
        y=design.y[keep],
        X=design.X[keep],
        Z=design.Z[keep] if design.instruments else design.Z,
        rows=tuple(row for row, stays in zip(design.rows, keep, strict=True) if stays),
        effects={name: codes[keep] for name, codes in design.effects.items()},
        clusters={name: codes[keep] for name, codes in design.clusters.items()},
        selection=None,
        outcome_variance=None if design.outcome_variance is None else design.outcome_variance[keep],
    )


def named_by(rows: Sequence[str], codes: Integers, group: int, most: int = 3) -> str:
    """A group by the deals in it, the first ``most`` spelled out."""
    members = [row for row, code in zip(rows, codes, strict=True) if code == group]
    more = len(members) - most
    return ", ".join(members[:most]) + (f" and {more} more" if more > 0 else "")


@dataclass(frozen=True, slots=True)
class Fewest:
    """The fewest deals found that turn the sign: their names in order, and the effect without.

    ``share`` is of all deals; ``turned`` is false if leaving out the most allowed did not.
    """

    deals: tuple[str, ...]
    share: float
    effect: float
    turned: bool


def fewest_to_turn(moments: Moments, rows: Sequence[str], most: float = 0.2) -> Fewest:
    """How many deals must go before the effect changes sign.

    Deals go in the order of what leaving each out alone does to the effect, computed again after
    each tenth of the way, and the effect is exact after each step; another set may be smaller
    (in the spirit of Broderick, Giordano and Meager 2020). ``rows`` (n,) names the deals in the
    order of ``moments.columns``; at most a share ``most`` of them go.
    """
    n, size = moments.columns.shape
    keep = np.ones(n, dtype=bool)
    total = moments.columns.T @ moments.columns
    full = float(effects_of(total[None], moments.instruments)[0])
    out: list[int] = []
    effect, limit = full, int(most * n)
    while len(out) < limit:
        at = np.flatnonzero(keep)
        alone = leave_out(replace(moments, columns=moments.columns[at]), np.arange(len(at)), "deal")
        toward = np.sign(full) * (effect - alone.effects)
        batch = at[np.argsort(-np.nan_to_num(toward, nan=-np.inf), kind="stable")]
        batch = batch[: max(1, min(limit // 10, limit - len(out)))]
        taken = moments.columns[batch]
        path = total - np.cumsum(taken[:, :, None] * taken[:, None, :], axis=0)
        effects = effects_of(path, moments.instruments)
        turned = np.flatnonzero(effects * full <= 0)
        used = int(turned[0]) + 1 if len(turned) else len(batch)
        out += batch[:used].tolist()
        keep[batch[:used]] = False
        total, effect = path[used - 1].reshape(size, size), float(effects[used - 1])
        if len(turned):
            return Fewest(tuple(rows[i] for i in out), len(out) / n, effect, True)
    return Fewest(tuple(rows[i] for i in out), len(out) / n, effect, False)


def dimensions(
    design: Design, kept: Booleans, further: Mapping[str, Integers]
) -> Mapping[str, Integers]:
    """What may be left out in turn: deals, clusters, levels of the effects and ``further``.

    ``further`` holds (n,) codes a name; those found are of the rows ``kept`` (n,).
    """
    found: dict[str, Integers] = {"deal": np.arange(int(kept.sum()))}
    for name, codes in {**design.clusters, **design.effects, **further}.items():
        found[name] = codes[kept]
    return found


def without_control(design: Design, name: str) -> Design:
    """The design without one of its regressors."""
    at = design.names.index(name)
    names = tuple(other for other in design.names if other != name)
    return replace(design, X=np.delete(design.X, at, axis=1), names=names)
