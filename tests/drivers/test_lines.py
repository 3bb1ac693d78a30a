"""Lines, checksums and numbers, judged by published values."""

from __future__ import annotations

import math
import re
import string

import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.base import GOOD, NOT_A_NUMBER, OPEN_CIRCUIT, OVERLOAD
from drivers.lines import CHECKSUMS, Checksum, Garbled, Line, LineCodec, crc16_modbus, parse_number

STREAM = (
    b"+1.5,2\r\n\r\nAB\x00C\r\n"
    + b"x" * 70
    + b"\r\nlast\r\n\xb0C\r\n+9\r"
    + b"y" * 80
    + b"\rz\r\nend\r\nrest"
)


def feed_all(codec: LineCodec, *slices: bytes) -> list[Line | Garbled]:
    return [event for data in slices for event in codec.feed(data)]


@pytest.mark.parametrize("end", [b"\r\n", b"\n", b"\r", b"END"])
def test_lines_do_not_depend_on_where_the_stream_was_cut(end: bytes) -> None:
    """A serial port may split a line anywhere, in the middle of its terminator too."""
    whole = LineCodec(end, most=64).feed(STREAM)
    for cut in range(len(STREAM) + 1):
        assert feed_all(LineCodec(end, most=64), STREAM[:cut], STREAM[cut:]) == whole, cut
    singly = [STREAM[i : i + 1] for i in range(len(STREAM))]
    assert feed_all(LineCodec(end, most=64), *singly) == whole


PIECES = st.sampled_from([b"\r", b"\n", b"\r\n", b"+1.5", b"x" * 9, b"\x00", b"\xff", b" ", b""])


@given(st.lists(PIECES | st.binary(max_size=20), max_size=30), st.sampled_from([b"\r\n", b"\n", b"\r\n\r\n"]))
def test_any_bytes_in_any_slices_give_the_same_events(slices: list[bytes], end: bytes) -> None:
    """Garbage is an event, never an exception."""
    assert feed_all(LineCodec(end, most=16), *slices) == LineCodec(end, most=16).feed(b"".join(slices))


def test_good_lines_survive_the_bad_ones_around_them() -> None:
    """The events of the stream above, written out."""
    events = LineCodec(b"\r\n", most=64).feed(STREAM)
    assert events == [
        Line("+1.5,2"),
        Garbled(b"AB\x00C", "byte 0x00 at place 3"),
        Garbled(b"x" * 64, "no terminator within 64 bytes"),
        Line("last"),
        Garbled(b"\xb0C", "byte 0xb0 at place 1"),
        Garbled((b"+9\r" + b"y" * 80)[:64], "no terminator within 64 bytes"),
        Line("end"),
    ]


def test_a_lost_terminator_does_not_fill_the_memory() -> None:
    """A peer that babbles for months leaves one event and less than a line of bytes."""
    codec = LineCodec(b"\r\n", most=64)
    events = feed_all(codec, *[b"U" * 4096] * 1000)
    assert len(events) == 1
    assert len(codec._pending) <= 2
    assert feed_all(codec, b"\r\nfine\r\n") == [Line("fine")]


def test_listening_begins_at_the_next_line() -> None:
    """Whoever begins in the middle of 12.345 would hear 2.345, a sound number that nobody said."""
    codec = LineCodec(b"\r\n")
    codec.reset(synced=False)
    assert feed_all(codec, b"2.3", b"45\r", b"\n12.346\r\n") == [Line("12.346")]


def test_latin_1_may_be_allowed() -> None:
    """Some instruments write a degree sign as 0xB0; control bytes stay garbage."""
    codec = LineCodec(b"\n", encoding="latin-1")
    assert codec.feed(b"21.5 \xb0C\n21\x8f5\n") == [
        Line("21.5 °C"),
        Garbled(b"21\x8f5", "byte 0x8f at place 3"),
    ]


# ------------------------------------------------------------------------------------ checksums


@pytest.mark.parametrize(
    ("message", "crc"),
    [
        ("0207", 0x1241),  # example of the Modbus over Serial Line specification, CRC appendix
        ("01030000000A", 0xCDC5),  # computed independently
        ("010300000001", 0x0A84),
        ("1103006B0003", 0x8776),
    ],
)
def test_the_modbus_checksum_is_that_of_the_specification(message: str, crc: int) -> None:
    """Low byte first on the wire: the checksum over message and checksum is then 0."""
    data = bytes.fromhex(message)
    assert crc16_modbus(data) == crc
    assert crc16_modbus(data + crc.to_bytes(2, "little")) == 0


@pytest.mark.parametrize(
    ("kind", "value"),
    [("crc16_modbus", 0x4B37), ("crc16_ccitt", 0x29B1), ("crc16_xmodem", 0x31C3)],
)
def test_the_check_values_of_the_catalogue_are_met(kind: str, value: int) -> None:
    """Catalogue of parametrised CRC algorithms, check value of "123456789" (from memory)."""
    assert CHECKSUMS[kind][1](b"123456789") == value


def test_the_sentence_checksum_of_nmea_0183_is_the_xor_between_dollar_and_star() -> None:
    """The example sentence printed in many manuals of NMEA 0183 (from memory)."""
    line = "$GPGGA,123519,4807.038,N,01131.000,E,1,08,0.9,545.4,M,46.9,M,,*47"
    checksum = Checksum("xor8", mark="*", skip=1)
    assert checksum.unseal(line) == line[:-3]
    assert checksum.seal(line[:-3]) == line


def test_sum_and_complement_add_up_to_nothing() -> None:
    """That is how the longitudinal check of Modbus ASCII is defined: two's complement of the sum."""
    assert CHECKSUMS["sum8"][1](b"\x01\x02\xff") == 0x02
    assert (CHECKSUMS["sum8"][1](b"hello") + CHECKSUMS["lrc8"][1](b"hello")) % 256 == 0
    # Modbus over Serial Line, LRC of 01 03 00 00 00 0A (computed by hand: 256 - 14)
    assert CHECKSUMS["lrc8"][1](bytes.fromhex("01030000000A")) == 0xF2


@pytest.mark.parametrize("kind", CHECKSUMS)
@given(body=st.text(string.ascii_letters + string.digits + "+-., ", min_size=2, max_size=30), data=st.data())
def test_one_flipped_bit_never_passes(kind: str, body: str, data: st.DataObject) -> None:
    """All of these checksums see every single-bit error; upper or lower case of their digits is no error."""
    checksum = Checksum(kind, mark="*")
    line = checksum.seal(body).encode()
    bit = data.draw(st.integers(0, 8 * len(line) - 1))
    changed = bytearray(line)
    changed[bit // 8] ^= 1 << bit % 8
    text = changed.decode("latin-1")
    assert checksum.unseal(text) is None or text.upper() == line.decode().upper()


def test_a_line_that_is_only_a_checksum_is_none() -> None:
    """An empty body with its right checksum carries no reading."""
    assert Checksum("sum8").unseal("00") is None
    assert Checksum("crc16_modbus").unseal("1") is None


# -------------------------------------------------------------------------------------- numbers


@pytest.mark.parametrize(
    ("text", "value"),
    [
        # IEEE 488.2-1992, 8.7.2 NR1, 8.7.3 NR2, 8.7.4 NR3, 7.7.2.1 NRf: examples of the clauses
        ("146", 146.0), ("+146", 146.0), ("-12345", -12345.0),
        ("12.3", 12.3), ("+1.2345", 1.2345), ("-0.123", -0.123),
        ("1.23E+6", 1.23e6), ("123.4E-54", 123.4e-54), ("+200", 200.0), ("-56", -56.0), ("+9.9E36", 9.9e36),
        # common practice, no source
        (" +01.2345 ", 1.2345), ("+  12.5", 12.5), ("-.5", -0.5), ("7.", 7.0), ("-0.00000E+00", 0.0),
    ],
)  # fmt: skip
def test_numbers_are_read_as_ieee_488_2_writes_them(text: str, value: float) -> None:
    """Integer, decimal and exponent form."""
    assert parse_number(text) == (value, GOOD)


@pytest.mark.parametrize(
    "text", ["9.91E37", "+9.91000000E+37", "9.91e37", "-9.91E37", "NAN", "nan", " 9.91E+37 "]
)
def test_not_a_number_is_known_in_any_spelling(text: str) -> None:
    """SCPI-99: 9.91E37 (clause 7.2.1.5, from memory); spellings as instruments send them."""
    value, quality = parse_number(text) or (0.0, "")
    assert math.isnan(value)
    assert quality == NOT_A_NUMBER


@pytest.mark.parametrize(
    "text",
    [
        "9.9E37",
        "-9.9E37",
        "+9.90000000E+37",
        "-9.9e+37",
        "1E38",
        "-1E400",
        "-1234.567E+90",
        "OL",
        "-ol",
        "INF",
    ],
)
def test_over_range_is_never_a_number(text: str) -> None:
    """SCPI-99: +-9.9E37 stand for infinity (clause 7.2.1.4, from memory); no transducer gives more."""
    value, quality = parse_number(text) or (0.0, "")
    assert math.isnan(value)
    assert quality == OVERLOAD


@pytest.mark.parametrize(
    "text",
    ["", " ", "+", ".", "1.2.3", "1,5", "1 2", "0x10", "1e", "e5", "12a", "--1", "1_000", "1e99999", "٣", "½",
     "1" * 41, "infinity!", "1.5\n2"],
)  # fmt: skip
def test_anything_else_is_no_number(text: str) -> None:
    """In particular what Python's float would take."""
    assert parse_number(text) is None


@pytest.mark.parametrize(
    ("text", "value"), [("+1,25", 1.25), ("-0,5E-3", -0.5e-3), ("7", 7.0), ("1.25", None), ("1,2,3", None)]
)
def test_a_decimal_comma_excludes_the_point(text: str, value: float | None) -> None:
    """1.250 with a decimal comma would be one thousand two hundred and fifty somewhere else."""
    assert parse_number(text, decimal_comma=True) == (None if value is None else (value, GOOD))


def test_words_can_be_taught() -> None:
    """Each maker has its own."""
    words = {"------": OVERLOAD, "EEEE": OPEN_CIRCUIT, "+9999.9": OVERLOAD}
    assert [(parse_number(text, words=words) or (0, ""))[1] for text in (" eeee", "------", "+9999.9")] == [
        OPEN_CIRCUIT, OVERLOAD, OVERLOAD,
    ]  # fmt: skip
    assert parse_number("OL", words=words) is None


@given(st.floats(-9.8e37, 9.8e37), st.sampled_from(["{:+.9E}", "{:.17g}", "{:+f}"]))
def test_what_python_writes_is_read_back(value: float, form: str) -> None:
    """Python's own parser is the independent judge."""
    text = form.format(value)
    read = parse_number(text)
    assert read == (float(text), GOOD) if len(text) <= 40 else read is None


@given(st.text("0123456789+-.,eEinfaNFA \n٣½", max_size=50))
def test_no_text_makes_a_bad_reading_good(text: str) -> None:
    """Good is finite, always."""
    read = parse_number(text)
    assert read is None or (read[1] == GOOD) == math.isfinite(read[0])
    if read is not None and read[1] == GOOD:
        assert re.search("[0-9]", text)
