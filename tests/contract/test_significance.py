"""What every test of the mean abnormal return owes its caller, whatever it tests."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pipeline.core.abnormal import AbnormalReturns
from pipeline.core.estimate import NotApplicable, Tested, TestResult
from pipeline.core.window import Window
from pipeline.registry import TABLE, TESTS, Entry
from pipeline.significance.sample import CarSample, car_sample
from tests.significance.samples import WINDOW, clustered

SIZES = [0, 1, 2, 15, 30]
DISTRIBUTIONS = {"t", "normal", "chi2", "F", "empirical", "exact", "bootstrap"}


@pytest.fixture(params=TABLE[TESTS], ids=lambda item: item.key)
def chosen(request: pytest.FixtureRequest) -> Entry:
    return request.param


@pytest.fixture(scope="module")
def spread() -> AbnormalReturns:
    return clustered(deals=30, gaps=0)


@pytest.fixture(scope="module")
def one_date() -> AbnormalReturns:
    return clustered(deals=30, days=1, gaps=0)


@pytest.fixture
def abnormal(chosen: Entry, spread: AbnormalReturns, one_date: AbnormalReturns) -> AbnormalReturns:
    """Deals as the test takes them for granted: of one date or of several."""
    return one_date if "one_date" in chosen.assumes else spread


def sample(abnormal: AbnormalReturns, n: int, window: Window = WINDOW) -> CarSample:
    return car_sample(abnormal.take(np.arange(n)), window, 1.0)


def applicable(entry: Entry, abnormal: AbnormalReturns) -> list[tuple[int, TestResult]]:
    found = [(n, entry.load()(sample(abnormal, n))) for n in SIZES]
    return [(n, item) for n, item in found if isinstance(item, TestResult)]


@pytest.mark.parametrize("n", SIZES)
def test_a_number_or_a_reason(n: int, chosen: Entry, abnormal: AbnormalReturns) -> None:
    found: Tested = chosen.load()(sample(abnormal, n))
    assert found.name
    if isinstance(found, NotApplicable):
        assert found.reason
        return
    assert np.isfinite(found.statistic)
    assert 0 <= found.p_value <= 1
    assert found.distribution in DISTRIBUTIONS
    assert found.null
    assert found.caution
    assert any(character.isdigit() for character in found.citation), "no year of a source"
    assert len(found.df) == {"t": 1, "normal": 0}.get(found.distribution, len(found.df))


def test_it_applies_to_some_sample(chosen: Entry, abnormal: AbnormalReturns) -> None:
    assert applicable(chosen, abnormal)
    assert isinstance(chosen.load()(sample(abnormal, 0)), NotApplicable)


def test_the_registry_says_why_one_would_choose_it(chosen: Entry) -> None:
    assert chosen.why
    assert not chosen.why.endswith(".")


def test_the_order_of_the_deals_does_not_matter(chosen: Entry, abnormal: AbnormalReturns) -> None:
    for n, found in applicable(chosen, abnormal):
        rows = np.random.default_rng(4).permutation(n)
        again = chosen.load()(car_sample(abnormal.take(rows), WINDOW, 1.0))
        assert again.statistic == pytest.approx(found.statistic, rel=1e-9)
        assert again.p_value == pytest.approx(found.p_value, rel=1e-8)


def test_the_other_sign_is_the_other_side(chosen: Entry, abnormal: AbnormalReturns) -> None:
    """Two-sided: the mirror image of the returns has the mirrored statistic and the same p."""
    mirrored = replace(
        abnormal,
        returns=-abnormal.returns,
        estimation_returns=-abnormal.estimation_returns,
    )
    for n, found in applicable(chosen, abnormal):
        again = chosen.load()(sample(mirrored, n))
        assert again.statistic == pytest.approx(-found.statistic, rel=1e-9)
        assert again.p_value == pytest.approx(found.p_value, rel=1e-9)


@pytest.mark.parametrize("unit", [100.0, 1e4])
def test_percent_or_decimal_is_the_same_test(
    unit: float, chosen: Entry, abnormal: AbnormalReturns
) -> None:
    scaled = replace(
        abnormal,
        returns=abnormal.returns * unit,
        estimation_returns=abnormal.estimation_returns * unit,
        residual_variance=abnormal.residual_variance * unit**2,
    )
    for n, found in applicable(chosen, abnormal):
        again = chosen.load()(sample(scaled, n))
        assert again.statistic == pytest.approx(found.statistic, rel=1e-9)


def test_a_greater_effect_is_a_greater_statistic(chosen: Entry, abnormal: AbnormalReturns) -> None:
    for n, _ in applicable(chosen, abnormal):
        statistics = []
        for effect in (-0.05, 0.0, 0.05):
            lifted = replace(abnormal, returns=abnormal.returns + effect)
            statistics.append(chosen.load()(sample(lifted, n)).statistic)
        # A count of signs stands still once every deal lies on one side.
        assert statistics[0] <= statistics[1] <= statistics[2]
        assert statistics[0] < statistics[2]


def test_a_large_effect_is_found(chosen: Entry, abnormal: AbnormalReturns) -> None:
    lifted = replace(abnormal, returns=abnormal.returns + 0.2)
    n, _ = applicable(chosen, abnormal)[-1]
    found = chosen.load()(sample(lifted, n))
    compared = found.facts.get("compared_with")
    smallest = 0.0 if compared is None else 1 / (compared + 1)
    assert found.p_value <= max(0.01, smallest)
