"""SCPI: scans, sentinels, the error queue, identity."""

from __future__ import annotations

import math
from typing import Any

import pytest
import yaml
from driver_peers import ScannerPeer, scripted

import drivers.scpi as module
from drivers.base import IdentityError, InstrumentError, LinkError
from drivers.conversation import NotTheAnswer
from drivers.scpi import Scpi, read_error, read_scan
from drivers.scripted import ScriptedPort


def scpi(peer: ScannerPeer, **more: Any) -> Scpi:
    options = {"port": "/dev/none", "timeout_s": 0.08, "longest_reply_s": 0.16, **ScannerPeer.options, **more}
    driver = Scpi(options, port=scripted(peer))
    driver.open()
    return driver


@pytest.mark.parametrize(
    ("text", "wanted"),
    [
        ("+1.50000000E-03,-2.5,3", [1.5e-3, -2.5, 3.0]),
        (" 1 , 2 , 3 ", [1.0, 2.0, 3.0]),
        ("1,9.91E37,3", [1.0, "not_a_number", 3.0]),
        ("1,+9.91000000e+37,3", [1.0, "not_a_number", 3.0]),
        ("+9.9E37,-9.9E37,3", ["overload", "overload", 3.0]),
    ],
)
def test_a_scan_gives_one_value_for_each_channel(text: str, wanted: list[float | str]) -> None:
    """Sentinels of SCPI keep their place, so that the others keep theirs."""
    values = read_scan(text, ("a", "b", "c")).values()
    assert [q if math.isnan(v) else v for v, q in values] == wanted


@pytest.mark.parametrize("text", ["1,2", "1,2,3,4", "1,,3", "1,2,x", "", '+0,"No error"', "ACME,SCAN-40,1,2"])
def test_a_scan_with_another_number_of_values_is_none(text: str) -> None:
    """Where one value is missing nobody knows which."""
    with pytest.raises(NotTheAnswer):
        read_scan(text, ("a", "b", "c"))


def test_errors_are_read_in_the_forms_that_instruments_write() -> None:
    """SCPI-99 volume 2, 21.8 (from memory): number, quoted text; some leave the quotes out."""
    assert read_error('+0,"No error"') == (0, "No error")
    assert read_error('-113,"Undefined header;READX?"') == (-113, "Undefined header;READX?")
    assert read_error("0,No error") == (0, "No error")
    with pytest.raises(NotTheAnswer):
        read_error("1.5,2.5")


def test_setup_is_sent_after_the_identity_was_seen_and_is_checked() -> None:
    """A command that the instrument did not understand would leave it in another range or function."""
    peer = ScannerPeer(seed=1)
    driver = scpi(peer)
    driver.identify()
    assert peer.commands == ["CONF:VOLT:DC (@101,102)"]
    with pytest.raises(InstrumentError, match=r"after the setup: -113 Undefined header"):
        scpi(ScannerPeer(seed=1), setup=["CONVERT:VOLT"]).identify()


def test_nothing_is_sent_to_a_stranger() -> None:
    """Setup commands could do harm to an instrument that is not the one meant."""
    peer = ScannerPeer(seed=1)
    peer.behave("stranger")
    driver = scpi(peer)
    with pytest.raises(IdentityError, match=r"ACME,SCAN-9,1,1.*ACME,SCAN-40"):
        driver.identify()
    assert peer.commands == []
    with pytest.raises(IdentityError):
        driver.poll(1.0)


def test_a_scan_behind_which_an_error_stands_is_not_believed() -> None:
    """The message names number and text; the next scan is good again."""
    peer = ScannerPeer(seed=1)
    driver = scpi(peer)
    driver.identify()
    peer.errors = ['-222,"Data out of range"', '531,"Insufficient memory"']
    with pytest.raises(InstrumentError, match=r"-222 Data out of range, 531 Insufficient memory"):
        driver.poll(1.0)
    assert {r.quality for r in driver.poll(1.0)} == {"good"}


def test_errors_of_no_consequence_may_be_ignored_and_old_ones_are() -> None:
    """What was in the queue before we came is nobody's fault here."""
    peer = ScannerPeer(seed=1)
    peer.errors = ['-350,"Queue overflow"'] * 3
    driver = scpi(peer, ignore_errors=[-410])
    driver.identify()
    peer.errors = ['-410,"Query INTERRUPTED"']
    assert {r.quality for r in driver.poll(1.0)} == {"good"}


def test_an_error_queue_that_never_empties_does_not_hold_the_poll() -> None:
    """At most 32 are read."""
    peer = ScannerPeer(seed=1)
    driver = scpi(peer)
    driver.identify()
    peer.errors = ['-350,"Queue overflow"'] * 1000
    with pytest.raises(InstrumentError):
        driver.poll(1.0)
    assert len(peer.errors) >= 1000 - 33


@pytest.mark.parametrize(("every_s", "asked"), [(0.0, 10), (5.0, 1), (100.0, 0)])
def test_the_queue_is_asked_as_often_as_configured(every_s: float, asked: int) -> None:
    """One transaction a scan where that matters."""
    peer = ScannerPeer(seed=1)
    driver = scpi(peer, error_check_s=every_s)
    driver.identify()
    before = peer.asked
    for _ in range(10):
        assert {r.quality for r in driver.poll(0.5)} == {"good"}
        driver._port.clock.sleep(1.0)
    assert peer.asked - before == 10 + asked


def test_the_queue_is_asked_after_a_scan_that_failed_however_rarely_else() -> None:
    """A query that the instrument does not know is answered with silence; the queue says why."""
    peer = ScannerPeer(seed=1)
    driver = scpi(peer, scan="REED?", error_check_s=1e4)
    driver.identify()
    with pytest.raises(InstrumentError, match="Undefined header"):
        driver.poll(0.9)


def test_an_instrument_without_an_error_queue_can_be_used() -> None:
    """Old ones have none."""
    peer = ScannerPeer(seed=1)
    driver = scpi(peer, error_query="", setup=["CONF"])
    driver.identify()
    before = peer.asked
    assert {r.quality for r in driver.poll(0.9)} == {"good"}
    assert peer.asked == before + 1


def test_channels_are_put_into_the_scan() -> None:
    """In the order of the readings."""
    sent: list[bytes] = []

    def far_end(data: bytes) -> list[tuple[float, bytes]]:
        sent.append(data)
        return [(0.01, b"I\n" if b"*IDN" in data else b"0,ok\n" if b"ERR" in data else b"1,2\n")]

    options = {
        "port": "/dev/none",
        "identity": "I",
        "scan": "MEAS? (@{channels})",
        "yields": {"b": 112, "a": 7},
    }
    driver = Scpi(options, port=ScriptedPort(far_end))
    driver.open()
    driver.identify()
    assert [(r.name, r.value) for r in driver.poll(1.0)] == [("b", 1.0), ("a", 2.0)]
    assert b"MEAS? (@112,7)\n" in sent


def test_another_instrument_after_a_silence_gives_no_reading() -> None:
    """Somebody changed the instrument behind a serial server: the canary is the identity."""
    peer = ScannerPeer(seed=1)
    driver = scpi(peer)
    driver.identify()
    peer.behave("silent")
    driver.poll(0.5)
    peer.behave("stranger")
    with pytest.raises((LinkError, InstrumentError)):
        driver.poll(0.5)
    driver.close()
    driver.open()
    with pytest.raises(IdentityError):
        driver.identify()


def test_the_example_of_the_module_is_fit() -> None:
    """Documentation that a technician copies must work."""
    (block,) = [b for b in (module.__doc__ or "").split("\n\n") if b.startswith("    ")]
    options = yaml.safe_load(block)
    assert options.pop("driver") == "scpi"
    assert Scpi.check_options(options) == []


@pytest.mark.parametrize(
    ("wrong", "place", "need"),
    [
        ({"identity": None}, "identity", "got None"),
        ({"scan": "READ"}, "scan", "question mark"),
        ({"yields": {"a": 101, "b": 101}}, "yields.b.channel", "a second time"),
        ({"yields": {"a": "101"}}, "yields.a", "mapping"),
        ({"setup": "CONF"}, "setup", "list"),
        ({"ignore_errors": ["x"]}, "ignore_errors", "[-410]"),
        ({"error_check_s": -1}, "error_check_s", "from 0"),
        ({"channels": [1]}, "channels", "no option"),
    ],
)
def test_a_wrong_option_is_named_with_its_place(wrong: dict[str, Any], place: str, need: str) -> None:
    """Place, got, wanted."""
    options = {"port": "/dev/none", **ScannerPeer.options, **wrong}
    (problem,) = Scpi.check_options(options)
    assert problem[0] == place
    assert need in problem[1]
