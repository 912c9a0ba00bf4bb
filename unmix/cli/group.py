"""The group of commands: its help page needs no command's module."""

from __future__ import annotations

import difflib
import importlib
from typing import Any

import click

from unmix.cli.commands import COMMANDS
from unmix.version import __version__

__all__ = ["unmix"]


class LazyGroup(click.Group):
    """Imports a command's module when it is invoked, and takes its one-line help from the table until then."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """The names, in the table's order."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """The command, imported now."""
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = importlib.import_module(f"unmix.cli.{cmd_name}").command
        return command

    def resolve_command(self, ctx: click.Context, args: list[str]) -> tuple[Any, Any, list[str]]:
        """As usual; an unknown name is told the nearest known one."""
        if args and args[0] not in COMMANDS and not args[0].startswith("-"):
            near = difflib.get_close_matches(args[0], COMMANDS, n=1)
            hint = f"did you mean {near[0]!r}?" if near else f"commands: {', '.join(COMMANDS)}"
            ctx.fail(f"there is no command {args[0]!r}; {hint}")
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """The table of commands."""
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


@click.group(
    cls=LazyGroup,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    epilog="Start with `unmix demo`. `unmix COMMAND --help` says what a command takes and writes.",
)
@click.version_option(__version__, prog_name="unmix", message="%(prog)s %(version)s")
def unmix() -> None:
    """Separate the talkers of a small microphone array's recording, and prove how much clearer each became."""
