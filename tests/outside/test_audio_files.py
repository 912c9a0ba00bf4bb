"""Audio files against the standards that describe them, byte by byte."""

from __future__ import annotations

import struct
from pathlib import Path

import numpy as np
import pytest

from unmix.audio import AudioWriter, Recording, read_audio
from unmix.audio_open import missing_share
from unmix.errors import FileError

RATE = 48000


def rf64(signals: np.ndarray, *, promised: int | None = None) -> bytes:
    """An RF64 file of 16-bit samples, put together from EBU Tech 3306 (version 1.1), section 3.

    The first chunk is `ds64` with the sizes in 64 bits; the sizes of the file and of `data` in 32 bits are 0xFFFFFFFF.
    """
    channels, samples = signals.shape
    data = np.round(signals.T * 32767.0).astype("<i2").tobytes()
    size = len(data) if promised is None else promised
    ds64 = struct.pack("<4sIQQQI", b"ds64", 28, size + 72, size, samples, 0)
    form = struct.pack("<4sIHHIIHH", b"fmt ", 16, 1, channels, RATE, RATE * channels * 2, channels * 2, 16)
    return b"RF64\xff\xff\xff\xffWAVE" + ds64 + form + b"data\xff\xff\xff\xff" + data


def test_rf64_is_read(tmp_path: Path) -> None:
    """EBU Tech 3306: the length comes from `ds64`."""
    signals = 0.5 * np.random.default_rng(3).uniform(-1.0, 1.0, (7, 4800))
    (tmp_path / "mix.wav").write_bytes(rf64(signals))
    read, rate = read_audio(tmp_path / "mix.wav")
    assert rate == RATE
    np.testing.assert_allclose(read, signals, atol=2.0 / 32768.0)


def test_rf64_cut_short_is_noticed_by_its_64_bit_length(tmp_path: Path) -> None:
    """Five thousand million bytes promised, 672 there."""
    (tmp_path / "mix.wav").write_bytes(rf64(np.zeros((7, 48)), promised=5_000_000_000))
    assert missing_share(tmp_path / "mix.wav") == pytest.approx(1.0 - 672 / 5e9)
    with pytest.raises(FileError, match=r"mix\.wav: cut short, 100\.0 % of its samples are missing"):
        Recording.open([tmp_path / "mix.wav"])


def test_long_recordings_are_written_as_rf64(tmp_path: Path) -> None:
    """EBU Tech 3306: `RF64`, size 0xFFFFFFFF, `WAVE`, then `ds64` before any other chunk."""
    path = tmp_path / "mix.wav"
    # An hour and more of seven channels at 48 kHz is announced; the header is the same however much comes.
    with AudioWriter(path, RATE, 7, expect=RATE * 3700) as writer:
        writer.write(np.full((7, 100), 0.25))
    head = path.read_bytes()[:20]
    assert head[:16] == b"RF64\xff\xff\xff\xffWAVEds64"
    read, _ = read_audio(path)
    assert read.shape == (7, 100)
    assert np.all(read == 0.25)


def test_short_recordings_are_plain_wav(tmp_path: Path) -> None:
    """IBM and Microsoft, Multimedia Programming Interface 1.0 (1991): `RIFF`, the size less eight bytes, `WAVE`."""
    path = tmp_path / "mix.wav"
    with AudioWriter(path, RATE, 2, expect=100) as writer:
        writer.write(np.zeros((2, 100)))
    content = path.read_bytes()
    kind, size, form = struct.unpack("<4sI4s", content[:12])
    assert (kind, size, form) == (b"RIFF", len(content) - 8, b"WAVE")
    (tag,) = struct.unpack("<H", content[content.index(b"fmt ") + 8 :][:2])
    assert tag == 3  # WAVE_FORMAT_IEEE_FLOAT
