"""``revmark store``: check, back up, restore and migrate a store. Works on the file, without the daemon."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import click

from cli.output import clean, json_option, print_json, say, stand_option

F = TypeVar("F", bound=Callable[..., Any])


def _which_store(function: F) -> F:
    """``--stand FILE`` or ``--store FILE``; neither = the store of the daemon that runs."""
    named = click.option("--store", metavar="FILE", help="The store itself, instead of a stand file.")
    return stand_option(named(function))


def _path(stand: str | None, store: str | None) -> Path:
    """The store meant; ``--store`` wins over REVMARK_STAND, but not both may be typed."""
    if store is None:
        from cli.place import store_path

        return store_path(stand)
    source = click.get_current_context().get_parameter_source("stand")
    if source is click.core.ParameterSource.COMMANDLINE:
        raise click.UsageError("Give either --stand or --store.")
    return Path(store)


@click.group(help="Check, back up, restore or migrate a store.")
def group() -> None: ...


@group.command()
@_which_store
@click.option("--quick", is_flag=True, help="Leave out the checksums of the raw samples.")
@json_option
def check(stand: str | None, store: str | None, *, quick: bool, as_json: bool) -> None:
    """Check that a store is sound. Exit code 1 when it is not."""
    from store.maintenance import check as check_store

    report = check_store(_path(stand, store), with_raw=not quick)
    if as_json:
        print_json(
            {
                "store": str(report.path),
                "schema": report.schema,
                "sound": not report.problems,
                "problems": list(report.problems),
                "rows": report.rows,
                "raw_checked": report.raw_checked,
            }
        )
    elif report.problems:
        say(f"The store {clean(report.path)} is damaged:", *(f"  {clean(p)}" for p in report.problems))
        say("Restore a backup with `revmark store restore`; the damaged store is kept.")
    else:
        say(f"The store {clean(report.path)} is sound: schema {report.schema}, {report.rows} rows.")
        say(
            "Raw samples were left out."
            if quick
            else f"Raw samples of {report.raw_checked} readings checked."
        )
    sys.exit(1 if report.problems else 0)


@group.command()
@click.argument("file", type=click.Path(path_type=Path))
@_which_store
@json_option
def backup(file: Path, stand: str | None, store: str | None, *, as_json: bool) -> None:
    """Write a checked copy of a store to FILE, also while the daemon runs."""
    from store.copies import copy_store

    made = copy_store(_path(stand, store), file)
    if as_json:
        print_json({"backup": str(made), "bytes": made.stat().st_size})
    else:
        say(f"Backup written and checked: {clean(made)} ({made.stat().st_size / 2**20:.1f} MiB).")


@group.command()
@click.argument("file", type=click.Path(path_type=Path))
@_which_store
@json_option
def restore(file: Path, stand: str | None, store: str | None, *, as_json: bool) -> None:
    """Put the backup FILE in the store's place. The old store is renamed, never deleted."""
    from daq.clock import SystemClock
    from store.maintenance import restore as restore_store

    path = _path(stand, store)
    aside = restore_store(path, file, clock=SystemClock())
    if as_json:
        print_json({"store": str(path), "old_store": None if aside is None else str(aside)})
        return
    say(f"The store {clean(path)} is now the backup {clean(file)}.")
    if aside is not None:
        say(f"The old store was kept as {clean(aside)}.")


@group.command()
@_which_store
@click.option("--list", "only_list", is_flag=True, help="Show the steps; change nothing.")
@json_option
def migrate(stand: str | None, store: str | None, *, only_list: bool, as_json: bool) -> None:
    """Bring a store to this version's schema, after a backup beside it."""
    from daq.clock import SystemClock
    from store.maintenance import list_migrations
    from store.maintenance import migrate as migrate_store

    path = _path(stand, store)
    if only_list:
        steps = list_migrations(path)
        if as_json:
            print_json([{"revision": s.revision, "text": s.text, "done": s.done} for s in steps])
        else:
            say(*(f"{s.revision}  {'done' if s.done else 'to do'}  {s.text}" for s in steps))
        return
    report = migrate_store(path, clock=SystemClock())
    if as_json:
        made = None if report.backup is None else str(report.backup)
        print_json({"store": str(path), "done": [s.revision for s in report.done], "backup": made})
    elif not report.done:
        say(f"The store {clean(path)} has this version's schema already; nothing was done.")
    else:
        say(*(f"Done: {s.revision}  {s.text}" for s in report.done))
        say(f"The store before it was kept as {clean(report.backup)}.")
