"""Replay of recordings: the frozen formats, errors that name their place, and measured curves."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import yaml

from simulator.population import draw, lab_settings
from simulator.rig import simulate, write_csv

LEAST = """\
site: hall-a
journal: var/hall-a
frames:
  H1:
    specimen: {{id: S-1, material: alloy X, extensometer_length_mm: 25.0, diameter_mm: 6.0}}
    stress_mpa: 200
    loading: constant_load
    temperature_c: 980
    tolerance: iso204
    starts: first_scan
{more}    channels:
{channels}
"""
MEASURED_CHANNELS = """\
      strain_pct: {role: strain, unit: percent}
      T_top_C: {role: specimen_temperature}
      T_mid_C: {role: specimen_temperature}
      T_bot_C: {role: specimen_temperature}
"""


def _replay(*args: str | Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "daq.cli", "replay", *map(str, args)]
    return subprocess.run(command, capture_output=True, text=True, check=False)


def _lines(path: Path) -> list[dict[str, Any]]:
    return [json.loads(line) for line in path.read_text().splitlines()]


@pytest.fixture
def rig(tmp_path: Path) -> tuple[Path, Path]:
    """A recording of a simulated rig and the least lab file for it."""
    spec = draw(20, 3)
    lab, csv = tmp_path / "lab.yaml", tmp_path / "H1.csv"
    lab.write_text(yaml.safe_dump(lab_settings(spec)))
    write_csv(simulate(spec), csv)
    return lab, csv


def test_findings_are_one_json_line_each_with_the_fields_outside_programs_rely_on(
    rig: tuple[Path, Path], tmp_path: Path
) -> None:
    """The format is frozen: id, at as in the file, test_h, frame, kind, and a summary as the last line."""
    lab, csv = rig
    out = tmp_path / "out.jsonl"
    done = _replay("--rules", lab, "--frame", "H1", csv, "--findings", out)
    assert done.returncode == 0, done.stderr
    findings = _lines(out)
    assert findings[-1]["kind"] == "summary"
    assert all({"id", "at", "test_h", "frame", "kind"} <= set(f) for f in findings)
    assert all(isinstance(f["at"], float) and f["frame"] == "H1" for f in findings)
    first = next(f for f in findings if f["kind"] == "stage")
    assert {"stage", "from", "onset_h", "onset_low_h", "onset_high_h", "withdraws", "why"} <= set(first)
    cut = tmp_path / "cut.jsonl"
    assert _replay("--rules", lab, "--frame", "H1", csv, "--findings", cut, "--cut", "3").returncode == 0
    assert cut.read_bytes() == out.read_bytes()


@pytest.mark.parametrize(
    ("line", "place"),
    [("12.0,zero,980,980,980", "column"), ("12.0,0.1", ""), ("soon,0.1,980,980,980", "time_s")],
)
def test_a_line_that_cannot_be_read_is_named_and_ends_the_replay(
    tmp_path: Path, line: str, place: str
) -> None:
    """Guessing at a garbled recording would invent data."""
    lab, csv = tmp_path / "lab.yaml", tmp_path / "x.csv"
    lab.write_text(LEAST.format(more="", channels=MEASURED_CHANNELS))
    csv.write_text(f"time_s,strain_pct,T_top_C,T_mid_C,T_bot_C\n0.0,0.0,980,980,980\n{line}\n")
    done = _replay("--rules", lab, "--frame", "H1", csv, "--findings", tmp_path / "out")
    assert done.returncode == 3
    assert f"{csv}:3" in done.stderr
    assert place in done.stderr
    assert "Traceback" not in done.stderr


@pytest.mark.parametrize(
    ("args", "code", "text"),
    [
        (["nowhere.csv", "--rules", "LAB", "--frame", "H1"], 3, "nowhere.csv"),
        (["CSV", "--rules", "LAB", "--frame", "H9"], 2, "H9"),
        (["CSV"], 2, "--rules"),
        (["CSV", "--rules", "nowhere.yaml", "--frame", "H1"], 2, "nowhere.yaml"),
        (["."], 2, "journal"),
    ],
)
def test_wrong_arguments_say_what_was_wanted(
    rig: tuple[Path, Path], args: list[str], code: int, text: str
) -> None:
    """Exit codes tell a script whose fault it is, the message tells the person."""
    lab, csv = rig
    named = {"LAB": str(lab), "CSV": str(csv)}
    done = _replay(*[named.get(a, a) for a in args])
    assert done.returncode == code, done.stderr
    assert text in done.stderr
    assert "Traceback" not in done.stderr


def _hindsight(path: Path) -> tuple[float, float]:
    """Return hours of the least windowed slope (+-4 % of the duration, 2 % at the ends left out) and of the
    0.2 % offset from its tangent, for good: how a curve is judged when the test is over."""
    data = np.genfromtxt(path, delimiter=",", names=True)
    t, e = data["time_s"] / 3600.0, data["strain_pct"] / 100.0
    half = 0.04 * t[-1]
    centres = np.linspace(0.02 * t[-1] + half, 0.98 * t[-1] - half, 400)
    fits = [
        np.polyfit(t[(t > c - half) & (t < c + half)] - c, e[(t > c - half) & (t < c + half)], 1)
        for c in centres
    ]
    best = int(np.argmin([f[0] for f in fits]))
    beyond = e - (fits[best][1] + fits[best][0] * (t - centres[best])) > 0.002
    inside = np.flatnonzero(~beyond & (t > centres[best]))
    return float(centres[best]), float(t[inside[-1] + 1]) if inside[-1] + 1 < t.size else float("inf")


@pytest.mark.parametrize("name", ["C-78", "C-81", "C-82"])
@pytest.mark.parametrize(
    "more",
    ["", "    expected_rupture_h: 900\n    activation_energy_kj_per_mol: 330\n    stress_exponent: 5\n"],
    ids=["least", "as in the sample"],
)
def test_measured_curves_turn_tertiary_between_hindsight_minimum_and_offset(
    measured: Path, tmp_path: Path, name: str, more: str
) -> None:
    """Single-crystal superalloy, 980 degC, constant force, ISO 204 (doi 10.5281/zenodo.13937987, CC BY)."""
    csv = measured / "cmsx6" / f"{name}.csv"
    lab, out = tmp_path / "lab.yaml", tmp_path / "out.jsonl"
    lab.write_text(LEAST.format(more=more, channels=MEASURED_CHANNELS))
    done = _replay("--rules", lab, "--frame", "H1", csv, "--findings", out)
    assert done.returncode == 0, done.stderr
    tertiary = [f for f in _lines(out) if f["kind"] == "stage" and f["stage"] == "tertiary"]
    assert len(tertiary) == 1
    minimum_h, offset_h = _hindsight(csv)
    assert minimum_h < tertiary[0]["test_h"] < offset_h
