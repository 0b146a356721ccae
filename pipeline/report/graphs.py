"""The figures as data: what is drawn, the takeaway, the caption and the picture in words."""

from __future__ import annotations

import numpy as np
import pandas as pd

from pipeline.core.estimate import Estimate
from pipeline.core.prices import Floats
from pipeline.report.document import Figure, Piece
from pipeline.report.headline import MEAN_REACTION, group_reactions, sensitivity_targets
from pipeline.report.material import (
    Material,
    capital,
    effect_digits,
    embedded,
    named,
    prose,
)
from pipeline.report.numerals import BP, PERCENT, bp_digits, show, slug, true_minus
from pipeline.report.wording import direction, set_words

BINS = 30
SORTED = 12


def path_figure(material: Material) -> Figure | None:
    """The cumulative average abnormal return by group; None without a path."""
    paths = material.results.paths
    if paths.empty:
        return None
    data = pd.DataFrame(
        {
            "group": paths["group"].astype("str"),
            "session": paths["day"].astype(int),
            "deals": paths["n"].astype(int),
            "mean_bp": paths["mean"].astype(float) * BP,
            "low_bp": paths["low"].astype(float) * BP,
            "high_bp": paths["high"].astype(float) * BP,
        }
    )
    if "low_path" in paths:
        data["low_path_bp"] = paths["low_path"].astype(float) * BP
        data["high_path_bp"] = paths["high_path"].astype(float) * BP
    window = material.study.headline
    caption = prose(
        "Mean cumulative abnormal return from session ",
        material.number("path_first_session", signed=True),
        ", in basis points. Shaded: the ", material.percent("confidence_level"),
        " band of each session taken alone (pointwise); a whole path leaves such a band more "
        "often. Thin dots: the band that holds the whole path. The grey strip is the headline "
        "window, session zero the first that could react.",
    )  # fmt: skip
    return Figure(
        "average_path", "path", prose(*_path_title(material)), caption, _path_words(data), data,
        {"from": window.start, "to": window.end},
    )  # fmt: skip


def _path_title(material: Material) -> list[Piece]:
    groups = list(dict.fromkeys(material.results.paths["group"].astype("str")))
    pieces: list[Piece] = ["By session ", material.number("path_last_session", signed=True)]
    for at, group in enumerate(groups):
        end = material.number(f"path_end: {group}", scale=BP, digits=0)
        pieces += [", " if at else ": ", embedded(group, "study"), " ", end, " bp"]
    return pieces


def _path_words(data: pd.DataFrame) -> str:
    parts = []
    for group, path in data.groupby("group", sort=False):
        last = path.iloc[-1]
        parts.append(
            f"{group}: {show(last['mean_bp'])} bp at session "
            f"{show(last['session'], signed=True)}, band {show(last['low_bp'])} to "
            f"{show(last['high_bp'])} bp"
        )
    return "Line chart of the mean cumulative abnormal return by session. " + "; ".join(parts) + "."


def distribution_figure(material: Material) -> Figure | None:
    """How the headline-window reactions spread over deals, by group; None without deals."""
    groups = group_reactions(material.results)
    if not groups or sum(len(values) for values in groups.values()) < 2:
        return None
    pieces: list[Piece] = ["Reactions below zero: "]
    for at, group in enumerate(groups):
        share = material.number(f"share_below_zero: {group}", scale=PERCENT, digits=0)
        deals = material.number(f"deals: {group}")
        pieces += [", " if at else "", embedded(group, "study"), " ", share, "% of ", deals]
    caption = prose(
        "Cumulative abnormal returns over sessions ", material.window(), ", in basis points, one "
        "panel a group; bars hold the share of the group's deals, the outermost ones also what "
        "lies beyond. The dashed line is the group's median.",
    )  # fmt: skip
    data = _bins(groups)
    marks = {f"median: {group}": float(np.median(v)) * BP for group, v in groups.items()}
    words = "; ".join(
        f"{group}: {len(v)} deals, median {show(float(np.median(v)) * BP)} bp"
        for group, v in groups.items()
    )
    alt = f"Histograms of the reaction by group. {words}."
    title = prose(*pieces, " deals")
    return Figure("distribution", "distribution", title, caption, alt, data, marks)


def _bins(groups: dict[str, Floats]) -> pd.DataFrame:
    """group, from_bp, to_bp, deals, share; common edges, the outermost bins open-ended."""
    every = np.concatenate(list(groups.values())) * BP
    low, high = np.quantile(every, [0.005, 0.995])
    low, high = (low, high) if high > low else (low - 1, high + 1)
    edges = np.linspace(low, high, min(BINS, max(5, len(every) // 4)) + 1)
    frames = []
    for group, values in groups.items():
        deals, _ = np.histogram(np.clip(values * BP, low, high), edges)
        frames.append(
            pd.DataFrame(
                {
                    "group": group,
                    "from_bp": edges[:-1],
                    "to_bp": edges[1:],
                    "deals": deals,
                    "share_percent": 100 * deals / len(values),
                }
            )
        )
    return pd.concat(frames, ignore_index=True)


def columns_figure(material: Material) -> Figure | None:
    """The feature's effect by column with its confidence set; None without two columns."""
    found = [e for e in material.estimates if e.treatment in e.names]
    if len(found) < 2:
        return None
    data = pd.DataFrame([_column_row(e, e is material.lead) for e in found])
    feature = embedded(named(material.feature), "study")
    title = prose(embedded(capital(material.feature), "study"), ": ", *_columns_title(material))
    caption = prose(
        "The coefficient of ", feature, " by column, in basis points per unit, with its ",
        material.percent("confidence_level"),
        " confidence set. Filled: the lead column. An arrow: the set goes on without end. The "
        "columns do not all estimate the same thing: see what each estimates in the table.",
    )  # fmt: skip
    words = "; ".join(
        f"{e.title} {show(row['estimate_bp'])} bp, {set_words(e.interval, 0)}"
        for e, (_, row) in zip(found, data.iterrows(), strict=True)
    )
    alt = f"Dots with confidence sets, one a column. {words}."
    axis = f"{capital(material.feature)} (bp per unit)"
    return Figure("columns", "intervals", title, caption, alt, data, axis=axis)


def _columns_title(material: Material) -> list[Piece]:
    lead, pieces = material.lead, list[Piece]()
    if lead is not None:
        value = material.coefficient(lead)
        pieces += [value, " bp in the lead column, "]
    others = [e for e in material.estimates if e is not lead]
    digits = max(effect_digits(e) for e in others)
    low, high = (
        material.number(f"others_{end}", scale=BP, digits=digits) for end in ("low", "high")
    )
    if len(others) == 1:
        return [*pieces, low, " bp in the other"]
    return [*pieces, low, " to ", high, " bp in the others" if lead else " bp over the columns"]


def _column_row(estimate: Estimate, lead: bool) -> dict[str, object]:
    found = estimate.interval
    term = estimate.term(estimate.treatment)
    return {
        "dimension": "",
        "label": estimate.title,
        "shape": str(found.shape),
        "estimate_bp": BP * term["coefficient"],
        "low_bp": BP * found.low,
        "high_bp": BP * found.high,
        "deals": estimate.n,
        "lead": lead,
    }


def sensitivity_figure(material: Material, target: str) -> Figure:
    """One of the numbers asked about under other choices."""
    frame = sensitivity_targets(material.results)[target]
    data = pd.DataFrame(
        {
            "dimension": frame["dimension"].astype("str"),
            "label": [true_minus(str(text)) for text in frame["variant"]],
            "shape": "interval",
            "estimate_bp": frame["estimate"].astype(float) * BP,
            "low_bp": frame["ci_low"].astype(float) * BP,
            "high_bp": frame["ci_high"].astype(float) * BP,
            "deals": frame["n"],
            "lead": False,
        }
    )
    if len(data) > SORTED:  # a few stay in the order of their kinds
        data = data.sort_values("estimate_bp", kind="stable", ignore_index=True)
    digits = variant_digits(material, target)
    low, high = (
        material.number(f"sensitivity_{end}: {target}", scale=BP, digits=digits)
        for end in ("low", "high")
    )
    ends = direction(low.value), direction(high.value)
    where = f"stays {ends[0]}" if ends[0] == ends[1] else "changes sign"
    name = embedded(target, "check")
    title = prose("Over all variants the ", name, f" {where}: ", low, " to ", high, " bp")
    caption = prose(
        "Each dot is the ",
        name,
        " under one other choice, with its ",
        material.percent("confidence_level"),
        " interval, in basis points.",
    )
    words = f"{show(BP * low.value)} to {show(BP * high.value)} bp"
    alt = f"Dots with intervals, one a variant, the {target} from {words}."
    file = "sensitivity" if target == MEAN_REACTION else f"sensitivity_{slug(target)}"
    return Figure(file, "intervals", title, caption, alt, data, axis=f"{capital(target)} (bp)")


def variant_digits(material: Material, target: str) -> int:
    """Decimals of a number under other choices, from the middle reach of its intervals."""
    frame = sensitivity_targets(material.results)[target]
    reach = frame["ci_high"].astype(float) - frame["ci_low"].astype(float)
    return bp_digits(BP * float(reach.median()) / 4)
