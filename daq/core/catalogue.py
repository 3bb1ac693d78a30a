"""Every alarm and notice this program knows, in one table.

An *alarm* needs a person's timely response and is acknowledged; a *notice* needs none. A
momentary notice speaks of something that happened (a clock was set) and is over with it.

The figures are defaults. Where they come from: priorities spread roughly 80 % low, 15 %
medium, 5 % high (ISA-18.2, EEMUA 191); delays are common practice, no source: longer than two
scans of a minute where noise can touch the limit, none where waiting costs the test.
The off-delay is the deadband in time: a condition must have been gone for that long before the
alarm returns to normal, so a value that plays around its limit raises one alarm, not hundreds.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from types import MappingProxyType
from typing import Final

from daq.codec import state


@state
class Priority(StrEnum):
    """How much harm waiting does. ``NOTICE`` is not an alarm."""

    NOTICE = "notice"
    LOW = "low"
    MEDIUM = "medium"
    HIGH = "high"


RANK: Final = MappingProxyType({p: i for i, p in enumerate(Priority)})
"""0 for a notice, up to 3 for high."""


@dataclass(frozen=True, slots=True)
class AlarmKind:
    """One row of the catalogue.

    Args:
        name: As in cues, findings and topics.
        priority: At the time of raising; ``NOTICE`` makes it a notice.
        text: What happened, when a cue brings no message of its own.
        to_do: What a person should do about it.
        on_delay_s: The condition must hold this long before the alarm is raised [s].
        off_delay_s: It must be gone this long before the alarm returns to normal [s].
        latching: Stays until a person resets it, also when the condition is gone.
        momentary: Something that happened and is over: every cue speaks. A notice leaves nothing behind,
            an alarm stays to be acknowledged.
        escalate_s: Unacknowledged this long, the priority rises by one step [s]; 0 is never.
    """

    name: str
    priority: Priority
    text: str
    to_do: str
    on_delay_s: float = 0.0
    off_delay_s: float = 0.0
    latching: bool = False
    momentary: bool = False
    escalate_s: float = 0.0

    @property
    def notice(self) -> bool:
        return self.priority is Priority.NOTICE


_N, _L, _M, _H = Priority.NOTICE, Priority.LOW, Priority.MEDIUM, Priority.HIGH
_HOUR: Final = 3600.0

_TABLE: Final = (
    # --- what the specimen did -----------------------------------------------------------
    AlarmKind(
        "tertiary_detected", _M, "tertiary creep has begun",
        "Decide before the time given: unload for microscopy, log faster, or be there at rupture.",
        escalate_s=8 * _HOUR,
    ),
    AlarmKind(
        "rupture", _H, "the specimen has ruptured",
        "Follow the laboratory's procedure for a hot furnace; note hours; secure the fallen weights.",
        escalate_s=1 * _HOUR,
    ),
    AlarmKind(
        "strain_limit", _M, "the strain limit of this test is reached",
        "Unload or end the test as planned, or set a new limit.", on_delay_s=120.0, off_delay_s=600.0,
        escalate_s=4 * _HOUR,
    ),
    AlarmKind(
        "rate_limit", _M, "the strain rate is above the limit of this test",
        "Look at the curve and the temperatures; decide whether the test may go on.",
        off_delay_s=1800.0, escalate_s=4 * _HOUR,
    ),
    AlarmKind(
        "load_off", _H, "the specimen carries no full load: beam on its stop, or load lost",
        "Look at beam, levelling motor and weights; hours since then do not count.",
        on_delay_s=60.0, off_delay_s=60.0, latching=True, escalate_s=1 * _HOUR,
    ),
    AlarmKind(
        "travel_nearly_used", _L, "the extensometer is near the end of its travel",
        "Reset it, or switch to the coarser source, before it stops following.",
        on_delay_s=300.0, off_delay_s=600.0, escalate_s=24 * _HOUR,
    ),
    # --- temperature: high is worse than low, it cannot be undone ---------------------------
    AlarmKind(
        "temperature_high", _H, "the specimen is above its temperature tolerance",
        "Lower the set point or cut the furnace; compare with the other sensors first.",
        on_delay_s=90.0, off_delay_s=300.0, escalate_s=1 * _HOUR,
    ),
    AlarmKind(
        "temperature_low", _M, "the specimen is below its temperature tolerance",
        "Look at furnace, controller and mains; hours out of band are kept apart.",
        on_delay_s=90.0, off_delay_s=300.0, escalate_s=4 * _HOUR,
    ),
    AlarmKind(
        "temperature_nearing_high", _L, "the specimen nears the upper edge of its temperature tolerance",
        "Look at the controller's trend; there is still time to act.", on_delay_s=300.0, off_delay_s=900.0,
    ),
    AlarmKind(
        "temperature_nearing_low", _L, "the specimen nears the lower edge of its temperature tolerance",
        "Look at the controller's trend; there is still time to act.", on_delay_s=300.0, off_delay_s=900.0,
    ),
    AlarmKind(
        "gradient", _L, "the temperature along the specimen differs by more than allowed",
        "Adjust the furnace zones; compare the sensors with each other.",
        on_delay_s=300.0, off_delay_s=900.0,
    ),
    # --- sensors -------------------------------------------------------------------------
    AlarmKind(
        "sensor_broken", _M, "a sensor gives no usable reading",
        "Check plug, wire and instrument; use the spare where there is one.",
        on_delay_s=120.0, off_delay_s=120.0, escalate_s=8 * _HOUR,
    ),
    AlarmKind(
        "sensor_stuck", _L, "a sensor repeats the same reading",
        "Check whether it still moves: tap, or compare with its neighbours.",
        off_delay_s=600.0,
    ),
    AlarmKind(
        "sensor_suspected", _L, "one sensor disagrees with steady others",
        "Suspect the sensor before the specimen; compare, then correct or replace it.",
        on_delay_s=600.0, off_delay_s=1800.0,
    ),
    AlarmKind(
        "thermocouple_drifting", _L, "a thermocouple may drift, as output or the other couples show",
        "Compare it with another couple; do not move the set point on this alone. The specimen may have been "
        "at another temperature since the time given.",
        off_delay_s=3600.0,
    ),
    AlarmKind(
        "sides_disagree", _L, "the two sides of the extensometer drift apart",
        "Check seat and alignment; it may be bending, a slip, necking or a crack.",
        on_delay_s=600.0, off_delay_s=1800.0,
    ),
    # --- instruments and host --------------------------------------------------------------
    AlarmKind(
        "link_lost", _M, "an instrument has not answered for some time",
        "Check cable, adapter and mains of the instrument.", on_delay_s=60.0, off_delay_s=10.0,
        escalate_s=4 * _HOUR,
    ),
    AlarmKind(
        "identity_wrong", _M, "another instrument answers than the one configured",
        "Compare ports and cables with the settings; its readings are refused until then.",
        escalate_s=4 * _HOUR,
    ),
    AlarmKind(
        "disk_full", _H, "the disk is full; readings are held in memory for a while only",
        "Free space now: after the time given scans are lost.", off_delay_s=10.0, escalate_s=0.5 * _HOUR,
    ),
    AlarmKind(
        "journal_trouble", _H, "the journal is damaged or cannot be written",
        "Look at the disk and the quarantined file before anything is deleted.",
        latching=True, escalate_s=1 * _HOUR,
    ),
    AlarmKind(
        "wal_growing", _L, "the journal's log grows: a reader holds it open",
        "Close the viewer or export that has been open for long.", off_delay_s=60.0,
    ),
    AlarmKind(
        "publisher_down", _M, "alarms do not reach the broker",
        "Check broker, network, password and certificates; alarms wait in the outbox meanwhile.",
        off_delay_s=5.0, escalate_s=1 * _HOUR,
    ),
    AlarmKind(
        "publish_denied", _M, "the broker refuses a topic",
        "Correct the broker's access list; the refused alarms wait in the outbox.",
        off_delay_s=5.0, escalate_s=4 * _HOUR,
    ),
    AlarmKind(
        "message_damaged", _L, "a message for the broker was damaged in the outbox and set aside",
        "What it said is in the record: look there; have `upturn verify` look at the disk.", momentary=True,
    ),
    AlarmKind(
        "quarantined", _H, "a fault of this program has stopped the evaluation of a test",
        "Readings are still recorded. Report the fault; judge the test by eye until it is mended.",
        escalate_s=1 * _HOUR,
    ),
    AlarmKind(
        "outage", _L, "the record was interrupted and has resumed",
        "Look at the gap; check that no load or temperature change happened in it.", momentary=True,
    ),
    AlarmKind(
        "entry_refused", _L, "an operator entry was refused",
        "Read why, and enter it again.", momentary=True,
    ),
    AlarmKind(
        "settings_refused", _L, "the lab file was read again and refused; the old settings stay in force",
        "Mend the file and reload it: with it as it is, no restart would succeed.",
    ),
    AlarmKind(
        "flood", _M, "many alarms at once: suspect one cause",
        "Look for the common cause first: mains, room, scanner, neighbour.", off_delay_s=600.0,
    ),
    # --- notices -------------------------------------------------------------------------
    AlarmKind("stage_secondary", _N, "secondary creep is reached", "Nothing to do."),
    AlarmKind("stage_inverse_primary", _N, "the rate rises early: inverse primary creep", "Nothing to do."),
    AlarmKind("tertiary_withdrawn", _N, "a tertiary detection was taken back",
              "Read why; nothing to undo if nothing was done.", momentary=True),
    AlarmKind("onset_estimate", _N, "the onset of tertiary creep was estimated anew", "Nothing to do.",
              momentary=True),
    AlarmKind("milestone_reached", _N, "a strain milestone is reached", "Nothing to do."),
    AlarmKind("correction", _N, "a step in the record was neutralised", "Check the named cause if in doubt.",
              momentary=True),
    AlarmKind("clock_stepped", _N, "the host's clock was set", "Check the time service; intervals are kept.",
              momentary=True),
    AlarmKind("settings_adopted", _N, "the lab file was read again", "Read what was adopted and what waits.",
              momentary=True),
    AlarmKind("calibration_due", _N, "a calibration is due", "Plan it for the next free day."),
    AlarmKind("test_started", _N, "the test runs: full load is on", "Nothing to do."),
    AlarmKind("test_ended", _N, "the test is ended", "Nothing to do."),
    AlarmKind("plan_changed", _N, "the expected attendance has changed", "Look at the plan.", momentary=True),
)  # fmt: skip

CATALOGUE: Final = MappingProxyType({kind.name: kind for kind in _TABLE})
"""All kinds by name, in the order of the table."""
