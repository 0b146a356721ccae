"""The commented study file and the JSON Schema cannot drift from the schema."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path

from pipeline.registry import TABLE
from pipeline.study.describe import every_key, json_schema
from pipeline.study.load import load_study

CONFIGS = Path(__file__).resolve().parents[2] / "configs"


def test_the_committed_file_is_what_the_schema_says() -> None:
    assert (CONFIGS / "every_key.toml").read_text(encoding="utf-8") == every_key()


def test_the_committed_json_schema_is_what_the_schema_says() -> None:
    assert (CONFIGS / "study.schema.json").read_text(encoding="utf-8") == json_schema()


def test_the_commented_file_is_a_valid_study() -> None:
    study = load_study(CONFIGS / "every_key.toml")
    assert study.event_time.headline == [-1, 1]


def test_every_commented_default_is_valid_toml() -> None:
    for line in every_key().splitlines():
        if line.startswith("# ") and " = " in line and not line.startswith("#   "):
            key = line[2:].split(" = ")[0]
            if key.isidentifier():
                assert key in tomllib.loads(line[2:])


def test_every_name_of_the_registry_is_shown() -> None:
    text = " ".join(every_key().replace("\n#", " ").split())
    for entries in TABLE.values():
        for entry in entries:
            assert entry.key in text


def test_the_json_schema_refuses_unknown_keys() -> None:
    schema = json.loads(json_schema())
    assert schema["additionalProperties"] is False
    assert set(schema["properties"]) >= {"base", "title", "inputs", "event_time", "instruments"}
