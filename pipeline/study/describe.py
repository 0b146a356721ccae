"""The commented study file and the JSON Schema, both made from the schema itself."""

from __future__ import annotations

import json
from collections.abc import Iterator
from datetime import date, time
from pathlib import Path
from typing import Any, get_args, get_origin

from pydantic import BaseModel
from pydantic.fields import FieldInfo
from pydantic_core import PydanticUndefined

from pipeline.study.schema import Study

HEAD = """\
# Every key a study file may hold. A line that begins with "# " and a key shows the default: take
# the mark away to change it. The other lines must be given. A study may begin with
#     base = "another.toml"
# and then hold only what differs from it.
"""
# What stands in place of keys without a default; the demo's own values.
EXAMPLES: dict[str, Any] = {
    "title": "Paying in shares: what the announcement costs the acquirer",
    "question": "Does paying in shares cost the acquirer at the announcement?",
    "inputs.deals": "../data_demo/deals.xlsx",
    "inputs.prices": "../data_demo/prices.parquet",
    "inputs.benchmarks": "../data_demo/benchmarks.parquet",
    "inputs.candidates": "../data_demo/candidates.parquet",
    "calendars.closed": [date(2023, 9, 1)],
    "calendars.closes": {"2024-12-24": time(12, 0)},
    "outcome.column": "bid_premium",
    "outcome.unit": "percent",
    "characteristics.column": "leverage",
    "characteristics.ratio": ["deal_value", "market_value"],
    "characteristics.interaction": ["relative_size", "target_listed"],
    "characteristics.indicator": {"column": "industry", "equals": "packaging"},
    "characteristics.price": "run_up",
    "characteristics.window": [-42, -12],
    "regression.treatment": "paid_in_shares",
    "selection.explained_by": ["leverage", "cash"],
    "selection.excluded": ["divisions_for_sale"],
    "selection.rationale": "Why these move the decision to bid and nothing else.",
    "bounds.rationale": "Why paying in shares moves whether a return is seen one way only.",
    "instruments.for": "paid_in_shares",
    "instruments.use": ["treasury_shares", "fast_placement"],
    "instruments.rationale": "Why these move the form of payment and nothing else.",
}
TABLES_BY_NAME = {
    "calendars": "One table an exchange, where you know better than its calendar.\n"
    "[calendars.XHKG]",
    "outcome": (
        "For a deal list that holds its outcome already, such as a bid premium: then take prices,\n"
        "benchmarks and all that is measured from them out of the study.\n"
        "[outcome]"
    ),
    "characteristics": (
        "One table a variable, of exactly one source and any steps, taken in the order shown.\n"
        "[characteristics.your_name]"
    ),
}


# Keys that hold one table of keys for each table that is read, and the one shown.
BY_TABLE = {"inputs.source": "prices"}


def every_key() -> str:
    """The commented study file: each key with its meaning and default, valid as it stands."""
    lines = [HEAD, *_keys(Study, "")]
    for name, field in Study.model_fields.items():
        model = _model(field.annotation)
        if model is None:
            continue
        if name in TABLES_BY_NAME:
            lines += ["", *(f"# {line}" for line in TABLES_BY_NAME[name].splitlines())]
            lines += [f"# {line}" for line in _keys(model, f"{name}.", mark=False)]
            continue
        lines += ["", f"[{name}]", *_keys(model, f"{name}.")]
        for inner, part in model.model_fields.items():
            nested = _model(part.annotation)
            if nested is not None and _is_table(part):
                key = f"{name}.{inner}"
                head = f"{key}.{BY_TABLE[key]}" if key in BY_TABLE else key
                lines += ["", f"[{head}]", *_keys(nested, f"{key}.")]
    return "\n".join(lines) + "\n"


def json_schema() -> str:
    """The JSON Schema of a study file, for editors that complete and check TOML."""
    schema = Study.model_json_schema(by_alias=True)
    schema["title"] = "dealwake study"
    schema["properties"]["base"] = {"type": "string", "description": "Study to inherit from."}
    schema["required"] = []  # a base may hold any of them
    return json.dumps(schema, indent=2, ensure_ascii=False) + "\n"


def _keys(model: type[BaseModel], prefix: str, mark: bool = True) -> Iterator[str]:
    for name, field in model.model_fields.items():
        key = field.alias or name
        if (prefix == "" and key == "name" and model is Study) or _is_table(field):
            continue
        words = (field.description or "") + _choices(field)
        yield from (f"# {line}" if mark else f"  {line}" for line in _wrap(words))
        example = EXAMPLES.get(prefix + key)
        if example is not None:
            yield f"{key} = {_toml(example)}"
        else:
            shown = _toml(_default(field))
            yield f"# {key} = {shown}" if mark else f"{key} = {shown}"


def _is_table(field: FieldInfo) -> bool:
    """Whether the key is a table of its own in the study file."""
    inline = get_origin(field.annotation) is list or any(
        name in str(field.annotation) for name in ("Indicator", "SampleFilter")
    )
    return _model(field.annotation) is not None and not inline


def _default(field: FieldInfo) -> Any:
    if field.default_factory is not None:
        return field.default_factory()  # type: ignore[call-arg]
    return None if field.default is PydanticUndefined else field.default


def _model(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for inner in get_args(annotation):
        found = _model(inner)
        if found is not None:
            return found
    return None


def _toml(value: Any) -> str:
    if value is None:
        return '""'
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dict):
        inner = ", ".join(f"{key} = {_toml(item)}" for key, item in value.items())
        return f"{{ {inner} }}" if inner else "{}"
    if isinstance(value, list):
        return "[" + ", ".join(_toml(item) for item in value) + "]"
    if isinstance(value, date | time):
        return value.isoformat()
    if isinstance(value, Path):
        value = str(value)
    return json.dumps(value, ensure_ascii=False)


def _choices(field: FieldInfo) -> str:
    """The names a key allows, from the registry's table."""
    for part in (*field.metadata, *_metadata(field.annotation)):
        names = getattr(getattr(part, "func", None), "names", ())
        if names:
            return f" One of: {', '.join(names)}."
    return ""


def _metadata(annotation: Any) -> Iterator[Any]:
    yield from getattr(annotation, "__metadata__", ())
    for inner in get_args(annotation):
        yield from _metadata(inner)


def _wrap(text: str) -> list[str]:
    from textwrap import wrap

    return wrap(text, 96)
