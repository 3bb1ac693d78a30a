"""Thousands of faulted requests on a scripted wire: no value is ever misattributed or invented.

The number is taken from UPTURN_FAULTED_REQUESTS (per family; 100000 for the long run). Each round
has a seed, which the failure message names; UPTURN_FAULT_SEED repeats that one round. With ``-s`` the
table of what came of each fault is printed.
"""

from __future__ import annotations

import math
import os
import random
from collections import Counter, defaultdict
from typing import Any

import pytest
from driver_peers import (
    BusPeer,
    FaultyPeer,
    GaugePeer,
    ModbusTcpPeer,
    MutePeer,
    RtuPeer,
    ScannerPeer,
    TalkerPeer,
    scripted,
)

from drivers.base import GOOD, Driver, DriverError, RawReading
from drivers.registry import driver_class
from drivers.scripted import ScriptedPort

REQUESTS = int(os.environ.get("UPTURN_FAULTED_REQUESTS", "2000"))
ONE_SEED = os.environ.get("UPTURN_FAULT_SEED")
POLLS = 40
TIMEOUT_S, LONGEST_S = 0.08, 0.16
ON_THE_WIRE = ("silent", "late", "twice", "reordered", "babbling", "garbled", "cut", "drip", "no_number")
NEVER_GOOD = {"silent", "late", "reordered", "babbling", "garbled", "cut", "drip", "no_number"}

FAMILIES: dict[str, tuple[str, type[FaultyPeer]]] = {
    "text, one question": ("textline", GaugePeer),
    "text, echo and checksum": ("textline", BusPeer),
    "text, no echo": ("textline", MutePeer),
    "text, talking": ("textline", TalkerPeer),
    "scpi": ("scpi", ScannerPeer),
    "modbus rtu": ("modbus", RtuPeer),
    "modbus tcp": ("modbus", ModbusTcpPeer),
}


class Round:
    """Forty polls of one driver under faults drawn from one seed."""

    def __init__(self, family: str, peer_class: type[FaultyPeer], seed: int) -> None:
        self.rng = random.Random(seed)
        self.peer = peer_class(seed, timeout_s=TIMEOUT_S, longest_s=LONGEST_S)
        self.peer.second_copy_s = (0.0, LONGEST_S - self.peer.reply_s)
        self.port: ScriptedPort = scripted(self.peer)
        options: dict[str, Any] = {
            "port": "socket://scripted:1", "timeout_s": TIMEOUT_S, "longest_reply_s": LONGEST_S,
            "guard_s": LONGEST_S, **peer_class.options,  # type: ignore[attr-defined]
        }  # fmt: skip
        if peer_class is RtuPeer:
            options["framing"] = "rtu"
        make: Any = driver_class(family)
        self.driver: Driver = make(options, port=self.port)
        self.moods = [how for how in ON_THE_WIRE if how in self.peer.can]
        self.ready = False

    def mood(self) -> str:
        return "well" if self.rng.random() < 0.6 else self.rng.choice(self.moods)

    def poll(self) -> list[RawReading] | str:
        """One poll, with what the daemon does around it; the error's name where there was one."""
        try:
            if not self.ready:
                self.driver.open()
                self.driver.identify()
                self.ready = True
            self.peer.begin_poll()
            deadline_s = self.rng.choice([0.05, 0.3, 1.0, 3.0])
            started_s = self.port.clock.now_s()
            try:
                return self.driver.poll(deadline_s)
            finally:
                took_s = self.port.clock.now_s() - started_s
                assert took_s <= deadline_s + 0.01, f"poll took {took_s} s of {deadline_s}"
        except DriverError as error:
            self.driver.close()
            self.ready = False
            return type(error).__name__

    def run(self, table: dict[str, Counter[str]]) -> int:
        self.peer.mood = self.mood
        for _ in range(POLLS):
            self.port.plugged = self.rng.random() > 0.02
            del self.peer.faults[:]
            if self.peer.listens:
                self.peer.how = self.mood()
                self.peer.faults.append(self.peer.how)
            outcome = self.poll()
            if isinstance(outcome, str):
                for fault in set(self.peer.faults) - {"well"} or {"unplugged"}:
                    table[fault][outcome] += 1
            else:
                self.judge(outcome, table)
            self.port.clock.sleep(self.rng.choice([0.0, 0.01, 0.2, 1.0]))
        return self.peer.asked

    def judge(self, readings: list[RawReading], table: dict[str, Counter[str]]) -> None:
        for r in readings:
            if r.quality == GOOD:
                owed = list(self.peer.owed(r.name))
                assert any(math.isclose(r.value, x, rel_tol=1e-9) for x in owed), (r, owed, self.peer.faults)
            for fault in set(self.peer.faults) or {"not asked"}:
                table[fault][r.quality] += 1
        if len(self.peer.faults) == 1 and self.peer.faults[0] in NEVER_GOOD and not self.peer.listens:
            assert all(r.quality != GOOD for r in readings), (readings, self.peer.faults)


@pytest.mark.parametrize("name", FAMILIES)
def test_no_value_is_misattributed_or_invented(name: str) -> None:
    """Every good value is the one that the peer gave for this reading in this poll."""
    family, peer_class = FAMILIES[name]
    table: dict[str, Counter[str]] = defaultdict(Counter)
    asked = polls = 0
    seed = int(ONE_SEED or 0)
    while asked < REQUESTS and polls < REQUESTS // (3 if peer_class.listens and REQUESTS < 10_000 else 1):
        try:
            asked += Round(family, peer_class, seed).run(table)
        except AssertionError as error:
            raise AssertionError(f"UPTURN_FAULT_SEED={seed}: {error}") from error
        polls += POLLS
        seed += 1
        if ONE_SEED:
            break
    print(f"\n{name}: {asked} requests in {polls} polls")
    for fault, outcomes in sorted(table.items()):
        print(f"  {fault:12s}", ", ".join(f"{word} {n}" for word, n in sorted(outcomes.items())))
    assert ONE_SEED or table["well"][GOOD] > 0.05 * polls, "most polls must still give readings"
