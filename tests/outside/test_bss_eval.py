"""Distortion ratios against mir_eval (its `separation.bss_eval_sources`, after Vincent, Gribonval and Fevotte 2006).

Agreement is 1e-6 dB where the references fill their band, so that the filters are well determined.
"""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.conftest import speech
from unmix.audio import resample
from unmix.jobs.grade import grade
from unmix.metrics.distortion import ReferenceSet

Floats = NDArray[np.float64]


def _mir_eval(references: Floats, estimates: Floats, *, permute: bool) -> tuple[Floats, Floats, Floats, Floats]:
    import mir_eval

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", FutureWarning)
        return mir_eval.separation.bss_eval_sources(references, estimates, compute_permutation=permute)


def _scene(count: int, seconds: float, rng: np.random.Generator) -> tuple[Floats, Floats]:
    names = ("novel-reader", "card-reader", "robot-commands")[:count]
    references = np.array([speech(name, seconds) for name in names])
    echo = np.zeros(700)
    echo[[0, 45, 300, 699]] = 1.0, 0.4, -0.2, 0.1
    mixed = (np.eye(count) + 0.1 * rng.standard_normal((count, count))) @ references
    estimates = np.array([np.convolve(signal, echo)[: references.shape[1]] for signal in mixed])
    return references, estimates + 1e-4 * rng.standard_normal(estimates.shape)


@pytest.mark.parametrize(("count", "seconds"), [(2, 4.0), (3, 3.0)])
def test_every_pair_and_the_assignment(rng: np.random.Generator, count: int, seconds: float) -> None:
    references, estimates = _scene(count, seconds, rng)
    estimates = np.roll(estimates, 1, axis=0)
    sdr, sir, sar, order = _mir_eval(references, estimates, permute=True)
    split = ReferenceSet(references).split(estimates)
    pairs = (np.asarray(order), np.arange(count))
    np.testing.assert_allclose(split.sdr_db[pairs], sdr, atol=1e-6)
    np.testing.assert_allclose(split.sir_db[pairs], sir, atol=1e-6)
    np.testing.assert_allclose(split.sar_db[pairs], sar, atol=1e-6)


def test_nearly_perfect_estimates(rng: np.random.Generator) -> None:
    """Errors 80 dB down: what the energies lose to cancellation would show."""
    references, _ = _scene(2, 3.0, rng)
    estimates = references + 1e-4 * references[::-1] + 0.05e-4 * rng.standard_normal(references.shape)
    sdr, sir, sar, _ = _mir_eval(references, estimates, permute=False)
    split = ReferenceSet(references).split(estimates)
    assert sir.min() > 70.0
    for ours, theirs in ((split.sdr_db, sdr), (split.sir_db, sir), (split.sar_db, sar)):
        np.testing.assert_allclose(np.diag(ours), theirs, atol=1e-6)


def test_references_with_an_empty_band(rng: np.random.Generator) -> None:
    """Speech brought from 16 to 48 kHz: two thirds of the band hold nothing, and filters are undetermined there.

    Both programs then fit what the signals' ends leave there; so little energy is in question that figures agree.
    """
    references = resample(_scene(2, 2.0, rng)[0], 16000, 48000)
    estimates = references + 0.03 * references[::-1] + 1e-4 * rng.standard_normal(references.shape)
    sdr, sir, sar, _ = _mir_eval(references, estimates, permute=False)
    split = ReferenceSet(references).split(estimates)
    for ours, theirs in ((split.sdr_db, sdr), (split.sir_db, sir), (split.sar_db, sar)):
        np.testing.assert_allclose(np.diag(ours), theirs, atol=1e-6)


def test_the_cross_check_measures_the_difference(rng: np.random.Generator) -> None:
    references, estimates = _scene(2, 3.0, rng)
    grades = grade(estimates, references, sample_rate=16000, cross_check=True)
    assert grades.cross_check_db is not None
    assert 0.0 <= grades.cross_check_db < 1e-6


def test_the_cross_check_says_why_there_is_none(rng: np.random.Generator) -> None:
    references, estimates = _scene(2, 3.0, rng)
    short = grade(estimates, references, sample_rate=16000, cross_check=True, filter_length=64)
    assert short.cross_check_db is None
    assert any("512 taps" in warning for warning in short.warnings)
    references[1] = 0.0
    silent = grade(estimates, references, sample_rate=16000, cross_check=True)
    assert silent.cross_check_db is None
    assert any("mir_eval refuses" in warning for warning in silent.warnings)
