"""The numbers that prose quotes and no other frame holds: counts, money, ranges, sets.

They are rows of one frame, so that each can be looked up: ``data/headline.parquet``.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd

from pipeline.core.estimate import ConfidenceSet, Estimate, Shape, TestResult, Withheld
from pipeline.core.ledger import Action
from pipeline.core.prices import Floats
from pipeline.core.results import Results

MEAN_REACTION = "mean reaction"
POWER = 0.8
DATE_ONLY = "date only"
COLUMNS = ("name", "value", "unit", "ci_low", "ci_high", "level", "shape")


@dataclass(frozen=True, slots=True)
class Line:
    """A row of the frame; ``shape`` is that of the confidence set, empty without one."""

    name: str
    value: float
    unit: str
    ci_low: float = math.nan
    ci_high: float = math.nan
    level: float = math.nan
    shape: str = ""


def headline_frame(results: Results) -> pd.DataFrame:
    """One row a number: name, value, unit, ci_low, ci_high, level, shape.

    Returns and effects are decimal; money is in the study's currency and scale. Two rays are
    everything outside (ci_low, ci_high); the line and the empty set have no ends.
    """
    parts = (
        _counts,
        _reaction,
        _effects,
        _range,
        _money,
        _paths,
        _distribution,
        _proof,
        _curve,
        _verdicts,
    )
    rows = [line for part in parts for line in part(results)]
    frame = pd.DataFrame([[getattr(r, c) for c in COLUMNS] for r in rows], columns=list(COLUMNS))
    numbers = dict.fromkeys(("value", "ci_low", "ci_high", "level"), "float64")
    return frame.astype({**numbers, "name": "str", "unit": "str", "shape": "str"})


def effect_name(position: int, column: Estimate | Withheld) -> str:
    """The name of a column's effect, by its place in the comparison table from 1."""
    return f"effect_{position + 1}_{column.estimator}"


def estimates(results: Results) -> list[tuple[int, Estimate]]:
    """The columns that hold the feature's effect, with their places."""
    columns = enumerate(results.columns)
    return [(i, c) for i, c in columns if isinstance(c, Estimate) and c.treatment in c.names]


def lead_estimate(results: Results) -> Estimate | None:
    """The lead column, if it holds the feature's effect."""
    return next((c for i, c in estimates(results) if i == results.lead), None)


def effect_of(estimate: Estimate) -> float:
    """The treatment coefficient, decimal."""
    return float(estimate.term(estimate.treatment)["coefficient"])


def market_values(results: Results) -> Floats:
    """What a relative outcome is a share of, in the study's currency; empty if not known."""
    deals, base = results.deals, results.study.outcome.base
    if base not in deals or not results.study.currency:
        return np.empty(0)
    if "currency" in deals and deals["currency"].nunique() > 1:
        return np.empty(0)  # sums in different currencies have no median
    found = deals[base].to_numpy(dtype=np.float64)
    return np.asarray(found[np.isfinite(found)])


def _stored(results: Results) -> str:
    """The unit in which amounts of the outcome are stored."""
    unit = results.study.outcome.unit
    return "decimal" if unit.relative else unit.short or "number"


def significance(results: Results) -> float:
    """One less the confidence level, free of the dust of the subtraction."""
    return round(1 - results.study.level, 12)


def _counts(results: Results) -> Iterator[Line]:
    ledger = results.ledger
    kept = [entry for _, entry in ledger if entry.action is not Action.DROPPED]
    yield Line("deals_read", ledger.rows_in, "deals")
    yield Line("deals_kept", ledger.rows_kept, "deals")
    yield Line("deals_dropped", ledger.rows_in - ledger.rows_kept, "deals")
    for action in (Action.FLAGGED, Action.CHANGED):
        deals = {entry.deal for entry in kept if entry.action is action}
        yield Line(f"deals_{action}", len(deals), "deals")
    yield Line("deals_of_unknown_time", _unknown_times(results), "deals")
    yield Line("confidence_level", results.study.level, "fraction")
    yield Line("significance_level", significance(results), "fraction")


def _unknown_times(results: Results) -> int:
    """Deals kept of which the date is known and not the time, so day zero is in doubt."""
    deals = results.deals
    return int((deals["timing"] == DATE_ONLY).sum()) if "timing" in deals else 0


def _reaction(results: Results) -> Iterator[Line]:
    if results.study.outcome.ready:
        mean, low, high = _mean(results)
        level = results.study.level
        yield Line("mean_outcome", mean, _stored(results), low, high, level, Shape.INTERVAL)
        return
    tests, level = results.headline, results.study.level
    low, high = tests.interval
    yield Line("mean_reaction", tests.mean, "decimal", low, high, level, Shape.INTERVAL)
    answered = [t for t in tests.tests.values() if isinstance(t, TestResult)]
    answered = [t for t in answered if math.isfinite(t.p_value)]
    yield Line("tests_not_holding", sum(bool(t.doubt) for t in answered), "tests")
    # A test that does not hold in this sample has no say in whether the tests agree.
    answered = [t for t in answered if not t.doubt]
    yield Line("tests_made", len(answered), "tests")
    yield Line("tests_rejecting", sum(t.p_value < significance(results) for t in answered), "tests")


def _effects(results: Results) -> Iterator[Line]:
    for position, estimate in estimates(results):
        found = estimate.interval
        value = effect_of(estimate)
        yield _with_set(effect_name(position, estimate), value, _stored(results), found)
        if estimate is lead_estimate(results):
            yield _with_set("feature_effect", value, _stored(results), found)


def _range(results: Results) -> Iterator[Line]:
    lead = lead_estimate(results)
    others = [effect_of(e) for _, e in estimates(results) if e is not lead]
    every = [effect_of(e) for _, e in estimates(results)]
    yield Line("columns_estimated", len(every), "columns")
    yield Line("columns_withheld", len(results.columns) - len(every), "columns")
    yield Line("columns_negative", sum(value < 0 for value in every), "columns")
    yield Line("columns_positive", sum(value > 0 for value in every), "columns")
    yield Line("others_estimated", len(others), "columns")
    if others:
        yield Line("others_low", min(others), _stored(results))
        yield Line("others_high", max(others), _stored(results))


def _money(results: Results) -> Iterator[Line]:
    values, unit = market_values(results), results.study.currency
    if not len(values):
        return
    mean, low, high = _mean(results)
    interval = ConfidenceSet(Shape.INTERVAL, low, high, results.study.level, "")
    lead = lead_estimate(results)
    middle = float(np.median(values))
    yield Line("median_market_value", middle, unit)
    yield Line("quarter_market_value", float(np.quantile(values, 0.25)), unit)
    yield Line("three_quarter_market_value", float(np.quantile(values, 0.75)), unit)
    yield _scaled("mean_reaction_money", mean, unit, interval, middle)
    if lead is not None:
        yield _scaled("feature_money", effect_of(lead), unit, lead.interval, middle)


def _mean(results: Results) -> tuple[float, float, float]:
    """The mean outcome and the ends of its interval, as stored."""
    if not results.study.outcome.ready:
        return (results.headline.mean, *results.headline.interval)
    first = results.summary.iloc[0]
    return float(first["mean"]), float(first["ci_low"]), float(first["ci_high"])


def _paths(results: Results) -> Iterator[Line]:
    paths = results.paths
    if paths.empty:
        return
    yield Line("path_first_session", float(paths["day"].min()), "sessions")
    yield Line("path_last_session", float(paths["day"].max()), "sessions")
    for group, path in paths.groupby("group", sort=False):
        end = path.sort_values("day").iloc[-1]
        reach = float(end["low"]), float(end["high"])
        level = results.study.level
        yield Line(f"path_end: {group}", float(end["mean"]), "decimal", *reach, level, "interval")


def _distribution(results: Results) -> Iterator[Line]:
    for group, values in group_reactions(results).items():
        yield Line(f"deals: {group}", len(values), "deals")
        yield Line(f"median: {group}", float(np.median(values)), _stored(results))
        yield Line(f"share_below_zero: {group}", float(np.mean(values < 0)), "fraction")


def group_reactions(results: Results) -> dict[str, Floats]:
    """Group in words -> (n,) outcomes as stored, CARs of the headline window, of its deals.

    One group of all deals if the study asks about no feature or the feature is not two-valued.
    """
    cars = _outcomes(results)
    groups = _group_of(results).reindex(cars.index)
    if groups.isna().all():
        groups = pd.Series("All deals", index=cars.index)
    words = dict.fromkeys(groups.dropna())
    ordered = [word for word in results.study.groups if word in words] or list(words)
    return {word: np.asarray(cars[groups == word], dtype=np.float64) for word in ordered}


def _outcomes(results: Results) -> pd.Series[float]:
    """Deal -> its outcome, of the deals that have one."""
    study = results.study
    if study.outcome.ready:
        return results.deals.set_index("deal")[study.outcome.column].astype(np.float64)
    abnormal = results.abnormal.get(results.headline.model)
    if abnormal is None:
        return pd.Series(dtype=np.float64)
    cars = pd.Series(abnormal.car(study.headline), index=list(abnormal.deals))
    return cars[abnormal.complete(study.headline)]


def _group_of(results: Results) -> pd.Series[str]:
    """Deal -> its group in words; empty if the feature does not split deals in two."""
    study, deals = results.study, results.deals
    if not study.treatment or study.treatment not in deals or not all(study.groups):
        return pd.Series(dtype="str")
    treated = deals.set_index("deal")[study.treatment]
    if not treated.dropna().isin([0, 1]).all():
        return pd.Series(dtype="str")
    return treated.map({0: study.groups[0], 1: study.groups[1]})


def _proof(results: Results) -> Iterator[Line]:
    """The drawn samples, and the mean that these deals find four times in five."""
    power, placebo = results.power, results.placebo
    if len(power) and power["power"].max() >= POWER:
        found = float(np.interp(POWER, power["power"], power["effect"]))
        yield Line("detectable_mean", found, "decimal")
    drawn = placebo[placebo["test"] == "mean"] if len(placebo) else placebo
    for _, row in drawn.iterrows():
        yield Line("placebo_draws", float(row["draws"]), "samples")
        yield Line("placebo_farther", float(row["rejected"]), "samples")
        yield Line("placebo_p", float(row["rate"]), "fraction")


AMOUNTS = ("median", "low", "high")


def _curve(results: Results) -> Iterator[Line]:
    """The specification curve in numbers."""
    for _, row in results.curve.iterrows():
        if math.isfinite(row["value"]):
            name = str(row["name"])
            unit = "ways" if name in ("cells", "failed") else "fraction"
            unit = _stored(results) if name in AMOUNTS else unit
            yield Line(f"curve_{name}", float(row["value"]), unit)


def _verdicts(results: Results) -> Iterator[Line]:
    verdicts = results.diagnostics["verdict"] if len(results.diagnostics) else pd.Series(dtype=str)
    for verdict in ("pass", "warn", "fail"):
        yield Line(f"diagnostics_{verdict}", int((verdicts == verdict).sum()), "checks")
    for target, variants in sensitivity_targets(results).items():
        found = variants["estimate"].astype(float)
        yield Line(f"sensitivity_variants: {target}", len(variants), "variants")
        yield Line(f"sensitivity_low: {target}", float(found.min()), _stored(results))
        yield Line(f"sensitivity_high: {target}", float(found.max()), _stored(results))


def sensitivity_targets(results: Results) -> dict[str, pd.DataFrame]:
    """What was varied, in words -> its variants.

    The frame's column ``target`` names the number; without it every row is of the mean reaction.
    """
    frame = results.sensitivity
    if frame.empty:
        return {}
    if "target" not in frame:
        return {MEAN_REACTION: frame}
    return {str(target): part for target, part in frame.groupby("target", sort=False)}


def _with_set(name: str, value: float, unit: str, found: ConfidenceSet) -> Line:
    return Line(name, value, unit, found.low, found.high, found.level, str(found.shape))


def _scaled(name: str, value: float, unit: str, found: ConfidenceSet, by: float) -> Line:
    """A decimal effect and its set in money, ``by`` being positive."""
    low, high = found.low * by, found.high * by
    return Line(name, value * by, unit, low, high, found.level, str(found.shape))
