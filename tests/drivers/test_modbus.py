"""Modbus, judged by the examples of its specification and by pymodbus as an independent peer."""

from __future__ import annotations

import asyncio
import logging
import math
import os
import random
import threading
import tty
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
import yaml
from driver_peers import ModbusTcpPeer, RtuPeer, bitwise_crc, scripted

import drivers.modbus as module
from drivers.base import IdentityError, InstrumentError, LinkError
from drivers.conversation import NotTheAnswer
from drivers.lines import Garbled, crc16_modbus
from drivers.modbus import Block, Frame, Modbus, Register, RtuCodec, TcpCodec, blocks, payload
from drivers.registry import create
from drivers.scripted import ScriptedPort

FAST = {"timeout_s": 0.08, "longest_reply_s": 0.16}


def register(address: int, kind: str = "int16", **more: Any) -> Register:
    given = {
        "name": f"r{address}", "unit": 1, "table": "holding", "little_words": False, "little_bytes": False,
        "scale": 1.0, "no_reading": {}, **more,
    }  # fmt: skip
    return Register(address=address, kind=kind, **given)


# ------------------------------------------------------------------------------- specification


def test_requests_are_those_of_the_specification() -> None:
    """Application Protocol V1.1b3, 6.3: read registers 108-110; 6.4: input register 9 (from memory)."""
    assert Block(1, "holding", 107, 3, ()).pdu == bytes.fromhex("03 006B 0003")
    assert Block(1, "input", 8, 1, ()).pdu == bytes.fromhex("04 0008 0001")
    # unit 0x11, checksum computed by an independent program
    assert RtuCodec.request(0x11, bytes.fromhex("03 006B 0003")) == bytes.fromhex("11 03 006B 0003 76 87")
    # Messaging on TCP/IP Implementation Guide V1.0b: transaction, protocol 0, length 6, unit (from memory)
    assert TcpCodec.request(0x1501, 0xFF, bytes.fromhex("04 0000 0001")) == bytes.fromhex(
        "1501 0000 0006 FF 04 0000 0001"
    )


def test_answers_are_read_as_in_the_specification() -> None:
    """V1.1b3, 6.3: registers 108-110 hold 555, 0, 100; 6.1: coils 20-38 (from memory)."""
    data = payload(Frame(0, 1, bytes.fromhex("03 06 022B 0000 0064")), 1, 3, 6)
    block = blocks([register(107), register(108), register(109)])[0]
    assert [value for value, _ in block.read(data).values()] == [555.0, 0.0, 100.0]
    coils = [register(address, table="coil") for address in range(19, 38)]
    (block,) = blocks(coils)
    assert (block.pdu, block.answer_size) == (bytes.fromhex("01 0013 0013"), 3)
    # CD 6B 05: outputs 27-20 are 1100 1101, 35-28 are 0110 1011, 38-36 are 101
    states = [int(value) for value, _ in block.read(bytes.fromhex("CD 6B 05")).values()]
    assert states == [1, 0, 1, 1, 0, 0, 1, 1, 1, 1, 0, 1, 0, 1, 1, 0, 1, 0, 1]


@pytest.mark.parametrize(
    ("registers", "kind", "options", "value"),
    [
        ("FFFE", "int16", {}, -2.0), ("FFFE", "uint16", {}, 65534.0), ("0105", "int16", {"scale": 0.1}, 26.1),
        ("FFFF FFFE", "int32", {}, -2.0), ("0001 0000", "uint32", {}, 65536.0),
        ("0000 0001", "uint32", {"little_words": True}, 65536.0),
        # IEEE 754: 3F800000 is 1, C0490FDB is -pi rounded, 400921FB54442D18 is pi rounded
        ("3F80 0000", "float32", {}, 1.0), ("0000 3F80", "float32", {"little_words": True}, 1.0),
        ("803F 0000", "float32", {"little_bytes": True}, 1.0),
        ("0000 803F", "float32", {"little_words": True, "little_bytes": True}, 1.0),
        ("C049 0FDB", "float32", {}, -3.1415927410125732), ("4009 21FB 5444 2D18", "float64", {}, math.pi),
        ("7FC0 0000", "float32", {}, "not_a_number"), ("FF80 0000", "float32", {}, "overload"),
        ("7FFF", "int16", {"no_reading": {32767: "open_circuit"}}, "open_circuit"),
        ("8000", "int16", {"no_reading": {-32768: "overload"}}, "overload"),
        ("7F7F FFFF", "float32", {"scale": 1e300}, "overload"),
    ],
)  # fmt: skip
def test_registers_become_numbers(
    registers: str, kind: str, options: dict[str, Any], value: float | str
) -> None:
    """Type, order of words and bytes, scale, and what stands for no reading."""
    number, quality = register(0, kind, **options).read(bytes.fromhex(registers))
    if isinstance(value, str):
        assert quality == value
        assert math.isnan(number)
    else:
        assert (number, quality) == (pytest.approx(value, rel=1e-15), "good")


@pytest.mark.parametrize(
    ("pdu", "unit", "why"),
    [
        ("03 02 0001", 2, "of unit 2, need unit 1"),
        ("04 02 0001", 1, "need function 3"),
        ("03 04 0001 0002", 1, "need function 3 with 2 bytes"),
        ("03 02 00", 1, "need function 3"),
        ("03 02 0001 00", 1, "need function 3"),
        ("83 02", 1, "exception 2 .illegal data address."),
        ("83 63", 1, "exception 99 .unknown."),
        ("03", 1, "need function 3"),
    ],
)
def test_an_answer_to_something_else_is_refused(pdu: str, unit: int, why: str) -> None:
    """Unit, function and number of bytes must be those that were asked for."""
    with pytest.raises(NotTheAnswer, match=why):
        payload(Frame(0, unit, bytes.fromhex(pdu)), 1, 3, 2)


def test_the_checksum_agrees_with_a_bitwise_division() -> None:
    """Two implementations, one of them in these tests."""
    rng = random.Random(1)
    for size in range(1, 60):
        data = rng.randbytes(size)
        assert crc16_modbus(data).to_bytes(2, "little") == bitwise_crc(data)


# --------------------------------------------------------------------------------------- codecs

RTU = [RtuCodec.request(u, p) for u, p in ((1, b"\x03\x02\x00\x07"), (2, b"\x83\x02"), (1, b"\x04\x04abcd"))]
TCP = [
    TcpCodec.request(t, 1, p) for t, p in ((1, b"\x03\x02\x00\x07"), (9, b"\x83\x02"), (70, b"\x01\x01\x05"))
]


@pytest.mark.parametrize(
    ("codec", "stream"),
    [
        (RtuCodec, b"".join(RTU)), (RtuCodec, RTU[0] + b"\x01\x07" + RTU[1]),
        (RtuCodec, RTU[0][:-1] + b"\x00" + RTU[1]), (TcpCodec, b"".join(TCP)),
        (TcpCodec, TCP[0] + b"\0\0\x01" + TCP[1]), (TcpCodec, TCP[0] + b"\0\0\0\0\x01\0\1" + TCP[1]),
    ],
)  # fmt: skip
def test_frames_do_not_depend_on_where_the_stream_was_cut(codec: type, stream: bytes) -> None:
    """And after garbage nothing is believed: there is no mark by which a frame could be found again."""
    whole = codec().feed(stream)
    assert [type(event) for event in whole].count(Garbled) == (
        0 if stream in (b"".join(RTU), b"".join(TCP)) else 1
    )
    for cut in range(len(stream) + 1):
        half = codec()
        assert half.feed(stream[:cut]) + half.feed(stream[cut:]) == whole, cut
    singly = codec()
    assert [event for i in range(len(stream)) for event in singly.feed(stream[i : i + 1])] == whole
    if isinstance(whole[-1], Garbled):
        assert singly.midway
        assert singly.feed(stream * 100) == []
        singly.reset()
        assert not singly.midway


def test_neighbouring_registers_share_a_request_and_gaps_do_not() -> None:
    """A register in a gap may not exist; reading it would fail the whole block."""
    wanted = [
        register(102, "float32"),
        register(100, "float32"),
        register(107),
        register(104),
        register(5, unit=2),
    ]
    found = [(b.unit, b.address, b.size, [r.name for r in b.registers]) for b in blocks(wanted)]
    assert found == [(1, 100, 5, ["r100", "r102", "r104"]), (1, 107, 1, ["r107"]), (2, 5, 1, ["r5"])]
    assert [b.size for b in blocks([register(i) for i in range(300)])] == [125, 125, 50]
    assert len(blocks([register(1), register(1, "int32", name="same"), register(2, table="input")])) == 2


# --------------------------------------------------------------------------------------- driver


def modbus(peer: RtuPeer, **more: Any) -> Modbus:
    framing = "tcp" if isinstance(peer, ModbusTcpPeer) else "rtu"
    options = {"port": "socket://scripted:502", **FAST, **RtuPeer.options, "framing": framing, **more}
    driver = Modbus(options, port=scripted(peer))
    driver.open()
    return driver


@pytest.mark.parametrize("peer_class", [RtuPeer, ModbusTcpPeer])
def test_another_unit_behind_the_port_is_refused(peer_class: type[RtuPeer]) -> None:
    """The serial number or type code in a register is the identity."""
    peer = peer_class(seed=1)
    assert modbus(peer).identify().text == "unit 1 register 0 = 4711"
    peer.behave("stranger")
    with pytest.raises(IdentityError, match="got the identity 4712, need 4711"):
        modbus(peer).identify()


def test_an_exception_is_told_by_its_name() -> None:
    """An error reply is an answer, but no reading."""
    driver = modbus(RtuPeer(seed=1), yields={"a": {"register": 9}})
    driver.identify()
    assert driver.poll(1.0)[0].quality == "garbled"
    with pytest.raises(InstrumentError, match="illegal data address"):
        driver.poll(1.0)


def test_a_dead_unit_takes_no_reading_from_the_others() -> None:
    """Unit 9 does not exist; unit 1 is read in every poll all the same."""
    more = {"dead": {"unit": 9, "register": 3}}
    driver = modbus(RtuPeer(seed=1), yields={**RtuPeer.options["yields"], **more})  # type: ignore[dict-item]
    driver.identify()
    polls = [{r.name: r.quality for r in driver.poll(1.0)} for _ in range(40)]
    assert sum(poll["left"] == "good" for poll in polls) >= 38
    assert all(poll["dead"] == "missing" for poll in polls)


def test_transaction_numbers_are_never_the_same_twice_in_a_row_and_wrap() -> None:
    """Sixteen bits are used up in a day at one scan a second."""
    peer = ModbusTcpPeer(seed=1)
    driver = modbus(peer)
    driver.identify()
    for _ in range(3):
        driver.poll(1.0)
    driver._transactions = iter(range(65534, 66000))  # type: ignore[assignment]
    for _ in range(3):
        assert {r.quality for r in driver.poll(1.0)} == {"good"}


def test_a_declared_identity_still_needs_an_answer() -> None:
    """Somebody must be there."""
    peer = RtuPeer(seed=1)
    options: dict[str, Any] = {"identity": {"declared": "transmitter 12, cannot say"}}
    assert modbus(peer, **options).identify().declared
    peer.behave("silent")
    with pytest.raises(LinkError):
        modbus(peer, **options).identify()


def test_a_text_identity_is_read_from_registers() -> None:
    """Two characters a register, padded with NUL."""

    def far_end(data: bytes) -> list[tuple[float, bytes]]:
        return [(0.01, RtuCodec.request(1, bytes([3, 8]) + b"ACME 7\0\0"))]

    options = {
        "port": "/dev/none", "yields": {"a": {"register": 1}},
        "identity": {"register": 8, "registers": 4, "text": "ACME [0-9]"},
    }  # fmt: skip
    driver = Modbus(options, port=ScriptedPort(far_end))
    driver.open()
    assert driver.identify().text == "ACME 7"


# ------------------------------------------------------------------------ pymodbus as the peer


def test_frames_and_registers_agree_with_pymodbus() -> None:
    """The same frames and numbers from a library that others have tested for years."""
    pytest.importorskip("pymodbus")
    from pymodbus.client.mixin import ModbusClientMixin
    from pymodbus.framer import FramerRTU, FramerSocket
    from pymodbus.pdu import DecodePDU
    from pymodbus.pdu.register_message import ReadHoldingRegistersRequest, ReadHoldingRegistersResponse

    rng = random.Random(2)
    rtu, tcp = FramerRTU(DecodePDU(is_server=True)), FramerSocket(DecodePDU(is_server=True))
    for _ in range(200):
        unit, address, size, tid = (
            rng.randrange(1, 248),
            rng.randrange(60000),
            rng.randrange(1, 126),
            rng.randrange(65536),
        )
        request = ReadHoldingRegistersRequest(address=address, count=size, dev_id=unit, transaction_id=tid)
        block = Block(unit, "holding", address, size, ())
        assert RtuCodec.request(unit, block.pdu) == rtu.buildFrame(request)
        assert TcpCodec.request(tid, unit, block.pdu) == tcp.buildFrame(request)
        words = [rng.randrange(65536) for _ in range(size)]
        answer = ReadHoldingRegistersResponse(registers=words, dev_id=unit, transaction_id=tid)
        for codec, framer, transaction in ((RtuCodec(), rtu, 0), (TcpCodec(), tcp, tid)):
            (frame,) = codec.feed(framer.buildFrame(answer))
            assert isinstance(frame, Frame)
            assert frame.transaction == transaction
            data = payload(frame, unit, 3, 2 * size)
            assert data == b"".join(word.to_bytes(2, "big") for word in words)
    kinds = {
        "int16": "INT16",
        "uint16": "UINT16",
        "int32": "INT32",
        "uint32": "UINT32",
        "float32": "FLOAT32",
        "float64": "FLOAT64",
    }
    for kind, theirs in kinds.items():
        for order in ("big", "little"):
            for _ in range(50):
                value = rng.uniform(-1e6, 1e6) if "float" in kind else float(rng.randrange(30000))
                datatype = getattr(ModbusClientMixin.DATATYPE, theirs)
                given = value if "float" in kind else int(value)
                words = ModbusClientMixin.convert_to_registers(given, datatype, order)  # type: ignore[arg-type]
                data = b"".join(word.to_bytes(2, "big") for word in words)
                read, quality = register(0, kind, little_words=order == "little").read(data)
                assert quality == "good"
                assert read == pytest.approx(value, rel=1e-6 if kind == "float32" else 1e-15)


@contextmanager
def pymodbus_server(kind: str, folder: Path) -> Iterator[str]:
    """A server of pymodbus in a thread of its own; gives the port to ask."""
    pytest.importorskip("pymodbus")
    from pymodbus.framer import FramerType
    from pymodbus.server import ModbusSerialServer, ModbusTcpServer
    from pymodbus.simulator import DataType, SimData, SimDevice

    logging.getLogger("pymodbus").setLevel(logging.CRITICAL)
    values = [4711, *[0] * 99, 0x3F80, 0x0000, 0xC049, 0x0FDB]
    device = SimDevice(1, simdata=[SimData(0, values=values, datatype=DataType.REGISTERS)])
    loop = asyncio.new_event_loop()
    ends: list[int] = []
    found: list[Any] = []
    ready = threading.Event()

    async def serve() -> None:
        if kind == "tcp":
            server: Any = ModbusTcpServer([device], address=("127.0.0.1", 0))
        else:
            ours, theirs = os.openpty()
            tty.setraw(theirs)
            ends.extend((ours, theirs))
            far_ours, far_theirs = os.openpty()
            tty.setraw(far_theirs)
            ends.extend((far_ours, far_theirs))
            server = ModbusSerialServer(
                [device], framer=FramerType.RTU, port=os.ttyname(far_theirs), baudrate=115200
            )
            for a, b in ((ours, far_ours), (far_ours, ours)):
                loop.add_reader(a, lambda a=a, b=b: os.write(b, os.read(a, 4096)))
        found.append(server)
        await server.serve_forever(background=True)
        if kind == "tcp":
            name = f"socket://127.0.0.1:{server.transport.sockets[0].getsockname()[1]}"
        else:
            name = os.ttyname(ends[1])
        found.append(name)
        ready.set()

    def run() -> None:
        asyncio.set_event_loop(loop)
        loop.run_until_complete(serve())
        loop.run_forever()
        loop.run_until_complete(found[0].shutdown())
        loop.run_until_complete(asyncio.sleep(0.05))
        loop.close()

    thread = threading.Thread(target=run, daemon=True)
    thread.start()
    try:
        assert ready.wait(5.0)
        yield found[1]
    finally:
        loop.call_soon_threadsafe(loop.stop)
        thread.join(5.0)
        for fd in ends:
            os.close(fd)


@pytest.mark.parametrize("kind", ["rtu", "tcp"])
def test_a_server_of_pymodbus_is_read_end_to_end(kind: str, tmp_path: Path) -> None:
    """An independent implementation at the other end of a pseudo-terminal and of a socket."""
    with pymodbus_server(kind, tmp_path) as port:
        options = {
            "port": port, "timeout_s": 0.5, "longest_reply_s": 0.5,
            "identity": {"register": 0, "equals": 4711},
            "yields": {
                "left": {"register": 100, "type": "float32"}, "right": {"register": 102, "type": "float32"},
            },
        }  # fmt: skip
        driver = create("modbus", options)
        driver.open()
        try:
            driver.identify()
            values = [(r.value, r.quality) for r in driver.poll(1.0)]
        finally:
            driver.close()
    assert values == [(1.0, "good"), (pytest.approx(-math.pi, rel=1e-7), "good")]


# --------------------------------------------------------------------------------------- options


def test_the_example_of_the_module_is_fit() -> None:
    """Documentation that a technician copies must work."""
    (block,) = [b for b in (module.__doc__ or "").split("\n\n") if b.startswith("    ")]
    options = yaml.safe_load(block)
    assert options.pop("driver") == "modbus"
    assert Modbus.check_options(options) == []
    assert Modbus(options).yields == ("left", "right", "oven", "break")


@pytest.mark.parametrize(
    ("wrong", "place", "need"),
    [
        ({"framing": "tcp", "port": "/dev/none"}, "framing", "socket://"),
        ({"framing": "ascii"}, "framing", "rtu, tcp"),
        ({"unit": 300}, "unit", "0 to 255"),
        ({"table": "inputs"}, "table", "coil, discrete, holding, input"),
        ({"yields": {"a": {}}}, "yields.a.register", "is missing"),
        ({"yields": {"a": {"register": 40101.0}}}, "yields.a.register", "whole number"),
        ({"yields": {"a": {"register": 65535, "type": "int32"}}}, "yields.a.register", "room for int32"),
        ({"yields": {"a": {"register": 1, "type": "int8"}}}, "yields.a.type", "float64"),
        ({"no_reading": {"x": "overload"}}, "no_reading", "overload"),
        ({"no_reading": {1: "good"}}, "no_reading", "overload"),
        ({"identity": {"register": 1}}, "identity.equals", "is missing"),
        ({"identity": {"register": 1, "text": "A"}}, "identity.registers", "is missing"),
        ({"identity": 5}, "identity", "mapping"),
        ({"registers": 5}, "registers", "no option"),
    ],
)
def test_a_wrong_option_is_named_with_its_place(wrong: dict[str, Any], place: str, need: str) -> None:
    """Place, got, wanted."""
    options = {"port": "socket://h:502", **RtuPeer.options, "yields": {"a": {"register": 1}}, **wrong}
    (problem,) = Modbus.check_options(options)
    assert problem[0] == place
    assert need in problem[1]
