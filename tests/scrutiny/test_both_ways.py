"""Outcome and choice as two equations: against linearmodels, in a world that is known, refusals."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from linearmodels.system import IV3SLS

from pipeline.core.design import Design, FitOptions
from pipeline.core.findings import InputProblem
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.scrutiny.both_ways import THREE, TWO, Term, both_ways
from tests.estimators.designs import deals, one_cluster_dimension, without
from tests.scrutiny import worlds


def named(found: tuple[Term, ...]) -> dict[tuple[str, str, str], Term]:
    return {(t.equation, t.method, t.term): t for t in found}


def outside(design: Design, alone: tuple[str, ...], **how: Any) -> Any:
    columns = pd.DataFrame(design.X, columns=design.names).assign(y=design.y)
    for at, name in enumerate(design.instruments):
        columns[name] = design.Z[:, at]
    controls = [name for name in design.names if name != design.treatment]
    stay = [name for name in controls if name not in alone]
    instruments = list(design.instruments)
    equations = {
        "outcome": {
            "dependent": columns["y"],
            "exog": columns[controls],
            "endog": columns[[design.treatment]],
            "instruments": columns[instruments],
        },
        "choice": {
            "dependent": columns[design.treatment],
            "exog": columns[[*stay, *instruments]],
            "endog": columns[["y"]],
            "instruments": columns[list(alone)],
        },
    }
    return IV3SLS(equations).fit(cov_type="robust", **how)


@pytest.mark.parametrize(("method", "how"), [(TWO, "ols"), (THREE, "gls")])
def test_both_equations_equal_linearmodels(method: str, how: str) -> None:
    """Two instruments, controls, heteroskedastic errors: coefficients and robust errors."""
    design = replace(without(deals(), "selection"), effects={}, clusters={})
    alone = ("run_up",)
    ours = named(both_ways(design, alone, FitOptions(covariance="hc0")))
    theirs = outside(design, alone, method=how)
    looked = 0
    for (equation, by, term), found in ours.items():
        if by == method:
            key = f"{equation}_{'y' if term == design.outcome else term}"
            assert found.coefficient == pytest.approx(theirs.params[key], rel=1e-6, abs=1e-10)
            assert found.std_error == pytest.approx(theirs.std_errors[key], rel=1e-6)
            looked += 1
    assert looked == len(theirs.params)


def test_two_stages_of_the_outcome_are_the_column_of_the_table() -> None:
    """Fixed effects, clusters, two instruments and controls at once."""
    design = one_cluster_dimension(without(deals(), "selection"))
    found = named(both_ways(design, ("run_up",), FitOptions()))
    column = two_stage_least_squares(design, FitOptions()).term(design.treatment)
    ours = found["outcome", TWO, design.treatment]
    assert ours.coefficient == pytest.approx(column["coefficient"], rel=1e-9)
    assert ours.std_error == pytest.approx(column["std_error"], rel=1e-9)
    assert ours.p_value == pytest.approx(column["p_value"], rel=1e-6)


def test_a_known_world_is_recovered_where_least_squares_is_not() -> None:
    design = worlds.simultaneous(np.random.default_rng(3), 4000)
    found = named(both_ways(design, ("x1", "x2"), FitOptions()))
    plain = float(np.linalg.lstsq(design.X, design.y)[0][1])
    assert abs(plain - 0.5) > 0.2
    for method in (TWO, THREE):
        one, other = found["outcome", method, "D"], found["choice", method, "CAR"]
        assert one.ci_low < 0.5 < one.ci_high
        assert other.ci_low < 0.3 < other.ci_high
        assert one.std_error < 0.05


def test_units_of_a_control_do_not_matter() -> None:
    design = worlds.simultaneous(np.random.default_rng(3), 300)
    scaled = replace(design, X=design.X * np.array([1, 1, 1e-6, 1e5, 1]))
    ours, theirs = (named(both_ways(d, ("x1", "x2"), FitOptions())) for d in (design, scaled))
    for key in (("outcome", THREE, "D"), ("choice", THREE, "CAR")):
        assert ours[key].coefficient == pytest.approx(theirs[key].coefficient, rel=1e-8)
        assert ours[key].std_error == pytest.approx(theirs[key].std_error, rel=1e-8)


@pytest.mark.parametrize("name", ["unheard_of", "constant", "D"])
def test_only_a_varying_control_moves_the_outcome_alone(name: str) -> None:
    with pytest.raises(InputProblem) as caught:
        both_ways(worlds.simultaneous(np.random.default_rng(3), 100), (name,), FitOptions())
    (finding,) = caught.value.findings
    assert (finding.rule, finding.column) == ("reverse_instrument", "scrutiny.reverse")
    assert "x0, x1, x2" in finding.expected


def test_without_instruments_the_equation_of_the_outcome_is_refused() -> None:
    design = replace(
        worlds.simultaneous(np.random.default_rng(3), 100), Z=np.empty((100, 0)), instruments=()
    )
    with pytest.raises(InputProblem) as caught:
        both_ways(design, ("x1", "x2"), FitOptions())
    assert caught.value.findings[0].rule == "under_identified"
