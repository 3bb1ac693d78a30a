"""Pydantic's complaints as a person at the frame would put them: got, wanted, did you mean."""

from __future__ import annotations

import types
import typing
from collections.abc import Mapping
from typing import Any, Final

from pydantic import BaseModel, ValidationError

from daq.settings.checks import near
from daq.yamlmarks import Document, Path, show

LIMITS: Final = {
    "greater_than": ("gt", "more than"),
    "greater_than_equal": ("ge", "at least"),
    "less_than": ("lt", "less than"),
    "less_than_equal": ("le", "at most"),
}


def note(document: Document, error: ValidationError, shape: type[BaseModel]) -> None:
    """Note every complaint of ``error`` in ``document``, at its place in the file."""
    for e in error.errors():
        loc = tuple(part for part in e["loc"] if part not in ("(word)", "(keys)", "[key]"))
        kind, value = e["type"], e["input"]
        ctx: dict[str, Any] = e.get("ctx", {})
        at_key = "[key]" in e["loc"]
        if kind == "wrong":
            message = e["msg"]
        elif kind == "missing":
            message = f"got nothing, wanted {_about(shape, loc)}"
        elif kind == "extra_forbidden":
            known = _keys(shape, loc[:-1])
            message = f"got an unknown key, wanted one of {', '.join(known)}{near(str(loc[-1]), known)}"
            at_key = True
        elif kind == "literal_error":
            words = [w.strip("'") for w in ctx["expected"].replace(" or ", ", ").split(", ")]
            keys = " or a mapping of keys" if "(word)" in e["loc"] else ""
            among = " or ".join(words) if len(words) < 3 else "one of " + ", ".join(words)
            message = f"got {show(value)}, wanted {among}{keys}{near(str(value), words)}"
        elif kind in LIMITS:
            key, words_ = LIMITS[kind]
            message = f"got {show(value)}, wanted {words_} {ctx[key]:g}"
        elif kind in ("too_short", "too_long"):
            exact = "at least" if kind == "too_short" else "at most"
            count = ctx["min_length" if kind == "too_short" else "max_length"]
            message = f"got {ctx['actual_length']} entries, wanted {exact} {count}"
        elif kind in ("model_type", "dict_type", "model_attributes_type"):
            message = f"got {show(value)}, wanted a mapping of keys to values"
        elif kind == "list_type":
            message = f"got {show(value)}, wanted a list"
        else:
            message = f"got {show(value)}: {e['msg']}"
        document.problem(loc, message, at_key=at_key)


def _about(shape: type[BaseModel], loc: Path) -> str:
    parent = _model_at(shape, loc[:-1])
    found = parent.model_fields.get(str(loc[-1])) if parent else None
    text = found.description if found is not None else None
    return f"{loc[-1]} ({text.rstrip('.')})" if text else str(loc[-1])


def _keys(shape: type[BaseModel], loc: Path) -> list[str]:
    found = _model_at(shape, loc)
    return list(found.model_fields) if found else []


def _model_at(shape: type[BaseModel], loc: Path) -> type[BaseModel] | None:
    """Return the section that stands at ``loc``."""
    at: Any = shape
    for part in loc:
        if isinstance(at, type) and issubclass(at, BaseModel):
            field = at.model_fields.get(str(part))
            at = _section(field.annotation) if field else None
        else:
            at = _section(typing.get_args(at)[-1]) if typing.get_args(at) else None
    return at if isinstance(at, type) and issubclass(at, BaseModel) else None


def _section(hint: Any) -> Any:
    """Return the section, or the mapping of them, inside Optional, Annotated and unions."""
    origin = typing.get_origin(hint)
    if origin is typing.Annotated:
        return _section(typing.get_args(hint)[0])
    if origin in (types.UnionType, typing.Union):
        inner = [_section(a) for a in typing.get_args(hint)]
        return next((i for i in inner if i is not None), None)
    if origin in (dict, Mapping):
        return hint
    return hint if isinstance(hint, type) and issubclass(hint, BaseModel) else None
