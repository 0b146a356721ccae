"""Keys about longer horizons: what they ask of the stages, and what they refuse."""

from __future__ import annotations

from pathlib import Path

import pytest

from pipeline.core.window import Window
from pipeline.study import plan, plan_returns
from pipeline.study.load import load_study
from tests.study.studies import BASE, refused, write

ASKED = """
[calendar_time]
horizons = [60, 250]
weightings = ["value", "equal", "value"]
fewest_holdings = 5
errors = "white"

[matched_control]
windows = [[1, 250]]
within = ["industry"]
nearest = ["market_value"]
"""
CANDIDATES = 'candidates = "tables/candidates.csv"\n'


def test_the_keys_in_the_stages_terms(tmp_path: Path) -> None:
    study = load_study(write(tmp_path / "study.toml", BASE + ASKED))
    portfolios = plan_returns.calendar_time_options(study)
    assert portfolios.horizons == (60, 250)
    assert portfolios.weightings == ("value", "equal")
    assert (portfolios.fewest_holdings, portfolios.newey_west) == (5, False)
    assert not portfolios.factors
    matched = plan_returns.match_options(study)
    assert matched.windows == (Window(1, 250),)
    assert "market_value" in plan.wanted(study).candidate_numbers
    assert "industry" in plan.wanted(study).candidate_texts


def test_candidates_are_read_for_controls_alone(tmp_path: Path) -> None:
    bare = BASE[: BASE.index("[characteristics.relative_size]")]
    study = load_study(write(tmp_path / "study.toml", bare + ASKED))
    assert "candidates" in plan.sources(study)
    assert plan.wanted(study).candidate_numbers == ("market_value",)
    silent = load_study(write(tmp_path / "silent.toml", bare))
    assert "candidates" not in plan.sources(silent)


@pytest.mark.parametrize(
    "text, words",
    [
        (ASKED.replace("[1, 250]", "[250, 1]"), "last session is its first or comes after it"),
        (ASKED.replace('nearest = ["market_value"]', ""), "nearest"),
        (ASKED.replace("horizons = [60, 250]", "horizons = [1]"), "greater than or equal to 5"),
        (ASKED.replace("fewest_holdings = 5", 'regressors = "factors"'), "factor returns"),
    ],
)
def test_keys_that_do_not_fit(text: str, words: str, tmp_path: Path) -> None:
    assert text != ASKED
    (finding,) = refused(write(tmp_path / "study.toml", BASE + text))
    assert finding.rule == "bad_value"
    assert words in f"{finding.expected} {finding.got}"


def test_controls_need_the_table_they_are_chosen_from(tmp_path: Path) -> None:
    bare = BASE[: BASE.index("[characteristics.relative_size]")].replace(CANDIDATES, "")
    (finding,) = refused(write(tmp_path / "study.toml", bare + ASKED))
    assert (finding.rule, finding.column) == ("bad_value", "inputs.candidates")


PEERS = """
[expected_returns]
also = ["peer_adjusted"]
"""


def test_a_model_of_peers_needs_to_know_them(tmp_path: Path) -> None:
    (finding,) = refused(write(tmp_path / "study.toml", BASE + PEERS))
    assert (finding.rule, finding.column) == ("bad_value", "expected_returns.peers")
    by_column = load_study(write(tmp_path / "column.toml", BASE + PEERS + 'peers = "industry"\n'))
    assert "industry" in plan.wanted(by_column).deal_texts
    assert "industry" in plan.wanted(by_column).candidate_texts
    pairs = BASE.replace(CANDIDATES, CANDIDATES + 'peers = "tables/peers.csv"\n') + PEERS
    by_pair = load_study(write(tmp_path / "pairs.toml", pairs))
    assert plan.sources(by_pair)["peers"].file == "peers.csv"
    assert "industry" not in plan.wanted(by_pair).candidate_texts


def test_when_a_benchmark_is_doubted(tmp_path: Path) -> None:
    asked = "[benchmark_checks]\nlargest_weight = 0.2\nhighest_risk_free = 0.01\n"
    limits = plan_returns.benchmark_limits(load_study(write(tmp_path / "s.toml", BASE + asked)))
    assert (limits.largest_weight, limits.highest_rate) == (0.2, 0.01)
    assert (limits.dominating, limits.identical, limits.lowest) == (0.95, 0.999, 0.05)
