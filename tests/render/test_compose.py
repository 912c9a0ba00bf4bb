from pathlib import Path

import numpy as np
import pytest

from unmix.audio import write_audio
from unmix.errors import InputError, UnmixWarning
from unmix.metrics.decay import measure_decay
from unmix.render.compose import RenderedScene, render_scene
from unmix.render.room import high_pass
from unmix.render.spec import ArraySpec, FaultSpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.track import Track

RATE = 16000
CIRCLE = [[0.04, 0.0, 0.0], [-0.02, 0.0346, 0.0], [-0.02, -0.0346, 0.0], [0.0, 0.0, 0.0]]
ROOM = RoomSpec(size_m=[4.2, 3.6, 2.6], absorption=0.4)


def clip(seed: int, samples: int = RATE) -> np.ndarray:
    """Noise that falls with frequency, 100 Hz to 7 kHz."""
    spectrum = np.fft.rfft(np.random.default_rng(seed).standard_normal(samples))
    frequencies = np.fft.rfftfreq(samples, 1.0 / RATE)
    spectrum *= np.where((frequencies > 100.0) & (frequencies < 7000.0), np.maximum(frequencies, 1.0) ** -0.5, 0.0)
    signal = np.fft.irfft(spectrum, samples)
    return 0.3 * signal / np.abs(signal).max()


CLIPS = {"mate": clip(1), "bosun": clip(2)}


def spec(**changes: object) -> RenderSpec:
    fields: dict[str, object] = {
        "array": ArraySpec(positions_m=CIRCLE, reference_channel=3),
        "talker": [
            TalkerSpec(name="mate", azimuth_deg=20.0, distance_m=1.2),
            TalkerSpec(name="bosun", azimuth_deg=95.0, distance_m=1.0, level_db=-29.0),
        ],
        "room": ROOM,
        "seed": 5,
    }
    return RenderSpec(**{**fields, **changes})


def level_db(signal: np.ndarray) -> float:
    return float(10.0 * np.log10(np.mean(signal**2)))


def rendered(**changes: object) -> RenderedScene:
    return render_scene(spec(**changes), clips=CLIPS)


def test_the_mixture_is_images_and_noise() -> None:
    scene = rendered(noise=NoiseSpec(sensor_snr_db=30.0, diffuse_snr_db=20.0))
    assert scene.images.shape == (2, 4, RATE)
    assert scene.mixture == pytest.approx(scene.images.sum(axis=0) + scene.noise, abs=1e-12)
    assert np.array_equal(scene.image, scene.images[:, 3])


def test_levels_are_those_asked_for() -> None:
    scene = rendered(noise=NoiseSpec(sensor_snr_db=30.0))
    assert [level_db(image) for image in scene.image] == pytest.approx([-26.0, -29.0])
    # 30 dB below the quieter of the two talkers at each microphone; a second of noise scatters by 0.05 dB.
    assert [level_db(channel) for channel in scene.noise] == pytest.approx([-59.0] * 4, abs=0.2)
    diffuse = rendered(noise=NoiseSpec(diffuse_snr_db=20.0, diffuse_spectrum="white"), duration_s=4.0)
    assert [level_db(channel) for channel in diffuse.noise] == pytest.approx([-49.0] * 4, abs=0.3)


def test_the_seed_decides_everything() -> None:
    noisy = {"noise": NoiseSpec(sensor_snr_db=30.0, diffuse_snr_db=20.0), "faults": FaultSpec(gain_std_db=1.0)}
    one, same, other = rendered(**noisy), rendered(**noisy), rendered(**noisy, seed=6)
    assert np.array_equal(one.mixture, same.mixture)
    assert not np.allclose(one.noise, other.noise, atol=1e-4)
    assert not np.allclose(one.images, other.images, atol=1e-4)
    assert not np.allclose(one.faults.gain_db, other.faults.gain_db)


def test_without_a_room_all_kinds_are_the_same() -> None:
    scene = rendered(room=None)
    assert np.array_equal(scene.dry, scene.image)
    assert np.array_equal(scene.early, scene.image)
    assert scene.t20_s == (None, None)


def test_azimuth_counts_from_the_front_to_the_left() -> None:
    # At 20 degrees the microphone in front hears first, at 95 degrees the one to the left.
    scene = rendered(room=None)
    for image, order in zip(scene.images, ([0, 1, 2], [1, 0, 2]), strict=True):
        spectra = np.fft.rfft(image)
        band = np.fft.rfftfreq(RATE, 1.0 / RATE)
        weight = np.abs(spectra[3]) * (band < 1500.0)
        slopes = [np.sum(weight * np.angle(s * np.conj(spectra[3])) * band) / np.sum(weight * band**2) for s in spectra]
        assert list(np.argsort(slopes)[::-1][:1]) == order[:1]
        assert int(np.argmin(slopes)) == order[2]


def test_a_plane_wave_is_a_talker_far_away() -> None:
    far = TalkerSpec(name="mate", azimuth_deg=20.0, elevation_deg=10.0, distance_m=900.0)
    plane = TalkerSpec(name="mate", azimuth_deg=20.0, elevation_deg=10.0)
    images = []
    for talker in (far, plane):
        scene = render_scene(
            spec(room=None, talker=[talker], duration_s=5.0), clips={"mate": np.tile(CLIPS["mate"], 5)}
        )
        images.append(np.fft.rfft(scene.images[0, :, -RATE:] * np.hanning(RATE))[:, 1000])
    ratio = [image / image[3] for image in images]
    assert ratio[0] == pytest.approx(ratio[1], abs=2e-3)


def test_dry_is_early_is_image_as_far_as_the_room_leaves_them() -> None:
    # A click: what follows 50 ms after the direct sound is in the image and not in the early reference.
    click = np.zeros(RATE // 2)
    click[100] = 1.0
    talker = TalkerSpec(name="mate", azimuth_deg=20.0, distance_m=1.2, level_db=-60.0)
    scene = render_scene(spec(talker=[talker]), clips={"mate": click})
    direct = int(np.argmax(np.abs(scene.dry[0])))
    boundary = direct + round(0.05 * RATE)
    late = scene.image[0] - scene.early[0]
    assert np.sum(late[: boundary - 20] ** 2) < 1e-3 * np.sum(late**2)
    assert np.sum((scene.early[0] - scene.image[0])[: boundary - 20] ** 2) < 1e-6 * np.sum(scene.image[0] ** 2)
    assert measure_decay(scene.image[0], RATE, onset=direct).t20_s == pytest.approx(scene.t20_s[0], rel=0.02)
    assert measure_decay(scene.image[0], RATE, onset=direct).drr_db == pytest.approx(scene.drr_db[0], abs=0.05)


def test_faults_are_heard_and_not_in_the_array() -> None:
    faults = FaultSpec(
        gain_db=[3.0, 0.0, 0.0, 0.0], polarity=[1, -1, 1, 1], position_m=[[0.0, 0.0, 0.0]] * 3 + [[0.0, 0.0, 0.01]]
    )
    scene, clean = rendered(faults=faults, room=None), rendered(room=None)
    assert scene.images[:, 0] == pytest.approx(10.0**0.15 * clean.images[:, 0], rel=2e-2, abs=2e-4)
    assert np.corrcoef(scene.images[0, 1], clean.images[0, 1])[0, 1] < -0.999
    assert np.array_equal(scene.array.positions_m, np.array(CIRCLE))
    assert scene.faults.position_m[3, 2] == 0.01


def test_clipping_and_full_scale() -> None:
    loud = [
        TalkerSpec(name=n, azimuth_deg=a, distance_m=1.0, level_db=-3.0) for n, a in (("mate", 0.0), ("bosun", 90.0))
    ]
    clipped = rendered(talker=loud, faults=FaultSpec(clip_db=-6.0))
    assert np.abs(clipped.mixture).max() == pytest.approx(10.0**-0.3)
    assert clipped.clipped == int(np.count_nonzero(np.abs(clipped.mixture) > 10.0**-0.3 - 1e-12))
    assert clipped.scale_db == 0.0
    with pytest.warns(UnmixWarning, match="full scale"):
        scaled = rendered(talker=loud)
    assert np.abs(scaled.mixture).max() == pytest.approx(0.99)
    assert level_db(scaled.image[0]) == pytest.approx(-3.0 + scaled.scale_db, abs=1e-6)


def test_start_loop_and_duration() -> None:
    talkers = [
        TalkerSpec(name="mate", azimuth_deg=20.0, distance_m=1.2, start_s=0.5),
        TalkerSpec(name="bosun", azimuth_deg=95.0, distance_m=1.0, loop=True),
    ]
    scene = rendered(talker=talkers, room=None, duration_s=2.5)
    assert scene.active_s == ((0.5, 1.5), (0.0, 2.5))
    assert np.abs(scene.image[0, : RATE // 2 - 200]).max() < 1e-9
    assert scene.image[1, RATE + 500 : 2 * RATE] == pytest.approx(scene.image[1, 500:RATE], abs=1e-6)


def test_takes_and_recorded_noise(tmp_path: Path) -> None:
    alone = render_scene(spec(talker=[spec().talker[0]]), clips={"mate": CLIPS["mate"]})
    write_audio(tmp_path / "take.wav", alone.mixture, RATE)
    noise = np.random.default_rng(3).standard_normal((4, RATE // 3)) * 0.01
    write_audio(tmp_path / "noise.wav", noise, RATE)
    talkers = [TalkerSpec(name="mate", take="take.wav", azimuth_deg=20.0, level_db=-20.0)]
    scene = render_scene(
        spec(room=None, talker=talkers, noise=NoiseSpec(file="noise.wav", file_snr_db=25.0)), base=tmp_path
    )
    assert scene.images[0] == pytest.approx(10.0**0.3 * alone.images[0], abs=1e-6)
    assert np.isnan(scene.dry).all()
    assert np.isnan(scene.early).all()
    assert level_db(scene.noise[3]) == pytest.approx(-45.0, abs=0.05)
    assert np.array_equal(scene.noise[:, : RATE // 3], scene.noise[:, RATE // 3 : 2 * (RATE // 3)])


def test_measured_responses_say_what_the_room_said(tmp_path: Path) -> None:
    click = np.zeros(RATE)
    click[0] = 1.0
    talker = [TalkerSpec(name="mate", azimuth_deg=20.0, distance_m=1.2, level_db=-60.0)]
    response = render_scene(spec(talker=talker), clips={"mate": click}).images[0]
    write_audio(tmp_path / "response.wav", response, RATE)
    through = [TalkerSpec(name="mate", responses="response.wav")]
    scene = render_scene(spec(room=None, talker=through), base=tmp_path, clips={"mate": CLIPS["mate"]})
    truth = render_scene(spec(talker=spec().talker[:1]), clips={"mate": CLIPS["mate"]})

    def apart_db(one: np.ndarray, other: np.ndarray) -> float:
        return level_db(one - other) - level_db(other)

    # The response on file misses what rings ahead of the click, and its band is limited twice.
    assert apart_db(scene.images, truth.images) < -60.0
    # A cut in time shortens the low tones of the room's high-pass, which the choice of images leaves whole.
    assert apart_db(high_pass(scene.early, RATE, 300.0), high_pass(truth.early, RATE, 300.0)) < -20.0
    assert scene.t20_s[0] == pytest.approx(truth.t20_s[0], rel=0.02)


def test_a_moving_talker_keeps_its_level_and_kinds() -> None:
    track = Track(np.array([0.0, 1.0]), np.radians([20.0, 40.0]), np.zeros(2), np.array([1.2, 1.0]))
    scene = render_scene(spec(talker=[TalkerSpec(name="mate")]), clips={"mate": CLIPS["mate"]}, tracks={"mate": track})
    assert level_db(scene.image[0]) == pytest.approx(-26.0)
    assert level_db(scene.dry[0]) < level_db(scene.early[0]) + 3.0
    assert scene.t20_s[0] is not None


MATE = TalkerSpec(name="mate", azimuth_deg=20.0, distance_m=1.2)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"array": ArraySpec()}, r"\[array\] needs `file` or `positions_m`"),
        ({"array": ArraySpec(positions_m=CIRCLE, reference_channel=4)}, "4 is not a channel; the array has 0 to 3"),
        ({"room": RoomSpec(size_m=[4.0, 3.0, 2.5])}, r"\[room\] needs `t20_s` or `absorption`"),
        ({"room": RoomSpec(size_m=[4.0, 3.0, float("nan")], absorption=0.3)}, r"key `room\.size_m\[2\]`: nan"),
        ({"room": RoomSpec(size_m=[4.0, 3.0, 2.5], absorption=1.3)}, r"key `room\.absorption`"),
        ({"talker": [MATE, MATE]}, r"key `talker\[1\]\.name`: two talkers are called 'mate'"),
        ({"talker": [TalkerSpec(name="mate")]}, r"'mate' has no place; give azimuth_deg"),
        ({"talker": [TalkerSpec(name="mate", azimuth_deg=3.0)]}, r"plane wave has no place in a room"),
        (
            {"talker": [TalkerSpec(name="mate", azimuth_deg=3.0, distance_m=9.0)]},
            r"'mate' would be at .* outside the room",
        ),
        (
            {"array": ArraySpec(positions_m=CIRCLE, centre_m=[0.02, 1.0, 1.0])},
            r"key `array\.centre_m`: microphones would be at \(0\.00, .* outside the room of 4\.2 x 3\.6 x 2\.6 m",
        ),
        ({"talker": [TalkerSpec(name="mate", azimuth_deg=0.0, distance_m=0.045)]}, "'mate' is 5 mm from a microphone"),
        (
            {"talker": [TalkerSpec(name="mate", azimuth_deg=0.0, distance_m=1.0, start_s=3.0)], "duration_s": 2.0},
            "behind the end",
        ),
        ({"talker": [TalkerSpec(name="mate", clip="x.wav", azimuth_deg=0.0)]}, "a clip in memory and a file"),
        ({"talker": [TalkerSpec(name="cook", azimuth_deg=0.0)]}, "there is no talker 'mate' in the spec; it has cook"),
    ],
)
def test_what_a_wrong_spec_gets(changes: dict[str, object], message: str) -> None:
    with pytest.raises(InputError, match=message):
        render_scene(spec(**{"talker": [MATE], **changes}), clips={"mate": CLIPS["mate"]})


def test_what_wrong_clips_get() -> None:
    with pytest.raises(InputError, match="the clip is silent"):
        render_scene(spec(talker=[MATE]), clips={"mate": np.zeros(100)})
    with pytest.raises(InputError, match="2 channels; a dry clip has one"):
        render_scene(spec(talker=[MATE]), clips={"mate": np.ones((2, 100))})
    with pytest.raises(InputError, match="give `clip`"):
        render_scene(spec(talker=[MATE]))
