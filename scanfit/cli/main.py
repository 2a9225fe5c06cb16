"""``scanfit``: the commands, and how errors leave the program."""

from __future__ import annotations

import sys
from typing import Any

import click

from scanfit import __version__
from scanfit.cli.inspect import list_plugins, report, status
from scanfit.cli.limit import limit
from scanfit.cli.point import check, point
from scanfit.cli.run import run
from scanfit.errors import ScanfitError


class _Commands(click.Group):
    """Commands in the order of a day's work, not of the alphabet."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(self.commands)


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="scanfit")
def commands() -> None:
    r"""Fit a dark-matter model to several searches taken together.

    \b
    Exit status: 0 done; 2 bad input; 3 the run folder cannot be used;
    4 a stop rule ended the scan; 5 a signal ended it (the same command carries on).
    """


for _command in (run, check, point, limit, status, report, list_plugins):
    commands.add_command(_command)


def main(arguments: list[str] | None = None) -> Any:
    """Run the command line; errors become one message and an exit status."""
    try:
        return commands.main(arguments, prog_name="scanfit", standalone_mode=True)
    except ScanfitError as error:
        click.echo(f"scanfit: {error}", err=True)
        sys.exit(error.exit_status)
