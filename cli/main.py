"""``revmark``: the commands, loaded only when they are used.

The table below holds each command's module and its line of help, so that ``--help`` imports none of them.
"""

from __future__ import annotations

import importlib
import os
import sys
from typing import NoReturn

import click

from config.errors import RevmarkError
from config.version import __version__

COMMANDS: dict[str, tuple[str, str]] = {
    "coefficient": ("cli.coefficient:group", "Influence coefficients of past jobs."),
    "correction": ("cli.correction:command", "The correction weights, in real holes, and what they leave."),
    "demo": ("cli.demo:command", "A whole balance job by itself, on the simulated stand."),
    "driver": ("cli.driver:group", "Drivers, what is connected, and the rules they keep."),
    "job": ("cli.job:group", "Jobs: one visit of one machine to the stand."),
    "machine": ("cli.machine:group", "Machines and their models."),
    "mark": ("cli.mark:command", "Label a run's reading: O, O+T, check, trim, slow-roll."),
    "mount": ("cli.mount:command", "Say which machine stands on the stand, and how."),
    "plot": ("cli.plot:group", "Pictures of a job."),
    "replay": ("cli.replay:command", "Measure a recording, without a daemon and a store."),
    "run": ("cli.run:group", "Runs and their readings."),
    "serve": ("cli.serve:command", "Run the daemon of a stand, in the foreground."),
    "sim": ("cli.sim:group", "Work the simulated rotor, or the next recording."),
    "stand": ("cli.stand:group", "Make and check stand files."),
    "status": ("cli.status:command", "What the stand does now, and what it waits for."),
    "store": ("cli.store:group", "Check, back up, restore or migrate a store."),
    "weight": ("cli.weight:group", "Weights: advice, fitted, removed, drilled."),
}

HELP_COLUMNS = 78
"""Said, because Click would import shutil to ask the terminal for it, and --help shall come at once."""
EPILOG = (
    "Exit codes: 0 done, 1 refused or failed, 2 typed wrong; serve also 75 (try again), 78 (configuration). "
    "revmark logs and computes; it is no machine protection system."
)


class LazyGroup(click.Group):
    """A group whose commands are imported when they are asked for (Click's manual, "Lazily Loading")."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002
        return sorted(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:  # noqa: ARG002
        if cmd_name not in COMMANDS:
            return None
        module, _, name = COMMANDS[cmd_name][0].partition(":")
        command: click.Command = getattr(importlib.import_module(module), name)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, COMMANDS[name][1]) for name in self.list_commands(ctx)])

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and args[0] not in COMMANDS and not args[0].startswith("-"):
            import difflib

            near = difflib.get_close_matches(args[0], COMMANDS, 1)
            hint = f" Did you mean {near[0]!r}?" if near else ""
            raise click.UsageError(f"There is no command {args[0]!r}.{hint}", ctx)
        return super().resolve_command(ctx, args)


@click.group(cls=LazyGroup, epilog=EPILOG, context_settings={"terminal_width": HELP_COLUMNS})
@click.version_option(__version__, prog_name="revmark")
def revmark() -> None:
    """Log balancing runs on a test stand and compute corrections from them."""


def main(arguments: list[str] | None = None) -> None:
    """The script ``revmark``: prints each expected failure as cause and next step, never a traceback."""
    try:
        code = revmark.main(args=arguments, standalone_mode=False, prog_name="revmark")
    except click.exceptions.Abort:
        click.echo("Given up; nothing more was done.", err=True)
        sys.exit(1)
    except click.ClickException as error:
        error.show()
        sys.exit(error.exit_code)
    except RevmarkError as error:
        click.echo(f"revmark: {error}", err=True)
        sys.exit(1)
    except BrokenPipeError:
        _give_up_output()
    except OSError as error:
        _give_up_output(f"revmark: the output cannot be written: {error.strerror or error}")
    sys.exit(code if isinstance(code, int) else 0)


def _give_up_output(why: str = "") -> NoReturn:
    """End with 1; what Python would still flush goes nowhere."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    if why:
        click.echo(why, err=True)
    sys.exit(1)


if __name__ == "__main__":
    main()
