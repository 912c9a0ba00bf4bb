"""`free`: every snapshot alone, one talker, jets expanded about the snapshot itself.

    y[n] = V z[n] + v,    V[m, l] = g_m (-tau_m / T)^l / l!,    z[n] = V^+ y[n]

needs L + 1 below the number of distinct delays. What is left of each snapshot is divided by its degrees of freedom,
M - L - 1, so that it estimates the noise's variance.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.errors import UnsolvableError
from unmix.model.delays import Paths
from unmix.model.mixing import taylor_terms

__all__ = ["SnapshotSolver", "distinct_delays"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class SnapshotSolver:
    """The pseudo-inverse of one talker's snapshot, scaled so that its columns are comparable.

    matrix    V (channels, order + 1)
    inverse   V^+ (order + 1, channels)
    freedom   M - L - 1
    """

    matrix: Floats
    inverse: Floats
    freedom: int

    @classmethod
    def of(cls, paths: Paths, order: int, sample_rate: float) -> SnapshotSolver:
        """Raises UnsolvableError with more than one talker, with motion, or with too few distinct delays."""
        if paths.talkers > 1:
            raise UnsolvableError(
                "constraint `free` takes one talker: the zeroth-order columns of two coincide in every snapshot; "
                'use constraint = "tied"'
            )
        if paths.moving:
            raise UnsolvableError('constraint `free` needs a talker at rest; use constraint = "tied"')
        delay = paths.delay_s[0] * sample_rate
        distinct = distinct_delays(delay)
        if order + 1 >= distinct:
            raise UnsolvableError(
                f"constraint `free` of order {order} needs more than {order + 1} distinct delays; this bearing gives "
                f"{distinct}: lower the order to {max(distinct - 2, 0)} or add microphones"
            )
        v = paths.gain[0][:, None] * taylor_terms(delay, order)
        scale = np.linalg.norm(v, axis=0)
        inverse = np.linalg.pinv(v / scale) / scale[:, None]
        return cls(v, inverse, len(delay) - order - 1)

    def solve(self, recording: Floats) -> tuple[Floats, Floats]:
        """Jets (order + 1, samples) and variance of what is left per degree of freedom (samples,)."""
        jets = self.inverse @ recording
        left = recording - self.matrix @ jets
        return jets, np.sum(left**2, axis=0) / self.freedom


def distinct_delays(delay_samples: Floats, tolerance: float = 1e-3) -> int:
    """Number of delays that differ by more than `tolerance` samples."""
    ordered = np.sort(delay_samples)
    return int(1 + np.count_nonzero(np.diff(ordered) > tolerance))
