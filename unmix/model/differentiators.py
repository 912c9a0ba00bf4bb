"""Derivative filters: z^(l)[n] = sum_j d_l[j] z[n + j], j = -P..P, in units of 1/T^l.

Two families. Finite differences are exact for polynomials (Fornberg 1988) and best at low frequencies; least-squares
differentiators spread their error evenly up to a band edge and do better for the same half-width P.

Reference: B. Fornberg, "Generation of finite difference formulas on arbitrarily spaced grids", Mathematics of
Computation 51 (1988), 699-706.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unmix.errors import UnsolvableError

__all__ = ["Differentiators", "choose_differentiators", "finite_differences", "least_squares_differentiators"]

Floats = NDArray[np.float64]
Family = Literal["least-squares", "finite-difference"]

WIDEST = 40
_GRID = 512


@dataclass(frozen=True)
class Differentiators:
    """Derivative filters of one expansion.

    weights        (order + 1, 2 half_width + 1); row l is d_l, column P + j is the weight of z[n + j]
    half_width     P
    family         how they were made
    error_db       largest error of a half-sample delay built from them, up to the band edge
    band_edge      as a fraction of the Nyquist frequency
    """

    weights: Floats
    half_width: int
    family: Family
    error_db: float
    band_edge: float

    @property
    def order(self) -> int:
        """Highest derivative."""
        return len(self.weights) - 1


def finite_differences(order: int, half_width: int) -> Floats:
    """Weights of the derivatives 0..order at the middle of 2P + 1 points, exact for polynomials of degree 2P.

    Fornberg's recursion over the points of a unit grid. Returns (order + 1, 2P + 1); rows beyond degree 2P are zero.
    """
    nodes = [0]
    for j in range(1, half_width + 1):
        nodes += [j, -j]
    weights = np.zeros((order + 1, len(nodes)))
    weights[0, 0] = 1.0
    scale = 1.0
    for n in range(1, len(nodes)):
        new_scale = 1.0
        for v in range(n):
            gap = nodes[n] - nodes[v]
            new_scale *= gap
            for m in range(min(n, order), -1, -1):
                below = weights[m - 1, v] if m else 0.0
                if v == n - 1:
                    before = weights[m - 1, n - 1] if m else 0.0
                    weights[m, n] = scale / new_scale * (m * before - nodes[n - 1] * weights[m, n - 1])
                weights[m, v] = (nodes[n] * weights[m, v] - m * below) / gap
        scale = new_scale
    return np.asarray(weights[:, np.argsort(nodes)])


def least_squares_differentiators(order: int, half_width: int, band_edge: float) -> Floats:
    """Weights of the derivatives 0..order whose response is nearest (j omega)^l up to the band edge.

    Minimises the integral of |D_l(omega) - (j omega)^l|^2 over 0..band_edge * pi, exact for constants, slopes and
    parabolas: at low frequencies talkers differ by little more than their slopes, and an error there is multiplied by
    the inverse of a small singular value. Symmetric for even, antisymmetric for odd derivatives. Returns (order + 1,
    2P + 1).
    """
    omega = (np.arange(_GRID) + 0.5) / _GRID * band_edge * math.pi
    j = np.arange(1, half_width + 1)
    bases = (
        np.column_stack([np.ones(_GRID), 2.0 * np.cos(np.outer(omega, j))]),
        2.0 * np.sin(np.outer(omega, j)),
    )
    # Rows of moments: sum_j d[j] j^q = q! for q = l, else 0.
    moments = (
        np.array([[1.0, *np.full(half_width, 2.0)], [0.0, *(2.0 * j**2)]]),
        2.0 * j[None, :].astype(np.float64),
    )
    weights = np.zeros((order + 1, 2 * half_width + 1))
    weights[0, half_width] = 1.0
    for n in range(1, order + 1):
        odd = n % 2
        exact = np.array([float(n == 1)]) if odd else np.array([0.0, 2.0 * (n == 2)])
        half = _constrained_fit(bases[odd], omega**n * (-1.0) ** (n // 2), moments[odd], exact)
        if odd:
            weights[n, half_width + 1 :], weights[n, :half_width] = half, -half[::-1]
        else:
            weights[n, half_width:], weights[n, : half_width + 1] = half, half[::-1]
    return weights


def _constrained_fit(basis: Floats, target: Floats, rows: Floats, values: Floats) -> Floats:
    """Least squares subject to rows @ x = values, in the null space of the rows."""
    particular = np.linalg.lstsq(rows, values, rcond=None)[0]
    null = np.linalg.svd(rows)[2][len(rows) :].T
    if null.shape[1] == 0:
        return np.asarray(particular)
    free = np.linalg.lstsq(basis @ null, target - basis @ particular, rcond=None)[0]
    return np.asarray(particular + null @ free)


def half_sample_error_db(weights: Floats, band_edge: float) -> float:
    """Largest error of delays up to half a sample made from the weights, up to the band edge, in dB."""
    order, half_width = len(weights) - 1, weights.shape[1] // 2
    omega = np.linspace(0.01, band_edge, 200) * math.pi
    basis = np.exp(1j * np.outer(omega, np.arange(-half_width, half_width + 1)))
    worst = 0.0
    for d in (0.25, 0.5):
        taylor = (-d) ** np.arange(order + 1) / [math.factorial(n) for n in range(order + 1)]
        worst = max(worst, float(np.abs(basis @ (taylor @ weights) - np.exp(-1j * omega * d)).max()))
    return 20.0 * math.log10(max(worst, 1e-16))


@lru_cache(maxsize=64)
def choose_differentiators(
    order: int, *, family: Family, error_db: float, band_edge: float, half_width: int | None = None
) -> Differentiators:
    """The narrowest differentiators that hold the error at the band edge, or those of a given half-width.

    order       0 to 12; half_width at least order / 2, so that every derivative exists
    error_db    error allowed for a delay of up to half a sample, up to the band edge
    band_edge   fraction of the Nyquist frequency, below 1

    Where the Taylor remainder of the order itself exceeds `error_db`, the width is the one beyond which nothing is
    gained; the error reached is in the result. Raises UnsolvableError when a given half-width is too narrow for the
    order.
    """
    least = max(1, math.ceil(order / 2))

    def made(p: int) -> Differentiators:
        if family == "finite-difference":
            weights = finite_differences(order, p)
        else:
            weights = least_squares_differentiators(order, p, band_edge)
        return Differentiators(weights, p, family, half_sample_error_db(weights, band_edge), band_edge)

    if half_width is not None:
        if half_width < least:
            raise UnsolvableError(
                f"half_width {half_width} is too narrow for order {order}; derivatives need at least {least}"
            )
        return made(half_width)
    best = made(least)
    for p in range(least + 1, WIDEST + 1):
        if best.error_db <= error_db:
            break
        wider = made(p)
        if best.error_db - wider.error_db < 0.1 and p > least + 8:
            break
        if wider.error_db < best.error_db:
            best = wider
    return best
