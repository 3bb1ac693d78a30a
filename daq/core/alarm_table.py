"""The table of alarm states, and the diagram drawn from it.

States and letters follow ISA-18.2 / IEC 62682; ``noted`` is ours, for notices, which need no
acknowledgement. The machine that uses the table is ``core.alarms``.
"""

from __future__ import annotations

from enum import Enum, StrEnum
from types import MappingProxyType
from typing import Final

from daq.codec import state


@state
class State(StrEnum):
    """Where an alarm is. Letters are those of the standards' state diagram."""

    NORMAL = "normal"  # A
    UNACKNOWLEDGED = "unacknowledged"  # B
    ACKNOWLEDGED = "acknowledged"  # C
    RETURNED_UNACKNOWLEDGED = "returned_unacknowledged"  # D
    LATCHED_UNACKNOWLEDGED = "latched_unacknowledged"  # E
    LATCHED_ACKNOWLEDGED = "latched_acknowledged"  # F
    SHELVED = "shelved"  # G
    SUPPRESSED = "suppressed"  # H
    OUT_OF_SERVICE = "out_of_service"  # I
    NOTED = "noted"  # a notice whose condition holds; needs no acknowledgement


class Event(Enum):
    """What moves an alarm."""

    RAISE = "condition true"
    NOTE = "condition true (notice)"
    CLEAR = "condition false"
    CLEAR_LATCHING = "condition false (latching)"
    ACKNOWLEDGE = "acknowledge"
    RESET = "reset"
    ESCALATE = "nobody acknowledged"
    SHELVE = "shelve"
    SUPPRESS = "suppress by design"
    REMOVE = "take out of service"
    RELEASE = "hold ends, condition false"
    RELEASE_LATCHED = "hold ends, latched"
    RELEASE_RAISED = "hold ends, condition true"
    RELEASE_NOTED = "hold ends, condition true (notice)"


HELD: Final = {
    Event.SHELVE: State.SHELVED,
    Event.SUPPRESS: State.SUPPRESSED,
    Event.REMOVE: State.OUT_OF_SERVICE,
}

TABLE: Final = MappingProxyType(
    {
        (State.NORMAL, Event.RAISE): State.UNACKNOWLEDGED,
        (State.NORMAL, Event.NOTE): State.NOTED,
        (State.UNACKNOWLEDGED, Event.ACKNOWLEDGE): State.ACKNOWLEDGED,
        (State.UNACKNOWLEDGED, Event.CLEAR): State.RETURNED_UNACKNOWLEDGED,
        (State.UNACKNOWLEDGED, Event.CLEAR_LATCHING): State.LATCHED_UNACKNOWLEDGED,
        (State.UNACKNOWLEDGED, Event.ESCALATE): State.UNACKNOWLEDGED,
        (State.ACKNOWLEDGED, Event.CLEAR): State.NORMAL,
        (State.ACKNOWLEDGED, Event.CLEAR_LATCHING): State.LATCHED_ACKNOWLEDGED,
        (State.RETURNED_UNACKNOWLEDGED, Event.ACKNOWLEDGE): State.NORMAL,
        (State.RETURNED_UNACKNOWLEDGED, Event.RAISE): State.UNACKNOWLEDGED,
        (State.LATCHED_UNACKNOWLEDGED, Event.ACKNOWLEDGE): State.LATCHED_ACKNOWLEDGED,
        (State.LATCHED_UNACKNOWLEDGED, Event.RAISE): State.UNACKNOWLEDGED,
        (State.LATCHED_ACKNOWLEDGED, Event.RESET): State.NORMAL,
        (State.LATCHED_ACKNOWLEDGED, Event.RAISE): State.UNACKNOWLEDGED,
        (State.NOTED, Event.CLEAR): State.NORMAL,
    }
    | {(s, e): held for s in State for e, held in HELD.items() if s is not held}
    | {(s, Event.RELEASE): State.NORMAL for s in HELD.values()}
    | {(s, Event.RELEASE_LATCHED): State.LATCHED_UNACKNOWLEDGED for s in HELD.values()}
    | {(s, Event.RELEASE_RAISED): State.UNACKNOWLEDGED for s in HELD.values()}
    | {(s, Event.RELEASE_NOTED): State.NOTED for s in HELD.values()}
)
"""Every move there is. A pair that is absent is no move: the alarm stays where it is."""


def diagram() -> str:
    """Return the table as a Mermaid state diagram, for DEVELOPERS.md.

    Moves into and out of the three holds are the same for all of them and drawn once.
    """
    holds = tuple(HELD.values())
    lines = ["stateDiagram-v2", "    [*] --> normal"]
    for (source, event), target in TABLE.items():
        if source not in holds and target not in holds:
            lines.append(f"    {source.value} --> {target.value}: {event.value}")
    lines.append("    state held {")
    lines += [f"        {s.value}" for s in holds]
    lines.append("    }")
    for event, held in HELD.items():
        sources = [s for s in State if s is not held]
        assert all(TABLE[s, event] is held for s in sources)
        lines.append(f"    any_other_state --> {held.value}: {event.value}")
    for event in (Event.RELEASE, Event.RELEASE_LATCHED, Event.RELEASE_RAISED, Event.RELEASE_NOTED):
        (target,) = {TABLE[s, event] for s in holds}
        lines.append(f"    held --> {target.value}: {event.value}")
    return "\n".join(lines) + "\n"
