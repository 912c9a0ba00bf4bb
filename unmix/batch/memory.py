"""How much memory a stretch of work took at its peak."""

from __future__ import annotations

import contextlib
from pathlib import Path
from types import TracebackType

__all__ = ["PeakMemory"]

_PROCESS = Path("/proc/self")


class PeakMemory:
    """The process's peak resident memory between entry and exit, where the kernel can tell; else `mb` stays None."""

    def __init__(self) -> None:
        self.mb: float | None = None

    def __enter__(self) -> PeakMemory:
        with contextlib.suppress(OSError):
            (_PROCESS / "clear_refs").write_text("5")  # puts the high-water mark back to what is held now
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        with contextlib.suppress(OSError, ValueError):
            words = (_PROCESS / "status").read_text().split()
            self.mb = int(words[words.index("VmHWM:") + 1]) / 1024
