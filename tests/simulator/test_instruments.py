"""Emulated instruments as state machines: bytes in, timed bytes out."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import pytest

from simulator.instruments.device import Session
from simulator.instruments.faults import Fault, Reply
from simulator.instruments.scpi import ScpiScanner, scpi_scanner
from simulator.instruments.text import TextInstrument, sum8, text_instrument, xor8

READINGS = {"H1.left": 0.0012345, "H1.top": 980.25, "H1.lost": math.nan, "H1.open": math.inf}


def read(source: str, lab_h: float) -> float:
    return READINGS[source] + (lab_h if source == "H1.top" else 0.0)


def check(source: str, place: str) -> None:
    if source not in READINGS:
        raise ValueError(f"{place}: got {source!r}")


def gauge(**options: Any) -> TextInstrument:
    yields = {
        "left": {"source": "H1.left", "scale": 25.0, "offset": 1.0},
        "lost": "H1.lost",
        "open": "H1.open",
    }
    return text_instrument({"yields": yields, **options}, "gauge", read, check, 1)


def scanner(**options: Any) -> ScpiScanner:
    yields = {"101": "H1.top", "102": "H1.lost", "103": "H1.open", "110": "H1.left"}
    return scpi_scanner({"yields": yields, **options}, "scanner", read, check, 1)


def said(replies: list[Reply]) -> bytes:
    return b"".join(r.data for r in replies)


def ask(instrument: TextInstrument | ScpiScanner, line: str, lab_h: float = 0.0) -> str:
    return said(Session(instrument).feed(f"{line}\n".encode(), lab_h)).decode()


# -------------------------------------------------------------------------------------- text


def test_a_gauge_answers_in_the_pattern_it_was_given() -> None:
    """Fixed width, units, several values in one line: whatever a real gauge would do."""
    g = gauge(asks={"D?": "{left:+09.4f} mm", "A": "{left:.3f};{lost};{open}"}, terminator="\r")
    assert ask(g, "D?") == "+001.0309 mm\r"
    assert ask(g, "A") == "1.031;OPEN;OVLD\r"
    assert ask(g, "*IDN?") == "SIMULATED GAUGE 1\r"
    assert ask(g, "what?") == ""
    assert ask(gauge(), "left?") == "+1.030863\r\n"


def test_decimal_comma_and_unknown_question() -> None:
    """Both are common on the instruments of the trade (common practice, no source)."""
    g = gauge(asks={"D?": "{left:.2f}"}, decimal_comma=True, unknown="?")
    assert ask(g, "D?") == "1,03\r\n"
    assert ask(g, "Q") == "?\r\n"


def test_checksums_cover_what_stands_before_the_mark() -> None:
    """Worked by hand: 0x41 ^ 0x42 = 0x03, 0x41 + 0x42 = 0x83."""
    assert (xor8(b"AB"), sum8(b"AB")) == (0x03, 0x83)
    g = gauge(asks={"D": "$AB"}, checksum={"kind": "xor8", "mark": "*", "skip": 1})
    assert ask(g, "D") == "$AB*03\r\n"
    assert ask(gauge(asks={"D": "AB"}, checksum={"kind": "sum8"}), "D") == "AB83\r\n"


def test_an_instrument_that_talks_by_itself_keeps_its_pace() -> None:
    """Ten lines a second, however often it is asked whether it has something to say."""
    g = gauge(talks={"every_s": 0.1, "line": "{left:.2f}"})
    spoken = [g.talk(0.0, 0.02) for _ in range(500)]
    assert 95 <= sum(1 for s in spoken if s) <= 101
    assert {s for s in spoken if s} == {b"1.03\r\n"}


@pytest.mark.parametrize("cut", range(12))
def test_questions_do_not_depend_on_where_the_stream_was_cut(cut: int) -> None:
    """A serial port may split a question anywhere; CR, LF and both end it."""
    stream = b"D?\r\nD?\nD?\r\n"
    session = Session(gauge(asks={"D?": "x"}))
    replies = session.feed(stream[:cut], 0.0) + session.feed(stream[cut:], 0.0)
    assert [r.data for r in replies] == [b"x\r\n"] * 3


def test_a_peer_without_terminators_does_not_fill_memory() -> None:
    """Noise on an open line goes on for months."""
    session = Session(gauge(asks={"D?": "x"}))
    for _ in range(50):
        session.feed(b"\x00" * 1000, 0.0)
    assert len(session._pending) <= 4096
    assert session.feed(b"\nD?\n", 0.0)[-1].data == b"x\r\n"


# -------------------------------------------------------------------------------------- SCPI


def test_a_scan_answers_numbers_in_the_order_of_the_list() -> None:
    """NR3 (IEEE 488.2, 8.7.4) with the sentinels +9.9E37 over-range and 9.91E37 not a number."""
    s = scanner()
    assert ask(s, "CONF:TEMP TC,S,(@101,102);:ROUT:SCAN (@101:103,110)") == ""
    answer = ask(s, "READ?", lab_h=0.5)
    assert answer == "+9.80750000E+02,+9.91000000E+37,+9.90000000E+37,+1.23450000E-03\n"
    assert ask(s, "FETC?") == answer
    assert ask(s, "rout:scan?") == "#218(@101,102,103,110)\n"
    assert ask(s, ":MEASure:VOLTage:DC? 10,(@110)") == "+1.23450000E-03\n"
    assert ask(s, "syst:err?") == '+0,"No error"\n'


@pytest.mark.parametrize(
    ("command", "code"),
    [
        ("FOO", -113),
        ("FOO?", -113),
        ("ROUT:SCAN", -109),
        ("ROUT:SCAN (@1x)", -109),
        ("ROUT:SCAN (@999)", -222),
        ("ROUT:SCAN (@103:101)", -222),
        ("READ?", -221),
        ("FETC?", -230),
    ],
)
def test_a_mistake_goes_to_the_error_queue_and_gets_no_answer(command: str, code: int) -> None:
    """A query that fails answers nothing; the queue says why, oldest first, and empties as it is read."""
    s = scanner()
    assert ask(s, command) == ""
    assert ask(s, "SYST:ERR?").startswith(f"{code:+d},")
    assert ask(s, "SYSTem:ERRor:NEXT?").startswith("+0,")


def test_the_error_queue_is_bounded_and_cls_clears_it() -> None:
    """The last place of a full queue says that it overflowed."""
    s = scanner()
    for _ in range(50):
        ask(s, "NONSENSE")
    codes = [ask(s, "SYST:ERR?").split(",")[0] for _ in range(21)]
    assert codes[:19] == ["-113"] * 19
    assert codes[19:] == ["-350", "+0"]
    ask(s, "NONSENSE;*CLS")
    assert ask(s, "SYST:ERR?").startswith("+0")


def test_two_connections_share_one_scanner() -> None:
    """A scan list set over one connection is read over the other, as on a real instrument."""
    s = scanner()
    one, other = Session(s), Session(s)
    one.feed(b"ROUT:SCAN (@110)\n", 0.0)
    assert said(other.feed(b"READ?\n", 0.0)) == b"+1.23450000E-03\n"


# ------------------------------------------------------------------------------------ faults


def test_each_fault_does_what_its_name_says_and_only_in_its_time() -> None:
    """A fault that strikes outside its stretch would spoil the count of a campaign."""

    def with_fault(**fault: Any) -> TextInstrument:
        return gauge(asks={"D?": "{left:.4f}"}, faults=[{"from_h": 1.0, "hours": 2.0, **fault}])

    good = b"1.0309\r\n"
    for kind, wanted in {
        "silent": lambda r: r == [],
        "late": lambda r: r == [Reply(good, 0.752)],
        "garbled": lambda r: len(r[0].data) == len(good) and r[0].data != good,
        "truncated": lambda r: said(r) != good and good.startswith(said(r)),
        "duplicate": lambda r: said(r) == good * 2,
        "hang_up": lambda r: r == [Reply(b"", 0.0, hang_up=True)],
        "overload": lambda r: said(r) == b"OVLD\r\n",
        "missing": lambda r: said(r) == b"OPEN\r\n",
        "error": lambda r: r == [],
    }.items():
        instrument = with_fault(kind=kind, delay_s=0.75)
        assert wanted(Session(instrument).feed(b"D?\n", 1.5)), kind
        for outside_h in (0.5, 3.0):
            assert said(Session(instrument).feed(b"D?\n", outside_h)) == good, kind
    assert ask(with_fault(kind="identity", text="OTHER"), "*IDN?", 1.5) == "OTHER\r\n"
    babble = with_fault(kind="babble", bytes_per_s=1000.0).talk(1.5, 0.1)
    assert len(babble) == 100
    assert b"\r" not in babble
    assert with_fault(kind="babble").talk(0.5, 0.1) == b""


def test_a_share_of_replies_is_hit_and_the_same_ones_for_the_same_seed() -> None:
    """Every failure must be reproducible from its seed."""

    def run() -> list[bytes]:
        session = Session(gauge(asks={"D?": "{left:.4f}"}, faults=[{"kind": "silent", "share": 0.3}]))
        return [said(session.feed(b"D?\n", 0.0)) for _ in range(400)]

    first = run()
    assert 80 < first.count(b"") < 160
    assert run() == first


def test_a_scanner_with_an_error_fault_refuses_and_still_says_who_it_is() -> None:
    """Execution error -200 (SCPI, from memory), and the identity as ever."""
    s = scanner(faults=[{"kind": "error"}])
    assert ask(s, "ROUT:SCAN (@101);READ?") == ""
    assert ask(s, "SYST:ERR?").startswith("-200")
    assert ask(s, "*IDN?").startswith("EXAMPLE,")
    assert Fault("silent").share == 1.0


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"yields": {"a": "H9.left"}}, r"gauge.yields.a: got 'H9.left'"),
        ({"yields": {}}, "gauge.yields: got {}"),
        ({"yields": {"a": {"source": "H1.left", "factor": 2}}}, "gauge.yields.a.factor: unknown"),
        ({"yields": {"a": "H1.left"}, "asks": {"D?": "{b:.2f}"}}, r"gauge.asks.D\?: got '{b:.2f}'"),
        ({"yields": {"a": "H1.left"}, "asks": {"D?": "{a:zz}"}}, r"gauge.asks.D\?: got '{a:zz}'"),
        ({"yields": {"a": "H1.left"}, "talk": {}}, "gauge.talk: unknown"),
        ({"yields": {"a": "H1.left"}, "checksum": {"kind": "md5"}}, "gauge.checksum.kind: got 'md5'"),
        ({"yields": {"a": "H1.left"}, "faults": [{"kind": "fire"}]}, r"gauge.faults\[0\].kind: got 'fire'"),
        ({"yields": {"a": "H1.left"}, "faults": [{"kind": "late", "delay_s": -1}]}, r"delay_s: got -1"),
    ],
)
def test_wrong_options_are_named_by_place(options: Mapping[str, Any], message: str) -> None:
    """Bench files are written by hand."""
    with pytest.raises(ValueError, match=message):
        text_instrument(options, "gauge", read, check, 0)


def test_a_scanner_wants_channel_numbers() -> None:
    """A name instead of a number is the likeliest slip."""
    with pytest.raises(ValueError, match=r"s.yields.top: got 'top', wanted a channel number"):
        scpi_scanner({"yields": {"top": "H1.top"}}, "s", read, check, 0)
