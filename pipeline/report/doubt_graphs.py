"""The figures of the doubts as data: what is drawn, the takeaway and the picture in words."""

from __future__ import annotations

import numpy as np
import pandas as pd

from pipeline.report.document import Figure
from pipeline.report.headline import sensitivity_targets
from pipeline.report.material import Material, capital, embedded, named, prose, quote, taken
from pipeline.report.numerals import PERCENT, amount, slug, true_minus
from pipeline.report.wording import axis_words


def assumptions_figure(material: Material) -> Figure | None:
    """The feature's effect under the harshest variant of every assumption, in order of size."""
    reported = material.frames.get("reported")
    if reported is None or reported.empty:
        return None
    rows = [row for _, told in reported.iterrows() for row in _harshest(material, told)]
    unit = material.unit
    data = pd.DataFrame(rows).sort_values("estimate", kind="stable", ignore_index=True)
    marks = {
        "lead" if row["lead"] else "other": float(row["estimate"]) * unit.scale
        for _, row in data[data["reported"]].iterrows()
    }
    low, high = float(data["estimate"].min()), float(data["estimate"].max())
    for name in ("estimate", "low", "high"):
        data[f"{name}_{unit.slug}"] = data.pop(name) * unit.scale
    title = prose("The effect of ", embedded(named(material.feature), "study"),
                  _survives(data, f"estimate_{unit.slug}"))  # fmt: skip
    caption = prose(
        "Each line is the effect if the words beside it were true, with its ",
        material.percent("confidence_level"), " interval, in ", taken(unit.words, "study"),
        "; of several values of one assumption the one that takes most from the effect. Squares: "
        "the column that leads. Circles: the other one. Filled: as reported. An arrow: the "
        "interval goes on.",
    )  # fmt: skip
    alt = (
        f"{len(data)} effects with intervals in order of size, from {amount(low, unit)} to "
        f"{amount(high, unit)}: " + "; ".join(data["label"]) + "."
    )
    axis = axis_words(material.feature, unit)
    return Figure("assumptions", "assumptions", title, caption, alt, data, marks, axis, unit.slug)


def _survives(data: pd.DataFrame, column: str) -> str:
    """Whether any assumption turns the sign of what its column reports."""
    turned = False
    for _, part in data.groupby("lead"):
        own = part.loc[part["reported"], column]
        turned |= bool(len(own)) and bool((np.sign(part[column]) != np.sign(own.iloc[0])).any())
    if turned:
        return " changes sign in at least one line drawn here"
    return " keeps its sign in every line drawn here"


def _harshest(material: Material, told: pd.Series[float]) -> list[dict[str, object]]:
    """The reported effect, and for each kind of doubt the variant that takes most from it."""
    title, lead = str(told["title"]), bool(told["lead"])
    rows = [_line(f"{title}, as reported", told, lead, reported=True)]
    frame = sensitivity_targets(material.results).get(str(told["target"]))
    if frame is None:
        return rows
    sign = np.sign(float(told["estimate"]))
    for dimension, part in frame.groupby("dimension", sort=False):
        reach = sign * part["estimate"].to_numpy(dtype=np.float64)
        width = (part["ci_high"] - part["ci_low"]).to_numpy(dtype=np.float64)
        # Where the estimate is the same under all of them, the widest interval is the harshest.
        alike = float(np.ptp(reach)) < 1e-12
        worst = part.iloc[int(np.argmax(width) if alike else np.argmin(reach))]
        words = true_minus(f"{title}, {dimension}: {worst['variant']}")
        rows.append(_line(words, worst, lead, reported=False))
    return rows


def _line(label: str, row: pd.Series[float], lead: bool, *, reported: bool) -> dict[str, object]:
    return {
        "label": label,
        "estimate": float(row["estimate"]),
        "low": float(row["ci_low"]),
        "high": float(row["ci_high"]),
        "lead": lead,
        "reported": reported,
    }


def hidden_figure(material: Material) -> Figure | None:
    """Adjusted effects for hidden factors of every strength, the controls among them."""
    frame = material.frames.get("contour")
    if frame is None or frame.empty:
        return None
    unit = material.unit
    data = frame[["with_treatment", "with_outcome", "statistic"]].copy()
    data[f"estimate_{unit.slug}"] = frame["estimate"] * unit.scale
    data["label"] = [_point_words(material, str(text)) for text in frame["label"]]
    where = {"key": "confounder_zero"}
    share = quote(material.frames, "breakdowns", "value", where, scale=PERCENT, digits=0)
    title = prose("A hidden factor that explains ", share, "% of what is left of both brings the "
                  "least-squares effect to zero")  # fmt: skip
    caption = prose(
        "Thin lines: the least-squares effect of ", embedded(named(material.feature), "study"),
        " in ", taken(unit.words, "study"), " were there a hidden factor of that strength. Thick: "
        "zero. Dashed: beyond it the interval holds zero. Diamonds: factors as strong as the "
        "controls, the strongest named.",
    )  # fmt: skip
    points = "; ".join(
        f"{row['label']}: {amount(row['estimate'], unit)}"
        for _, row in frame.assign(label=data["label"])[frame["label"] != ""].iterrows()
    )
    alt = f"Contour lines of the adjusted effect by the strength of a hidden factor. {points}."
    axis = f"Share of what is left of the {_outcome(material)} that it explains (%)"
    marks = {"reach": float(frame["reach"].iloc[0])}
    return Figure("hidden_factors", "hidden", title, caption, alt, data, marks, axis, unit.slug)


def _outcome(material: Material) -> str:
    return material.study.outcome.words if material.ready else "return"


def _point_words(material: Material, label: str) -> str:
    times, _, name = label.partition(" × ")
    if not name:
        return label
    words = capital(material.study.words(name))
    return words if times == "1" else f"{times} times {words}"


def extrapolation_figures(material: Material) -> list[Figure]:
    """The film of added error a variable, run back to none."""
    frame = material.frames.get("extrapolation")
    if frame is None or frame.empty:
        return []
    unit = material.unit
    figures = []
    for variable, part in frame.groupby("variable", sort=False):
        data = part[["curve", "zeta"]].copy()
        data[f"estimate_{unit.slug}"] = part["estimate"] * unit.scale
        feature = embedded(named(material.feature), "study")
        of = embedded(named(str(variable)), "check")
        title = prose("Were ", of, " recorded without error the effect of ", feature,
                      f" would lie {_moved(part)}")  # fmt: skip
        caption = prose(
            "Dots: the mean least-squares effect with error added to the variable by simulation. "
            "The lines carry them back to no error at all, at the left edge; they differ in the "
            "curve alone."
        )
        ends = part[(part["curve"] != "simulated") & (part["zeta"] == part["zeta"].min())]
        told = "; ".join(
            f"{row['curve']} {amount(row['estimate'], unit)}" for _, row in ends.iterrows()
        )
        alt = f"The effect against the error added, with curves back to none: {told}."
        name = f"added_error_{slug(str(variable))}"
        axis = axis_words(material.feature, unit)
        figures.append(
            Figure(name, "extrapolation", title, caption, alt, data, {}, axis, unit.slug)
        )
    return figures


def _moved(part: pd.DataFrame) -> str:
    """Where the curves end without error, against the effect as it was recorded."""
    curves = part[part["curve"] != "simulated"]
    ends = curves.loc[curves["zeta"] == part["zeta"].min(), "estimate"]
    recorded = part.loc[part["zeta"] == 0, "estimate"].mean()
    if not len(ends) or not np.isfinite(recorded):
        return "elsewhere"
    if (np.sign(ends) != np.sign(recorded)).all():
        return "on the other side of zero"
    further = ends.abs() > abs(recorded)
    if further.all():
        return "further from zero"
    return "nearer to zero" if not further.any() else "nearer to zero or further, by the curve"


def violations_figure(material: Material) -> Figure | None:
    """The ends of the instrumented intervals as the instruments' own way grows."""
    frame = material.frames.get("violations")
    if frame is None or frame.empty:
        return None
    unit = material.unit
    data = frame[["kind", "share"]].copy()
    data[f"low_{unit.slug}"] = frame["ci_low"].replace([np.inf, -np.inf], np.nan) * unit.scale
    data[f"high_{unit.slug}"] = frame["ci_high"].replace([np.inf, -np.inf], np.nan) * unit.scale
    feature = embedded(named(material.feature), "study")
    title = prose("The instrumented interval of ", feature, _held(frame))
    caption = prose(
        "The two ends of each interval. Two stages and Anderson–Rubin: any direct effects up to "
        "the share, in either direction. Drawn around zero: direct effects that are more often "
        "small, nearly all within the share. The least-squares line is the effect with the same "
        "controls and fixed effects."
    )
    last = frame[frame["share"] == frame["share"].max()]
    told = "; ".join(
        f"{row['kind']} {amount(row['ci_low'], unit)} to {amount(row['ci_high'], unit)}"
        for _, row in last.iterrows()
    )
    alt = f"Ends of intervals by the share allowed; at the largest: {told}."
    axis = axis_words(material.feature, unit)
    return Figure("violations", "violations", title, caption, alt, data, {}, axis, unit.slug)


def _held(frame: pd.DataFrame) -> str:
    """When the interval made for weak instruments, or else the first kind, first holds zero."""
    kinds = list(dict.fromkeys(frame["kind"].astype(str)))
    kind = next((name for name in kinds if name.startswith("Anderson")), kinds[0])
    part = frame[frame["kind"] == kind].sort_values("share")
    holds = ((part["ci_low"] <= 0) & (part["ci_high"] >= 0)).to_numpy()
    if holds[0]:
        return " holds zero even if its instruments act by no other way"
    if not holds.any():
        return " stays clear of zero at every share asked about"
    return " stays clear of zero until its instruments act in part by another way"
