"""The deal table: one row a measured deal, its outcomes beside its keys and variables."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.ledger import Ledger
from pipeline.core.window import Window

HIDDEN = ("_row", "column", "position", "announced_utc")


def car_column(window: Window) -> str:
    """Name of a window's CAR in the deal table: ``car_m1_1`` for [-1, +1]."""
    return _column("car", window)


def _column(measure: str, window: Window) -> str:
    return f"{measure}_{window.start}_{window.end}".replace("-", "m")


def with_outcomes(
    deals: pd.DataFrame,
    abnormal: AbnormalReturns,
    windows: Sequence[Window],
    share: float,
    *,
    log: bool = False,
) -> pd.DataFrame:
    """The deals with the abnormal returns of each window and the facts of estimation.

    A window has its CAR (``car_m1_1``), the CAR over its forecast standard deviation
    (``scar_m1_1``) and the buy-and-hold abnormal return (``bhar_m1_1``), decimal but for the
    second.

    Args:
        deals: N rows in the order of ``abnormal``.
        log: whether its returns are logarithmic.
        windows: the first is the headline, which needs all its days.
        share: of the days of the others that must have traded; NaN where fewer did.
    """
    added: dict[str, np.ndarray] = {}
    for at, window in enumerate(windows):
        enough = abnormal.complete(window, 1.0 if at == 0 else share)
        measures = {
            "car": abnormal.car(window),
            "scar": abnormal.standardised(window),
            "bhar": abnormal.bhar(window, log=log),
        }
        for name, values in measures.items():
            added[_column(name, window)] = np.where(enough, values, np.nan)
    added[f"{car_column(windows[0])}_std_dev"] = np.sqrt(abnormal.car_variance(windows[0]))
    added["estimation_returns"] = abnormal.observations
    return deals.assign(**added)


def outcomes_by_choice(
    abnormal: Mapping[str, AbnormalReturns],
    windows: Sequence[Window],
    share: float,
    rows: Sequence[str],
) -> dict[str, np.ndarray]:
    """Window and model in words -> (n,) CARs of ``rows``, decimal, the headline's first.

    A window needs ``share`` of its days, as in the deal table; NaN where fewer traded.
    """
    made: dict[str, np.ndarray] = {}
    for model, measured in abnormal.items():
        place = {deal: at for at, deal in enumerate(measured.deals)}
        at = np.array([place[deal] for deal in rows], dtype=np.int64)
        for window in windows:
            car = np.where(measured.complete(window, share), measured.car(window), np.nan)
            made[f"{window.label}, {model.replace('_', ' ')}"] = car[at]
    return made


def samples_without(
    ledger: Ledger, rows: Sequence[str], rules: Mapping[str, str]
) -> dict[str, np.ndarray]:
    """All deals, and for each flag that some deal carries, the deals without it."""
    made = {"all deals": np.ones(len(rows), dtype=np.bool_)}
    for rule, words in rules.items():
        flagged = {item.deal for _, item in ledger if item.rule == rule}
        keep = np.array([deal not in flagged for deal in rows], dtype=np.bool_)
        if keep.any() and not keep.all():
            made[words] = keep
    return made


def group_names(deals: pd.DataFrame, treatment: str, words: tuple[str, str]) -> pd.Series:
    """Each deal's group in words: (untreated, treated); 'all deals' without a yes-or-no feature."""
    if not treatment or treatment not in deals:
        return pd.Series("all deals", index=deals.index, dtype="str")
    values = pd.to_numeric(deals[treatment], errors="coerce")
    if not values.dropna().isin([0.0, 1.0]).all():
        return pd.Series("all deals", index=deals.index, dtype="str")
    named = values.map({0.0: words[0], 1.0: words[1]})
    return named.where(named.notna(), "not known").astype("str")


def deals_frame(deals: pd.DataFrame, groups: pd.Series) -> pd.DataFrame:
    """The deal table as written: ``deal`` first, working columns left out."""
    shown = deals.drop(columns=[name for name in HIDDEN if name in deals])
    shown = shown.rename(columns={"deal_id": "deal"}).assign(group=groups)
    for name in ("announced_date", "day_zero", "earnings_release"):
        if name in shown:
            shown[name] = shown[name].astype("datetime64[s]")
    return shown.reset_index(drop=True)
