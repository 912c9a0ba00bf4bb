"""How well tracks follow the truth: OSPA and GOSPA distances on the sphere.

Between two sets of directions of sizes m <= n, with d the great-circle angle cut off at c,

    OSPA  = ( ( min over assignments of sum d^p + c^p (n - m) ) / n )^(1/p)           [1]_
    GOSPA = ( min over partial assignments of sum d^p + c^p/2 (missed + false) )^(1/p)   [2]_

OSPA is a mean error per talker, with each one too many or too few counted as c; GOSPA is a sum and comes apart into
what is located badly, missed and false.

.. [1] D. Schuhmacher, B.-T. Vo, B.-N. Vo, "A consistent metric for performance evaluation of multi-object filters",
   IEEE Trans. Signal Process. 56, 2008.
.. [2] A. S. Rahmathullah, A. F. Garcia-Fernandez, L. Svensson, "Generalized optimal sub-pattern assignment metric",
   FUSION 2017 (alpha = 2).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment

__all__ = ["Gospa", "gospa", "great_circle", "ospa"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Gospa:
    """GOSPA distance in radians (to the power 1/p), its located part, and how many were missed and false."""

    distance: float
    located: float
    missed: int
    false: int


def great_circle(a: Floats, b: Floats) -> Floats:
    """Angles in radians between unit vectors (..., 3); exact for small ones."""
    return np.asarray(2.0 * np.arcsin(np.clip(0.5 * np.linalg.norm(a - b, axis=-1), 0.0, 1.0)))


def ospa(found: Floats, truth: Floats, *, cutoff: float = np.radians(20.0), p: float = 2.0) -> float:
    """OSPA distance in radians of directions (n, 3) and (m, 3); zero when both are empty."""
    m, n = sorted((len(found), len(truth)))
    if n == 0:
        return 0.0
    if m == 0:
        return float(cutoff)
    d = np.minimum(great_circle(found[:, None], truth[None]), cutoff) ** p
    rows, columns = linear_sum_assignment(d)
    return float(((d[rows, columns].sum() + cutoff**p * (n - m)) / n) ** (1.0 / p))


def gospa(found: Floats, truth: Floats, *, cutoff: float = np.radians(20.0), p: float = 2.0) -> Gospa:
    """GOSPA distance with alpha = 2 of directions (n, 3) and (m, 3)."""
    located, pairs = 0.0, 0
    if len(found) and len(truth):
        d = np.minimum(great_circle(found[:, None], truth[None]), cutoff) ** p
        rows, columns = linear_sum_assignment(d)
        # A pair as far apart as the cutoff costs as much as one missed and one false.
        near = d[rows, columns] < cutoff**p
        located, pairs = float(d[rows, columns][near].sum()), int(near.sum())
    missed, false = len(truth) - pairs, len(found) - pairs
    total = located + 0.5 * cutoff**p * (missed + false)
    return Gospa(float(total ** (1.0 / p)), float(located ** (1.0 / p)), missed, false)
