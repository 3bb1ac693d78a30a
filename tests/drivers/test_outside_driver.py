"""The worked example of an outside driver: installed, found by its entry point, held to the contract."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest
from driver_peers import FaultyPeer, scripted

from drivers import registry
from drivers.base import SetupError
from drivers.checks import BEHAVIOURS, check_driver
from drivers.scripted import ScriptedPort

OUTSIDE = Path(__file__).parent / "outside"
OPTIONS = {
    "port": "/dev/none", "unit": 3, "timeout_s": 0.08, "longest_reply_s": 0.16,
    "yields": {"left": "A", "right": "B"},
}  # fmt: skip


@pytest.fixture(autouse=True)
def installed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """What pip leaves of the example: its module on the path, and its entry points beside it."""
    project = tomllib.loads((OUTSIDE / "pyproject.toml").read_text())["project"]
    info = tmp_path / f"{project['name'].replace('-', '_')}-{project['version']}.dist-info"
    info.mkdir()
    (info / "METADATA").write_text(
        f"Metadata-Version: 2.1\nName: {project['name']}\nVersion: {project['version']}\n"
    )
    points = project["entry-points"]["upturn.drivers"]
    lines = [f"{name} = {target}" for name, target in points.items()]
    (info / "entry_points.txt").write_text("\n".join(["[upturn.drivers]", *lines, ""]))
    monkeypatch.syspath_prepend(tmp_path)
    monkeypatch.syspath_prepend(OUTSIDE)


class PendulumPeer(FaultyPeer):
    """The gauge of the example, written again from the same page."""

    can = frozenset(BEHAVIOURS)
    end = b"\r"

    def compose(self, request: str) -> str | None:
        if request[:2] != "\x023" or request[2:] not in ("A", "B", "V"):
            return None
        if request[2:] == "V":
            return request + ("XEN2.1" if self.how == "stranger" else "PEN2.1")
        if self.how == "no_number":
            return request + "------"
        self._n += 1
        tenths_um = self._n % 100_000 * 2 + (request[2:] == "B")
        self._owed["left" if request[2:] == "A" else "right"].append(tenths_um / 10_000.0)
        return f"{request}+{tenths_um:06d}"


def test_the_example_keeps_the_contract() -> None:
    """Found by name as any other, and as hard to fool."""
    peer = PendulumPeer(seed=1)
    ports: list[ScriptedPort] = [scripted(peer)]
    make = registry.driver_class("pendulum")
    tried = check_driver(
        lambda: make(OPTIONS, port=ports[0]),
        peer,
        clock=ports[0].clock,
        polls=20,
        slack_s=0.01,  # type: ignore[call-arg]
    )
    assert "another instrument is refused" in tried


def test_its_options_are_judged_as_those_of_our_own() -> None:
    """Through the registry, as the settings do."""
    assert registry.check_options("pendulum", OPTIONS) == []
    wrong = {**OPTIONS, "unit": 12, "yields": {"left": "C"}, "bauds": 9600}
    assert [path for path, _ in registry.check_options("pendulum", wrong)] == [
        "unit",
        "yields.left.channel",
        "bauds",
    ]
    with pytest.raises(SetupError):
        registry.create("pendulum", wrong)
