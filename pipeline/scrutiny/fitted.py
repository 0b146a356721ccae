"""What each column makes of each deal: its fitted outcome and what is left."""

from __future__ import annotations

from collections.abc import Container, Iterable, Mapping

import numpy as np

from pipeline.core.design import Design
from pipeline.core.estimate import Column, Estimate, EstimationFailed
from pipeline.core.prices import Booleans, Floats
from pipeline.estimators.absorb import demean, without_singletons

CONSTANT = "constant"
Rows = list[dict[str, object]]


def fits_of(
    design: Design,
    columns: Iterable[Column],
    further: Mapping[str, Floats],
    shown: Container[str],
) -> Rows:
    """One row a deal and column that predicts a deal: observed, fitted, residual, decimal.

    Of instruments the residual is that of the outcome's own equation, with the treatment as it
    was. Fixed effects count as part of the fit. Columns that give a difference of means and no
    prediction of a deal have no rows, nor have deals that a column left out.

    Args:
        design: the rows.
        columns: of the comparison table.
        further: name -> (n,) a regressor that the design lacks, such as the correction for who
            announces.
        shown: the deals that are told of.
    """
    rows: Rows = []
    for column in columns:
        found = residuals(design, column, further) if isinstance(column, Estimate) else None
        if found is None:
            continue
        kept, left = found
        for at, rest in zip(np.flatnonzero(kept).tolist(), left.tolist(), strict=True):
            if design.rows[at] not in shown:
                continue
            rows.append(
                {
                    "deal": design.rows[at],
                    "column": column.title,
                    "observed": float(design.y[at]),
                    "fitted": float(design.y[at]) - rest,
                    "residual": rest,
                }
            )
    return rows


def residuals(
    design: Design, column: Estimate, further: Mapping[str, Floats]
) -> tuple[Booleans, Floats] | None:
    """(n,) the rows a column was fitted on, and (m,) what it leaves of them; None without one."""
    known = {**{name: design.X[:, at] for at, name in enumerate(design.names)}, **further}
    effects = {name: codes for name, codes in design.effects.items() if name in column.effects}
    if not set(column.names) <= set(known) or not (effects or CONSTANT in column.names):
        return None
    used = np.column_stack([known[name] for name in column.names])
    left = design.y - used @ column.coefficients
    kept = np.ones(design.n, dtype=np.bool_)
    if effects:
        kept = without_singletons(effects)
        try:
            inside = {name: codes[kept] for name, codes in effects.items()}
            left = demean(left[kept][:, None], inside)[:, 0]
        except EstimationFailed:
            return None
    return (kept, np.asarray(left)) if len(left) == column.n else None
