"""A start on a record that is there: what stood, what no longer stands, what is new."""

from __future__ import annotations

import os
import socket
import time
from contextlib import suppress
from pathlib import Path

import pytest

from daq import settings
from daq.clock import BenchClock, Origin
from daq.core.rules import rules_to_json
from daq.engine import Engine
from daq.records import TICKS_PER_S, ConditionChanged, Fact, Finding, RulesAdopted, Stamp, Ticked
from daq.startup import first_facts, recover, standing
from daq.store.journal import Journal
from daq.store.rows import Batch
from daq.supervise import Rebuilding

LAB = """\
site: test
journal: record
instruments:
  gauge:
    driver: textline
    port: /dev/null
    ask: D
    identity: {declared: g}
    yields: {left: 1, mid: 2}
frames:
  H1:
    specimen: {id: T-1, extensometer_length_mm: 25.0, diameter_mm: 6.0}
    stress_mpa: 200
    temperature_c: 980
    tolerance: iso204
    channels:
      left: {role: extension, side: A, source: gauge.left}
      mid: {role: specimen_temperature, source: gauge.mid}
"""


class Still:
    speed = 1.0

    def stamp(self) -> Stamp:
        return Stamp(17 * 10**12, 10_000, "boot")


@pytest.fixture
def lab(tmp_path: Path) -> settings.Lab:
    path = tmp_path / "lab.yaml"
    path.write_text(LAB)
    return settings.load(path)


def test_conditions_whose_watcher_forgot_them_end_with_the_start(lab: settings.Lab) -> None:
    """They would stand in the record, on the broker and on the screen for ever."""
    engine = Engine()
    at = Still().stamp()
    for subject, condition in (
        ("bus /dev/ttyUSB0", "link_lost"), ("gauge", "link_lost"), ("gone", "identity_wrong"),
        ("broker", "publisher_down"), ("H1", "quarantined"),
    ):  # fmt: skip
        engine.take(ConditionChanged(at, "", subject, condition, True, "so it was"))
    ended = {
        (f.condition, f.subject)
        for f in first_facts(lab, engine, Still(), None)  # type: ignore[arg-type]
        if isinstance(f, ConditionChanged) and not f.active
    }
    assert ended == {
        ("link_lost", "bus /dev/ttyUSB0"),
        ("identity_wrong", "gone"),
        ("publisher_down", "broker"),
    }
    assert standing(engine, "gauge")
    assert not standing(engine, "scanner")


def test_rules_are_adopted_when_they_are_new_and_not_again(lab: settings.Lab) -> None:
    """A restart is no change of rules."""
    engine = Engine()
    first = list(first_facts(lab, engine, Still(), None))  # type: ignore[arg-type]
    for fact in first:
        engine.take(fact)
    again = list(first_facts(lab, engine, Still(), None))  # type: ignore[arg-type]
    assert sum(isinstance(f, RulesAdopted) for f in first) == 1
    assert not any(isinstance(f, RulesAdopted) for f in again)


def _record(folder: Path, rules: str, facts: int) -> Journal:
    """A journal with ``facts`` facts of H1 and no snapshot, as after an upgrade."""
    journal = Journal.open(folder, site="test")
    journal.commit(Batch((RulesAdopted(Stamp(17 * 10**12, 0, "boot"), "H1", "H1", rules),)))
    for k in range(1, facts):
        tick = k * 600_000
        journal.commit(Batch((Ticked(Stamp(17 * 10**12 + tick, tick, "boot"), "H1"),)))
    return journal


def _heard(s: socket.socket) -> list[str]:
    heard = []
    with suppress(BlockingIOError):
        while True:
            heard.append(s.recv(500).decode())
    return heard


def test_a_long_rebuild_asks_for_time_while_it_moves_and_not_when_it_hangs(
    lab: settings.Lab, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A start cut off by its service manager would begin the same rebuild again, for ever."""
    now = [0.0]
    take = Engine.take

    def slow(self: Engine, fact: Fact) -> list[Finding]:
        now[0] += 45.0  # seconds
        return take(self, fact)

    monkeypatch.setattr(Engine, "take", slow)
    rules = rules_to_json(lab.frames[0].tests[0])
    with (
        socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_NONBLOCK) as manager,
        _record(tmp_path / "record", rules, 9) as journal,
    ):
        manager.bind(str(tmp_path / "n"))
        monkeypatch.setenv("NOTIFY_SOCKET", str(tmp_path / "n"))
        progress = Rebuilding(journal.last_seq, lambda: now[0])
        recover(journal, print, progress.reached)
        heard = _heard(manager)
        assert now[0] > 300.0  # longer than a start may take
        assert len(heard) == 9
        assert heard[5] == (
            "EXTEND_TIMEOUT_USEC=120000000\nSTATUS=rebuilding from the record: fact 6 of 9 (67 %)"
        )
        for _ in range(5):  # nothing new is replayed
            now[0] += 45.0
            progress.reached(9)
        assert _heard(manager) == []


def test_a_quick_rebuild_says_nothing(
    lab: settings.Lab, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A message for every fact would be a million of them."""
    rules = rules_to_json(lab.frames[0].tests[0])
    with (
        socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_NONBLOCK) as manager,
        _record(tmp_path / "record", rules, 9) as journal,
    ):
        manager.bind(str(tmp_path / "n"))
        monkeypatch.setenv("NOTIFY_SOCKET", str(tmp_path / "n"))
        recover(journal, print, Rebuilding(journal.last_seq, lambda: 0.0).reached)
        assert _heard(manager) == []


def test_a_bench_that_begins_anew_is_another_boot(tmp_path: Path) -> None:
    """With another speed its time begins at zero again; under the same boot it would run backwards."""
    path = tmp_path / "bench.json"
    one = Origin.keep(path, 3600.0)
    assert Origin.keep(path, 3600.0) == one
    two = Origin.keep(path, 60.0)
    assert BenchClock(one).stamp().boot_id != BenchClock(two).stamp().boot_id


def test_specimens_rest_while_a_bench_is_switched_off(tmp_path: Path) -> None:
    """At 3600 times real time an hour away would be five months: every specimen would have died unseen."""
    path = tmp_path / "bench.json"
    one = BenchClock(Origin.keep(path, 3600.0))
    before = one.stamp().utc_tick
    os.utime(path, (time.time() - 100.0, time.time() - 100.0))
    stood = before - 100 * 3600 * TICKS_PER_S  # where lab time stood when the bench was last marked
    two = BenchClock(Origin.keep(path, 3600.0))
    after = two.stamp()
    assert 99 < (after.utc_tick - stood) / TICKS_PER_S < 100 + 3600 * 5
    assert after.boot_id != one.stamp().boot_id  # a count that begins elsewhere is another boot
