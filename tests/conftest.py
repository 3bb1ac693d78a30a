"""What all tests share."""

from __future__ import annotations

import os
from pathlib import Path

# as the command line does, and before numpy is imported: small matrices gain nothing from threads
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import pytest

MEASURED = Path(__file__).parents[2] / "shared" / "data"


@pytest.fixture(scope="session")
def measured() -> Path:
    """Folder of measured curves beside the checkout; tests that need it skip where it is absent."""
    if not MEASURED.is_dir():
        pytest.skip(f"no measured curves in {MEASURED}")
    return MEASURED
