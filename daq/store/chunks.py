"""Whole chunks of facts: how rows become one compressed block, and how it is read again.

A chunk holds the facts of one frame, with the facts of the whole host between them, in the order
of their sequence numbers. Consecutive scans of the frame are joined into one ``ScansTaken`` as long
as nothing of that frame or of the host lies between; the chunk remembers which scan came under
which sequence number, so that reading can begin after any of them.

Two checks, for two purposes: ``checksum`` is over the stored bytes (damage, cheap, every read), and
``content`` is over what they mean (canonical: no compression, one bit pattern for "no number"), so that
the hash chain of a file outlives a change of the packing. No I/O here.
"""

from __future__ import annotations

import hashlib
import zlib
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from daq.codec import canonical_json, decode_fact, encode_fact
from daq.records import BurstTaken, Fact, IntArray, RecordError, ScansTaken
from daq.store.rows import checksum

CHUNK_SCANS: Final = 4096
"""Scans that make a chunk whole, and the most that are joined into one block."""
CHUNK_ROWS: Final = 8192
CHUNK_BYTES: Final = 8 << 20
JOINED: Final = "joined-1"
"""Codec: scans joined and packed by ``encode_fact``."""
AS_THEY_WERE: Final = "rows-1"
"""Codec: every fact in the very bytes it was committed in; used where joining does not give back the bits."""
OTHER: Final = -1
"""Stands for the count of scans of a fact that is none."""

Row = tuple[int, bytes, Fact]
"""Sequence number, the bytes as committed, and what they say."""


@dataclass(frozen=True, slots=True)
class Chunk:
    """One chunk as stored. ``index`` and ``data`` are compressed; see the module's head."""

    frame: str
    first_seq: int
    last_seq: int
    facts: int
    scans: int
    readings: int
    first_tick: int
    last_tick: int
    codec: str
    content: bytes
    index: bytes
    data: bytes

    def checksum(self) -> bytes:
        """Return the checksum of everything stored."""
        return checksum(
            self.index + self.data, self.frame, self.first_seq, self.last_seq, self.facts, self.scans,
            self.readings, self.first_tick, self.last_tick, self.codec, self.content.hex(),
        )  # fmt: skip


@dataclass(frozen=True, slots=True)
class Record:
    """One fact of a chunk and the rows it came from: their numbers, and how many scans each had."""

    seqs: IntArray
    counts: IntArray
    fact: Fact

    def cut(self, after: int, upto: int) -> tuple[int, Fact] | None:
        """Return what came under the numbers ``after`` < seq <= ``upto``, with the last of them."""
        low = int(np.searchsorted(self.seqs, after, "right"))
        high = int(np.searchsorted(self.seqs, upto, "right"))
        if low >= high:
            return None
        last = int(self.seqs[high - 1])
        if high - low == self.seqs.size or not isinstance(self.fact, ScansTaken):
            return last, self.fact
        start = int(self.counts[:low].sum())
        return last, self.fact.cut(start, start + int(self.counts[low:high].sum()))


@dataclass(frozen=True, slots=True)
class Piece:
    """Where the bytes of one record lie in a chunk's ``data``, and the rows it came from."""

    seqs: IntArray
    counts: IntArray
    at: int
    size: int


def fullness(scans: int, rows: int, size: int) -> float:
    """Return the share of a whole chunk (1.0) that so many scans, rows or bytes make."""
    return max(scans / CHUNK_SCANS, rows / CHUNK_ROWS, size / CHUNK_BYTES)


def split(rows: Iterable[Row], frame: str) -> tuple[list[Row], float]:
    """Take from ``rows`` those that make the next chunk of ``frame``; say how full it is (1.0: whole).

    Rows of the host (frame "") are taken only where a row of the frame follows them.
    """
    taken: list[Row] = []
    waiting: list[Row] = []
    scans = size = 0
    for row in rows:
        _, data, fact = row
        if fact.frame != frame:
            waiting.append(row)
            continue
        n = len(fact) if isinstance(fact, ScansTaken) else 0
        if taken and (scans + n > CHUNK_SCANS or fullness(0, len(taken) + len(waiting), size) >= 1.0):
            return taken, 1.0
        taken += [*waiting, row]
        waiting = []
        scans += n
        size += len(data)
    return taken, fullness(scans, len(taken), size)


def pack(frame: str, rows: Sequence[Row]) -> Chunk:
    """Return the chunk of ``rows``; it has been read again and compared before it is returned."""
    joined = [_record(run) for run in _runs(rows)]
    content = content_of(joined)
    chunk = _chunk(frame, joined, JOINED, content, [encode_fact(r.fact) for r in joined])
    if content_of(unpack(chunk)) == content:
        return chunk
    # no packing may alter a bit: a value that it cannot give back stays in the bytes it came in
    plain = [_record([row]) for row in rows]
    return _chunk(frame, plain, AS_THEY_WERE, content_of(plain), [data for _, data, _ in rows])


def unpack(chunk: Chunk) -> list[Record]:
    """Return the records of a chunk.

    Raises:
        RecordError: the bytes do not hold what the chunk says.
    """
    if chunk.codec not in (JOINED, AS_THEY_WERE):
        raise RecordError(f"chunk: got codec {chunk.codec!r}, this program reads {JOINED}, {AS_THEY_WERE}")
    pieces = pieces_of(chunk.index, chunk.facts)
    if not pieces or pieces[-1].at + pieces[-1].size != len(chunk.data):
        raise RecordError(f"chunk {chunk.first_seq}: got {len(chunk.data)} bytes, wanted what its index says")
    return [Record(p.seqs, p.counts, decode_fact(chunk.data[p.at : p.at + p.size])) for p in pieces]


def pieces_of(index: bytes, facts: int) -> list[Piece]:
    """Return where each record of a chunk lies, from its index alone.

    Raises:
        RecordError: the index does not hold ``facts`` rows.
    """
    try:
        numbers = np.frombuffer(zlib.decompress(index), "<i8")
        n = int(numbers[0])
        rows, sizes, rest = numbers[1 : n + 1], numbers[n + 1 : 2 * n + 1], numbers[2 * n + 1 :]
    except (zlib.error, ValueError, IndexError) as error:
        raise RecordError(f"index of a chunk: got {error!r}") from error
    if rows.size != sizes.size or rest.size != 2 * facts or rows.sum() != facts or (rows < 1).any():
        raise RecordError(f"index of a chunk: got {rest.size} numbers, wanted {2 * facts}")
    seqs, counts = np.cumsum(rest[:facts]), rest[facts:]
    pieces = []
    row = at = 0
    for k, size in zip(rows.tolist(), sizes.tolist(), strict=True):
        pieces.append(Piece(seqs[row : row + k], counts[row : row + k], at, size))
        row, at = row + k, at + size
    return pieces


def content_of(records: Iterable[Record]) -> bytes:
    """Return the SHA-256 (FIPS 180-4) of what the records mean, however they are packed."""
    digest = hashlib.sha256()
    for record in records:
        digest.update(np.ascontiguousarray(record.seqs, "<i8").tobytes())
        digest.update(np.ascontiguousarray(record.counts, "<i8").tobytes())
        for part in _canonical(record.fact):
            digest.update(len(part).to_bytes(8, "little"))
            digest.update(part)
    return digest.digest()


def link(previous: bytes, number: int, chunk: Chunk) -> bytes:
    """Return the chain value of a chunk: SHA-256 over the one before, its place and its content."""
    place = canonical_json([number, chunk.frame, chunk.first_seq, chunk.last_seq]).encode()
    return hashlib.sha256(previous + place + chunk.content).digest()


def _canonical(fact: Fact) -> Iterator[bytes]:
    if isinstance(fact, BurstTaken):
        yield fact.why.encode()
        yield from _canonical(fact.scans)
    elif isinstance(fact, ScansTaken):
        yield canonical_json([fact.frame, fact.channels, fact.boot_id]).encode()
        yield np.ascontiguousarray(fact.utc_tick, "<i8").tobytes()
        yield np.ascontiguousarray(fact.boot_tick, "<i8").tobytes()
        values = np.where(np.isnan(fact.values), np.nan, fact.values)
        yield np.ascontiguousarray(values, "<f8").tobytes()
        yield np.ascontiguousarray(fact.quality, np.uint8).tobytes()
    else:
        yield encode_fact(fact)


def _runs(rows: Iterable[Row]) -> Iterator[list[Row]]:
    """Yield the rows that become one record each: scans of one frame, channels and boot together."""
    run: list[Row] = []
    scans = 0
    for row in rows:
        fact = row[2]
        n = len(fact) if isinstance(fact, ScansTaken) else 0
        if run and (not _alike(run[-1][2], fact) or scans + n > CHUNK_SCANS):
            yield run
            run, scans = [], 0
        run.append(row)
        scans += n
    if run:
        yield run


def _alike(a: Fact, b: Fact) -> bool:
    return (
        isinstance(a, ScansTaken)
        and isinstance(b, ScansTaken)
        and (a.frame, a.channels, a.boot_id) == (b.frame, b.channels, b.boot_id)
    )


def _record(run: list[Row]) -> Record:
    seqs = np.array([seq for seq, _, _ in run], np.int64)
    blocks = [fact for _, _, fact in run if isinstance(fact, ScansTaken)]
    if not blocks:
        return Record(seqs, np.array([OTHER], np.int64), run[0][2])
    counts = np.array([len(b) for b in blocks], np.int64)
    if len(blocks) == 1:
        return Record(seqs, counts, blocks[0])
    first = blocks[0]
    scans = ScansTaken(
        first.frame,
        first.channels,
        first.boot_id,
        np.concatenate([b.utc_tick for b in blocks]),
        np.concatenate([b.boot_tick for b in blocks]),
        np.concatenate([b.values for b in blocks]),
        np.concatenate([b.quality for b in blocks]),
    )
    return Record(seqs, counts, scans)


def _chunk(frame: str, records: list[Record], codec: str, content: bytes, parts: list[bytes]) -> Chunk:
    seqs = np.concatenate([r.seqs for r in records])
    counts = np.concatenate([r.counts for r in records])
    deltas = np.diff(seqs, prepend=0)
    rows = [r.seqs.size for r in records]
    sizes = [len(p) for p in parts]
    numbers = np.concatenate([[len(records)], rows, sizes, deltas, counts]).astype("<i8")
    scans = [r.fact for r in records if isinstance(r.fact, ScansTaken)]
    ticks = [t for s in scans if len(s) for t in (int(s.utc_tick.min()), int(s.utc_tick.max()))]
    return Chunk(
        frame=frame,
        first_seq=int(seqs[0]),
        last_seq=int(seqs[-1]),
        facts=int(seqs.size),
        scans=sum(len(s) for s in scans),
        readings=sum(s.values.size for s in scans),
        first_tick=min(ticks, default=0),
        last_tick=max(ticks, default=0),
        codec=codec,
        content=content,
        index=zlib.compress(numbers.tobytes(), 6),
        data=b"".join(parts),
    )
