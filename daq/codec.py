"""Canonical, versioned bytes for facts, state and findings. No pickle.

Two codecs live here:

* :func:`encode_fact` / :func:`decode_fact`: one fact. Scans of any number share one form
  (stamps and values as differences of integers where that is lossless), so a live row with one
  scan and a sealed chunk with thousands are read by the same code.
* :func:`encode_state` / :func:`decode_state`: the immutable state of a test. Equal states
  give equal bytes, on any machine, so that *killed and rebuilt equals never killed* can be
  shown by comparing bytes.
"""

from __future__ import annotations

import dataclasses
import json
import struct
import zlib
from collections.abc import Callable, Mapping
from enum import Enum
from typing import Any, Final, TypeVar

import numpy as np

from daq.records import (
    BurstTaken,
    ClockStepped,
    ConditionChanged,
    EngineStarted,
    EntryMade,
    Fact,
    Finding,
    FloatArray,
    IntArray,
    RecordError,
    RulesAdopted,
    ScansTaken,
    Stamp,
    Ticked,
)

FACT_VERSION: Final = 1
STATE_VERSION: Final = 1
COMPRESS_FROM: Final = 16
"""Scans in a block from which packing pays; a live row of one scan is stored as it is, in microseconds."""


def canonical_json(value: Any) -> str:
    """Return the one text for a JSON value: sorted keys, no spaces, no NaN."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


# --- facts ------------------------------------------------------------------------------

_PLAIN: Final[dict[str, type]] = {
    cls.__name__: cls
    for cls in (EntryMade, RulesAdopted, EngineStarted, ConditionChanged, ClockStepped, Ticked)
}


def encode_fact(fact: Fact) -> bytes:
    """Return the bytes of one fact: version, kind, length of the header, header, body."""
    if isinstance(fact, BurstTaken):
        head: dict[str, Any] = {"why": fact.why}
        return _frame("BurstTaken", head, encode_fact(fact.scans))
    if isinstance(fact, ScansTaken):
        return _encode_scans(fact)
    head = dataclasses.asdict(fact)
    stamp = fact.stamp
    head["stamp"] = [stamp.utc_tick, stamp.boot_tick, stamp.boot_id]
    return _frame(type(fact).__name__, head, b"")


def decode_fact(data: bytes) -> Fact:
    """Return the fact in ``data``.

    Raises:
        RecordError: the bytes are cut short, of an unknown version or kind, or do not parse.
    """
    try:
        version, kind_len, head_len = struct.unpack_from("<BBI", data)
        if version != FACT_VERSION:
            raise RecordError(f"fact: got version {version}, this program reads {FACT_VERSION}")
        at = struct.calcsize("<BBI")
        kind = data[at : at + kind_len].decode("ascii")
        head = json.loads(data[at + kind_len : at + kind_len + head_len])
        body = data[at + kind_len + head_len :]
        if kind == "ScansTaken":
            return _decode_scans(head, body)
        if kind == "BurstTaken":
            scans = decode_fact(body)
            if not isinstance(scans, ScansTaken):
                raise RecordError(f"burst: got {type(scans).__name__} inside, wanted ScansTaken")
            return BurstTaken(scans, head["why"])
        cls = _PLAIN[kind]
        head["stamp"] = Stamp(*head["stamp"])
        fact: Fact = cls(**head)
        return fact
    except (struct.error, ValueError, KeyError, TypeError, IndexError, zlib.error) as error:
        raise RecordError(f"fact of {len(data)} bytes: got {error!r}, wanted a whole record") from error


def _frame(kind: str, head: Mapping[str, Any], body: bytes) -> bytes:
    k, h = kind.encode("ascii"), canonical_json(head).encode()
    return struct.pack("<BBI", FACT_VERSION, len(k), len(h)) + k + h + body


_KINDS: Final = (np.dtype(np.int64), np.dtype(np.int64), np.dtype(np.float64), np.dtype(np.uint8))


def _encode_scans(s: ScansTaken) -> bytes:
    n, c = len(s), len(s.channels)
    arrays = (s.utc_tick, s.boot_tick, s.values, s.quality)
    if [a.shape for a in arrays] != [(n,), (n,), (n, c), (n, c)] or tuple(a.dtype for a in arrays) != _KINDS:
        got = [f"{a.dtype}{a.shape}" for a in arrays]
        raise RecordError(f"scans of {s.frame}: got {got}, wanted {n} scans of {c} channels as {_KINDS}")
    head: dict[str, Any] = {"f": s.frame, "c": s.channels, "b": s.boot_id, "n": n}
    if n < COMPRESS_FROM:
        return _frame("ScansTaken", head, b"".join(np.ascontiguousarray(a).tobytes() for a in arrays))
    parts: list[bytes] = [_pack_ints(s.utc_tick), _pack_ints(s.boot_tick - s.utc_tick)]
    scales: list[int] = []
    for j in range(c):
        scale, blob = _pack_floats(s.values[:, j])
        scales.append(scale)
        parts.append(blob)
    parts.append(np.ascontiguousarray(s.quality.T).tobytes())
    head["s"] = scales
    body = b"".join(struct.pack("<I", len(p)) + p for p in parts)
    return _frame("ScansTaken", head, zlib.compress(body, 1))


def _decode_scans(head: dict[str, Any], body: bytes) -> ScansTaken:
    n, channels = head["n"], tuple(head["c"])
    if n < COMPRESS_FROM:
        c = len(channels)
        if len(body) != n * (16 + 9 * c):
            raise RecordError(f"scans of {head['f']}: got {len(body)} bytes, wanted {n * (16 + 9 * c)}")
        ticks = np.frombuffer(body, np.int64, 2 * n).copy()
        values = np.frombuffer(body, np.float64, n * c, 16 * n).reshape(n, c).copy()
        quality = np.frombuffer(body, np.uint8, n * c, n * (16 + 8 * c)).reshape(n, c).copy()
        return ScansTaken(head["f"], channels, head["b"], ticks[:n], ticks[n:], values, quality)
    body = zlib.decompress(body)
    parts: list[bytes] = []
    at = 0
    while at < len(body):
        (size,) = struct.unpack_from("<I", body, at)
        parts.append(body[at + 4 : at + 4 + size])
        at += 4 + size
    if len(parts) != len(channels) + 3:
        raise RecordError(f"scans of {head['f']}: got {len(parts)} columns, wanted {len(channels) + 3}")
    utc = _unpack_ints(parts[0], n)
    boot = utc + _unpack_ints(parts[1], n)
    values = np.empty((n, len(channels)))
    for j, scale in enumerate(head["s"]):
        values[:, j] = _unpack_floats(parts[2 + j], n, scale)
    quality = np.frombuffer(parts[-1], np.uint8).reshape(len(channels), n).T.copy()
    return ScansTaken(head["f"], channels, head["b"], utc, boot, values, quality)


_WIDTHS: Final = (np.int8, np.int16, np.int32, np.int64)
RAW: Final = -1
"""Scale of a column whose doubles are stored as they are."""
MAX_SCALE: Final = 9


def _pack_ints(x: IntArray) -> bytes:
    """First value, then differences in the narrowest width that holds them; bytes by plane.

    Planes (all low bytes, then all next bytes) compress far better than interleaved ones.
    """
    x = x.astype(np.int64)
    if x.size == 0:
        return b""
    d = np.diff(x)
    low, high = (int(d.min()), int(d.max())) if d.size else (0, 0)
    code = next(i for i in range(4) if -(1 << (8 << i) - 1) <= low and high < 1 << (8 << i) - 1)
    width = _WIDTHS[code]
    planes = d.astype(width).view(np.uint8).reshape(-1, np.dtype(width).itemsize).T
    return struct.pack("<qB", int(x[0]), code) + np.ascontiguousarray(planes).tobytes()


def _unpack_ints(data: bytes, n: int) -> IntArray:
    if n == 0:
        return np.empty(0, np.int64)
    first, code = struct.unpack_from("<qB", data)
    size = np.dtype(_WIDTHS[code]).itemsize
    planes = np.frombuffer(data, np.uint8, offset=9).reshape(size, n - 1)
    d = np.ascontiguousarray(planes.T).view(_WIDTHS[code]).reshape(n - 1)
    out = np.empty(n, np.int64)
    out[0] = first
    np.cumsum(d, dtype=np.int64, out=out[1:])
    out[1:] += first
    return out


def _pack_floats(x: FloatArray) -> tuple[int, bytes]:
    """Pack as decimal integers where that gives back every double to the bit, else raw.

    Instruments speak decimal text, so nearly every column is k / 10**scale with small k.
    NaN (no reading) is kept by repeating the last number; a bit map says where.
    """
    missing = np.isnan(x)
    holes = np.packbits(missing).tobytes() if missing.any() else b""
    filled = x
    if holes:
        index = np.where(missing, 0, np.arange(x.size))
        np.maximum.accumulate(index, out=index)
        filled = x[index]
        filled = np.where(np.isnan(filled), 0.0, filled)
    for scale in range(MAX_SCALE + 1):
        k = np.rint(filled * 10.0**scale)
        # k / 10**scale is how decimal text becomes a double, so it must give back the bits,
        # the sign of a zero included
        if k.size and not np.abs(k).max() < 2**52:
            break
        back = k / 10.0**scale
        if np.array_equal(back, filled) and not np.signbit(filled[filled == 0.0]).any():
            return scale, struct.pack("<H", len(holes) and 1) + holes + _pack_ints(k.astype(np.int64))
    raw = np.ascontiguousarray(filled).view(np.uint8).reshape(-1, 8).T
    return RAW, struct.pack("<H", len(holes) and 1) + holes + np.ascontiguousarray(raw).tobytes()


def _unpack_floats(data: bytes, n: int, scale: int) -> FloatArray:
    (has_holes,) = struct.unpack_from("<H", data)
    size = (n + 7) // 8 if has_holes else 0
    rest = data[2 + size :]
    if scale == RAW:
        planes = np.frombuffer(rest, np.uint8).reshape(8, n)
        out = np.ascontiguousarray(planes.T).view(np.float64).reshape(n).copy()
    else:
        out = _unpack_ints(rest, n) / 10.0**scale
    if has_holes:
        missing = np.unpackbits(np.frombuffer(data, np.uint8, size, 2), count=n).astype(bool)
        out[missing] = np.nan
    return out


# --- findings ---------------------------------------------------------------------------


def encode_finding(f: Finding) -> str:
    """Return the canonical JSON text of one finding, as stored in the journal."""
    return canonical_json(
        {
            "id": f.id,
            "at_tick": f.at_tick,
            "test_h": f.test_h,
            "frame": f.frame,
            "kind": f.kind,
            "fields": f.fields,
        }
    )


def decode_finding(text: str) -> Finding:
    """Return the finding in ``text``."""
    return Finding(**json.loads(text))


# --- state ------------------------------------------------------------------------------

T = TypeVar("T")
_STATES: dict[str, type] = {}
_ENUMS: dict[str, type[Enum]] = {}


def state(cls: type[T]) -> type[T]:
    """Class decorator: let a frozen dataclass or an enum take part in :func:`encode_state`."""
    name = f"{cls.__module__.rpartition('.')[2]}.{cls.__qualname__}"
    if issubclass(cls, Enum):
        _ENUMS[name] = cls
    else:
        _STATES[name] = cls
    cls.__state_name__ = name  # type: ignore[attr-defined]
    return cls


def encode_state(value: Any) -> bytes:
    """Return canonical bytes of nested dataclasses, tuples, dicts, arrays and plain values.

    Raises:
        RecordError: a value of a type that has no canonical form (a list or a set, say).
    """
    out: list[bytes] = [struct.pack("<B", STATE_VERSION)]
    _put(value, out.append)
    return b"".join(out)


def decode_state(data: bytes) -> Any:
    """Return what :func:`encode_state` was given.

    Raises:
        RecordError: another version, an unknown class, other fields, or bytes cut short.
    """
    try:
        if data[0] != STATE_VERSION:
            raise RecordError(f"state: got version {data[0]}, this program reads {STATE_VERSION}")
        value, end = _take(data, 1)
        if end != len(data):
            raise RecordError(f"state: {len(data) - end} bytes left over")
        return value
    except (struct.error, ValueError, KeyError, TypeError, IndexError) as error:
        raise RecordError(f"state of {len(data)} bytes: got {error!r}, wanted a whole state") from error


def _text(s: str) -> bytes:
    b = s.encode()
    return struct.pack("<I", len(b)) + b


def _put(v: Any, put: Callable[[bytes], None]) -> None:
    name = getattr(type(v), "__state_name__", None)
    if v is None:
        put(b"N")
    elif name is not None and isinstance(v, Enum):
        put(b"E" + _text(name))
        _put(v.value, put)
    elif name is not None:
        fields = dataclasses.fields(v)
        put(b"D" + _text(name) + struct.pack("<I", len(fields)))
        for f in fields:
            put(_text(f.name))
            _put(getattr(v, f.name), put)
    elif isinstance(v, bool):
        put(b"T" if v else b"F")
    elif isinstance(v, int):
        put(b"I" + _text(str(v)))
    elif isinstance(v, float):
        put(b"f" + struct.pack("<d", v))
    elif isinstance(v, str):
        put(b"s" + _text(v))
    elif isinstance(v, bytes):
        put(b"b" + struct.pack("<I", len(v)) + v)
    elif isinstance(v, tuple):
        put(b"t" + struct.pack("<I", len(v)))
        for item in v:
            _put(item, put)
    elif isinstance(v, Mapping):
        put(b"m" + struct.pack("<I", len(v)))
        for key in sorted(v):
            put(_text(key))
            _put(v[key], put)
    elif isinstance(v, np.ndarray):
        array = np.ascontiguousarray(v)
        put(b"a" + _text(array.dtype.str) + struct.pack("<B", v.ndim) + struct.pack(f"<{v.ndim}q", *v.shape))
        put(struct.pack("<Q", array.nbytes) + array.tobytes())
    elif isinstance(v, np.generic):
        _put(v.item(), put)
    else:
        raise RecordError(f"state: got a {type(v).__name__}, which has no canonical form")


def _take(d: bytes, at: int) -> tuple[Any, int]:
    tag, at = d[at : at + 1], at + 1
    if tag == b"N":
        return None, at
    if tag in (b"T", b"F"):
        return tag == b"T", at
    if tag == b"f":
        return struct.unpack_from("<d", d, at)[0], at + 8
    if tag == b"I":
        text, at = _take_text(d, at)
        return int(text), at
    if tag == b"s":
        return _take_text(d, at)
    if tag == b"E":
        name, at = _take_text(d, at)
        raw, at = _take(d, at)
        return _ENUMS[name](raw), at
    if tag == b"a":
        dtype, at = _take_text(d, at)
        ndim = d[at]
        shape = struct.unpack_from(f"<{ndim}q", d, at + 1)
        at += 1 + 8 * ndim
        (size,) = struct.unpack_from("<Q", d, at)
        array = np.frombuffer(d[at + 8 : at + 8 + size], np.dtype(dtype)).reshape(shape).copy()
        return array, at + 8 + size
    (count,) = struct.unpack_from("<I", d, at)
    if tag == b"b":
        return d[at + 4 : at + 4 + count], at + 4 + count
    if tag == b"t":
        at += 4
        items = []
        for _ in range(count):
            item, at = _take(d, at)
            items.append(item)
        return tuple(items), at
    if tag == b"m":
        at += 4
        mapping: dict[str, Any] = {}
        for _ in range(count):
            key, at = _take_text(d, at)
            mapping[key], at = _take(d, at)
        return mapping, at
    if tag == b"D":
        name, at = _take_text(d, at)
        (count,) = struct.unpack_from("<I", d, at)
        at += 4
        values: dict[str, Any] = {}
        for _ in range(count):
            key, at = _take_text(d, at)
            values[key], at = _take(d, at)
        return _STATES[name](**values), at
    raise RecordError(f"state: got tag {tag!r} at byte {at - 1}")


def _take_text(d: bytes, at: int) -> tuple[str, int]:
    (size,) = struct.unpack_from("<I", d, at)
    return d[at + 4 : at + 4 + size].decode(), at + 4 + size
