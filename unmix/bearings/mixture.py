"""Directions from time-frequency bins: which few directions explain all chosen bins together.

With one talker in diffuse noise, z ~ CN(0, phi_s b b^H + phi_v I) after whitening. Maximised over both powers, the
likelihood of a unit-length z depends on the direction through q = |b^H z|^2 alone and grows like a power of
1/(1 - q) [1]_. A flatter power than the exact one keeps rows that belong to two talkers, or to the room, harmless:

    p(z | x) = a (1 + EPSILON - q(x))^(-KAPPA)          p(z | nobody) = 1,

densities with respect to the uniform one, a making the mean over uniform z one. The mixture over a grid of
directions, sum_g w_g p(z | x_g), has a maximum-likelihood w with few non-zero entries, even though nobody said how
many [2]_; it is found by expectation-maximisation, and a talker is a cluster of what is left.

Afterwards each direction moves off the grid: Newton steps on the expected log-likelihood, its covariance

    H^(-1) J H^(-1),    H the curvature,    J the sum over stretches of time of (score)(score)^T,

which holds although neighbouring bins are not independent and the model is not exact [3]_.

.. [1] P. Stoica and A. Nehorai, "Performance study of conditional and unconditional direction-of-arrival estimation",
   IEEE Trans. Acoust. Speech Signal Process. 38, 1990.
.. [2] B. G. Lindsay, "The geometry of mixture likelihoods: a general theory", Ann. Statist. 11, 1983.
.. [3] H. White, "Maximum likelihood estimation of misspecified models", Econometrica 50, 1982.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.special
from numpy.typing import NDArray

from unmix.bearings.bins import Bins, Singles, Spectra, Steering
from unmix.bearings.space import LocalFrame, SearchSpace

__all__ = ["Cluster", "Refined", "clusters", "likelihoods", "mixture_weights", "refine", "responses"]

Floats = NDArray[np.float64]

KAPPA = 2.0
EPSILON = 0.02
SHARP_KAPPA = 4.0
SAME_TALKER = 0.34
"""Nearer than this in projection (20 degrees broadside), two clusters are one talker."""
_STEP = 0.03
_STRETCH_S = 0.5


@dataclass(frozen=True)
class Cluster:
    """A talker seen in the mixture: projection x (rank,), the share of bins that are theirs, and the largest share they
    have in any short stretch of time (1 when that was not looked at)."""

    x: Floats
    weight: float
    peak: float = 1.0


@dataclass(frozen=True)
class Refined:
    """Directions off the grid: x (talkers, rank), covariance (talkers, rank, rank), share of bins (talkers,)."""

    x: Floats
    covariance: Floats
    weight: Floats


def responses(bins: Bins, waves: Spectra) -> Singles:
    """q = |b^H z|^2, (bins, points), for whitened steering vectors (frequencies, points, channels)."""
    q = np.empty((len(bins), waves.shape[1]), dtype=np.float32)
    order = np.argsort(bins.frequency, kind="stable")
    starts = np.searchsorted(bins.frequency[order], np.arange(len(waves) + 1))
    for i in np.flatnonzero(np.diff(starts)):
        rows = order[starts[i] : starts[i + 1]]
        c = bins.z[rows] @ waves[i].conj().T
        q[rows] = c.real**2 + c.imag**2
    return q


def likelihoods(q: Singles, channels: int, *, kappa: float = KAPPA) -> Singles:
    """p(z | x) with respect to the uniform density, (bins, points)."""
    scale = 1.0 / _mean_under_uniform(channels, kappa)
    return np.asarray(scale * np.power(np.float32(1.0 + EPSILON) - q, -kappa), dtype=np.float32)


def _mean_under_uniform(channels: int, kappa: float) -> float:
    """Mean of (1 + EPSILON - q)^(-kappa) for q of a uniform z: q ~ Beta(1, channels - 1)."""
    m = channels - 1
    # With t = 1 - q, density m t^(m-1): Euler's integral for the hypergeometric function.
    return float(EPSILON ** (-kappa) * scipy.special.hyp2f1(kappa, m, m + 1, -1.0 / EPSILON))


def mixture_weights(density: Singles, *, rounds: int = 80) -> tuple[Floats, float]:
    """Maximum-likelihood weights of the mixture over the columns of ``density`` (bins, points).

    Returns weights (points,), and that of nobody; together they are one. Columns whose weight has vanished are dropped
    on the way.
    """
    bins, points = density.shape
    alive = np.arange(points)
    w: NDArray[np.float32] = np.full(points, 0.9 / points, dtype=np.float32)
    nobody = np.float32(0.1)
    table = density
    for step in range(rounds):
        share = 1.0 / (table @ w + nobody)
        w = np.asarray(w * (share @ table) / np.float32(bins), dtype=np.float32)
        nobody = nobody * share.sum() / np.float32(bins)
        if step in (15, 40):
            keep = w > 1e-3 * w.max()
            alive, w, table = alive[keep], w[keep], np.ascontiguousarray(table[:, keep])
    out = np.zeros(points)
    out[alive] = w
    return out, float(nobody)


def clusters(weights: Floats, space: SearchSpace, *, limit: int = 8) -> list[Cluster]:
    """Clusters of grid weights, heaviest first: nearest to the heaviest point within `SAME_TALKER` joins it."""
    left = weights.copy()
    near = space.apart
    found: list[Cluster] = []
    while len(found) < limit and left.max(initial=0.0) > 1e-6:
        alive = np.flatnonzero(left > 1e-6)
        close = near[np.ix_(alive, alive)] < 0.5 * SAME_TALKER
        peak = int(np.argmax(close @ left[alive]))
        peak = int(alive[np.argmax(np.where(close[peak], left[alive], -1.0))])
        mine = (near[peak] < SAME_TALKER) & (left > 0.0)
        x = np.asarray(left[mine] @ space.grid[mine] / left[mine].sum())
        found.append(Cluster(x, float(left[mine].sum())))
        left[mine] = 0.0
    return sorted(found, key=lambda c: -c.weight)


def refine(
    parts: list[tuple[Bins, Floats]],
    start: Floats,
    space: SearchSpace,
    steering: Steering,
    *,
    distance_m: float | None = None,
    rounds: int = 6,
) -> Refined:
    """Move directions ``start`` (talkers, rank) off the grid, all bins shared out among them and nobody.

    parts  bins by orientation of the array, with its rotation (3, 3), array to world
    """
    x = start.copy()
    weight = np.full(len(x), 0.9 / max(len(x), 1))
    bound = 0.15
    for _ in range(rounds):
        frames = [space.local(point, _STEP) for point in x]
        table = _stencil_density(parts, frames, space, steering, distance_m)
        centre = table[:, :, 0]
        share = centre * weight / (centre @ weight + (1.0 - weight.sum()))[:, None]
        weight = share.mean(axis=0)
        score, curvature = _scores(np.log(table), share)
        for k, frame in enumerate(frames):
            step = np.linalg.solve(curvature[k], score[:, k].sum(axis=0))
            step *= min(1.0, bound / max(float(np.linalg.norm(step)), 1e-12))
            x[k] = frame.move(step)
        bound *= 0.7
    time = np.concatenate([b.time_s for b, _ in parts])
    covariance = np.zeros((len(x), space.grid.shape[1], space.grid.shape[1]))
    stretch = np.unique(np.floor(time / _STRETCH_S), return_inverse=True)[1]
    for k, frame in enumerate(frames):
        sums = np.stack([np.bincount(stretch, score[:, k, d]) for d in range(score.shape[2])], axis=-1)
        inverse = np.linalg.inv(curvature[k])
        covariance[k] = frame.axes @ (inverse @ (sums.T @ sums) @ inverse) @ frame.axes.T
    return Refined(x, covariance, weight)


def _stencil_density(
    parts: list[tuple[Bins, Floats]],
    frames: list[LocalFrame],
    space: SearchSpace,
    steering: Steering,
    distance_m: float | None,
) -> Floats:
    """p(z | x) at the stencils of all talkers: (bins, talkers, stencil points)."""
    stencil = np.concatenate([frame.stencil for frame in frames])
    vectors, directions = stencil @ space.basis.T, space.lift(stencil)
    rows = []
    for part, rotation in parts:
        waves = steering.waves(vectors @ rotation, directions @ rotation, distance_m)
        rows.append(likelihoods(responses(part, waves), steering.channels, kappa=SHARP_KAPPA))
    return np.concatenate(rows).reshape(-1, len(frames), len(frames[0].stencil)).astype(np.float64)


def _scores(log_density: Floats, share: Floats) -> tuple[Floats, Floats]:
    """Score of each bin (bins, talkers, d) and curvature (talkers, d, d), from differences on the stencil.

    The stencil is the centre, then +-h along each axis, then (+h, +h) for each pair of axes.
    """
    h = _STEP
    points = log_density.shape[2]
    d = {3: 1, 6: 2}[points]
    plus, minus = log_density[:, :, 1 : 2 * d : 2], log_density[:, :, 2 : 2 * d + 1 : 2]
    score = share[:, :, None] * (plus - minus) / (2.0 * h)
    total = np.einsum("nk,nks->ks", share, log_density)
    curvature = np.zeros((log_density.shape[1], d, d))
    for a in range(d):
        curvature[:, a, a] = -(total[:, 1 + 2 * a] - 2.0 * total[:, 0] + total[:, 2 + 2 * a]) / h**2
    if d == 2:
        both = total[:, 5] - total[:, 1] - total[:, 3] + total[:, 0]
        curvature[:, 0, 1] = curvature[:, 1, 0] = -both / h**2
    # Where the likelihood is not concave yet, a gradient step of the outer product's length does.
    outer = np.einsum("nka,nkb->kab", score, score)
    for k, matrix in enumerate(curvature):
        if np.linalg.eigvalsh(matrix)[0] <= 0.0:
            curvature[k] = outer[k] + 1e-6 * np.eye(d)
    return score, curvature
