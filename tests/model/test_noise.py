"""Noise covariances and their whitening filters."""

from __future__ import annotations

import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from unmix.errors import UnsolvableError
from unmix.model.delays import Paths
from unmix.model.differentiators import choose_differentiators
from unmix.model.mixing import mixing_from_paths
from unmix.model.noise import GRID, Spectra, diffuse_covariance, fitted_covariance, noise_from_covariance
from unmix.physics import diffuse_coherence, pairwise_distances

RATE = 16000
SPEED = 343.2


def _coloured(covariance: np.ndarray, samples: int, rng: np.random.Generator) -> np.ndarray:
    """Gaussian noise of a given covariance on the grid, by filtering white noise block by block."""
    root = np.linalg.cholesky(covariance)
    taps = np.fft.fftshift(np.fft.irfft(root, axis=0).transpose(1, 2, 0), axes=-1)
    white = rng.standard_normal((covariance.shape[-1], samples + GRID))
    from scipy.signal import fftconvolve

    return np.asarray(sum(fftconvolve(white[c][None], taps[:, c], mode="valid", axes=1) for c in range(len(white))))


def test_whitening_makes_diffuse_noise_white(rng: np.random.Generator) -> None:
    covariance = diffuse_covariance(circle(4, 0.03, centre=False).positions_m, RATE, -20.0, SPEED)
    noise = noise_from_covariance("diffuse", covariance, 64)
    whitened = noise.whiten(_coloured(noise.covariance, 60000, rng))
    measured = Spectra.of([whitened], 4).covariance()
    scale = np.trace(measured, axis1=1, axis2=2).real.mean() / 4
    band = slice(4, GRID // 2 - 8)
    off = np.abs(measured[band] - scale * np.eye(4)) / scale
    # 116 frames of half-overlapped Hann leave deviations of about 0.12 each.
    assert off.mean() < 0.15


def test_spectra_do_not_depend_on_how_chunks_are_cut(rng: np.random.Generator) -> None:
    signal = rng.standard_normal((3, 9000))
    whole = Spectra.of([signal], 3).covariance()
    pieces = Spectra(3)
    for at in range(0, 9000, 700):
        pieces.add(signal[:, at : at + 700])
    assert pieces.covariance() == pytest.approx(whole)


def test_too_short_a_stretch_is_refused(rng: np.random.Generator) -> None:
    with pytest.raises(UnsolvableError, match="needs 6 frames of 1024 samples; there are 1"):
        Spectra.of([rng.standard_normal((3, 1200))], 3).covariance()


def test_fitted_powers_are_found_under_talkers(two_talkers: Paths, rng: np.random.Generator) -> None:
    array = circle()
    field = diffuse_coherence(pairwise_distances(array.positions_m), np.fft.rfftfreq(GRID, 1 / RATE), SPEED)
    white_power, field_power = 1e-6, 1e-5
    truth = white_power * np.eye(7) + field_power * field
    signals = np.stack([speech("novel-reader", 10.0), speech("card-reader", 10.0)])
    heard = delayed(signals, two_talkers, RATE).sum(axis=0)
    heard = heard + _coloured(truth + 1e-12 * np.eye(7), heard.shape[1], rng)[:, : heard.shape[1]]
    chosen = choose_differentiators(6, family="least-squares", error_db=-60, band_edge=0.85)
    mixing = mixing_from_paths(two_talkers, chosen, RATE)
    observed = Spectra.of([heard], 7).covariance() / (GRID * 3 / 8)
    fitted = fitted_covariance(observed, mixing, array.positions_m, RATE, SPEED)
    # The two powers are apart where the field is neither coherent nor independent: 1 to 4 kHz on this array.
    band = slice(int(1000 / RATE * GRID), int(4000 / RATE * GRID))
    ratio_db = 10 * np.log10(np.trace(fitted[band], axis1=1, axis2=2).real / np.trace(truth[band], axis1=1, axis2=2))
    assert np.abs(ratio_db).max() < 1.0
