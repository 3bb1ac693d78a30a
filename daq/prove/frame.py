"""From a frame of a lab file to rigs like it: channels, settings, noise as measured.

Noise comes from a recording if one is named, else from the newest test in the journal that the lab file
names, else from the general population. Both kinds of record go through the live engine, and what the
follower found out for its own use is taken over: the scatter of scans about a line through each of its
blocks, and the drift, weighted over all noise models that still matter. They are of the mean of the sides;
one of two has sqrt(2) times as much. Furnace and room: middle deviation of the blocks, so that an excursion
counts little. What a step of the furnace leaves behind counts as wander.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np

from daq.core import ladder
from daq.core.follow import LEAST_RUNGS, FollowState
from daq.core.rules import Loading, Role, TestRules
from daq.engine import Engine
from daq.recording import Recording
from daq.records import Fact, FloatArray, UpturnError
from daq.replay import check_starts, journal_facts, recording_facts
from daq.settings import Frame, Lab
from daq.store.journal import JournalReader
from simulator.alike import KINDS, LEAST_SCANS, Alike, Measured
from simulator.spec import Told

DEFAULT_STRESS_MPA: Final = 200.0
MICRO: Final = 1e-6
_NORMAL: Final = 1.4826
"""Standard deviation over middle deviation of a normal law."""


class ProveError(UpturnError):
    """A campaign cannot be made as asked for; the message gives place, got, wanted."""


@dataclass(frozen=True, slots=True)
class Likeness:
    """What a campaign is about: the rules of the test, the rigs like it, and where their noise comes from."""

    rules: TestRules
    alike: Alike
    noise_from: str


def test_of(lab: Lab, name: str) -> tuple[Frame, TestRules]:
    """Return the frame and the rules of the test ``name``: FRAME, or FRAME/POSITION of a string.

    Raises:
        ProveError: no such test, or one without strain.
    """
    tests = {rules.test: (frame, rules) for frame in lab.frames for rules in frame.tests}
    if name not in tests:
        raise ProveError(f"--frame: got {name!r}, wanted one of {', '.join(tests)}")
    frame, rules = tests[name]
    if not strain_sides(rules):
        raise ProveError(
            f"{lab.path}: frames.{name}.channels: got no strain or extension, wanted at least one side"
        )
    return frame, rules


def strain_sides(rules: TestRules) -> set[str]:
    """Return the sides that have a strain or extension channel; one without a side counts as A."""
    return {c.side or "A" for c in rules.channels if c.role in (Role.STRAIN, Role.EXTENSION)}


def likeness(
    lab: Lab,
    name: str,
    kinds: tuple[str, ...],
    most_scans: int,
    like: Path | None = None,
    before: tuple[Measured, str] | None = None,
) -> Likeness:
    """Return what rigs like test ``name`` are to be like.

    Args:
        kinds: Families of curves; () for all.
        most_scans: Scans of a rig beyond which its record is thinned.
        like: A recording of this frame to take the noise from; None for the journal, where there is one.
        before: Noise that was measured for this campaign before, and where; the record is not read again.

    Raises:
        ProveError: no such test, one without strain, or a recording too short to tell noise from.
    """
    frame, rules = test_of(lab, name)
    wanted = None if like is None else measured_in(like)
    if before is not None and wanted in (None, before[1]):
        measured, source = before
    else:
        measured, source = _measured(lab, frame, rules, like)
    roles = [c.role for c in rules.channels]
    bands = [k for k in (rules.below_k, rules.above_k) if k is not None]
    unknown = [k for k in kinds if k not in KINDS]
    if unknown:
        raise ProveError(f"--curve: got {unknown[0]!r}, wanted some of {', '.join(KINDS)}")
    if most_scans < LEAST_SCANS:
        raise ProveError(f"--scans: got {most_scans}, wanted at least {LEAST_SCANS}")
    alike = Alike(
        sides=len(strain_sides(rules)),
        thermocouples=roles.count(Role.SPECIMEN_TEMPERATURE),
        set_point_c=rules.set_point_c,
        band_k=min(bands, default=None),
        told=Told(
            activation_energy_j_per_mol=rules.activation_energy_j_per_mol,
            expected_rupture_h=rules.expected_rupture_h,
            stress_mpa=DEFAULT_STRESS_MPA if rules.stress_pa is None else abs(rules.stress_pa) / 1e6,
            stress_exponent=rules.stress_exponent,
            constant_load=rules.loading is Loading.CONSTANT_LOAD,
        ),
        room=Role.ROOM_TEMPERATURE in roles,
        output=Role.CONTROLLER_OUTPUT in roles,
        broken=Role.BREAK_SWITCH in roles,
        every_s=rules.scan_every_s,
        most_scans=most_scans,
        kinds=kinds,
        measured=measured,
    )
    return Likeness(rules, alike, source)


def _measured(lab: Lab, frame: Frame, rules: TestRules, like: Path | None) -> tuple[Measured, str]:
    if like is not None:
        recording = Recording(like, frame.name, frame.columns)
        check_starts(recording, frame)
        found = _follow(recording_facts(recording, frame), rules.test)
        if found is None:
            raise ProveError(
                f"{like}: got too few scans of {rules.test} with strain to tell its noise,"
                " wanted a longer recording"
            )
        return found, measured_in(like)
    if not lab.journal.joinpath("journal.sqlite").exists():
        return Measured(), "of the general population (no journal yet, no --like)"
    with JournalReader(lab.journal) as reader:
        known = frame.name in reader.frames()
    found = _follow(journal_facts(lab.journal, frame.name), rules.test) if known else None
    if found is None:
        return Measured(), "of the general population (too little of this frame in the journal, no --like)"
    return found, "as measured, from the newest test in the journal"


def measured_in(recording: Path) -> str:
    """Return the words that say that noise is from this recording."""
    return f"as measured in {recording.name}"


def _follow(facts: Iterable[Fact], test: str) -> Measured | None:
    engine = Engine()
    for fact in facts:
        engine.take(fact)
    state = engine.tests.get(test)
    if state is None or test in engine.quarantined:
        return None
    return measured_of(state.follow)


def measured_of(s: FollowState) -> Measured | None:
    """Return the noise that the follower found; None where it has looked at too little to say."""
    if s.models.shape[0] == 0 or s.rungs.shape[0] < LEAST_RUNGS:
        return None
    memory_h, drift, white, weight = s.models.T
    weight = weight / weight.sum()
    both = math.sqrt(sum(math.isfinite(x) for x in s.intake.noise) or 1)
    # not the scatter between neighbours that cleaning uses: on a steep curve that is creep
    white_sd = ladder.white_sd(s.rungs)
    white_sd = both * (white_sd if math.isfinite(white_sd) else math.sqrt(float(weight @ white)))
    drift_sd = math.sqrt(float(weight @ drift)) * both
    heavy = weight * drift
    memory = math.exp(float(heavy @ np.log(memory_h)) / float(heavy.sum())) if heavy.sum() > 0.0 else 1.0
    counts = s.rungs[:, ladder.N]
    return Measured(
        white=max(white_sd, 1e-9),
        drift=(drift_sd, memory),
        furnace_k=_sd(s.rungs[:, ladder.TEMP], counts),
        room_k=_sd(s.rungs[:, ladder.ROOM0], counts),
    )


def _sd(x: FloatArray, counts: FloatArray) -> float | None:
    """Return the standard deviation that the middle deviation of block means stands for under a normal law.

    None where the channel is not there or did not move.
    """
    if not np.isfinite(x).all():
        return None
    off = np.abs(x - _middle(x, counts))
    sd = _NORMAL * _middle(off, counts)
    return sd if sd > 0.0 else None


def _middle(x: FloatArray, counts: FloatArray) -> float:
    """Return the weighted median."""
    order = np.argsort(x, kind="stable")
    reached = np.cumsum(counts[order])
    return float(x[order][int(np.searchsorted(reached, 0.5 * reached[-1]))])


def describe(m: Measured) -> str:
    """Return measured noise in words."""
    parts = []
    if m.white is not None:
        parts.append(f"scatter {m.white / MICRO:.3g} µm/m a scan and side")
    if m.drift is not None:
        parts.append(f"drift {m.drift[0] / MICRO:.3g} µm/m over {m.drift[1]:.3g} h")
    if m.furnace_k is not None:
        parts.append(f"furnace {m.furnace_k:.2g} K")
    if m.room_k is not None:
        parts.append(f"room {m.room_k:.2g} K")
    return ", ".join(parts)
