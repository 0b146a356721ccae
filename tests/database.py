"""A PostgreSQL server of the tests' own; left out, with a reason, where none is installed."""

from __future__ import annotations

import os
import shutil
import socket
import subprocess
import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest

SECRET = "a_password_nobody_may_see"
WORDS = "PGHOST", "PGPORT", "PGUSER", "PGPASSWORD", "PGDATABASE"


def programs() -> Path | None:
    """The folder of initdb and pg_ctl, the newest there is."""
    found = sorted(Path("/usr/lib/postgresql").glob("*/bin/initdb"))
    here = shutil.which("initdb")
    known = [*found, *([Path(here)] if here else [])]
    return known[-1].resolve().parent if known else None


def as_nobody(command: list[str]) -> list[str]:
    """A command under another user where we are root, whom the server refuses."""
    return ["setpriv", "--reuid=65534", "--regid=65534", "--clear-groups", *command]


def quietly(command: list[str]) -> None:
    done = subprocess.run(
        as_nobody(command) if os.getuid() == 0 else command,
        stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, check=False, cwd="/", timeout=60,
    )  # fmt: skip
    if done.returncode:
        pytest.skip(f"PostgreSQL could not be started: {Path(command[0]).name} failed")


@pytest.fixture(scope="session")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[dict[str, str]]:
    """PG* variables of a running server with a user who has a password."""
    pytest.importorskip("psycopg", reason="psycopg is not installed")
    where = programs()
    if where is None:
        pytest.skip("PostgreSQL is not installed")
    with tempfile.TemporaryDirectory(prefix="pg_", dir="/tmp") as folder:
        data = Path(folder) / "data"
        data.mkdir()
        (Path(folder) / "word").write_text(SECRET)
        if os.getuid() == 0:
            for path in (Path(folder), data, Path(folder) / "word"):
                os.chown(path, 65534, 65534)
        with socket.socket() as free:
            free.bind(("127.0.0.1", 0))
            port = str(free.getsockname()[1])
        quietly([
            str(where / "initdb"), "-D", str(data), "-U", "desk", "-A", "scram-sha-256",
            f"--pwfile={folder}/word", "-E", "UTF8", "--locale=C", "--no-sync",
        ])  # fmt: skip
        settings = f"-c listen_addresses=127.0.0.1 -p {port} -k {folder} -c fsync=off"
        control = [str(where / "pg_ctl"), "-D", str(data)]
        quietly([*control, "-w", "-l", f"{folder}/log", "-o", settings, "start"])
        try:
            yield dict(zip(WORDS, ("127.0.0.1", port, "desk", SECRET, "postgres"), strict=True))
        finally:
            quietly([*control, "-w", "-m", "immediate", "stop"])
