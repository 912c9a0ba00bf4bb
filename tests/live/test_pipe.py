"""Raw samples and WAV headers, held to what soundfile reads and writes."""

from __future__ import annotations

import io

import numpy as np
import pytest
import soundfile

from unmix.errors import FileError, InputError
from unmix.live.pipe import KINDS, PipeFormat, PipeReader, PipeWriter, read_wav_header, wav_header

SUBTYPES = {"s16le": "PCM_16", "s24le": "PCM_24", "s32le": "PCM_32", "f32le": "FLOAT", "f64le": "DOUBLE"}
SOUND = np.random.default_rng(84).uniform(-0.9, 0.9, (3, 50))


@pytest.mark.parametrize("kind", KINDS)
def test_wav_written_elsewhere_is_read(kind) -> None:
    buffer = io.BytesIO()
    soundfile.write(buffer, SOUND.T, 16000, format="WAV", subtype=SUBTYPES[kind])
    expected = soundfile.read(io.BytesIO(buffer.getvalue()), always_2d=True)[0].T
    buffer.seek(0)
    sound, frames = read_wav_header(buffer)
    assert (sound, frames) == (PipeFormat(kind, 16000, 3), 50)
    reader = PipeReader(buffer, sound, frames)
    assert np.array_equal(np.concatenate(list(reader.chunks(16)), axis=1), expected)
    assert reader.short == ""


@pytest.mark.parametrize("kind", KINDS)
def test_wav_written_here_is_read_elsewhere(kind, tmp_path) -> None:
    sound = PipeFormat(kind, 16000, 3)
    with (tmp_path / "a.wav").open("wb") as stream:
        writer = PipeWriter(stream, sound, header=True)
        for at in range(0, 50, 7):
            writer.write(SOUND[:, at : at + 7])
        writer.finish()
    found, rate = soundfile.read(tmp_path / "a.wav", always_2d=True)
    assert rate == 16000
    # Half a step of the format.
    step = {"s16le": 2.0**-16, "s24le": 2.0**-24, "s32le": 2.0**-32, "f32le": 2.0**-24, "f64le": 0.0}[kind]
    assert np.abs(found.T - SOUND).max() <= step * (1 + 1e-9)


def test_an_open_header_promises_nothing() -> None:
    assert read_wav_header(io.BytesIO(wav_header(PipeFormat("f32le", 16000, 2))))[1] is None
    assert read_wav_header(io.BytesIO(wav_header(PipeFormat("f32le", 16000, 2), 10)))[1] == 10


def test_integers_clip_and_count() -> None:
    data, clipped = PipeFormat("s16le", 16000, 1).encode(np.array([[2.0, -2.0, 0.5]]))
    assert np.frombuffer(data, "<i2").tolist() == [32767, -32768, 16384]
    assert clipped == 2


@pytest.mark.parametrize(
    ("sent", "said"),
    [
        (b"", "ended within the WAV header"),
        (b"OggS" + bytes(40), "no WAV header"),
        (wav_header(PipeFormat("s16le", 16000, 2))[:30], "ended within the WAV header"),
        (wav_header(PipeFormat("s16le", 16000, 2)).replace(b"\x01\x00\x02\x00", b"\x02\x00\x02\x00"), "format 2"),
        (wav_header(PipeFormat("s16le", 400, 2)), "sample rate 400"),
    ],
)
def test_what_is_no_audio_is_said(sent: bytes, said: str) -> None:
    with pytest.raises(InputError, match=said):
        read_wav_header(io.BytesIO(sent))


def test_a_stream_that_ends_early_is_said_and_what_came_is_kept() -> None:
    sound = PipeFormat("s16le", 16000, 3)
    for rest, announced, said in ((0, 80, "0.002 s before its header says"), (4, None, "4 bytes of a frame of 6")):
        reader = PipeReader(io.BytesIO(sound.encode(SOUND)[0] + bytes(rest)), sound, announced)
        assert np.concatenate(list(reader.chunks(16)), axis=1).shape == (3, 50)
        assert said in reader.short and "standard input: ended at 0.003 s" in reader.short


class Closed(io.BytesIO):
    """Takes a while, then nobody listens."""

    def write(self, data) -> int:  # type: ignore[no-untyped-def]
        if self.tell() > 100:
            raise BrokenPipeError
        return super().write(data)


def test_an_output_that_closes_is_said() -> None:
    writer = PipeWriter(Closed(), PipeFormat("f32le", 16000, 3), header=False)
    with pytest.raises(FileError, match=r"was closed after 0\.001 s"):
        for _ in range(10):
            writer.write(SOUND[:, :10])
