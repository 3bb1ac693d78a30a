"""Killed anywhere, the journal holds everything it acknowledged, in order, and nothing half done."""

from __future__ import annotations

from collections.abc import Iterator
from random import Random
from typing import Any

import pytest
from kill_cases import Order, acknowledged, check, fork_server
from store_cases import open_journal, quick_folder

SERIES = 10
"""Kills that go into one record."""
POINTS = {
    "commit.before": (1, 2, 9), "commit.after": (1, 2, 9), "checkpoint.before": (1, 3),
    "checkpoint.after": (1, 3), "seal.packed": (1, 2, 5), "seal.written": (1, 2, 5), "seal.moved": (1, 2, 5),
    "migrate.before": (1, 2), "migrate.inside": (1, 2), "migrate.after": (1, 2),
}  # fmt: skip


@pytest.fixture(scope="module")
def order() -> Iterator[Order]:
    with fork_server() as order:
        yield order


def test_kills_at_random_moments_lose_nothing_acknowledged(order: Order, faults: Any) -> None:
    """The hand that pulls the plug does not wait for a good moment; ten kills go into each record."""
    left = faults.kills - sum(map(len, POINTS.values()))
    grown = series = 0
    while left > 0:
        seed = faults.seed + series
        random = Random(seed)
        with quick_folder() as folder:
            before = 0
            for _ in range(min(SERIES, left)):
                killed = order(folder, seed=random.randrange(1 << 30), after_s=random.random() ** 2 * 0.06)
                with open_journal(folder / "j") as journal:
                    last = check(journal, acknowledged(folder))
                    assert not any("damaged" in notice for notice in journal.notices), f"seed {seed}"
                assert last >= before, f"seed {seed}"
                kept = "the open batch kept" if last > acknowledged(folder) else "acknowledged ones kept"
                faults.count(1, "at a random moment", kept if killed else "had come to its end")
                grown += last - before
                before = last
        left -= SERIES
        series += 1
    assert grown > series * SERIES, "the children must have come to write something"


@pytest.mark.parametrize(("point", "count"), [(p, n) for p, counts in POINTS.items() for n in counts])
def test_a_kill_at_a_named_point_loses_nothing_acknowledged(
    order: Order, faults: Any, point: str, count: int
) -> None:
    """The moments that matter are few and short; random kills seldom hit them."""
    with quick_folder() as folder:
        assert order(folder, seed=count, point=point, count=count), "the child must get there"
        with open_journal(folder / "j") as journal:
            last = check(journal, acknowledged(folder))
        kept = "the open batch kept" if last > acknowledged(folder) else "acknowledged ones kept"
        assert not order(folder, seed=count, commits=5)
        with open_journal(folder / "j") as journal:
            assert check(journal, acknowledged(folder)) > last
            while journal.seal(whole=False):
                pass
            check(journal, acknowledged(folder))
    faults.count(1, f"at {point}", kept)
