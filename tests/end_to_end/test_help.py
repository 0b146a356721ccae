"""Help answers at once: nothing heavy is imported for it."""

from __future__ import annotations

import subprocess
import sys

from tests.end_to_end.conftest import ROOT

HEAVY = {"numpy", "pandas", "scipy", "statsmodels", "matplotlib", "duckdb", "pyarrow", "pydantic"}


def test_help_imports_nothing_heavy() -> None:
    code = (
        "import sys\n"
        "from pipeline.__main__ import main\n"
        "sys.argv = ['dealwake', '--help']\n"
        "try:\n    main()\nexcept SystemExit as done:\n    assert not done.code\n"
        "print('MODULES', *sys.modules)\n"
    )
    shown = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True
    ).stdout
    text, _, modules = shown.partition("MODULES")
    assert "run" in text
    assert not HEAVY & set(modules.split())


def test_each_command_has_help() -> None:
    for command in ("draft", "run", "check", "deal", "power", "explain"):
        done = subprocess.run(
            [sys.executable, "-m", "pipeline", command, "--help"],
            cwd=ROOT, capture_output=True, text=True, check=False,
        )  # fmt: skip
        assert done.returncode == 0
        assert len(done.stdout.splitlines()) > 3


def test_a_check_loads_only_what_it_uses() -> None:
    code = (
        "import sys\n"
        "import pipeline.flow.checked\n"
        "later = ('scipy.stats', 'scipy.optimize', 'xlsxwriter', 'joblib', 'dask', 'matplotlib',"
        " 'pipeline.scrutiny', 'pipeline.flow.assembled')\n"
        "print(*[name for name in later if name in sys.modules])\n"
    )
    shown = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True
    ).stdout
    assert shown.split() == []
