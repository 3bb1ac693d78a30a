"""Text lines: what is read out of a line, and how a driver behaves around it."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import pytest
import yaml
from driver_peers import BusPeer, GaugePeer, TalkerPeer, scripted

import drivers.textline as module
from drivers.base import IdentityError, InstrumentError, LinkError, RawReading
from drivers.lines import Checksum
from drivers.scripted import ScriptedPort
from drivers.textline import TextLine

BASE = {"port": "/dev/none", "identity": {"declared": "a gauge that cannot say"}, "timeout_s": 0.1}
NAMED = {**BASE, "identity": {"ask": "ID", "reply": "GAUGE"}}


def far_end(line: str, end: str = "\r\n") -> ScriptedPort:
    """An instrument that says its name, and this line to everything else."""

    def answer(data: bytes) -> list[tuple[float, bytes]]:
        return [(0.01, ("GAUGE" if data.startswith(b"ID") else line).encode("latin-1") + end.encode())]

    return ScriptedPort(answer)


def read(line: str, **options: Any) -> dict[str, tuple[float, str]]:
    """Ask once; return what came of that line."""
    driver = TextLine({**NAMED, "ask": "?", **options}, port=far_end(line))
    driver.open()
    try:
        driver.identify()
        return {r.name: (r.value, r.quality) for r in driver.poll(1.0)}
    finally:
        driver.close()


def good(line: str, **options: Any) -> list[float] | str:
    """The values if all are good, else the qualities."""
    found = read(line, **options)
    qualities = {quality for _, quality in found.values()}
    return [value for value, _ in found.values()] if qualities == {"good"} else ",".join(sorted(qualities))


# ------------------------------------------------------------------------- reading out of a line


@pytest.mark.parametrize(
    ("line", "options", "wanted"),
    [
        ("+1.25", {"yields": {"a": {}}}, [1.25]),
        ("+1.25,-2.5", {"yields": {"a": 1, "b": 2}}, [1.25, -2.5]),
        ("+1.25,-2.5", {"yields": {"b": 2, "a": 1}}, [-2.5, 1.25]),
        ("+1.25 -2.5", {"yields": {"a": 1, "b": 2}, "separator": " "}, [1.25, -2.5]),
        ("+1,25;-2,5", {"yields": {"a": 1, "b": 2}, "decimal_comma": True}, [1.25, -2.5]),
        ("1,2,3,4,5", {"yields": {"a": 2}, "fields": 5}, [2.0]),
        ("1,2,3", {"yields": {"a": 2}}, "garbled"),  # one field more than it said: perhaps another's line
        ("1", {"yields": {"a": 1, "b": 2}}, "garbled"),
        ("01A+1.25", {"yields": {"a": "x"}, "reply": r"01A(?P<x>.*)"}, [1.25]),
        ("02A+1.25", {"yields": {"a": "x"}, "reply": r"01A(?P<x>.*)"}, "garbled"),
        ("01A+1.25 mm", {"yields": {"a": "x"}, "reply": r"01A(?P<x>\S*)"}, "garbled"),  # all of the line
        ("L 1.25 R 2.50", {"yields": {"a": {"columns": [3, 6]}, "b": {"columns": [10, 13]}}}, [1.25, 2.5]),
        ("L 1.25 R 2.5", {"yields": {"a": {"columns": [3, 6]}, "b": {"columns": [10, 13]}}}, "garbled"),
        ("1.25,OL", {"yields": {"a": 1, "b": 2}}, "good,overload"),
        ("1.25,9.91E37", {"yields": {"a": 1, "b": 2}}, "good,not_a_number"),
        ("1.25,-----", {"yields": {"a": 1, "b": 2}}, "garbled"),
        ("1.25,-----", {"yields": {"a": 1, "b": 2}, "words": {"-----": "open_circuit"}}, "good,open_circuit"),
        ("SHUT", {"yields": {"a": {"states": {"OPEN": 1, "SHUT": 0}}}}, [0.0]),
        ("SHU", {"yields": {"a": {"states": {"OPEN": 1, "SHUT": 0}}}}, "garbled"),
        ("21.5 \xb0C", {"yields": {"a": "v"}, "reply": "(?P<v>.*) °C", "encoding": "latin-1"}, [21.5]),
        ("21.5 \xb0C", {"yields": {"a": "v"}, "reply": "(?P<v>.*) .C"}, "garbled"),
        ("A1.5", {"yields": {"a": "v"}, "reply": "A(?P<v>[0-9.]+)(?:B(?P<w>.+))?"}, [1.5]),
        ("A1.5", {"yields": {"a": "w"}, "reply": "A(?P<v>[0-9.]+)(?:B(?P<w>.+))?"}, "missing"),
    ],
)  # fmt: skip
def test_a_line_is_read_as_configured_or_not_at_all(
    line: str, options: dict[str, Any], wanted: object
) -> None:
    """A line that is not as it should be in every part gives no number."""
    assert good(line, **options) == wanted


@pytest.mark.parametrize("kind", ["sum8", "lrc8", "xor8", "crc16_modbus", "crc16_ccitt", "crc16_xmodem"])
def test_a_wrong_checksum_condemns_the_line(kind: str) -> None:
    """Every kind, right and wrong by one digit."""
    sealed = Checksum(kind, mark="*").seal("+1.25")
    options = {"yields": {"a": {}}, "checksum": {"kind": kind, "mark": "*"}}
    assert good(sealed, **options) == [1.25]
    assert good(sealed.replace("+1.25", "+1.26"), **options) == "garbled"
    assert good("+1.25", **options) == "garbled"


def test_requests_carry_unit_number_checksum_and_terminator() -> None:
    """To the last byte, as a manual's example would print it."""
    sent: list[bytes] = []

    def answer(data: bytes) -> list[tuple[float, bytes]]:
        sent.append(data)
        return [(0.01, Checksum("sum8").seal("+1.5").encode() + b"\r")]

    options = {
        "ask": "#{unit}A", "terminator": "\r", "checksum": {"kind": "sum8"}, "request_checksum": True,
        "yields": {"a": {"unit": "01"}, "b": {"unit": "FF"}},
    }  # fmt: skip
    driver = TextLine({**BASE, **options}, port=ScriptedPort(answer))
    driver.open()
    driver.identify()
    del sent[:]
    assert [r.quality for r in driver.poll(2.0)] == ["good", "good"]
    # 0x23 + 0x30 + 0x31 + 0x41 = 0xC5; 0x23 + 0x46 + 0x46 + 0x41 = 0xF0
    assert sent == [b"#01AC5\r", b"#FFAF0\r"]


def test_an_instrument_that_repeats_the_command_is_understood() -> None:
    """The echo is checked, not just skipped: it shows that the question arrived undamaged."""
    for echo, wanted in (("D1", "good"), ("D2", "garbled")):
        port = ScriptedPort(
            lambda data, e=echo: [
                (0.01, b"ID\r\nGAUGE\r\n" if data == b"ID\r\n" else f"{e}\r\n+1.5\r\n".encode())
            ]
        )
        driver = TextLine({**NAMED, "ask": "D1", "command_echo": True, "yields": {"a": {}}}, port=port)
        driver.open()
        driver.identify()
        assert driver.poll(1.0)[0].quality == wanted


def test_readings_with_the_same_question_share_one() -> None:
    """One exchange for both sides: they belong to the same instant."""
    peer = GaugePeer()
    driver = TextLine({**BASE, **GaugePeer.options}, port=scripted(peer))
    driver.open()
    driver.identify()
    before = peer.asked
    driver.poll(1.0)
    assert peer.asked == before + 1


# ------------------------------------------------------------------------------------- identity


@pytest.mark.parametrize(
    ("answer", "error"),
    [
        (b"GAUGE 8\r\n", IdentityError),
        (b"+1.2345\r\n", IdentityError),
        (b"", LinkError),
        (b"\xff\r\n", InstrumentError),
    ],
)
def test_a_wrong_or_missing_identity_is_refused(answer: bytes, error: type[Exception]) -> None:
    """And no reading can be had after it."""
    port = ScriptedPort(lambda _: [(0.01, answer)] if answer else [])
    options = {**BASE, "ask": "D", "identity": {"ask": "ID", "reply": "GAUGE 7.*"}, "yields": {"a": {}}}
    driver = TextLine(options, port=port)
    driver.open()
    with pytest.raises(error):
        driver.identify()
    with pytest.raises(IdentityError):
        driver.poll(1.0)


def test_a_late_reading_is_not_taken_for_the_identity_of_a_stranger() -> None:
    """After a restart the answer to somebody before us may still be on its way: wait, ask again."""
    port = ScriptedPort(lambda data: [(0.02, b"GAUGE 7\r\n")] if data == b"ID\r\n" else [])
    options = {**BASE, "ask": "D", "identity": {"ask": "ID", "reply": "GAUGE 7.*"}, "yields": {"a": {}}}
    driver = TextLine(options, port=port)
    driver.open()
    port.say(0.01, b"+1.2345\r\n")
    assert driver.identify().text == "GAUGE 7"


def test_no_identity_must_be_declared() -> None:
    """Leaving it out is a mistake that is told, not a default."""
    options = {"port": "/dev/none", "ask": "D", "yields": {"a": {}}}
    assert [path for path, _ in TextLine.check_options(options)] == ["identity"]
    assert TextLine.check_options({**options, "identity": {"declared": "gauge 12"}}) == []


# ----------------------------------------------------------------------------- silence and noise


def bus(peer: BusPeer, **more: Any) -> TextLine:
    options = {"port": "/dev/none", "timeout_s": 0.08, "longest_reply_s": 0.16, **BusPeer.options, **more}
    driver = TextLine(options, port=scripted(peer))
    driver.open()
    driver.identify()
    return driver


def test_a_silent_unit_costs_its_neighbours_no_reading() -> None:
    """It is asked last, and from the second silent poll on not in every poll."""
    peer = BusPeer(seed=1)
    driver = bus(peer)
    peer.dead = "01"
    polls = [[r.quality for r in driver.poll(0.9)] for _ in range(40)]
    assert polls.count(["missing", "good", "good"]) >= 39
    peer.dead = ""
    assert ["good"] * 3 in [[r.quality for r in driver.poll(0.9)] for _ in range(9)]


def test_a_dead_bus_is_a_link_error_in_the_second_poll() -> None:
    """One lost answer may happen; two in a row need the remedy of a new start."""
    peer = GaugePeer(seed=1)
    driver = TextLine({**BASE, **GaugePeer.options}, port=scripted(peer))
    driver.open()
    driver.identify()
    peer.behave("silent")
    assert [r.quality for r in driver.poll(0.9)] == ["missing"] * 2
    with pytest.raises(LinkError, match="no answer to"):
        driver.poll(0.9)


def test_an_answer_that_never_fits_is_an_instrument_error() -> None:
    """The message shows what came, so that the pattern can be mended."""
    driver = TextLine({**NAMED, "ask": "D", "yields": {"a": {}}}, port=far_end("1.5 kN"))
    driver.open()
    driver.identify()
    assert driver.poll(0.9)[0].quality == "garbled"
    with pytest.raises(InstrumentError, match=r"1\.5 kN"):
        driver.poll(0.9)


def test_a_late_answer_is_never_taken_for_a_later_one() -> None:
    """The measured trap: with one slow answer every later one is off by one, and looks sound."""
    delays = iter([0.01, 0.01, 0.15, 0.01, 0.01, 0.01, 0.01, 0.01, 0.01])
    said = iter(range(1, 100))
    owed: list[float] = []

    def answer(data: bytes) -> list[tuple[float, bytes]]:
        owed.append(float(next(said)))
        return [(next(delays), f"{owed[-1]:g}\r\n".encode())]

    driver = TextLine({**BASE, "ask": "D", "yields": {"a": {}}}, port=ScriptedPort(answer))
    driver.open()
    driver.identify()
    polls = []
    for _ in range(5):
        (reading,) = driver.poll(0.9)
        polls.append(reading.value if reading.quality == "good" else reading.quality)
        assert reading.quality != "good" or reading.value == owed[-1]
    assert polls == [2.0, "missing", 5.0, 6.0, 7.0]  # 1 and 4 answered canaries


def test_an_instrument_that_cannot_say_who_it_is_must_at_least_answer() -> None:
    """A declared identity says nothing about whether anybody is there."""
    options = {**BASE, "ask": "D", "yields": {"a": {}}}
    for port, error in ((ScriptedPort(lambda _: []), LinkError), (far_end("1.5 kN"), InstrumentError)):
        driver = TextLine(options, port=port)
        driver.open()
        with pytest.raises(error):
            driver.identify()


@pytest.mark.parametrize(
    ("yields", "apart"),
    [
        ({"a": {"echo": "A"}, "b": {"echo": "B"}}, False),
        ({"a": {"echo": "A"}, "b": {"reply": "(?P<value>.*)"}}, True),
        ({"a": {"reply": "(?P<value>.*)"}, "b": {"reply": "B(?P<value>.*)"}}, True),
        ({"a": {"echo": "A"}, "b": {"echo": "A"}}, True),
        ({"a": {"echo": "A"}}, False),
    ],
)
def test_questions_whose_answers_look_alike_are_asked_apart(yields: dict[str, Any], apart: bool) -> None:
    """Only an echo in every answer tells them from one another; a pattern may fit more than it seems."""
    echoing = {"reply": "(?P<echo>.)(?P<value>.*)"}
    options = {
        **NAMED, "ask": "x",
        "yields": {n: {"ask": n, **({} if "reply" in y else echoing), **y} for n, y in yields.items()},
    }  # fmt: skip
    driver = TextLine(options, port=far_end(""))
    questions = [question.voice for _, question in driver._questions]
    assert (driver._talk.pace.guard_s > 0.0) == apart
    assert (len(set(questions)) < len(questions)) == apart


# ------------------------------------------------------------------------------------- listening


def talker(lines: Mapping[float, bytes], **more: Any) -> tuple[TextLine, ScriptedPort]:
    port = ScriptedPort(lambda _: [])
    options: dict[str, Any] = {**BASE, "listen": True, "yields": {"left": 1, "right": 2}, **more}
    driver = TextLine(options, port=port)
    driver.open()
    driver.identify()
    for delay_s, line in lines.items():
        port.say(delay_s, line)
    return driver, port


def values(readings: list[RawReading]) -> list[float | str]:
    return [r.value if r.quality == "good" else r.quality for r in readings]


def test_the_last_line_since_the_last_poll_counts() -> None:
    """And no line counts twice."""
    driver, port = talker({0.1: b"0,0\r\n", 0.2: b"1,2\r\n", 0.3: b"3,4\r\n"})
    port.clock.sleep(1.0)
    assert values(driver.poll(0.5)) == [3.0, 4.0]
    assert values(driver.poll(0.5)) == ["missing", "missing"]


def test_a_line_that_comes_within_the_deadline_is_waited_for() -> None:
    """No line has arrived yet, one is about to."""
    driver, _ = talker({0.05: b"0,0\r\n", 0.3: b"5,6\r\n"})
    assert values(driver.poll(0.2)) == ["missing", "missing"]
    assert values(driver.poll(0.2)) == [5.0, 6.0]


def test_listening_in_the_middle_of_a_line_does_not_make_a_number() -> None:
    """12.345 heard from its second digit on is 2.345."""
    driver, _ = talker({0.01: b"2.345,7\r\n", 0.02: b"12.345,7\r\n"})
    assert values(driver.poll(0.2)) == [12.345, 7.0]


def test_a_full_serial_buffer_is_not_believed() -> None:
    """The kernel keeps the oldest 4096 bytes; behind them a hole joins two halves of different lines."""
    driver, port = talker({})
    port.say(0.0, b"0,0\r\n")
    for _ in range(1024):
        port.say(0.0, b"1,1\r")
        port.say(0.0, b"\n")
    port.say(0.05, b"8,8\r\n")
    port.say(0.3, b"half,9\r\n")
    port.say(0.4, b"5,6\r\n")
    port.clock.sleep(0.01)
    assert values(driver.poll(1.0)) == [5.0, 6.0]


def test_lines_of_different_kinds_are_put_together() -> None:
    """An instrument may say one channel a line."""
    driver, port = talker(
        {0.01: b"start\r\n", 0.02: b"L=1.5\r\n", 0.03: b"R=2.5\r\n", 0.04: b"noise\r\n"},
        yields={"left": {"reply": "L=(?P<value>.*)"}, "right": {"reply": "R=(?P<value>.*)"}},
    )
    port.clock.sleep(0.1)
    assert values(driver.poll(0.2)) == [1.5, 2.5]


def test_long_silence_is_a_link_error_and_so_is_endless_noise() -> None:
    """Half-open connections look like silence."""
    driver, _ = talker({}, silence_s=1.0)
    assert values(driver.poll(0.9)) == ["missing", "missing"]
    with pytest.raises(LinkError, match="heard for"):
        driver.poll(0.9)
    driver, _ = talker({0.01 * i: b"??\r\n" for i in range(1000)}, silence_s=1.0)
    assert values(driver.poll(0.9)) == ["garbled", "garbled"]
    with pytest.raises(LinkError, match="heard for"):
        driver.poll(0.9)


def test_an_identity_may_be_heard() -> None:
    """Some talkers name themselves in each line, or now and then."""
    for line, wanted in ((b"GAUGE 7 ready\r\n", True), (b"GAUGE 8 ready\r\n", False)):
        port = ScriptedPort(lambda _: [])
        options = {
            **BASE, "listen": True, "yields": {"a": {}}, "identity": {"reply": "GAUGE 7.*"}
        }  # fmt: skip
        driver = TextLine(options, port=port)
        driver.open()
        port.say(0.1, b"x\r\n")
        port.say(0.2, line)
        if wanted:
            assert driver.identify().text == "GAUGE 7 ready"
        else:
            with pytest.raises(IdentityError):
                driver.identify()


# --------------------------------------------------------------------------------------- options


def test_the_examples_of_the_module_are_fit() -> None:
    """Documentation that a technician copies must work."""
    text = module.__doc__ or ""
    blocks = [b for b in text.split("\n\n") if b.startswith("    ")]
    assert len(blocks) == 3
    for block in blocks:
        options = yaml.safe_load(block)
        options.pop("driver", None)
        options.setdefault("port", "/dev/none")
        options.setdefault("identity", {"declared": "x"})
        assert TextLine.check_options(options) == [], block


@pytest.mark.parametrize(
    ("wrong", "place", "need"),
    [
        ({"ask": None}, "ask", "got None, need text"),
        ({"yields": {"a": 0}}, "yields.a.field", "from 1 to 200"),
        ({"yields": {"a": "v"}}, "yields.a.group", "need a reply"),
        ({"yields": {"a": "v"}, "reply": "(?P<w>.)"}, "yields.a.group", "it has w"),
        ({"yields": {"a": {"field": 1, "columns": [1, 2]}}}, "yields.a", "field and columns, need one"),
        ({"yields": {"a": {"columns": [5, 2]}}}, "yields.a.columns", "[first, last]"),
        ({"yields": {"a": {"states": {"ON": "x"}}}}, "yields.a.states.ON", "a number"),
        ({"yields": {"a": {"states": {True: 1}}}}, "yields.a.states", "need text (quote it)"),
        ({"yields": {"a.b": 1}}, "yields.a.b", "letters, digits"),
        ({"unit": 1, "yields": {"a": {}}}, "unit", "quote it"),
        ({"reply": "(", "yields": {"a": {}}}, "reply", "regular expression"),
        ({"echo": "01", "yields": {"a": {}}}, "yields.a.echo", "(?P<echo>...)"),
        ({"listen": True, "yields": {"a": {}}}, "yields.a.ask", "listen"),
        ({"checksum": {"kind": "md5"}}, "checksum.kind", "sum8"),
        ({"request_checksum": True}, "request_checksum", "need a checksum"),
        ({"words": {"X": "good"}}, "words.X", "overload"),
        ({"timeout_s": 0}, "timeout_s", "0.005"),
        ({"longest_reply_s": 0.01}, "longest_reply_s", "at least timeout_s"),
        ({"identity": {"reply": "x"}}, "identity.ask", "is missing"),
        ({"terminator": ""}, "terminator", "need text"),
        ({"fields": 0}, "fields", "from 1"),
        ({"timeout": 1}, "timeout", "did you mean timeout_s?"),
    ],
)
def test_a_wrong_option_is_named_with_its_place(wrong: dict[str, Any], place: str, need: str) -> None:
    """Place, got, wanted."""
    options = {**BASE, "ask": "D", "yields": {"a": 1}, **wrong}
    problems = TextLine.check_options(options)
    assert [p for p in problems if p[0] == place and need in p[1]], problems
    assert len(problems) == 1, problems


def test_the_peers_of_these_tests_are_configured_without_mistakes() -> None:
    """A test against a driver that refused its options would prove nothing."""
    for peer in (GaugePeer, BusPeer, TalkerPeer):
        assert TextLine.check_options({"port": "/dev/none", **peer.options}) == []
    assert math.isnan(read("OL", yields={"a": {}})["a"][0])
