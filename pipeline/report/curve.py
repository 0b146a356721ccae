"""The specification curve: every declared way to make the estimate, sorted, with its choices."""

from __future__ import annotations

import numpy as np
import pandas as pd

from pipeline.report.document import Block, Figure, Piece
from pipeline.report.material import Material, capital, embedded, named, prose
from pipeline.report.numerals import BP, PERCENT, bp_digits, show, true_minus

CHOICES = ("outcome", "controls", "winsorise", "sample", "estimator")
REACH = 1.96


def curve_blocks(material: Material) -> list[Block]:
    """The curve in words and as a picture; nothing if it was not asked for."""
    frame = material.results.specifications
    if frame.empty or "curve_cells" not in material.headline_names:
        return []
    digits = bp_digits(BP * float(frame["std_error"].median()))
    ends = [material.number(f"curve_{name}", scale=BP, digits=digits) for name in ("low", "high")]
    share = material.number("curve_same_sign", scale=PERCENT, digits=0)
    middle = material.number("curve_median", scale=BP, digits=digits)
    feature = embedded(named(material.feature), "study")
    words: list[Piece] = [
        "Over ", material.number("curve_cells"), " ways to make the least-squares effect of ",
        feature, " the median is ", middle, " bp, from ", ends[0], " to ", ends[1], " bp; ", share,
        "% of them have the headline's sign.",
    ]  # fmt: skip
    if "curve_p_median" in material.headline_names:
        words += [
            " Had the feature been dealt out among the deals at random, a median as far from zero "
            "would come with a chance of ", material.number("curve_p_median", digits=3), ".",
        ]  # fmt: skip
    return [prose(*words), _figure(material, frame)]


def _figure(material: Material, frame: pd.DataFrame) -> Figure:
    alive = frame[np.isfinite(frame["estimate"])].sort_values("estimate", kind="stable")
    data = pd.DataFrame(
        {
            "rank": np.arange(1, len(alive) + 1),
            "estimate_bp": alive["estimate"].to_numpy() * BP,
            "low_bp": (alive["estimate"] - REACH * alive["std_error"]).to_numpy() * BP,
            "high_bp": (alive["estimate"] + REACH * alive["std_error"]).to_numpy() * BP,
            "deals": alive["n"].to_numpy(),
            **{name: [true_minus(text) for text in alive[name]] for name in CHOICES},
        }
    )
    headline = int(np.flatnonzero(alive.index == 0)[0]) + 1 if 0 in alive.index else 0
    share = material.number("curve_same_sign", scale=PERCENT, digits=0)
    title = prose(share, "% of the ways to make the estimate have the headline's sign")
    caption = prose(
        "Above: the least-squares effect in every declared way to make it, sorted, in basis "
        "points, with about its ", material.percent("confidence_level"), " interval; the square "
        "is the headline. Below: a mark where the choice named was made.",
    )  # fmt: skip
    low, high = float(data["estimate_bp"].min()), float(data["estimate_bp"].max())
    alt = f"{len(data)} estimates sorted from {show(low)} to {show(high)} bp, with their choices."
    axis = f"{capital(material.feature)} (bp)"
    marks = {"headline": float(headline)}
    return Figure("specifications", "choices", title, caption, alt, data, marks, axis)
