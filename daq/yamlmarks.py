"""YAML with the place of every value, read so that a value means what a person sees.

YAML 1.1 reads ``no`` as false, ``010`` as 8, ``12:30:00`` as 45000 and ``1e-5`` as text. Here nothing
is guessed: every scalar stays the text that stands in the file (:class:`Plain` where it was not quoted), and
whoever wants a number asks for one (:func:`number`). Only structure is judged here, all of it at once:
keys given twice, values left empty, references that contain themselves, tags, keys that are no text.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Final

import yaml

Path = tuple[str | int, ...]
"""Where a value stands: keys and list places from the top."""

LARGEST: Final = 4_000_000
MOST_VALUES: Final = 100_000
"""Characters of a file, and values in it with references followed: ten times what a hundred frames need."""
DEEPEST: Final = 40
NUMBER: Final = re.compile(
    r"[+-]?(0|[1-9][0-9]*|(0|[1-9][0-9]*)?\.[0-9]+|[1-9][0-9]*\.|0\.)([eE][+-]?[0-9]+)?", re.ASCII
)
WHOLE: Final = re.compile(r"[+-]?(0|[1-9][0-9]*)", re.ASCII)
SERIAL_FRAME: Final = re.compile(r"[5-8][EeOoNnMmSs](1|1\.5|2)")
"""``7E1`` is seven bits, even parity, one stop bit; never 70."""
EMPTY: Final = ("", "~", "null", "Null", "NULL")
_LOADER: Final = getattr(yaml, "CBaseLoader", yaml.BaseLoader)
_QUOTED: Final = ("'", '"', "|", ">")


class Plain(str):
    """A scalar without quotes: may be meant as a number, a truth value or text."""

    __slots__ = ()


@dataclass(frozen=True, slots=True, order=True)
class Problem:
    """One mistake: line and column (from 1; 0 where there is none), path of keys, what is wrong."""

    line: int
    column: int
    path: str
    message: str

    def say(self, file: str) -> str:
        """Return ``file:line:col: path: message``."""
        place = f"{file}:{self.line}:{self.column}: " if self.line else f"{file}: "
        return f"{place}{self.path}: {self.message}" if self.path else f"{place}{self.message}"


@dataclass(slots=True)
class Document:
    """What a file says: a tree of dicts, lists, Plain and str, and line and column of each value and key."""

    tree: Any = None
    values: dict[Path, tuple[int, int]] = field(default_factory=dict)
    keys: dict[Path, tuple[int, int]] = field(default_factory=dict)
    problems: list[Problem] = field(default_factory=list)

    def problem(self, path: Path, message: str, *, at_key: bool = False) -> None:
        """Note a mistake at ``path``, or at the nearest place above it that stands in the file."""
        line, column = self.place(path, at_key=at_key)
        self.problems.append(Problem(line, column, path_text(path), message))

    def place(self, path: Path, *, at_key: bool = False) -> tuple[int, int]:
        """Return line and column of the value at ``path`` (or its key), else of the nearest above it."""
        if at_key and path in self.keys:
            return self.keys[path]
        if path in self.values:
            return self.values[path]
        for n in range(len(path) - 1, 0, -1):  # something missing: show where it should be
            if path[:n] in self.keys:
                return self.keys[path[:n]]
            if path[:n] in self.values:
                return self.values[path[:n]]
        return (1, 1)


def path_text(path: Path) -> str:
    """Return ``frames.H1.conversion.points[2]``."""
    out = ""
    for part in path:
        out += f"[{part}]" if isinstance(part, int) else f".{part}" if out else part
    return out


def read(text: str) -> Document:
    """Return what the YAML ``text`` says, with every structural mistake in ``problems``.

    A mistake of syntax ends the reading: then it is the only problem and there is no tree.
    """
    document = Document()
    if len(text) > LARGEST:
        document.problems.append(Problem(1, 1, "", f"got {len(text)} characters, wanted at most {LARGEST}"))
        return document
    try:
        node = yaml.compose(text, Loader=_LOADER)
    except yaml.MarkedYAMLError as error:
        document.problems.append(_syntax(text, error))
        return document
    except yaml.reader.ReaderError as error:
        line = text.count("\n", 0, error.position) + 1
        column = error.position - (text.rfind("\n", 0, error.position) + 1) + 1
        what = f"got the character {_character(error.character)}, wanted printable text"
        document.problems.append(Problem(line, column, "", what))
        return document
    except RecursionError:
        document.problems.append(Problem(1, 1, "", "got too many levels of brackets, wanted a few"))
        return document
    if node is None:
        document.problems.append(Problem(1, 1, "", "got an empty file, wanted keys and values"))
        return document
    document.tree = _Walk(document).value(node, ())
    return document


def number(value: object) -> float | None:
    """Return the number that an unquoted scalar is in YAML 1.2 and to the eye, else None.

    ``1e-5``, ``.5`` and ``5.`` are numbers; ``010``, ``0x1F``, ``1_000``, ``12:30:00`` and ``.inf`` are none.
    """
    if not isinstance(value, Plain) or not NUMBER.fullmatch(value):
        return None
    found = float(value)
    return found if abs(found) <= 1e300 else None


def whole(value: object) -> int | None:
    """Return the whole number that an unquoted scalar is, else None."""
    return int(value) if isinstance(value, Plain) and WHOLE.fullmatch(value) and len(value) < 20 else None


def resolve(value: Any) -> Any:
    """Return plain Python values, for options whose kinds are not known here.

    Unquoted ``true`` and ``false`` become truth values and what :func:`number` takes becomes int or float,
    but a serial frame like ``7E1`` stays text; all else is text as it stands (``no``, ``010``, ``12:30``).
    """
    if isinstance(value, Mapping):
        return {str(k): resolve(v) for k, v in value.items()}
    if isinstance(value, list):
        return [resolve(v) for v in value]
    if isinstance(value, Plain):
        if value in ("true", "false"):
            return value == "true"
        if (n := whole(value)) is not None:
            return n
        if not SERIAL_FRAME.fullmatch(value) and (x := number(value)) is not None:
            return x
    return str(value)


def show(value: object) -> str:
    """Return how a value is called in a message."""
    if isinstance(value, Mapping):
        return "a mapping of keys"
    if isinstance(value, list):
        return "a list"
    text = repr(str(value))
    return text if len(text) <= 60 else text[:57] + "..."


def _character(found: object) -> str:
    return f"U+{found if isinstance(found, int) else ord(str(found)[:1] or '?'):04X}"


def _syntax(text: str, error: yaml.MarkedYAMLError) -> Problem:
    mark = error.problem_mark or error.context_mark
    line, column = (mark.line + 1, mark.column + 1) if mark else (1, 1)
    lines = text.split("\n")
    here = lines[line - 1] if line <= len(lines) else ""
    indent = here[: len(here) - len(here.lstrip())]
    if "\t" in indent:
        return Problem(line, indent.index("\t") + 1, "", "got a tab, wanted spaces for indentation")
    what = f"{error.context}, " if error.context else ""
    return Problem(line, column, "", f"not YAML: {what}{error.problem or 'cannot be read'}")


class _Walk:
    """From PyYAML's nodes to values and places."""

    def __init__(self, document: Document) -> None:
        self._document = document
        self._open: set[int] = set()
        self._count = 0

    def value(self, node: yaml.Node, path: Path) -> Any:
        document = self._document
        here = (node.start_mark.line + 1, node.start_mark.column + 1)
        document.values.setdefault(path, here)
        self._count += 1
        if self._count > MOST_VALUES:
            if self._count == MOST_VALUES + 1:
                document.problem(path, f"got more than {MOST_VALUES} values, wanted fewer (references count)")
            return Plain("")
        if len(path) > DEEPEST:
            document.problem(path[:8], f"got more than {DEEPEST} levels, wanted a few")
            return Plain("")
        if id(node) in self._open:
            document.problem(path, "got a reference to something that contains it, wanted a value")
            return {}
        if not node.tag.startswith("tag:yaml.org,2002:") or node.tag.rsplit(":")[-1] not in (
            "str",
            "map",
            "seq",
        ):
            document.problem(path, f"got the tag {node.tag!r}, wanted a value without a tag")
        self._open.add(id(node))
        try:
            if isinstance(node, yaml.MappingNode):
                return self._mapping(node, path)
            if isinstance(node, yaml.SequenceNode):
                return [self.value(item, (*path, i)) for i, item in enumerate(node.value)]
            if getattr(node, "style", None) in _QUOTED:
                return str(node.value)
            if node.value in EMPTY:
                document.problem(path, "got nothing, wanted a value (or leave the key out)", at_key=True)
            return Plain(node.value)
        finally:
            self._open.discard(id(node))

    def _mapping(self, node: yaml.MappingNode, path: Path) -> dict[str, Any]:
        document = self._document
        out: dict[str, Any] = {}
        merged: list[yaml.Node] = []
        first: dict[str, int] = {}
        for key_node, value_node in node.value:
            mark = (key_node.start_mark.line + 1, key_node.start_mark.column + 1)
            if not isinstance(key_node, yaml.ScalarNode):
                document.problems.append(
                    Problem(*mark, path_text(path), "got a key that is no text, wanted a word")
                )
                continue
            key = str(key_node.value)
            here = (*path, key)
            if key == "<<" and key_node.style not in _QUOTED:
                merged += value_node.value if isinstance(value_node, yaml.SequenceNode) else [value_node]
                continue
            if key in first:
                again = f"got this key again (first in line {first[key]}), wanted it once"
                document.problems.append(Problem(*mark, path_text(here), again))
                continue
            first[key] = mark[0]
            document.keys[here] = mark
            out[key] = self.value(value_node, here)
        for other in merged:  # what stands here itself wins, then the first of several
            if not isinstance(other, yaml.MappingNode):
                document.problem(
                    (*path, "<<"), "got << with something else than a mapping, wanted a reference"
                )
                continue
            if id(other) in self._open:
                document.problem(
                    (*path, "<<"), "got a reference to something that contains it, wanted a value"
                )
                continue
            self._open.add(id(other))
            inherited = self._mapping(
                yaml.MappingNode(other.tag, [pair for pair in other.value if not _named(pair[0], out)],
                                 other.start_mark, other.end_mark), path
            )  # fmt: skip
            self._open.discard(id(other))
            out |= inherited
        return out


def _named(key: yaml.Node, among: Mapping[str, Any]) -> bool:
    return isinstance(key, yaml.ScalarNode) and key.value in among
