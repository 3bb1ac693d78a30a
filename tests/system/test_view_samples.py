"""An invented laboratory for the tests of the view, also as a program of its own for a pseudo-terminal."""

from __future__ import annotations

import json
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from daq.view.model import AlarmRow, Curve, Event, Expected, Snapshot, TestRow, places

HOUR = 3600 * 10_000
NOW = 1_715_656_360 * 10_000
"""2024-05-14 03:12:40 UTC."""


def curve(life_h: float, age_h: float, rng: np.random.Generator) -> Curve:
    """Return a curve with a falling, a flat and a rising rate; invented, as everything here."""
    t_h = np.linspace(life_h / 400, age_h, 200)
    x = t_h / life_h
    rate = 4e-5 * (1 + 15 * np.exp(-x / 0.03) + np.clip(1 / (1.02 - x) - 1, 0, 50) * x)
    strain = np.cumsum(rate) * (t_h[1] - t_h[0]) + 1e-3
    return Curve(t_h, strain, rate * np.exp(rng.normal(0, 0.03, t_h.size)))


def row(name: str, stage: str, life_h: float, age_h: float, rng: np.random.Generator, **more: Any) -> TestRow:
    """Return a test at a given age, with whatever else is stated."""
    c = curve(life_h, age_h, rng)
    rate = float(c.rate_per_h[-1])
    fields = {
        "specimen": f"S-{name}", "stage": stage, "stage_since_h": 0.6 * age_h, "test_h": age_h,
        "strain": float(c.strain[-1]), "rate_per_h": rate, "rate_low_per_h": 0.95 * rate,
        "rate_high_per_h": 1.06 * rate, "minimum_rate_per_h": float(c.rate_per_h.min()),
        "temperature_c": 980.0 + rng.normal(0, 0.6), "set_point_c": 980.0, "below_k": 3.0, "above_k": 3.0,
        "curve": c,
    }  # fmt: skip
    return TestRow(name=name, **(fields | more))


def tertiary_alarm() -> AlarmRow:
    """Return an unacknowledged alarm that can wait for 4 h 18 min."""
    return AlarmRow(
        "tertiary_detected", "", "unacknowledged", "medium",
        "tertiary since 308 h (302 to 313 h), 1.83 %, rate 2.1 x the minimum; temperatures in band for 72 h",
        NOW - 3 * HOUR, NOW + int(4.3 * HOUR), "Decide before the time given.",
    )  # fmt: skip


def shot(frames: int = 4, **more: Any) -> Snapshot:
    """Return a laboratory of ``frames`` tests, most of them quiet."""
    rng = np.random.default_rng(3)
    tests = [
        row("H7", "tertiary", 340, 326.1, rng, stage_since_h=313.7, alarms=(tertiary_alarm(),),
            expected=(Expected("rupture", 351, 358, 365, 0.9),), can_wait_until_tick=NOW + int(4.3 * HOUR),
            marks=((1.0, "primary"), (71.0, "secondary"), (313.7, "tertiary")),
            events=(Event(NOW - 3 * HOUR, 313.7, "stage tertiary, since 308 h"),)),
        row("H3", "secondary", 900, 402, rng, temperature_c=983.6, marks=((151.0, "secondary"),),
            next_event="rupture: none yet, because the rate has not risen",
            alarms=(AlarmRow("temperature_high", "mid", "unacknowledged", "high", "mid 983.6 C", NOW - HOUR),
                    AlarmRow("milestone_reached", "1 %", "noted", "notice", "1 % reached", NOW - 60 * HOUR))),
        row("K12/1", "primary", 5000, 48.2, rng),
        row("K2", "secondary", 2100, 1204, rng,
            expected=(Expected("offset_0p2_percent", 1390, 1500, 1700, 0.9),)),
    ]  # fmt: skip
    for i in range(4, frames):
        life = float(rng.choice([300, 900, 3000, 20000]))
        age = life * rng.uniform(0.02, 0.98)
        tests.append(row(f"{'ABCDEF'[i % 6]}{i}", "secondary", life, age, rng))
    return Snapshot("hall-a", NOW, tests=tuple(tests[:frames]), **({"commit_age_s": 2.0} | more))


def rows(s: Snapshot) -> tuple[Any, ...]:
    """Return the places of a snapshot, in order."""
    return tuple(places(s))


@dataclass
class Invented:
    """A source of invented snapshots."""

    snapshot: Snapshot

    def read(self, detail: str | None) -> Snapshot:
        return self.snapshot


def main(frames: int, entries: Path) -> int:
    """Show the invented laboratory; entries go as JSON lines to a file."""
    from daq.view.watch import watch

    def enter(**entry: Any) -> None:
        with entries.open("a", encoding="utf-8") as f:
            f.write(json.dumps(entry) + "\n")

    return watch(Invented(shot(frames, emulated=True, speed=3600.0)), enter=enter)


if __name__ == "__main__":
    sys.exit(main(int(sys.argv[1]), Path(sys.argv[2])))
