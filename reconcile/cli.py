"""The command line: parse, call the library, write. Commands are imported when they are used."""

from __future__ import annotations

import os
import sys
from importlib import import_module
from typing import TYPE_CHECKING, Any

import click

from reconcile import __version__
from reconcile.errors import ReconcileError

if TYPE_CHECKING:
    from collections.abc import Mapping

__all__ = ["main"]

COMMANDS: Mapping[str, str] = {
    "run": "Reduce, estimate jointly and judge; the whole answer.",
    "check": "Read and check a case; say what will be used. Computes nothing.",
    "reduce": "The reductions per measurement alone.",
    "report": "Redraw the reports of a result document.",
}
"""Command → one-line help, so that help needs no import of the commands themselves."""


class _Group(click.Group):
    """A group that knows its commands by name and imports them on use."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        del ctx
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        del ctx
        if cmd_name not in COMMANDS:
            return None
        command = getattr(import_module("reconcile.commands"), cmd_name)
        assert isinstance(command, click.Command)  # noqa: S101 - our own table
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        del ctx
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))

    def invoke(self, ctx: click.Context) -> Any:
        # the one boundary: a user's mistake is told in its own words; anything else is our defect
        try:
            return super().invoke(ctx)
        except ReconcileError as error:
            click.echo(str(error), err=True)
            ctx.exit(error.exit_code)


@click.group(
    cls=_Group,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80},
    epilog="Exit codes: 0 done; 2 usage; 3 the input cannot be used; 4 no usable estimate;"
    " 5 contradiction, where --fail-on-contradiction is given.",
)
@click.version_option(__version__, prog_name="reconcile")
@click.pass_context
def main(ctx: click.Context) -> None:
    """Molar-mass averages and dispersity from osmometry, light scattering, viscometry.

    Give a case document (TOML) that names the readings of one sample; the answer says what they
    determine together, and whether they agree.
    """
    if os.environ.get("NO_COLOR") or os.environ.get("TERM") == "dumb":
        ctx.color = False
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="replace")
