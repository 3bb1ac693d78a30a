"""What must be there after a power cut."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from cut_disk import Disk
from kill_cases import check
from sqlite_tap import tap
from store_cases import open_journal, quick_folder

SKIP_DEAF = pytest.mark.skipif(
    tap() is None, reason="Python's SQLite is linked in; its calls cannot be heard"
)


@contextmanager
def laid_out(disk: Disk) -> Iterator[Path]:
    """A folder in memory that holds ``disk``."""
    with quick_folder() as folder:
        disk.write_to(folder / "disk")
        yield folder / "disk"


def survives(disk: Disk, acked: int, begun: int, *, replaced: bool) -> int:
    """Assert that nothing acknowledged is lost or altered on ``disk``; return the last number there."""
    with laid_out(disk) as root, open_journal(root / "j") as j:
        last = check(j, acked, replaced=replaced)
        assert last in (acked, begun), "at most the open batch is lost"
        assert replaced or not any("damaged" in notice for notice in j.notices)
    return last
