"""What flows between the steps of the chain: blocks of converted scans, and conclusions.

A block may hold one scan (live) or thousands (replay). No conclusion may depend on where
blocks were cut, to the last bit. What makes that hold:

* elementwise work gives the same bits however it is cut;
* running sums go on from a carry with ``np.add.accumulate`` (sequential), never ``np.sum``
  over whatever happened to arrive together;
* every other reduction is made over whole leaves of a grid that depends only on the scans
  (``core.ladder``); the open leaf stays raw in the state.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from daq.codec import state
from daq.records import ByteArray, FloatArray, IntArray


@dataclass(frozen=True, slots=True)
class Block:
    """Converted scans of one test, n rows in the order of arrival.

    Args:
        first: Ordinal of the first row among all scans of this test.
        tick: Lab time [0.1 ms], from boot time, bridged across reboots; (n,).
        t_s: Time since full load [s], from ``tick``; before full load negative; (n,). Equal or
            slightly unordered stamps occur.
        values: Every channel in its own unit (m/m, mm, degC, N, ...), columns as
            ``TestRules.channels``; NaN where ``quality`` is bad; (n, c).
        quality: Codes of ``records.Quality``; (n, c).
        strain_a, strain_b: Engineering strain of each side [m/m], best source by rank; NaN where
            there is none; (n,). A one-sided extensometer fills ``strain_a`` only.
        specimen_c: Mean specimen temperature [degC] of the good thermocouples; (n,).
        room_c: Room temperature [degC]; (n,). NaN where not measured.
        output: Furnace controller output [%]; (n,). NaN where not logged.
    """

    first: int
    tick: IntArray
    t_s: FloatArray
    values: FloatArray
    quality: ByteArray
    strain_a: FloatArray
    strain_b: FloatArray
    specimen_c: FloatArray
    room_c: FloatArray
    output: FloatArray

    def __len__(self) -> int:
        return int(self.tick.shape[0])

    def cut(self, start: int, stop: int) -> Block:
        """Return rows ``start`` to ``stop`` as a block of their own (views, no copy)."""
        r = slice(start, stop)
        return Block(
            self.first + start,
            self.tick[r],
            self.t_s[r],
            self.values[r],
            self.quality[r],
            self.strain_a[r],
            self.strain_b[r],
            self.specimen_c[r],
            self.room_c[r],
            self.output[r],
        )


@state
@dataclass(frozen=True, slots=True)
class Conclusion:
    """A finding on its way: not yet numbered, dated by the scan that brought it.

    ``scan`` is the ordinal of that scan (conclusions of one block are put in the order
    of ``scan``, then of the step that made them, so that cuts cannot reorder them).
    ``key`` tells findings of one kind apart (a stage's name, a milestone's strain); the
    chain counts repetitions of (kind, key) to make the id. ``fields`` are plain JSON values.
    """

    scan: int
    tick: int
    kind: str
    key: str
    fields: Mapping[str, Any] = field(default_factory=dict)


@state
@dataclass(frozen=True, slots=True)
class Cue:
    """A condition that the alarm machine watches became true or false.

    ``alarm`` is a name of the catalogue in ``core.alarms``; ``subject`` what it concerns (a
    channel, a milestone; may be empty). ``figures`` is the evidence, plain JSON values.
    """

    scan: int
    tick: int
    alarm: str
    subject: str
    active: bool
    message: str = ""
    can_wait_until_tick: int | None = None
    figures: Mapping[str, Any] = field(default_factory=dict)
