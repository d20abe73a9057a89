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


def _unchanged(path: Path, *, mounted: bool) -> Iterator[Stand]:
    stand = Stand(path, FakeClock())
    if mounted:
        stand.mount()
    before = dict(stand.history.counts())
    yield stand
    after = dict(stand.history.counts())
    stand.close()
    assert after == before  # a refusal that wrote something


@pytest.fixture(scope="module")
def refusing(empty_store: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Stand]:
    """One stand with nothing mounted, shared by tests of refusals; at the end no row was added."""
    folder = tmp_path_factory.mktemp("refusing")
    yield from _unchanged(Path(shutil.copy(empty_store, folder / "bay.sqlite")), mounted=False)


@pytest.fixture(scope="module")
def refusing_mounted(empty_store: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Stand]:
    """The same with F-204 mounted for job 0142."""
    folder = tmp_path_factory.mktemp("refusing")
    yield from _unchanged(Path(shutil.copy(empty_store, folder / "bay.sqlite")), mounted=True)
