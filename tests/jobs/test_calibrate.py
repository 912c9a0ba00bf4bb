"""Calibration as a job: what it finds on arrays with known faults, what it is worth, and what it refuses."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from tests.calibration.rig import RATE, Faults, take
from tests.conftest import circle, delayed, speech
from unmix.array import Array
from unmix.audio import read_audio
from unmix.errors import FileError, InputError, UnmixError
from unmix.jobs.calibrate import (
    calibrate,
    calibrate_blindly,
    calibrate_level,
    measure_responses,
    put_on_one_clock,
)
from unmix.jobs.check import check
from unmix.jobs.grade import grade
from unmix.jobs.solve import solve
from unmix.model.delays import paths_from_bearings
from unmix.physics import pairwise_distances
from unmix.render.compose import render_scene
from unmix.render.noise import diffuse_noise
from unmix.render.spec import ArraySpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.scene import Scene, Talker
from unmix.sofa import write_sofa

ARRAY = circle(6)
AROUND = [(0.3, 0.0), (1.8, 0.0), (3.4, 0.0), (4.9, 0.0), (1.0, 1.1)]
"""Four level bearings and one well above, radians."""
OTHERS = np.arange(1, 7)


def scene_of(samples: np.ndarray, azimuth: float, elevation: float = 0.0, array: Array = ARRAY) -> Scene:
    return Scene.from_arrays(samples, array, [Talker("source", azimuth, elevation)], sample_rate=RATE)


def scenes_of(faults: Faults, rng: np.random.Generator, bearings: list[tuple[float, float]]) -> list[Scene]:
    return [scene_of(take(ARRAY, faults, a, e, rng), a, e) for a, e in bearings]


def sir_db(faults: Faults, array: Array) -> float:
    """Graded SIR of the worse talker, 20 dB over the noise, when `array` is what the model believes."""
    azimuth = np.radians([20.0, 95.0])
    true = replace(ARRAY, positions_m=ARRAY.positions_m + faults.position_m)
    signals = np.stack([speech("novel-reader", 3.0), speech("card-reader", 3.0)])
    images = delayed(signals, paths_from_bearings(true, azimuth), RATE)
    noise = 5e-3 * np.random.default_rng(1).standard_normal(images.shape[1:])
    talkers = [Talker("a", azimuth[0]), Talker("b", azimuth[1])]
    mixture = faults.record(images.sum(axis=0) + noise)
    separated = solve(Scene.from_arrays(mixture, array, talkers, sample_rate=RATE), "model").signals
    assert separated is not None
    grades = grade(separated, faults.record(images)[:, 0], sample_rate=RATE, names=["a", "b"])
    return min(t.sir_db for t in grades.talkers if t.sir_db is not None)


@pytest.mark.parametrize("positions", [False, True])
def test_corrected_separation_is_that_of_the_faultless_array(positions: bool) -> None:
    """2 dB and 20 us (and 2 mm) of fault, takes at 20 dB: within 2 dB SIR."""
    none = Faults(np.zeros(7), np.zeros(7), np.ones(7), np.zeros((7, 3)))
    faultless = sir_db(none, ARRAY)
    for seed in range(2):
        rng = np.random.default_rng(50 + seed)
        faults = Faults.draw(rng, 7, position_m=2e-3 if positions else 0.0)
        found = calibrate(scenes_of(faults, rng, AROUND if positions else AROUND[:1]), positions=positions)
        assert sir_db(faults, found.array) > faultless - 2.0
        assert sir_db(faults, ARRAY) < faultless - 12.0


@pytest.mark.parametrize("positions", [False, True])
def test_deviations_are_honest(positions: bool) -> None:
    gain, delay, place = [], [], []
    for seed in range(5 if positions else 8):
        rng = np.random.default_rng(seed)
        faults = Faults.draw(rng, 7, position_m=2e-3 if positions else 0.0)
        found = calibrate(scenes_of(faults, rng, AROUND if positions else AROUND[:2]), positions=positions).array
        true = faults.against(0)
        assert np.array_equal(found.polarity, true.sign)
        assert found.gain_std_db is not None and found.delay_std_s is not None
        gain.append((found.gain_db - true.gain_db)[OTHERS] / found.gain_std_db[OTHERS])
        delay.append((found.delay_s - true.delay_s)[OTHERS] / found.delay_std_s[OTHERS])
        if positions:
            assert found.position_std_m is not None
            off = found.positions_m - ARRAY.positions_m - true.position_m
            place.append(off[OTHERS] / found.position_std_m[OTHERS, None])
    for errors in (gain, delay, place) if positions else (gain, delay):
        # 30 to 90 draws.
        assert np.sqrt(np.mean(np.square(errors))) == pytest.approx(1.0, abs=0.3)


def test_without_takes_from_above_the_height_is_kept() -> None:
    rng = np.random.default_rng(3)
    faults = Faults.draw(rng, 7, position_m=2e-3)
    faults.position_m[:, 2] = 0.0
    found = calibrate(scenes_of(faults, rng, AROUND[:4]), positions=True)
    assert found.axes == "xy" and "z is kept" in found.notes[0]
    assert found.array.positions_m[:, 2] == pytest.approx(ARRAY.positions_m[:, 2])
    assert found.array.positions_m - ARRAY.positions_m == pytest.approx(faults.against(0).position_m, abs=1e-4)


def test_takes_that_disagree_say_so_and_widen_the_deviations() -> None:
    rng = np.random.default_rng(4)
    faults = Faults.draw(rng, 7, position_m=2e-3)
    found = calibrate(scenes_of(faults, rng, AROUND[:4]))
    assert found.scatter is not None and found.scatter > 100.0
    assert any("positions are off" in note for note in found.notes)
    assert found.array.delay_std_s is not None
    off = (found.array.delay_s - faults.against(0).delay_s)[OTHERS] / found.array.delay_std_s[OTHERS]
    assert np.sqrt(np.mean(off**2)) < 2.5


def test_a_near_source_is_known_to_be_near() -> None:
    rng = np.random.default_rng(5)
    faults = Faults.draw(rng, 7)
    y = take(ARRAY, faults, 0.4, 0.0, rng, distance_m=0.3)
    near = replace(scene_of(y, 0.4), talkers=(Talker("source", 0.4, 0.0, 0.3),))
    error = [np.abs(calibrate(s).array.gain_db - faults.against(0).gain_db).max() for s in (near, scene_of(y, 0.4))]
    assert error[0] < 0.05 and error[1] > 0.5


def test_in_a_room_deviations_hold_the_reflections() -> None:
    """A loudspeaker at 0.3 to 0.5 m, T20 0.3 s: errors within what is stated, far above what noise alone would give."""
    errors = []
    for seed, distance in ((1, 0.3), (2, 0.5), (3, 0.4)):
        azimuth_deg = 20.0 + 70.0 * seed
        spec = RenderSpec(
            duration_s=3.0,
            seed=seed,
            room=RoomSpec(size_m=[6.0, 4.5 + 0.1 * seed, 2.8], t20_s=0.3),
            array=ArraySpec(positions_m=ARRAY.positions_m.tolist()),
            talker=[TalkerSpec(name="source", azimuth_deg=azimuth_deg, distance_m=distance)],
            noise=NoiseSpec(sensor_snr_db=30.0),
        )
        mixture = render_scene(spec, clips={"source": speech("novel-reader", 3.0)}).mixture
        source = Talker.at("source", azimuth_deg, distance_m=distance)
        found = calibrate(Scene.from_arrays(mixture, ARRAY, [source], sample_rate=RATE))
        assert found.takes[0].misfit > 9.0 and "reflections" in found.notes[0]
        assert found.array.delay_std_s is not None
        errors.append(found.array.delay_s[OTHERS] / found.array.delay_std_s[OTHERS])
        assert np.abs(found.array.delay_s).max() < 2e-6
    assert 0.2 < np.sqrt(np.mean(np.square(errors))) < 1.5


def test_one_scene_with_several_sources_in_turn() -> None:
    rng = np.random.default_rng(6)
    faults = Faults.draw(rng, 7)
    joined = np.concatenate([take(ARRAY, faults, a, 0.0, rng, seconds=3.0) for a in (0.3, 2.0)], axis=1)
    talkers = [Talker("first", 0.3, active_s=[(0.0, 3.0)]), Talker("second", 2.0, active_s=[(3.0, 6.0)])]
    scene = Scene.from_arrays(joined, ARRAY, talkers, sample_rate=RATE)
    found = calibrate(scene)
    assert [t.name for t in found.takes] == ["first", "second"]
    assert found.array.delay_s == pytest.approx(faults.against(0).delay_s, abs=5e-7)
    overlapping = (talkers[0], replace(talkers[1], active_s=[(2.5, 6.0)]))
    with pytest.raises(InputError, match=r"both play at 2\.5 s"):
        calibrate(replace(scene, talkers=overlapping))
    with pytest.raises(InputError, match="no `active_s` for 'second'"):
        calibrate(replace(scene, talkers=(talkers[0], replace(talkers[1], active_s=None))))


def test_what_bearings_cannot_tell_is_refused() -> None:
    rng = np.random.default_rng(7)
    faults = Faults.draw(rng, 7)
    for bearings in (AROUND[:1], AROUND[:2], [(0.0, 0.0), (0.05, 0.0), (0.1, 0.0)]):
        with pytest.raises(InputError, match=r"cannot be told from delays.*at least three bearings"):
            calibrate(scenes_of(faults, rng, bearings), positions=True)


def test_takes_that_are_none() -> None:
    rng = np.random.default_rng(8)
    faults = Faults.draw(rng, 7)
    one, two = take(ARRAY, faults, 0.3, 0.0, rng), take(ARRAY, faults, 2.4, 0.0, rng, source=speech("card-reader", 4.0))
    tone = 0.1 * np.sin(2 * np.pi * 1000 * np.arange(4 * RATE) / RATE)
    dead = one.copy()
    dead[3] = 0.0
    cases = [
        (one + two, "two sources, or strong reflections"),
        (take(ARRAY, faults, 0.3, 0.0, rng, source=tone), "too little bandwidth|give at least"),
        (dead, "channel 3 is silent"),
        (one[:, : RATE // 4], "give at least a second"),
        (1e-3 * rng.standard_normal(one.shape), "bandwidth|one source"),
    ]
    for samples, what in cases:
        with pytest.raises(InputError, match=what) as caught:
            calibrate(scene_of(samples, 0.3))
        assert "\n" not in str(caught.value)
    with pytest.raises(InputError, match="has no bearing"):
        calibrate(replace(scene_of(one, 0.3), talkers=(Talker("source"),)))
    with pytest.raises(InputError, match=r"no .*talker.* says where"):
        calibrate(replace(scene_of(one, 0.3), talkers=()))
    wider = Scene.from_arrays(one, circle(6, 0.05), [Talker("source", 0.3)], sample_rate=RATE)
    with pytest.raises(InputError, match="another array"):
        calibrate([scene_of(one, 0.3), wider])


def blind(seed: int, seconds: int = 20) -> tuple[Faults, np.ndarray]:
    rng = np.random.default_rng(seed)
    faults = Faults.draw(rng, 7, position_m=2e-3)
    faults.position_m[:, 2] = 0.0
    field = diffuse_noise(rng, ARRAY.positions_m + faults.position_m, seconds * RATE, RATE, speed_m_s=343.2)
    return faults, 0.05 * faults.record(field + 0.1 * rng.standard_normal(field.shape))


def test_diffuse_noise_tells_gain_delay_polarity_and_spacing() -> None:
    gain, delay, spacing = [], [], []
    for seed in range(5):
        faults, noise = blind(seed)
        true = faults.against(0)
        found = calibrate_blindly(Scene.from_arrays(noise, ARRAY, sample_rate=RATE), positions=True)
        a = found.array
        assert np.array_equal(a.polarity, true.sign)
        assert a.gain_std_db is not None and a.delay_std_s is not None and a.position_std_m is not None
        assert found.misfit == pytest.approx(1.0, abs=0.2)
        gain.append((a.gain_db - true.gain_db)[OTHERS] / a.gain_std_db[OTHERS])
        delay.append((a.delay_s - true.delay_s)[OTHERS] / a.delay_std_s[OTHERS])
        wanted = pairwise_distances(ARRAY.positions_m + faults.position_m)
        i, j = np.triu_indices(7, 1)
        std = np.hypot(a.position_std_m[i], a.position_std_m[j])
        spacing.append((pairwise_distances(a.positions_m) - wanted)[i, j] / std)
        assert np.abs(pairwise_distances(ARRAY.positions_m) - wanted).max() > 2e-3
    for errors in (gain, delay):
        assert np.sqrt(np.mean(np.square(errors))) == pytest.approx(1.0, abs=0.35)  # 30 draws
    assert 0.5 < np.sqrt(np.mean(np.square(spacing))) < 1.5


def test_spacings_that_differ_are_named_when_positions_are_not_asked_for() -> None:
    faults, noise = blind(1)
    found = calibrate_blindly(Scene.from_arrays(noise, ARRAY, sample_rate=RATE))
    assert "mm as the array file says" in found.notes[0]
    assert np.array_equal(found.array.positions_m, ARRAY.positions_m)
    assert found.array.gain_db == pytest.approx(faults.against(0).gain_db, abs=0.05)


def test_noise_that_is_not_diffuse_is_refused() -> None:
    rng = np.random.default_rng(9)
    faults = Faults.draw(rng, 7)
    speechlike = take(ARRAY, faults, 0.5, 0.0, rng, seconds=8.0)
    with pytest.raises(InputError, match="not diffuse"):
        calibrate_blindly(Scene.from_arrays(speechlike, ARRAY, sample_rate=RATE))
    with pytest.raises(InputError, match="needs 5 s"):
        calibrate_blindly(Scene.from_arrays(speechlike[:, : 2 * RATE], ARRAY, sample_rate=RATE))


def drifting(ppm: float, offset_s: float, seconds: float = 16.0) -> tuple[Scene, np.ndarray]:
    """A take of which channel 4 was recorded by another recorder, exactly resampled by its spectrum."""
    rng = np.random.default_rng(10)
    none = Faults(np.zeros(7), np.zeros(7), np.ones(7), np.zeros((7, 3)))
    y = take(ARRAY, none, 0.6, 0.0, rng, seconds=seconds, snr_db=40.0)
    off = y.copy()
    # Band-limited to 7 kHz, so that a fine grid and a cubic through it are exact to -90 dB.
    n = y.shape[1]
    from scipy.interpolate import CubicSpline
    from scipy.signal import resample as fourier

    fine = fourier(y[4], 8 * n)
    at = np.arange(n) * (1.0 - 1e-6 * ppm) - offset_s * RATE
    off[4] = CubicSpline(np.arange(8 * n) / 8, fine)(np.clip(at, 0, n - 1))
    return scene_of(off, 0.6), y


def test_recorders_with_clocks_of_their_own_are_put_onto_one(tmp_path: Path) -> None:
    scene, straight = drifting(45.0, 0.0123)
    assert not check(scene).fit
    with pytest.raises(InputError, match=r"another clock.*--repaired"):
        calibrate(scene)
    repaired, clocks = put_on_one_clock(scene, tmp_path / "repaired.wav")
    assert [c.channel for c in clocks] == [4]
    assert clocks[0].drift_ppm == pytest.approx(45.0, abs=0.3)
    assert check(repaired).fit
    got = read_audio(tmp_path / "repaired.wav")[0]
    assert np.abs(got[:4] - straight[:4]).max() < 1e-7
    # The one source's bearing says what delay is the geometry's own.
    left = calibrate(repaired).array
    assert left.delay_s == pytest.approx(np.zeros(7), abs=5e-6)
    with pytest.raises(FileError, match="exists already"):
        put_on_one_clock(scene, tmp_path / "repaired.wav")


def test_repair_leaves_less_than_a_microsecond() -> None:
    """The delay of the repaired channel against the straight one, chunk by chunk."""
    import tempfile

    from unmix.calibration.clocks import chunk_delays

    scene, straight = drifting(-30.0, 0.004)
    with tempfile.TemporaryDirectory() as folder:
        put_on_one_clock(scene, Path(folder) / "r.wav")
        got = read_audio(Path(folder) / "r.wav")[0]
    delays = []
    for at in range(2 * RATE, 12 * RATE, 3 * RATE):
        both = np.stack([straight[4, at : at + 3 * RATE], got[4, at : at + 3 * RATE]])
        delays.append(chunk_delays(both, 0, RATE)[0][1])
    assert np.ptp(delays) < 1.5e-6


def test_a_tone_gives_the_level_of_full_scale() -> None:
    t = np.arange(3 * RATE) / RATE
    samples = 1e-4 * np.random.default_rng(0).standard_normal((7, len(t)))
    samples[2] += 0.1 * np.sin(2 * np.pi * 1000.0 * t)
    scene = Scene.from_arrays(samples, ARRAY, sample_rate=RATE)
    found = calibrate_level(scene, 94.0, channel=2)
    assert found.tone_hz == pytest.approx(1000.0, abs=1.0)
    assert found.array.full_scale_db_spl == pytest.approx(114.0, abs=0.01)
    level = check(replace(scene, array=found.array)).channels[2].level_db_spl
    assert level == pytest.approx(94.0, abs=0.02)
    content = ARRAY.to_file()
    content.gain_db = [0.0, 0.0, 6.0, 0.0, 0.0, 0.0, 0.0]
    louder = replace(scene, array=Array.from_file(content, where=""))
    assert calibrate_level(louder, 94.0, channel=2).array.full_scale_db_spl == pytest.approx(120.0, abs=0.01)


def test_what_is_no_tone() -> None:
    rng = np.random.default_rng(0)
    noise = Scene.from_arrays(0.1 * rng.standard_normal((7, RATE)), ARRAY, sample_rate=RATE)
    with pytest.raises(InputError, match="no steady tone"):
        calibrate_level(noise, 94.0)
    t = np.arange(2 * RATE) / RATE
    swelling = np.tile(0.1 * (0.2 + t) * np.sin(2 * np.pi * 1000.0 * t), (7, 1))
    with pytest.raises(InputError, match="level changes by"):
        calibrate_level(Scene.from_arrays(swelling, ARRAY, sample_rate=RATE), 94.0)
    with pytest.raises(InputError, match="has 0 to 6"):
        calibrate_level(noise, 94.0, channel=9)


def test_sweeps_become_an_array_of_responses(tmp_path: Path) -> None:
    """In a decaying field of known reverberation time; the windowed responses are the delays of the array."""
    from scipy.signal import fftconvolve

    from unmix.calibration.sweep import exponential_sweep

    rng, t60 = np.random.default_rng(11), 0.35
    sweep = 0.2 * exponential_sweep(50.0, 7800.0, 4.0, RATE)
    azimuths = np.radians(np.arange(0.0, 360.0, 30.0))
    time_s = np.arange(RATE) / RATE
    scenes = []
    for azimuth in azimuths:
        direct = delayed(np.concatenate([np.zeros(300), sweep, np.zeros(RATE)])[None],
                         paths_from_bearings(ARRAY, [azimuth]), RATE)[0]  # fmt: skip
        tail = 0.02 * rng.standard_normal((7, RATE)) * 10 ** (-3 * time_s / t60)
        tail[:, : round(0.008 * RATE)] = 0.0
        heard = direct + fftconvolve(direct, tail, axes=1)[:, : direct.shape[1]]
        heard += 1e-4 * rng.standard_normal(heard.shape)
        scenes.append(scene_of(heard, float(azimuth)))
    found = measure_responses(scenes, sweep, RATE, window_s=0.006)
    expected = -10 * np.log10(np.sum((0.02 * 10 ** (-3 * time_s[128:] / t60)) ** 2))
    for take_ in found.measured:
        assert take_.t20_s == pytest.approx(t60, rel=0.06)
        assert take_.drr_db == pytest.approx(expected, abs=1.0)
    assert found.responses is not None
    write_sofa(tmp_path / "array.sofa", found.responses)
    array = Array.load(tmp_path / "array.sofa")
    assert array.responses is not None
    f = np.linspace(300.0, 6500.0, 60)
    h = array.responses.spectrum(float(azimuths[3]), 0.0, f)
    truth = np.exp(-2j * np.pi * f[:, None] * paths_from_bearings(ARRAY, [azimuths[3]]).delay_s)
    assert 20 * np.log10(np.abs(h / h[:, :1] - truth).max()) < -30.0
    silent = scene_of(1e-3 * rng.standard_normal((7, 6 * RATE)), 0.0)
    with pytest.raises(InputError, match="does not hold the sweep"):
        measure_responses(silent, sweep, RATE)


def test_corrections_for_another_array_are_refused(tmp_path: Path) -> None:
    rng = np.random.default_rng(12)
    found = calibrate(scene_of(take(ARRAY, Faults.draw(rng, 7), 0.3, 0.0, rng), 0.3))
    found.save(tmp_path / "array.toml")
    again = Array.load(tmp_path / "array.toml")
    assert again.gain_db == pytest.approx(found.array.gain_db) and again.delay_std_s is not None
    content = found.array.to_file()
    content.positions_m = content.positions_m[:5]
    with pytest.raises(UnmixError, match="7 values for 5 microphones"):
        Array.from_file(content, where="array.toml")


def test_it_goes_into_json_and_notebooks() -> None:
    rng = np.random.default_rng(13)
    found = calibrate(scene_of(take(ARRAY, Faults.draw(rng, 7), 0.3, 0.0, rng), 0.3))
    tree = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert len(tree["channels"]["gain_db"]) == 7 and tree["takes"][0]["snr_db"] > 5.0
    assert "polarity" in found._repr_html_()
