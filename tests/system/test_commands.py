"""Commands with wrong input: one line on stderr, an exit code, and nothing written over."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from daq import cli, entries
from daq.core.rules import ChannelRules, Role, Specimen, TestRules, rules_to_json
from daq.entries import SPOOL
from daq.records import ClockStepped, EngineStarted, Fact, RulesAdopted, ScansTaken, Stamp
from daq.store.journal import Journal
from daq.store.rows import Batch

UTC = 17 * 10**12
LAB = """\
site: hall-a
journal: rec
frames:
  H1:
    specimen: {id: S-1, extensometer_length_mm: 25.0, diameter_mm: 6.0}
    stress_mpa: 200
    temperature_c: 980
    tolerance: iso204
    starts: %s
    channels:
      left: {role: strain, side: A}
      mid: {role: specimen_temperature}
"""


def _stamp(t_s: float, ahead_s: float = 0.0, boot: str = "boot") -> Stamp:
    return Stamp(UTC + round((t_s + ahead_s) * 1e4), round(t_s * 1e4), boot)


def _scan(t_s: float, ahead_s: float = 0.0) -> ScansTaken:
    at = _stamp(t_s, ahead_s)
    return ScansTaken(
        "H1", ("left", "mid"), at.boot_id, np.array([at.utc_tick]), np.array([at.boot_tick]),
        np.array([[1e-3 * t_s, 980.0]]), np.zeros((1, 2), np.uint8),
    )  # fmt: skip


@pytest.fixture
def record(tmp_path: Path) -> Path:
    """A journal of one frame with a string of two, in which the clock was set one hour back."""
    channels = (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("mid", Role.SPECIMEN_TEMPERATURE))
    facts: list[Fact] = [EngineStarted(_stamp(0), "1")]
    for test in ("H1/upper", "H1/lower"):
        rules = TestRules("hall-a", "H1", test, Specimen("S-1", "x", 25.0, 6.0), channels)
        facts.append(RulesAdopted(_stamp(0), "H1", test, rules_to_json(rules)))
    facts += [
        _scan(10),
        ClockStepped(_stamp(15, -3600.0), -36_000_000),
        _scan(20, -3600.0),
        _scan(30, -3600.0),
    ]
    with Journal.open(tmp_path / "rec", site="hall-a") as journal:
        journal.commit(Batch(tuple(facts), status={"": {}, "H1/upper": {}, "H1/lower": {}}))
    (tmp_path / "rec" / SPOOL).mkdir()
    return tmp_path / "rec"


@pytest.fixture
def csv(tmp_path: Path) -> Path:
    path = tmp_path / "H1.csv"
    path.write_text("time_s,left,mid\n" + "".join(f"{i * 60},{i * 1e-5},980.1\n" for i in range(50)))
    (tmp_path / "lab.yaml").write_text(LAB % "first_scan")
    return path


def _run(capsys: pytest.CaptureFixture[str], *args: str | Path) -> tuple[int, str, str]:
    try:
        code = cli.main([str(a) for a in args])
    except SystemExit as end:
        code = int(end.code or 0)
    said = capsys.readouterr()
    return code, said.out, said.err


@pytest.mark.parametrize(
    ("args", "code", "said"),
    [
        (("replay", "{dir}/nope.csv"), 3, "nope.csv: got no such file or folder"),
        (("replay", "{dir}/H1.csv"), 2, "wanted --rules LAB.yaml and --frame NAME"),
        (("replay", "{dir}/rec", "--frame", "H9"), 2, "--frame: got 'H9', wanted one of H1"),
        (("replay", "{dir}/rec", "--rules", "{dir}/lab.yaml"), 2, "--rules: got it with a journal"),
        (("replay", "{dir}/rec/journal.sqlite"), 2, "wanted its folder: {dir}/rec"),
        (("replay", "{dir}/spool"), 2, "got a folder without a journal"),
        (("export", "{dir}/rec", "--frame", "H9", "--csv", "{dir}/out"), 2, "got 'H9', wanted one of H1"),
        (("export", "{dir}/nope", "--findings", "-"), 2, "nope: got no such folder"),
        (("tell", "--lab", "{dir}/rec", "H9", "note", "--initials", "mk"), 2, "got 'H9', wanted one of H1/"),
        (("tell", "--lab", "{dir}/rec", "H1/mid", "note", "--initials", "mk"), 2, "got 'H1/mid', wanted one"),
        (("tell", "--lab", "{dir}/rec", "host/a", "note", "--initials", "mk"), 2, "position: got 'a'"),
        (("tell", "--lab", "{dir}/rec", "H1", "shelve", "rupture", "--hours", "-3", "--initials", "mk"),
         2, "hours: got -3.0"),
        (("tell", "--lab", "{dir}/rec", "H1", "acknowledge", "nonsense", "--initials", "mk"),
         2, "alarm: got 'nonsense'"),
        (("tell", "--lab", "{dir}/rec", "H1", "acknowledge", "--subject", "left", "--initials", "mk"),
         2, "subject: got 'left' without an alarm"),
        (("tell", "--lab", "{dir}/rec", "H1", "loaded", "--minutes-ago", "nan", "--initials", "mk"),
         2, "minutes_ago: got nan"),
        (("run", "{dir}/lab.yaml", "--for", "nan"), 2, "got 'nan', wanted a number of seconds above 0"),
        (("run", "{dir}/lab.yaml", "--for", "-3"), 2, "wanted a number of seconds above 0"),
        (("listen", "{dir}/lab.yaml", "--count", "0"), 2, "wanted a whole number above 0"),
        (("run", "{dir}"), 2, "wanted a lab file"),
    ],
)  # fmt: skip
def test_wrong_input_is_one_message_with_place_got_and_wanted(
    record: Path, csv: Path, capsys: pytest.CaptureFixture[str], args: tuple[str, ...], code: int, said: str
) -> None:
    """A person mends it from the message alone; a traceback is for us."""
    here = str(record.parent)
    (record.parent / "spool").mkdir()
    got, _, err = _run(capsys, *(a.replace("{dir}", here) for a in args))
    assert (got, said.replace("{dir}", here) in err) == (code, True), err
    assert not (record.parent / "out").exists()
    assert list((record / SPOOL).iterdir()) == []


@pytest.mark.parametrize("origin_s", [4.4e11, -9e10])
def test_a_recording_may_count_from_any_origin(
    csv: Path, capsys: pytest.CaptureFixture[str], origin_s: float
) -> None:
    """Its seconds are no date: some have no year that a calendar knows."""
    csv.write_text(
        "time_s,left,mid\n" + "".join(f"{origin_s + i * 60},{i * 1e-5},980.1\n" for i in range(50))
    )
    code, out, err = _run(capsys, "replay", "--rules", csv.with_name("lab.yaml"), "--frame", "H1", csv)
    assert code == 0, err
    assert "stage primary" in out
    assert f"{origin_s}" in out


def test_findings_never_go_over_the_recording_they_are_made_of(
    csv: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """One wrong word on the command line once emptied the file that was measured."""
    before = csv.read_text()
    code, _, err = _run(
        capsys, "replay", "--rules", csv.with_name("lab.yaml"), "--frame", "H1", csv, "--findings", csv
    )
    assert (code, csv.read_text()) == (3, before)
    assert "got a place in the source" in err


def test_an_export_never_goes_into_the_journal_it_is_made_of(
    record: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The same, with months of a record."""
    host = record / "journal.sqlite"
    before = host.read_bytes()
    code, _, _ = _run(capsys, "export", record, "--frame", "H1", "--csv", host)
    assert (code, host.read_bytes()) == (3, before)


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
def test_a_full_disk_is_a_message(csv: Path, record: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The disk of whoever analyses is full as often as the laboratory's."""
    lab = csv.with_name("lab.yaml")
    for args in (
        ("replay", "--rules", lab, "--frame", "H1", csv, "--findings", "/dev/full"),
        ("export", record, "--frame", "H1", "--csv", "/dev/full"),
    ):
        code, _, err = _run(capsys, *args)
        assert code == 3
        assert "/dev/full: cannot write: No space left on device" in err


def test_a_test_that_never_began_is_said(csv: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """An empty list of findings is a riddle."""
    lab = csv.with_name("lab.yaml")
    lab.write_text(LAB % "entry")
    code, _, err = _run(capsys, "replay", "--rules", lab, "--frame", "H1", csv)
    assert code == 0
    assert "H1: test time never began (starts: entry)" in err


def test_a_date_cannot_begin_a_recording_that_counts_seconds(
    csv: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Test time would be half a century off, without a word."""
    lab = csv.with_name("lab.yaml")
    lab.write_text(LAB % '"2026-03-01T12:00:00+01:00"')
    code, _, err = _run(capsys, "replay", "--rules", lab, "--frame", "H1", csv)
    assert code == 3
    assert "column time_s" in err


def test_an_exported_record_runs_in_lab_time_and_replays_to_the_same(
    record: Path, csv: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A clock that was set back an hour would turn the sign of a rate in whatever reads the file."""
    out = record.parent / "raw.csv"
    assert _run(capsys, "export", record, "--frame", "H1", "--csv", out)[0] == 0
    lines = out.read_text().splitlines()
    times = [line.split(",")[0] for line in lines if line[0].isdigit()]
    assert times == sorted(times)
    assert [float(t[-8:-1]) - float(times[0][-8:-1]) for t in times] == [0.0, 10.0, 20.0]
    assert any("UTC was set by -3600.0000 s" in line for line in lines)
    lab = csv.with_name("lab.yaml")
    findings = record.parent / "f.jsonl"
    assert _run(capsys, "replay", "--rules", lab, "--frame", "H1", out, "--findings", findings)[0] == 0
    last = json.loads(findings.read_text().splitlines()[-1])
    assert last["test_h"] == pytest.approx(20.0 / 3600.0)


def test_an_entry_that_the_daemon_refused_is_not_reported_as_entered(
    record: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """The file is gone in both cases."""
    real = entries.write_entry

    def write_and_refuse(*args: object) -> Path:
        path = real(*args)  # type: ignore[arg-type]
        entries.set_aside(record, path.name, "no")
        return path

    monkeypatch.setattr(entries, "write_entry", write_and_refuse)
    code, out, err = _run(capsys, "tell", "--lab", record, "H1", "note", "--initials", "mk")
    assert (code, out) == (2, "")
    assert "refused by the daemon" in err


def test_a_full_stdout_is_a_message_too_also_at_the_exit(
    csv: Path,
) -> None:
    """What is left in the buffer must not be tried again at the exit."""
    if not Path("/dev/full").exists():
        pytest.skip("needs a device that is always full")
    lab = csv.with_name("lab.yaml")
    command = [sys.executable, "-m", "daq.cli", "replay", "--rules", lab, "--frame", "H1", csv]
    with open("/dev/full", "w") as full:
        done = subprocess.run(command, stdout=full, stderr=subprocess.PIPE, text=True, check=False)
    assert done.returncode == 74
    assert "No space left on device" in done.stderr
    assert "Traceback" not in done.stderr
    assert "Exception ignored" not in done.stderr
