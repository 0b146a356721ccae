"""The frames of ``data/``: every number of a run, one row each, in a fixed order."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import Column, Diagnostic, Estimate, NotApplicable
from pipeline.core.results import WindowTests

TEST_COLUMNS = {
    "window_start": "int64",
    "window_end": "int64",
    "expected_return": "str",
    "sample": "str",
    "n": "int64",
    "mean": "float64",
    "median": "float64",
    "std_dev": "float64",
    "share_positive": "float64",
    "ci_low": "float64",
    "ci_high": "float64",
    "test": "str",
    "title": "str",
    "statistic": "float64",
    "distribution": "str",
    "df": "float64",
    "p_value": "float64",
    "p_holm": "float64",
    "status": "str",
    "reason": "str",
    "valid": "str",
    "doubt": "str",
    "headline": "bool",
}
ESTIMATE_COLUMNS = {
    "sample": "str",
    "estimator": "str",
    "title": "str",
    "stage": "str",
    "term": "str",
    "coefficient": "float64",
    "std_error": "float64",
    "statistic": "float64",
    "p_value": "float64",
    "ci_low": "float64",
    "ci_high": "float64",
    "df": "float64",
    "n": "int64",
    "clusters": "str",
    "covariance": "str",
    "estimand": "str",
}
SUMMARY_COLUMNS = {
    "group": "str",
    "n": "int64",
    "mean": "float64",
    "median": "float64",
    "std_dev": "float64",
    "share_positive": "float64",
    "std_error": "float64",
    "df": "float64",
    "ci_low": "float64",
    "ci_high": "float64",
    "clusters": "int64",
}
DIAGNOSTIC_COLUMNS = {
    "subject": "str",
    "check": "str",
    "value": "float64",
    "threshold": "str",
    "verdict": "str",
    "meaning": "str",
    "source": "str",
}


def typed_frame(rows: Iterable[Mapping[str, Any]], columns: Mapping[str, str]) -> pd.DataFrame:
    """A frame of exactly these columns and types, empty ones included."""
    return pd.DataFrame(list(rows), columns=list(columns)).astype(dict(columns))


def no_frame() -> pd.DataFrame:
    """A frame of nothing, for what a run was not asked for."""
    return pd.DataFrame()


def event_tests_frame(found: Sequence[WindowTests]) -> pd.DataFrame:
    """One row a test a window a model."""
    return typed_frame(
        (row for at, item in enumerate(found) for row in _test_rows(item, at == 0)), TEST_COLUMNS
    )


def _test_rows(item: WindowTests, headline: bool) -> Iterator[dict[str, Any]]:
    shared = {
        "window_start": item.window.start,
        "window_end": item.window.end,
        "expected_return": item.model,
        "sample": "all deals",
        "n": item.n,
        "mean": item.mean,
        "median": item.median,
        "std_dev": item.std_dev,
        "share_positive": item.share_positive,
        "ci_low": item.interval[0],
        "ci_high": item.interval[1],
        "headline": headline,
    }
    for key, test in item.tests.items():
        if isinstance(test, NotApplicable):
            yield {
                **shared, "test": key, "title": test.name, "statistic": np.nan,
                "distribution": "", "df": np.nan, "p_value": np.nan, "p_holm": np.nan,
                "status": "not applicable", "reason": test.reason, "valid": "", "doubt": "",
            }  # fmt: skip
        else:
            yield {
                **shared, "test": key, "title": test.name, "statistic": test.statistic,
                "distribution": test.distribution, "df": test.df[0] if test.df else np.nan,
                "p_value": test.p_value, "p_holm": item.p_holm.get(key, np.nan), "status": "ok",
                "reason": "", "valid": "no" if test.doubt else "yes", "doubt": test.doubt,
            }  # fmt: skip


def estimates_frame(columns: Sequence[Column], explained: Mapping[str, str | int]) -> pd.DataFrame:
    """One row a term a column, its first stages included (``stage`` names them).

    ``explained`` says in columns of its own what the estimates explain: window and model of the
    abnormal return, or the outcome of the deal list.
    """
    shared = {**explained, "sample": "regression deals"}
    rows: list[dict[str, Any]] = []
    for column in columns:
        if isinstance(column, Estimate):
            rows += [{**shared, **row} for row in _terms(column, column, "")]
            for stage in column.stages:
                rows += [{**shared, **row} for row in _terms(column, stage, stage.title)]
    kinds = {name: "int64" if isinstance(v, int) else "str" for name, v in explained.items()}
    return typed_frame(rows, {**kinds, **ESTIMATE_COLUMNS})


def _terms(column: Estimate, estimate: Estimate, stage: str) -> Iterator[dict[str, Any]]:
    clusters = ", ".join(f"{name} {count}" for name, count in estimate.clusters.items())
    for term, df in zip(estimate.names, estimate.dfs, strict=True):
        yield {
            "estimator": column.estimator,
            "title": column.title,
            "stage": stage,
            "term": term,
            **estimate.term(term),
            "df": float(df),
            "n": estimate.n,
            "clusters": clusters,
            "covariance": estimate.covariance_name,
            "estimand": estimate.estimand,
        }


def diagnostics_frame(diagnostics: Iterable[Diagnostic]) -> pd.DataFrame:
    """One row a check."""
    rows = [{name: getattr(item, name) for name in DIAGNOSTIC_COLUMNS} for item in diagnostics]
    return typed_frame(rows, DIAGNOSTIC_COLUMNS)


LADDER_COLUMNS = {
    "name": "str",
    "std_error": "float64",
    "df": "float64",
    "p": "float64",
    "low": "float64",
    "high": "float64",
    "note": "str",
}


def ladder_frame(rungs: Iterable[Any]) -> pd.DataFrame:
    """One row a treatment of the errors."""
    rows = [{name: getattr(rung, name) for name in LADDER_COLUMNS} for rung in rungs]
    return typed_frame(rows, LADDER_COLUMNS)


def abnormal_returns_frame(abnormal: Mapping[str, AbnormalReturns]) -> pd.DataFrame:
    """One row a deal a day a model: deal, expected_return, day, date, abnormal_return, expected."""
    parts = [_abnormal_rows(measured) for measured in abnormal.values()]
    return pd.concat(parts, ignore_index=True)


def _abnormal_rows(measured: AbnormalReturns) -> pd.DataFrame:
    n, width = measured.returns.shape
    days = np.arange(measured.span.start, measured.span.end + 1)
    return pd.DataFrame(
        {
            "deal": np.repeat(np.array(measured.deals, dtype=object), width),
            "expected_return": measured.model,
            "day": np.tile(days, n),
            "date": measured.days.ravel().astype("datetime64[s]"),
            "abnormal_return": measured.returns.ravel(),
            "expected": measured.expected.ravel(),
        }
    ).astype({"deal": "str", "expected_return": "str"})
