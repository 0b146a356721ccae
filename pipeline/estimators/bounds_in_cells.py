"""Trimming bounds within cells of what was known before, and their interval by resampling."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.prices import Booleans, Floats, Integers
from pipeline.core.selection import BoundsRow
from pipeline.estimators.bounds import imbens_manski, lee_bounds, trimmed_mean
from pipeline.estimators.covariance import recoded
from pipeline.estimators.treatment import binary_treatment

WITHOUT, WITHIN = "All deals together", "Within cells"
BY_INFLUENCE = "Imbens and Manski (2004), errors by influence (Lee 2009)"
BY_DRAWS = "Imbens and Manski (2004), errors by resampling"
NAN = float("nan")


@dataclass(frozen=True, slots=True, eq=False)
class Listed:
    """Every deal of the list, its outcome seen or not.

    Attributes:
        y: (A,) outcome, read where ``seen``.
        D: (A,) whether the deal has the treatment.
        seen: (A,) whether its outcome is seen.
        cells: (A,) codes of the cells, 0 without.
        groups: (A,) codes of the clusters drawn together.
    """

    y: Floats
    D: Booleans
    seen: Booleans
    cells: Integers
    groups: Integers

    def drawn(self, rows: Integers) -> Listed:
        """These rows, as often as they are named."""
        return Listed(
            self.y[rows], self.D[rows], self.seen[rows], self.cells[rows], self.groups[rows]
        )


@dataclass(frozen=True, slots=True)
class Range:
    """Lower and upper bound, share trimmed, and whether the treated arm is the one trimmed."""

    lower: float
    upper: float
    trimmed: float
    treated: bool


def range_of(rows: Listed) -> Range:
    """Lee's bounds averaged over cells.

    In each cell the arm seen more often overall is trimmed by 1 - (smaller share)/(larger
    share), by nothing where the cell's shares run the other way; the cells are averaged with the
    weights of the arm seen less often, that is of the deals seen with or without the treatment
    (Lee 2009, proposition 1b). With one cell they are his bounds.

    Raises:
        EstimationFailed: if a cell has fewer than two deals seen in an arm.
    """
    D, seen = rows.D, rows.seen
    if min((D & seen).sum(), (~D & seen).sum()) < 2:
        raise EstimationFailed("an arm has fewer than two deals to average")
    treated = bool(seen[D].mean() >= seen[~D].mean())
    more = D if treated else ~D
    totals = np.zeros(4)
    for cell in np.unique(rows.cells):
        here = rows.cells == cell
        often, seldom = here & more, here & ~more
        kept, base = rows.y[often & seen], rows.y[seldom & seen]
        if min(len(kept), len(base)) < 2:
            raise EstimationFailed("a cell has fewer than two deals seen in one of the arms")
        share = max(0.0, 1 - float(seen[seldom].mean() / seen[often].mean()))
        high = trimmed_mean(kept, share, from_below=True)[0] - base.mean()
        low = trimmed_mean(kept, share, from_below=False)[0] - base.mean()
        totals += len(base) * np.array([low, high, share, 1.0])
    low, high, share, _ = totals / totals[3]
    ends = (low, high) if treated else (-high, -low)
    return Range(float(ends[0]), float(ends[1]), float(share), treated)


def redrawn(rows: Listed, draws: int, seed: int) -> Floats:
    """(B, 2) bounds of the replications that have some, whole groups drawn with replacement."""
    rng = np.random.default_rng(seed)
    codes = recoded(rows.groups)
    order = np.argsort(codes, kind="stable")
    members = np.split(order, np.cumsum(np.bincount(codes))[:-1])
    found = []
    for _ in range(draws):
        pick = rng.integers(0, len(members), size=len(members))
        try:
            one = range_of(rows.drawn(np.concatenate([members[at] for at in pick])))
        except EstimationFailed:
            continue
        found.append((one.lower, one.upper))
    if len(found) < max(2, draws / 2):
        raise EstimationFailed(f"only {len(found)} of {draws} replications have bounds")
    return np.array(found)


def trimming_bounds(
    design: Design, cells: Integers, cell_names: tuple[str, ...], options: FitOptions, draws: int
) -> tuple[BoundsRow, ...]:
    """The bounds of all deals together and, if cells are named, within them.

    ``design.selection`` holds every deal of the list, ``selected`` those whose outcome is seen;
    ``cells`` (A,) are their codes. The first row's errors come from each deal's influence, those
    of the others from ``draws`` replications. Rows without a number say why.

    Raises:
        InputProblem: as :func:`~pipeline.estimators.bounds.lee_bounds`.
    """
    rows = _listed(design, cells)
    found = [_by_influence(design, rows, options)]
    if draws:
        whole = replace(rows, cells=np.zeros_like(cells))
        found.append(_by_draws(WITHOUT, whole, 1, options, draws))
    if cell_names and draws:
        words = f"{WITHIN} of {' and '.join(cell_names)}"
        found.append(_by_draws(words, rows, len(np.unique(cells)), options, draws))
    return tuple(found)


def _listed(design: Design, cells: Integers) -> Listed:
    selection = design.selection
    if selection is None:
        raise ValueError("the design holds no list of deals")
    binary_treatment(design)
    y = np.zeros(len(selection.selected))
    y[selection.selected] = design.y[selection.outcome_row[selection.selected]]
    D = selection.W[:, selection.names.index(design.treatment)] == 1.0
    groups = next(iter(selection.clusters.values()), np.arange(len(y)))
    return Listed(y, D, selection.selected, cells, np.asarray(groups))


def _by_influence(design: Design, rows: Listed, options: FitOptions) -> BoundsRow:
    try:
        column = lee_bounds(design, replace(options, covariance="auto", cluster=False))
    except EstimationFailed as failure:
        return _without(WITHOUT, rows, failure.reason)
    fit, ends = column.fit, column.interval
    found = Range(fit["lower"], fit["upper"], fit["trimmed"], bool(fit["trimmed_treated"]))
    return _filled(WITHOUT, rows, found, (ends.low, ends.high), 1, BY_INFLUENCE)


def _by_draws(version: str, rows: Listed, cells: int, options: FitOptions, draws: int) -> BoundsRow:
    try:
        found = range_of(rows)
        errors = redrawn(rows, draws, options.seed).std(axis=0, ddof=1)
    except EstimationFailed as failure:
        return _without(version, rows, failure.reason)
    ends = imbens_manski(
        found.lower, found.upper, float(errors[0]), float(errors[1]), options.level
    )
    return _filled(version, rows, found, ends, cells, BY_DRAWS)


def _filled(
    version: str, rows: Listed, found: Range, ends: tuple[float, float], cells: int, interval: str
) -> BoundsRow:
    empty = _without(version, rows, "")
    return replace(
        empty,
        lower=found.lower,
        upper=found.upper,
        ci_low=ends[0],
        ci_high=ends[1],
        trimmed=found.trimmed,
        trimmed_group="with the feature" if found.treated else "without it",
        cells=cells,
        interval=interval,
    )


def _without(version: str, rows: Listed, reason: str) -> BoundsRow:
    one, other = rows.y[rows.D & rows.seen], rows.y[~rows.D & rows.seen]
    fine = min(len(one), len(other)) > 0
    return BoundsRow(
        version=version,
        lower=NAN,
        upper=NAN,
        ci_low=NAN,
        ci_high=NAN,
        difference=float(one.mean() - other.mean()) if fine else NAN,
        trimmed=NAN,
        trimmed_group="",
        seen_treated=float(rows.seen[rows.D].mean()),
        seen_untreated=float(rows.seen[~rows.D].mean()),
        deals=len(rows.y),
        seen=int(rows.seen.sum()),
        cells=0,
        interval="",
        reason=reason,
    )
