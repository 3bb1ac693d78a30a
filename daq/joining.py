"""Scans that follow each other, put together again into blocks.

Live, every scan is a fact of its own; read back one by one, each would pay for a whole turn of the chain.
Findings do not depend on how scans are cut into blocks, so what stands between two other facts of a frame
(its own, or the host's) may as well be one block. Facts of one frame and the host keep their order.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from typing import Final

import numpy as np

from daq.records import Fact, ScansTaken

BLOCK: Final = 4096
"""Most scans put together: what one chunk of the record holds."""


def joined(facts: Iterable[Fact], most: int = BLOCK) -> Iterator[Fact]:
    """Yield ``facts`` with runs of scans of the same frame, channels and boot put together."""
    waiting: dict[str, list[ScansTaken]] = {}
    held: dict[str, int] = {}
    for fact in facts:
        if not isinstance(fact, ScansTaken):
            for frame in [fact.frame] if fact.frame else list(waiting):
                yield from _release(waiting, held, frame)
            yield fact
            continue
        run = waiting.get(fact.frame, [])
        if run and (run[0].channels, run[0].boot_id) != (fact.channels, fact.boot_id):
            yield from _release(waiting, held, fact.frame)
        waiting.setdefault(fact.frame, []).append(fact)
        held[fact.frame] = held.get(fact.frame, 0) + len(fact)
        if held[fact.frame] >= most:
            yield from _release(waiting, held, fact.frame)
    for frame in list(waiting):
        yield from _release(waiting, held, frame)


def _release(waiting: dict[str, list[ScansTaken]], held: dict[str, int], frame: str) -> Iterator[ScansTaken]:
    run = waiting.pop(frame, [])
    held.pop(frame, None)
    if len(run) == 1:
        yield run[0]
    elif run:
        yield ScansTaken(
            frame,
            run[0].channels,
            run[0].boot_id,
            np.concatenate([s.utc_tick for s in run]),
            np.concatenate([s.boot_tick for s in run]),
            np.concatenate([s.values for s in run]),
            np.concatenate([s.quality for s in run]),
        )
