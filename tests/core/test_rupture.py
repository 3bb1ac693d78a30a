"""Rupture is told within a few scans, dated back; slips, re-zeros, lost links and wires are not rupture."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from watch_blocks import block_of, rules_for

from daq.core import watch
from daq.core.block import Block, Conclusion, Cue
from daq.core.rules import Limits
from daq.records import FloatArray, Quality

N = 400
AT = 300
NOISE = 2e-5


def creep(seed: int = 0, n: int = N) -> dict[str, FloatArray]:
    """Late tertiary creep on two sides, a scan a minute, with three thermocouples; strain runs to 8 %."""
    rng = np.random.default_rng(seed)
    x = 0.05 + 0.03 * (np.arange(n) / n) ** 3
    columns = {side: x + NOISE * rng.normal(size=n) for side in ("a", "b")}
    columns["mid"] = 600.0 + 0.2 * rng.normal(size=n)
    return columns


def said(columns: dict[str, FloatArray], stage: str = "tertiary", **more: Any) -> list[Cue]:
    rules = rules_for(list(columns), Limits(milestones=()))
    block = block_of(rules, columns, 60.0, **more)
    return [c for c in watch.watch(watch.begin(rules), rules, block, stage=stage)[1] if isinstance(c, Cue)]


def rupture(columns: dict[str, FloatArray], stage: str = "tertiary", **more: Any) -> Cue | None:
    found = [c for c in said(columns, stage, **more) if c.alarm == "rupture"]
    assert len(found) <= 1
    return found[0] if found else None


def assert_dated(cue: Cue | None, why: str, at: int = AT, within: int = 3) -> None:
    assert cue is not None
    assert cue.figures["time_h"] == at / 60.0
    assert cue.figures["not_before_h"] == (at - 1) / 60.0
    assert at <= cue.scan < at + within
    assert why in cue.figures["why"]
    assert f"{at / 60.0:.6g} h" in cue.message


def test_break_switch_tells_rupture() -> None:
    """Temperature, timer and break switch suffice for a test without strain."""
    switch = np.zeros(N)
    switch[AT:] = 1.0
    assert_dated(rupture({"mid": creep()["mid"], "switch": switch}), "break switch", within=2)


def test_a_bouncing_contact_is_no_rupture() -> None:
    """One open scan is not two."""
    switch = np.zeros(N)
    switch[[100, 200, 201 + 1]] = 1.0
    assert rupture({"mid": creep()["mid"], "switch": switch}) is None


def test_a_switch_that_was_never_closed_says_nothing() -> None:
    """A wrongly wired contact must not end a test at its first scan."""
    assert rupture({"mid": creep()["mid"], "switch": np.ones(N)}) is None


def test_an_open_switch_while_strain_goes_on_is_the_switch() -> None:
    """A broken wire looks like a broken specimen to the switch, not to the extensometer."""
    columns = creep()
    columns["switch"] = np.zeros(N)
    columns["switch"][AT:] = 1.0
    cues = said(columns)
    assert [(c.alarm, c.subject) for c in cues] == [("sensor_suspected", "break_switch")]
    for side in ("a", "b"):
        columns[side][AT + 20 :] += 0.2
    assert [c.alarm for c in said(columns)][-1] == "rupture"
    columns = creep()
    columns["switch"] = np.zeros(N)
    columns["switch"][AT : AT + 30] = 1.0
    assert [(c.alarm, c.active, c.scan) for c in said(columns)] == [
        ("sensor_suspected", True, AT + 1),
        ("sensor_suspected", False, AT + 30),
    ]


@pytest.mark.parametrize("then", [0.1, np.nan])
def test_strain_that_jumps_and_does_not_come_back_is_rupture(then: float) -> None:
    """All sides by a tenth, then either they stay there or nothing is read any more."""
    columns = creep()
    for side in ("a", "b"):
        columns[side][AT] += 0.1
        columns[side][AT + 1 :] += then
    assert_dated(rupture(columns), "jumped")


def test_rupture_passes_no_milestone() -> None:
    """A jump by a tenth is no creep strain; what was passed before it stays."""
    columns = creep()
    for side in ("a", "b"):
        columns[side][AT:] += 0.1
    rules = rules_for(list(columns), Limits(milestones=(0.055, 0.1, 0.15), strain=0.12))
    items = watch.watch(watch.begin(rules), rules, block_of(rules, columns, 60.0), stage="tertiary")[1]
    told = [i.fields["strain"] for i in items if isinstance(i, Conclusion)]
    assert told == [0.055]
    assert {c.alarm for c in items if isinstance(c, Cue)} == {"milestone_reached", "rupture"}


def test_all_sides_out_of_range_at_once_is_rupture() -> None:
    """The extensometer opened beyond its travel from one scan to the next."""
    columns = creep()
    for side in ("a", "b"):
        columns[side][AT:] = np.nan
    assert_dated(rupture(columns, "secondary", why_bad=Quality.BAD_RANGE), "out of range")


def test_an_extensometer_that_falls_and_stands_still_is_rupture() -> None:
    """It hangs on one half now: by the rate before, strain should have gone on."""
    columns = creep()
    rng = np.random.default_rng(9)
    for side in ("a", "b"):
        columns[side][AT:] = 0.01 + NOISE * rng.normal(size=N - AT)
    cue = rupture(columns)
    assert_dated(cue, "no longer follows", within=65)
    columns = creep()
    for side in ("a", "b"):
        columns[side][AT] -= 0.05
        columns[side][AT + 1 :] = np.nan
    assert_dated(rupture(columns), "fell and was lost", within=4)


def test_a_re_zero_is_no_rupture() -> None:
    """All sides set to zero by a person: the curve goes on from there."""
    for at in (50, 150, 300):
        columns = creep(n=600)
        for side in ("a", "b"):
            columns[side][at:] -= columns[side][at]
        assert rupture(columns) is None


@pytest.mark.parametrize("size", [0.003, -0.003, 0.009, -0.02, 0.05])
def test_a_slip_of_one_side_is_no_rupture(size: float) -> None:
    """The other side knows better."""
    columns = creep()
    columns["a"][AT:] += size
    assert rupture(columns) is None


def test_a_slip_of_a_one_sided_extensometer_is_no_rupture() -> None:
    """Slips are small and the curve goes on."""
    for size in (0.003, -0.003, 0.009, -0.009):
        columns = creep()
        del columns["b"]
        columns["a"][AT:] += size
        assert rupture(columns) is None


def test_spikes_are_no_rupture() -> None:
    """One scan comes back, two as well."""
    columns = creep()
    for side in ("a", "b"):
        columns[side][100] += 0.3
        columns[side][200:202] += 0.3
        columns[side][310] = -5.0
    assert rupture(columns) is None


def test_a_spike_just_before_does_not_hide_rupture() -> None:
    """What happened while something else was looked at is looked at afterwards."""
    columns = creep()
    for side in ("a", "b"):
        columns[side][AT - 2] += 0.3
        columns[side][AT:] += 0.1
    assert_dated(rupture(columns), "jumped", within=4)


def test_a_lost_link_or_the_end_of_a_record_is_no_rupture() -> None:
    """A scan in which everything is missing says nothing about the specimen."""
    columns = creep()
    for x in columns.values():
        x[AT : AT + 40] = np.nan
    assert rupture(columns, why_bad=Quality.BAD_LINK) is None
    for x in columns.values():
        x[AT:] = np.nan
    assert rupture(columns, why_bad=Quality.BAD_LINK) is None


def test_strain_that_vanishes_is_said_but_not_called_rupture() -> None:
    """The extensometer may have been taken off; in tertiary creep somebody has to look, at once."""
    columns = creep()
    for side in ("a", "b"):
        columns[side][AT : AT + 50] = np.nan
    early = [(c.alarm, c.subject, c.active, c.scan) for c in said(columns) if c.subject == "strain"]
    assert early == [("sensor_broken", "strain", True, AT + 2), ("sensor_broken", "strain", False, AT + 50)]
    assert not [c for c in said(columns, "secondary") if c.subject == "strain"]


def test_rupture_behind_a_gap_is_told() -> None:
    """The record stopped for hours; afterwards strain is far above anything creep could have done."""
    columns = creep()
    t_s = np.arange(N) * 60.0
    t_s[AT:] += 3600.0
    for side in ("a", "b"):
        columns[side][AT:] += 0.2
    cue = rupture(columns, t_s=t_s)
    assert cue is not None
    assert cue.figures["time_h"] == t_s[AT] / 3600.0
    assert cue.figures["not_before_h"] == t_s[AT - 1] / 3600.0


def test_a_break_switch_is_believed_behind_a_gap() -> None:
    """Whether strain went on as before cannot be told over hours without readings."""
    columns = creep()
    columns["switch"] = np.zeros(N)
    columns["switch"][AT:] = 1.0
    t_s = np.arange(N) * 60.0
    t_s[AT:] += 3600.0
    cue = rupture(columns, t_s=t_s)
    assert cue is not None
    assert cue.figures["why"] == "break switch open"


def test_force_that_falls_with_strain_lost_is_rupture_and_alone_load_off() -> None:
    """Without strain channels the load cell is all there is."""
    force = np.full(N, 5000.0)
    force[AT:] = 20.0
    columns = creep() | {"force": force}
    assert [(c.alarm, c.active) for c in said(columns)] == [("load_off", True)]
    for side in ("a", "b"):
        columns[side][AT:] = np.nan
    assert_dated(rupture(columns), "force gone and strain lost")
    assert_dated(rupture({"mid": columns["mid"], "force": force}), "force gone")


def test_beam_on_its_stop_is_load_off_until_it_is_lifted() -> None:
    """A beam on its stop looks like beautiful secondary creep."""
    columns = creep()
    columns["stop"] = np.zeros(N)
    columns["stop"][200:250] = 1.0
    assert [(c.alarm, c.active, c.scan) for c in said(columns)] == [
        ("load_off", True, 202),
        ("load_off", False, 250),
    ]
    for side in ("a", "b"):
        columns[side][200:] += 0.3
    assert_dated(rupture(columns), "beam on its stop and strain jumped", at=200)


def test_fast_tertiary_creep_is_no_rupture() -> None:
    """Half a per cent a scan is a fast end, but it is still creep."""
    t = np.arange(200) * 60.0
    x = -0.02 * np.log1p(-t / 12_010.0)
    block: Block
    rules = rules_for(["a", "mid"], Limits(milestones=()))
    block = block_of(rules, {"a": x, "mid": np.full(200, 600.0)}, 60.0)
    state, items = watch.watch(watch.begin(rules), rules, block.cut(0, 200), stage="tertiary")
    assert not [i for i in items if isinstance(i, Cue) and i.alarm == "rupture"]
    assert not state.rupture.happened
