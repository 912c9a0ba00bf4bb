"""What the commands share: options, output for people and for scripts, progress."""

from __future__ import annotations

import contextlib
import json
import shutil
import sys
import textwrap
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

if TYPE_CHECKING:
    from rich.table import Table

__all__ = [
    "consent_line",
    "existing_file",
    "json_option",
    "overwrite_option",
    "print_json",
    "print_table",
    "progress_bar",
    "say",
    "scene_argument",
]

Decorated = TypeVar("Decorated", bound=Callable[..., Any])

PIPE_WIDTH = 160
PROSE_WIDTH = 100

json_option: Callable[[Decorated], Decorated] = click.option(
    "--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else."
)
overwrite_option: Callable[[Decorated], Decorated] = click.option(
    "--overwrite", is_flag=True, help="Replace files that exist already."
)
existing_file = click.Path(path_type=Path)
"""A path; that it exists is checked by the loaders, whose messages say more."""


def scene_argument(command: Decorated) -> Decorated:
    """The scene file that a command takes first."""
    return click.argument("scene", metavar="SCENE", type=existing_file)(command)


def print_json(tree: dict[str, Any]) -> None:
    """Print one JSON object on standard output; NaN and infinity are refused, as JSON has neither."""
    click.echo(json.dumps(tree, indent=2, allow_nan=False, ensure_ascii=False))


def print_table(table: Table) -> None:
    """Print a table on standard output; into a pipe or a file it is wide enough that little is folded."""
    from rich.console import Console

    if sys.stdout.isatty():
        Console(highlight=False).print(table)
        return
    out = Console(highlight=False, width=PIPE_WIDTH, color_system=None)
    with out.capture() as captured:
        out.print(table)
    click.echo("\n".join(line.rstrip() for line in captured.get().splitlines()))


def say(text: str = "") -> None:
    """Print a sentence on standard output; on a terminal it is folded between words."""
    if sys.stdout.isatty():
        width = min(shutil.get_terminal_size().columns, PROSE_WIDTH)
        indent = text[: len(text) - len(text.lstrip())]
        text = textwrap.fill(text, width, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False)
    click.echo(text)


def consent_line(loudest: str | None = None) -> str:
    """The cautions, in the one line that every command prints after writing voices."""
    level = f"; the loudest is {loudest}" if loudest else ""
    return (
        f"Voices: have people's consent and follow local law. Start listening quietly{level}. "
        "Engineering figures, no clinical assessment."
    )


@contextlib.contextmanager
def progress_bar(label: str) -> Iterator[Callable[..., None]]:
    """A function that takes the share done, 0 to 1, and shows it with the time left on standard error.

    It takes another label, too, as a second argument.

    Nothing is shown when standard error is no terminal, nor for anything that takes under two seconds.
    """
    if not sys.stderr.isatty():
        yield lambda share, label=None: None
        return
    from unmix.cli.bar import Bar

    bar = Bar(label)
    try:
        yield bar.report
    finally:
        bar.stop()
