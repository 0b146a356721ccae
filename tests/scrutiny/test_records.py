"""Error of record: the curve of added error, and what a reliability may be given for."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.core.design import FitOptions
from pipeline.scrutiny.ground import ground_of
from pipeline.scrutiny.on_records import recorded_badly
from pipeline.scrutiny.options import ScrutinyOptions, Target
from pipeline.scrutiny.simex import EXTRAPOLANTS, ZETA, curve, extrapolated
from tests.scrutiny import worlds

ZETAS = np.array([0.0, *ZETA])


@given(
    a=st.floats(-2, 2),
    b=st.floats(0.2, 3),
    gap=st.floats(0.2, 3),
    kind=st.sampled_from(EXTRAPOLANTS),
)
@settings(max_examples=40, deadline=None)
def test_a_curve_of_its_own_kind_is_found_again(a: float, b: float, gap: float, kind: str) -> None:
    shapes = {
        "linear": lambda z: a + b * z,
        "quadratic": lambda z: a + b * z - gap * z**2,
        "rational": lambda z: a + b / (1 + gap + z),
    }
    at = np.array([-1.0, -0.5, 0.7, 2.0])
    found = curve(ZETAS, shapes[kind](ZETAS), kind, at)
    assert found == pytest.approx(shapes[kind](at), rel=2e-3, abs=2e-3)
    assert extrapolated(ZETAS, shapes[kind](ZETAS), kind) == pytest.approx(found[0], rel=1e-12)


def test_a_flat_film_stays_flat() -> None:
    for kind in EXTRAPOLANTS:
        assert curve(ZETAS, np.full(5, 0.3), kind, np.array([-1.0])) == pytest.approx([0.3])


def test_every_curve_is_a_variant_and_a_line() -> None:
    design = worlds.noisy_treatment(np.random.default_rng(3), 400)
    options = ScrutinyOptions(reliability={"D": worlds.RELIABILITY}, simex=True, seed=5)
    target = Target("effect", "Least squares", 0.95, design.n)
    part = recorded_badly(design, ground_of(design, FitOptions()), target, options)
    told = [item for item in part.variants if "simulation" in item.variant]
    assert len(told) == len(EXTRAPOLANTS)
    curves = {row["curve"] for row in part.tables["extrapolation"]}
    assert curves == {"simulated", *EXTRAPOLANTS}
    by_kind = {item.variant.split()[-2]: item.estimate for item in told}
    # Attenuation is convex: the straight line undoes least of it.
    assert by_kind["linear"] < by_kind["quadratic"] < by_kind["rational"]
