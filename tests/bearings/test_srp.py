"""Steered response power with phase transform, and what is made of one direction per frame."""

from __future__ import annotations

import numpy as np
import pytest

from tests.bearings.scenes import RATE, apart_deg, recorded
from tests.conftest import circle
from unmix.bearings.bins import make_steering
from unmix.bearings.peaks import FramePeaks, peak_clusters, peak_detections, peak_shares, refine_peaks
from unmix.bearings.space import search_space
from unmix.bearings.srp import frame_spectra, srp_map, srp_peaks
from unmix.physics import unit_vector

ARRAY = circle()
SPACE = search_space(ARRAY.positions_m)
STEERING = make_steering(ARRAY, RATE, whiten=False)


def test_a_single_wave_scores_one_and_noise_one_over_the_number_of_microphones() -> None:
    waves = STEERING.waves(unit_vector(np.radians([40.0, 130.0])))
    spectra = frame_spectra(recorded([40.0], seconds=1.0, snr_db=200.0), STEERING)
    table = srp_map(spectra, waves)
    assert np.median(table[:, 0]) == pytest.approx(1.0, abs=0.01)
    assert np.median(table[:, 1]) < 0.6
    noise = frame_spectra(np.random.default_rng(0).standard_normal((7, RATE)), STEERING)
    assert srp_map(noise, waves).mean() == pytest.approx(1 / 7, rel=0.03)


@pytest.mark.parametrize(("azimuth_deg", "elevation_deg"), [(40.0, 0.0), (-117.0, 50.0)])
def test_frames_peak_where_the_talker_is(azimuth_deg: float, elevation_deg: float) -> None:
    peaks = srp_peaks(recorded([azimuth_deg], elevations_deg=elevation_deg, seconds=2.0), 3.0, SPACE, STEERING).chosen()
    truth = SPACE.project(unit_vector(np.radians(azimuth_deg), np.radians(elevation_deg)))
    assert np.median(np.linalg.norm(peaks.x - truth, axis=1)) < 0.03
    assert peaks.time_s[0] >= 3.0 and peaks.time_s[-1] <= 5.0


def test_a_turned_array_gives_the_world_s_directions() -> None:
    half = np.radians(30.0)
    turn = np.array([[np.cos(half), -np.sin(half), 0], [np.sin(half), np.cos(half), 0], [0, 0, 1.0]])
    peaks = srp_peaks(recorded([40.0], seconds=1.0), 0.0, SPACE, STEERING, rotation=turn).chosen()
    azimuth = np.arctan2(*np.median(peaks.x, axis=0)[::-1])
    assert apart_deg(azimuth, np.radians(70.0)) < 1.0


def scattered(seed: int = 0) -> FramePeaks:
    """Frames of two talkers, one after the other, and a tenth of frames anywhere."""
    rng = np.random.default_rng(seed)
    time_s = np.arange(0.0, 4.0, 0.016)
    azimuth = np.where(time_s < 2.0, 0.3, 1.9) + 0.03 * rng.standard_normal(len(time_s))
    azimuth = np.where(rng.random(len(time_s)) < 0.1, rng.uniform(-np.pi, np.pi, len(time_s)), azimuth)
    return FramePeaks(time_s, SPACE.project(unit_vector(azimuth)), np.full(len(time_s), 0.8), np.ones(len(time_s)))


def test_frames_become_clusters_detections_and_shares() -> None:
    peaks = scattered()
    found, histogram = peak_clusters(peaks, SPACE, sharp=0.15)
    assert histogram.sum() == pytest.approx(1.0)
    heavy = [c for c in found if c.weight > 0.2]
    assert sorted(round(float(np.arctan2(c.x[1], c.x[0])), 1) for c in heavy) == [0.3, 1.9]
    refined = refine_peaks(peaks, np.array([c.x for c in heavy]) + 0.03)
    azimuth = np.sort(np.arctan2(refined.x[:, 1], refined.x[:, 0]))
    np.testing.assert_allclose(azimuth, [0.3, 1.9], atol=0.015)
    detections = peak_detections(peaks, SPACE, 4.0, 0.25)
    early = [d for d in detections if d.time_s < 1.7]
    assert all(np.arctan2(*d.x[int(np.argmax(d.weight))][::-1]) == pytest.approx(0.3, abs=0.1) for d in early)
    x = np.tile(SPACE.project(unit_vector(np.array([0.3, 1.9]))), (16, 1, 1))
    share = peak_shares(peaks, x, np.arange(0.125, 4.0, 0.25), 0.25)
    assert share[:7, 0].min() > 0.6 and share[:7, 1].max() < 0.2
    assert share[9:, 1].min() > 0.6 and share[9:, 0].max() < 0.2
