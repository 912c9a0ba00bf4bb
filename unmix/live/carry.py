"""Carries a stream through a live separator: read, separate, write, keep the state, count the cost."""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unmix.errors import FileError, InputError
from unmix.files import write_aside
from unmix.live.meter import Meter
from unmix.live.pipe import PipeReader, PipeWriter
from unmix.live.separator import LiveSeparator

__all__ = ["Keeper", "carry"]

Floats = NDArray[np.float64]
KEEP_S = 1.0


@dataclass
class Keeper:
    """Keeps a separator's state in a file, renamed into place, so that a file found there is always whole."""

    path: Path | None
    separator: LiveSeparator

    def load(self) -> bool:
        """Go on from the file if there is one. Raises FileError or InputError naming it."""
        if self.path is None or not self.path.exists():
            return False
        try:
            state = self.path.read_bytes()
        except OSError as error:
            raise FileError(f"{self.path}: cannot be read ({error.strerror}); check its permissions") from None
        try:
            self.separator.restore(state)
        except InputError as error:
            raise InputError(f"{self.path}: {error}, or name another --state") from None
        return True

    def save(self) -> None:
        """Replace the file by the state as it is now."""
        if self.path is not None:
            with write_aside(self.path, overwrite=True) as aside:
                aside.write_bytes(self.separator.save_state())


def carry(
    separator: LiveSeparator,
    reader: PipeReader,
    writer: PipeWriter,
    *,
    chunk: int,
    channels: tuple[int, ...] | None = None,
    aligned: bool = False,
    state: Path | None = None,
    every: Callable[[Meter], None] | None = None,
    every_s: float = 60.0,
) -> Meter:
    """Carry a stream from its first sample to its last; return what it cost.

    channels  which of the stream's channels are the array's, in its order
    aligned   leave out the first `latency_samples`, so that output and input have the same time and length
    state     file in which the state is kept every second and at the end; the last samples, those within the latency,
              then stay in it for the next run instead of being flushed
    every     called with the meter every `every_s` seconds of audio

    Raises InputError for a bad chunk and FileError when nobody takes the output; all before is written, and the state
    kept, by then.
    """
    keeper = Keeper(state, separator)
    goes_on = keeper.load()
    late = separator.latency_samples if aligned and not goes_on else 0
    rate = separator.sample_rate
    meter = Meter(rate)
    kept = told = 0
    try:
        for samples in reader.chunks(chunk):
            heard = samples if channels is None else samples[list(channels)]
            with meter.chunk(heard.shape[1]):
                talkers = separator.push(heard)
            skipped = min(late, talkers.shape[1])
            late -= skipped
            writer.write(talkers[:, skipped:])
            if meter.samples - kept >= KEEP_S * rate:
                kept = meter.samples
                keeper.save()
            if every is not None and meter.samples - told >= every_s * rate:
                told = meter.samples
                every(meter)
    except InputError:
        _end(separator, writer, late, keeper)
        raise
    except BaseException:
        with contextlib.suppress(FileError):
            keeper.save()
        raise
    _end(separator, writer, late, keeper)
    return meter


def _end(separator: LiveSeparator, writer: PipeWriter, late: int, keeper: Keeper) -> None:
    """What is still within the latency goes out, or stays in the state."""
    keeper.save()
    if keeper.path is None:
        writer.write(separator.flush()[:, late:])
    writer.finish()
