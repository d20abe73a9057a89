"""Where things are: the folders of the runtime file, and whether a folder lies on another machine.

Standard library only when imported, for the client's short start; platformdirs is loaded when it is needed.
"""

from __future__ import annotations

import os
import re
import sys
from collections.abc import Mapping
from pathlib import Path, PureWindowsPath

SERVICE_FOLDER = Path("/run/revmark")
"""RuntimeDirectory of the systemd unit in config/service."""

# fmt: off
REMOTE_TYPES = frozenset({
    "9p", "afs", "beegfs", "ceph", "cifs", "coda", "davfs", "gfs2", "glusterfs", "gpfs", "lustre", "ncpfs",
    "nfs", "nfs4", "ocfs2", "orangefs", "prl_fs", "pvfs2", "smb3", "smbfs", "sshfs", "vboxsf", "vmhgfs",
})
"""Types of file system that another machine (or a virtual machine's host) serves: the store's shared memory
does not work there. With the prefix ``fuse.`` they count as well, and so do those below."""
REMOTE_FUSE = frozenset({
    "ceph-fuse", "curlftpfs", "davfs2", "gcsfuse", "goofys", "google-drive-ocamlfuse", "gvfsd-fuse",
    "onedriver", "rclone", "s3fs", "vmhgfs-fuse",
})
# fmt: on


def runtime_folders(env: Mapping[str, str] = os.environ) -> tuple[Path, ...]:
    """The folders in which a client looks for a running daemon, in order; they need not exist.

    REVMARK_RUNTIME alone when it is set, else the service's folder and the user's own. A folder of the
    user's that belongs to somebody else is left out: its runtime file could name a false daemon.
    """
    if env.get("REVMARK_RUNTIME"):
        return (Path(env["REVMARK_RUNTIME"]),)
    found = [SERVICE_FOLDER] if SERVICE_FOLDER.is_dir() else []
    own = user_runtime_folder(env)
    if _is_ours(own):
        found.append(own)
    return tuple(found)


def runtime_folder_for_daemon(env: Mapping[str, str] = os.environ) -> Path:
    """The folder in which a daemon puts its runtime file and socket; it need not exist yet.

    REVMARK_RUNTIME, else systemd's RUNTIME_DIRECTORY, else the service's folder where this user may
    write, else the user's own.
    """
    if env.get("REVMARK_RUNTIME"):
        return Path(env["REVMARK_RUNTIME"])
    if env.get("RUNTIME_DIRECTORY"):
        return Path(env["RUNTIME_DIRECTORY"].split(":")[0])
    if SERVICE_FOLDER.is_dir() and os.access(SERVICE_FOLDER, os.W_OK):
        return SERVICE_FOLDER
    return user_runtime_folder(env)


def user_runtime_folder(env: Mapping[str, str] = os.environ) -> Path:
    """``revmark`` in the user's own runtime folder (XDG_RUNTIME_DIR where it is set)."""
    if sys.platform != "win32" and env.get("XDG_RUNTIME_DIR"):
        return Path(env["XDG_RUNTIME_DIR"]) / "revmark"
    import warnings

    import platformdirs

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # that the session has no runtime folder is what is asked for here
        return platformdirs.user_runtime_path("revmark", appauthor=False)


def _is_ours(folder: Path) -> bool:
    """True for a folder of this user, or one that is not there yet."""
    if not hasattr(os, "getuid"):
        return True
    try:
        return folder.stat().st_uid == os.getuid()
    except OSError:
        return True


def is_network_folder(path: str | os.PathLike[str], mountinfo: str | None = None) -> str | None:
    """The type of the remote file system that holds ``path`` (``nfs4``, ``cifs``, ...); None for a local one.

    ``path`` need not exist. ``mountinfo``: text in the form of /proc/self/mountinfo; None = read it.
    Drive letters mapped to a share are recognised on Windows only (this branch was never run).
    """
    if PureWindowsPath(path).drive.startswith("\\\\"):
        return "UNC share"
    if sys.platform == "win32":
        return _remote_drive(Path(path))
    if mountinfo is None:
        mountinfo = _read_mountinfo()
    return _remote_type(Path(os.path.realpath(path)), mountinfo)


def _read_mountinfo() -> str:
    try:
        return Path("/proc/self/mountinfo").read_text(errors="surrogateescape")
    except OSError:
        return ""


def _remote_type(path: Path, mountinfo: str) -> str | None:
    """The innermost mount's type when it is remote; of mounts at one place the last hides the others."""
    inner, kind = Path(), ""
    for line in mountinfo.splitlines():
        fields, _, rest = line.partition(" - ")
        parts = fields.split()
        if len(parts) < 5 or not rest:
            continue
        place = Path(_unescape(parts[4]))
        if path.is_relative_to(place) and len(place.parts) >= len(inner.parts):
            inner, kind = place, rest.split()[0]
    return kind if _is_remote(kind, inner) else None


def _is_remote(kind: str, place: Path) -> bool:
    if kind == "9p" and place == Path("/"):
        return False  # the root of some sandboxes: the host's own disk, and nothing else to choose
    name = kind.removeprefix("fuse.")
    return name in REMOTE_TYPES or (kind.startswith("fuse.") and name in REMOTE_FUSE)


def _unescape(text: str) -> str:
    r"""Mount points write space, tab, newline and backslash as ``\040`` and so on."""
    return re.sub(r"\\([0-7]{3})", lambda found: chr(int(found[1], 8)), text)


def _remote_drive(path: Path) -> str | None:
    """GetDriveType of the drive: 4 is a network drive."""
    if sys.platform == "win32":
        import ctypes

        if ctypes.windll.kernel32.GetDriveTypeW(path.resolve().drive + "\\") == 4:
            return "network drive"
    return None
