"""Real daemons: one process that forks them quickly for all tests here, and a folder for each."""

from __future__ import annotations

import shutil
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


@pytest.fixture(scope="session")
def prepared(forks: Forks, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """Two stores that a real daemon made: an empty one, and one with machine F-204 mounted."""
    folder = tmp_path_factory.mktemp("prepared")
    stores = {name: folder / f"{name}.sqlite" for name in ("empty", "mounted")}
    with pytest.MonkeyPatch.context() as patch, short_folder() as runtime:
        patch.setenv("REVMARK_RUNTIME", str(runtime))
        patch.delenv("REVMARK_STAND", raising=False)
        with a_bay(forks, folder, runtime) as made:
            for name, act in (("empty", lambda: None), ("mounted", made.set_up)):
                made.start()
                act()
                assert made.stop() == 0
                shutil.copy(made.store, stores[name])
    return stores


@pytest.fixture
def bay(make_bay: Callable[..., Bay], prepared: dict[str, Path]) -> Bay:
    """A stand with its daemon running and nothing mounted."""
    made = make_bay()
    shutil.copy(prepared["empty"], made.store)
    made.start()
    return made


@pytest.fixture
def mounted(make_bay: Callable[..., Bay], prepared: dict[str, Path]) -> Bay:
    """A stand with its daemon running and machine F-204 mounted, clean, for job 0142."""
    made = make_bay()
    shutil.copy(prepared["mounted"], made.store)
    made.start()
    return made
