"""Filters with less reach: held to the normal equations, solved densely."""

from __future__ import annotations

import msgspec
import numpy as np
import pytest
from scipy.linalg import cho_factor, cho_solve

from tests.conftest import circle
from unmix.live.bank import fitted
from unmix.live.design import Designer
from unmix.live.refit import NOISE_DB, refit
from unmix.model.delays import Paths
from unmix.physics import speech_spectrum_db
from unmix.scene import Talker
from unmix.solvers.baselines import steering
from unmix.solvers.stationary import FilterBank
from unmix.variant import PRESETS

RATE = 16000
SEATS = [Talker.at("mate", 20.0, distance_m=1.2), Talker.at("pilot", 95.0, distance_m=1.2)]
MODEL = PRESETS["model"]
SHORT = msgspec.structs.replace(MODEL, solver=msgspec.structs.replace(MODEL.solver, prior_weight=1e-3))
DESIGN = Designer(circle(4), SHORT, RATE)
GRID = 4096


def covariance(paths: Paths) -> np.ndarray:
    omega = 2 * np.pi * np.arange(GRID // 2 + 1) / GRID
    a = steering(paths, omega, RATE)
    power = 10.0 ** (speech_spectrum_db(omega * RATE / 2 / np.pi) / 10.0)
    noise = 10.0 ** (NOISE_DB / 10.0) * power.mean() * paths.talkers
    return np.asarray(power[:, None, None] * (a @ a.conj().transpose(0, 2, 1)) + noise * np.eye(paths.channels))


def densely(bank: FilterBank, paths: Paths, before: int, after: int) -> np.ndarray:
    """The same from the block-Toeplitz matrix itself."""
    c = covariance(paths)
    omega = 2 * np.pi * np.arange(GRID // 2 + 1) / GRID
    v = np.fft.rfft(bank.taps, GRID, axis=-1).transpose(2, 0, 1) * np.exp(1j * omega * bank.before)[:, None, None]
    lags, right = np.fft.irfft(c, GRID, axis=0), np.fft.irfft(v @ c, GRID, axis=0)
    n = np.arange(before + after + 1)
    matrix = lags[n[:, None] - n].transpose(0, 3, 1, 2).reshape(len(n) * paths.channels, -1)
    known = right[n - before].transpose(0, 2, 1).reshape(len(n) * paths.channels, -1)
    taps = cho_solve(cho_factor(0.5 * (matrix + matrix.T)), known)
    return np.asarray(taps.reshape(len(n), paths.channels, -1).transpose(2, 1, 0))


def change(taps: np.ndarray, bank: FilterBank, before: int, paths: Paths) -> float:
    """E |(W - V) y|^2."""
    omega = 2 * np.pi * np.arange(GRID // 2 + 1) / GRID

    def response(taps: np.ndarray, before: int) -> np.ndarray:
        turned = np.fft.rfft(taps, GRID, axis=-1).transpose(2, 0, 1)
        return np.asarray(turned * np.exp(1j * omega * before)[:, None, None])

    d = response(taps, before) - response(bank.taps, bank.before)
    return float(np.einsum("fkm,fmn,fkn->", d, covariance(paths), d.conj()).real)


@pytest.mark.parametrize(("before", "after"), [(4, 40), (0, 60), (30, 20)])
def test_the_normal_equations_are_solved(before: int, after: int) -> None:
    bank, paths = DESIGN(SEATS), DESIGN.paths(SEATS)
    found = refit(bank, paths, RATE, before=before, after=after)
    exact = densely(bank, paths, before, after)
    assert (found.before, found.taps.shape) == (before, exact.shape)
    least, reached = change(exact, bank, before, paths), change(found.taps, bank, before, paths)
    assert least <= reached <= 1.01 * least
    assert reached < 0.4 * change(fitted(bank, before=before, after=after).taps, bank, before, paths)


def test_enough_reach_changes_nothing() -> None:
    bank, paths = DESIGN(SEATS), DESIGN.paths(SEATS)
    same = refit(bank, paths, RATE, before=bank.before + 5, after=bank.after)
    assert np.array_equal(same.taps[..., 5:], bank.taps) and not same.taps[..., :5].any()
    nearly = refit(bank, paths, RATE, before=bank.before - 10, after=bank.after)
    assert change(nearly.taps, bank, nearly.before, paths) < 1e-6 * change(0 * bank.taps, bank, bank.before, paths)


def test_spectra_steer_where_changes_go() -> None:
    """With energy at low frequencies only, the output there is kept better."""
    bank, paths = DESIGN(SEATS), DESIGN.paths(SEATS)
    low = np.full((2, 257), 1e-6)
    low[:, :16] = 1.0
    omega = np.linspace(0.02, 15 / 256 * np.pi, 50)
    wanted = bank.response(omega) @ steering(paths, omega, RATE)

    def error(found: FilterBank) -> float:
        return float(np.abs(found.response(omega) @ steering(paths, omega, RATE) - wanted).mean())

    assert error(refit(bank, paths, RATE, before=4, after=30, spectra=low)) < error(
        refit(bank, paths, RATE, before=4, after=30)
    )
