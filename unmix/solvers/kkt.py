"""`kkt`: the whole problem with all its jets and its constraint, as one sparse saddle-point system.

    [ A^T A + Q   E^T ] [ x ]   [ A^T y ]
    [     E        0  ] [ mu ] = [   0   ],     A = R^(-1/2) H

Nothing is eliminated and nothing is assumed about the ends of a block, which makes it the check on the other methods.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from unmix.errors import UnsolvableError
from unmix.model.delays import Paths
from unmix.model.differentiators import Differentiators
from unmix.model.jets import JetLayout, jet_operator, tied_rows
from unmix.model.mixing import Anchor
from unmix.model.noise import Noise
from unmix.model.prior import Prior

if TYPE_CHECKING:
    from scipy.sparse import csr_matrix

__all__ = ["solve_block", "whitening_operator"]

Floats = NDArray[np.float64]


def solve_block(
    paths: Paths,
    differentiators: Differentiators,
    noise: Noise,
    prior: Prior,
    whitened: Floats,
    *,
    sample_rate: float,
    anchor: Anchor = "nearest",
    start: int = 0,
    hold: int = 8,
) -> Floats:
    """Solve one whitened block (channels, samples) with constraint `tied`; returns (talkers, samples)."""
    from scipy.sparse import block_array, csc_matrix
    from scipy.sparse.linalg import splu

    if prior.weight == 0.0 and paths.talkers > 1:
        raise UnsolvableError('method `kkt` needs a prior with two talkers or more; set prior = "flat"')
    samples = whitened.shape[1]
    h, layout = jet_operator(
        paths,
        differentiators,
        sample_rate,
        anchor=anchor,
        samples=samples,
        start=start,
        hold=hold,
        pad=noise.half_width,
    )
    a = whitening_operator(noise, paths.channels, samples) @ h
    e = tied_rows(layout, differentiators)
    normal = (a.T @ a + prior_matrix(layout, prior)).tocsc()
    system = block_array([[normal, e.T], [e, None]], format="csc")
    right = np.concatenate([a.T @ whitened.ravel(), np.zeros(e.shape[0])])
    solution = splu(csc_matrix(system)).solve(right)
    return np.asarray(solution[layout.zeroth(np.arange(samples))])


def whitening_operator(noise: Noise, channels: int, samples: int) -> csr_matrix:
    """Rows of W for a block: (channels * samples, channels * (samples + 2 half_width)), channel by channel."""
    from scipy.sparse import block_array, csr_matrix, diags_array, eye_array

    if noise.taps is None:
        return csr_matrix(eye_array(channels * samples))
    width = noise.taps.shape[-1]
    shape = (samples, samples + width - 1)
    rows = [
        [diags_array(list(noise.taps[c, m]), offsets=list(range(width)), shape=shape) for m in range(channels)]
        for c in range(channels)
    ]
    return csr_matrix(block_array(rows))


def prior_matrix(layout: JetLayout, prior: Prior) -> csr_matrix:
    """Q over the zeroth order of all samples in x: symmetric Toeplitz per talker, nothing on the derivatives."""
    from scipy.sparse import csr_matrix

    samples = np.arange(layout.first - layout.skirt, layout.last + layout.skirt)
    columns = layout.zeroth(samples)
    rows_, columns_, values = [], [], []
    for lag, value in enumerate(prior.autocorrelation()):
        here, there = columns[:, : len(samples) - lag].ravel(), columns[:, lag:].ravel()
        for left, right in ((here, there), (there, here)) if lag else ((here, there),):
            rows_.append(left)
            columns_.append(right)
            values.append(np.full(len(left), value))
    size = (layout.unknowns, layout.unknowns)
    return csr_matrix((np.concatenate(values), (np.concatenate(rows_), np.concatenate(columns_))), shape=size)
