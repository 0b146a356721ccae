"""Heckman's likelihood against R sampleSelection, gretl and scipy, as kept in estimators.json."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from pipeline.core.design import Design, FitOptions
from pipeline.estimators.selection_ml import heckman_likelihood
from tests.reference import public_data as data

CASES = json.loads((Path(__file__).parent / "estimators.json").read_text(encoding="utf-8"))["cases"]


# Sources: R sampleSelection 1.2-12, gretl 2022c and an independent scipy likelihood agree.
@pytest.mark.parametrize(
    ("case", "build"),
    [("mroz_likelihood", data.mroz_log_wage), ("mroz_wage_level_likelihood", data.mroz_wage_level)],
)
def test_likelihood(case: str, build: Callable[[], Design]) -> None:
    column = heckman_likelihood(build(), FitOptions())
    (choice,) = column.stages
    found = {"loglik": column.fit["log_likelihood"]}
    found |= {key: column.fit[key] for key in ("sigma", "rho")}
    found |= {f"se.{key}": column.fit[f"se_{key}"] for key in ("sigma", "rho")}
    for prefix, part in (("", column), ("S:", choice)):
        for name in part.names:
            term = part.term(name)
            found[f"coef.{prefix}{name}"] = term["coefficient"]
            found[f"se.{prefix}{name}"] = term["std_error"]
    expected = CASES[case]["expected"]
    assert set(found) == set(expected)
    for key, entry in expected.items():
        allowed = max(entry.get("abs_tol") or 0, (entry.get("rel_tol") or 0) * abs(entry["value"]))
        assert abs(found[key] - entry["value"]) <= allowed, key


def test_the_wage_level_has_a_higher_peak_and_says_so() -> None:
    """The vignette of sampleSelection, sec. 6.1: a start at ρ = .9 runs to the edge."""
    column = heckman_likelihood(data.mroz_wage_level(), FitOptions())
    assert column.fit["higher_peak_rho"] > 0.99
    assert column.fit["higher_peak_gain"] > 100
    assert any("higher by 101.6" in note and "do not lead" in note for note in column.notes)
    assert not any(
        "higher" in n for n in heckman_likelihood(data.mroz_log_wage(), FitOptions()).notes
    )


def test_the_profile_peaks_at_the_estimate() -> None:
    column = heckman_likelihood(data.mroz_log_wage(), FitOptions())
    profile = {
        float(key.removeprefix("profile.")): value
        for key, value in column.fit.items()
        if key.startswith("profile.")
    }
    assert max(profile.values()) <= 1e-9
    assert max(profile, key=lambda rho: profile[rho]) == 0.0
    # Twice the fall at ρ = 0 is the likelihood ratio.
    ratio = column.tests["likelihood_ratio"].statistic  # type: ignore[union-attr]
    np.testing.assert_allclose(-2 * profile[0.0], ratio, rtol=1e-9)
