"""What tests of faults share: their row in the table, and a folder on a file system without a disk behind it."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from faults.table import ROW

Tell = Callable[[str, int, str], None]


@pytest.fixture
def tell(record_property: Callable[[str, object], None]) -> Tell:
    """Leave a row for the table at the end of the run: ``tell(fault, times tried, what came of it)``."""

    def put(fault: str, tried: int, what: str) -> None:
        record_property(ROW, [fault, tried, what])

    return put


@pytest.fixture
def fast(tmp_path: Path) -> Iterator[Path]:
    """A folder in memory where there is one: thousands of syncs would wait for a disk."""
    if not os.access("/dev/shm", os.W_OK):
        yield tmp_path
        return
    folder = Path(tempfile.mkdtemp(dir="/dev/shm", prefix="fieldnav-test-"))
    yield folder
    shutil.rmtree(folder)
