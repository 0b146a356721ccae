"""The figures as data: what is drawn, the takeaway, the caption and the picture in words."""

from __future__ import annotations

import numpy as np
import pandas as pd

from pipeline.core.estimate import Estimate
from pipeline.core.outcome import Unit
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
    taken,
)
from pipeline.report.numerals import BP, PERCENT, amount, show, slug, true_minus, unit_digits
from pipeline.report.wording import axis_words, direction, per_unit, set_words

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
    unit = material.unit
    pieces: list[Piece] = [f"{_spread_words(material)} below zero: "]
    for at, group in enumerate(groups):
        share = material.number(f"share_below_zero: {group}", scale=PERCENT, digits=0)
        deals = material.number(f"deals: {group}")
        pieces += [", " if at else "", embedded(group, "study"), " ", share, "% of ", deals]
    caption = prose(
        *_spread_caption(material), ", in ", taken(unit.amounts, "study"), ", one panel a group; "
        "bars hold the share of the group's deals, the outermost ones also what "
        "lies beyond. The dashed line is the group's median.",
    )  # fmt: skip
    medians = {group: float(np.median(values)) for group, values in groups.items()}
    marks = {f"median: {group}": median * unit.scale for group, median in medians.items()}
    beside = {group: _median_words(values, unit) for group, values in groups.items()}
    words = "; ".join(f"{group}: {facts}" for group, facts in beside.items())
    alt = f"Histograms of the {material.outcome} by group. {words}."
    title = prose(*pieces, " deals")
    axis = "Cumulative abnormal return in the headline window (bp)"
    axis = axis_words(material.outcome, unit.heading) if material.ready else axis
    data = _bins(groups, unit)
    return Figure(
        "distribution", "distribution", title, caption, alt, data, marks, axis, unit.slug, beside
    )


def _median_words(values: Floats, unit: Unit) -> str:
    digits = unit_digits(float(np.std(values)) / np.sqrt(len(values)), unit)
    return f"{len(values):,} deals, median {amount(float(np.median(values)), unit, digits)}"


def _spread_words(material: Material) -> str:
    return capital(material.outcome) if material.ready else "Reactions"


def _spread_caption(material: Material) -> tuple[Piece, ...]:
    if material.ready:
        return ("The ", embedded(material.outcome, "study"), " of each deal")
    return ("Cumulative abnormal returns over sessions ", *material.window())


def _bins(groups: dict[str, Floats], unit: Unit) -> pd.DataFrame:
    """group, from, to, deals, share; common edges, the outermost bins open-ended."""
    every = np.concatenate(list(groups.values())) * unit.scale
    low, high = np.quantile(every, [0.005, 0.995])
    low, high = (low, high) if high > low else (low - 1, high + 1)
    edges = np.linspace(low, high, min(BINS, max(5, len(every) // 4)) + 1)
    frames = []
    for group, values in groups.items():
        deals, _ = np.histogram(np.clip(values * unit.scale, low, high), edges)
        frames.append(
            pd.DataFrame(
                {
                    "group": group,
                    f"from_{unit.slug}": edges[:-1],
                    f"to_{unit.slug}": edges[1:],
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
    unit = material.unit
    data = pd.DataFrame([_column_row(e, e is material.lead, unit) for e in found])
    feature = embedded(named(material.feature), "study")
    title = prose(embedded(capital(material.feature), "study"), ": ", *_columns_title(material))
    caption = prose(
        "The coefficient of ", feature, " by column, in ", taken(unit.words, "study"),
        " per unit, with its ", material.percent("confidence_level"),
        " confidence set. Filled: the lead column. An arrow: the set goes on without end. The "
        "columns do not all estimate the same thing: see what each estimates in the table.",
    )  # fmt: skip
    words = "; ".join(_column_words(e, unit) for e in found)
    alt = f"Dots with confidence sets, one a column. {words}."
    axis = axis_words(material.feature, per_unit(unit))
    return Figure("columns", "intervals", title, caption, alt, data, {}, axis, unit.slug)


def _column_words(estimate: Estimate, unit: Unit) -> str:
    digits = effect_digits(estimate, unit)
    effect = amount(float(estimate.term(estimate.treatment)["coefficient"]), unit, digits)
    return f"{estimate.title} {effect}, {set_words(estimate.interval, digits, unit)}"


def _columns_title(material: Material) -> list[Piece]:
    lead, pieces, unit = material.lead, list[Piece](), material.unit
    if lead is not None:
        value = material.coefficient(lead)
        pieces += [unit.before, value, f"{unit.change} in the lead column, "]
    others = [e for e in material.estimates if e is not lead]
    digits = max(effect_digits(e, unit) for e in others)
    if len(others) == 1:
        return [*pieces, *material.effect("others_low", digits), " in the other"]
    reach = material.span(("others_low", "others_high"), digits)
    return [*pieces, *reach, " in the others" if lead else " over the columns"]


def _column_row(estimate: Estimate, lead: bool, unit: Unit) -> dict[str, object]:
    found = estimate.interval
    term = estimate.term(estimate.treatment)
    return {
        "dimension": "",
        "label": estimate.title,
        "shape": str(found.shape),
        f"estimate_{unit.slug}": unit.scale * term["coefficient"],
        f"low_{unit.slug}": unit.scale * found.low,
        f"high_{unit.slug}": unit.scale * found.high,
        "deals": estimate.n,
        "lead": lead,
    }


def sensitivity_figure(material: Material, target: str) -> Figure:
    """One of the numbers asked about under other choices."""
    frame, unit = sensitivity_targets(material.results)[target], material.unit
    data = pd.DataFrame(
        {
            "dimension": frame["dimension"].astype("str"),
            "label": [true_minus(str(text)) for text in frame["variant"]],
            "shape": "interval",
            f"estimate_{unit.slug}": frame["estimate"].astype(float) * unit.scale,
            f"low_{unit.slug}": frame["ci_low"].astype(float) * unit.scale,
            f"high_{unit.slug}": frame["ci_high"].astype(float) * unit.scale,
            "deals": frame["n"],
            "lead": False,
        }
    )
    if len(data) > SORTED:  # a few stay in the order of their kinds
        data = data.sort_values(f"estimate_{unit.slug}", kind="stable", ignore_index=True)
    names = f"sensitivity_low: {target}", f"sensitivity_high: {target}"
    reach = material.span(names, variant_digits(material, target))
    low, high = (material.number(end).value for end in names)
    ends = direction(low), direction(high)
    where = f"stays {ends[0]}" if ends[0] == ends[1] else "changes sign"
    name = embedded(target, "check")
    title = prose("Over all variants the ", name, f" {where}: ", *reach)
    caption = prose(
        "Each dot is the ",
        name,
        " under one other choice, with its ",
        material.percent("confidence_level"),
        " interval, in ",
        taken(unit.words, "study"),
        ".",
    )
    words = f"{amount(low, unit)} to {amount(high, unit)}"
    alt = f"Dots with intervals, one a variant, the {target} from {words}."
    file = "sensitivity" if target == MEAN_REACTION else f"sensitivity_{slug(target)}"
    axis = axis_words(target, unit)
    return Figure(file, "intervals", title, caption, alt, data, {}, axis, unit.slug)


def variant_digits(material: Material, target: str) -> int:
    """Decimals of an amount under other choices, from the middle reach of its intervals."""
    frame = sensitivity_targets(material.results)[target]
    reach = frame["ci_high"].astype(float) - frame["ci_low"].astype(float)
    return unit_digits(float(reach.median()) / 4, material.unit)
