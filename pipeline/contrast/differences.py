"""What is not the same in two saved runs, and what that did to their numbers and deals."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
import pandas as pd

from pipeline.core.contrast import Difference, Kind, SavedRun

# Parts of a study that words, checks or intervals depend on, and no headline estimate.
WITHOUT_EFFECT = (
    "labels",
    "level",
    "name",
    "papers",
    "placebo",
    "question",
    "report",
    "scrutiny",
    "tests",
    "title",
)
FOLLOWED = re.compile(r"mean_reaction|mean_outcome|deals_kept|effect_\d+_(?P<column>\w+)")
MOST_DEALS = 10


def differences(first: SavedRun, second: SavedRun) -> tuple[Difference, ...]:
    """Inputs, then settings, then versions that are not the same, each in alphabetical order."""
    return (*_inputs(first, second), *_settings(first, second), *_versions(first, second))


def _inputs(first: SavedRun, second: SavedRun) -> Iterator[Difference]:
    for table in sorted({*first.inputs, *second.inputs}):
        one, two = (_read(run, table) for run in (first, second))
        if (one or {}).get("sha256") == (two or {}).get("sha256"):
            continue
        yield Difference(Kind.INPUT, table, _file(one), _file(two))


def _read(run: SavedRun, table: str) -> Mapping[str, str] | None:
    """The table's file, if the run read it."""
    source = run.inputs.get(table)
    return source if source and source["sha256"] else None


def _file(source: Mapping[str, str] | None) -> str:
    return f"{source['file']} ({source['sha256'][:8]})" if source else "not read"


def _settings(first: SavedRun, second: SavedRun) -> Iterator[Difference]:
    one, two = (dict(_leaves(run.study)) for run in (first, second))
    for key in sorted({*one, *two}):
        if one.get(key) != two.get(key):
            moves = key.split(".")[0] not in WITHOUT_EFFECT
            yield Difference(Kind.SETTING, key, _words(one, key), _words(two, key), moves)


def _leaves(value: Mapping[str, Any], above: str = "") -> Iterator[tuple[str, Any]]:
    for key, inner in value.items():
        here = f"{above}{key}"
        if isinstance(inner, Mapping) and inner:
            yield from _leaves(inner, f"{here}.")
        else:
            yield here, inner


def _words(values: Mapping[str, Any], key: str) -> str:
    if key not in values or values[key] in (None, "", {}):
        return "not set"
    return json.dumps(values[key], ensure_ascii=False)


def _versions(first: SavedRun, second: SavedRun) -> Iterator[Difference]:
    for program in sorted({*first.versions, *second.versions}):
        one, two = (run.versions.get(program, "none") for run in (first, second))
        if one != two:
            yield Difference(Kind.VERSION, program, one, two)


def numbers(first: pd.DataFrame, second: pd.DataFrame) -> pd.DataFrame:
    """``number, unit, first, second, move`` of the numbers followed, from two headline frames.

    An effect is matched by its estimator, wherever its column stands.
    """
    one, two = _followed(first), _followed(second)
    both = one.merge(
        two, how="outer", left_index=True, right_index=True, suffixes=("_first", "_second")
    )
    order = [*one.index, *(name for name in two.index if name not in one.index)]
    both = both.loc[order]
    unit = both["unit_first"].fillna(both["unit_second"])
    return pd.DataFrame(
        {
            "number": pd.Series(both.index, dtype="str"),
            "unit": unit.to_numpy(),
            "first": both["value_first"].to_numpy(),
            "second": both["value_second"].to_numpy(),
            "move": (both["value_second"] - both["value_first"]).to_numpy(),
        }
    )


def _followed(headline: pd.DataFrame) -> pd.DataFrame:
    matches = [FOLLOWED.fullmatch(str(name)) for name in headline["name"]]
    rows = [row for row, match in enumerate(matches) if match]
    names = [m["column"] or m[0] for m in matches if m]
    kept = headline.iloc[rows][["unit", "value"]].set_axis(names)
    return kept[~kept.index.duplicated()]


def deals_between(first: SavedRun, second: SavedRun) -> pd.DataFrame:
    """``deal, first, second`` of the deals that one run keeps and the other does not."""
    one, two = set(first.deals["deal"]), set(second.deals["deal"])
    rows = [
        {"deal": deal, "first": _state(deal, one, first), "second": _state(deal, two, second)}
        for deal in sorted(one ^ two)
    ]
    return pd.DataFrame(rows, columns=["deal", "first", "second"], dtype="str")


def _state(deal: str, kept: set[str], run: SavedRun) -> str:
    if deal in kept:
        return "kept"
    own = run.ledger[(run.ledger["deal"] == deal) & (run.ledger["action"] == "dropped")]
    if own.empty:
        return "not in the list"
    row = own.iloc[0]
    return f"{row['stage']}: {row['rule'].replace('_', ' ')}"


def moved_deals(first: SavedRun, second: SavedRun) -> pd.DataFrame:
    """``deal, first, second, move`` of the outcomes of deals in both; the largest moves."""
    one, two = _outcomes(first), _outcomes(second)
    both = pd.DataFrame({"first": one, "second": two}).dropna()
    both["move"] = both["second"] - both["first"]
    size = both["move"].abs()
    order = np.lexsort((both.index.astype(str), -size.to_numpy()))
    kept = both.iloc[order][size.iloc[order].to_numpy() > 0].head(MOST_DEALS)
    return kept.rename_axis("deal").reset_index()


def _outcomes(run: SavedRun) -> pd.Series:
    asked = run.study.get("outcome")
    start, end = run.study["event_time"]["headline"]
    name = asked["column"] if asked else f"car_{start}_{end}".replace("-", "m")
    values = run.deals[name] if name in run.deals else pd.Series(np.nan, run.deals.index)
    return pd.Series(values.to_numpy(), index=run.deals["deal"].astype(str))
