"""What the model can resolve: singular values, noise gain and the lowest usable frequency.

For K plane waves all columns of H(omega) coincide at zero frequency, so K - 1 singular values vanish there and grow
with omega times the differences of the delays. The noise gain of talker k is [(H^H R^-1 H + Q)^-1 H^H R^-1 H
(...)^-1]_kk: the power of its noise over that of the noise at one microphone.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.model.mixing import Mixing
from unmix.model.prior import Prior

__all__ = ["Conditioning", "condition"]

Floats = NDArray[np.float64]

USABLE_GAIN_DB = 20.0
"""Noise gain above which a frequency is called unusable: a talker 30 dB above the noise would keep 10 dB."""


@dataclass(frozen=True)
class Conditioning:
    """Resolution of a model over frequency.

    frequencies_hz    (frequencies,)
    singular_values   (frequencies, talkers), largest first, of the whitened model
    noise_gain_db     (frequencies, talkers) with the prior as it is
    unprimed_gain_db  (frequencies, talkers) without any prior (infinite gains are capped at 200 dB)
    lowest_usable_hz  from here up every talker's gain without prior stays below USABLE_GAIN_DB; None if nowhere
    worst_condition   largest ratio of singular values from lowest_usable_hz up
    """

    frequencies_hz: Floats
    singular_values: Floats
    noise_gain_db: Floats
    unprimed_gain_db: Floats
    lowest_usable_hz: float | None
    worst_condition: float

    def to_dict(self) -> dict[str, Any]:
        """The figures that stand in `solution.json`; over frequency, the worst of each third of an octave."""
        bands = np.floor(3.0 * np.log2(self.frequencies_hz / 1000.0) + 0.5)
        groups = [bands == band for band in np.unique(bands)]
        return {
            "lowest_usable_hz": self.lowest_usable_hz,
            "worst_condition": self.worst_condition,
            "worst_noise_gain_db": float(self.noise_gain_db.max()),
            "band_hz": [float(1000.0 * 2.0 ** (bands[at][0] / 3.0)) for at in groups],
            "condition": [float((self.singular_values[at, 0] / self.singular_values[at, -1]).max()) for at in groups],
            "noise_gain_db": [self.noise_gain_db[at].max(axis=0).tolist() for at in groups],
        }


def condition(
    mixing: Mixing, prior: Prior, sample_rate: float, *, points: int = 512, top_hz: float | None = None
) -> Conditioning:
    """Conditioning of a (whitened) model at rest, at `points` frequencies up to `top_hz` (default 0.9 of Nyquist)."""
    top = min(top_hz or 0.9 * sample_rate / 2, sample_rate / 2)
    frequencies = (np.arange(points) + 0.5) / points * top
    omega = 2.0 * np.pi * frequencies / sample_rate
    h = mixing.response(omega)
    s = np.linalg.svd(h, compute_uv=False)
    hh = h.conj().transpose(0, 2, 1)
    gram = hh @ h
    eye = np.eye(mixing.talkers)
    inverse = np.linalg.inv(gram + (prior.precision(omega) + 1e-13)[:, None, None] * eye)
    with_prior = np.einsum("fkk->fk", inverse @ gram @ inverse).real
    without = np.einsum("fkk->fk", np.linalg.pinv(gram, rcond=1e-15, hermitian=True)).real
    ratio = s[:, 0] / np.maximum(s[:, -1], 1e-300)
    without = np.where((ratio > 1e7)[:, None], np.inf, without)
    unprimed = np.minimum(10.0 * np.log10(np.maximum(without, 1e-30)), 200.0)
    good = np.all(unprimed < USABLE_GAIN_DB, axis=1)
    bad = np.flatnonzero(~good)
    first = 0 if len(bad) == 0 else int(_first_lasting(good))
    usable = first < points
    return Conditioning(
        np.asarray(frequencies, np.float64),
        np.asarray(s, np.float64),
        10.0 * np.log10(np.maximum(with_prior, 1e-30)),
        unprimed,
        float(frequencies[first]) if usable else None,
        float(ratio[first:].max()) if usable else float(ratio.min()),
    )


def _first_lasting(good: NDArray[np.bool_]) -> int:
    """Index from which the low end is good: the first good one (isolated aliasing gaps higher up do not count)."""
    found = np.flatnonzero(good)
    return int(found[0]) if len(found) else len(good)
