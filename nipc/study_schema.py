"""The JSON Schema of a study file: the study's own tables, and those of every adapter."""

from __future__ import annotations

import re
from importlib.metadata import entry_points
from typing import Any

DIALECT = "https://json-schema.org/draft/2020-12/schema"


def study_schema() -> dict[str, Any]:
    """JSON Schema (draft 2020-12) of study files, with the settings of all installed adapters.

    What the schema allows may still be wrong: `nipc check` also knows what must fit together.
    """
    from nipc.adapters import GROUP, load_adapter
    from nipc.problem.study import Study

    made = Study.model_json_schema()
    tables = {
        name: _adapter_table(name, load_adapter(name).Settings.model_json_schema())
        for name in sorted({entry.name for entry in entry_points(group=GROUP)})
    }
    defs = made["$defs"]
    for table in tables.values():
        defs |= table.pop("$defs", {})
    for name, table in tables.items():
        defs[_place(name)] = table
        inner = table["properties"].get("propagator")
        if inner is not None:  # an adapter around another one's
            table["properties"]["propagator"] = {"$ref": "#/$defs/PropagatorSettings"}
    names = list(tables)
    defs["PropagatorSettings"] = {
        "description": "Which adapter wraps the propagator, and the adapter's own settings.",
        "type": "object",
        "properties": {"adapter": {"enum": names, "type": "string"}},
        "required": ["adapter"],
        "oneOf": [{"$ref": f"#/$defs/{_place(name)}"} for name in names],
    }
    return {"$schema": DIALECT, **made, "title": "A study of nipc"}


def _place(adapter: str) -> str:
    return f"propagator-{adapter}"


def _adapter_table(name: str, settings: dict[str, Any]) -> dict[str, Any]:
    """An adapter's settings with its name in them; definitions bear the name, so none collide."""
    renamed = _moved(settings, name)
    properties = {"adapter": {"const": name}, **renamed.get("properties", {})}
    required = ["adapter", *renamed.get("required", [])]
    return renamed | {"properties": properties, "required": required}


def _moved(part: Any, name: str) -> Any:
    """The same with #/$defs/X as #/$defs/name-X."""
    if isinstance(part, list):
        return [_moved(each, name) for each in part]
    if not isinstance(part, dict):
        if isinstance(part, str):
            return re.sub(r"^#/\$defs/", f"#/$defs/{name}-", part)
        return part
    return {
        key: {f"{name}-{k}": _moved(v, name) for k, v in value.items()}
        if key == "$defs"
        else _moved(value, name)
        for key, value in part.items()
    }
