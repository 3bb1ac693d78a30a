"""Recordings: exact, cut as one likes, and every mistake by line and column."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.recording import CHUNK, Recording, RecordingError, read
from daq.records import Quality, ScansTaken

DATA = Path(__file__).resolve().parents[3] / "shared" / "data" / "cmsx6"
Write = Callable[..., Path]


@pytest.fixture
def write(tmp_path: Path) -> Write:
    """Write a recording and return its path."""

    def put(text: str | bytes, name: str = "r.csv") -> Path:
        path = tmp_path / name
        path.write_bytes(text.encode() if isinstance(text, str) else text)
        return path

    return put


def whole(path: Path, *columns: str, block: int = 4096) -> ScansTaken:
    blocks = list(read(path, "H1", columns, block))
    return ScansTaken(
        "H1", columns, "",
        np.concatenate([b.utc_tick for b in blocks]), np.concatenate([b.boot_tick for b in blocks]),
        np.concatenate([b.values for b in blocks]), np.concatenate([b.quality for b in blocks]),
    )  # fmt: skip


def test_a_plain_recording_is_read_as_it_stands(write: Write) -> None:
    """Columns come in the order asked for; equal and unordered stamps are data."""
    s = whole(
        write("time_s,left,mid\n0.00,0.0071,979.5\n4.68,1e-5,-3\n4.68,.5,+980.\n2,0,0\n"), "mid", "left"
    )
    assert s.utc_tick.tolist() == s.boot_tick.tolist() == [0, 46800, 46800, 20000]
    assert s.values.tolist() == [[979.5, 0.0071], [-3.0, 1e-5], [980.0, 0.5], [0.0, 0.0]]
    assert not s.quality.any()
    assert (s.frame, s.channels, s.boot_id) == ("H1", ("mid", "left"), "")


NUMBERS = st.floats(allow_nan=False, allow_infinity=False).filter(lambda x: abs(x) not in (9.9e37, 9.91e37))


@settings(max_examples=60, deadline=None)
@given(
    rows=st.lists(
        st.tuples(st.floats(-1e9, 1e9), NUMBERS, st.none() | st.floats(-9, 9)), min_size=1, max_size=30
    ),
    block=st.integers(1, 31),
    quoted=st.booleans(),
)
def test_numbers_are_those_that_float_gives(
    tmp_path_factory: pytest.TempPathFactory,
    rows: list[tuple[float, float, float | None]],
    block: int,
    quoted: bool,
) -> None:
    """Both ways of reading, plain and row by row, to the last bit, however the blocks are cut."""
    mark = '"' if quoted else ""
    lines = [f"{t!r},{mark}{a!r}{mark},{'' if b is None else repr(b)}" for t, a, b in rows]
    path = tmp_path_factory.mktemp("r") / "r.csv"
    path.write_text("time_s,a,b\n" + "\n".join(lines) + "\n")
    s = whole(path, "a", "b", block=block)
    wanted = np.array([[float(repr(a)), math.nan if b is None else float(repr(b))] for _, a, b in rows])
    assert s.values.tobytes() == wanted.tobytes()
    assert s.quality[:, 1].tolist() == [64 if b is None else 0 for _, _, b in rows]
    assert s.utc_tick.tolist() == [int(np.rint(t * 1e4)) for t, _, _ in rows]


@pytest.mark.parametrize("ending", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("bom", [b"", b"\xef\xbb\xbf"])
@pytest.mark.parametrize("tail", ["", "\n", "\n\n  \n\n"])
def test_ends_of_lines_byte_order_mark_and_blank_lines_do_not_matter(
    write: Write, ending: str, bom: bytes, tail: str
) -> None:
    """Files pass through editors, spreadsheets and other systems."""
    text = "# made by hand, in °C\n\ntime_s,left\n0,0.5\n# note\n\n10,0.25" + tail
    s = whole(write(bom + text.replace("\n", ending).encode()), "left")
    assert s.utc_tick.tolist() == [0, 100_000]
    assert s.values[:, 0].tolist() == [0.5, 0.25]


@pytest.mark.parametrize(
    ("cell", "quality"),
    [
        ("", Quality.BAD_MISSING),
        ("  ", Quality.BAD_MISSING),
        ("nan", Quality.BAD_NOT_A_NUMBER),
        ("NaN", Quality.BAD_NOT_A_NUMBER),
        ("9.91E37", Quality.BAD_NOT_A_NUMBER),
        ("+9.91000000E+37", Quality.BAD_NOT_A_NUMBER),
        ("-9.91e37", Quality.BAD_NOT_A_NUMBER),
        ("inf", Quality.BAD_OVERLOAD),
        ("-Infinity", Quality.BAD_OVERLOAD),
        ("9.9E37", Quality.BAD_OVERLOAD),
        ("-9.90000e+37", Quality.BAD_OVERLOAD),
        ("1e999", Quality.BAD_OVERLOAD),
    ],
)
@pytest.mark.parametrize("other", ["0.5", '"0.5"'])
def test_what_is_no_number_gets_a_quality_and_never_a_value(
    write: Write, cell: str, quality: Quality, other: str
) -> None:
    """IEEE 488.2 / SCPI write over-range as +-9.9E37 and not-a-number as 9.91E37 (instrument manuals)."""
    s = whole(write(f"time_s,a,b\n0,{cell},{other}\n1,0.25,{cell}\n"), "a", "b")
    assert s.quality.tolist() == [[quality, 0], [0, quality]]
    assert np.isnan(s.values).tolist() == [[True, False], [False, True]]
    assert s.values[0, 1] == 0.5
    assert s.values[1, 0] == 0.25


# --- instants -------------------------------------------------------------------------------


def test_instants_are_kept_to_a_tenth_of_a_millisecond_and_written_as_in_the_file(write: Write) -> None:
    """A finding's ``at`` is compared with the file by people."""
    rows = [
        "2031-05-04T23:59:59.5+02:00",
        "2031-05-04T23:59:59.12345+02:00",
        "2031-05-05T00:00:00.0+02:00",
    ]
    path = write("time,a\n" + "".join(f"{r},1\n" for r in rows))
    recording = Recording(path, "H1", ["a"])
    (s,) = recording.blocks()
    assert s.utc_tick[0] == 1_935_698_399_5000  # 2031-05-04 21:59:59.5 UTC
    assert np.diff(s.utc_tick).tolist() == [-3765, 8765]
    assert [recording.how_at(int(t)) for t in s.utc_tick] == [
        "2031-05-04T23:59:59.5+02:00",
        "2031-05-04T23:59:59.1235+02:00",
        "2031-05-05T00:00:00.0+02:00",
    ]


def test_a_change_of_zone_in_the_file_is_followed(write: Write) -> None:
    """The end of daylight saving repeats an hour of local time; instants go on."""
    path = write("time,a\n2031-10-26 02:59:50+0200,1\n2031-10-26 02:00:00+0100,2\n")
    for block in (1, 4096):
        recording = Recording(path, "H1", ["a"], block)
        ticks = [tick for s in recording.blocks() for tick in s.utc_tick.tolist()]
        assert ticks[1] - ticks[0] == 100_000
        assert recording.how_at(ticks[0] + 50_000) == "2031-10-26 02:59:55+0200"
        assert recording.how_at(ticks[1] + 50_000) == "2031-10-26 02:00:05+0100"


def test_utc_stays_utc_and_seconds_stay_seconds(write: Write) -> None:
    """The style of the file is kept; a huge origin loses no digit."""
    path = write("time,a\n1969-12-31T23:59:59Z,1\n")
    recording = Recording(path, "H1", ["a"])
    (s,) = recording.blocks()
    assert s.utc_tick.tolist() == [-10_000]
    assert recording.how_at(-10_000) == "1969-12-31T23:59:59Z"
    path = write("time_s,a\n1900000000.1234,1\n")
    recording = Recording(path, "H1", ["a"])
    (s,) = recording.blocks()
    assert s.utc_tick.tolist() == [19_000_000_001_234]
    assert recording.how_at(19_000_000_001_234) == 1900000000.1234


# --- mistakes -------------------------------------------------------------------------------

GOOD_ROWS = "".join(f"{i},0.1,20\n" for i in range(30_000))


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("", r"r\.csv: got no line of text"),
        ("# only this\n\n", r"r\.csv: got no line of text"),
        ("0.0,0.1,980\n", r"r\.csv:1: column 1: got '0\.0', wanted time_s \(seconds\) or time"),
        ("time_s;left;mid\n", "separated by commas"),
        ("left,time_s,mid\n", "must come first"),
        ("time_s,left,left,mid\n", "column left: got it 2 times, wanted once"),
        ("# c\ntime_s,left,medium\n", r"r\.csv:2: got the columns time_s, left, medium, wanted also .* mid"),
        ("time_s,left,mid\n0,0.1\n", r"r\.csv:2: got 2 cells, wanted 3"),
        ("time_s,left,mid\n0,0,1,980\n", r"r\.csv:2: got 4 cells, wanted 3"),
        ("time_s,left,mid\n0,0.1\n1,2,3,4\n", r"r\.csv:2: got 2 cells"),
        ("time_s,left,mid\n\n# c\n0,0.1,9x0\n", r"r\.csv:4: column mid: got '9x0', wanted a number"),
        ("time_s,left,mid\n0,1_0,980\n", r"r\.csv:2: column left: got '1_0'"),
        ("time_s,left,mid\n0,0x1F,980\n", r"r\.csv:2: column left: got '0x1F'"),
        ("time_s,left,mid\n0,٣,980\n", r"r\.csv:2: column left: got '٣'"),
        ("time_s,left,mid\n,0.1,980\n", r"r\.csv:2: column time_s: got '', wanted a number of seconds"),
        ("time_s,left,mid\nnan,0.1,980\n", r"r\.csv:2: column time_s: got 'nan'"),
        ("time_s,left,mid\n1e300,0.1,980\n", r"r\.csv:2: column time_s: got '1e300', wanted seconds below"),
        ("time,left,mid\n2031-05-04T12:00:00,0.1,980\n", r"csv:2: column time: got '2031.*', .* zone"),
        ("time,left,mid\n12.5,0.1,980\n", r"r\.csv:2: column time: got '12\.5'"),
        ("time_s,left,mid\n" + GOOD_ROWS + "0,0.1,\n1,oops,20\n", r"csv:30003: column left: got 'oops'"),
        (b"time_s,left,m\xefd\n", r"r\.csv:1: got a header that is not UTF-8"),
        (b"\xff\xfet\0i\0m\0e\0", "UTF-16"),
        (b"\x1f\x8b\x08rest", "gzip"),
        (b"PK\x03\x04rest", "workbook"),
        (b"time_s\0\0", "binary data"),
        (b"x" * (1 << 21), r"r\.csv:1: got a line of more than"),
    ],
)  # fmt: skip
def test_a_mistake_is_named_with_line_and_column(write: Write, text: str | bytes, complaint: str) -> None:
    """The reader of the message has a file of 40,000 lines before him."""
    path = write(text)
    with pytest.raises(RecordingError, match=complaint) as caught:
        list(read(path, "H1", ["left", "mid"]))
    assert str(path) in str(caught.value)


def test_a_file_that_cannot_be_opened_is_named(tmp_path: Path) -> None:
    """No traceback for a misspelt name or a folder."""
    with pytest.raises(RecordingError, match=r"none\.csv: got No such file"):
        Recording(tmp_path / "none.csv", "H1", ["a"])
    with pytest.raises(RecordingError, match="got Is a directory"):
        Recording(tmp_path, "H1", ["a"])


def test_other_columns_are_left_aside_with_a_note(write: Write) -> None:
    """They may even be text, quoted, with commas in it."""
    path = write('time_s,"a",remark,b\n0,1,"hot, ""very""",2\n1,3,plain_text,4\n')
    recording = Recording(path, "H1", ["a", "b"])
    (s,) = recording.blocks()
    assert s.values.tolist() == [[1, 2], [3, 4]]
    assert recording.notes == [f"{path}:1: columns without a channel are left aside: remark"]


def test_a_header_without_scans_is_an_empty_recording(write: Write) -> None:
    """Cut a recording anywhere: the findings are a prefix, here none."""
    assert list(read(write("time_s,a\n"), "H1", ["a"])) == []


# --- blocks and progress ----------------------------------------------------------------------


def test_blocks_are_no_larger_than_asked_and_lines_survive_the_chunks_of_reading(write: Write) -> None:
    """Rows lie across the edges of what is read at once."""
    n = 3 * CHUNK // 12
    path = write("time_s,a\r\n" + "".join(f"{i},{i / 8}\r\n" for i in range(n)))
    seen: list[int] = []
    recording = Recording(path, "H1", ["a"], block=1000)
    blocks = list(recording.blocks(seen.append))
    assert {len(b) for b in blocks[:-1]} == {1000}
    s = whole(path, "a", block=977)
    assert s.utc_tick.tolist() == [i * 10_000 for i in range(n)]
    assert np.array_equal(s.values[:, 0], np.arange(n) / 8)
    assert seen == sorted(seen)
    assert seen[-1] == recording.size == path.stat().st_size


@pytest.mark.skipif(not DATA.is_dir(), reason=f"measured recordings are not at {DATA}")
@pytest.mark.parametrize("name", ["C-78", "C-81", "C-82", "C-94"])
def test_the_measured_recordings_are_read_whole(name: str) -> None:
    """Judged by numpy's own reader of text tables (measured curves, doi 10.5281/zenodo.13937987)."""
    path = DATA / f"{name}.csv"
    s = whole(path, "strain_pct", "T_top_C", "T_mid_C", "T_bot_C")
    table = np.loadtxt(path, delimiter=",", skiprows=1)
    assert np.array_equal(s.values, table[:, 1:])
    assert np.array_equal(s.utc_tick, np.rint(table[:, 0] * 1e4).astype(np.int64))
