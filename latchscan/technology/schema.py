"""JSON Schema of technology files, for editors that check and complete YAML as one types."""

from __future__ import annotations

from typing import Any

from pydantic import BaseModel

from latchscan.technology.model import Technology

DIALECT = "https://json-schema.org/draft/2020-12/schema"


def technology_schema() -> dict[str, Any]:
    """JSON Schema (2020-12) of a technology file.

    Notes
    -----
    It holds keys, types and ranges.  Names in expressions, cycles and pairs used twice are
    beyond a schema; `latchscan.technology.check.check_technology` finds those.
    """
    return model_schema(Technology, "latchscan technology")


def model_schema(model: type[BaseModel], title: str) -> dict[str, Any]:
    """JSON Schema (2020-12) of the file that a model describes."""
    schema: dict[str, Any] = _without_null(model.model_json_schema(by_alias=True))
    return {"$schema": DIALECT, **schema, "title": title}


def _without_null(part: Any) -> Any:
    """Schema in which an optional key is absent or has a value, as the check demands."""
    if isinstance(part, list):
        return [_without_null(item) for item in part]
    if not isinstance(part, dict):
        return part
    kept = {
        key: _without_null(value)
        for key, value in part.items()
        if not (key == "default" and value is None)
    }
    choices = kept.get("anyOf")
    if isinstance(choices, list) and {"type": "null"} in choices:
        choices = [choice for choice in choices if choice != {"type": "null"}]
        kept.pop("anyOf")
        kept = {**choices[0], **kept} if len(choices) == 1 else {"anyOf": choices, **kept}
    return kept
