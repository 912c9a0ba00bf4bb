"""The main job, on scenes with exact delays and real speech."""

from __future__ import annotations

import json
from pathlib import Path

import msgspec
import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from unmix.audio import read_audio, write_audio
from unmix.errors import FileError, InputError, UnmixWarning, UnsolvableError
from unmix.jobs.solve import solve, solve_to_folder
from unmix.metrics.distortion import ReferenceSet
from unmix.model.delays import paths_from_bearings
from unmix.scene import Scene, Talker
from unmix.settings import SolverSettings
from unmix.track import Track
from unmix.variant import PRESETS, Variant

RATE = 16000
MODEL = PRESETS["model"]


def settings(**changes: object) -> Variant:
    return msgspec.structs.replace(MODEL, name="test", solver=msgspec.structs.replace(MODEL.solver, **changes))


def anechoic(
    azimuths_deg: list[float], names: list[str], *, seconds: float = 10.0, rate: int = RATE, seed: int = 71
) -> tuple[Scene, np.ndarray, np.ndarray]:
    """A scene, its talkers as received at the reference microphone, and their images; 30 dB above each microphone."""
    array = circle()
    paths = paths_from_bearings(array, np.radians(azimuths_deg), 0.0, 1.2)
    signals = np.stack([speech(name, seconds, rate) for name in names])
    images = delayed(signals, paths, rate)
    noise = 0.05 * 10 ** (-30 / 20) * np.random.default_rng(seed).standard_normal(images.shape[1:])
    talkers = [Talker(n, float(np.radians(a)), 0.0, 1.2) for n, a in zip(names, azimuths_deg, strict=True)]
    return Scene.from_arrays(images.sum(axis=0) + noise, array, talkers, sample_rate=rate), signals, images


@pytest.mark.parametrize(
    ("azimuths_deg", "names", "least_sir_db", "least_leakage_db"),
    [
        ([-130.0, -55.0], ["robot-commands", "arctic-a0009"], 45.0, 45.0),
        ([-20.0, 57.0, 170.0], ["arctic-a0007", "novel-reader", "robot-commands"], 42.0, 40.0),
    ],
)
def test_anechoic_talkers_come_apart(
    azimuths_deg: list[float], names: list[str], least_sir_db: float, least_leakage_db: float
) -> None:
    scene, signals, images = anechoic(azimuths_deg, names)
    solution = solve(scene, "model")
    ratios = ReferenceSet(signals).split(solution.signals)
    for k in range(len(names)):
        assert ratios.sir_db[k][k] > least_sir_db
    for k in range(len(names)):
        alone = solve(Scene.from_arrays(images[k], circle(), scene.talkers, sample_rate=RATE), "model").signals
        power = np.mean(alone**2, axis=1)
        for other in range(len(names)):
            if other != k:
                assert 10 * np.log10(power[other] / power[k]) < -least_leakage_db


def test_sdr_is_what_the_noise_gain_allows() -> None:
    scene, signals, images = anechoic([20.0, 95.0], ["novel-reader", "card-reader"])
    solution = solve(scene, "model")
    noise_alone = scene.recording.read() - images.sum(axis=0)
    noise = solve(Scene.from_arrays(noise_alone, circle(), scene.talkers, sample_rate=RATE), "model").signals
    allowed = 10 * np.log10(np.mean(signals**2, axis=1) / np.mean(noise**2, axis=1))
    ratios = ReferenceSet(signals).split(solution.signals)
    for k in range(2):
        assert ratios.sdr_db[k][k] > allowed[k] - 1.0


@pytest.mark.parametrize("method", ["reduced", "stationary"])
def test_methods_give_the_same_talkers(method: str) -> None:
    scene, _, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=2.0)
    one = solve(scene, settings(method="stationary", prior_weight=1e-4)).signals
    other = solve(scene, settings(method=method, prior_weight=1e-4)).signals
    inner = slice(4000, -4000)
    assert np.abs(one - other)[:, inner].max() < 1e-5 * np.abs(one).max()


def test_a_walking_talker_is_followed() -> None:
    time = np.linspace(0.0, 4.0, 401)
    azimuth = np.radians(20.0 + 20.0 * time)
    array = circle()
    track = Track(time, azimuth, np.zeros_like(time), np.full_like(time, 1.2))
    signals = np.stack([speech("novel-reader", 4.0), speech("card-reader", 4.0)])
    paths = paths_from_bearings(
        array, np.stack([azimuth, np.full_like(time, np.radians(-60.0))], axis=1), 0.0, 1.2, time_s=time
    )
    # Exact images: each sample of a band-limited signal at its own delay, summed over a long sinc.
    heard = 0.0005 * np.random.default_rng(3).standard_normal((7, 64000))
    delay, gain = paths.at(np.arange(64000) / RATE)
    offsets = np.arange(-48, 49)
    window = np.kaiser(97, 12.0)
    padded = np.pad(signals, ((0, 0), (60, 60)))
    for k in range(2):
        for m in range(7):
            d = delay[:, k, m] * RATE
            whole = np.rint(d).astype(int)
            places = np.arange(64000)[:, None] - whole[:, None] + offsets + 60
            weights = np.sinc(offsets + (d - whole)[:, None]) * window
            heard[m] += gain[:, k, m] * np.sum(padded[k][places] * weights, axis=1)
    talkers = [Talker("a", track=track), Talker("b", float(np.radians(-60.0)), 0.0, 1.2)]
    scene = Scene.from_arrays(heard, array, talkers, sample_rate=RATE)
    with pytest.warns(UnmixWarning, match="reduced used instead"):
        solution = solve(scene, "model")
    assert solution.method == "reduced"
    assert solution.talkers[0].moving
    ratios = ReferenceSet(signals).split(solution.signals)
    assert ratios.sir_db[0][0] > 40 and ratios.sir_db[1][1] > 40


def test_folder_holds_what_memory_does(tmp_path: Path) -> None:
    scene, _, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=3.0)
    kept = solve(scene, "model")
    written = solve_to_folder(scene, tmp_path / "out", "model")
    assert written.signals is None
    content = json.loads((tmp_path / "out" / "solution.json").read_text())
    assert [t["name"] for t in content["talkers"]] == ["novel-reader", "card-reader"]
    for k, entry in enumerate(content["talkers"]):
        signal, rate = read_audio(tmp_path / "out" / entry["file"])
        assert rate == RATE
        assert signal[0] == pytest.approx(kept.signals[k] * entry["scale"], abs=1e-6)
    with pytest.raises(FileError, match="--overwrite"):
        solve_to_folder(scene, tmp_path / "out", "model")
    solve_to_folder(scene, tmp_path / "out", "model", overwrite=True)
    assert not list((tmp_path / "out").glob(".*"))


def test_nothing_is_left_behind_when_a_run_fails(tmp_path: Path) -> None:
    scene, _, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=3.0)
    write_audio(tmp_path / "mix.wav", scene.recording.read(), RATE)
    data = (tmp_path / "mix.wav").read_bytes()
    from unmix.audio import Recording

    whole = Recording.open([tmp_path / "mix.wav"])
    (tmp_path / "mix.wav").write_bytes(data[: len(data) // 2])
    broken = Scene("cut", whole, scene.array, scene.talkers)
    with pytest.raises(FileError, match="cut short"):
        solve_to_folder(broken, tmp_path / "out", "model")
    assert not (tmp_path / "out").exists() or not list((tmp_path / "out").iterdir())


def test_a_signal_beyond_full_scale_is_scaled_down_whole(tmp_path: Path) -> None:
    scene, _, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=2.0)
    loud = Scene.from_arrays(scene.recording.read() * 40.0, scene.array, scene.talkers, sample_rate=RATE)
    with pytest.warns(UnmixWarning):
        solution = solve_to_folder(loud, tmp_path / "out", "model")
    for talker in solution.talkers:
        signal, _ = read_audio(tmp_path / "out" / str(talker.file))
        assert np.abs(signal).max() <= 1.0 + 1e-6
        assert talker.scale == pytest.approx(1.0 / talker.peak)


def test_names_become_safe_and_unique_files(tmp_path: Path) -> None:
    scene, _, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=1.0)
    talkers = [Talker("Ann/../x", scene.talkers[0].azimuth), Talker("ann <x>", scene.talkers[1].azimuth)]
    solution = solve_to_folder(
        Scene.from_arrays(scene.recording.read(), scene.array, talkers, sample_rate=RATE), tmp_path / "o", "model"
    )
    files = [str(t.file) for t in solution.talkers]
    assert len({f.lower() for f in files}) == 2
    assert all((tmp_path / "o" / f).exists() and "/" not in f for f in files)


def test_cases_without_an_answer_are_refused() -> None:
    scene, _, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=1.0)
    recording = scene.recording.read()
    same = [Talker("a", 0.3), Talker("b", 0.3)]
    with pytest.raises(UnsolvableError, match="talkers 0 and 1"):
        solve(Scene.from_arrays(recording, scene.array, same, sample_rate=RATE), "model")
    many = [Talker(str(i), 0.5 * i) for i in range(8)]
    with pytest.raises(UnsolvableError, match="8 talkers and 7 microphones"):
        solve(Scene.from_arrays(recording, scene.array, many, sample_rate=RATE), "model")
    with pytest.raises(UnsolvableError, match="one talker"):
        solve(scene, settings(constraint="free"))
    with pytest.raises(UnsolvableError, match="prior"):
        solve(scene, settings(prior="none", method="reduced"))
    with pytest.raises(UnsolvableError, match="noise_only_s"):
        solve(scene, settings(noise="measured"))
    with pytest.raises(InputError, match="at least 100 ms"):
        solve(Scene.from_arrays(recording[:, :800], scene.array, scene.talkers, sample_rate=RATE), "model")
    with pytest.raises(InputError, match="did you mean 'model'"):
        solve(scene, "modle")


def test_no_prior_is_named() -> None:
    scene, _, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=1.0)
    assert solve(scene, settings(prior="none")).details["answer"] == "minimum-norm"


@pytest.mark.parametrize("noise", ["diffuse", "fitted", "observed", "measured"])
def test_every_noise_model_separates(noise: str) -> None:
    scene, signals, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=4.0)
    if noise == "measured":
        quiet = scene.recording.read().copy()
        quiet[:, :16000] = 5e-4 * np.random.default_rng(1).standard_normal((7, 16000))
        scene = Scene("s", Scene.from_arrays(quiet, scene.array, sample_rate=RATE).recording, scene.array,
                      scene.talkers, noise_only_s=[(0.0, 1.0)])  # fmt: skip
        signals = signals.copy()
        signals[:, :16000] = 0.0
    ratios = ReferenceSet(signals).split(solve(scene, settings(noise=noise)).signals)
    assert min(ratios.sir_db[0][0], ratios.sir_db[1][1]) > 30


def test_silent_and_copied_channels_are_named() -> None:
    scene, _, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=1.0)
    recording = scene.recording.read().copy()
    recording[2] = 0.0
    recording[5] = recording[4]
    with pytest.warns(UnmixWarning) as caught:
        solution = solve(Scene.from_arrays(recording, scene.array, scene.talkers, sample_rate=RATE), "model")
    said = " ".join(str(w.message) for w in caught)
    assert "channel 2 is silent" in said and "channels 4 and 5" in said
    assert any("channel 2" in w for w in solution.warnings)


def test_solving_opens_no_reference(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    scene, _, _ = anechoic([20.0, 95.0], ["novel-reader", "card-reader"], seconds=1.0)
    talkers = [Talker(t.name, t.azimuth, references={"plain": tmp_path / "does-not-exist.wav"}) for t in scene.talkers]
    solve(Scene.from_arrays(scene.recording.read(), scene.array, talkers, sample_rate=RATE), "model")


def test_settings_are_checked() -> None:
    with pytest.raises(msgspec.ValidationError):
        msgspec.convert({"prior_weight": -1.0}, SolverSettings)
