"""A progress bar that shows itself only once it is plain that a job takes its time."""

from __future__ import annotations

import threading
import time

from rich.console import Console
from rich.progress import BarColumn, Progress, ProgressColumn, Task, TextColumn
from rich.text import Text

__all__ = ["Bar"]

PATIENCE_S = 2.0
"""Anything that takes longer shows a bar."""


class _Time(ProgressColumn):
    """Time left, or the time gone by while nobody can say."""

    max_refresh = 0.5

    def __init__(self, began: float) -> None:
        super().__init__()
        self._began = began

    def render(self, task: Task) -> Text:
        if task.total is None or task.time_remaining is None:
            return Text(f"{_clock(time.monotonic() - self._began)} so far")
        return Text(f"{task.percentage:3.0f} %  {_clock(task.time_remaining)} left")


def _clock(seconds: float) -> str:
    minutes, rest = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02}:{rest:02}" if hours else f"{minutes}:{rest:02}"


class Bar:
    """Takes the share done and draws it on standard error, with the time left."""

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

    def report(self, share: float, label: str | None = None) -> None:
        """Take the share done, 0 to 1, and what to write before the bar from now on."""
        self._share = share
        self._label = self._label if label is None else label
        elapsed = time.monotonic() - self._began
        if self._shown is None and elapsed > 0.25 * PATIENCE_S and elapsed > PATIENCE_S * share:
            self._show()
        if self._shown is not None:
            self._shown.update(self._shown.task_ids[0], completed=share, total=1.0, description=self._label)

    def stop(self) -> None:
        """Take the bar away."""
        self._timer.cancel()
        with self._lock:
            self._over = True
            if self._shown is not None:
                self._shown.stop()

    def _show(self) -> None:
        with self._lock:
            if self._over or self._shown is not None:
                return
            shown = Progress(
                TextColumn("{task.description}"),
                BarColumn(bar_width=32),
                _Time(self._began),
                console=Console(stderr=True),
                transient=True,
            )
            shown.add_task(self._label, total=None if self._share is None else 1.0)
            shown.start()
            self._shown = shown
