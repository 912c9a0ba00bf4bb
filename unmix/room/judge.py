"""Whether the room stage helps, judged from the recording and the output alone.

Two figures, over 300 to 6000 Hz:

**Fit gain.** The K columns of relative responses A leave unexplained what lies outside their range,
e(A) = sum |x|^2 - |Q^H x|^2 with Q an orthonormal basis of A. The bearings' responses leave e_look, those that the
refined matrix implies leave e_learned. In a room the latter is smaller by several decibels. Where it is not, the
delays say all that there is to say about the paths, and the constrained solution, which needs to learn nothing, is
the better answer: 10 log10(e_look / e_learned) below `LEAST_FIT_GAIN_DB` means the model alone.

**Stranger.** What lies outside the range of the learned responses is late reverberation, which follows the talkers in
time, and noise, which does not vary. So the power over time outside the range is fitted, band by band, by nonnegative
multiples of the talkers' powers now and up to nine frames ago, plus a constant (nonnegative least squares). The share
of power above the fit is small, unless somebody speaks whom the scene does not name.

Both limits were chosen on rendered scenes; the tables print hits and false alarms on others.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import cast

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import nnls

from unmix.room.bands import Bands
from unmix.room.linalg import adjoint, lagged, power
from unmix.room.stft import Complexes, Reals

__all__ = ["LEAST_FIT_GAIN_DB", "MOST_STRANGE", "Verdict", "judge"]

Floats = NDArray[np.float64]

LEAST_FIT_GAIN_DB = 0.5
"""Below, learned responses explain the recording no better than the bearings' delays."""

MOST_STRANGE = 0.35
"""Above, somebody speaks whom the scene does not name."""

LOWEST_HZ, HIGHEST_HZ = 300.0, 6000.0
_BANDS = 12
_PAST, _FUTURE = 8, 1
_QUIET = 0.01


@dataclass(frozen=True)
class Verdict:
    """What the recording and the output say.

    fit_gain_db  by how much learned responses explain the recording better than the bearings' delays
    stranger     share of the power outside the talkers' responses that follows none of them over time
    """

    fit_gain_db: float
    stranger: float

    @property
    def helps(self) -> bool:
        """Whether the room stage is better than the model alone."""
        return self.fit_gain_db >= LEAST_FIT_GAIN_DB

    @property
    def unnamed_voice(self) -> bool:
        """Whether somebody speaks whom the scene does not name."""
        return self.stranger > MOST_STRANGE


def judge(
    x: Complexes,
    course: Sequence[Complexes],
    learned: Complexes,
    rows: Complexes,
    frequencies_hz: Floats,
    bands: Bands,
) -> Verdict:
    """Judge one segment.

    x        (frequencies, M, frames), the recording as it came
    course   (frequencies, M, K) relative responses of the bearings, over equal parts of the segment
    learned  (frequencies, M, K) relative responses that the refined matrix implies
    rows     (frequencies, K, M) the refined separating matrix, at the reference channel
    """
    chosen = (frequencies_hz >= LOWEST_HZ) & (frequencies_hz <= HIGHEST_HZ)

    def measure(b: slice) -> tuple[Reals, Reals, Reals]:
        total = power(x[b]).sum(axis=1)
        parts = np.array_split(np.arange(x.shape[2]), len(course))
        by_look = np.concatenate([_inside(x[b][:, :, t], a[b]) for t, a in zip(parts, course, strict=True)], axis=1)
        return total - by_look, total - _inside(x[b], learned[b]), power(rows[b] @ x[b])

    parts = bands.each(measure)
    by_look, by_learned, talkers = (np.concatenate([p[i] for p in parts])[chosen] for i in range(3))
    if len(by_look) == 0 or x.shape[1] <= learned.shape[2]:
        return Verdict(np.inf, 0.0)
    tiny = float(np.finfo(np.float32).tiny)
    gain = 10.0 * np.log10((float(by_look.sum()) + tiny) / (float(by_learned.sum()) + tiny))
    return Verdict(float(gain), _strange(by_learned, talkers, frequencies_hz[chosen]))


def _inside(x: Complexes, a: Complexes) -> Reals:
    """Power per frame within the range of the columns of ``a``: (frequencies, frames)."""
    basis = np.linalg.qr(np.nan_to_num(a))[0]
    return cast("Reals", power(adjoint(basis).astype(x.dtype) @ x).sum(axis=1))


def _strange(outside: Reals, talkers: Reals, frequencies_hz: Floats) -> float:
    """Median over bands of the share of the power outside that exceeds what the talkers and a constant explain."""
    edges = np.geomspace(LOWEST_HZ, HIGHEST_HZ * 1.001, _BANDS + 1)
    band = np.digitize(frequencies_hz, edges)
    shares = []
    for i in np.unique(band):
        heard = np.maximum(outside[band == i].sum(axis=0), 0.0).astype(np.float64)
        if heard.sum() == 0.0:
            continue
        own = talkers[band == i].sum(axis=0).astype(np.float64)
        causes = lagged(own[None].astype(complex), range(-_FUTURE, _PAST + 1))[0].real
        a = np.vstack([causes, np.full(heard.shape, heard.mean())]).T
        scale = np.sqrt(np.maximum(heard, _QUIET * heard.mean()))
        weights, _ = nnls(a / scale[:, None], heard / scale)
        shares.append(np.maximum(heard - a @ weights, 0.0).sum() / heard.sum())
    return float(np.median(shares)) if shares else 0.0
