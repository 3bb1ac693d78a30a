"""Imports point one way; this reads them and fails on any other arrow."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
CORE_MAY = {"daq.core", "daq.records", "daq.codec"}
EDGES: dict[str, set[str]] = {
    "daq.records": set(),
    "daq.codec": {"daq.records"},
    "daq.core": CORE_MAY,
    "daq.store": {"daq.store", "daq.records", "daq.codec"},
    "daq.exits": set(),
    "daq.container": {"daq.records"},
    "daq.lines": {"daq.records", "daq.codec"},
    "daq.joining": {"daq.records"},
    "daq.clock": {"daq.records"},
    "daq.entries": {"daq.core", "daq.records"},
    "daq.door": {"daq.entries", "daq.clock", "daq.core", "daq.records"},
    "daq.inlet": {"daq.records", "daq.store"},
    "daq.supervise": set(),
    "daq.acquire": {"daq.records", "daq.clock", "drivers"},
    "daq.engine": {"daq.core", "daq.records", "daq.codec", "daq"},
    "daq.yamlmarks": {"daq.records"},
    "daq.instants": {"daq.records"},
    "daq.reload": {"daq.settings", "daq.core", "daq.records", "daq.clock", "daq"},
    "daq.recording": {"daq.instants", "daq.records", "drivers"},
    "daq.settings": {"daq.core", "daq.records", "daq.yamlmarks", "daq.settings", "drivers", "daq.publish"},
    "daq.publish": {"daq.core", "daq.store", "daq.records", "daq.codec", "daq.publish", "daq.lines"},
    "daq.broker": {"daq.records"},
    "daq.view": {"daq.view", "daq.store", "daq.records", "daq.lines"},
    "daq.replay": {
        "daq.joining",
        "daq.engine",
        "daq.core",
        "daq.store",
        "daq.records",
        "daq.lines",
        "daq.recording",
        "daq.settings",
    },
    "daq.prove": {
        "daq.prove",
        "daq.core",
        "daq.records",
        "daq.codec",
        "daq.replay",
        "daq.engine",
        "daq.settings",
        "daq.recording",
        "daq.store",
        "daq.exits",
        "simulator",
    },
    "simulator": {"simulator"},
    "drivers": {"drivers"},
}
"""Room -> what it may import of this project; those in ABOVE may import any of these."""
ABOVE = {
    "daq.cli",
    "daq.daemon",
    "daq.startup",
    "daq.writer",
    "daq.export",
    "daq.bench",
    "daq.commands",
    "daq.bundle",
    "daq.checking",
    "daq.adopt",
}
ONLY_FROM = {"simulator": {"daq.cli", "daq.prove", "daq.daemon", "daq.bench", "daq.commands", "simulator"}}
PURE = {
    "os",
    "io",
    "socket",
    "time",
    "random",
    "threading",
    "logging",
    "pathlib",
    "subprocess",
    "sqlite3",
    "asyncio",
}
FILES = sorted(p for room in ("daq", "drivers", "simulator") for p in (ROOT / room).rglob("*.py"))


def _module(path: Path) -> str:
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def _imports(path: Path) -> set[str]:
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {a.name for a in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            found |= {f"{node.module}.{a.name}" for a in node.names} | {str(node.module)}
    return found


def _room(module: str) -> str:
    named = [room for room in (*EDGES, *ABOVE) if module == room or module.startswith(room + ".")]
    return max(named, key=len, default=module)


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(ROOT)))
def test_no_module_imports_against_the_arrows(path: Path) -> None:
    """The core stays pure and the simulator independent only while nothing reaches across."""
    module = _module(path)
    room = _room(module)
    ours = {i for i in _imports(path) if i.split(".")[0] in ("daq", "drivers", "simulator")}
    if room in EDGES:
        allowed = EDGES[room]
        bad = {i for i in ours if _room(i) not in allowed and _room(i) != room and i not in allowed}
        bad -= {i for i in ours if i == "daq" or (i.startswith("daq.__"))}
        assert not bad, f"{module} may import {sorted(allowed)}, imports {sorted(bad)}"
    else:
        assert room in ABOVE or module == "daq", f"{module}: a room without arrows; add it to the table"
    for target, sources in ONLY_FROM.items():
        if any(i.split(".")[0] == target for i in ours):
            assert any(room == s or room.startswith(s) for s in sources), f"{module} may not import {target}"


@pytest.mark.parametrize("path", [p for p in FILES if "core" in p.parts], ids=lambda p: p.stem)
def test_the_core_touches_no_world(path: Path) -> None:
    """No files, sockets, clock, random numbers or threads: then a replay is the live run."""
    assert not {i.split(".")[0] for i in _imports(path)} & PURE
