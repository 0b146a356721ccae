"""From a TOML file, through the files it inherits from, to a checked :class:`Study`."""

from __future__ import annotations

import difflib
import json
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, get_args

from pydantic import BaseModel, ValidationError

from pipeline.core.findings import Finding, InputProblem, Severity, problem, raise_errors
from pipeline.inputs.source import POSTGRES
from pipeline.study.rules import cross_checks
from pipeline.study.schema import Study

PATH_KEYS = (
    "deals", "prices", "benchmarks", "candidates", "factors", "peers", "listings", "news",
    "restricted", "rates", "delistings",
)  # fmt: skip
FILE_KEYS = ("base",)


def load_study(path: Path | str, overrides: Mapping[str, Any] | None = None) -> Study:
    """Read a study file and all it inherits from.

    Args:
        path: the TOML file. Its stem becomes the study's name unless the file sets one.
        overrides: tables merged last, as if written at the end of the file.

    Raises:
        InputProblem: with every finding about the file at once.
    """
    path = Path(path).resolve()
    raw = _merge(_read(path, ()), overrides or {})
    raw.setdefault("name", path.stem)
    try:
        study = Study.model_validate(raw)
    except ValidationError as refusal:
        raise InputProblem(_finding(error, path.name) for error in refusal.errors()) from None
    raise_errors(cross_checks(study, path.name))
    return study


def restored(raw: Mapping[str, Any], paths: Mapping[str, Path]) -> Study:
    """A study from the plain values that a run's manifest holds, and where its tables are.

    Raises:
        InputProblem: if the values do not make a study.
    """
    inputs = {**raw.get("inputs", {}), **{name: str(path) for name, path in paths.items()}}
    try:
        study = Study.model_validate_json(json.dumps({**raw, "inputs": inputs}))
    except ValidationError as refusal:
        raise InputProblem(_finding(error, "manifest.json") for error in refusal.errors()) from None
    raise_errors(cross_checks(study, "manifest.json"))
    return study


def _read(path: Path, seen: tuple[Path, ...]) -> dict[str, Any]:
    if path in seen:
        chain = " -> ".join(file.name for file in (*seen, path))
        raise problem(
            "bad_value",
            path.name,
            column="base",
            got=f"files that inherit from one another: {chain}",
            expected="a base that ends",
            remedy="Remove one of the base keys.",
        )
    if not path.is_file():
        raise problem(
            "missing_file",
            seen[-1].name if seen else path.name,
            column="base" if seen else "",
            got=f"no file at {path}",
            expected="a study file ending in .toml",
            remedy="Correct the path.",
        )
    raw = _parse(path)
    raw.pop("name", None) if seen else None
    inputs = raw.get("inputs")
    if isinstance(inputs, dict):
        for key in PATH_KEYS:
            if isinstance(inputs.get(key), str):
                inputs[key] = _place(path.parent, inputs[key])
    papers = raw.get("papers")
    if isinstance(papers, dict) and isinstance(papers.get("logo"), str):
        logo = papers["logo"]
        papers["logo"] = (path.parent / logo).resolve() if logo else None
    base = raw.pop("base", None)
    if base is None:
        return raw
    if not isinstance(base, str):
        raise problem(
            "bad_value",
            path.name,
            column="base",
            got=repr(base),
            expected="the name of a study file in quotes",
            remedy='Write base = "demo.toml".',
        )
    return _merge(_read((path.parent / base).resolve(), (*seen, path)), raw)


def _place(folder: Path, named: str) -> Path:
    """Where a table is: a file, counted from the study's folder, or a data base."""
    return POSTGRES if Path(named) == POSTGRES else (folder / named).resolve()


def _parse(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as fault:
        raise problem(
            "unreadable_file",
            path.name,
            got=str(fault),
            expected="TOML in UTF-8: key = value, text in quotes, lists in [ ]",
            remedy="Correct the line named; compare with configs/every_key.toml.",
        ) from None


def _merge(base: dict[str, Any], top: Mapping[str, Any]) -> dict[str, Any]:
    """Tables merge key by key; anything else is replaced whole."""
    merged = dict(base)
    for key, value in top.items():
        below = merged.get(key)
        both = isinstance(below, dict) and isinstance(value, Mapping)
        merged[key] = _merge(below, value) if both and isinstance(below, dict) else value
    return merged


def _finding(error: Any, file: str) -> Finding:
    location = [str(part) for part in error["loc"]]
    key = ".".join(location)
    if error["type"] == "extra_forbidden":
        near = difflib.get_close_matches(location[-1], _known_keys(location[:-1]), n=1, cutoff=0.0)
        expected = "one of " + ", ".join(sorted(_known_keys(location[:-1])))
        remedy = f"Did you mean '{near[0]}'?" if near else "Delete the key."
        return Finding(
            "unknown_key",
            Severity.ERROR,
            file,
            f"unknown key '{key}'",
            expected,
            remedy,
            column=key,
        )
    if error["type"] == "missing":
        return Finding(
            "bad_value",
            Severity.ERROR,
            file,
            got="nothing",
            expected=f"a value for '{key}'",
            remedy=f"Add {key} to the study file, or a base that has it.",
            column=key,
        )
    message = str(error["msg"]).removeprefix("Value error, ")
    if isinstance(error["input"], dict):  # the values of a table do not fit together
        return Finding(
            "bad_value",
            Severity.ERROR,
            file,
            got=error.get("ctx", {}).get("got", "values that do not fit together"),
            expected=message,
            remedy="Correct one of them; configs/every_key.toml says what each may be.",
            column=key,
        )
    return Finding(
        "bad_value",
        Severity.ERROR,
        file,
        got=_short(error["input"]),
        expected=message[:1].lower() + message[1:],
        remedy="Correct the value of the key.",
        column=key,
    )


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 80 else text[:77] + "..."


def _known_keys(location: list[str]) -> list[str]:
    model: Any = Study
    for part in location:
        fields = getattr(model, "model_fields", {})
        by_alias = {field.alias or name: field for name, field in fields.items()}
        if part in by_alias:
            model = _model_in(by_alias[part].annotation)
    fields = getattr(model, "model_fields", {})
    known = [field.alias or name for name, field in fields.items() if name != "name" or location]
    return known + ([] if location else list(FILE_KEYS))


def _model_in(annotation: Any) -> Any:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for inner in get_args(annotation):
        found = _model_in(inner)
        if found is not None:
            return found
    return None
