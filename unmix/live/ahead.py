"""Changes of bearings prepared beside the audio: designing filters takes many chunks' time, applying them hardly any.

One change at a time is prepared in a thread; of those asked for meanwhile the last is kept. Which sample a change
begins with then depends on the machine; whoever wants the same output every time waits instead.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from unmix.scene import Talker

__all__ = ["Ahead", "Prepared"]

Change = Callable[[], None]
"""Makes a prepared change; takes next to no time."""


@dataclass(frozen=True)
class Prepared:
    """A change for talkers, asked for at a time in seconds: how to make it, or why it cannot be made."""

    talkers: tuple[Talker, ...]
    at_s: float
    change: Change | None = None
    error: Exception | None = None


class Ahead:
    """Prepares changes in a thread; `ready` hands them over between two chunks."""

    def __init__(self, prepare: Callable[[Sequence[Talker]], Change]) -> None:
        self._prepare = prepare
        self._lock = threading.Lock()
        self._asked: Prepared | None = None
        self._doing: Prepared | None = None
        self._done: Prepared | None = None
        self._thread: threading.Thread | None = None

    @property
    def asked(self) -> tuple[Talker, ...] | None:
        """The newest talkers asked for and not handed over yet."""
        with self._lock:
            newest = self._asked or self._doing or self._done
        return None if newest is None else newest.talkers

    def ask(self, talkers: Sequence[Talker], at_s: float) -> None:
        """Prepare a change, after the one that is being prepared."""
        with self._lock:
            self._asked = Prepared(tuple(talkers), at_s)
            if self._doing is None:
                self._begin()

    def ready(self) -> Prepared | None:
        """A change that has been prepared since, once; returns at once."""
        with self._lock:
            done, self._done = self._done, None
        return done

    def rest(self) -> Prepared | None:
        """The last change asked for, waited for; None when nothing is left."""
        while (thread := self._thread) is not None and self._busy():
            thread.join()
        return self.ready()

    def forget(self) -> None:
        """Drop whatever is asked for."""
        with self._lock:
            self._asked = None
        self.rest()

    def _busy(self) -> bool:
        with self._lock:
            return self._doing is not None

    def _begin(self) -> None:
        """Start on what was asked for last; the lock is held."""
        self._doing, self._asked = self._asked, None
        if self._doing is not None:
            self._thread = threading.Thread(target=self._work, args=(self._doing,), daemon=True, name="unmix-ahead")
            self._thread.start()

    def _work(self, task: Prepared) -> None:
        try:
            done = Prepared(task.talkers, task.at_s, self._prepare(task.talkers))
        except Exception as error:  # noqa: BLE001  raised again where the audio is: a thread has nobody to tell
            done = Prepared(task.talkers, task.at_s, error=error)
        with self._lock:
            self._done = done
            self._begin()
