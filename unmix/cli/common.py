"""What the commands share: options, output for people and for scripts, progress."""

from __future__ import annotations

import contextlib
import json
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

if TYPE_CHECKING:
    from rich.console import Console
    from rich.progress import Progress

__all__ = [
    "consent_line",
    "console",
    "existing_file",
    "json_option",
    "overwrite_option",
    "print_json",
    "progress_bar",
    "scene_argument",
]

Decorated = TypeVar("Decorated", bound=Callable[..., Any])

PATIENCE_S = 2.0
"""Anything that takes longer shows a progress bar."""
PIPE_WIDTH = 160

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


def console() -> Console:
    """Standard output for tables; into a pipe or a file it is wide enough that nothing is folded."""
    from rich.console import Console

    return Console(highlight=False, width=None if sys.stdout.isatty() else PIPE_WIDTH)


def consent_line(loudest: str | None = None) -> str:
    """The cautions, in the one line that every command prints after writing voices."""
    level = f"; the loudest is {loudest}" if loudest else ""
    return (
        f"Voices: have people's consent and follow local law. Start listening quietly{level}. "
        "Engineering figures, no clinical assessment."
    )


@contextlib.contextmanager
def progress_bar(label: str) -> Iterator[Callable[[float], None]]:
    """A function that takes the share done, 0 to 1, and shows it with the time left on standard error.

    Nothing is shown when standard error is no terminal, nor for anything that takes under two seconds.
    """
    if not sys.stderr.isatty():
        yield lambda share: None
        return
    bar = _Bar(label)
    try:
        yield bar.report
    finally:
        bar.stop()


class _Bar:
    """A progress bar that shows itself only once it is plain that the job takes longer than `PATIENCE_S`."""

    def __init__(self, label: str) -> None:
        self._label = label
        self._began = time.monotonic()
        self._share: float | None = None
        self._lock = threading.Lock()
        self._shown: Progress | None = None
        self._over = False
        self._timer = threading.Timer(PATIENCE_S, self._show)
        self._timer.daemon = True
        self._timer.start()

    def report(self, share: float) -> None:
        """Take the share done."""
        self._share = share
        elapsed = time.monotonic() - self._began
        if self._shown is None and elapsed > 0.25 * PATIENCE_S and elapsed > PATIENCE_S * share:
            self._show()
        if self._shown is not None:
            self._shown.update(self._shown.task_ids[0], completed=share, total=1.0)

    def stop(self) -> None:
        """Take the bar away."""
        self._timer.cancel()
        with self._lock:
            self._over = True
            if self._shown is not None:
                self._shown.stop()

    def _show(self) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn

        with self._lock:
            if self._over or self._shown is not None:
                return
            self._shown = Progress(
                TextColumn("{task.description}"),
                BarColumn(bar_width=32),
                TaskProgressColumn(),
                TimeRemainingColumn(compact=True),
                TextColumn("left"),
                console=Console(stderr=True),
                transient=True,
            )
            self._shown.add_task(self._label, total=None if self._share is None else 1.0)
            self._shown.start()
