"""What the scrutiny leaves out, and says so, where several variables are instrumented."""

from __future__ import annotations

from pipeline.core.design import FitOptions
from pipeline.estimators.instruments import two_stage_least_squares
from pipeline.estimators.least_squares import ols
from pipeline.scrutiny.options import ScrutinyOptions
from pipeline.scrutiny.scrutinise import scrutinise
from tests.estimators.several import two_chosen


def test_doubts_made_for_one_instrumented_variable_are_left_out_and_named() -> None:
    design = two_chosen(n=200, groups=9)
    columns = tuple(fit(design, FitOptions()) for fit in (ols, two_stage_least_squares))
    found = scrutinise(design, columns, 1, ScrutinyOptions(resamples=30))
    notes = " ".join(found.notes)
    assert "exclusion was not varied" in notes
    assert "the algebra is made for one chosen variable" in notes
    assert not any("breakdown" in key for key in found.facts)
    assert found.variants
