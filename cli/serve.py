"""``revmark serve``: the daemon of a stand, in the foreground."""

from __future__ import annotations

import logging
import sys

import click

from cli.output import warn
from config.onethread import one_thread


@click.command(context_settings={"max_content_width": 80})
@click.option(
    "--stand", envvar="REVMARK_STAND", metavar="FILE", required=True, help="The stand file to serve."
)
@click.option("--verbose", is_flag=True, help="Log more.")
def command(stand: str, *, verbose: bool) -> int:
    """Run the daemon of a stand, in the foreground; it logs to stderr.

    Exit codes: 0 stopped by a signal, 1 refused (a second daemon), 75 try again, 78 configuration.
    """
    one_thread()
    from config.errors import StandFileError
    from config.stand import check_stand
    from daq.daemon import CONFIGURATION, serve
    from daq.drivers.registry import options_problems
    from store.balance.cautions import SERVE

    logging.basicConfig(
        stream=sys.stderr,
        level=logging.DEBUG if verbose else logging.INFO,
        format="%(asctime)s %(levelname)-7s %(name)s: %(message)s",
    )
    for library in () if verbose else ("alembic", "uvicorn"):
        logging.getLogger(library).setLevel(logging.WARNING)
    try:
        checked = check_stand(stand, options_problems)
    except StandFileError as error:
        warn(f"revmark: {error}")
        return CONFIGURATION
    for line in SERVE:
        warn(f"caution: {line}")
    return serve(checked, ready=lambda line: warn(f"ready {line}"))
