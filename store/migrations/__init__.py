"""The schema's history. Run by ``store.maintenance`` and ``store.database.create_store``, never on opening.

A released store's revision is in KNOWN; a test holds it against the files in ``versions``.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from pathlib import Path
from typing import Any

KNOWN = ("0001", "0002")
"""Revisions in order; the last is what this software reads and writes."""
HEAD = KNOWN[-1]
SCRIPTS = Path(__file__).parent


def statements(path: Path) -> Iterator[str]:
    """The statements of an SQL file one by one; ``executescript`` would commit before it begins."""
    pending = ""
    for line in path.read_text(encoding="utf-8").splitlines(keepends=True):
        pending += line
        if sqlite3.complete_statement(pending):
            yield pending.strip()
            pending = ""
    if pending.strip():
        raise ValueError(f"{path.name} ends in the middle of a statement")


def configuration(scripts: Path = SCRIPTS, **attributes: Any) -> Any:
    """Alembic's configuration for a folder of migrations, without any file of settings."""
    from alembic.config import Config

    config = Config(attributes=attributes)
    config.set_main_option("script_location", str(scripts).replace("%", "%%"))
    config.set_main_option("path_separator", "os")
    return config
