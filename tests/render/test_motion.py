import numpy as np
import pytest

from unmix.render.fine import FineClip
from unmix.render.motion import render_moving
from unmix.render.room import build_room, high_pass
from unmix.render.seats import Seat
from unmix.render.sound import sound_from_seat
from unmix.track import Orientation, Track

RATE = 16000
SPEED = 343.2
MICS = np.array([[0.04, 0.0, 0.0], [-0.02, 0.035, 0.0], [-0.02, -0.035, 0.01], [0.0, 0.0, 0.0]])
CENTRE = np.array([2.3, 1.8, 1.1])


def track(times_s: list[float], azimuth_deg: list[float], distance_m: list[float]) -> Track:
    return Track(np.array(times_s), np.radians(azimuth_deg), np.zeros(len(times_s)), np.array(distance_m))


def turning(degrees: float, duration_s: float) -> Orientation:
    half = np.radians(np.linspace(0.0, degrees, 9)) / 2.0
    quaternions = np.stack([np.cos(half), 0 * half, 0 * half, np.sin(half)], axis=1)
    return Orientation(np.linspace(0.0, duration_s, 9), quaternions)


def band_noise(samples: int, seed: int = 0) -> np.ndarray:
    """Noise between 200 Hz and 7 kHz, silent at both ends."""
    spectrum = np.fft.rfft(np.random.default_rng(seed).standard_normal(samples))
    frequencies = np.fft.rfftfreq(samples, 1.0 / RATE)
    spectrum[(frequencies < 200.0) | (frequencies > 7000.0)] = 0.0
    fade = np.clip(np.minimum(np.arange(samples), np.arange(samples)[::-1]) / 800.0, 0.0, 1.0)
    return np.fft.irfft(spectrum, samples) * fade


def apart_db(signal: np.ndarray, truth: np.ndarray) -> float:
    return float(10.0 * np.log10(np.sum((signal - truth) ** 2) / np.sum(truth**2)))


def test_a_fine_clip_is_read_anywhere() -> None:
    time = np.arange(4000) / RATE
    clip = np.sin(2.0 * np.pi * 7100.0 * time) + np.cos(2.0 * np.pi * 333.0 * time)
    places = np.random.default_rng(1).uniform(1000.0, 3000.0, 500)
    truth = np.sin(2.0 * np.pi * 7100.0 * places / RATE) + np.cos(2.0 * np.pi * 333.0 * places / RATE)
    assert np.abs(FineClip(clip, 900, 3100).at(places) - truth).max() < 1e-5


def test_a_receding_talker_is_heard_at_the_changing_delay() -> None:
    # 0.5 to 1.5 m in one second: a tone comes out at sin(2 pi f (t - R(t)/c)) / R(t) at every sample.
    seat = Seat(np.zeros(3), MICS[:1], track([0.0, 1.0], [0.0, 0.0], [0.5, 1.5]))
    time = np.arange(RATE) / RATE
    clip = np.sin(2.0 * np.pi * 5000.0 * time)
    _, _, image = render_moving(clip, seat, None, RATE, speed_m_s=SPEED, reference=0)
    length = 0.5 + time - 0.04
    truth = np.sin(2.0 * np.pi * 5000.0 * (time - length / SPEED)) / length
    inside = slice(400, -400)
    assert np.abs(image[0, inside] - truth[inside]).max() < 1e-4


def test_moving_by_nothing_is_sitting_still() -> None:
    clip = band_noise(RATE)
    still = Seat(CENTRE, MICS, track([0.0], [30.0], [1.1]))
    moving = Seat(CENTRE, MICS, track([0.0, 1.0], [30.0, 30.0 + 1e-7], [1.1, 1.1]))
    room = build_room(np.array([5.0, 4.0, 3.0]), speed_m_s=SPEED, absorption=0.35, seed=3)
    for box, limit_db in ((None, -140.0), (room, -50.0)):
        options = {"speed_m_s": SPEED, "reference": 3, "source": 0, "path_step_m": 0.02}
        truth = sound_from_seat(clip, still, box, RATE, **options)
        sound = sound_from_seat(clip, moving, box, RATE, **options)
        assert apart_db(sound.dry, truth.dry) < min(limit_db, -80.0)
        assert apart_db(sound.early, truth.early) < min(limit_db, -80.0)
        assert apart_db(sound.image, truth.image) < limit_db


def test_turning_the_array_is_the_talker_going_round_the_other_way() -> None:
    clip = band_noise(RATE)
    turned = Seat(np.zeros(3), MICS, track([0.0], [40.0], [1.1]), turning(60.0, 1.0))
    times = np.linspace(0.0, 1.0, 401)
    round_ = Seat(np.zeros(3), MICS, track(list(times), list(40.0 - 60.0 * times), [1.1] * 401))
    _, _, one = render_moving(clip, turned, None, RATE, speed_m_s=SPEED, reference=3)
    _, _, other = render_moving(clip, round_, None, RATE, speed_m_s=SPEED, reference=3)
    assert apart_db(one, other) < -70.0


@pytest.mark.parametrize("turn", [False, True])
def test_in_a_room_a_finer_path_changes_little(turn: bool) -> None:
    # The tail between 2 cm knots against the tail between 5 mm knots, relative to everything heard.
    clip = band_noise(RATE // 2)
    path = track([0.0], [40.0], [1.1]) if turn else track([0.0, 0.5], [40.0, 55.0], [1.1, 1.1])
    seat = Seat(CENTRE, MICS, path, turning(90.0, 0.5) if turn else None)
    room = build_room(np.array([4.0, 3.5, 2.6]), speed_m_s=SPEED, absorption=0.4, seed=3)
    images = [
        render_moving(clip, seat, room, RATE, speed_m_s=SPEED, reference=3, path_step_m=step)[2]
        for step in (0.02, 0.005)
    ]
    assert apart_db(images[0], images[1]) < -20.0


def test_what_is_heard_in_motion_is_near_what_is_heard_at_rest_in_the_middle() -> None:
    # Over 40 ms about the middle of a slow path the talker is within 1 mm of that place.
    clip = band_noise(RATE)
    moving = Seat(CENTRE, MICS, track([0.0, 1.0], [38.7, 41.3], [1.1, 1.1]))
    still = Seat(CENTRE, MICS, track([0.0], [40.0], [1.1]))
    room = build_room(np.array([4.0, 3.5, 2.6]), speed_m_s=SPEED, absorption=0.4, seed=3)
    options = {"speed_m_s": SPEED, "reference": 3, "source": 0, "path_step_m": 0.02}
    sound, truth = (sound_from_seat(clip, seat, room, RATE, **options) for seat in (moving, still))
    about = slice(RATE // 2 - 320, RATE // 2 + 320)
    assert apart_db(sound.early[about], truth.early[about]) < -20.0
    assert apart_db(sound.image[:, about], truth.image[:, about]) < -15.0
    assert apart_db(high_pass(sound.dry, RATE)[about], high_pass(truth.dry, RATE)[about]) < -20.0
