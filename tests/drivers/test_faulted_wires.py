"""The same faults on real pseudo-terminals and sockets, and adapters pulled out again and again.

UPTURN_FAULTED_WIRES is the number of requests per family and wire (1000 for the long run), and of unplugged
adapters. A busy machine may be late itself, so the times are longer than on the scripted wire.
"""

from __future__ import annotations

import math
import os
import random
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import pytest
from driver_peers import (
    BusPeer,
    FaultyPeer,
    GaugePeer,
    ModbusTcpPeer,
    MutePeer,
    PtyWire,
    RtuPeer,
    ScannerPeer,
    TcpWire,
)

from drivers.base import GOOD, Driver, DriverError, LinkError
from drivers.registry import create

REQUESTS = int(os.environ.get("UPTURN_FAULTED_WIRES", "25"))
FAMILIES: list[tuple[str, str, type[FaultyPeer]]] = [
    ("pty", "textline", GaugePeer), ("pty", "textline", BusPeer), ("pty", "textline", MutePeer),
    ("pty", "scpi", ScannerPeer), ("pty", "modbus", RtuPeer), ("tcp", "textline", GaugePeer),
    ("tcp", "textline", BusPeer), ("tcp", "scpi", ScannerPeer), ("tcp", "modbus", ModbusTcpPeer),
]  # fmt: skip
TIMEOUT_S, LONGEST_S = 0.06, 0.15


def options(peer: type[FaultyPeer], port: str) -> dict[str, Any]:
    pace = {
        "timeout_s": TIMEOUT_S,
        "longest_reply_s": LONGEST_S,
        "guard_s": LONGEST_S,
        "connect_timeout_s": 0.5,
    }
    return {"port": port, **pace, **peer.options}  # type: ignore[attr-defined]


def suffer(kind: str, family: str, peer_class: type[FaultyPeer], folder: Path) -> None:
    """Ask until enough requests were made; every good value must be owed in its poll."""
    seed = sum(map(ord, kind + family + peer_class.__name__))
    rng = random.Random(seed)
    peer = peer_class(seed, timeout_s=TIMEOUT_S, longest_s=LONGEST_S)
    peer.second_copy_s = (0.0, LONGEST_S / 2)
    moods = sorted(peer.can - {"well", "stranger", "gone"})
    peer.mood = lambda: "well" if rng.random() < 0.7 else rng.choice(moods)
    folder = folder / f"{kind}-{peer_class.__name__}"
    folder.mkdir()
    good = 0
    with PtyWire(peer, folder) if kind == "pty" else TcpWire(peer) as wire:
        driver = create(family, options(peer_class, wire.port))
        ready = False
        try:
            while peer.asked < REQUESTS or good == 0:
                try:
                    if not ready:
                        driver.open()
                        driver.identify()
                        ready = True
                    peer.begin_poll()
                    readings = driver.poll(0.7)
                except DriverError:
                    driver.close()
                    ready = False
                    continue
                for r in readings:
                    good += r.quality == GOOD
                    owed = list(peer.owed(r.name))
                    near = any(math.isclose(r.value, x, rel_tol=1e-6) for x in owed)
                    assert r.quality != GOOD or near, (kind, family, seed, r, owed)
        finally:
            driver.close()


def test_no_value_is_misattributed_on_real_wires(tmp_path: Path) -> None:
    """The kernel's buffers, terminal layer and sockets in between change nothing."""
    with ThreadPoolExecutor(len(FAMILIES)) as pool:
        for trial in [pool.submit(suffer, *family, tmp_path) for family in FAMILIES]:
            trial.result()


def ready_again(driver: Driver) -> bool:
    try:
        driver.open()
        driver.identify()
    except DriverError:
        driver.close()
        return False
    return all(r.quality == GOOD for r in driver.poll(1.0))


@pytest.mark.skipif(not Path("/proc/self/fd").exists(), reason="counts descriptors in /proc")
def test_an_adapter_pulled_out_is_lost_at_once_and_found_again_under_its_stable_name(tmp_path: Path) -> None:
    """In the middle of an answer too; it comes back under another number, and no descriptor is lost."""
    peer = GaugePeer(seed=1, timeout_s=0.5, longest_s=0.5)
    with PtyWire(peer, tmp_path) as wire:
        fast = {"timeout_s": 0.5, "longest_reply_s": 0.5, "port": wire.port}
        driver = create("textline", {**GaugePeer.options, **fast})  # type: ignore[dict-item]
        driver._talk.pace = type(driver._talk.pace)(0.5, 0.01, 0.0)  # type: ignore[attr-defined]
        assert ready_again(driver)
        before = len(os.listdir("/proc/self/fd"))
        for turn in range(REQUESTS):
            if turn % 2:
                peer.say(0.0, b"+00001.0")  # half an answer is on its way
            peer.behave("gone")
            with pytest.raises(LinkError):
                driver.poll(1.0)
            driver.close()
            assert not ready_again(driver)
            peer.behave("well")
            started_s = time.monotonic()
            while not ready_again(driver):
                driver.close()
                assert time.monotonic() - started_s < 3.0
        assert len(os.listdir("/proc/self/fd")) == before
        driver.close()
