"""The job as a whole: figures against a rendered separation, and what is refused."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from tests.test_sofa import free_field
from unmix.array import Array
from unmix.errors import InputError
from unmix.jobs.limits import LimitsOptions, limits
from unmix.jobs.solve import solve
from unmix.limits.ladder import noise_gain, responses
from unmix.model.delays import paths_from_bearings
from unmix.scene import Scene, Talker
from unmix.variant import load_variant

RATE = 16000


LOWEST_HZ, HIGHEST_HZ = 100.0, 7200.0
"""Below, a few hertz hold most of what noise is left, and seconds of it say little of its mean."""


def in_band(signals: np.ndarray) -> np.ndarray:
    """Mean power of (talkers, samples) between the two frequencies."""
    spectrum = np.abs(np.fft.rfft(signals)) ** 2
    f = np.fft.rfftfreq(signals.shape[1], 1.0 / RATE)
    chosen = (f >= LOWEST_HZ) & (f <= HIGHEST_HZ)
    return np.asarray(2.0 * spectrum[:, chosen].sum(axis=1) / signals.shape[1] ** 2)


@pytest.mark.parametrize("seed", range(10))
def test_the_predicted_snr_is_that_of_a_rendered_separation(seed: int) -> None:
    """Ten arrays drawn at random, real speech and microphone noise, 100 Hz to 7.2 kHz: within 1 dB."""
    rng = np.random.default_rng(400 + seed)
    microphones = int(rng.integers(3, 8))
    array = Array.from_positions(rng.uniform(-0.05, 0.05, (microphones, 3)))
    first = rng.uniform(-180.0, 180.0)
    azimuth_deg = [first, first + rng.uniform(30.0, 180.0)]
    talkers = np.stack([speech("novel-reader", 8.0), speech("card-reader", 8.0)])
    images = delayed(talkers, paths_from_bearings(array, np.radians(azimuth_deg)), RATE).sum(axis=0)
    deviation = 10.0 ** (-30.0 / 20.0) * 0.05
    noise = deviation * rng.standard_normal(images.shape)
    variant = load_variant("model")

    def separated(recording: np.ndarray) -> np.ndarray:
        placed = [Talker.at(name, a) for name, a in zip("ab", azimuth_deg, strict=True)]
        signals = solve(Scene.from_arrays(recording, array, placed, sample_rate=RATE), variant).signals
        assert signals is not None
        return signals[:, 4000:-4000]

    rendered = 10 * np.log10(in_band(separated(images)) / in_band(separated(noise)))

    f = np.linspace(LOWEST_HZ, HIGHEST_HZ, 1000)
    h = responses(array, np.radians([azimuth_deg]), f)[0]
    gain = noise_gain(h, np.full(len(f), variant.solver.prior_weight * microphones))
    density = deviation**2 / (RATE / 2)
    predicted = 10 * np.log10(
        in_band(talkers[:, 4000:-4000]) / (density * (HIGHEST_HZ - LOWEST_HZ) * gain.mean(axis=0))
    )
    assert rendered == pytest.approx(predicted, abs=1.0)


def test_the_whole_of_it() -> None:
    found = limits(circle(6), LimitsOptions(separations_deg=(20.0, 60.0, 180.0), draws=60, sweep_deg=45.0))
    tree = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert [row["separation_deg"] for row in tree["separations"]] == [20.0, 60.0, 180.0]
    assert len(tree["separations"][0]["noise_gain_db"]) == len(tree["band_hz"])
    assert tree["critical_distance_m"] == pytest.approx(0.62, abs=0.02)
    assert {row["shape"] for row in tree["sweep"]} >= {"line", "circle", "circle with centre", "head pairs", "yours"}
    for row in found.separations:
        middle = np.abs(found.band_hz - 1000).argmin()
        assert row.tolerance_sir_db[middle] == pytest.approx(row.drawn_sir_db[middle], abs=1.5)  # 60 draws
        assert np.all(row.signal_found_db >= row.signal_known_db)
    assert found.separations[0].bearing_std_deg is not None and found.separations[0].bearing_std_deg < 0.2


def test_a_line_has_no_bound_where_bearings_are_mirrored() -> None:
    line = Array.from_positions([[0.0, y, 0.0] for y in (-0.04, 0.0, 0.04)])
    found = limits(line, LimitsOptions(separations_deg=(60.0,), draws=10))
    assert found.mirrored
    assert np.all(found.ladder.worst_gain_db[0] >= found.ladder.noise_gain_db[0])


@pytest.mark.parametrize(
    ("array", "options", "what"),
    [
        (Array.from_positions([[0.0, 0.0, 0.0]]), LimitsOptions(), "1 microphones for 2 talkers"),
        (circle(2), LimitsOptions(talkers=4), "3 microphones for 4 talkers"),
        (circle(6), LimitsOptions(separations_deg=(200.0,)), "0 to 180 deg"),
        (circle(6), LimitsOptions(lowest_hz=7000.0), "no third octave"),
        (replace(circle(6), responses=free_field(circle(6))), LimitsOptions(), "free air"),
    ],
)
def test_what_is_refused(array: Array, options: LimitsOptions, what: str) -> None:
    with pytest.raises(InputError, match=what):
        limits(array, options)
