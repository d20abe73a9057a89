"""A store deleted or replaced while it is open acknowledges nothing more."""

from __future__ import annotations

import shutil
import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parent))

from store_kit import FakeClock

from config.errors import StoreError
from store.database import create_store
from store.ledger import Ledger


@pytest.mark.parametrize("replaced", [False, True])
def test_nothing_is_acknowledged_into_a_store_that_is_gone(tmp_path, replaced):
    path, clock = tmp_path / "bay.sqlite", FakeClock()
    create_store(path, clock=clock, software="test")
    with Ledger.open(path, clock=clock, software="test") as ledger:
        ledger.note_event("test", "kept")
        copy = shutil.copy(path, tmp_path / "copy.sqlite")
        path.unlink()
        if replaced:
            Path(copy).rename(path)
        with pytest.raises(StoreError, match="deleted or replaced") as raised:
            ledger.note_event("test", "not kept")
        assert raised.value.kind == "missing"
