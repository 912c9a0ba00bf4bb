"""Rooms against published formulas.

Sources: J. B. Allen and D. A. Berkley, J. Acoust. Soc. Am. 65, 1979 (image method); H. Kuttruff, "Room Acoustics"
(Sabine's and Eyring's formulas, number of images 4/3 pi (c t)^3 / V).
"""

import math

import numpy as np
import pytest

from unmix.render.images import image_field
from unmix.render.pulses import LEAD
from unmix.render.room import build_room, eyring_s, free_field, response_decay, responses, sabine_s

SIZE = np.array([5.0, 4.0, 3.0])


def test_sabine_and_eyring() -> None:
    assert sabine_s(SIZE, 0.2, 343.0) == pytest.approx(0.514, abs=5e-4)
    assert eyring_s(SIZE, 0.2, 343.0) == pytest.approx(0.461, abs=5e-4)


def test_images_up_to_50_ms() -> None:
    # 352 is the mean over all places; single places scatter by a few images.
    rng = np.random.default_rng(0)
    field = image_field(SIZE, 343.0 * 0.05, jitter_m=0.0)
    counts = [field.images(rng.uniform(0.0, SIZE), rng.uniform(0.0, SIZE)).index.shape[1] for _ in range(50)]
    expected = 4.0 / 3.0 * math.pi * (343.0 * 0.05) ** 3 / 60.0
    assert expected == pytest.approx(352.0, abs=0.5)
    assert np.mean(counts) == pytest.approx(expected, rel=0.01)


def test_equal_walls_decay_slower_than_eyring_says() -> None:
    # A box with equal walls lets waves along its long axes live longer: between Eyring's time and half as much again.
    room = build_room(SIZE, speed_m_s=343.0, absorption=0.2)
    heard = responses(room, np.array([3.6, 2.5, 1.5]), np.array([[2.2, 1.6, 1.2]]), 16000)
    t20_s = response_decay(heard.full[0], heard.direct_delay_s[0], 16000).t20_s
    assert t20_s is not None
    assert 1.0 < t20_s / eyring_s(SIZE, 0.2, 343.0) < 1.5


def test_amplitude_falls_with_distance_and_delay_grows() -> None:
    # Spherical spreading, 1/r: every doubling of distance is 6.02 dB and twice the time.
    lengths = np.array([0.5, 1.0, 2.0, 4.0])
    heard = free_field(lengths, 1.0 / lengths, 16000, speed_m_s=343.0)
    level_db = 10.0 * np.log10(np.sum(heard.direct**2, axis=1))
    assert np.diff(level_db) == pytest.approx(-20.0 * math.log10(2.0), abs=1e-3)
    centre = np.sum(np.arange(heard.direct.shape[1]) * heard.direct**2, axis=1) / np.sum(heard.direct**2, axis=1)
    assert (centre - LEAD) / 16000 * 343.0 == pytest.approx(lengths, abs=1e-3)


def test_reverberant_energy() -> None:
    """Direct over reverberant energy A/(16 pi r^2) with A = -S ln(1 - alpha) (Kuttruff), and since nothing reverberant
    arrives before the direct sound, 13.8 r/(c T) nepers of energy more (Barron and Lee 1988, value from memory)."""
    size = np.array([7.1, 5.3, 3.1])
    mic = np.array([3.3, 2.4, 1.3])
    bearings = np.radians([10.0, 75.0, 140.0, 205.0, 270.0, 335.0])
    around = np.stack([np.cos(bearings), np.sin(bearings), np.full(6, 0.1)], axis=1)
    sources = mic + 1.5 * around / np.linalg.norm(around, axis=1)[:, None]
    room = build_room(size, speed_m_s=343.0, t20_s=0.5, sources_m=sources, mic_m=mic)
    drr_db = []
    for number, source in enumerate(sources):
        heard = responses(room, source, mic[None], 16000, source=number)
        drr_db.append(response_decay(heard.full[0], heard.direct_delay_s[0], 16000).drr_db)
    x, y, z = size
    area = -2.0 * (x * y + y * z + z * x) * math.log(room.reflection[0] ** 2)
    expected_db = 10.0 * math.log10(area / (16.0 * math.pi * 1.5**2) * math.exp(13.8 * 1.5 / (343.0 * 0.5)))
    assert np.mean(drr_db) == pytest.approx(expected_db, abs=0.7)
