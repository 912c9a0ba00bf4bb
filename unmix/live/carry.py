"""Carries a stream through a live separator: read, separate, write, keep the state, count the cost."""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from pathlib import Path

from unmix.errors import FileError, InputError
from unmix.live.keep import Keeper
from unmix.live.meter import Meter
from unmix.live.pipe import PipeReader, PipeWriter
from unmix.live.separator import LiveSeparator

__all__ = ["carry"]


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
    state     file in which the state is kept chunk by chunk; the last samples, those within the latency, then stay in
              it for the next run instead of being flushed
    every     called with the meter every `every_s` seconds of audio

    Raises InputError for a bad chunk and FileError when nobody takes the output; all before is written, and the state
    kept, by then.
    """
    keeper = Keeper(state, separator)
    keeper.load()
    late = max(0, separator.latency_samples - separator.position) if aligned else 0
    rate = separator.sample_rate
    meter = Meter(rate)
    told = 0
    try:
        for samples in reader.chunks(chunk):
            heard = samples if channels is None else samples[list(channels)]
            with meter.chunk(heard.shape[1]):
                talkers = separator.push(heard)
                keeper.took(heard)
            skipped = min(late, talkers.shape[1])
            late -= skipped
            writer.write(talkers[:, skipped:])
            if every is not None and meter.samples - told >= every_s * rate:
                told = meter.samples
                every(meter)
    except InputError:
        _end(separator, writer, late, keeper)
        raise
    except BaseException:
        with contextlib.suppress(FileError):
            keeper.snapshot()
        raise
    finally:
        keeper.close()
    _end(separator, writer, late, keeper)
    return meter


def _end(separator: LiveSeparator, writer: PipeWriter, late: int, keeper: Keeper) -> None:
    """What is still within the latency goes out, or stays in the state."""
    keeper.snapshot()
    if keeper.path is None:
        writer.write(separator.flush()[:, late:])
    keeper.close()
    writer.finish()
