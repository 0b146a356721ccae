"""The specification curve: every declared way to make the estimate, sorted, with its choices."""

from __future__ import annotations

import numpy as np
import pandas as pd

from pipeline.report.document import Block, Figure, Piece
from pipeline.report.material import Material, embedded, named, prose, taken
from pipeline.report.numerals import PERCENT, amount, true_minus, unit_digits
from pipeline.report.wording import axis_words

CHOICES = ("outcome", "controls", "winsorise", "sample", "estimator")
REACH = 1.96


def curve_blocks(material: Material) -> list[Block]:
    """The curve in words and as a picture; nothing if it was not asked for."""
    frame = material.results.specifications
    if frame.empty or "curve_cells" not in material.headline_names:
        return []
    unit = material.unit
    digits = unit_digits(float(frame["std_error"].median()), unit)
    ends = material.span(("curve_low", "curve_high"), digits)
    share = material.number("curve_same_sign", scale=PERCENT, digits=0)
    middle = material.effect("curve_median", digits)
    feature = embedded(named(material.feature), "study")
    words: list[Piece] = [
        "Over ", material.number("curve_cells"), " ways to make the ", _effect(frame), " of ",
        feature, " the median is ", *middle, ", from ", *ends, "; ", share,
        "% of them have the headline's sign.",
    ]  # fmt: skip
    if "curve_p_median" in material.headline_names:
        words += [
            " Had the feature been dealt out among the deals at random, a median least-squares "
            "effect as far from zero would come with a chance of ",
            material.number("curve_p_median", digits=3), ".",
        ]  # fmt: skip
    if "curve_significant_adjusted" in material.headline_names:
        share = material.number("curve_significant_adjusted", scale=PERCENT, digits=0)
        words += [
            " With all of them allowed for at once, ", share, "% keep a p-value below ",
            *material.percent("significance_level"), ".",
        ]  # fmt: skip
    return [prose(*words), _figure(material, frame)]


def _effect(frame: pd.DataFrame) -> str:
    """What the curve is of, in words: the study may have asked for other estimators too."""
    plain = {"least squares", "fixed effects"} >= set(frame["estimator"])
    return "least-squares effect" if plain else "effect"


def _figure(material: Material, frame: pd.DataFrame) -> Figure:
    alive = frame[np.isfinite(frame["estimate"])].sort_values("estimate", kind="stable")
    unit, half = material.unit, REACH * alive["std_error"]
    low, high = alive["estimate"] - half, alive["estimate"] + half
    data = pd.DataFrame(
        {
            "rank": np.arange(1, len(alive) + 1),
            f"estimate_{unit.slug}": alive["estimate"].to_numpy() * unit.scale,
            f"low_{unit.slug}": low.to_numpy() * unit.scale,
            f"high_{unit.slug}": high.to_numpy() * unit.scale,
            "deals": alive["n"].to_numpy(),
            **{name: [true_minus(text) for text in alive[name]] for name in CHOICES},
        }
    )
    headline = int(np.flatnonzero(alive.index == 0)[0]) + 1 if 0 in alive.index else 0
    share = material.number("curve_same_sign", scale=PERCENT, digits=0)
    title = prose(share, "% of the ways to make the estimate have the headline's sign")
    caption = prose(
        "Above: the ", _effect(frame), " in every declared way to make it, sorted, in ",
        taken(unit.words, "study"), ", with about its ", material.percent("confidence_level"),
        " interval; the square is the headline. Below: a mark where the choice named was made.",
    )  # fmt: skip
    least, most = (amount(alive["estimate"].iloc[at], unit) for at in (0, -1))
    alt = f"{len(data)} estimates sorted from {least} to {most}, with their choices."
    axis = axis_words(material.feature, unit)
    marks = {"headline": float(headline)}
    return Figure("specifications", "choices", title, caption, alt, data, marks, axis, unit.slug)
