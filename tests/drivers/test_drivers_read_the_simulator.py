"""The drivers against the emulated instruments, which have protocol code of their own."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest

from drivers.base import Driver, DriverError, IdentityError, RawReading
from drivers.registry import create
from simulator.instruments.faults import Fault
from simulator.serve import Server


def constant(value: float) -> dict[str, Any]:
    """A source of an emulated instrument that always says ``value``."""
    return {"source": "H1.left", "scale": 0.0, "offset": value}


INSTRUMENTS: dict[str, dict[str, Any]] = {
    "gauge": {
        "protocol": "text", "transport": "pty", "identity": "GAUGE 7", "identity_ask": "ID",
        "yields": {"left": constant(1.25), "right": constant(-2.5)},
        "asks": {"D": "{left:+09.4f},{right:+09.4f}"}, "checksum": {"kind": "xor8", "mark": "*"},
    },
    "talker": {
        "protocol": "text", "transport": "tcp", "decimal_comma": True,
        "yields": {"left": constant(3.5), "right": constant(-4.0)},
        "talks": {"every_s": 0.05, "line": "L {left:+8.3f} R {right:+8.3f}"},
        "checksum": {"kind": "sum8", "mark": "#"},
    },
    "scanner": {
        "protocol": "scpi", "transport": "tcp",
        "yields": {"101": constant(5.5), "112": constant(980.25)},
    },
    "scanner-on-a-wire": {
        "protocol": "scpi", "transport": "pty",
        "yields": {"101": constant(5.5), "112": constant(980.25)},
    },
}  # fmt: skip
SCPI: dict[str, Any] = {
    "driver": "scpi", "identity": "EXAMPLE,SCAN-40,.*", "timeout_s": 0.15, "longest_reply_s": 0.25,
    "setup": ["CONF:VOLT:DC (@101,112)", "ROUT:SCAN (@101,112)"], "scan": "READ?",
    "yields": {"a": 101, "b": 112},
}  # fmt: skip
OPTIONS: dict[str, dict[str, Any]] = {
    "gauge": {
        "driver": "textline", "identity": {"ask": "ID", "reply": "GAUGE 7"}, "ask": "D",
        "timeout_s": 0.15, "longest_reply_s": 0.25, "checksum": {"kind": "xor8", "mark": "*"},
        "yields": {"a": 1, "b": 2},
    },
    "talker": {
        "driver": "textline", "listen": True, "identity": {"declared": "talker 3"}, "decimal_comma": True,
        "checksum": {"kind": "sum8", "mark": "#"}, "silence_s": 0.3,
        "reply": "L(?P<left>.+)R(?P<right>.+)", "yields": {"a": "left", "b": "right"},
    },
    "scanner": SCPI,
    "scanner-on-a-wire": {**SCPI, "setup": [], "scan": "MEAS:VOLT:DC? (@{channels})"},
}  # fmt: skip
TRUTH = {
    "gauge": (1.25, -2.5),
    "talker": (3.5, -4.0),
    "scanner": (5.5, 980.25),
    "scanner-on-a-wire": (5.5, 980.25),
}


@pytest.fixture(scope="module")
def server() -> Iterator[Server]:
    spec = {"seed": 3, "rigs": {"H1": {"scenario": "tertiary_and_rupture"}}, "instruments": INSTRUMENTS}
    with Server(spec) as serving:
        yield serving


def opened(server: Server, name: str) -> Driver:
    options = dict(OPTIONS[name])
    driver = create(options.pop("driver"), {**options, "port": server.ports[name]})
    driver.open()
    try:
        driver.identify()
    except DriverError:
        driver.close()
        raise
    return driver


def outcome(driver: Driver) -> tuple[float | str, ...]:
    try:
        readings: list[RawReading] = driver.poll(0.4)
    except DriverError as error:
        return (type(error).__name__,)
    return tuple(r.value if r.quality == "good" else r.quality for r in readings)


@pytest.mark.parametrize("name", INSTRUMENTS)
def test_every_reading_is_what_the_instrument_was_given_to_say(server: Server, name: str) -> None:
    """Two implementations of each protocol agree, over a pseudo-terminal and over TCP."""
    driver = opened(server, name)
    try:
        for _ in range(5):
            assert outcome(driver) == TRUTH[name]
    finally:
        driver.close()


NOTHING = {"missing", "garbled", "LinkError", "InstrumentError"}
FAULTS: list[tuple[Fault, set[str]]] = [
    (Fault("silent"), NOTHING),
    (Fault("late", delay_s=0.2), NOTHING),
    (Fault("truncated"), NOTHING),
    (Fault("duplicate"), NOTHING),
    (Fault("babble"), NOTHING),
    (Fault("hang_up"), NOTHING),
    (Fault("overload"), {"overload"}),
    (Fault("missing"), {"open_circuit", "not_a_number"}),
]


def suffer(server: Server, name: str) -> None:
    """Put one fault after another on an instrument; after each, good readings must come back."""
    faults = server.instruments[name].faults.faults
    driver = opened(server, name)
    try:
        for fault, allowed in FAULTS:
            faults.append(fault)
            time.sleep(0.06)  # the babbling begins
            if name == "talker":
                outcome(driver)  # what it said before the fault is heard once more
            found = outcome(driver)
            # a talker is never late, and of a repeated line the first is as good as the second
            harmless = fault.kind == "duplicate" or (fault.kind == "late" and name == "talker")
            assert (harmless and found == TRUTH[name]) or set(found) <= allowed, (name, fault, found)
            faults.clear()
            driver = healed(server, name, driver)
    finally:
        faults.clear()
        driver.close()


def healed(server: Server, name: str, driver: Driver) -> Driver:
    end_s = time.monotonic() + 10.0
    while outcome(driver) != TRUTH[name]:
        assert time.monotonic() < end_s, f"{name}: readings do not come back"
        driver.close()
        with contextlib.suppress(DriverError):
            driver = opened(server, name)
    return driver


def test_a_fault_is_a_quality_or_an_error_and_passes(server: Server) -> None:
    """Never another number than the true one, and good readings come back."""
    with ThreadPoolExecutor(len(INSTRUMENTS)) as pool:
        for trial in [pool.submit(suffer, server, name) for name in INSTRUMENTS]:
            trial.result()


@pytest.mark.parametrize("name", ["gauge", "scanner"])
def test_another_instrument_on_the_port_is_refused(server: Server, name: str) -> None:
    """Two adapters were swapped."""
    faults = server.instruments[name].faults.faults
    faults.append(Fault("identity"))
    try:
        with pytest.raises(IdentityError, match="ANOTHER,INSTRUMENT"):
            opened(server, name).close()
    finally:
        faults.clear()


def test_a_setup_that_the_scanner_does_not_understand_is_told(server: Server) -> None:
    """Through its own error queue."""
    options = {**SCPI, "port": server.ports["scanner"], "setup": ["CONFIG:VOLTAGE (@101)"]}
    options.pop("driver")
    driver = create("scpi", options)
    driver.open()
    try:
        with pytest.raises(DriverError, match="-113"):
            driver.identify()
    finally:
        driver.close()
