"""Fixtures of the store's tests."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest
from store_cases import quick_folder


@pytest.fixture
def folder() -> Iterator[Path]:
    """An empty folder, in memory where possible."""
    with quick_folder() as path:
        yield path


@pytest.fixture
def small_chunks(monkeypatch: pytest.MonkeyPatch) -> int:
    """Make a chunk whole at 20 scans, so that a test needs few of them."""
    monkeypatch.setattr("daq.store.chunks.CHUNK_SCANS", 20)
    return 20
