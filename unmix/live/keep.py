"""Keeps a live separator's state in a file, so that a process that dies loses one chunk at most.

The file is a snapshot of the state followed by the input pushed since: to go on, the snapshot is restored and that
input pushed again, chunk by chunk as it came. Appending a chunk costs little, where a whole state (two megabytes for
`low-latency`) would cost more than the separation. A snapshot is written aside and renamed, so that what is found is
always whole; a record that was cut short is left out. What a process wrote survives it, but not a failing power supply:
nothing waits for the disk.

    file    = magic, snapshot's bytes as uint64, snapshot, records
    record  = samples as uint32, float64 (samples, channels); little-endian
"""

from __future__ import annotations

import contextlib
import struct
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

import numpy as np
from numpy.typing import NDArray

from unmix.errors import FileError, InputError
from unmix.files import write_aside
from unmix.live.separator import LiveSeparator

__all__ = ["SNAPSHOT_S", "Keeper"]

Floats = NDArray[np.float64]

SNAPSHOT_S = 10.0
"""Seconds of audio between snapshots: at most so much is pushed again, at a small share of real time."""
_MAGIC = b"unmix-kept-1\n"
_SIZE, _COUNT = struct.Struct("<Q"), struct.Struct("<I")


class Keeper:
    """Keeps the state of a separator in a file; does nothing without one.

    snapshot_s  seconds of audio between snapshots
    """

    def __init__(self, path: Path | None, separator: LiveSeparator, *, snapshot_s: float = SNAPSHOT_S) -> None:
        self.path, self._separator = path, separator
        self._every = max(1, round(snapshot_s * separator.sample_rate))
        self._since = 0
        self._stream: BinaryIO | None = None

    def load(self) -> bool:
        """Go on from the file if there is one. Raises FileError or InputError naming it."""
        if self.path is None or not self.path.exists():
            return False
        try:
            data = self.path.read_bytes()
        except OSError as error:
            raise FileError(f"{self.path}: cannot be read ({error.strerror}); check its permissions") from None
        try:
            snapshot, records = _parts(data)
            self._separator.restore(snapshot)
            for chunk in _chunks(records, self._separator.array.channels):
                self._separator.push(chunk)
        except InputError as error:
            raise InputError(f"{self.path}: {error}, or name another --state") from None
        return True

    def took(self, chunk: Floats) -> None:
        """Keep what was just pushed, (channels, n). Raises FileError when it cannot be written."""
        if self.path is None:
            return
        self._since += chunk.shape[1]
        if self._stream is None or self._since >= self._every:
            self.snapshot()
            return
        try:
            self._stream.write(_COUNT.pack(chunk.shape[1]) + np.ascontiguousarray(chunk.T, "<f8").tobytes())
        except OSError as error:
            raise FileError(f"{self.path}: cannot be written ({error.strerror}); is the disk full?") from None

    def snapshot(self) -> None:
        """Replace the file by the state as it is now."""
        if self.path is None:
            return
        self.close()
        state = self._separator.save_state()
        with write_aside(self.path, overwrite=True) as aside:
            aside.write_bytes(_MAGIC + _SIZE.pack(len(state)) + state)
        try:
            # Unbuffered: what was written is out of the process's hands.
            self._stream = self.path.open("ab", buffering=0)
        except OSError as error:
            raise FileError(f"{self.path}: cannot be written ({error.strerror}); choose another place") from None
        self._since = 0

    def close(self) -> None:
        """Close the file; what it holds stays."""
        stream, self._stream = self._stream, None
        if stream is not None:
            with contextlib.suppress(OSError):
                stream.close()


def _parts(data: bytes) -> tuple[bytes, bytes]:
    """Snapshot and records; the bytes of `save_state` alone are a snapshot, too."""
    head = len(_MAGIC) + _SIZE.size
    if not data.startswith(_MAGIC) or len(data) < head:
        return data, b""
    stop = head + _SIZE.unpack_from(data, len(_MAGIC))[0]
    return data[head:stop], data[stop:]


def _chunks(records: bytes, channels: int) -> Iterator[Floats]:
    """The chunks (channels, n) that were kept whole."""
    at = 0
    while at + _COUNT.size <= len(records):
        samples = _COUNT.unpack_from(records, at)[0]
        at += _COUNT.size
        stop = at + 8 * channels * samples
        if stop > len(records):
            return
        yield np.frombuffer(records[at:stop], "<f8").reshape(samples, channels).T.astype(np.float64)
        at = stop
