"""Commands as other users of the system, also where Python's own folders are closed to them."""

from __future__ import annotations

from typing import Any

from daemon_kit import Bay, Process, Who

BECOME = """
import os, sys

def open_folder(path):
    return f"/proc/self/fd/{os.open(path, os.O_PATH | os.O_DIRECTORY)}"

def become(uid, gid, groups):
    # Imports go on through folders opened while still root: the way there may be closed to others.
    opened = {path: open_folder(path) for path in sys.path if os.path.isdir(path)}
    def moved(path):
        root = max((p for p in opened if path.startswith(p + "/")), key=len, default=None)
        return path if root is None else opened[root] + path[len(root):]
    for module in list(sys.modules.values()):
        if isinstance(getattr(module, "__path__", None), list):
            module.__path__[:] = map(moved, module.__path__)
        if isinstance(getattr(module, "__file__", None), str):
            module.__file__ = moved(module.__file__)
    sys.path[:] = [opened.get(path, path) for path in sys.path]
    sys.path_importer_cache.clear()
    os.setgroups(groups)
    os.setgid(gid)
    os.setuid(uid)
"""


class UserBay(Bay):
    """A bay whose commands may belong to other users."""

    def fork(self, *words: str, who: Who | None = None, patch: str = "", **env: str) -> Process:
        if who is not None:
            patch = f"{BECOME}\nbecome({who.uid}, {who.gid}, {list(who.groups)})\n{patch}"
        more: dict[str, Any] = env
        return super().fork(*words, patch=patch, **more)
