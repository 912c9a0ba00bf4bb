"""`propagated`: jets at every sample, tied to their neighbours by the Taylor transition instead of by equality.

    minimise  || R^(-1/2) (y - H x) ||^2 + sum_n || W^(-1/2) (z[n+1] - F z[n]) ||^2 + || Q^(1/2) z^(0) ||^2

Two methods. `reduced` solves a block: the jets are ordered in time, so the normal equations are banded. `stationary`
solves the same per frequency, where the transition reads (exp(j omega) I - F) z and every talker has L + 1 unknowns.

W follows from an assumed talker spectrum, whose power relative to the noise is the inverse of the prior's weight. With
"own" anchors and a prior on the first jet alone the block solution is the fixed-interval smoother's (Rauch, Tung and
Striebel 1965).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from unmix.errors import UnsolvableError
from unmix.model.delays import Paths
from unmix.model.differentiators import Differentiators
from unmix.model.jets import jet_operator, transition, transition_covariance, transition_rows
from unmix.model.mixing import Anchor, anchored_delays, taylor_terms
from unmix.model.noise import Noise
from unmix.model.prior import Prior
from unmix.solvers.kkt import prior_matrix, whitening_operator

if TYPE_CHECKING:
    from scipy.sparse import csr_matrix

__all__ = ["PropagatedBlock", "transition_weight", "trusted_band"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

_SPECTRUM_POINTS = 512


def transition_weight(order: int, prior: Prior, signal_power: float) -> Floats:
    """W^(-1), (order + 1, order + 1), for talkers of the prior's spectrum and `signal_power` relative to the noise."""
    omega = np.pi * (np.arange(_SPECTRUM_POINTS) + 0.5) / _SPECTRUM_POINTS
    response = np.exp(-1j * np.outer(omega, np.arange(len(prior.taps)))) @ prior.taps
    spectrum = 1.0 / np.abs(response) ** 2
    covariance = transition_covariance(order, signal_power * spectrum / spectrum.mean())
    # Deviations differ by orders of magnitude from one derivative to the next: scale them before inverting.
    deviation = np.sqrt(np.diag(covariance))
    inverse = np.linalg.inv(covariance / np.outer(deviation, deviation)) / np.outer(deviation, deviation)
    return np.asarray(0.5 * (inverse + inverse.T))


def trusted_band(order: int, error_db: float = -20.0) -> float:
    """Highest frequency, as a fraction of the Nyquist frequency, at which the truncated transition leaves out less than
    `error_db` of the signal: |exp(j omega) - sum_{i <= L} (j omega)^i / i!| <= 10^(error_db / 20)."""
    omega = np.linspace(1e-3, 1.0, 1000) * np.pi
    left = np.abs(np.exp(1j * omega) - ((1j * omega[:, None]) ** np.arange(order + 1)) @ transition(order)[0])
    good = left <= 10.0 ** (error_db / 20.0)
    return float(omega[good.argmin() - 1] / np.pi) if not good.all() else 1.0


class PropagatedBlock:
    """A block of given delays, factored; solves any samples recorded under the same delays.

    weight         W^(-1) of every talker
    first_jet      optional precision of the first anchor's jet, (order + 1, order + 1)
    """

    def __init__(
        self,
        paths: Paths,
        differentiators: Differentiators,
        noise: Noise,
        prior: Prior,
        samples: int,
        *,
        sample_rate: float,
        weight: Floats,
        anchor: Anchor = "nearest",
        start: int = 0,
        hold: int = 8,
        first_jet: Floats | None = None,
    ) -> None:
        from scipy.linalg import LinAlgError, cholesky_banded
        from scipy.sparse import block_diag, csr_matrix, eye_array, kron

        if noise.taps is not None and paths.moving:
            raise UnsolvableError(
                f'noise {noise.kind!r} needs talkers at rest; use noise = "white" while something moves'
            )
        h, layout = jet_operator(
            paths, differentiators, sample_rate, anchor=anchor, samples=samples, start=start, hold=hold,
            pad=noise.half_width, tied=False,
        )  # fmt: skip
        self._rows: csr_matrix = whitening_operator(noise, paths.channels, samples) @ h
        d = transition_rows(layout)
        root = np.linalg.cholesky(weight).T
        d = csr_matrix(kron(eye_array(d.shape[0] // len(root)), root)) @ d
        normal = self._rows.T @ self._rows + d.T @ d + prior_matrix(layout, prior)
        if first_jet is not None:
            first = block_diag([first_jet] * paths.talkers)
            rest = layout.unknowns - first.shape[0]
            normal = normal + block_diag([first, csr_matrix((rest, rest))])
        self._layout, self.samples = layout, samples
        try:
            self._cholesky = cholesky_banded(_lower_band(normal), lower=True, overwrite_ab=True, check_finite=False)
        except LinAlgError:
            raise UnsolvableError(
                'the jets are not determined; lower the order, or set prior = "flat" with a larger prior_weight'
            ) from None

    def solve(self, whitened: Floats) -> Floats:
        """Talkers (talkers, samples) of a whitened block (channels, samples)."""
        return self.jets(whitened)[:, :, 0]

    def jets(self, whitened: Floats) -> Floats:
        """All jets of the block's samples: (talkers, samples, order + 1)."""
        from scipy.linalg import cho_solve_banded

        x = cho_solve_banded((self._cholesky, True), self._rows.T @ whitened.ravel(), check_finite=False)
        levels = np.arange(self._layout.order + 1)
        talker = np.arange(self._layout.talkers)[:, None, None]
        return np.asarray(x[self._layout.column(np.arange(self.samples)[None, :, None], talker, levels)])


def _lower_band(matrix: csr_matrix) -> Floats:
    """LAPACK's lower band storage of a symmetric sparse matrix."""
    from scipy.sparse import tril

    lower = tril(matrix).tocoo()
    lower.sum_duplicates()
    row, column = lower.coords
    offset = row - column
    band = np.zeros((int(offset.max()) + 1, matrix.shape[0]))
    band[offset, column] = lower.data
    return band


def stationary_response(
    paths: Paths,
    order: int,
    prior: Prior,
    weight: Floats,
    omega: Floats,
    *,
    sample_rate: float,
    anchor: Anchor = "nearest",
    whitening: Complexes | None = None,
) -> Complexes:
    """The block solution far from its ends, per frequency: (frequencies, talkers, channels), before whitening is
    applied.

    whitening  response of W (frequencies, channels, channels), None for white noise
    """
    whole, d = anchored_delays(paths.delay_s * sample_rate, anchor)
    terms = paths.gain[..., None] * taylor_terms(d, order)
    k, m, levels = terms.shape
    shift = np.exp(-1j * omega[:, None, None] * whole)
    h = (shift[..., None] * terms).transpose(0, 2, 1, 3).reshape(len(omega), m, k * levels)
    if whitening is not None:
        h = whitening @ h
    step = np.exp(1j * omega)[:, None, None] * np.eye(levels) - transition(order)
    tie = step.conj().transpose(0, 2, 1) @ weight @ step
    tie[:, 0, 0] += prior.precision(omega)
    adjoint = h.conj().transpose(0, 2, 1)
    normal = adjoint @ h
    for talker in range(k):
        at = slice(talker * levels, (talker + 1) * levels)
        normal[:, at, at] += tie
    return np.asarray(np.linalg.solve(normal, adjoint)[:, ::levels])
