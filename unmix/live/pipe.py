"""Audio through a pipe: raw interleaved samples, or WAV whose header may not know how long it will be.

Nothing is sought and nothing beyond the current chunk is held; libsndfile cannot read from a pipe that way.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator
from dataclasses import dataclass
from typing import BinaryIO, Literal, get_args

import numpy as np
from numpy.typing import NDArray

from unmix.audio import HIGHEST_RATE_HZ, LOWEST_RATE_HZ
from unmix.errors import FileError, InputError

__all__ = ["KINDS", "Kind", "PipeFormat", "PipeReader", "PipeWriter", "read_wav_header", "wav_header"]

Floats = NDArray[np.float64]
Kind = Literal["s16le", "s24le", "s32le", "f32le", "f64le"]
KINDS: tuple[Kind, ...] = get_args(Kind)
"""Sample formats: signed integers and floats, little endian."""

_WIDTH = {"s16le": 2, "s24le": 3, "s32le": 4, "f32le": 4, "f64le": 8}
_PCM, _FLOAT, _EXTENSIBLE = 1, 3, 0xFFFE
_OF_WAV: dict[tuple[int, int], Kind] = {
    (_PCM, 16): "s16le",
    (_PCM, 24): "s24le",
    (_PCM, 32): "s32le",
    (_FLOAT, 32): "f32le",
    (_FLOAT, 64): "f64le",
}
_UNKNOWN_SIZE = 0xFFFFFFFF


@dataclass(frozen=True)
class PipeFormat:
    """How samples stand in a stream.

    kind         sample format
    sample_rate  hertz
    channels     interleaved
    """

    kind: Kind
    sample_rate: int
    channels: int

    @property
    def frame(self) -> int:
        """Bytes of one sample of all channels."""
        return _WIDTH[self.kind] * self.channels

    def decode(self, data: bytes) -> Floats:
        """Whole frames as (channels, samples), full scale 1.0."""
        if self.kind == "f32le" or self.kind == "f64le":
            samples = np.frombuffer(data, "<f4" if self.kind == "f32le" else "<f8").astype(np.float64)
        elif self.kind == "s24le":
            wide = np.zeros((len(data) // 3, 4), np.uint8)
            wide[:, 1:] = np.frombuffer(data, np.uint8).reshape(-1, 3)
            samples = wide.view("<i4")[:, 0] / 2.0**31
        else:
            samples = np.frombuffer(data, "<i2" if self.kind == "s16le" else "<i4") / 2.0 ** (self._bits - 1)
        return samples.reshape(-1, self.channels).T

    def encode(self, signals: Floats) -> tuple[bytes, int]:
        """(channels, samples) as bytes, and how many samples were clipped (integers only)."""
        flat = np.ascontiguousarray(signals.T).ravel()
        if self.kind == "f32le" or self.kind == "f64le":
            return flat.astype("<f4" if self.kind == "f32le" else "<f8").tobytes(), 0
        scale = 2.0 ** (self._bits - 1)
        whole = np.rint(flat * scale)
        held = np.clip(whole, -scale, scale - 1)
        clipped = int(np.count_nonzero(np.abs(flat) > 1.0))
        if self.kind == "s24le":
            return held.astype("<i4").view(np.uint8).reshape(-1, 4)[:, :3].tobytes(), clipped
        return held.astype("<i2" if self.kind == "s16le" else "<i4").tobytes(), clipped

    @property
    def _bits(self) -> int:
        return 8 * _WIDTH[self.kind]


def read_wav_header(stream: BinaryIO, where: str = "standard input") -> tuple[PipeFormat, int | None]:
    """Read up to the first sample; return the format and how many frames the header announces, None when it is open.

    Raises InputError when this is no WAV or RF64, or one whose samples are of a kind not known here.
    """
    riff = _exactly(stream, 12, where)
    if riff[:4] not in (b"RIFF", b"RF64") or riff[8:] != b"WAVE":
        raise InputError(f"{where}: no WAV header; give the raw samples' --format, --rate and --channels, or send WAV")
    found: PipeFormat | None = None
    long_size: int | None = None
    while True:
        name, size = struct.unpack("<4sI", _exactly(stream, 8, where))
        if name == b"data":
            break
        body = _exactly(stream, size + size % 2, where)
        if name == b"fmt ":
            found = _format(body, where)
        elif name == b"ds64" and size >= 16:
            long_size = struct.unpack("<Q", body[8:16])[0]
    if found is None:
        raise InputError(f"{where}: the WAV header names no sample format; send it again")
    if size == _UNKNOWN_SIZE:
        return found, None if not long_size else long_size // found.frame
    # Writers that cannot seek leave zero, or the most they can say.
    return found, None if size == 0 or size >= 0x7FFFF000 else size // found.frame


def _exactly(stream: BinaryIO, count: int, where: str) -> bytes:
    data = stream.read(count)
    if len(data) < count:
        raise InputError(f"{where}: ended within the WAV header; is anything sent?")
    return data


def _format(body: bytes, where: str) -> PipeFormat:
    if len(body) < 16:
        raise InputError(f"{where}: the WAV header is damaged; send it again")
    tag, channels, rate, _, _, bits = struct.unpack("<HHIIHH", body[:16])
    if tag == _EXTENSIBLE and len(body) >= 26:
        tag = struct.unpack("<H", body[24:26])[0]
    kind = _OF_WAV.get((tag, bits))
    if kind is None or channels == 0:
        raise InputError(f"{where}: WAV samples of {bits} bits (format {tag}); send 16, 24, 32-bit or float samples")
    return checked_format(kind, rate, channels, where)


def checked_format(kind: Kind, sample_rate: int, channels: int, where: str) -> PipeFormat:
    """A format whose rate is one that is supported. Raises InputError."""
    if not LOWEST_RATE_HZ <= sample_rate <= HIGHEST_RATE_HZ:
        raise InputError(
            f"{where}: sample rate {sample_rate} Hz; {LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ} Hz are supported"
        )
    return PipeFormat(kind, sample_rate, channels)


def wav_header(sound: PipeFormat, frames: int | None = None) -> bytes:
    """A WAV header of 44 bytes; without `frames` its sizes say "unknown", as streams do."""
    tag = _FLOAT if sound.kind.startswith("f") else _PCM
    size = _UNKNOWN_SIZE if frames is None or frames * sound.frame + 36 > _UNKNOWN_SIZE else frames * sound.frame
    width = _WIDTH[sound.kind]
    body = struct.pack(
        "<HHIIHH", tag, sound.channels, sound.sample_rate, sound.sample_rate * sound.frame, sound.frame, 8 * width
    )
    whole = size if size == _UNKNOWN_SIZE else size + 36
    return (
        b"RIFF"
        + struct.pack("<I", whole)
        + b"WAVEfmt "
        + struct.pack("<I", 16)
        + body
        + b"data"
        + struct.pack("<I", size)
    )


class PipeReader:
    """Chunks of a stream until it ends.

    announced  frames that the header promised
    short      what was wrong with the end, one line; empty when all is well
    """

    def __init__(
        self, stream: BinaryIO, sound: PipeFormat, announced: int | None = None, where: str = "standard input"
    ) -> None:
        self._stream, self._sound, self._announced, self._where = stream, sound, announced, where
        self.frames = 0
        self.short = ""

    def chunks(self, size: int) -> Iterator[Floats]:
        """Yield (channels, size) arrays, the last one shorter; each as soon as it is complete."""
        while True:
            left = size if self._announced is None else min(size, self._announced - self.frames)
            data = self._stream.read(left * self._sound.frame) if left else b""
            whole = len(data) // self._sound.frame
            if whole:
                self.frames += whole
                yield self._sound.decode(data[: whole * self._sound.frame])
            if whole < size:
                self._look_at_the_end(len(data) - whole * self._sound.frame)
                return

    def _look_at_the_end(self, rest: int) -> None:
        at = self.frames / self._sound.sample_rate
        if rest:
            self.short = (
                f"{self._where}: ended at {at:.3f} s with {rest} bytes of a frame of {self._sound.frame}; is the "
                "number of channels right, or was the sender cut off? What came before is done"
            )
        elif self._announced is not None and self.frames < self._announced:
            missing = (self._announced - self.frames) / self._sound.sample_rate
            self.short = (
                f"{self._where}: ended at {at:.3f} s, {missing:.3f} s before its header says; what came is done"
            )


class PipeWriter:
    """Writes (channels, n) chunks as they come; each leaves at once.

    clipped  samples beyond full scale, which an integer format cannot hold

    Raises FileError when nobody takes the output any more.
    """

    def __init__(self, stream: BinaryIO, sound: PipeFormat, *, header: bool, where: str = "standard output") -> None:
        self._stream, self._sound, self._where = stream, sound, where
        self.frames, self.clipped, self._header = 0, 0, header
        if header:
            self._send(wav_header(sound))

    def write(self, chunk: Floats) -> None:
        """Write (channels, n) samples."""
        data, clipped = self._sound.encode(chunk)
        self._send(data)
        self.clipped += clipped
        self.frames += chunk.shape[1]

    def finish(self) -> None:
        """Put the length into the header where the output is a file."""
        if self._header and self._stream.seekable():
            self._stream.seek(0)
            self._send(wav_header(self._sound, self.frames))

    def _send(self, data: bytes) -> None:
        try:
            self._stream.write(data)
            self._stream.flush()
        except OSError as error:
            at = self.frames / self._sound.sample_rate
            why = "was closed" if isinstance(error, BrokenPipeError) else f"cannot be written ({error.strerror})"
            raise FileError(f"{self._where}: {why} after {at:.3f} s; what was written until then is whole") from None
