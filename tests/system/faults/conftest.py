"""Options of the fault suite, and the report that it writes.

``pytest tests/system/faults`` is the short run; with ``--faults long`` it takes hours. Every series of
faults has a seed of its own: the base plus its place. A failure says the options that bring it back.
"""

from __future__ import annotations

import json
import sys
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

sys.path.insert(0, str(Path(__file__).parents[2] / "store"))  # its cases and its child are used here too
for _cases in ("kill_cases", "power_cases"):
    if _cases not in sys.modules:  # the tests of the store may have come first
        pytest.register_assert_rewrite(_cases)

SHORT = {"kills": 200, "cuts": 50, "errors": 20}
LONG = {"kills": 10_000, "cuts": 2_000, "errors": 1_000}
GROUPS = (
    "killed at random and at named points", "power cut", "disk full, then freed",
    "read-only, or an error on write or fsync", "damaged journal", "reader held open",
    "adapter unplugged", "adapters swapped, wrong instrument", "babbling device", "port thread hung",
    "late, doubled, reordered reply", "bit flips, codes, values that are none", "TCP instrument out of order",
    "broker out of order", "publisher thread or callback failed", "access to the broker refused",
    "second instance", "clock stepped", "view stopped or without a terminal", "host short of everything",
)  # fmt: skip
"""The twenty groups of faults, numbered from 1."""


def pytest_addoption(parser: pytest.Parser) -> None:
    group = parser.getgroup("faults", "faults that are injected (name the folder tests/system/faults)")
    group.addoption("--faults", choices=("short", "long"), default="short", help="how many of each")
    group.addoption("--fault-seed", type=int, default=1, help="seed of the first series")
    group.addoption("--fault-report", type=Path, metavar="FILE.json", help="write what came out there")
    for name in SHORT:
        group.addoption(f"--{name}", type=int, help=f"instead of {SHORT[name]} ({LONG[name]} when long)")


@dataclass(slots=True)
class Faults:
    """How many faults to inject, from which seed; and the tally of one test, for the report."""

    kills: int
    cuts: int
    errors: int
    seed: int
    tally: dict[int, dict[str, Counter[str]]] = field(default_factory=dict)

    def count(self, group: int, injected: str, outcome: str) -> None:
        """Count one fault of ``group`` and what came out."""
        self.tally.setdefault(group, {}).setdefault(injected, Counter())[outcome] += 1


@pytest.fixture
def small_journal(monkeypatch: pytest.MonkeyPatch) -> None:
    """Make chunks whole and checkpoints due soon, so that short lives meet them."""
    monkeypatch.setattr("daq.store.chunks.CHUNK_SCANS", 20)
    monkeypatch.setattr("daq.store.journal.CHECKPOINT_BYTES", 100_000)


@pytest.fixture
def faults(request: pytest.FixtureRequest) -> Any:
    """What to inject, and where to count it."""

    def wanted(name: str) -> int:
        long = request.config.getoption("--faults", default="short") == "long"
        given = request.config.getoption(f"--{name}", default=None)
        return int((LONG if long else SHORT)[name] if given is None else given)

    seed = int(request.config.getoption("--fault-seed", default=1))
    faults = Faults(wanted("kills"), wanted("cuts"), wanted("errors"), seed)
    yield faults
    plain = {n: {kind: dict(c) for kind, c in kinds.items()} for n, kinds in faults.tally.items()}
    request.node.user_properties.append(("faults", {"seed": seed, "tally": plain}))  # goes between processes


class _Report:
    """Adds up what the tests counted, in this process or in workers, and writes it."""

    def __init__(self, config: pytest.Config) -> None:
        self.path: Path | None = config.getoption("--fault-report", default=None)
        self.tally: dict[int, dict[str, Counter[str]]] = {}
        self.failed: Counter[int] = Counter()
        self.seed: int | None = None

    def pytest_runtest_logreport(self, report: pytest.TestReport) -> None:
        if report.when != "teardown":
            return
        for name, value in report.user_properties:
            if name == "faults":
                assert isinstance(value, dict)
                self.seed = value["seed"]
                for group, kinds in value["tally"].items():
                    for kind, outcomes in kinds.items():
                        self.tally.setdefault(int(group), {}).setdefault(kind, Counter()).update(outcomes)

    def rows(self) -> list[dict[str, Any]]:
        return [
            {
                "fault": number,
                "name": name,
                "injected": sum(sum(c.values()) for c in self.tally.get(number, {}).values()),
                "outcomes": {kind: dict(c) for kind, c in sorted(self.tally.get(number, {}).items())},
                "seed": self.seed if number in self.tally else None,
                "covered": number in self.tally,
            }
            for number, name in enumerate(GROUPS, 1)
        ]

    def pytest_terminal_summary(self, terminalreporter: Any) -> None:
        if self.path is not None:
            self.path.write_text(json.dumps(self.rows(), indent=1) + "\n", encoding="utf-8")
        if not self.tally:
            return
        terminalreporter.section(f"faults injected, seed {self.seed}")
        for row in self.rows():
            head = f"{row['fault']:>2} {row['name']:<42}"
            if not row["covered"]:
                terminalreporter.write_line(f"{head} not yet in this suite, or not in this run")
                continue
            terminalreporter.write_line(f"{head} {row['injected']:>6}")
            for kind, outcomes in row["outcomes"].items():
                text = ", ".join(f"{n} {what}" for what, n in sorted(outcomes.items()))
                terminalreporter.write_line(f"     {kind}: {text}")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Let a run that was asked to be long take its time."""
    asked = [config.getoption(f"--{name}", default=None) for name in SHORT]
    if config.getoption("--faults", default="short") == "long" or any(asked):
        for item in items:
            if Path(__file__).parent in item.path.parents:
                item.add_marker(pytest.mark.timeout(0))


def pytest_configure(config: pytest.Config) -> None:
    if not hasattr(config, "workerinput"):
        config.pluginmanager.register(_Report(config), "fault-report")
