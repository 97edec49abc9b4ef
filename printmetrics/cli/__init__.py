"""The command line: parses, calls, prints and exits."""

from __future__ import annotations

import os
from importlib import import_module
from typing import Any

import click

from printmetrics._version import __version__
from printmetrics.errors import PrintmetricsError

BAD_INPUT = 2
INTERRUPTED = 130

_COMMANDS = {
    "measure": ("printmetrics.cli.measure", "Measure the pictures of a folder as a recipe says."),
    "recipe": ("printmetrics.cli.recipe", "Check a recipe, print its schema, or start a new one."),
    "demo": ("printmetrics.cli.demo", "Write a demo folder: pictures, recipe and truth."),
}
"""Module and one line of help; a module is imported when its command is called, for a quick ``--help``."""


class _Commands(click.Group):
    """Loads a command when it is called, and turns errors into exit codes in one place."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002  (click's signature)
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:  # noqa: ARG002
        if cmd_name not in _COMMANDS:
            return None
        command: click.Command = getattr(import_module(_COMMANDS[cmd_name][0]), cmd_name)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:  # noqa: ARG002
        with formatter.section("Commands"):
            formatter.write_dl([(name, about) for name, (_, about) in _COMMANDS.items()])

    def invoke(self, ctx: click.Context) -> Any:  # noqa: ANN401  (click's signature)
        if os.environ.get("NO_COLOR") or os.environ.get("TERM") == "dumb":
            ctx.color = False
        try:
            return super().invoke(ctx)
        except PrintmetricsError as error:
            click.echo(f"printmetrics: {error}", err=True)
            ctx.exit(BAD_INPUT)
        except KeyboardInterrupt:
            click.echo("printmetrics: interrupted; what was finished is on disk", err=True)
            ctx.exit(INTERRUPTED)


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="printmetrics")
def main() -> None:
    """Measure printed lines in pictures: numbers with uncertainty and verdict.

    Exit codes: 0 every picture measured; 1 some pictures failed; 2 nothing measured, the command
    or its input is wrong; 3 with --strict, a limited reading is not conforming; 130 interrupted.
    """
