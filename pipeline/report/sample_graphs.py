"""The figures of the sample as data: when deals happened, what instruments move, who is alike."""

from __future__ import annotations

import numpy as np
import pandas as pd

from pipeline.core.estimate import TestResult
from pipeline.report.document import Figure, Piece, Quote
from pipeline.report.headline import MEAN_REACTION
from pipeline.report.material import Material, capital, embedded, named, prose, quote, taken
from pipeline.report.numerals import (
    PERCENT,
    amount,
    plain_digits,
    show,
    slug,
    true_minus,
    unit_digits,
)
from pipeline.report.wording import axis_words, joined

MONTHS = (
    "January", "February", "March", "April", "May", "June", "July", "August", "September",
    "October", "November", "December",
)  # fmt: skip
BINS = 20
SHARED_BINS = 24
BALANCED = 0.1
NAMED = 3
MOST_GROUPS = 2
MOST_DOTS = 900


def _fact(material: Material, picture: str, name: str, *, scale: float = 1.0,
          digits: int = 0) -> Quote:  # fmt: skip
    where = {"picture": picture, "name": name}
    return quote(material.frames, "picture_facts", "value", where, scale=scale, digits=digits)


def _frame(material: Material, name: str) -> pd.DataFrame | None:
    frame = material.frames.get(name)
    return None if frame is None or frame.empty else frame


def _two_digits(value: float) -> int:
    return plain_digits(value, 2)


def calendar_figure(material: Material) -> Figure | None:
    """Deals by month and year, with how many share their sessions; None without day zeros."""
    frame = _frame(material, "calendar")
    if frame is None:
        return None
    month = MONTHS[int(_fact(material, "calendar", "busiest_month").value) - 1]
    year = str(int(_fact(material, "calendar", "busiest_year").value))
    most = _fact(material, "calendar", "busiest_deals")
    share = _fact(material, "calendar", "meeting", scale=PERCENT)
    title = prose(
        share, "% of deals share a session of the headline window with another; the busiest "
        "month, ", taken(f"{month} {year}", "calendar"), ", holds ", most,
    )  # fmt: skip
    caption = prose(
        "Deals by the month of day zero: the darker the box the more of them, the number inside. "
        "Below: deals by how many other deals' headline windows meet theirs. Deals that share "
        "sessions may move together, so they tell less than as many deals apart."
    )
    sharing = material.frames["shared_sessions"]
    data = pd.concat(
        [frame.assign(part="month"), sharing[["others", "deals"]].assign(part="shared")],
        ignore_index=True,
    )[["part", "year", "month", "others", "deals"]].astype(
        dict.fromkeys(("year", "month", "others", "deals"), "Int64")
    )
    yearly = frame.groupby("year")["deals"].sum()
    alt = "Boxes of months by year, darker with more deals. Deals a year: "
    alt += ", ".join(f"{year} {count}" for year, count in yearly.items()) + "."
    return Figure("calendar", "calendar", title, caption, alt, data)


def first_stage_figure(material: Material) -> Figure | None:
    """The feature against each instrument in bins, the controls removed from both."""
    frame = _frame(material, "first_stage_bins")
    if frame is None:
        return None
    names = list(dict.fromkeys(frame["instrument"].astype(str)))
    feature = embedded(named(material.feature), "study")
    pieces: list[Piece] = []
    for at, name in enumerate(names):
        slope = _fact(material, "first_stage", f"slope: {name}").value
        told = _fact(material, "first_stage", f"slope: {name}", digits=_two_digits(slope))
        words = embedded(named(material.study.words(name)), "study")
        pieces += [", one more of " if at else "With the controls held fixed one more of ", words]
        pieces += [" with ", told] if at else [" goes with ", told, " more of ", feature]
    title = prose(*pieces)
    caption = prose(
        "Both sides without what the controls, the fixed effects and the other instruments tell "
        "of them. Each dot is the mean of about as many deals; the line has the slope of the first "
        "stage (Frisch–Waugh–Lovell). Read the slope and the spread, not the shape: means of "
        "what is left are not the curve itself (",
        taken("Cattaneo and others 2024", "source"),
        ").",
    )
    data = frame.assign(label=[material.study.words(str(n)) for n in frame["instrument"]])
    alt = "Dots of means with a line, one panel an instrument. Slopes: " + "; ".join(
        f"{material.study.words(str(name))} {show(float(part['slope'].iloc[0]), 3)}"
        for name, part in frame.groupby("instrument", sort=False)
    )
    return Figure("first_stage", "bins", title, caption, alt + ".", data, axis=material.feature)


def overlap_figure(material: Material) -> Figure | None:
    """The fitted probability of the feature in each group; None without one."""
    frame = _frame(material, "propensity")
    if frame is None:
        return None
    off = _fact(material, "propensity", "off_support", scale=PERCENT, digits=1)
    title = prose(off, "% of deals lie where the other group has none as likely")
    caption = prose(
        "The fitted probability of ", embedded(named(material.feature), "study"),
        " given the controls (a logit). Bars hold the share of the group's deals: one group above "
        "the line, the other below. Where only one side has bars there is nobody to compare "
        "with, and a weighted or matched estimate rests on few deals.",
    )  # fmt: skip
    edges = np.linspace(frame["probability"].min(), frame["probability"].max(), BINS + 1)
    edges = edges if edges[-1] > edges[0] else np.array([edges[0] - 0.05, edges[0] + 0.05])
    parts = []
    for treated, group in ((False, material.study.groups[0]), (True, material.study.groups[1])):
        values = frame.loc[frame["treated"] == treated, "probability"]
        counts, _ = np.histogram(values, edges)
        parts.append(
            pd.DataFrame(
                {
                    "group": group,
                    "from_percent": PERCENT * edges[:-1],
                    "to_percent": PERCENT * edges[1:],
                    "deals": counts,
                    "share_percent": PERCENT * counts / max(len(values), 1),
                }
            )
        )
    spans = "; ".join(
        f"{material.study.groups[int(bool(treated))]} {show(PERCENT * part.min())}% to "
        f"{show(PERCENT * part.max())}%"
        for treated, part in frame.groupby("treated")["probability"]
    )
    alt = f"Two histograms back to back of the fitted probability: {spans}."
    axis = f"Fitted probability of {named(material.feature)} (%)"
    data = pd.concat(parts, ignore_index=True)
    return Figure("overlap", "overlap", title, caption, alt, data, axis=axis)


def balance_figure(material: Material) -> Figure | None:
    """How the groups differ in each control before and after weighting."""
    frame = _frame(material, "balance")
    if frame is None:
        return None
    before, after = (
        _fact(material, "balance", f"{when}_largest", digits=2) for when in ("before", "after")
    )
    if after.value < before.value:
        title = prose("Weighting brings the largest difference between the groups from ", before,
                      " to ", after, " standard deviations")  # fmt: skip
    else:
        title = prose("Weighting does not lower the largest difference between the groups: ",
                      before, " standard deviations before, ", after, " after")  # fmt: skip
    caption = prose(
        "The mean of each control among the deals ", embedded(material.study.groups[1], "study"),
        " less that among the others, in pooled standard deviations. Hollow circles: as the deals "
        "are. Filled squares: weighted by the inverse of their fitted probability. Beyond the "
        "dotted lines, a tenth, the groups are commonly called out of balance.",
    )  # fmt: skip
    order = frame["before"].abs().sort_values(ascending=False, kind="stable").index
    data = frame.loc[order].reset_index(drop=True)
    data["label"] = [
        true_minus(capital(material.study.words(str(name)))) for name in data["variable"]
    ]
    alt = "Dots before and after weighting, one row a control: " + "; ".join(
        f"{row['label']} {show(row['before'], 2)} to {show(row['after'], 2)}"
        for _, row in data.iterrows()
    )
    marks = {"limit": BALANCED}
    return Figure("balance", "balance", title, caption, alt + ".", data, marks)


def correction_figure(material: Material) -> Figure | None:
    """The selection model's correction against what the controls already tell of it."""
    frame = _frame(material, "mills")
    if frame is None:
        return None
    share = _fact(material, "mills", "r_squared", scale=PERCENT)
    title = prose("The controls alone tell ", share, "% of how the selection correction varies")
    caption = prose(
        "The correction for who announces (the inverse Mills ratio), one dot a deal, against its "
        "best straight-line prediction from the regressors of the outcome; the dashed line is "
        "where they are equal. The closer the dots to it the less the model can tell the "
        "correction from the controls (",
        taken("Leung and Yu 1996", "source"),
        "). Below: the correction over the deals.",
    )
    low, high = float(frame["mills"].min()), float(frame["mills"].max())
    middle = float(frame["mills"].median())
    alt = (
        f"{len(frame)} dots of the correction against its prediction; it runs from "
        f"{show(low, 2)} to {show(high, 2)}, median {show(middle, 2)}."
    )
    data = _thinned(frame.sort_values("mills", kind="stable")).sort_index()
    return Figure("selection_correction", "correction", title, caption, alt, data)


def placebo_figure(material: Material) -> Figure | None:
    """The leading statistic on dates without an announcement, the sample's own beside them."""
    frame = _frame(material, "placebo_draws")
    own = None if frame is None else material.tests.tests.get(str(frame["test"].iloc[0]))
    if frame is None or not isinstance(own, TestResult) or not np.isfinite(own.statistic):
        return None
    drawn = frame["statistic"].to_numpy(dtype=np.float64)
    drawn = drawn[np.isfinite(drawn)]
    if len(drawn) < 2:
        return None
    where = {**material.study.explained, "test": str(frame["test"].iloc[0])}
    where = {name: value for name, value in where.items() if name != "outcome"}
    statistic = quote(material.frames, "event_tests", "statistic", where, digits=1)
    farther = _fact(material, "placebo", "farther")
    draws = _fact(material, "placebo", "draws")
    count: Piece = "None" if not farther.value else farther
    title = prose(
        count, " of ", draws, " samples without an announcement ",
        "has" if farther.value <= 1 else "have", " a statistic as far from zero as the deals’ ",
        statistic,
    )  # fmt: skip
    caption = prose(
        "The statistic of the test “", taken(own.name, "test"), "” for the same companies moved to "
        "dates without an announcement; bars count the samples, the thick line is the deals "
        "themselves. The further it stands from the bars the less such a mean is what "
        "these shares do on any date.",
    )  # fmt: skip
    edges = np.linspace(drawn.min(), drawn.max(), min(BINS, max(4, len(drawn) // 5)) + 1)
    counts, _ = np.histogram(drawn, edges)
    data = pd.DataFrame({"from": edges[:-1], "to": edges[1:], "samples": counts})
    alt = (
        f"Histogram of {len(drawn)} statistics from {show(drawn.min(), 1)} to "
        f"{show(drawn.max(), 1)}; the deals' own is {show(own.statistic, 1)}."
    )
    marks = {"own": own.statistic}
    axis = f"Statistic: {own.name}"
    return Figure("placebo", "placebo", title, caption, alt, data, marks, axis)


def _thinned(part: pd.DataFrame) -> pd.DataFrame:
    """Ordered rows: all of a few; of very many both ends and evenly spaced ones between."""
    n, third = len(part), MOST_DOTS // 3
    if n <= MOST_DOTS:
        return part
    middle = np.linspace(third, n - third - 1, third).astype(np.int64)
    return part.iloc[[*range(third), *np.unique(middle), *range(n - third, n)]]


def left_out_figures(material: Material) -> list[Figure]:
    """Each number without each deal, and each group of deals, in turn."""
    frame = _frame(material, "left_out")
    if frame is None:
        return []
    facts = _frame(material, "picture_facts")
    known = set() if facts is None else set(facts.loc[facts["picture"] == "left_out", "name"])
    targets = dict.fromkeys(frame["target"].astype(str))
    return [
        _left_out(material, target, frame[frame["target"] == target])
        for target in targets
        if f"of: {target}" in known
    ]


def _left_out(material: Material, target: str, frame: pd.DataFrame) -> Figure:
    unit = material.unit
    kinds = list(dict.fromkeys(frame["dimension"].astype(str)))[: 1 + MOST_GROUPS]
    frame = frame[frame["dimension"].isin(kinds) & np.isfinite(frame["estimate"])]
    parts = frame.sort_values("estimate", kind="stable").groupby("dimension", sort=False)
    drawn = pd.concat([_thinned(part) for _, part in parts]).sort_index()
    data = drawn[["dimension", "group", "deals"]].reset_index(drop=True)
    data[f"estimate_{unit.slug}"] = drawn["estimate"].to_numpy() * unit.scale
    error = _fact(material, "left_out", f"std_error: {target}").value
    full = float((frame["estimate"] - frame["change"]).iloc[0])
    first = frame[frame["dimension"] == kinds[0]].iloc[0]
    digits = unit_digits(abs(float(first["change"])) or error, unit)
    most = _fact(material, "left_out", f"most: {target}", scale=unit.scale, digits=digits)
    beyond = _fact(material, "left_out", f"beyond: {target}")
    every = _fact(material, "left_out", f"of: {target}")
    count: Piece = "None" if not beyond.value else beyond
    title = prose(
        count, " of ", every, " deals moves" if beyond.value <= 1 else " deals move", " the ",
        embedded(target, "check"), " by more than its standard error; the most, ",
        taken(str(first["group"]), "deal list"), ", by ", unit.before, most, unit.change,
    )  # fmt: skip
    caption = prose(
        "The ", embedded(target, "check"), " without each one of its deals, and of its ",
        taken(joined(f"{kind}s" for kind in kinds[1:]) or "groups", "check"),
        ", in order of size, in ", taken(unit.words, "study"), ". The line is the number with "
        "all of them, the strip one standard error to each side. Dots outside it are deals that "
        "carry the answer: look at them one by one. Of very many the middle ones are drawn "
        "in part.",
    )  # fmt: skip
    alt = f"The {target} without each deal or group: " + "; ".join(
        f"one {kind} left out, {amount(float(part['estimate'].min()), unit)} to "
        f"{amount(float(part['estimate'].max()), unit)}"
        for kind, part in frame.groupby("dimension", sort=False)
    )
    marks = {"full": full * unit.scale, "error": error * unit.scale}
    name = "left_out" if target == MEAN_REACTION else f"left_out_{slug(target)}"
    axis = axis_words(target, unit)
    return Figure(name, "left_out", title, caption, f"{alt}.", data, marks, axis, unit.slug)
