import numpy as np
import pytest

from unmix.errors import InputError, UnsolvableError
from unmix.render.pulses import LEAD
from unmix.render.room import Room, build_room, free_field, response_decay, responses

RATE = 16000
SPEED = 343.2


def seats(size: np.ndarray, distance_m: float, bearings_deg: tuple[float, ...]) -> tuple[np.ndarray, np.ndarray]:
    centre = size * np.array([0.47, 0.45, 0.4])
    angle = np.radians(bearings_deg)
    around = np.stack([np.cos(angle), np.sin(angle), np.full(angle.size, 0.2)], axis=1)
    return centre, centre + distance_m * around / np.linalg.norm(around, axis=1)[:, None]


@pytest.mark.parametrize(
    ("size_m", "t20_s", "distance_m"),
    [
        ((5.0, 4.0, 3.0), 0.2, 1.2),
        ((5.0, 4.0, 3.0), 0.6, 1.2),
        ((3.0, 3.9, 2.4), 0.4, 1.0),
        ((8.3, 5.1, 2.6), 0.5, 2.0),
        ((12.0, 9.0, 4.0), 0.8, 3.0),
        ((2.2, 1.8, 1.4), 0.15, 0.4),
        ((6.0, 5.0, 3.0), 0.4, 0.12),  # a headset: the direct sound is 18 dB above the room's
    ],
)
def test_the_measured_t20_is_the_one_asked_for(size_m: tuple[float, ...], t20_s: float, distance_m: float) -> None:
    size = np.array(size_m)
    centre, sources = seats(size, distance_m, (25.0, 110.0, 250.0))
    room = build_room(size, speed_m_s=SPEED, t20_s=t20_s, sources_m=sources, mic_m=centre, seed=11)
    measured = []
    for number, source in enumerate(sources):
        heard = responses(room, source, centre[None], RATE, source=number)
        measured.append(response_decay(heard.full[0], heard.direct_delay_s[0], RATE).t20_s)
    assert np.mean(measured) == pytest.approx(t20_s, rel=0.02)
    assert np.array(measured) == pytest.approx(t20_s, rel=0.05)


def test_a_response_is_the_sum_over_its_images() -> None:
    # Every image by hand, walls all different, against the response at some frequencies.
    size, source, mic = np.array([4.0, 3.0, 2.5]), np.array([1.0, 2.1, 1.2]), np.array([2.7, 0.8, 1.4])
    reflection = np.array([0.7, 0.6, 0.5, 0.65, 0.3, 0.55])
    room = Room(size, reflection, SPEED, 0.06, jitter_m=0.0, high_pass_hz=0.0)
    response = responses(room, source, mic[None], RATE).full[0]
    frequencies = np.array([100.0, 1000.0, 3333.0, 7000.0])
    truth = np.zeros(4, complex)
    span = range(-4, 5)
    for nx, ny, nz, px, py, pz in np.ndindex(9, 9, 9, 2, 2, 2):
        n, p = np.array([span[nx], span[ny], span[nz]]), np.array([px, py, pz])
        distance = np.linalg.norm((1 - 2 * p) * source + 2 * n * size - mic)
        if distance <= 0.06 * SPEED:
            gain = np.prod(reflection[0::2] ** np.abs(n - p) * reflection[1::2] ** np.abs(n))
            truth += gain / distance * np.exp(-2j * np.pi * frequencies * distance / SPEED)
    times = (np.arange(response.size) - LEAD) / RATE
    heard = np.exp(-2j * np.pi * np.outer(frequencies, times)) @ response
    assert np.abs(heard - truth).max() < 1e-4 * np.abs(truth).max()


def test_reference_kinds_add_up() -> None:
    size = np.array([5.0, 4.0, 3.0])
    centre, sources = seats(size, 1.2, (25.0,))
    room = build_room(size, speed_m_s=SPEED, absorption=0.3, high_pass_hz=0.0)
    heard = responses(room, sources[0], centre[None], RATE)
    direct = LEAD + round(heard.direct_delay_s[0] * RATE)
    late = (heard.full - heard.early)[0]
    # 50 ms after the direct sound, less what the band limit rings ahead of each pulse.
    boundary = direct + round(0.05 * RATE)
    assert np.sum(late[: boundary - 20] ** 2) < 1e-5 * np.sum(late**2)
    early_tail = (heard.early - heard.direct)[0, boundary + 20 :]
    assert np.sum(early_tail**2) < 1e-5 * np.sum(heard.early**2)
    lone = free_field(np.array([1.2]), np.array([1.0 / 1.2]), RATE, speed_m_s=SPEED).direct[0]
    assert np.abs(heard.direct[0, : lone.size] - lone).max() < 1e-6


def test_a_room_that_absorbs_everything_leaves_the_direct_sound() -> None:
    size = np.array([5.0, 4.0, 3.0])
    centre, sources = seats(size, 1.2, (25.0,))
    room = build_room(size, speed_m_s=SPEED, absorption=1.0)
    heard = responses(room, sources[0], centre[None], RATE)
    assert np.array_equal(heard.full, heard.direct)


def test_no_pressure_piles_up_at_zero_frequency() -> None:
    size = np.array([5.0, 4.0, 3.0])
    centre, sources = seats(size, 1.2, (25.0,))
    room = build_room(size, speed_m_s=SPEED, absorption=0.2)
    spectrum = np.abs(np.fft.rfft(responses(room, sources[0], centre[None], RATE).full[0]))
    assert spectrum[0] < 0.05 * np.sqrt(np.mean(spectrum**2))


def test_absorption_is_between_none_and_all() -> None:
    with pytest.raises(UnsolvableError, match=r"T20 of 0\.05 s in a room of 30 x 20 x 8 m"):
        size = np.array([30.0, 20.0, 8.0])
        centre, sources = seats(size, 5.0, (25.0,))
        build_room(size, speed_m_s=SPEED, t20_s=0.05, sources_m=sources, mic_m=centre)
    with pytest.raises(InputError, match="either t20_s or absorption"):
        build_room(np.array([5.0, 4.0, 3.0]), speed_m_s=SPEED)
