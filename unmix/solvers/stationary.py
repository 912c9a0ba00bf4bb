"""`stationary`: delays constant, so the block solution far from the ends is a filter bank.

    B(omega) = (H^H R^-1 H + Q)^-1 H^H R^-1,      z_k[n] = sum_m sum_j b_km[j] y_m[n - j]

Its taps decay as fast as the prior allows. They are designed on a grid fine enough that their tails do not wrap, and
cut where what is left out is below a stated share; that reach is the margin within which the ends of a recording
differ from one long block solve.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.errors import UnsolvableError
from unmix.solvers.problem import Problem

__all__ = ["FilterBank", "design", "filter_bank_from_response", "solution_response"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Response = Callable[[Floats], Complexes]

SMALLEST_GRID = 2048
LARGEST_GRID = 2**17
MINIMUM_NORM_RCOND = 1e-6
"""Singular values below this share of the largest count as zero in the minimum-norm answer."""


@dataclass(frozen=True)
class FilterBank:
    """Filters from microphones to talkers: z_k[n] = sum_m sum_j taps[k, m, before + j] y_m[n - j].

    taps        (talkers, channels, before + 1 + after)
    before      samples of the future that a filter sees (j = -before..-1)
    cut_share   largest share of a talker's filter magnitude that was cut off
    note        "minimum-norm" when the answer is that, else empty
    """

    taps: Floats
    before: int
    cut_share: float
    note: str = ""

    @property
    def after(self) -> int:
        """Samples of the past that a filter sees."""
        return int(self.taps.shape[-1]) - 1 - self.before

    @property
    def margin(self) -> int:
        """Samples from an end of the recording within which the answer differs from one long solve."""
        return max(self.before, self.after)

    def response(self, omega: Floats) -> Complexes:
        """Frequency response (frequencies, talkers, channels) at `omega` radians per sample."""
        basis = np.exp(-1j * np.outer(omega, np.arange(-self.before, self.after + 1)))
        return np.asarray(np.einsum("kmj,fj->fkm", self.taps, basis, optimize=True))


def design(problem: Problem, *, tail: float = 1e-7) -> FilterBank:
    """The filter bank of a problem at rest; `tail` is the share of each filter that may be cut off.

    Without a prior the answer is the one of minimum norm, and `note` says so.
    """
    if problem.mixing.taps.ndim == 4:
        raise UnsolvableError('method `stationary` needs talkers and array at rest; use method = "reduced"')
    note = "minimum-norm" if problem.prior.weight == 0.0 and problem.mixing.talkers > 1 else ""
    return filter_bank_from_response(lambda omega: solution_response(problem, omega), tail=tail, note=note)


def solution_response(problem: Problem, omega: Floats) -> Complexes:
    """B(omega) of a problem at rest, whitening included: (frequencies, talkers, channels)."""
    h = problem.whitened.response(omega)
    adjoint = h.conj().transpose(0, 2, 1)
    if problem.prior.weight == 0.0:
        inverse = np.asarray(np.linalg.pinv(h, rcond=MINIMUM_NORM_RCOND), np.complex128)
    else:
        q = problem.prior.precision(omega)[:, None, None] * np.eye(h.shape[2])
        inverse = np.asarray(np.linalg.solve(adjoint @ h + q, adjoint), np.complex128)
    whitening = problem.noise.response(omega)
    return inverse if whitening is None else np.asarray(inverse @ whitening)


def filter_bank_from_response(
    response: Response, *, tail: float, note: str = "", largest_grid: int = LARGEST_GRID
) -> FilterBank:
    """Taps of a frequency response, on the smallest grid whose wrapped tails stay below `tail`, cut where they may be.

    Responses that jump at the Nyquist frequency (exact fractional delays) have tails that fall off as 1/n; for them
    `largest_grid` bounds the length.
    """
    grid = SMALLEST_GRID
    while True:
        omega = 2.0 * np.pi * np.arange(grid // 2 + 1) / grid
        # A delay between two samples has a complex response at the Nyquist frequency; real taps keep its real part.
        taps = np.fft.irfft(response(omega), grid, axis=0).transpose(1, 2, 0)
        taps = np.roll(taps, grid // 2, axis=-1)
        magnitude = np.abs(taps).sum(axis=1)
        total = magnitude.sum(axis=-1, keepdims=True)
        ends = magnitude[:, : grid // 16].sum(axis=-1) + magnitude[:, -grid // 16 :].sum(axis=-1)
        if grid >= largest_grid or np.all(ends <= 0.25 * tail * total[:, 0]):
            break
        grid *= 2
    share = np.maximum.reduce(magnitude / np.maximum(total, 1e-300), axis=0)
    early, late = np.cumsum(share), np.cumsum(share[::-1])
    half = grid // 2
    before = max(0, half - int(np.searchsorted(early, 0.5 * tail)))
    after = max(0, half - 1 - int(np.searchsorted(late, 0.5 * tail)))
    kept = taps[..., half - before : half + after + 1]
    cut = 1.0 - np.abs(kept).sum(axis=(1, 2)) / np.maximum(total[:, 0], 1e-300)
    return FilterBank(np.ascontiguousarray(kept), before, float(max(cut.max(), 0.0)), note)
