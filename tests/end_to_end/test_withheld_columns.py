"""A column whose equations cannot be solved is withheld, and the others are shown."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest

from pipeline.core.estimate import Withheld
from pipeline.flow import explained


def test_an_unsolvable_column_is_withheld_in_plain_words(monkeypatch: pytest.MonkeyPatch) -> None:
    def singular(design: object, options: object) -> None:
        np.linalg.inv(np.zeros((2, 2)))

    found = SimpleNamespace(load=lambda: singular)
    monkeypatch.setattr(explained, "entry", lambda table, key: found)
    monkeypatch.setattr(explained.plan, "fit_options", lambda study: None)
    column = explained.column_of(None, "some_column", SimpleNamespace(design=None))  # type: ignore[arg-type]
    assert isinstance(column, Withheld)
    assert column.title == "some column"
    assert "no single solution" in column.reason
