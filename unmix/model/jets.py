"""The sparse operator over jets, and the constraints that couple their snapshots.

The unknown x stacks, for a block of N samples, the jets z_k^(l)[n] (l = 0..L) at every anchor that the block touches
and, for `tied`, the zeroth order as far out as the differentiators reach. Rows:

    H   y_m[n] = sum_k g_km sum_l (-d)^l / l! z_k^(l)[n - i]
    E   z_k^(l)[n] - sum_j d_l[j] z_k^(0)[n + j] = 0,   l = 1..L                  (`tied`)
    D   z_k[n + 1] - F z_k[n],   F[l, l'] = 1 / (l' - l)! for l' >= l             (`propagated`)
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from unmix.model.delays import Paths
from unmix.model.differentiators import Differentiators
from unmix.model.mixing import Anchor, anchored_delays, taylor_terms

if TYPE_CHECKING:
    from scipy.sparse import csr_matrix

__all__ = ["JetLayout", "jet_operator", "tied_rows", "transition", "transition_covariance", "transition_rows"]

Floats = NDArray[np.float64]

LOADING = 1e-5
"""Share of each diagonal element added to the transition's covariance."""


@dataclass(frozen=True)
class JetLayout:
    """Where each unknown stands in x.

    talkers, order
    first, last    anchors run from sample `first` to `last` - 1; jets exist there
    skirt          samples beyond the anchors at which the zeroth order alone exists (0 unless `tied`)
    """

    talkers: int
    order: int
    first: int
    last: int
    skirt: int

    @property
    def unknowns(self) -> int:
        """Length of x."""
        jets = (self.last - self.first) * self.talkers * (self.order + 1)
        return jets + 2 * self.skirt * self.talkers

    def column(
        self, sample: NDArray[np.int64], talker: NDArray[np.int64], level: NDArray[np.int64]
    ) -> NDArray[np.int64]:
        """Columns of z_talker^(level)[sample]; ordered by time, then talker, then order."""
        per = self.talkers * (self.order + 1)
        lead = self.skirt * self.talkers
        inside = lead + (sample - self.first) * per + talker * (self.order + 1) + level
        before = (sample - self.first + self.skirt) * self.talkers + talker
        after = lead + (self.last - self.first) * per + (sample - self.last) * self.talkers + talker
        return np.where(sample < self.first, before, np.where(sample >= self.last, after, inside))

    def zeroth(self, sample: NDArray[np.int64]) -> NDArray[np.int64]:
        """Columns of the zeroth order at the samples: (talkers, samples)."""
        talker = np.arange(self.talkers)[:, None]
        return self.column(sample[None, :], talker, np.zeros((1, 1), np.int64))


def jet_operator(
    paths: Paths,
    differentiators: Differentiators,
    sample_rate: float,
    *,
    anchor: Anchor,
    samples: int,
    start: int = 0,
    hold: int = 8,
    pad: int = 0,
    tied: bool = True,
) -> tuple[csr_matrix, JetLayout]:
    """H for samples -pad..samples-1+pad of a block that begins at `start`, rows ordered by channel and then time."""
    from scipy.sparse import csr_matrix

    n = np.arange(-pad, samples + pad)
    if paths.moving:
        group = np.clip(n // hold, 0, None)
        delay, gain = paths.at((start + (group + 0.5) * hold) / sample_rate)
    else:
        delay, gain = paths.at(np.zeros(len(n)))
    whole, d = anchored_delays(delay * sample_rate, anchor)
    farthest = int(np.abs(anchored_delays(paths.delay_s * sample_rate, anchor)[0]).max())
    order = differentiators.order
    layout = JetLayout(
        paths.talkers, order, -pad - farthest, samples + pad + farthest, differentiators.half_width if tied else 0
    )
    values = gain[..., None] * taylor_terms(d, order)
    t, k, m, level = np.meshgrid(
        np.arange(len(n)), np.arange(paths.talkers), np.arange(paths.channels), np.arange(order + 1), indexing="ij"
    )
    columns = layout.column(n[t] - whole[t, k, m], k, level)
    rows = m * len(n) + t
    shape = (paths.channels * len(n), layout.unknowns)
    return csr_matrix((values.ravel(), (rows.ravel(), columns.ravel())), shape=shape), layout


def tied_rows(layout: JetLayout, differentiators: Differentiators) -> csr_matrix:
    """E: one row per talker, anchor and derivative from the first up."""
    from scipy.sparse import csr_matrix

    p = differentiators.half_width
    samples = np.arange(layout.first, layout.last)
    n, k, level = (
        v.ravel()
        for v in np.meshgrid(samples, np.arange(layout.talkers), np.arange(1, layout.order + 1), indexing="ij")
    )
    rows = np.arange(len(n))
    j = np.arange(-p, p + 1)
    far = layout.column(n[:, None] + j, k[:, None], np.zeros((1, 1), np.int64))
    columns = np.concatenate([layout.column(n, k, level), far.ravel()])
    values = np.concatenate([np.ones(len(n)), -differentiators.weights[level].ravel()])
    every = np.concatenate([rows, np.repeat(rows, 2 * p + 1)])
    return csr_matrix((values, (every, columns)), shape=(len(n), layout.unknowns))


def transition(order: int) -> Floats:
    """F, the Taylor transition by one sample of a jet scaled by T^l: (order + 1, order + 1)."""
    f = np.zeros((order + 1, order + 1))
    for row in range(order + 1):
        for column in range(row, order + 1):
            f[row, column] = 1.0 / math.factorial(column - row)
    return f


def transition_covariance(order: int, spectrum: Floats) -> Floats:
    """Covariance of w = z[n+1] - F z[n], what the truncated transition leaves out, for a talker of a given spectrum.

    spectrum  power density at evenly spaced frequencies from 0 to the Nyquist frequency; its scale sets the talker's
    power

    With e_l(omega) = (j omega)^l (exp(j omega) - sum_{i <= L - l} (j omega)^i / i!), the covariance is the average of
    e e^H weighted by the spectrum. Returns (order + 1, order + 1), real.

    What is left out of one derivative nearly determines what is left out of the next, so the matrix is close to
    singular; its diagonal is loaded by `LOADING`, without which the block's normal equations lose all their digits.
    """
    omega = np.pi * (np.arange(len(spectrum)) + 0.5) / len(spectrum)
    powers = (1j * omega[:, None]) ** np.arange(order + 1)
    left = powers * np.exp(1j * omega)[:, None] - powers @ transition(order).T
    covariance = (left.T @ (left.conj() * spectrum[:, None])).real / len(spectrum)
    return np.asarray(covariance + np.diag(LOADING * np.diag(covariance)))


def transition_rows(layout: JetLayout) -> csr_matrix:
    """D: z[n + 1] - F z[n] for every talker and pair of neighbouring anchors, all orders."""
    from scipy.sparse import csr_matrix

    f = transition(layout.order)
    levels = layout.order + 1
    samples = np.arange(layout.first, layout.last - 1)
    n, k = (v.ravel() for v in np.meshgrid(samples, np.arange(layout.talkers), indexing="ij"))
    level = np.arange(levels)
    rows = np.arange(len(n) * levels).reshape(len(n), levels)
    after = layout.column(n[:, None] + 1, k[:, None], level)
    here = layout.column(n[:, None], k[:, None], level)
    columns = np.concatenate([after.ravel(), np.repeat(here[:, None, :], levels, axis=1).ravel()])
    every = np.concatenate([rows.ravel(), np.repeat(rows[:, :, None], levels, axis=2).ravel()])
    values = np.concatenate([np.ones(rows.size), np.tile(-f.ravel(), len(n))])
    return csr_matrix((values, (every, columns)), shape=(rows.size, layout.unknowns))
