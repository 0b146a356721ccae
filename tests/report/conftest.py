"""The runs of :mod:`tests.report.runs` and their documents, made once."""

from __future__ import annotations

import pytest

from pipeline.core.results import Results
from pipeline.report.bundle import documents
from tests.report.runs import bare_run, full_run


@pytest.fixture(scope="session")
def full() -> Results:
    return full_run()


@pytest.fixture(scope="session")
def bare() -> Results:
    return bare_run()


@pytest.fixture(scope="session")
def files(full: Results) -> dict[str, bytes]:
    return documents(full)


@pytest.fixture(scope="session")
def bare_files(bare: Results) -> dict[str, bytes]:
    return documents(bare)
