"""The separating matrix: its update, its safety, and that talkers keep their places."""

from __future__ import annotations

import numpy as np
import pytest

from unmix.room.bands import Bands
from unmix.room.linalg import adjoint
from unmix.room.refinement import independent_start, look_penalty, refine, scaled, scaled_rows, update_rows
from unmix.settings import RefinementSettings


def mixture(
    rng: np.random.Generator, *, f: int = 9, m: int = 4, k: int = 2, frames: int = 400, noise: float = 0.01
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Talkers whose power follows one envelope over all frequencies, mixed and with white noise."""
    envelope = rng.gamma(0.4, 1.0, (k, frames)) + 1e-3
    s = np.sqrt(envelope) * (rng.standard_normal((f, k, frames)) + 1j * rng.standard_normal((f, k, frames)))
    a = rng.standard_normal((f, m, k)) + 1j * rng.standard_normal((f, m, k))
    a = a / a[:, :1]
    v = noise * (rng.standard_normal((f, m, frames)) + 1j * rng.standard_normal((f, m, frames)))
    return a @ s + v, a, s


def test_rows_solve_the_equations_of_the_whole_matrix(rng: np.random.Generator) -> None:
    f, m, k = 5, 6, 2
    w = rng.standard_normal((f, k, m)) + 1j * rng.standard_normal((f, k, m))
    samples = rng.standard_normal((f, m, 40)) + 1j * rng.standard_normal((f, m, 40))
    c = samples @ adjoint(samples) / 40
    v = np.stack([c + (i + 1) * np.eye(m) for i in range(k)], axis=1)
    updated = w.copy()
    assert update_rows(updated, v, c, np.zeros((f, k, m, m))) == 0
    for i in range(k):
        before = np.concatenate([updated[:, :i], w[:, i:]], axis=1)
        cw = c @ adjoint(before)
        j = adjoint(np.linalg.solve(adjoint(cw[:, :k]), adjoint(cw[:, k:])))
        whole = np.zeros((f, m, m), complex)
        whole[:, :k], whole[:, k:, :k] = before, j
        whole[:, range(k, m), range(k, m)] = -1.0
        # The rows keep the background uncorrelated with the talkers before they are updated.
        assert np.abs(whole[:, k:] @ c @ adjoint(before)).max() < 1e-9 * np.abs(c).max()
        unit = np.zeros((f, m, 1))
        unit[:, i] = 1.0
        row = np.linalg.solve(whole @ v[:, i], unit)
        row /= np.sqrt((adjoint(row) @ v[:, i] @ row).real)
        # The loading of 1e-6 is all that the two differ by.
        assert np.abs(updated[:, i] - np.conjugate(row[:, :, 0])).max() < 1e-4 * np.abs(row).max()


def test_talkers_come_apart_and_keep_their_places(rng: np.random.Generator) -> None:
    x, a, _ = mixture(rng)
    wrong = a + 0.5 * (rng.standard_normal(a.shape) + 1j * rng.standard_normal(a.shape))
    wrong[:, 0] = 1.0
    start = np.linalg.pinv(wrong)
    settings = RefinementSettings(source_model="frame", iterations=40)
    found = refine(x, start, wrong, settings, Bands(len(x), workers=1))
    rows, responses = scaled(found.matrix, 2, 0)
    gain = np.abs(rows @ a)
    own = np.einsum("fkk->fk", gain)
    other = gain.sum(axis=2) - own
    assert 20 * np.log10(np.median(own / other)) > 25.0
    assert np.median(np.abs(responses - a) / np.abs(a)) < 0.1
    assert np.abs(np.median(own) - 1.0) < 0.1, "projection back keeps the talkers' level at the reference channel"
    assert np.diff(found.cost).max() < 1e-3 * abs(found.cost[0]), "the cost does not rise"


def test_projection_back_is_the_regression_of_the_reference_channel(rng: np.random.Generator) -> None:
    x, a, _ = mixture(rng)
    settings = RefinementSettings(source_model="frame", iterations=5)
    found = refine(x, np.linalg.pinv(a), a, settings, Bands(len(x), workers=1))
    c = x @ adjoint(x) / x.shape[2]
    rows, _ = scaled(found.matrix, 2, 1)
    assert np.abs(scaled_rows(found.matrix[:, :2], c, 1) - rows).max() < 1e-3 * np.abs(rows).max()


@pytest.mark.parametrize("source_model", ["frame", "low-rank"])
@pytest.mark.parametrize("damage", ["copied channel", "silent channel", "few frames", "silence", "one frequency dead"])
def test_singular_statistics_give_finite_rows(source_model: str, damage: str, rng: np.random.Generator) -> None:
    x, a, _ = mixture(rng, frames=6 if damage == "few frames" else 100)
    x = x.astype(np.complex64)
    if damage == "copied channel":
        x[:, 2] = x[:, 1]
    elif damage == "silent channel":
        x[:, 3] = 0.0
    elif damage == "silence":
        x[:] = 0.0
    elif damage == "one frequency dead":
        x[4] = 0.0
    settings = RefinementSettings(source_model=source_model, iterations=20)  # type: ignore[arg-type]
    found = refine(x, np.linalg.pinv(a), a, settings, Bands(len(x), workers=1))
    rows, responses = scaled(found.matrix, 2, 0)
    assert np.isfinite(found.matrix).all()
    assert np.isfinite(rows).all()
    assert np.isfinite(responses).all()


def test_start_is_nowhere_parallel(rng: np.random.Generator) -> None:
    w = rng.standard_normal((6, 2, 4)) + 1j * rng.standard_normal((6, 2, 4))
    w[0, 1] = 2j * w[0, 0]
    w[1, 0, 0] = np.nan
    start = independent_start(w)
    assert np.array_equal(start[0], w[2])
    assert np.array_equal(start[1], w[2])
    assert np.array_equal(start[2:], w[2:])


def test_look_penalty_is_zero_for_rows_that_cancel_the_others(rng: np.random.Generator) -> None:
    a = rng.standard_normal((3, 5, 3)) + 1j * rng.standard_normal((3, 5, 3))
    penalty = look_penalty(a, 0.1)
    w = np.linalg.pinv(a)
    for k in range(3):
        row = np.conjugate(w[:, k])[:, :, None]
        assert np.abs(adjoint(row) @ penalty[:, k] @ row).max() < 1e-12
        assert np.linalg.matrix_rank(penalty[0, k]) == 2
