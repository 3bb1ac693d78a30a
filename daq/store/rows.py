"""What goes into a commit and what comes back: plain frozen rows."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

from daq.codec import encode_fact
from daq.records import Fact, Finding, ScansTaken


@dataclass(frozen=True, slots=True)
class EncodedFact:
    """A fact already in bytes (:func:`daq.codec.encode_fact`), so that it is encoded once.

    ``scans`` is how many it holds; with None every call of ``seal`` looks whether a chunk is whole.
    """

    frame: str
    kind: str
    data: bytes
    scans: int | None = None


def encoded(fact: Fact) -> EncodedFact:
    """Return ``fact`` in bytes, with what the journal must know beside them."""
    scans = len(fact) if isinstance(fact, ScansTaken) else 0
    return EncodedFact(fact.frame, type(fact).__name__, encode_fact(fact), scans)


@dataclass(frozen=True, slots=True)
class OutboxNew:
    """One message to publish. A message whose ``id`` was ever taken before is refused.

    An empty ``id`` makes no such claim (a retained state that is replaced by the next one).
    """

    id: str
    topic: str
    payload: bytes
    retain: bool = False
    expires_s: int | None = None


@dataclass(frozen=True, slots=True)
class OutboxRow:
    """One message that nobody has acknowledged yet."""

    seq: int
    id: str
    topic: str
    payload: bytes
    retain: bool
    expires_s: int | None


@dataclass(frozen=True, slots=True)
class Snapshot:
    """The state of one test (or of the hall) after fact ``seq``, made by version ``engine``.

    In a batch, ``seq`` None stands for the last fact of that batch.
    """

    key: str
    seq: int | None
    engine: str
    data: bytes


@dataclass(frozen=True, slots=True)
class Batch:
    """Everything that one transaction brings.

    ``acked`` are outbox sequence numbers whose delivery was acknowledged, ``aside`` those (with the reason)
    that cannot be delivered: they stay, and are offered no more. ``status`` replaces one
    JSON row per key (a test). ``inbox`` names the spool files whose entries are among ``facts``: a
    name is taken once, and a batch with a name taken before is refused as a whole.
    """

    facts: tuple[Fact | EncodedFact, ...] = ()
    findings: tuple[Finding, ...] = ()
    outbox: tuple[OutboxNew, ...] = ()
    acked: tuple[int, ...] = ()
    snapshots: tuple[Snapshot, ...] = ()
    status: Mapping[str, Any] = field(default_factory=dict)
    inbox: tuple[str, ...] = ()
    aside: tuple[tuple[int, str], ...] = ()

    def __bool__(self) -> bool:
        return bool(
            self.facts or self.findings or self.outbox or self.acked
            or self.snapshots or self.status or self.inbox or self.aside
        )  # fmt: skip


@dataclass(frozen=True, slots=True)
class Committed:
    """What a commit did: it reads as the range of the facts' sequence numbers.

    ``refused`` are ids of findings, ``undelivered`` ids of messages, that were there before.
    """

    seqs: range
    refused: tuple[str, ...] = ()
    undelivered: tuple[str, ...] = ()

    @property
    def start(self) -> int:
        return self.seqs.start

    @property
    def stop(self) -> int:
        return self.seqs.stop

    def __iter__(self) -> Iterator[int]:
        return iter(self.seqs)

    def __len__(self) -> int:
        return len(self.seqs)

    def __getitem__(self, index: int) -> int:
        return self.seqs[index]


def checksum(data: bytes, *about: str | int | None) -> bytes:
    """Return 8 bytes (BLAKE2b, RFC 7693) over a row's bytes and the plain values beside them.

    The values take part, so that a row moved under another number or name is found too.
    """
    digest = hashlib.blake2b(repr(about).encode(), digest_size=8)
    digest.update(data)
    return digest.digest()
