"""One process of the fuzzer: ``python -m tests.fuzz.worker TARGET FOLDER`` and its own options.

Faults are kept by where they were raised and the search goes on; a crash of a library in native
code, or a time limit, ends the process, and :mod:`tests.fuzz.run` starts another.
"""

from __future__ import annotations

import hashlib
import json
import resource
import sys
import traceback
from pathlib import Path

import atheris
import duckdb

MEMORY = 6 << 30

with atheris.instrument_imports(include=["pipeline", "openpyxl"]):
    from tests.fuzz.targets import TARGETS, WORDS, seeds


def share_one_base() -> None:
    """Let every connection be one to the same data base; nothing of a file is remembered."""
    base = duckdb.connect(config={"threads": 1})
    base.execute("SET enable_external_file_cache = false")
    duckdb.connect = lambda: base.cursor()  # type: ignore[assignment,misc]


def place_of(fault: BaseException) -> str:
    """The kind of a fault and the last line of our own that it went through."""
    ours = [
        frame
        for frame in traceback.extract_tb(fault.__traceback__)
        if "/pipeline/" in frame.filename
    ]
    last = ours[-1] if ours else traceback.extract_tb(fault.__traceback__)[-1]
    file = last.filename.rsplit("/pipeline/", 1)[-1]
    return f"{type(fault).__name__} at {file}, {last.name}, line {last.lineno}"


def main() -> None:
    """Search until the time is over."""
    name, folder = sys.argv[1], Path(sys.argv[2])
    target = TARGETS[name]
    faults, corpus, files = (folder / part for part in ("faults", "corpus", "files"))
    for part in (faults, corpus, files):
        part.mkdir(parents=True, exist_ok=True)
    for at, seed in enumerate(seeds()[name]):
        (corpus / f"seed_{at}").write_bytes(seed)
    words = folder / "words"
    quoted = (word.replace('"', '\\"') for word in WORDS[name])
    words.write_text("".join(f'"{word}"\n' for word in quoted))
    resource.setrlimit(resource.RLIMIT_AS, (MEMORY, MEMORY))
    share_one_base()
    known: set[str] = set()

    def once(data: bytes) -> None:
        try:
            target(data, files)
        except Exception as fault:
            place = place_of(fault)
            if place not in known:
                known.add(place)
                kept = faults / hashlib.sha256(place.encode()).hexdigest()[:16]
                kept.with_suffix(".bin").write_bytes(data)
                said = {"place": place, "said": str(fault)[:500], "trace": traceback.format_exc()}
                kept.with_suffix(".json").write_text(json.dumps(said, indent=2))

    atheris.Setup([sys.argv[0], *sys.argv[3:], f"-dict={words}", str(corpus)], once)
    atheris.Fuzz()


if __name__ == "__main__":
    main()
