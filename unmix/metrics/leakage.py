"""Leakage: what comes out for one talker when only the others speak.

Where the filters are known, each talker's image (what the microphones hear of that talker alone) is sent through
them. With o_jk the output for talker k when only talker j speaks,

    leakage_kj = 10 log10( |o_jk|^2 / |o_kk|^2 ).

Where only the images are known, the estimate e_k is projected on their delayed copies: with P the projection on all
of them, Q_j on all but talker j's, and P_k on talker k's alone,

    leakage_kj = 10 log10( |P e_k - Q_j e_k|^2 / |P_k e_k|^2 ),

what only talker j can explain, in terms of what talker k does. With two talkers it is the negative SIR of BSS Eval.
It follows the first down to the ruler's end: noise in the estimate is fitted by the filters' taps as well, which ends
it near -(SDR + 10 log10(samples / taps)).
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.distortion import ReferenceSet

__all__ = ["leakage_of_outputs_db", "projected_leakage_db"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]


def leakage_of_outputs_db(outputs: Signals) -> Floats:
    """Leakage from what the same linear filters make of each image alone.

    Parameters
    ----------
    outputs : (images, talkers, samples)
        ``outputs[j, k]`` is the output for talker k when only talker j speaks.

    Returns
    -------
    (talkers, talkers) array in dB: row k, column j is talker j's leakage into talker k's output; NaN on the diagonal
    and where either is silent.
    """
    energy = np.einsum("jkn,jkn->kj", outputs, outputs, dtype=np.float64)
    return _relative_db(energy, range(len(energy)))


def projected_leakage_db(estimates: Signals, images: ReferenceSet, talkers: Sequence[int]) -> Floats:
    """Leakage read off the estimates by projection on the images.

    Parameters
    ----------
    estimates : (estimates, samples)
        Aligned with the images and held back behind them, see `unmix.metrics.alignment`.
    images : ReferenceSet
        Each talker alone.
    talkers : sequence of int
        The talker of each estimate, counted as the images are.

    Returns
    -------
    (estimates, talkers) array in dB: NaN for the estimate's own talker and where an image or the estimate is silent.
    """
    by_itself, alone = images.explained(estimates)
    rows = np.arange(len(alone))
    alone[rows, talkers] = by_itself[rows, talkers]
    return _relative_db(alone, talkers)


def _relative_db(energy: Floats, own: Sequence[int]) -> Floats:
    """Each row of energies in dB of the one in column `own`; NaN there and where undefined."""
    rows = np.arange(len(energy))
    with np.errstate(divide="ignore", invalid="ignore"):
        leakage = 10.0 * np.log10(energy / energy[rows, own][:, None])
    leakage[~np.isfinite(leakage)] = np.nan
    leakage[rows, own] = np.nan
    return leakage
