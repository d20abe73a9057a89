"""Real daemons: one process that forks them quickly for all tests here, and a folder for each."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import pytest

sys.path.insert(0, str(Path(__file__).parent))  # for daemon_kit

from daemon_kit import Bay, Forks, a_bay, short_folder


@pytest.fixture(scope="session")
def forks(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Forks]:
    made = Forks(tmp_path_factory.mktemp("bytecode"))
    yield made
    made.close()


@pytest.fixture
def runtime(monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """The runtime folder of all daemons of a test; the client in this process looks there too."""
    with short_folder() as folder:
        monkeypatch.setenv("REVMARK_RUNTIME", str(folder))
        monkeypatch.delenv("REVMARK_STAND", raising=False)
        yield folder


@pytest.fixture
def make_bay(forks: Forks, runtime: Path, tmp_path: Path) -> Iterator[Callable[..., Bay]]:
    """Bays with options of the test's own; all end with the test."""
    with ExitStack() as stack:

        def make(folder: Path = tmp_path, **options: Any) -> Bay:
            return stack.enter_context(a_bay(forks, folder, runtime, **options))

        yield make


@pytest.fixture
def bay(make_bay: Callable[..., Bay]) -> Bay:
    """A stand with its daemon running and nothing mounted."""
    made = make_bay()
    made.start()
    return made


@pytest.fixture
def mounted(bay: Bay) -> Bay:
    """A stand with its daemon running and machine F-204 mounted, clean, for job 0142."""
    bay.set_up()
    return bay
