"""The daemon as one user, operators as others: a group marks and reads, everybody else is refused in words.

The modes are those of the issue and of STORE.md section 4, rules 2 and 8; that the kernel holds to them is
what the other users' processes show.
"""

from __future__ import annotations

import os
import shutil
import stat
import tempfile
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import pytest
from daemon_kit import MACHINE, MOUNT, Done, Forks, Who, no_traceback
from user_kit import UserBay as Bay

from daq.runtime import access_of, closed_to_group

if os.name != "posix" or os.geteuid() != 0:
    pytest.skip("allowed: needs root, to be several users", allow_module_level=True)

import grp
import pwd

pytestmark = pytest.mark.slow

GROUP, SERVICE, OPERATOR, STRANGER = "games", "daemon", "bin", "nobody"
"""Names that a Linux system has from its first day; nothing of theirs is used but the numbers."""


def user(name: str, *groups: str) -> Who:
    entry = pwd.getpwnam(name)
    return Who(entry.pw_uid, entry.pw_gid, tuple(grp.getgrnam(g).gr_gid for g in groups))


@pytest.fixture(scope="module", autouse=True)
def people() -> None:
    try:
        for name in (SERVICE, OPERATOR, STRANGER):
            pwd.getpwnam(name)
        grp.getgrnam(GROUP)
    except KeyError as error:
        pytest.skip(f"allowed: needs the system's own users and groups ({error})")


@pytest.fixture
def service() -> Who:
    return user(SERVICE, GROUP)


@pytest.fixture
def operator() -> Who:
    return user(OPERATOR, GROUP)


@pytest.fixture
def stranger() -> Who:
    return user(STRANGER)


@pytest.fixture
def place() -> Iterator[Path]:
    """A folder that everybody may pass, as /var/lib is; pytest's own is closed to other users."""
    folder = Path(tempfile.mkdtemp(prefix="rm-"))
    folder.chmod(0o755)
    try:
        yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def own(path: Path, who: Who, mode: int, group: str | None = None) -> Path:
    """A folder as a deployer makes it for the service."""
    path.mkdir(exist_ok=True)
    os.chown(path, who.uid, who.gid if group is None else grp.getgrnam(group).gr_gid)
    path.chmod(mode)
    return path


@pytest.fixture
def make_bay(forks: Forks, runtime: Path) -> Iterator[Callable[..., Bay]]:
    with ExitStack() as stack:

        def make(folder: Path, **options: Any) -> Bay:
            bay = Bay(forks, folder, runtime, **options)
            stack.callback(lambda: print(bay.log))
            stack.callback(bay.end)
            return bay

        yield make


@pytest.fixture
def shared(make_bay: Callable[..., Bay], place: Path, runtime: Path, service: Who) -> Bay:
    """A bay as README's service has it: the store's folder 2770 of the group; the daemon not yet started."""
    own(runtime, service, 0o700)
    return make_bay(own(place / "bay", service, 0o2770, GROUP), group=GROUP)


def look(path: Path) -> tuple[str, str, str]:
    """Mode, owner and group."""
    found = path.stat()
    return (
        f"{stat.S_IMODE(found.st_mode):04o}",
        pwd.getpwuid(found.st_uid).pw_name,
        grp.getgrgid(found.st_gid).gr_name,
    )


def refused(done: Done, words: str) -> None:
    """One refusal, in words: cause and what to do, and no other line."""
    no_traceback(done)
    assert done.code == 1, done.err
    assert done.out == ""
    assert words in done.err
    assert done.err.startswith("revmark: ")
    assert done.err.count("\n") == 1


def test_the_files_have_the_modes_of_the_issue(shared: Bay, service: Who) -> None:
    shared.start(who=service)
    (file,) = shared.runtime.glob("*.json")
    (socket,) = shared.runtime.glob("*.sock")
    assert stat.S_ISSOCK(socket.stat().st_mode)
    stores = {
        end: look(shared.store.with_name(shared.store.name + end)) for end in ("", "-wal", "-shm", ".lock")
    }
    assert stores == dict.fromkeys(stores, ("0660", SERVICE, GROUP))
    assert look(shared.runtime) == ("2750", SERVICE, GROUP)
    assert look(file) == ("0640", SERVICE, GROUP)
    assert look(socket) == ("0660", SERVICE, GROUP)
    assert "WARNING" not in shared.log  # the folder is as it should be
    assert shared.stop() == 0
    assert sorted(shared.runtime.iterdir()) == []


def test_without_a_group_everything_is_the_services_own(
    make_bay: Callable[..., Bay], place: Path, runtime: Path, service: Who, operator: Who
) -> None:
    own(runtime, service, 0o755)
    bay = make_bay(own(place / "bay", service, 0o755))
    bay.start(who=service)
    owner = (SERVICE, grp.getgrgid(service.gid).gr_name)
    assert look(runtime) == ("0700", *owner)
    assert {look(p) for p in runtime.iterdir()} == {("0600", *owner)}
    assert {look(p) for p in bay.folder.glob("bay.sqlite*")} == {("0600", *owner)}
    refused(bay.run("status", who=operator), "access.group")
    refused(bay.run("run", "list", "--stand", str(bay.stand), who=operator), "Permission denied")


def test_an_operator_of_the_group_mounts_marks_and_reads(shared: Bay, service: Who, operator: Who) -> None:
    shared.start(who=service)
    bob = operator
    shared.must(*MACHINE, who=bob)
    shared.must(*MOUNT, who=bob)
    assert shared.must("status", "--json", who=bob).json["mount"]["who"] == OPERATOR
    typed = shared.must("mark", "O", "--no-wait", "--operator", "Ana Ribeiro", "--json", who=bob)
    assert typed.json["mark"]["who"] == "Ana Ribeiro"
    assert shared.must("mark", "--cancel", "--json", who=bob).json["mark"]["state"] == "cancelled"
    pending = shared.must("mark", "O", "--no-wait", "--json", who=bob).json["mark"]
    assert (pending["state"], pending["who"]) == ("pending", OPERATOR)
    shared.turn()
    done = shared.must("mark", "--wait", "--json", who=bob).json
    assert (done["mark"]["state"], done["mark"]["who"]) == ("labelled", OPERATOR)
    (run,) = shared.must("run", "list", "--json", who=bob).json
    assert (run["run"], run["labels"]) == ("0142/1", ["O"])
    named = shared.must("run", "show", "0142/1", "--stand", str(shared.stand), "--json", who=bob).json
    assert named["readings"][0]["labelled_by"] == OPERATOR


def test_an_operator_reads_with_the_daemon_down_and_it_starts_again_after(
    shared: Bay, service: Who, operator: Who
) -> None:
    """After an orderly end a reader makes the files beside the store itself; after kill -9 they are there."""
    shared.start(who=service)
    shared.set_up()
    shared.a_run()
    assert shared.stop() == 0
    assert sorted(p.name for p in shared.folder.glob("bay.sqlite*")) == ["bay.sqlite", "bay.sqlite.lock"]
    named = ("run", "list", "--stand", str(shared.stand), "--json")
    (run,) = shared.must(*named, who=operator).json
    assert run["run"] == "0142/1"
    refused(shared.run("mark", "O", "--no-wait", who=operator), "revmark serve")
    shared.start(who=service)  # over what the reader left beside the store
    shared.a_run()
    shared.kill()
    assert len(shared.must(*named, who=operator).json) == 2
    shared.start(who=service)
    assert shared.must("status", "--json", who=operator).json["live"]["store"] == "ok"
    assert {look(p)[0] for p in shared.folder.glob("bay.sqlite*")} == {"0660"}


def test_a_stranger_is_refused_in_words_and_gets_nothing(shared: Bay, service: Who, stranger: Who) -> None:
    shared.start(who=service)
    fit = ("weight", "fit", "3g", "--plane", "1", "--hole", "1", "--locked-out")
    for words in (("status",), ("mark", "O", "--no-wait"), fit, ("run", "list")):
        refused(shared.run(*words, who=stranger), f"group {GROUP!r}")
        refused(shared.run(*words, "--stand", str(shared.stand), who=stranger), str(shared.stand))
    # He knows where the store is, and has the stand file's text.
    copy = shared.folder.parent / "copy.toml"
    copy.write_text(shared.stand.read_text().replace('path = "bay.sqlite"', f'path = "{shared.store}"'))
    named = ("--stand", str(copy))
    refused(shared.run("run", "list", *named, who=stranger), str(shared.store))
    refused(shared.run("store", "check", "--store", str(shared.store), who=stranger), str(shared.store))
    second = shared.run("serve", *named, who=stranger)
    no_traceback(second)
    assert second.code == 75
    assert f"{shared.store} cannot be used: Permission denied" in second.err
    (file,) = shared.runtime.glob("*.json")
    for path in (file, shared.store):
        probe = shared.fork("--version", who=stranger, patch=f"open({str(path)!r}).read()").done()
        assert "PermissionError" in probe.err


def test_a_service_outside_the_group_says_so(shared: Bay) -> None:
    done = shared.serve(who=user(SERVICE)).done()
    no_traceback(done)
    assert done.code == 78
    assert f"The daemon's user {SERVICE!r} may not give" in done.err
    assert f"usermod -aG {GROUP} {SERVICE}" in done.err


def test_a_group_that_does_not_exist_is_a_configuration_error(
    make_bay: Callable[..., Bay], place: Path, runtime: Path, service: Who
) -> None:
    own(runtime, service, 0o700)
    bay = make_bay(own(place / "bay", service, 0o2770, GROUP), group="no-such-group")
    done = bay.serve(who=service).done()
    no_traceback(done)
    assert done.code == 78
    assert "no-such-group" in done.err
    assert not bay.store.exists()


def test_a_store_folder_closed_to_the_group_is_warned_of(
    make_bay: Callable[..., Bay], place: Path, runtime: Path, service: Who
) -> None:
    """Marks go through the socket all the same; so it starts, and says what will not work."""
    own(runtime, service, 0o700)
    bay = make_bay(own(place / "bay", service, 0o700, GROUP), group=GROUP)
    bay.start(who=service)
    (warning,) = (line for line in bay.log.splitlines() if "WARNING" in line)
    assert f"chgrp {GROUP} {bay.folder} && chmod 2770 {bay.folder}" in warning


@pytest.mark.parametrize(
    ("mode", "group", "is_open"),
    [
        (0o2770, GROUP, True),
        (0o2775, GROUP, True),
        (0o700, GROUP, False),
        (0o2750, GROUP, False),  # a reader cannot make the -shm file
        (0o770, GROUP, False),  # new files get the group of who makes them
        (0o2770, SERVICE, False),
    ],
)
def test_which_store_folders_are_closed_to_the_group(
    place: Path, service: Who, mode: int, group: str, is_open: bool
) -> None:
    folder = own(place / "bay", service, mode, group)
    assert (closed_to_group(folder, access_of(GROUP)) is None) == is_open
    assert closed_to_group(folder, access_of("")) is None
