"""What a picture of the identification shows: instruments, overlap, and the correction's spread."""

from __future__ import annotations

import numpy as np

from pipeline.core.design import Design, FitOptions
from pipeline.core.estimate import EstimationFailed
from pipeline.core.findings import InputProblem
from pipeline.core.pictures import facts
from pipeline.core.prices import Booleans, Floats
from pipeline.estimators.algebra import partial_out
from pipeline.estimators.balance import overlap, standardised_differences
from pipeline.estimators.probit import Equation, fit_probit, mills
from pipeline.estimators.propensity import fit_logit, observed
from pipeline.estimators.selection_rows import checked_selection
from pipeline.estimators.stages import parts_of

BINS = 20
SMALLEST_BIN = 5
Rows = list[dict[str, object]]


def pictured(design: Design, options: FitOptions) -> dict[str, Rows]:
    """The rows of each picture's frame; none of a picture that has no meaning here."""
    found: dict[str, Rows] = {"picture_facts": []}
    for make in (first_stage, alike, correction):
        try:
            made = make(design, options)
        except (InputProblem, EstimationFailed, np.linalg.LinAlgError):
            continue  # the column that needs it says why it has no number
        found["picture_facts"] += made.pop("picture_facts", [])
        found |= made
    return found


def first_stage(design: Design, options: FitOptions) -> dict[str, Rows]:
    """The treatment against each instrument, the controls, effects and other instruments removed.

    The least-squares line through the residuals has the first stage's own coefficient (Frisch and
    Waugh 1933; Lovell 1963). Deals are put into at most 20 bins of as many deals each, in order of
    the instrument's residual; those of equal residuals stay together.
    """
    if not design.instruments or len(design.endogenous) > 1:
        return {}
    parts = parts_of(design, options)
    rows: Rows = []
    slopes = {}
    for at, name in enumerate(parts.instruments):
        others = np.delete(parts.Z, at, axis=1)
        left = np.column_stack([parts.D, parts.Z[:, at]])
        left = partial_out(left, others) if others.shape[1] else left
        D, z = left[:, 0], left[:, 1]
        slope = float(z @ D / (z @ z))
        slopes[f"slope: {name}"] = slope
        for number, (x, y, deals) in enumerate(binned(z, D)):
            rows.append(
                {
                    "instrument": name,
                    "bin": number + 1,
                    "deals": deals,
                    "instrument_mean": x,
                    "treatment_mean": y,
                    "slope": slope,
                }
            )
    return {"first_stage_bins": rows, "picture_facts": facts("first_stage", slopes)}


def binned(x: Floats, y: Floats) -> list[tuple[float, float, int]]:
    """Means of ``x`` and ``y`` (n,) and the count, by bins of about as many in order of ``x``."""
    bins = min(BINS, max(2, len(x) // SMALLEST_BIN))
    edges = np.unique(np.quantile(x, np.linspace(0, 1, bins + 1)[1:-1]))
    codes = np.searchsorted(edges, x, side="left")
    found = []
    for code in np.unique(codes):
        inside = codes == code
        found.append((float(x[inside].mean()), float(y[inside].mean()), int(inside.sum())))
    return found


def alike(design: Design, options: FitOptions) -> dict[str, Rows]:
    """Each deal's fitted probability of the treatment, and the controls' balance by weighting.

    Weights are inverse probabilities, over all deals, as in
    :func:`~pipeline.estimators.weighting.weighting`.
    """
    if not design.treatment:
        return {}
    rows = observed(design, options)
    logit = fit_logit(rows.D, rows.X, rows.names)
    weights = np.where(rows.D, 1 / logit.p, 1 / (1 - logit.p))
    balance = _balance(rows.X, rows.names, rows.D, weights)
    spread, _ = overlap(logit.p, rows.D)
    largest = {
        f"{when}_largest": max((abs(float(str(row[when]))) for row in balance), default=0.0)
        for when in ("before", "after")
    }
    return {
        "propensity": [
            {"deal": deal, "treated": bool(treated), "probability": float(p)}
            for deal, treated, p in zip(design.rows, rows.D, logit.p, strict=True)
        ],
        "balance": balance,
        "picture_facts": [*facts("propensity", spread), *facts("balance", largest)],
    }


def _balance(X: Floats, names: tuple[str, ...], D: Booleans, weights: Floats) -> Rows:
    varies = np.ptp(X, axis=0) > 0
    before = standardised_differences(X[:, varies], D, np.ones(len(D)))
    after = standardised_differences(X[:, varies], D, weights)
    kept = [name for name, varied in zip(names, varies, strict=True) if varied]
    return [
        {"variable": name, "before": float(b), "after": float(a)}
        for name, b, a in zip(kept, before, after, strict=True)
    ]


def correction(design: Design, options: FitOptions) -> dict[str, Rows]:
    """The inverse Mills ratio of each deal and its best straight-line prediction.

    The prediction is from the outcome's own regressors; what they leave is all that tells the
    correction apart from them (Leung and Yu 1996). ``r_squared`` is their share of its variance.
    """
    if design.selection is None:
        return {}
    selection = checked_selection(design)
    key = (*selection.excluded, *selection.names[::-1])[0]
    fitted = fit_probit(
        Equation(selection.selected, selection.W, selection.names, "announcing a deal", key)
    )
    rows = selection.outcome_row[selection.selected]
    ratio = np.empty(design.n)
    ratio[rows] = mills(fitted.index[selection.selected])
    left = partial_out(ratio[:, None], design.X)[:, 0]
    spread = ratio - ratio.mean()
    share = 1 - float(left @ left) / float(spread @ spread)
    return {
        "mills": [
            {"deal": deal, "mills": float(value), "predicted": float(value - rest)}
            for deal, value, rest in zip(design.rows, ratio, left, strict=True)
        ],
        "picture_facts": facts("mills", {"r_squared": share}),
    }
