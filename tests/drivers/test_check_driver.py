"""The conformance suite over our own families, on scripted wires, pseudo-terminals and TCP."""

from __future__ import annotations

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
    TalkerPeer,
    TcpWire,
    scripted,
)

from drivers.checks import check_driver
from drivers.registry import create, driver_class

PEERS: list[tuple[str, type[FaultyPeer]]] = [
    ("textline", GaugePeer),
    ("textline", BusPeer),
    ("textline", MutePeer),
    ("textline", TalkerPeer),
    ("scpi", ScannerPeer),
    ("modbus", RtuPeer),
    ("modbus", ModbusTcpPeer),
]
PACE = {"timeout_s": 0.06, "longest_reply_s": 0.15, "guard_s": 0.05, "connect_timeout_s": 0.5}


def options(peer: type[FaultyPeer], port: str) -> dict[str, Any]:
    rtu = {"framing": "rtu"} if peer is RtuPeer else {}
    return {"port": port, **PACE, **rtu, **peer.options}  # type: ignore[attr-defined]


@pytest.mark.parametrize(("family", "peer_class"), PEERS)
def test_a_family_keeps_the_contract_on_a_scripted_wire(family: str, peer_class: type[FaultyPeer]) -> None:
    """The promises of base.py, under every misbehaviour that the peer can show."""
    peer = peer_class(seed=1, timeout_s=0.06, longest_s=0.15)
    port = scripted(peer)
    make = lambda: driver_class(family)(options(peer_class, "socket://scripted:1"), port=port)  # type: ignore[call-arg]  # noqa: E731
    tried = check_driver(make, peer, clock=port.clock, polls=40, slack_s=0.01)
    assert len(tried) >= 25


def test_every_family_keeps_the_contract_on_pseudo_terminals_and_tcp(tmp_path: Path) -> None:
    """The same through the kernel and pyserial: adapters pulled out, connections reset and refused."""

    def trial(kind: str, family: str, peer_class: type[FaultyPeer]) -> list[str]:
        peer = peer_class(seed=2, timeout_s=0.06, longest_s=0.15)
        folder = tmp_path / f"{kind}-{peer_class.__name__}"
        folder.mkdir()
        with PtyWire(peer, folder) if kind == "pty" else TcpWire(peer) as wire:
            return check_driver(
                lambda: create(family, options(peer_class, wire.port)), peer, deadline_s=0.6, polls=1,
                pause_s=0.03, slack_s=1.0, count_descriptors=False,
            )  # fmt: skip

    with ThreadPoolExecutor(10) as pool:
        trials = [
            pool.submit(trial, kind, *peer)
            for kind in ("pty", "tcp")
            for peer in PEERS
            if (kind, peer[1]) != ("pty", ModbusTcpPeer)
        ]
        assert min(len(t.result()) for t in trials) >= 25


def test_a_driver_leaves_no_descriptor_open(tmp_path: Path) -> None:
    """Each one lost brings the process nearer to its limit; over months of reconnecting that is certain."""
    peer = GaugePeer(seed=4, timeout_s=0.06, longest_s=0.15)
    with PtyWire(peer, tmp_path) as wire:
        tried = check_driver(
            lambda: create("textline", options(GaugePeer, wire.port)),
            peer,
            deadline_s=0.6,
            polls=1,
            slack_s=1.0,
        )
    assert "no descriptor is left open" in tried
