"""BSS Eval's parts against the definition written out, its undefined figures, and SI-SDR's."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
from numpy.typing import NDArray

from tests.conftest import speech
from unmix.metrics.distortion import ReferenceSet, si_sdr_db

Floats = NDArray[np.float64]


def _by_definition(references: Floats, estimate: Floats, j: int, taps: int) -> tuple[float, float, float]:
    """SDR, SIR, SAR from least-squares projections on explicit delayed copies."""
    delayed = [scipy.linalg.convolution_matrix(s, taps, mode="full") for s in references]
    e = np.concatenate([estimate, np.zeros(taps - 1)])

    def project(A: Floats) -> Floats:
        return np.asarray(A @ scipy.linalg.lstsq(A, e)[0])

    target, all_of_them = project(delayed[j]), project(np.hstack(delayed))
    interference, artifacts = all_of_them - target, e - all_of_them
    parts = (
        (target, interference + artifacts),
        (target, interference),
        (target + interference, artifacts),
    )
    sdr, sir, sar = (10.0 * float(np.log10(np.sum(a**2) / np.sum(b**2))) for a, b in parts)
    return sdr, sir, sar


@pytest.mark.parametrize("taps", [1, 7, 32])
@pytest.mark.parametrize("count", [2, 3])
def test_ratios_are_those_of_the_projections(rng: np.random.Generator, taps: int, count: int) -> None:
    references = rng.standard_normal((count, 1500))
    mixing = np.eye(count) + 0.2 * rng.standard_normal((count, count))
    estimates = mixing @ references + 0.1 * rng.standard_normal((count, 1500))
    split = ReferenceSet(references, filter_length=taps).split(estimates)
    for e in range(count):
        for k in range(count):
            expected = _by_definition(references, estimates[e], k, taps)
            measured = (split.sdr_db[e, k], split.sir_db[e, k], split.sar_db[e, k])
            assert measured == pytest.approx(expected, abs=1e-9)


def test_many_estimates_at_once_are_graded_as_each_alone(rng: np.random.Generator) -> None:
    references = np.array([speech("novel-reader", 3.0), speech("card-reader", 3.0)])
    estimates = references[[0, 1, 0, 1, 0]] + 0.01 * rng.standard_normal((5, references.shape[1]))
    shared = ReferenceSet(references, filter_length=64)
    together = shared.split(estimates)
    for row, estimate in enumerate(estimates):
        alone = ReferenceSet(references, filter_length=64).split(estimate[None])
        for figure in ("sdr_db", "sir_db", "sar_db"):
            np.testing.assert_allclose(getattr(alone, figure)[0], getattr(together, figure)[row], atol=1e-9)


def test_a_filter_of_the_allowed_length_costs_nothing_and_a_longer_one_does(rng: np.random.Generator) -> None:
    references = rng.standard_normal((2, 8000))
    within = np.zeros(64)
    within[[0, 20, 63]] = 1.0, 0.5, -0.3
    beyond = np.zeros(70)
    beyond[[0, 69]] = 1.0, 0.1
    estimates = np.array([np.convolve(references[0], h)[:8000] for h in (within, beyond)])
    split = ReferenceSet(references, filter_length=64).split(estimates)
    # Cutting the filter's ringing at the end leaves the last 63 of 8,000 samples unexplained.
    assert split.sdr_db[0, 0] > 20.0
    # The echo out of reach carries a hundredth of the energy: 20 dB, less what 128 taps fit by chance.
    assert split.sdr_db[1, 0] == pytest.approx(20.0, abs=0.3)


def test_float32_and_scaled_signals_are_graded_alike(rng: np.random.Generator) -> None:
    references = rng.standard_normal((2, 6000))
    estimates = references + 0.3 * references[::-1] + 0.1 * rng.standard_normal((2, 6000))
    first = ReferenceSet(references, filter_length=32).split(estimates)
    scaled = ReferenceSet(1e-6 * references, filter_length=32).split(1e4 * estimates)
    single = ReferenceSet(references.astype(np.float32), filter_length=32).split(estimates.astype(np.float32))
    np.testing.assert_allclose(scaled.sir_db, first.sir_db, atol=1e-9)
    np.testing.assert_allclose(single.sir_db, first.sir_db, atol=1e-4)


def test_signals_handed_in_are_not_changed(rng: np.random.Generator) -> None:
    references, estimates = rng.standard_normal((2, 2, 4000))
    kept = references.copy(), estimates.copy()
    ReferenceSet(references, filter_length=16).split(estimates)
    np.testing.assert_array_equal(references, kept[0])
    np.testing.assert_array_equal(estimates, kept[1])


def test_a_silent_reference_is_undefined_and_the_others_are_graded_without_it(rng: np.random.Generator) -> None:
    references = rng.standard_normal((3, 4000))
    estimates = references + 0.1 * references[[1, 0, 2]] + 0.1 * rng.standard_normal((3, 4000))
    silenced = references.copy()
    silenced[2] = 0.0
    split = ReferenceSet(silenced, filter_length=16).split(estimates)
    without = ReferenceSet(references[:2], filter_length=16).split(estimates)
    np.testing.assert_allclose(split.sdr_db[:, :2], without.sdr_db, atol=1e-12)
    assert np.isnan(split.sdr_db[:, 2]).all()
    assert split.undefined["sdr_db", 0, 2] == "the reference is silent"


@pytest.mark.parametrize(
    ("change", "reason"), [(0.0, "the estimate is silent"), (np.nan, "the estimate holds NaN or infinite samples")]
)
def test_an_estimate_that_cannot_be_used_is_undefined(rng: np.random.Generator, change: float, reason: str) -> None:
    references = rng.standard_normal((2, 4000))
    estimates = references + 0.1 * references[::-1] + 0.01 * rng.standard_normal((2, 4000))
    estimates[1] *= change
    split = ReferenceSet(references, filter_length=16).split(estimates)
    assert {split.undefined[figure, 1, 1] for figure in ("sdr_db", "sir_db", "sar_db")} == {reason}
    assert split.sir_db[0, 0] == pytest.approx(20.0, abs=0.5)


def test_one_reference_has_no_sir(rng: np.random.Generator) -> None:
    references = rng.standard_normal((1, 4000))
    split = ReferenceSet(references, filter_length=16).split(references + 0.1 * rng.standard_normal((1, 4000)))
    assert split.sdr_db[0, 0] == pytest.approx(20.0, abs=0.5)
    assert split.sdr_db[0, 0] == pytest.approx(split.sar_db[0, 0])
    assert "one reference" in split.undefined["sir_db", 0, 0]


@pytest.mark.parametrize("kind", ["identical", "delayed", "early", "filtered", "summed"])
def test_references_that_are_copies_of_each_other_have_no_sir(rng: np.random.Generator, kind: str) -> None:
    first = speech("novel-reader", 3.0)
    first[-200:] = first[:200] = 0.0
    other = {
        "identical": first,
        "delayed": np.roll(first, 9),
        "early": np.roll(first, -9),
        "filtered": np.convolve(first, [1.0, -0.4, 0.2])[: first.size],
        "summed": first + speech("card-reader", 3.0),
    }[kind]
    references = np.array([first, other, speech("card-reader", 3.0)])
    split = ReferenceSet(references, filter_length=32).split(references + 0.01 * rng.standard_normal(references.shape))
    assert "filtered copy" in split.undefined["sir_db", 0, 0]
    assert np.isfinite(split.sdr_db[0, 0])


def test_references_that_share_a_room_are_not_mistaken_for_copies() -> None:
    """Bleed 20 dB down, as between close microphones, leaves SIR defined."""
    a, b = speech("novel-reader", 4.0), speech("card-reader", 4.0)
    split = ReferenceSet(np.array([a + 0.1 * b, b + 0.1 * a])).split(np.array([a, b]))
    assert np.isfinite(split.sir_db[[0, 1], [0, 1]]).all()


def test_signals_too_short_for_their_filters_are_undefined(rng: np.random.Generator) -> None:
    references = rng.standard_normal((2, 1000))
    split = ReferenceSet(references).split(references)
    assert split.undefined["sdr_db", 0, 0] == "too short: 1000 samples, and the filters have 1024 taps"


def test_the_reference_itself_is_undefined_rather_than_rounding(rng: np.random.Generator) -> None:
    references = rng.standard_normal((2, 4000))
    split = ReferenceSet(references, filter_length=16).split(references)
    assert "rounding" in split.undefined["sdr_db", 0, 0]


def test_si_sdr_of_unusable_signals_is_undefined(rng: np.random.Generator) -> None:
    s = rng.standard_normal(1000)
    assert si_sdr_db(np.zeros(1000), s) == (None, "the estimate is silent")
    assert si_sdr_db(s, np.zeros(1000)) == (None, "the reference is silent")
    assert si_sdr_db(np.full(1000, np.inf), s) == (None, "the estimate holds NaN or infinite samples")
    assert si_sdr_db(-2.0 * s, s)[0] is None
    assert "orthogonal" in str(si_sdr_db(np.repeat([1.0, -1.0], 500), np.ones(1000))[1])
