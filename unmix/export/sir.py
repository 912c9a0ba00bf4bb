"""Signal to interference of a filter bank, by formula and measured.

With W_km(omega) the filters, A_mj(omega) how talker j reaches microphone m, and S_j(omega) the talkers' power spectra,

    T = W A,     E_kj = sum_omega S_j |T_kj|^2,     SIR_k = E_kk / sum_{j != k} E_kj.

Measured: each talker's images alone go through the filters, and E_kj are the energies of what comes out.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unmix.model.delays import Paths
from unmix.physics import speech_spectrum_db
from unmix.solvers.baselines import steering
from unmix.solvers.stationary import FilterBank

__all__ = [
    "GRID",
    "energies",
    "filtered",
    "images_of",
    "measured_sir_db",
    "predicted_sir_db",
    "sir_of_energies_db",
    "spectra_of",
    "speech_spectra",
]

Floats = NDArray[np.float64]

GRID = 2**14
"""FFT length on which formulas are summed: twice the longest filters, and 1 Hz at 16 kHz."""


def speech_spectra(talkers: int, sample_rate: float) -> Floats:
    """(talkers, GRID / 2 + 1): the long-term average speech spectrum for each, where nothing better is known."""
    power = 10.0 ** (speech_spectrum_db(np.fft.rfftfreq(GRID, 1.0 / sample_rate)) / 10.0)
    return np.tile(power, (talkers, 1))


def spectra_of(signals: Floats) -> Floats:
    """(talkers, GRID / 2 + 1): power spectra of whole signals (talkers, samples), averaged around each grid point."""
    per_point = max(2, 2 ** int(np.ceil(np.log2((signals.shape[1] + GRID) / GRID))))
    power = np.abs(np.fft.rfft(signals, per_point * GRID, axis=-1)) ** 2
    # Mirrored at both ends, each grid point has as many neighbours to its left as to its right.
    half = per_point // 2
    around = np.concatenate([power[:, half:0:-1], power, power[:, -2 : -half - 2 : -1]], axis=-1)
    summed = np.cumsum(np.pad(around, ((0, 0), (1, 0))), axis=-1)
    first = per_point * np.arange(GRID // 2 + 1)
    return np.asarray((summed[:, first + 2 * half + 1] - summed[:, first]) / (2 * half + 1))


def energies(bank: FilterBank, paths: Paths, spectra: Floats, sample_rate: float) -> Floats:
    """(talkers, talkers): E_kj, energy for talker k when only talker j speaks, by formula."""
    omega = 2.0 * np.pi * np.arange(GRID // 2 + 1) / GRID
    response = np.fft.rfft(bank.taps, GRID, axis=-1).transpose(2, 0, 1)
    through = response @ steering(paths, omega, sample_rate)
    return np.asarray(np.einsum("jf,fkj->kj", spectra, np.abs(through) ** 2))


def sir_of_energies_db(energy: Floats) -> Floats:
    """SIR of each talker; infinite where nothing leaks."""
    own = np.diag(energy)
    with np.errstate(divide="ignore"):
        return np.asarray(10.0 * np.log10(own) - 10.0 * np.log10(energy.sum(axis=1) - own))


def predicted_sir_db(bank: FilterBank, paths: Paths, spectra: Floats, sample_rate: float) -> Floats:
    """SIR of each talker, by formula."""
    return sir_of_energies_db(energies(bank, paths, spectra, sample_rate))


def images_of(signals: Floats, paths: Paths, sample_rate: float) -> Floats:
    """(talkers, channels, samples): what microphones hear of each talker alone, without a room, delays exact."""
    samples = signals.shape[1]
    size = 1 << (samples + 4096).bit_length()
    omega = np.asarray(2.0 * np.pi * np.fft.rfftfreq(size), np.float64)
    heard = steering(paths, omega, sample_rate).transpose(2, 1, 0)
    return np.asarray(np.fft.irfft(np.fft.rfft(signals, size)[:, None] * heard, size)[..., :samples])


def filtered(taps: Floats, sound: Floats) -> Floats:
    """(talkers, samples + taps - 1) from filters (talkers, channels, taps) and sound (channels, samples)."""
    from scipy.signal import oaconvolve

    return np.asarray(oaconvolve(sound[None], taps, axes=-1).sum(axis=1))


def measured_sir_db(taps: Floats, images: Floats) -> Floats:
    """SIR of each talker when `images` (talkers, channels, samples) go through the filters one by one."""
    outputs = np.stack([filtered(taps, image) for image in images])
    return sir_of_energies_db(np.einsum("jkn,jkn->kj", outputs, outputs))
