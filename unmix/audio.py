"""Recordings in, talker signals out: WAV, RF64, W64, FLAC and AIFF, read and written in chunks."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from unmix.audio_open import open_audio
from unmix.errors import FileError, InputError
from unmix.files import write_aside

if TYPE_CHECKING:
    import soundfile

__all__ = ["AudioWriter", "Recording", "Samples", "read_audio", "resample", "write_audio"]

Floats = NDArray[np.float64]

LOWEST_RATE_HZ = 8_000
HIGHEST_RATE_HZ = 192_000
CHUNK_S = 2.0


@dataclass(frozen=True)
class Recording:
    """The samples of all microphones, in one multichannel file or one file per channel, read in chunks.

    files      paths in channel order
    channels   which of the files' channels are the array's, in its order
    start, stop  the excerpt in samples
    sample_rate  hertz
    """

    files: tuple[Path, ...]
    channels: tuple[int, ...]
    sample_rate: int
    start: int
    stop: int

    @classmethod
    def open(
        cls,
        files: Sequence[str | Path],
        *,
        channels: Sequence[int] | None = None,
        start_s: float = 0.0,
        stop_s: float | None = None,
    ) -> Recording:
        """Look at the files and check that they belong together. Raises FileError or InputError naming the file."""
        paths = tuple(Path(f) for f in files)
        counts, rates, lengths = [], [], []
        for path in paths:
            with open_audio(path) as stream:
                counts.append(stream.channels)
                rates.append(stream.samplerate)
                lengths.append(stream.frames)
            if len(paths) > 1 and counts[-1] != 1:
                raise InputError(f"{path}: has {counts[-1]} channels; with `files`, give one single-channel file each")
            if rates[-1] != rates[0]:
                raise InputError(f"{path}: {rates[-1]} Hz, but {paths[0]} has {rates[0]} Hz; resample one of them")
            if lengths[-1] != lengths[0]:
                raise InputError(
                    f"{path}: {lengths[-1]} samples, but {paths[0]} has {lengths[0]}; is one of them cut short?"
                )
        rate, total, available = rates[0], lengths[0], sum(counts)
        if not LOWEST_RATE_HZ <= rate <= HIGHEST_RATE_HZ:
            raise InputError(
                f"{paths[0]}: sample rate {rate} Hz; {LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ} Hz are supported"
            )
        chosen = tuple(range(available)) if channels is None else tuple(int(c) for c in channels)
        for channel in chosen:
            if not 0 <= channel < available:
                raise InputError(f"{paths[0]}: there is no channel {channel}; the recording has 0 to {available - 1}")
        if len(set(chosen)) != len(chosen):
            raise InputError(f"{paths[0]}: key `channels` names a channel twice: {list(chosen)}")
        start = round(start_s * rate)
        stop = total if stop_s is None else round(stop_s * rate)
        if total == 0:
            raise InputError(f"{paths[0]}: the file holds no samples")
        if not 0 <= start < stop <= total:
            raise InputError(
                f"{paths[0]}: excerpt {start_s:g} s to {stop / rate:g} s does not lie within its {total / rate:g} s"
            )
        return cls(paths, chosen, rate, start, stop)

    @property
    def samples(self) -> int:
        """Samples per channel in the excerpt."""
        return self.stop - self.start

    @property
    def duration_s(self) -> float:
        """Length of the excerpt."""
        return self.samples / self.sample_rate

    def chunks(self, size: int | None = None) -> Iterator[Floats]:
        """Yield (channels, size) arrays from start to stop, the last one shorter.

        Raises FileError when a file is cut short, InputError naming channel and second when a sample is NaN or
        infinite.
        """
        size = size or round(CHUNK_S * self.sample_rate)
        with contextlib.ExitStack() as stack:
            streams = [stack.enter_context(open_audio(path)) for path in self.files]
            for stream in streams:
                stream.seek(self.start)
            for at in range(self.start, self.stop, size):
                count = min(size, self.stop - at)
                yield self._checked(np.concatenate([self._read(s, count, at) for s in streams]), at)

    def read(self) -> Floats:
        """The whole excerpt: (channels, samples)."""
        return np.concatenate(list(self.chunks()), axis=1)

    def _read(self, stream: soundfile.SoundFile, count: int, at: int) -> Floats:
        import soundfile

        try:
            block = stream.read(count, dtype="float64", always_2d=True)
        except soundfile.LibsndfileError as error:
            raise FileError(f"{stream.name}: damaged at {at / self.sample_rate:.2f} s ({error})") from None
        if len(block) < count:
            raise FileError(
                f"{stream.name}: ends at {(at + len(block)) / self.sample_rate:.2f} s, before its header says; "
                "it is cut short: copy it again, or set `stop_s`"
            )
        return np.asarray(block.T)

    def _checked(self, block: Floats, at: int) -> Floats:
        chosen = block[list(self.channels)]
        bad = ~np.isfinite(chosen)
        if bad.any():
            channel, sample = np.argwhere(bad)[0]
            raise InputError(
                f"{self.files[0]}: channel {self.channels[channel]} holds NaN or infinite samples at "
                f"{(at + sample) / self.sample_rate:.3f} s; repair the file or cut the stretch out with start_s/stop_s"
            )
        return chosen


@dataclass(frozen=True)
class Samples:
    """A recording that is in memory already: (channels, samples), read as `Recording` is."""

    signals: Floats
    sample_rate: int

    def __post_init__(self) -> None:
        given = np.asarray(self.signals)
        if given.ndim != 2 or given.shape[1] == 0:
            raise InputError(f"recording: expected (channels, samples), got shape {given.shape}")
        if not np.issubdtype(given.dtype, np.floating):
            raise InputError(f"recording: samples of type {given.dtype}; give floating point with full scale 1.0")
        if not LOWEST_RATE_HZ <= self.sample_rate <= HIGHEST_RATE_HZ:
            raise InputError(
                f"recording: sample rate {self.sample_rate} Hz; {LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ} Hz are supported"
            )
        signals = np.asarray(given, dtype=np.float64)
        bad = ~np.isfinite(signals)
        if bad.any():
            channel, sample = np.argwhere(bad)[0]
            raise InputError(f"recording: channel {channel} holds NaN or infinite values from sample {sample} on")
        object.__setattr__(self, "signals", signals)

    @property
    def channels(self) -> tuple[int, ...]:
        """Channel numbers."""
        return tuple(range(len(self.signals)))

    @property
    def samples(self) -> int:
        """Samples per channel."""
        return int(self.signals.shape[1])

    @property
    def duration_s(self) -> float:
        """Length of the recording."""
        return self.samples / self.sample_rate

    def chunks(self, size: int | None = None) -> Iterator[Floats]:
        """Yield (channels, size) arrays, the last one shorter."""
        size = size or round(CHUNK_S * self.sample_rate)
        for at in range(0, self.samples, size):
            yield self.signals[:, at : at + size]

    def read(self) -> Floats:
        """All samples."""
        return self.signals


def read_audio(path: str | Path) -> tuple[Floats, int]:
    """A whole file as (channels, samples) and its sample rate. Raises FileError or InputError naming the file."""
    recording = Recording.open([path])
    return recording.read(), recording.sample_rate


def resample(signals: Floats, rate_in: int, rate_out: int) -> Floats:
    """Band-limited resampling along the last axis of (channels, samples), by soxr at its highest quality."""
    if rate_in == rate_out:
        return signals
    import soxr

    return np.asarray(soxr.resample(signals.T, rate_in, rate_out, quality="VHQ").T, dtype=np.float64)


class AudioWriter:
    """Write (channels, n) chunks to a file in the order they come; a context manager.

    The format follows the suffix; `subtype` is libsndfile's name of the sample format, by default 32-bit float, or
    24 bits where the format has no float (FLAC). WAV becomes RF64 (EBU Tech 3306) when `expect` samples per channel
    carry it beyond 4 GB.

    peak     largest magnitude written
    clipped  samples beyond full scale, which an integer format cannot hold

    Raises FileError when the place cannot be written.
    """

    def __init__(
        self, path: Path, sample_rate: int, channels: int, *, subtype: str | None = None, expect: int = 0
    ) -> None:
        import soundfile

        if subtype is None:
            subtype = "PCM_24" if path.suffix.lower() == ".flac" else "FLOAT"

        large = expect * channels * 4 > 2**32 - 2**20
        options: dict[str, Any] = {"format": "RF64"} if large and path.suffix.lower() == ".wav" else {}
        try:
            self._stream = soundfile.SoundFile(
                path, "w", samplerate=sample_rate, channels=channels, subtype=subtype, **options
            )
        except (soundfile.LibsndfileError, OSError) as error:
            raise FileError(f"{path}: cannot be written ({error})") from None
        except (TypeError, ValueError) as error:
            raise InputError(f"{path}: {error}; use the suffix .wav or .flac") from None
        self._path = path
        self._integer = subtype.startswith("PCM")
        self.peak = 0.0
        self.clipped = 0

    def write(self, chunk: NDArray[np.floating[Any]]) -> None:
        """Append (channels, n) samples."""
        magnitude = np.abs(chunk)
        self.peak = max(self.peak, float(magnitude.max(initial=0.0)))
        if self._integer:
            self.clipped += int(np.count_nonzero(magnitude > 1.0))
        import soundfile

        try:
            self._stream.write(np.ascontiguousarray(chunk.T))
        except soundfile.LibsndfileError as error:
            raise FileError(f"{self._path}: cannot be written ({error}); is the disk full?") from None

    def close(self) -> None:
        """Finish the file."""
        self._stream.close()

    def __enter__(self) -> AudioWriter:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


def write_audio(
    path: str | Path,
    signals: NDArray[np.floating[Any]],
    sample_rate: int,
    *,
    subtype: str | None = None,
    overwrite: bool = False,
) -> int:
    """Write (channels, samples), full scale 1.0, aside and rename; `subtype` as of `AudioWriter`.

    Returns how many samples clipped (integer formats only). Raises FileError when the file exists and `overwrite` is
    not given, or the place cannot be written; InputError for a suffix or format that does not exist.
    """
    path = Path(path)
    with write_aside(path, overwrite=overwrite) as aside:
        with AudioWriter(aside, sample_rate, len(signals), subtype=subtype, expect=signals.shape[1]) as writer:
            writer.write(signals)
        return writer.clipped
