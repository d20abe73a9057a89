"""A store on real SQLite with a clock of its own, and the rotor of METHODS' examples on the stand."""

from __future__ import annotations

import shutil
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from store.database import create_store

sys.path.insert(0, str(Path(__file__).parent))  # for store_kit, also in subprocesses' code

from store_kit import FakeClock, Stand


@pytest.fixture
def clock() -> FakeClock:
    return FakeClock()


@pytest.fixture(scope="session")
def empty_store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Made once by the real migration; each test gets its own copy."""
    path = tmp_path_factory.mktemp("empty") / "bay.sqlite"
    create_store(path, clock=FakeClock(), software="revmark test")
    return path


@pytest.fixture
def store_path(empty_store: Path, tmp_path: Path) -> Path:
    return Path(shutil.copy(empty_store, tmp_path / "bay.sqlite"))


@pytest.fixture
def stand(store_path: Path, clock: FakeClock) -> Iterator[Stand]:
    """An open ledger and history with a set-up and the machine F-204 of model KR-22."""
    stand = Stand(store_path, clock)
    yield stand
    stand.close()
