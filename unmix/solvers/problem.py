"""One least-squares problem, ready for any of the methods.

    minimise  || R^(-1/2) (y - H x) ||^2 + || Q^(1/2) z ||^2   subject to E x = 0

with x the jets, z their zeroth order. Whitening is put into the model once, so that all methods solve the same problem.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.model.mixing import Mixing
from unmix.model.noise import Noise
from unmix.model.prior import Prior

__all__ = ["Problem"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Problem:
    """A model at rest or moving, with its noise and its prior.

    mixing    the model's filters
    noise     its covariance; `whitened` is the model after whitening
    prior     absolute precision of the talkers
    """

    mixing: Mixing
    noise: Noise
    prior: Prior
    whitened: Mixing

    @classmethod
    def of(cls, mixing: Mixing, noise: Noise, prior: Prior) -> Problem:
        """Put the parts together."""
        return cls(mixing, noise, prior, noise.whiten_mixing(mixing))

    @property
    def reach(self) -> int:
        """Samples beyond a block that its unknowns extend to on either side."""
        return self.whitened.reach
