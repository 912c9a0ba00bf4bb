"""What a variant is compared with: filters made from the delays alone, in the frequency domain.

With a_k(omega) the column of talker k (gains and exact delays) and Gamma the diffuse field's coherence plus self-noise:

    reference-mic       z_k = y_ref
    delay-and-sum       w_k = a_k / (a_k^H a_k)
    minimum-variance    w_k = Gamma^-1 a_k / (a_k^H Gamma^-1 a_k)                    (Capon 1969, diffuse field)
    linear-constraint   W = Gamma^-1 A (A^H Gamma^-1 A + e I)^-1                     (Frost 1972: one talker kept, the
                        others cancelled), e lightly loads what cannot be told apart
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.model.delays import Paths
from unmix.model.mixing import mixing_from_responses
from unmix.model.noise import GRID, diffuse_covariance
from unmix.solvers.stationary import FilterBank, filter_bank_from_response

__all__ = ["Baseline", "baseline_bank", "steering"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Baseline = Literal["reference-mic", "delay-and-sum", "minimum-variance", "linear-constraint"]

_LARGEST_GRID = 8192
_LOADING = 1e-3
"""Relative loading of the linear constraints."""


def steering(paths: Paths, omega: Floats, sample_rate: float) -> Complexes:
    """Columns a_k: (frequencies, channels, talkers), exact delays."""
    if paths.taps is not None:
        return mixing_from_responses(paths.taps, paths.centre).response(omega)
    phase = -1j * omega[:, None, None] * paths.delay_s.T * sample_rate
    return np.asarray(paths.gain.T * np.exp(phase))


def baseline_bank(
    kind: Baseline,
    paths: Paths,
    positions_m: Floats,
    *,
    reference_channel: int,
    sample_rate: float,
    speed_m_s: float,
    self_noise_db: float,
    tail: float,
) -> FilterBank:
    """The filters of a baseline for talkers at rest."""
    talkers, channels = paths.delay_s.shape
    if kind == "reference-mic":
        taps = np.zeros((talkers, channels, 1))
        taps[:, reference_channel] = 1.0
        return FilterBank(taps, 0, 0.0)
    grid = diffuse_covariance(positions_m, sample_rate, self_noise_db, speed_m_s)

    def response(omega: Floats) -> Complexes:
        a = steering(paths, omega, sample_rate)
        adjoint = a.conj().transpose(0, 2, 1)
        if kind == "delay-and-sum":
            return np.asarray(adjoint / np.sum(np.abs(a) ** 2, axis=1)[:, :, None])
        gamma = _on_grid(grid, omega)
        white = np.linalg.solve(gamma, a)
        rows = white.conj().transpose(0, 2, 1)
        gram = adjoint @ white
        if kind == "minimum-variance":
            return np.asarray(rows / np.einsum("fkk->fk", gram).real[:, :, None])
        mean = np.einsum("fkk->f", gram).real / talkers
        return np.asarray(np.linalg.solve(gram + _LOADING * mean[:, None, None] * np.eye(talkers), rows))

    return filter_bank_from_response(response, tail=tail, largest_grid=_LARGEST_GRID)


def _on_grid(grid: Complexes, omega: Floats) -> Complexes:
    """Covariances between the points of the grid, linear in frequency."""
    place = np.clip(omega / np.pi * (GRID // 2), 0.0, GRID // 2 - 1e-9)
    left = place.astype(int)
    share = (place - left)[:, None, None]
    return np.asarray(grid[left] * (1.0 - share) + grid[left + 1] * share)
