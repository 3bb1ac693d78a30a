"""Bytes of facts and state: what goes to disk comes back to the last bit."""

from __future__ import annotations

import math
import struct

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from daq.codec import (
    COMPRESS_FROM,
    canonical_json,
    decode_fact,
    decode_finding,
    decode_state,
    encode_fact,
    encode_finding,
    encode_state,
)
from daq.core.block import Conclusion
from daq.records import (
    BurstTaken,
    ClockStepped,
    ConditionChanged,
    EngineStarted,
    EntryMade,
    Finding,
    RecordError,
    RulesAdopted,
    ScansTaken,
    Stamp,
    Ticked,
)

STAMP = Stamp(17_645_000_000_000, 123_456, "b00t")
PLAIN = [
    EntryMade(STAMP, "H1", "loaded", "mk", {"mass_kg": 41.5, "list": [1, "a", None]}, "full load"),
    RulesAdopted(STAMP, "H1", "H1/P2", '{"a":1}', True),
    EngineStarted(STAMP, "0.1.0", None),
    ConditionChanged(STAMP, "", "scanner", "link_lost", True, "no answer in 2 s"),
    ClockStepped(STAMP, -36_000_000),
    Ticked(STAMP, "H1"),
]


def _scans(values: np.ndarray, step: int = 600_000) -> ScansTaken:
    n, c = values.shape
    tick = 17_645_000_000_000 + step * np.arange(n, dtype=np.int64)
    quality = np.where(np.isnan(values), 64, 0).astype(np.uint8)
    return ScansTaken("H1", tuple(f"ch{j}" for j in range(c)), "b00t", tick, tick - 10**13, values, quality)


def _same(a: ScansTaken, b: ScansTaken) -> bool:
    return (
        (a.frame, a.channels, a.boot_id) == (b.frame, b.channels, b.boot_id)
        and all(x.tobytes() == y.tobytes() for x, y in ((a.utc_tick, b.utc_tick), (a.boot_tick, b.boot_tick)))
        and np.array_equal(a.quality, b.quality)
        and np.array_equal(np.isnan(a.values), np.isnan(b.values))
        and np.nan_to_num(a.values).tobytes() == np.nan_to_num(b.values).tobytes()
    )


@pytest.mark.parametrize("fact", PLAIN, ids=lambda f: type(f).__name__)
def test_a_plain_fact_comes_back_equal(fact: object) -> None:
    """Facts are never changed, so storing one may not change it either."""
    assert decode_fact(encode_fact(fact)) == fact  # type: ignore[arg-type]


@pytest.mark.parametrize("n", [0, 1, COMPRESS_FROM - 1, COMPRESS_FROM, 300])
def test_scans_of_any_number_come_back_to_the_bit(n: int) -> None:
    """One scan live and thousands in a sealed chunk are read by the same code."""
    rng = np.random.default_rng(5)
    values = np.column_stack(
        [np.round(rng.normal(size=n), 4), rng.normal(size=n), np.full(n, np.nan), -np.zeros(n)]
    )
    back = decode_fact(encode_fact(_scans(values)))
    assert isinstance(back, ScansTaken)
    assert _same(back, _scans(values))


@settings(max_examples=150, deadline=None)
@given(
    hnp.arrays(
        np.float64,
        st.tuples(st.integers(1, 60), st.integers(1, 3)),
        elements=st.one_of(
            st.floats(allow_nan=False, width=64),
            st.integers(-10_000, 10_000).map(lambda k: k / 1000.0),
            st.just(math.nan),
        ),
    ),
    st.integers(-50, 10**9),
)
def test_no_double_is_altered_by_packing(values: np.ndarray, step: int) -> None:
    """Decimal packing is used only where it gives back every bit, signed zeros and infinities included."""
    scans = _scans(values, step)
    back = decode_fact(encode_fact(scans))
    assert isinstance(back, ScansTaken)
    assert _same(back, scans)


def test_a_burst_keeps_its_scans_and_its_reason() -> None:
    """A burst is a fact of its own kind around ordinary scans."""
    burst = BurstTaken(_scans(np.ones((20, 2))), "rupture")
    back = decode_fact(encode_fact(burst))
    assert isinstance(back, BurstTaken)
    assert back.why == "rupture"
    assert _same(back.scans, burst.scans)


def test_counts_of_decimal_text_pack_below_three_bytes() -> None:
    """The figure promised for the journal: instruments speak decimal text of few digits."""
    rng = np.random.default_rng(1)
    values = np.round(1.0 + rng.normal(0, 4e-3, (4096, 8)).cumsum(0) * 0.01, 4)
    assert len(encode_fact(_scans(values))) / values.size < 3.0


@pytest.mark.parametrize("cut", [0, 1, 5, 9, 20, -1])
def test_bytes_cut_short_are_an_error_that_says_so(cut: int) -> None:
    """A torn record must be named, not half understood."""
    data = encode_fact(_scans(np.ones((2, 2))))
    with pytest.raises(RecordError, match=r"wanted|got"):
        decode_fact(data[:cut])


def test_another_version_is_refused_by_number() -> None:
    """Guessing at a later format would be inventing data."""
    data = encode_fact(PLAIN[0])
    with pytest.raises(RecordError, match="version 9"):
        decode_fact(struct.pack("<B", 9) + data[1:])


def test_equal_states_have_equal_bytes_whatever_the_order_of_keys() -> None:
    """Killed and rebuilt equals never killed is shown by comparing bytes."""
    a = Conclusion(
        3, 4, "stage", "tertiary", {"x": (1, 2.5, None, True, "t", b"\x00"), "y": {"b": 1, "a": 2}}
    )
    b = Conclusion(
        3, 4, "stage", "tertiary", {"y": {"a": 2, "b": 1}, "x": (1, 2.5, None, True, "t", b"\x00")}
    )
    assert encode_state(a) == encode_state(b)
    assert decode_state(encode_state(a)) == a


def test_arrays_of_any_layout_have_one_form() -> None:
    """A transposed view holds the same numbers, so it must give the same bytes."""
    x = np.arange(6.0).reshape(2, 3)
    assert encode_state(np.asfortranarray(x)) == encode_state(x)
    assert np.array_equal(decode_state(encode_state(x.T)), x.T)


@pytest.mark.parametrize("value", [[1], {1, 2}, object()])
def test_a_value_without_canonical_form_is_refused(value: object) -> None:
    """A list could be changed behind the state's back."""
    with pytest.raises(RecordError, match="no canonical form"):
        encode_state(value)


def test_state_cut_short_or_with_bytes_left_over_is_refused() -> None:
    """A snapshot is used whole or not at all."""
    data = encode_state((1, "two", np.ones(3)))
    for bad in (data[:-1], data + b"x", b"\x07" + data[1:]):
        with pytest.raises(RecordError):
            decode_state(bad)


def test_findings_have_one_text() -> None:
    """The same finding, made twice, is the same line."""
    f = Finding("H1|S-1|stage|tertiary|1", 5, 1.25, "H1", "stage", {"b": None, "a": [1.5]})
    assert decode_finding(encode_finding(f)) == f
    assert encode_finding(f) == canonical_json(
        {
            "kind": "stage",
            "frame": "H1",
            "test_h": 1.25,
            "at_tick": 5,
            "id": f.id,
            "fields": {"a": [1.5], "b": None},
        }
    )


def test_arrays_of_another_kind_are_refused_when_they_are_written() -> None:
    """A quality of eight bytes would be written without complaint and never read again."""
    s = _scans(np.ones((20, 2)))
    wide = s.quality.astype(np.int64)
    with pytest.raises(RecordError, match="wanted"):
        encode_fact(ScansTaken(s.frame, s.channels, s.boot_id, s.utc_tick, s.boot_tick, s.values, wide))  # type: ignore[arg-type]
