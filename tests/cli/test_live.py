"""`unmix live`: in a pipe, with what pipes do wrong."""

from __future__ import annotations

import io
import json
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.cli.conftest import RATE, Ran, signals
from unmix.audio import read_audio, write_audio
from unmix.cli import main
from unmix.jobs.solve import solve
from unmix.live.keep import Keeper
from unmix.live.pipe import PipeFormat, wav_header
from unmix.live.separator import LiveSeparator
from unmix.scene import Scene

Live = Callable[..., tuple[Ran, bytes]]
BEARINGS = ("--bearing", "20,0,1.2", "--bearing", "110,0,1.2")
MODEL = ("--variant", "model")
RAW = ("--format", "f32le", "--rate", RATE, "--channels", 5, *MODEL)


def recording() -> bytes:
    return PipeFormat("f32le", RATE, 5).encode(signals()[2:])[0]


@pytest.fixture
def live(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Live:
    """Run the command in this process on bytes."""

    def command(sent: bytes, *arguments: object) -> tuple[Ran, bytes]:
        out = io.BytesIO()
        wrapped = io.TextIOWrapper(out, write_through=True)  # closes `out` when it goes
        monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(sent)))
        capsys.readouterr()
        with monkeypatch.context() as patch, pytest.raises(SystemExit) as left:
            patch.setattr(sys, "stdout", wrapped)
            main(["live", *map(str, arguments)])
        assert isinstance(left.value.code, int)
        return Ran(left.value.code, "", capsys.readouterr().err), out.getvalue()

    return command


def decoded(data: bytes) -> np.ndarray:
    return PipeFormat("f32le", RATE, 2).decode(data)


def whole(scene: Path) -> np.ndarray:
    found = solve(Scene.load(scene), "model").signals
    assert found is not None
    return found


def test_a_scene_through_the_pipe_is_the_file_jobs(live: Live, scene: Path) -> None:
    ran, out = live(recording(), scene, *RAW, "--aligned")
    assert ran.status == 0
    # 32-bit samples in and out.
    assert np.abs(decoded(out) - whole(scene)).max() < 2e-7
    assert "latency" in ran.err and "as stated" in ran.err and "% of real time" in ran.err
    stated, measured = (
        ran.err.split("latency ")[1].split(" samples")[0],
        ran.err.split("as stated, ")[1].split(" as")[0],
    )
    assert measured == f"{stated}, {stated}"
    assert "consent" in ran.err


def test_wav_in_wav_out_and_an_array_file(live: Live, scene: Path) -> None:
    sent = wav_header(PipeFormat("f32le", RATE, 5)) + recording()
    ran, out = live(sent, scene.parent / "array.toml", *MODEL, *BEARINGS, "--aligned", "--output-format", "wav")
    assert ran.status == 0
    assert np.abs(decoded(out[44:]) - whole(scene)).max() < 2e-7


def test_the_default_is_low_latency(live: Live, scene: Path) -> None:
    ran, out = live(wav_header(PipeFormat("f32le", RATE, 5)) + recording(), scene, "--aligned")
    assert ran.status == 0
    assert (
        "variant low-latency" in ran.err and "latency 256 samples (16.0 ms) as stated, 256, 256 as measured" in ran.err
    )
    expected = solve(Scene.load(scene), "low-latency").signals
    assert expected is not None
    assert np.abs(decoded(out[44:]) - expected).max() < 2e-7


def test_json_stands_on_standard_output_and_audio_in_the_file(live: Live, scene: Path) -> None:
    target = scene.parent / "out.wav"
    ran, out = live(recording(), scene, *RAW, "--output-format", "wav", "--output", target, "--json")
    tree: dict[str, Any] = json.loads(out)
    assert ran.status == 0 and ran.err == ""
    assert tree["latency_measured_samples"] == [tree["latency_samples"]] * 2
    assert tree["under_runs"] <= tree["chunks"] == 750  # 1.5 s in chunks of 2 ms
    assert tree["cost"] > 0.0
    found, rate = read_audio(target)
    assert rate == RATE and found.shape == (2, signals().shape[1] + tree["latency_samples"])
    again, _ = live(recording(), scene, *RAW, "--output", target)
    assert again.status == 1 and "exists already" in again.err


def test_state_carries_a_stream_over_a_break(live: Live, scene: Path) -> None:
    """What two runs write, one after the other, is what one would have written."""
    sent, state = recording(), scene.parent / "state.npz"
    cut = 9001 * 5 * 4
    _, once = live(sent, scene, *RAW)
    _, first = live(sent[:cut], scene, *RAW, "--state", state)
    _, second = live(sent[cut:], scene, *RAW, "--state", state)
    joined = decoded(first + second)
    assert np.allclose(joined, decoded(once)[:, : joined.shape[1]], rtol=0, atol=1e-7)
    state.write_bytes(b"nonsense")
    ran, out = live(sent, scene, *RAW, "--state", state)
    assert (ran.status, out) == (1, b"")
    assert f"{state}: these bytes are no state" in ran.err


def test_a_talker_with_a_track_is_followed(live: Live, scene: Path) -> None:
    (scene.parent / "walk.csv").write_text("time_s,azimuth_deg,elevation_deg,distance_m\n0,20,0,1.2\n1.5,60,0,1.2\n")
    text = scene.read_text().replace("azimuth_deg = 20.0\ndistance_m = 1.2", 'track = "walk.csv"')
    scene.write_text(text)
    ran, out = live(recording(), scene, *RAW)
    assert ran.status == 0
    assert np.isfinite(decoded(out)).all()


def test_tracks_that_meet_are_told_and_the_audio_goes_on(live: Live, scene: Path) -> None:
    (scene.parent / "walk.csv").write_text("time_s,azimuth_deg,elevation_deg,distance_m\n0,20,0,1.2\n0.9,110,0,1.2\n")
    scene.write_text(scene.read_text().replace("azimuth_deg = 20.0\ndistance_m = 1.2", 'track = "walk.csv"'))
    ran, out = live(recording(), scene, *RAW, "--aligned")
    assert ran.status == 0
    assert "warning: bearings at 0.9 s not taken over: talkers 0 and 1" in ran.err
    assert decoded(out).shape[1] == signals().shape[1]
    assert np.isfinite(decoded(out)).all()


def test_a_bound_on_look_ahead_says_what_it_costs(live: Live, scene: Path) -> None:
    ran, _ = live(recording(), scene, *RAW, "--lookahead-ms", 4)
    assert ran.status == 0
    assert "latency 64 samples (4.0 ms) as stated, 64, 64 as measured" in ran.err
    cut, whole_sir = map(float, ran.err.split("look-ahead leaves ")[1].split(" dB SIR")[0].split(" dB of "))
    # Filters made anew lose little; a tenth of a decibel may come out either way.
    assert 30.0 < cut < whole_sir + 0.2


def one_line(ran: Ran, said: str) -> None:
    errors = [line for line in ran.err.splitlines() if line.startswith("error:")]
    assert len(errors) == 1 and said in errors[0], ran.err


def test_nan_ends_the_run_with_all_before_it_written(live: Live, scene: Path) -> None:
    sound = signals()[2:].copy()
    sound[3, 8000] = np.nan
    ran, out = live(PipeFormat("f32le", RATE, 5).encode(sound)[0], scene, *RAW, "--aligned")
    assert ran.status == 1
    one_line(ran, "channel 3 holds NaN or infinite samples at 0.500 s")
    found = decoded(out)
    assert found.shape[1] == 8000  # up to the chunk that holds it
    # Its end counts as followed by silence.
    assert np.abs(found[:, :7000] - whole(scene)[:, :7000]).max() < 1e-4


def test_a_stream_cut_within_a_frame_is_done_in_part(live: Live, scene: Path) -> None:
    ran, out = live(recording()[:-3], scene, *RAW, "--aligned")
    assert ran.status == 3
    one_line(ran, "with 17 bytes of a frame of 20")
    assert decoded(out).shape[1] == signals().shape[1] - 1


def test_a_wav_cut_short_is_done_in_part(live: Live, scene: Path) -> None:
    sent = wav_header(PipeFormat("f32le", RATE, 5), signals().shape[1]) + recording()[: 8000 * 20]
    ran, _ = live(sent, scene)
    assert ran.status == 3
    one_line(ran, "ended at 0.500 s, 1.000 s before its header says")


@pytest.mark.parametrize(
    ("sound", "arguments", "status", "said"),
    [
        (PipeFormat("f32le", 48000, 5), (), 1, "48000 Hz, but the scene's recording has 16000 Hz"),
        (PipeFormat("f32le", RATE, 5), ("--rate", 8000), 1, "16000 Hz, but --rate has 8000 Hz"),
        (PipeFormat("f32le", RATE, 4), (), 1, "4 channels for an array of 5 microphones"),
        (PipeFormat("f32le", RATE, 5), ("--channels", 4), 1, "5 channels, but --channels says 4"),
        (PipeFormat("f32le", RATE, 5), ("--variant", "full"), 1, "cannot run chunk by chunk"),
        (PipeFormat("f32le", RATE, 5), ("--bearing", "20", "--bearing", "20"), 1, "same delays"),
        (PipeFormat("f32le", RATE, 5), ("--bearing", "north"), 1, "--bearing north: give AZ"),
        (PipeFormat("f32le", RATE, 5), ("--json",), 2, "--json needs --output"),
        (PipeFormat("f32le", RATE, 5), ("--chunk-ms", "0"), 2, "chunk-ms"),
    ],
)  # fmt: skip
def test_what_does_not_fit_is_one_line(
    live: Live, scene: Path, sound: PipeFormat, arguments: tuple[object, ...], status: int, said: str
) -> None:
    ran, out = live(wav_header(sound) + recording(), scene, *arguments)
    assert (ran.status, out) == (status, b"")
    assert said in ran.err and "Traceback" not in ran.err


def test_raw_samples_need_their_format(live: Live, scene: Path) -> None:
    ran, _ = live(recording(), scene.parent / "array.toml", *BEARINGS, "--format", "s16le")
    assert ran.status == 2 and "needs --rate and --channels" in ran.err
    ran, _ = live(recording(), scene.parent / "array.toml", *RAW)
    assert ran.status == 1 and "give --bearing for each" in ran.err
    ran, _ = live(recording(), scene)
    assert ran.status == 1 and "no WAV header" in ran.err


@pytest.mark.parametrize(("end", "status"), [("terminate", 143), ("kill", -9)])
def test_ended_in_the_middle_the_state_is_kept(scene: Path, end: str, status: int) -> None:
    state = scene.parent / "state.npz"
    command = [sys.executable, "-m", "unmix", "live", str(scene), *map(str, RAW), "--state", str(state)]
    process = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    assert process.stdin is not None and process.stdout is not None and process.stderr is not None
    process.stdin.write(recording()[: 8000 * 20])
    process.stdin.flush()
    first = process.stdout.read(8000 * 8)  # all that came in has gone out
    getattr(process, end)()
    assert process.wait() == status
    for stream in (process.stdin, process.stdout, process.stderr):
        stream.close()
    separator = LiveSeparator.from_scene(Scene.load(scene), "model")
    assert Keeper(state, separator).load()
    assert separator.position == 8000  # not a chunk is lost, even by a process that could say no farewell
    calm = LiveSeparator.from_scene(Scene.load(scene), "model")
    sound = PipeFormat("f32le", RATE, 5).decode(recording())
    assert np.allclose(decoded(first), calm.push(sound[:, :8000]), rtol=0, atol=1e-7)
    # Chunks of another size: equal but for rounding.
    assert np.allclose(separator.push(sound[:, 8000:]), calm.push(sound[:, 8000:]), rtol=0, atol=1e-12)


def test_a_reader_that_goes_away_is_one_line(scene: Path, tmp_path: Path) -> None:
    """A real pipe whose other end closes after the first bytes."""
    write_audio(tmp_path / "long.wav", np.tile(signals()[2:], 8), RATE)
    command = [sys.executable, "-m", "unmix", "live", str(scene)]
    with (tmp_path / "long.wav").open("rb") as sent:
        process = subprocess.Popen(command, stdin=sent, stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    assert process.stdout is not None and process.stderr is not None
    head = process.stdout.read(44 + 800)
    process.stdout.close()
    said = process.stderr.read().decode()
    process.stderr.close()
    assert process.wait() == 1
    assert head[:4] == b"RIFF" and len(head) == 844
    assert "Traceback" not in said and "Exception ignored" not in said
    assert [line for line in said.splitlines() if line.startswith("error: standard output: was closed after")]
