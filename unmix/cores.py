"""How many threads a process may start for its own work."""

from __future__ import annotations

import os

__all__ = ["THREADS_VARIABLE", "usable_cores", "usable_threads"]

THREADS_VARIABLE = "UNMIX_NUM_THREADS"
"""Environment variable that bounds the threads; set to 1 for processes that share the cores among themselves."""


def usable_cores() -> int:
    """Cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def usable_threads() -> int:
    """The number that the environment sets, else one for each core; what is no whole number above 0 counts as unset."""
    said = os.environ.get(THREADS_VARIABLE, "")
    return int(said) if said.isdecimal() and int(said) > 0 else usable_cores()
