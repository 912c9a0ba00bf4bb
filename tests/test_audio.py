"""Recordings in and signals out: formats, rates, excerpts, chunks, and what damaged files get."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import soundfile

from unmix.audio import AudioWriter, Recording, Samples, read_audio, resample, write_audio
from unmix.errors import FileError, InputError

RATE = 16000


def noise(channels: int, samples: int, seed: int = 5) -> np.ndarray:
    return 0.2 * np.random.default_rng(seed).uniform(-1.0, 1.0, (channels, samples))


# Half a step of each integer format; floats are exact to single precision.
FORMATS = [
    ("WAV", "PCM_16", 2.0**-15),
    ("WAV", "PCM_24", 2.0**-23),
    ("WAV", "PCM_32", 2.0**-31),
    ("WAV", "FLOAT", 1e-7),
    ("WAV", "DOUBLE", 0.0),
    ("WAVEX", "PCM_24", 2.0**-23),
    ("RF64", "PCM_24", 2.0**-23),
    ("W64", "FLOAT", 1e-7),
    ("FLAC", "PCM_16", 2.0**-15),
    ("FLAC", "PCM_24", 2.0**-23),
    ("AIFF", "PCM_24", 2.0**-23),
]


@pytest.mark.parametrize(("kind", "subtype", "step"), FORMATS)
def test_formats_are_read(tmp_path: Path, kind: str, subtype: str, step: float) -> None:
    signals = noise(5, 3000)
    path = tmp_path / "mix.bin"
    soundfile.write(path, signals.T, RATE, format=kind, subtype=subtype)
    read, rate = read_audio(path)
    assert rate == RATE
    assert read.shape == (5, 3000)
    assert np.abs(read - signals).max() <= step


@pytest.mark.parametrize("rate", [8000, 11025, 44100, 48000, 96000, 192000])
def test_rates_from_8_to_192_khz(tmp_path: Path, rate: int) -> None:
    write_audio(tmp_path / "mix.wav", noise(2, 400), rate)
    assert Recording.open([tmp_path / "mix.wav"]).sample_rate == rate


@pytest.mark.parametrize("rate", [4000, 384000])
def test_other_rates_are_refused(tmp_path: Path, rate: int) -> None:
    soundfile.write(tmp_path / "mix.wav", noise(2, 400).T, rate)
    with pytest.raises(InputError, match=rf"mix\.wav: sample rate {rate} Hz; 8000 to 192000 Hz"):
        Recording.open([tmp_path / "mix.wav"])


def test_chunks_are_the_recording_whatever_their_size(tmp_path: Path) -> None:
    signals = noise(3, 10_001)
    write_audio(tmp_path / "mix.wav", signals, RATE, subtype="DOUBLE")
    recording = Recording.open([tmp_path / "mix.wav"])
    for size in (97, 997, 4096, 20_000):
        chunks = list(recording.chunks(size))
        assert [c.shape[1] for c in chunks[:-1]] == [size] * (len(chunks) - 1)
        np.testing.assert_array_equal(np.concatenate(chunks, axis=1), signals)


def test_channels_are_chosen_in_the_order_given(tmp_path: Path) -> None:
    signals = noise(6, 500)
    write_audio(tmp_path / "mix.wav", signals, RATE, subtype="DOUBLE")
    read = Recording.open([tmp_path / "mix.wav"], channels=[4, 0, 5]).read()
    np.testing.assert_array_equal(read, signals[[4, 0, 5]])


def test_one_file_per_channel(tmp_path: Path) -> None:
    signals = noise(3, 500)
    files = [tmp_path / f"m{c}.wav" for c in range(3)]
    for file, signal in zip(files, signals, strict=True):
        write_audio(file, signal[None], RATE, subtype="DOUBLE")
    np.testing.assert_array_equal(Recording.open(files).read(), signals)
    np.testing.assert_array_equal(Recording.open(files, channels=[2, 1]).read(), signals[[2, 1]])


def test_an_excerpt_is_cut_to_the_sample(tmp_path: Path) -> None:
    signals = noise(2, RATE)
    write_audio(tmp_path / "mix.wav", signals, RATE, subtype="DOUBLE")
    recording = Recording.open([tmp_path / "mix.wav"], start_s=0.25, stop_s=0.75)
    assert (recording.samples, recording.duration_s) == (8000, 0.5)
    np.testing.assert_array_equal(recording.read(), signals[:, 4000:12000])


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"channels": [0, 7]}, "there is no channel 7; the recording has 0 to 1"),
        ({"channels": [-1]}, "there is no channel -1"),
        ({"channels": [1, 1]}, "names a channel twice"),
        ({"start_s": 2.0}, "does not lie within its 1 s"),
        ({"start_s": 0.5, "stop_s": 0.4}, "excerpt 0.5 s to 0.4 s"),
        ({"stop_s": 1.5}, "excerpt 0 s to 1.5 s"),
        ({"start_s": -1.0}, "excerpt -1 s"),
    ],
)
def test_choices_that_the_file_does_not_hold(tmp_path: Path, options: dict[str, object], message: str) -> None:
    write_audio(tmp_path / "mix.wav", noise(2, RATE), RATE)
    with pytest.raises(InputError, match=message) as caught:
        Recording.open([tmp_path / "mix.wav"], **options)
    assert "mix.wav" in str(caught.value)


def test_files_that_do_not_belong_together(tmp_path: Path) -> None:
    write_audio(tmp_path / "a.wav", noise(1, 800), RATE)
    write_audio(tmp_path / "short.wav", noise(1, 700), RATE)
    write_audio(tmp_path / "fast.wav", noise(1, 800), 48000)
    write_audio(tmp_path / "stereo.wav", noise(2, 800), RATE)
    for other, message in [
        ("short.wav", "700 samples, but .*a.wav has 800"),
        ("fast.wav", "48000 Hz, but .*a.wav has 16000 Hz"),
        ("stereo.wav", "has 2 channels; with `files`, give one single-channel file each"),
    ]:
        with pytest.raises(InputError, match=message):
            Recording.open([tmp_path / "a.wav", tmp_path / other])


@pytest.mark.parametrize("suffix", [".wav", ".flac", ".aiff", ".rf64", ".w64"])
@pytest.mark.parametrize("kept", [0.97, 0.4])
def test_a_file_cut_short_is_an_error(tmp_path: Path, suffix: str, kept: float) -> None:
    whole = tmp_path / f"whole{suffix}"
    kind = {".rf64": "RF64"}.get(suffix)
    soundfile.write(whole, noise(3, 5 * RATE).T, RATE, subtype="PCM_24", format=kind)
    assert read_audio(whole)[0].shape == (3, 5 * RATE)
    cut = tmp_path / f"cut{suffix}"
    content = whole.read_bytes()
    cut.write_bytes(content[: int(kept * len(content))])
    with pytest.raises(FileError, match=rf"cut{suffix}: .*(cut short|damaged)"):
        read_audio(cut)


def test_a_recorder_that_could_not_go_back_leaves_no_length(tmp_path: Path) -> None:
    """Written into a pipe, WAV carries 0xFFFFFFFF for its length; all that is there counts."""
    signals = noise(2, 900)
    write_audio(tmp_path / "mix.wav", signals, RATE, subtype="PCM_16")
    content = bytearray((tmp_path / "mix.wav").read_bytes())
    at = content.index(b"data") + 4
    content[at : at + 4] = b"\xff\xff\xff\xff"
    content[4:8] = b"\xff\xff\xff\xff"
    (tmp_path / "pipe.wav").write_bytes(content)
    read, _ = read_audio(tmp_path / "pipe.wav")
    assert read.shape == (2, 900)


def test_flac_without_a_length_is_refused(tmp_path: Path) -> None:
    write_audio(tmp_path / "mix.flac", noise(1, 900), RATE)
    content = bytearray((tmp_path / "mix.flac").read_bytes())
    # STREAMINFO starts at byte 8; its total number of samples is the lower 36 bits of bytes 18 to 25.
    content[21] &= 0xF0
    content[22:26] = b"\0\0\0\0"
    (tmp_path / "piped.flac").write_bytes(content)
    with pytest.raises(FileError, match=r"piped\.flac: its header does not say how long it is"):
        read_audio(tmp_path / "piped.flac")


@pytest.mark.parametrize(("bad", "name"), [(np.nan, "NaN"), (np.inf, "infinite")])
def test_samples_that_are_no_numbers_name_channel_and_second(tmp_path: Path, bad: float, name: str) -> None:
    signals = noise(4, 3 * RATE)
    signals[2, 2 * RATE + 800] = bad
    write_audio(tmp_path / "mix.wav", signals, RATE)
    with pytest.raises(InputError, match=rf"mix\.wav: channel 2 holds .*{name}.* at 2\.050 s"):
        read_audio(tmp_path / "mix.wav")
    # A channel that is not chosen does not matter.
    assert Recording.open([tmp_path / "mix.wav"], channels=[0, 1, 3]).read().shape == (3, 3 * RATE)


def test_what_is_no_audio_is_said_so(tmp_path: Path) -> None:
    (tmp_path / "notes.wav").write_text("these are notes")
    (tmp_path / "empty.wav").write_bytes(b"")
    write_audio(tmp_path / "silent.wav", np.zeros((2, 0)), RATE)
    for name, message in [("notes.wav", "not readable audio"), ("empty.wav", "not readable audio")]:
        with pytest.raises(FileError, match=rf"{name}: {message}"):
            read_audio(tmp_path / name)
    with pytest.raises(InputError, match=r"silent\.wav: the file holds no samples"):
        read_audio(tmp_path / "silent.wav")
    with pytest.raises(FileError, match=r"gone\.wav: no such file"):
        read_audio(tmp_path / "gone.wav")
    with pytest.raises(FileError, match="is a folder; name an audio file"):
        read_audio(tmp_path)


def test_samples_in_memory_are_checked() -> None:
    with pytest.raises(InputError, match=r"expected \(channels, samples\), got shape \(100,\)"):
        Samples(np.zeros(100), RATE)
    with pytest.raises(InputError, match="type int16; give floating point"):
        Samples(np.zeros((2, 100), dtype=np.int16), RATE)
    with pytest.raises(InputError, match="sample rate 100 Hz"):
        Samples(np.zeros((2, 100)), 100)
    signals = noise(2, 100)
    signals[1, 40] = np.nan
    with pytest.raises(InputError, match="channel 1 holds NaN or infinite values from sample 40 on"):
        Samples(signals, RATE)


def test_writing_leaves_the_array_alone_and_counts_clipped_samples(tmp_path: Path) -> None:
    signals = noise(2, 1000)
    signals[0, 10:13] = [1.5, -2.0, 1.0]
    before = signals.copy()
    assert write_audio(tmp_path / "int.wav", signals, RATE, subtype="PCM_16") == 2
    assert write_audio(tmp_path / "float.wav", signals, RATE) == 0
    np.testing.assert_array_equal(signals, before)
    assert np.abs(read_audio(tmp_path / "int.wav")[0]).max() <= 1.0
    assert read_audio(tmp_path / "float.wav")[0][0, 11] == -2.0


def test_a_writer_knows_the_peak_of_all_chunks(tmp_path: Path) -> None:
    signals = noise(1, 3000)
    with AudioWriter(tmp_path / "a.wav", RATE, 1) as writer:
        for at in range(0, 3000, 1000):
            writer.write(signals[:, at : at + 1000])
    assert writer.peak == np.abs(signals).max()
    assert read_audio(tmp_path / "a.wav")[0].shape == (1, 3000)


def test_nothing_is_replaced_unasked(tmp_path: Path) -> None:
    write_audio(tmp_path / "a.wav", noise(1, 100), RATE)
    with pytest.raises(FileError, match=r"a\.wav: exists already; .*--overwrite"):
        write_audio(tmp_path / "a.wav", noise(1, 200), RATE)
    assert read_audio(tmp_path / "a.wav")[0].shape == (1, 100)
    write_audio(tmp_path / "a.wav", noise(1, 200), RATE, overwrite=True)
    assert read_audio(tmp_path / "a.wav")[0].shape == (1, 200)


def test_an_unknown_suffix_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"use the suffix \.wav or \.flac"):
        write_audio(tmp_path / "a.sound", noise(1, 100), RATE)
    assert list(tmp_path.iterdir()) == []


def test_resampling_keeps_the_band_and_removes_what_would_alias() -> None:
    rate_in, rate_out, samples = 44100, 16000, 44100
    time = np.arange(samples) / rate_in
    kept, gone = np.sin(2 * np.pi * 1000.0 * time), np.sin(2 * np.pi * 9000.0 * time)
    middle = slice(2000, 14000)
    expected = np.sin(2 * np.pi * 1000.0 * np.arange(16000) / rate_out)
    np.testing.assert_allclose(resample(kept[None], rate_in, rate_out)[0][middle], expected[middle], atol=1e-6)
    # 9 kHz would fold to 7 kHz; the very-high-quality recipe rejects it by more than 120 dB.
    assert np.abs(resample(gone[None], rate_in, rate_out)[0][middle]).max() < 1e-6
