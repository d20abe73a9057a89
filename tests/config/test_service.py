"""The systemd unit: what issue 2 and STORE.md section 4 ask of folders, modes and restarts."""

from __future__ import annotations

import shutil
import subprocess
from pathlib import Path

import pytest

from config import places

UNIT = Path(places.__file__).parent / "service" / "revmark.service"


def keys(section: str) -> dict[str, list[str]]:
    """Values of each key of a section; systemd allows a key several times."""
    found: dict[str, list[str]] = {}
    inside = ""
    for line in UNIT.read_text(encoding="utf-8").splitlines():
        if line.startswith("["):
            inside = line.strip("[]")
        elif line and not line.startswith("#") and inside == section:
            key, equals, value = line.partition("=")
            assert equals, line
            found.setdefault(key, []).append(value)
    return found


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("Type", "notify"),  # issue 3, point 6
        ("NotifyAccess", "main"),
        ("WatchdogSec", "10"),
        ("RuntimeDirectory", "revmark"),
        ("RuntimeDirectoryMode", "2750"),  # issue 2, point 8
        ("StateDirectory", "revmark"),
        ("StateDirectoryMode", "2770"),  # issue 2, point 8
        ("UMask", "0007"),
        ("Restart", "on-failure"),
        ("RestartSec", "2"),  # with it a replugged device that needs a new process is back within 10 s
        ("RestartPreventExitStatus", "78"),  # HOUSE.md: 78 = configuration
        ("KillSignal", "SIGTERM"),
        ("User", "revmark"),
        ("Group", "revmark"),
        ("NoNewPrivileges", "yes"),
        ("ProtectSystem", "strict"),
    ],
)
def test_the_service(key: str, value: str) -> None:
    assert keys("Service")[key] == [value]


def test_the_setgid_bit_of_its_folders_is_not_forbidden() -> None:
    assert "RestrictSUIDSGID" not in keys("Service")


def test_its_runtime_folder_is_the_one_clients_search() -> None:
    assert Path("/run") / keys("Service")["RuntimeDirectory"][0] == places.SERVICE_FOLDER


def test_it_runs_the_only_script_in_the_foreground() -> None:
    (command,) = keys("Service")["ExecStart"]
    assert command.split()[0].endswith("/bin/revmark")
    assert command.split()[1:3] == ["serve", "--stand"]
    assert "LANG=C.UTF-8" in keys("Service")["Environment"]
    assert int(keys("Service")["TimeoutStopSec"][0]) >= 10
    assert keys("Install")["WantedBy"] == ["multi-user.target"]


def test_systemd_itself_finds_no_unknown_key() -> None:
    tool = shutil.which("systemd-analyze")
    if tool is None:
        pytest.skip("allowed: no systemd-analyze on this machine")
    done = subprocess.run(
        [tool, "verify", str(UNIT)], capture_output=True, text=True, timeout=60, check=False
    )
    complaints = [line for line in done.stderr.splitlines() if "revmark.service" in line]
    assert [line for line in complaints if "is not executable" not in line] == []
