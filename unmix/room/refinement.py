"""The separating matrix refined per frequency: overdetermined independent vector analysis.

K talkers, M channels, y[t] = W z[t]. Talkers have one variance per frame common to all frequencies (or nonnegative
factors), and are independent of a Gaussian background in the orthogonal complement [1]_ [2]_. Per iteration and row,

    V_k = mean_t z z^H / r_k[t] + look_weight * sum_{j != k} a_j a_j^H tr(V_k)/M^2
    w_k = ([W; J, -I] V_k)^{-1} e_k,   w_k /= sqrt(w_k^H V_k w_k),   J = (E2 C W^H) (E1 C W^H)^{-1}

with C the covariance of z: the second term of V_k holds row k to zeros at the other talkers' bearings a_j, which is
what keeps talkers from changing places, between frequencies or with each other [3]_.

.. [1] R. Scheibler and N. Ono, "Independent vector analysis with more microphones than sources", WASPAA 2019.
.. [2] N. Ono, "Stable and fast update rules for independent vector analysis based on auxiliary function technique",
   WASPAA 2011.
.. [3] L. Li and K. Koishida, "Geometrically constrained independent vector analysis for directional speech
   enhancement", ICASSP 2020.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from unmix.room.bands import Bands
from unmix.room.factors import Factors
from unmix.room.linalg import adjoint, loaded, power, safe_solve
from unmix.room.stft import Complexes, Reals
from unmix.settings import RefinementSettings

__all__ = ["Refined", "independent_start", "look_penalty", "refine", "scaled", "scaled_rows", "update_rows"]

_LOADING = 1e-6
_FLOOR = 1e-6
_PARALLEL = 0.999


@dataclass(frozen=True)
class Refined:
    """The refined matrix.

    matrix      (frequencies, channels, channels): K talker rows, then the background's
    iterations  updates made
    cost        of each iteration, in nats per frame and frequency; it does not rise but for the loading
    reverted    rows that kept their last finite value
    """

    matrix: Complexes
    talkers: int
    iterations: int
    cost: tuple[float, ...]
    reverted: int


def independent_start(w: Complexes) -> Complexes:
    """Rows (frequencies, K, M) that are nowhere parallel.

    Where the model cannot tell talkers apart (lowest frequencies: all delays look alike) the rows of the nearest
    frequency at which it can are taken; where none can, rows that each listen to one channel.
    """
    f, k, m = w.shape
    norm = np.linalg.norm(w, axis=2, keepdims=True)
    unit = w / np.where(norm > 0.0, norm, 1.0)
    likeness = np.abs(unit @ adjoint(unit)) - np.eye(k)
    good = np.isfinite(w).all(axis=(1, 2)) & (norm[:, :, 0] > 0.0).all(axis=1)
    if k > 1:
        good &= likeness.max(axis=(1, 2)) < _PARALLEL
    if not good.any():
        return np.broadcast_to(np.eye(k, m, dtype=w.dtype), w.shape).copy()
    where = np.flatnonzero(good)
    nearest = where[np.abs(np.arange(f)[:, None] - where).argmin(axis=1)]
    return np.ascontiguousarray(w[nearest])


def refine(
    z: Complexes,
    start: Complexes,
    look: Complexes,
    settings: RefinementSettings,
    bands: Bands,
    *,
    iterations: int | None = None,
) -> Refined:
    """Refine a separating matrix.

    z      (frequencies, M, frames) spectra
    start  (frequencies, K, M) rows to start from: those of the constrained solution, or a previous segment's
    look   (frequencies, M, K) relative responses of the talkers' bearings
    """
    f, m, frames = z.shape
    k = start.shape[1]
    count = settings.iterations if iterations is None else iterations
    w = independent_start(start).astype(z.dtype)
    outer = np.concatenate(bands.each(lambda b: _outer(z[b])))
    covariance = loaded(_unpacked(outer.mean(axis=1)[:, None], m)[:, 0].astype(z.dtype), _LOADING)
    held = look_penalty(look, settings.look_weight).astype(z.dtype)
    factors = Factors(f, k, frames, settings.components) if settings.source_model == "low-rank" else None
    cost: list[float] = []
    reverted = 0
    weight = np.empty((f if factors else 1, k, frames), outer.dtype)
    for _ in range(count):
        p = np.concatenate(bands.each(lambda b: power(w[b] @ z[b])))
        cost.append(_cost(p, w, covariance))
        if factors is not None:
            weight = factors.inverse_variance(p, bands)
        else:
            r = p.mean(axis=0)
            r = np.maximum(r, _FLOOR * r.mean(axis=1, keepdims=True) + np.finfo(r.dtype).tiny)
            np.divide(w, np.sqrt(r.mean(axis=1))[None, :, None], out=w)
            weight[0] = r.mean(axis=1, keepdims=True) / r

        def update(b: slice, weight: Reals = weight) -> int:
            phi = weight[b] if factors is not None else np.broadcast_to(weight, (b.stop - b.start, k, frames))
            v = _unpacked(phi @ outer[b] * (1.0 / frames), m).astype(z.dtype)
            return update_rows(w[b], v, covariance[b], held[b])

        reverted += sum(bands.each(update))
    matrix = np.empty((f, m, m), z.dtype)

    def complete(b: slice) -> None:
        matrix[b] = _with_background(w[b], covariance[b])

    bands.each(complete)
    return Refined(matrix, k, count, tuple(cost), reverted)


def scaled(matrix: Complexes, talkers: int, reference: int) -> tuple[Complexes, Complexes]:
    """Rows projected back to the reference channel, and the responses that the matrix implies.

    Returns rows (frequencies, K, M), whose outputs add up to the reference channel with the background's, and relative
    responses (frequencies, M, K), one at the reference channel.
    """
    inverse = safe_solve(matrix, np.broadcast_to(np.eye(matrix.shape[-1], dtype=matrix.dtype), matrix.shape))
    at_reference = inverse[:, reference, :talkers]
    rows = at_reference[:, :, None] * matrix[:, :talkers]
    safe = np.where(np.abs(at_reference) > 1e-12, at_reference, 1.0)
    return rows, inverse[:, :, :talkers] / safe[:, None, :]


def scaled_rows(w: Complexes, covariance: Complexes, reference: int) -> Complexes:
    """Rows (frequencies, K, M) projected back to the reference channel by least squares.

    Row k's output is scaled by E[x_ref y_k^*] of what remains of it beside the other talkers: the reference channel's
    regression on all outputs, C W^H (W C W^H)^-1, which equals what the whole matrix's inverse gives.
    """
    cw = covariance @ adjoint(w)
    gram = loaded(w @ cw, _LOADING)
    at_reference = adjoint(safe_solve(gram, adjoint(cw[:, reference : reference + 1])))
    return np.asarray(np.swapaxes(at_reference, 1, 2) * w)


def update_rows(w: Complexes, v: Complexes, covariance: Complexes, held: Complexes) -> int:
    """One sweep over the rows of ``w`` (in place); returns how many rows were left as they were.

    w           (frequencies, K, M)
    v           (frequencies, K, M, M), each talker's weighted covariance
    covariance  (frequencies, M, M)
    held        (frequencies, K, M, M), what is added to ``v``, relative to its mean diagonal

    The background's rows are never formed: V_k w_k must be orthogonal to them, hence in the span of C W^H, and
    w_k = V_k^-1 C W^H (W C W^H)^-1 e_k solves the same equations as [W; J, -I] V_k w_k = e_k.
    """
    k, m = w.shape[1:]
    reverted = 0
    for i in range(k):
        level = np.trace(v[:, i], axis1=1, axis2=2).real[:, None, None] / m
        vi = loaded(v[:, i] + held[:, i] * level, _LOADING)
        cw = covariance @ adjoint(w)
        gram = loaded(w @ cw, _LOADING)
        unit = np.zeros((len(w), k, 1), w.dtype)
        unit[:, i] = 1.0
        row = safe_solve(vi, cw @ safe_solve(gram, unit))
        norm = (adjoint(row) @ vi @ row).real
        fine = np.isfinite(row).all(axis=(1, 2)) & (norm[:, 0, 0] > 0.0) & np.isfinite(norm[:, 0, 0])
        scale = 1.0 / np.sqrt(np.where(fine[:, None, None], norm, 1.0))
        w[:, i] = np.where(fine[:, None], np.conjugate(row * scale)[:, :, 0], w[:, i])
        reverted += int(np.count_nonzero(~fine))
    return reverted


def _with_background(w: Complexes, covariance: Complexes) -> Complexes:
    """[W; J, -I] with the lower rows' outputs uncorrelated with the talkers'."""
    f, k, m = w.shape
    cw = covariance @ adjoint(w)
    # J cw1 = cw2, through the loaded normal equations: cw1 may be singular where talkers look alike.
    top, low = cw[:, :k], cw[:, k:]
    gram = loaded(top @ adjoint(top), _LOADING)
    j = adjoint(safe_solve(gram, top @ adjoint(low)))
    full = np.zeros((f, m, m), w.dtype)
    full[:, :k] = w
    full[:, k:, :k] = j
    full[:, range(k, m), range(k, m)] = -1.0
    return full


def look_penalty(look: Complexes, weight: float) -> Complexes:
    """weight / M sum_{j != k} a_j a_j^H for each talker k: (frequencies, K, M, M)."""
    m, k = look.shape[1:]
    others = [np.delete(look, i, axis=2) for i in range(k)]
    return np.stack([(weight / m) * (o @ adjoint(o)) for o in others], axis=1)


def _outer(z: Complexes) -> Reals:
    """Products z_a z_b^* of all pairs as real numbers, (frequencies, frames, M^2): a sum over frames is one product."""
    f, m, frames = z.shape
    rows, columns = np.triu_indices(m)
    out = np.empty((f, m * m, frames), z.real.dtype)
    pairs = len(rows)
    off = np.flatnonzero(rows != columns)
    product = z[:, rows] * np.conjugate(z[:, columns])
    out[:, :pairs] = product.real
    out[:, pairs:] = product.imag[:, off]
    return np.ascontiguousarray(out.transpose(0, 2, 1))


def _unpacked(sums: Reals, m: int) -> Complexes:
    """Hermitian matrices (..., M, M) of sums (..., M^2) over `_outer`."""
    rows, columns = np.triu_indices(m)
    pairs = len(rows)
    off = rows != columns
    out = np.empty((*sums.shape[:-1], m, m), np.result_type(sums.dtype, np.complex64))
    upper = sums[..., :pairs].astype(out.dtype)
    upper[..., off] += 1j * sums[..., pairs:]
    out[..., rows, columns] = upper
    out[..., columns, rows] = np.conjugate(upper)
    return out


def _cost(p: Reals, w: Complexes, covariance: Complexes) -> float:
    """Negative log-likelihood up to constants: log r summed over talkers, less the log-determinant of the rows."""
    r = p.mean(axis=0)
    r = np.maximum(r, _FLOOR * r.mean(axis=1, keepdims=True) + np.finfo(r.dtype).tiny)
    gram = loaded(w @ covariance @ adjoint(w), 1e-9)
    return float(np.log(r).mean(axis=1).sum() - np.linalg.slogdet(gram)[1].mean())
