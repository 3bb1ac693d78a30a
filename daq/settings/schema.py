"""The JSON Schema of the lab file, for editors: ``daq/schemas/lab.schema.json``.

Made from the models, so that it cannot say something else than they do; a test compares the file with it.
After a change of the models::

    python -m daq.settings.schema
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any, Final

from daq.settings.checks import LOAD_KEYS
from daq.settings.model import LabFile

LIMIT_NAMES: Final = {"gt": "exclusiveMinimum", "ge": "minimum", "lt": "exclusiveMaximum", "le": "maximum"}
FILE: Final = Path(__file__).parents[1] / "schemas" / "lab.schema.json"


def schema() -> dict[str, Any]:
    """Return the JSON Schema (draft 2020-12) of a lab file."""
    found: dict[str, Any] = LabFile.model_json_schema()
    for section in (found, *found["$defs"].values()):
        _without_null(section)
    _with_limits(found)
    frame = found["$defs"]["Frame"]
    load = {"anyOf": [{"required": ["stress_mpa"]}, {"required": ["mass_kg", "lever_ratio"]}]}
    one = {"required": ["specimen", "channels", "temperature_c", "tolerance"], **load}
    frame["anyOf"] = [one, {"required": ["positions"]}]
    for name in ("Frame", "Test"):
        found["$defs"][name]["not"] = {"required": list(LOAD_KEYS[:2])}
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", **found, "title": "Upturn lab file"}


def _without_null(section: dict[str, Any]) -> None:
    """Leaving a key out is how nothing is said; ``null`` is a mistake."""
    for key, found in section.get("properties", {}).items():
        inner = [x for x in found.get("anyOf", []) if x != {"type": "null"}]
        if inner:
            del found["anyOf"]
            found.update(inner[0] if len(inner) == 1 else {"anyOf": inner})
        if found.get("default", 0) is None:
            del found["default"]
        found.pop("title", None)
        section["properties"][key] = found


def _with_limits(node: object) -> None:
    """Give limits their names in JSON Schema; a kind with a reader of its own keeps them under ours."""
    if isinstance(node, list):
        for item in node:
            _with_limits(item)
    elif isinstance(node, dict):
        if node.get("type") in ("number", "integer"):
            for ours, theirs in LIMIT_NAMES.items():
                if ours in node:
                    node[theirs] = node.pop(ours)
        for item in node.values():
            _with_limits(item)


def text() -> str:
    """Return the file's text."""
    return json.dumps(schema(), indent=2, ensure_ascii=False) + "\n"


if __name__ == "__main__":
    FILE.parent.mkdir(exist_ok=True)
    FILE.write_text(text(), encoding="utf-8")
    print(f"{FILE} written")
