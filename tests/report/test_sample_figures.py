"""The takeaways of the sample's figures follow from the numbers, by rule."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from pipeline.core.pictures import facts, picture_frames
from pipeline.core.results import Results
from pipeline.report.figures import csv, png, scene, svg
from pipeline.report.material import Material
from pipeline.report.sample_graphs import (
    balance_figure,
    calendar_figure,
    correction_figure,
    first_stage_figure,
    left_out_figures,
    overlap_figure,
    placebo_figure,
)
from pipeline.report.scene import Marks, Words

MADE = (
    calendar_figure, first_stage_figure, overlap_figure, balance_figure, correction_figure,
    placebo_figure,
)  # fmt: skip
FORBIDDEN = ("prove", "cause", "confirm", "significant")


def material(run: Results, **rows: list[dict[str, object]]) -> Material:
    return Material.of(replace(run, tables={**run.tables, **picture_frames(rows)}))


def balanced(run: Results, before: float, after: float) -> Material:
    told = facts("balance", {"before_largest": before, "after_largest": after})
    rows = [{"variable": "size", "before": before, "after": after}]
    return material(run, balance=rows, picture_facts=told)


def left_out(run: Results, beyond: float) -> Material:
    values = {"of": 60.0, "beyond": beyond, "most": -0.0012, "std_error": 0.001}
    told = facts("left_out", {f"{name}: mean reaction": value for name, value in values.items()})
    frame = pd.DataFrame(
        {
            "target": "mean reaction",
            "dimension": ["deal", "deal", "deal", "company", "company"],
            "group": ["D7", "D2", "D3", "<b>A</b>", "B"],
            "deals": [1, 1, 1, 30, 30],
            "estimate": [-0.0062, -0.0049, -0.0051, -0.004, -0.006],
            "change": [-0.0012, 0.0001, -0.0001, 0.001, -0.001],
        }
    )
    found = material(run, picture_facts=told)
    tables = {**found.results.tables, "left_out": frame}
    return Material.of(replace(found.results, tables=tables))


def everything(run: Results) -> Material:
    stream = np.random.default_rng(3)
    key = next(iter(run.headline.tests))
    told = [
        *facts("calendar", {"busiest_year": 2020, "busiest_month": 3, "busiest_deals": 7,
                            "meeting": 0.4}),
        *facts("first_stage", {"slope: treasury_shares": 0.0617}),
        *facts("propensity", {"off_support": 0.031}),
        *facts("balance", {"before_largest": 0.4, "after_largest": 0.02}),
        *facts("mills", {"r_squared": 0.81}),
        *facts("placebo", {"draws": 50, "farther": 0}),
    ]  # fmt: skip
    return material(
        run,
        calendar=[{"year": 2020, "month": m, "deals": 7 * (m == 3)} for m in range(1, 13)],
        shared_sessions=[
            {"others": 0, "deals": 36, "share_with_more": 0.4},
            {"others": 1, "deals": 24, "share_with_more": 0.0},
        ],
        first_stage_bins=[
            {"instrument": "treasury_shares", "bin": at, "deals": 5, "instrument_mean": at - 3.0,
             "treatment_mean": 0.06 * at - 0.2, "slope": 0.0617}
            for at in range(1, 6)
        ],
        propensity=[
            {"deal": str(at), "treated": at % 2 == 0, "probability": float(stream.uniform())}
            for at in range(60)
        ],
        balance=[{"variable": "size", "before": -0.4, "after": 0.02}],
        mills=[
            {"deal": str(at), "mills": at / 30, "predicted": at / 35} for at in range(60)
        ],
        placebo_draws=[
            {"draw": at, "deals": 60, "mean": 0.0, "test": key,
             "statistic": float(stream.normal())} for at in range(50)
        ],
        picture_facts=told,
    )  # fmt: skip


def test_nothing_is_drawn_without_its_data(full: Results, bare: Results) -> None:
    for run in (full, bare):
        assert [make(Material.of(run)) for make in MADE] == [None] * len(MADE)
        assert left_out_figures(Material.of(run)) == []


def test_every_figure_is_told_drawn_and_handed_over(full: Results) -> None:
    for make in MADE:
        figure = make(everything(full))
        assert figure is not None
        words = " ".join((figure.title.text, figure.caption.text, figure.alt)).lower()
        assert not any(word in words for word in FORBIDDEN), figure.name
        assert len(figure.alt) > 40
        assert svg(figure).count("<path") > 3
        assert png(figure).startswith(b"\x89PNG")
        assert csv(figure.data).count(b"\n") == len(figure.data) + 1


def test_titles_quote_the_facts(full: Results) -> None:
    found = [figure for make in MADE if (figure := make(everything(full))) is not None]
    titles = [figure.title.text for figure in found]
    assert titles[0].startswith("40% of deals share a session")
    assert "March 2020, holds 7" in titles[0]
    assert "goes with 0.062 more of" in titles[1]
    assert titles[2] == "3.1% of deals lie where the other group has none as likely"
    assert titles[4] == "The controls alone tell 81% of how the selection correction varies"
    assert titles[5].startswith("None of 50 samples without an announcement has a statistic")


def test_the_title_says_so_if_weighting_does_not_help(full: Results) -> None:
    better = balance_figure(balanced(full, 0.4, 0.02))
    worse = balance_figure(balanced(full, 0.1, 0.3))
    assert better is not None
    assert worse is not None
    assert "brings" in better.title.text
    assert "0.40 to 0.02" in better.title.text
    assert "does not lower" in worse.title.text


@pytest.mark.parametrize(
    ("beyond", "words"),
    [(0.0, "None of 60 deals moves"), (1.0, "1 of 60 deals moves"), (3.0, "3 of 60 deals move ")],
)
def test_the_title_counts_the_deals_that_carry_the_answer(
    full: Results, beyond: float, words: str
) -> None:
    (figure,) = left_out_figures(left_out(full, beyond))
    assert figure.title.text.startswith(words)
    assert figure.title.text.endswith("the most, D7, by −12 bp")
    assert figure.marks["full"] == pytest.approx(-50)
    shown = [part.text for part in scene(figure).parts if isinstance(part, Words)]
    assert "D7" in shown
    assert "<b>A</b>" in shown or "B" in shown
    assert "<b>" not in svg(figure)


def test_the_histograms_hold_every_deal(full: Results) -> None:
    overlap = overlap_figure(everything(full))
    assert overlap is not None
    assert overlap.data["deals"].sum() == 60
    placebo = placebo_figure(everything(full))
    assert placebo is not None
    assert placebo.data["samples"].sum() == 50


def test_groups_of_dots_differ_by_shape_too(full: Results) -> None:
    figure = balance_figure(everything(full))
    assert figure is not None
    shapes = {(p.shape, p.filled) for p in scene(figure).parts if isinstance(p, Marks)}
    assert shapes == {("circle", False), ("square", True)}
