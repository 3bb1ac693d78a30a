"""The lab file read again: by hand, piece for piece, and by SIGHUP in the whole house."""

from __future__ import annotations

import signal
import subprocess
import sys
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from daq import settings
from daq.clock import RealClock
from daq.core.rules import rules_from_json
from daq.records import ConditionChanged, Fact, RulesAdopted, ScansTaken
from daq.reload import Reloader
from daq.store.journal import JournalReader

POLL_S = 1200
LAB = f"""\
site: test
journal: record
instruments:
  gauge:
    driver: textline
    port: emulated
    poll_s: {POLL_S}
    ask: "D"
    timeout_s: 0.5
    longest_reply_s: 0.5
    identity: {{ask: "*IDN?", reply: "GAUGE.*"}}
    yields: {{left: 1, right: 2, mid: 3}}
frames:
  H1:
    specimen: {{id: T-1, extensometer_length_mm: 25.0, diameter_mm: 6.0}}
    stress_mpa: 200
    temperature_c: 980
    tolerance: {{below_c: 5, above_c: 5}}
    activation_energy_kj_per_mol: 330
    stress_exponent: 5
    expected_rupture_h: 150
    false_share: 0.005
    limits: {{strain_percent: 40}}
    channels:
      left:  {{role: extension, side: A, source: gauge.left}}
      right: {{role: extension, side: B, source: gauge.right}}
      mid:   {{role: specimen_temperature, source: gauge.mid}}
bench:
  speed: 4000
  seed: 5
  rigs:
    H1: {{scenario: tertiary_and_rupture}}
  instruments:
    gauge:
      protocol: text
      transport: pty
      identity: "GAUGE 1"
      yields:
        left: {{source: H1.left, scale: 25.0}}
        right: {{source: H1.right, scale: 25.0}}
        mid: H1.mid
      asks: {{"D": "{{left:+09.5f}},{{right:+09.5f}},{{mid:+09.3f}}"}}
"""


class Desk:
    """A reloader on a file of its own, and what it said."""

    def __init__(self, folder: Path, text: str = LAB) -> None:
        self.path = folder / "lab.yaml"
        self.path.write_text(text)
        self.facts: list[Fact] = []
        self.lines: list[str] = []
        self.reloader = Reloader(settings.load(self.path), RealClock(), self.facts.append, self.lines.append)

    def says(self, *changes: tuple[str, str]) -> bool:
        """Change the file and read it again; return whether it was taken."""
        text = self.path.read_text()
        for old, new in changes:
            assert text.count(old) == 1, old
            text = text.replace(old, new)
        self.path.write_text(text)
        self.facts.clear()
        self.lines.clear()
        return self.reloader.again()

    @property
    def rules(self) -> list[RulesAdopted]:
        return [f for f in self.facts if isinstance(f, RulesAdopted)]

    @property
    def told(self) -> list[tuple[str, bool]]:
        return [(f.condition, f.active) for f in self.facts if isinstance(f, ConditionChanged)]


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    return Desk(tmp_path)


@pytest.mark.parametrize(
    ("old", "new", "key"),
    [
        ("strain_percent: 40", "strain_percent: 30", "limits.strain 0.3 (was 0.4)"),
        ("strain_percent: 40", "rate_percent_per_h: 1", "limits.rate_per_h 0.01 (was null)"),
        ("above_c: 5}", "above_c: 3}", "above_k 3.0 (was 5.0)"),
        ("kj_per_mol: 330", "kj_per_mol: 300", "activation_energy_j_per_mol 300000.0 (was 330000.0)"),
        ("stress_exponent: 5", "stress_exponent: 6", "stress_exponent 6.0 (was 5.0)"),
        ("rupture_h: 150", "rupture_h: 200", "expected_rupture_h 200.0 (was 150.0)"),
        ("false_share: 0.005", "false_share: 0.01", "false_share 0.01 (was 0.005)"),
        ("temperature_c: 980", "temperature_c: 985", "set_point_c 985.0 (was 980.0)"),
        ("source: gauge.mid", "source: gauge.mid, high: 1200", "channel mid.high 1200.0 (was null)"),
    ],
)
def test_what_a_test_is_judged_by_changes_at_once(desk: Desk, old: str, new: str, key: str) -> None:
    """A limit or a tolerance moves in the middle of a test, without an hour of readings lost to a restart."""
    assert desk.says((old, new))
    (adopted,) = desk.rules
    assert rules_from_json(adopted.rules) == settings.load(desk.path).frames[0].tests[0]
    assert adopted.stamp.boot_id
    assert desk.told == [("settings_adopted", True)]
    assert f"settings: H1: {key}" in desk.lines
    assert f"adopted: H1: {key}" in desk.facts[-1].message  # type: ignore[union-attr]
    assert desk.says()  # the same file again
    assert desk.facts == []
    assert desk.lines == ["settings: as they were"]


@pytest.mark.parametrize(
    ("old", "new", "names"),
    [
        ("site: test", "site: hall", "site (now test, in the file hall)"),
        ("journal: record", "journal: other", "journal (now "),
        ("site: test", 'site: test\nbroker: {url: "mqtt://127.0.0.1:1883"}', "broker"),
        ("speed: 4000", "speed: 2000", "bench"),
        (f"poll_s: {POLL_S}", "poll_s: 600", "poll_s of instrument gauge"),
        ("    timeout_s: 0.5", "    timeout_s: 0.4", "timeout_s of instrument gauge"),
        ("source: gauge.mid", "source: gauge.left", "sources of channels (mid) of frame H1"),
        ("      mid:   {role", "      top:   {role", "channels (mid, top) of frame H1"),
        ("  H1:\n    specimen", "  H9:\n    specimen", "frame H9 (new); frame H1 (no longer in the file)"),
    ],
)
def test_what_needs_a_restart_is_named_and_stays_as_it_was(
    desk: Desk, old: str, new: str, names: str
) -> None:
    """A change that silently waits for a restart is one that someone believes to be in force."""
    assert desk.says((old, new))
    assert desk.rules == []
    assert desk.told == [("settings_adopted", True)]
    assert desk.facts[-1].message.startswith(f"nothing was adopted; needs a restart: {names}")  # type: ignore[union-attr]


def test_what_can_change_does_beside_what_cannot(desk: Desk) -> None:
    """The site in the rules is the house's: rules of a site that has no record would be nobody's."""
    assert desk.says(
        ("site: test", "site: hall"), ("poll_s: 1200", "poll_s: 600"), ("_percent: 40", "_percent: 30")
    )
    (adopted,) = desk.rules
    rules = rules_from_json(adopted.rules)
    assert (rules.site, rules.scan_every_s, rules.limits.strain) == ("test", POLL_S, 0.3)
    assert desk.says()
    assert desk.facts == []  # and not again


def test_a_frame_whose_scans_change_keeps_all_its_rules(desk: Desk) -> None:
    """Half of its new rules with the old channels would be rules that stand in no file."""
    assert desk.says(
        ("      mid:   {role", "      top:   {role"), ("strain_percent: 40", "strain_percent: 30")
    )
    assert desk.rules == []
    assert desk.says(("      top:   {role", "      mid:   {role"))
    assert len(desk.rules) == 1


def test_a_refused_file_changes_nothing_and_every_mistake_is_told_with_its_place(desk: Desk) -> None:
    """The old rules stay; the alarm stands until the file is in order: no restart would succeed with it."""
    assert not desk.says(
        ("strain_percent: 40", "strain_percent: much"), ("stress_mpa: 200", "stress_mpa: -1")
    )
    assert desk.rules == []
    assert desk.told == [("settings_refused", True)]
    text = desk.facts[0].message  # type: ignore[union-attr]
    for line, place in ((16, "stress_mpa"), (23, "strain_percent")):
        assert any(place in said and f"{desk.path}:{line}:" in said for said in desk.lines), desk.lines
        assert f"{desk.path}:{line}:" in text
    assert not desk.says(("site: test", "site: [test"))
    desk.path.unlink()
    desk.facts.clear()
    assert not desk.reloader.again()
    assert desk.told == [("settings_refused", True)]
    desk.path.write_text(LAB)
    desk.facts.clear()
    assert desk.reloader.again()
    assert desk.told == [("settings_refused", False)]


def test_a_file_with_which_no_restart_would_succeed_is_refused(desk: Desk) -> None:
    """It would be found out at the next power cut, at night."""
    assert not desk.says(
        ("site: test", "site: test\nbroker: {url: mqtts://b.example:8883, user: u, password_file: nowhere}")
    )
    assert desk.told == [("settings_refused", True)]


# --- the whole house ------------------------------------------------------------------------


def _wait(what: Callable[[], bool], log: Path, p: subprocess.Popen[bytes], seconds: float = 30.0) -> None:
    end = time.monotonic() + seconds
    while not what():
        assert p.poll() is None, log.read_text()
        assert time.monotonic() < end, log.read_text()
        time.sleep(0.05)


def _findings(command: str, record: Path, *more: str) -> list[str]:
    out = record.parent / "out.jsonl"
    asked = [sys.executable, "-m", "daq.cli", command, str(record), "--findings", str(out), *more]
    done = subprocess.run(asked, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    return [line for line in out.read_text().splitlines() if '"kind":"summary"' not in line]


def test_a_running_house_takes_new_rules_refuses_bad_ones_and_loses_no_scan(tmp_path: Path) -> None:
    """SIGHUP to the real process on a serial line: every instant once, every alarm once, the same replay."""
    lab, log, record = tmp_path / "lab.yaml", tmp_path / "log", tmp_path / "record"
    lab.write_text(LAB)
    with log.open("w") as out:
        p = subprocess.Popen(
            [sys.executable, "-m", "daq.cli", "run", str(lab), "--plain"],
            stdout=out,
            stderr=subprocess.STDOUT,
        )

    def reload(text: str, wanted: str) -> None:
        lab.write_text(text)
        p.send_signal(signal.SIGHUP)
        _wait(lambda: wanted in log.read_text(), log, p)

    try:
        _wait(lambda: "stage primary" in log.read_text(), log, p)
        strict = LAB.replace("above_c: 5}", "above_c: 0.01}").replace("below_c: 5", "below_c: 0.01")
        reload(strict, "alarm settings_adopted settings noted")
        _wait(lambda: "alarm temperature_" in log.read_text(), log, p)  # the new tolerance is in force
        reload(strict.replace("stress_mpa: 200", "stress_mpa: lots"), "alarm settings_refused settings unack")
        assert f"settings refused: {lab}:16:17: frames.H1.stress_mpa: got 'lots'" in log.read_text()
        reload(LAB.replace("journal: record", "journal: elsewhere"), "needs a restart: journal")
        _wait(lambda: "alarm settings_refused settings returned" in log.read_text(), log, p)
        for _ in range(100):  # a storm of them, over several scans
            p.send_signal(signal.SIGHUP)
            time.sleep(0.02)
        p.send_signal(signal.SIGTERM)
        assert p.wait(5.0) == 0, log.read_text()
    finally:
        if p.poll() is None:
            p.kill()
        p.wait()
    assert "Traceback" not in log.read_text()
    assert not (tmp_path / "elsewhere").exists()
    with JournalReader(record) as reader:
        facts = [f for _, f in reader.facts()]
        findings = [f for _, f in reader.findings()]
    adopted = [rules_from_json(f.rules).above_k for f in facts if isinstance(f, RulesAdopted)]
    assert adopted == [5.0, 0.01, 5.0]
    instants = np.concatenate([f.boot_tick for f in facts if isinstance(f, ScansTaken)]) // (POLL_S * 10_000)
    assert len(instants) > 8
    assert np.diff(instants).tolist() == [1] * (len(instants) - 1)
    assert max(Counter(f.id for f in findings).values()) == 1
    assert _findings("replay", record, "--cut", "3") == _findings("export", record)
