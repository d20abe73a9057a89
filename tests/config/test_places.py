"""Runtime folders and remote file systems. Mount lines are in the form of proc(5), written by hand."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from config import places

MOUNTS = """\
22 27 0:21 / /proc rw,relatime - proc proc rw
27 1 254:0 / / rw,relatime - ext4 /dev/vda rw
30 27 0:40 / /mnt/office rw,relatime shared:5 - nfs4 server:/office rw,vers=4.2
31 30 8:1 / /mnt/office/local rw,relatime - ext4 /dev/sda1 rw
32 27 0:41 / /mnt/win\\040share rw - cifs //server/share rw
33 27 0:42 / /mnt/ssh rw - fuse.sshfs me@there: rw
34 27 0:43 / /mnt/merged rw - fuse.mergerfs merged rw
35 27 0:44 / /mnt/hidden rw - nfs server:/a rw
36 35 8:2 / /mnt/hidden rw - ext4 /dev/sdb1 rw
37 27 0:45 / /mnt/cloud rw - fuse.rclone there: rw
38 27 0:46 / /mnt/host rw - 9p host rw
"""


@pytest.mark.parametrize(
    ("path", "kind"),
    [
        ("/var/lib/revmark/bay.sqlite", None),
        ("/mnt/office/bay.sqlite", "nfs4"),
        ("/mnt/office/deeper/and/deeper/bay.sqlite", "nfs4"),
        ("/mnt/office/local/bay.sqlite", None),
        ("/mnt/officer/bay.sqlite", None),
        ("/mnt/win share/bay.sqlite", "cifs"),
        ("/mnt/ssh/bay.sqlite", "fuse.sshfs"),
        ("/mnt/merged/bay.sqlite", None),
        ("/mnt/hidden/bay.sqlite", None),
        ("/mnt/cloud/bay.sqlite", "fuse.rclone"),
        ("/mnt/host/bay.sqlite", "9p"),
        ("\\\\server\\share\\bay.sqlite", "UNC share"),
    ],
)
def test_the_innermost_mount_says_whether_a_folder_is_remote(path: str, kind: str | None) -> None:
    assert places.is_network_folder(path, MOUNTS) == kind


def test_a_sandbox_whose_root_is_9p_has_nothing_else_to_offer() -> None:
    mounts = "27 1 0:9 / / rw - 9p none rw\n30 27 0:40 / /mnt/a rw - 9p none rw\n"
    assert places.is_network_folder("/srv/bay.sqlite", mounts) is None
    assert places.is_network_folder("/mnt/a/bay.sqlite", mounts) == "9p"


def test_a_link_into_a_share_is_seen_through(tmp_path: Path) -> None:
    share = tmp_path / "share"
    share.mkdir()
    (tmp_path / "near").symlink_to(share)
    mounts = f"1 0 8:1 / / rw - ext4 a rw\n2 1 0:9 / {os.path.realpath(share)} rw - nfs b rw\n"
    assert places.is_network_folder(tmp_path / "near" / "bay.sqlite", mounts) == "nfs"


def test_without_mount_lines_nothing_is_called_remote() -> None:
    assert places.is_network_folder("/anywhere", "") is None


def test_the_named_runtime_folder_is_the_only_one() -> None:
    env = {"REVMARK_RUNTIME": "/a/b", "RUNTIME_DIRECTORY": "/c", "XDG_RUNTIME_DIR": "/d"}
    assert places.runtime_folders(env) == (Path("/a/b"),)
    assert places.runtime_folder_for_daemon(env) == Path("/a/b")


def test_a_service_uses_the_folder_systemd_made() -> None:
    env = {"RUNTIME_DIRECTORY": "/run/one:/run/two", "XDG_RUNTIME_DIR": "/d"}
    assert places.runtime_folder_for_daemon(env) == Path("/run/one")


def test_a_client_searches_the_service_first_then_its_user(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    env = {"XDG_RUNTIME_DIR": str(tmp_path)}
    service = tmp_path / "service"
    monkeypatch.setattr(places, "SERVICE_FOLDER", service)
    assert places.runtime_folders(env) == (tmp_path / "revmark",)
    assert places.runtime_folder_for_daemon(env) == tmp_path / "revmark"
    service.mkdir()
    assert places.runtime_folders(env) == (service, tmp_path / "revmark")
    assert places.runtime_folder_for_daemon(env) == service


def test_a_daemon_without_rights_to_the_service_folder_uses_its_own(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(places, "SERVICE_FOLDER", tmp_path)
    monkeypatch.setattr(os, "access", lambda _path, _mode: False)
    assert places.runtime_folder_for_daemon({"XDG_RUNTIME_DIR": "/d"}) == Path("/d/revmark")


def test_a_folder_of_somebody_else_is_not_searched(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(places, "SERVICE_FOLDER", tmp_path / "none")
    (tmp_path / "revmark").mkdir()
    monkeypatch.setattr(os, "getuid", lambda: (tmp_path / "revmark").stat().st_uid + 1)
    assert places.runtime_folders({"XDG_RUNTIME_DIR": str(tmp_path)}) == ()


def test_without_a_runtime_folder_of_the_session_there_is_still_one() -> None:
    assert places.user_runtime_folder({}).name == "revmark"


def test_a_client_loads_nothing_but_the_standard_library() -> None:
    code = (
        "import sys; before = set(sys.modules); import config.places, config.errors; "
        "new = {m.partition('.')[0] for m in set(sys.modules) - before} - {'config'}; "
        "print(sorted(m for m in new if m not in sys.stdlib_module_names))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
