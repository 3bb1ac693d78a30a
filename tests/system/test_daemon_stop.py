"""A port that hangs for ever: the others go on, it is begun anew, and the daemon stops in time."""

from __future__ import annotations

import signal
import subprocess
import sys
import time
from pathlib import Path

from daq.records import ConditionChanged, ScansTaken
from daq.store.journal import JournalReader

LAB = """\
site: test
journal: record
instruments:
  good:
    driver: textline
    port: /dev/null
    poll_s: 0.2
    ask: D
    identity: {declared: g}
    yields: {left: 1, mid: 2}
  bad:
    driver: textline
    port: /dev/zero
    poll_s: 0.2
    ask: D
    identity: {declared: b}
    yields: {left: 1, mid: 2}
frames:
  H1:
    specimen: {id: T-1, extensometer_length_mm: 25.0, diameter_mm: 6.0}
    stress_mpa: 200
    temperature_c: 980
    tolerance: iso204
    channels:
      left: {role: extension, side: A, source: good.left}
      mid: {role: specimen_temperature, source: good.mid}
  H2:
    specimen: {id: T-2, extensometer_length_mm: 25.0, diameter_mm: 6.0}
    stress_mpa: 200
    temperature_c: 980
    tolerance: iso204
    channels:
      left: {role: extension, side: A, source: bad.left}
      mid: {role: specimen_temperature, source: bad.mid}
"""
PROGRAM = """\
import sys, threading
from daq import acquire, daemon, settings
from drivers import registry
from drivers.base import Identity, RawReading

class Played:
    yields, listens = ("left", "mid"), False
    def __init__(self, hangs): self.hangs = hangs
    def open(self): pass
    def identify(self): return Identity("x")
    def poll(self, deadline_s):
        if self.hangs: threading.Event().wait()
        return [RawReading("left", 1.0), RawReading("mid", 980.0)]
    def close(self): pass

registry.create = lambda name, options: Played("zero" in options["port"])
acquire.Bus.longest_turn_s = property(lambda self: 0.5)
from pathlib import Path
sys.exit(daemon.run(settings.load(Path(sys.argv[1]))))
"""


def test_a_bus_that_hangs_harms_no_other_and_a_storm_of_signals_stops_the_daemon_in_time(
    tmp_path: Path,
) -> None:
    """Stop is clean within five seconds, whatever a port does and however often it is asked for."""
    lab = tmp_path / "lab.yaml"
    lab.write_text(LAB)
    log = tmp_path / "log"
    with log.open("w") as out:
        p = subprocess.Popen([sys.executable, "-c", PROGRAM, str(lab)], stdout=out, stderr=subprocess.STDOUT)
    try:
        end = time.monotonic() + 20.0
        while log.read_text().count("bus /dev/zero: begun anew") < 2:  # hung, begun anew, hung again
            assert p.poll() is None, log.read_text()
            assert time.monotonic() < end, log.read_text()
            time.sleep(0.05)
        began = time.monotonic()
        while p.poll() is None and time.monotonic() - began < 8.0:
            p.send_signal(signal.SIGTERM)
            time.sleep(0.001)
        assert p.wait(1.0) == 0, log.read_text()
        assert time.monotonic() - began < 5.0
    finally:
        if p.poll() is None:
            p.kill()
        p.wait()
    assert "Traceback" not in log.read_text()
    with JournalReader(tmp_path / "record") as reader:
        scans = [f for _, f in reader.facts(frame="H1") if isinstance(f, ScansTaken)]
        told = [f for _, f in reader.facts() if isinstance(f, ConditionChanged)]
    assert sum(len(s) for s in scans) >= 5
    assert all((s.quality == 0).all() for s in scans)
    assert ("bus /dev/zero", "link_lost", True) in {(c.subject, c.condition, c.active) for c in told}
