"""Figures of understanding: equivalent ratio, weighted interference, bits, segments, and disagreement."""

from __future__ import annotations

import json

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.conftest import speech
from unmix.metrics.bands import BAND_CENTRES_HZ, BAND_IMPORTANCE, importance_weighted_db
from unmix.metrics.distortion import ReferenceSet
from unmix.metrics.equivalent import EquivalentRatio
from unmix.metrics.grader import Grader
from unmix.metrics.grades import Figures, Grades
from unmix.metrics.information import BANDS, HOP, PRODUCTION, RATE_HZ, STACK, InformationReference, _covariance
from unmix.metrics.intelligibility import SpeechReference
from unmix.metrics.segments import segment_gains
from unmix.metrics.speech import _loudest, disagreements
from unmix.metrics.speech_figures import SPEECH_FIGURES, SpeechFigures, SpeechGrade
from unmix.metrics.words import words_dantale_percent, words_ieee_percent

Floats = NDArray[np.float64]
RATE = 16000


@pytest.fixture(scope="module")
def talkers() -> Floats:
    return np.array([speech("novel-reader", 6.0), speech("card-reader", 6.0)])


def test_equivalent_ratio_of_a_mixture_is_its_ratio(talkers: Floats) -> None:
    """Ratios between those tabulated, so that the interpolation counts."""
    found = EquivalentRatio(talkers, 0, SpeechReference(talkers[0], RATE))
    level = np.linalg.norm(talkers[0]) / np.linalg.norm(talkers[1])
    for ratio_db in (-16.1, -3.7, 1.3, 8.9, 21.2):
        mixture = talkers[0] + level * 10.0 ** (-ratio_db / 20.0) * talkers[1]
        stoi = SpeechReference(talkers[0], RATE).compare(mixture).stoi
        ratio, why = found.ratio_db(stoi)
        assert why is None
        assert ratio == pytest.approx(ratio_db, abs=0.1)


def test_equivalent_ratio_where_there_is_none(talkers: Floats) -> None:
    alone = EquivalentRatio(talkers[:1], 0, SpeechReference(talkers[0], RATE))
    assert alone.ratio_db(0.5) == (None, "no other talker has a reference to be mixed in")
    both = EquivalentRatio(talkers, 0, SpeechReference(talkers[0], RATE))
    assert "more intelligible than with the others 40 dB below" in str(both.ratio_db(1.0)[1])
    assert "less intelligible than with the others 30 dB above" in str(both.ratio_db(0.0)[1])
    assert both.ratio_db(None) == (None, "STOI is undefined")
    silent = EquivalentRatio(np.array([talkers[0], 0 * talkers[0]]), 1, SpeechReference(0 * talkers[0], RATE))
    assert silent.ratio_db(0.5) == (None, "the reference is silent")


def test_weighted_ratio_is_the_ratio_where_all_bands_have_it(talkers: Floats) -> None:
    assert importance_weighted_db(talkers[0], 0.1 * talkers[0], RATE) == pytest.approx(20.0, abs=1e-9)
    assert importance_weighted_db(talkers[0], 0 * talkers[0], RATE) is None


def test_weighted_ratio_counts_each_band_by_its_importance(rng: np.random.Generator) -> None:
    """White noise, with an interference of which one band is 30 dB stronger."""
    white = rng.standard_normal(8 * RATE)
    low, high = 1000.0 * 2.0 ** np.array([-1 / 6, 1 / 6]) + [16.0, -16.0]  # clear of the neighbours by two bins
    spectrum = np.fft.rfft(white)
    f = np.fft.rfftfreq(white.size, 1 / RATE)
    spectrum[(f > low) & (f < high)] *= 10.0**1.5
    louder = np.fft.irfft(spectrum)
    plain = importance_weighted_db(white, 0.1 * white, RATE)
    raised = importance_weighted_db(white, 0.1 * louder, RATE)
    assert plain is not None and raised is not None
    inside = sum(BAND_IMPORTANCE[:-1])  # the band at 8 kHz reaches beyond half the rate
    raised_db = 30.0 + 10.0 * np.log10((high - low) / (high - low + 32.0))
    assert plain - raised == pytest.approx(raised_db * BAND_IMPORTANCE[BAND_CENTRES_HZ.index(1000)] / inside, rel=0.05)


def test_target_and_interference_add_up_to_what_bss_eval_says(talkers: Floats, rng: np.random.Generator) -> None:
    references = ReferenceSet(talkers)
    estimate = talkers[0] + 0.1 * talkers[1] + 1e-3 * rng.standard_normal(talkers.shape[1])
    split = references.split(estimate[None])
    target, interference = np.concatenate(list(references.parts(split, 0, 0)), axis=1)
    assert target.shape == estimate.shape
    sir = 10.0 * np.log10(np.sum(target**2) / np.sum(interference**2))
    # The parts are cut at the estimate's end, BSS Eval adds the filters' tails.
    assert sir == pytest.approx(split.sir_db[0, 0], abs=0.05)


def test_bits_of_the_clean_speech_are_the_most_there_are(talkers: Floats) -> None:
    reference = InformationReference(talkers[0], RATE)
    most = -RATE_HZ / HOP / (2 * STACK) * STACK * BANDS * np.log2(1 - PRODUCTION**2)
    bits, why = reference.bits_per_s(talkers[0])
    assert why is None and bits == pytest.approx(most, rel=0.01)  # parts at rounding level may count for nothing
    assert reference.bits_per_s(3.0 * talkers[0])[0] == pytest.approx(bits, rel=1e-9)


def test_bits_fall_with_the_ratio_whatever_the_rate(talkers: Floats, rng: np.random.Generator) -> None:
    from unmix.audio import resample

    noise = rng.standard_normal(talkers.shape[1])
    found = []
    for ratio_db in (30.0, 20.0, 10.0, 0.0, -10.0, -20.0):
        signal = talkers[0] + 0.05 * 10.0 ** (-ratio_db / 20.0) * noise
        bits, _ = InformationReference(talkers[0], RATE).bits_per_s(signal)
        assert bits is not None
        found.append(bits)
    assert np.all(np.diff(found) < 0.0)
    assert found[-1] < 0.02 * found[0]
    clean, noisy = resample(np.array([talkers[0], talkers[0] + 0.05 * noise]), RATE, 44100)
    assert InformationReference(clean, 44100).bits_per_s(noisy)[0] == pytest.approx(found[3], rel=0.05)


def test_what_other_speech_carries_of_this_one_is_little(talkers: Floats) -> None:
    reference = InformationReference(talkers[0], RATE)
    assert (reference.bits_per_s(talkers[1])[0] or 0.0) < 0.03 * (reference.bits_per_s(talkers[0])[0] or 0.0)


@pytest.mark.parametrize(
    ("reference", "signal", "reason"),
    [
        (np.zeros(64000), np.ones(64000), "the reference is silent"),
        (np.ones(64000), np.zeros(64000), "the estimate is silent"),
        (np.full(64000, np.nan), np.ones(64000), "the reference holds NaN"),
        (np.ones(8000), np.ones(8000), "too short: 0.49 s of speech"),
        (np.ones(100), np.ones(100), "too short: 0.00 s"),
    ],
)
def test_bits_that_cannot_be_counted(reference: Floats, signal: Floats, reason: str) -> None:
    bits, why = InformationReference(reference, RATE).bits_per_s(signal)
    assert bits is None and str(why).startswith(reason)


def test_silent_segments_are_left_out_and_counted(rng: np.random.Generator) -> None:
    clean = np.array(speech("novel-reader", 18.5))
    clean[6 * RATE : 12 * RATE] *= 1e-4  # two segments of next to nothing
    noise = 0.02 * rng.standard_normal(clean.size)
    found = segment_gains(clean, clean + 0.1 * noise, clean + noise, RATE)
    assert (found.used, found.silent, found.length_s) == (4, 2, 3.0)
    assert found.stoi.scenes == 4 and found.stoi.low is not None and found.stoi.high is not None
    assert found.stoi.low < (found.stoi.mean or 0.0) < found.stoi.high
    nothing = segment_gains(clean[:RATE], clean[:RATE], clean[:RATE], RATE)
    assert (nothing.used, nothing.silent, nothing.stoi.mean) == (0, 0, None)


def test_grades_carry_them_and_come_back(talkers: Floats, rng: np.random.Generator) -> None:
    mixture = talkers.sum(axis=0) + 1e-3 * rng.standard_normal(talkers.shape[1])
    grader = Grader(talkers, sample_rate=RATE, names=["mate", "pilot"], unprocessed=mixture)
    estimates = talkers + 0.1 * talkers[::-1]
    grades = grader.grade(estimates, speech=True)
    assert Grades.from_dict(json.loads(json.dumps(grades.to_dict()))) == grades
    for talker in grades.talkers:
        assert talker.speech is not None
        gain = talker.speech.gain
        assert all((getattr(gain, name) or 0.0) > 0.0 for name in SPEECH_FIGURES)
        assert gain.equivalent_snr_db == pytest.approx(20.0, abs=1.5)  # what separating did to the interference
        assert talker.speech.segments is not None and talker.speech.segments.used == 2
        assert talker.stoi is not None
        assert talker.speech.after.words_ieee_percent == words_ieee_percent(talker.stoi)
        assert talker.speech.after.words_dantale_percent == words_dantale_percent(talker.stoi)
        assert 4.0 < talker.speech.speech_s < 6.0
    plain = grader.grade(estimates)
    assert plain.talkers[0].speech is None and plain.talkers[0].stoi == grades.talkers[0].stoi
    assert Grades.from_dict(plain.to_dict()) == plain


def test_without_the_recording_there_are_no_gains(talkers: Floats) -> None:
    grades = Grader(talkers, sample_rate=RATE, names=["a", "b"]).grade(0.9 * talkers + 0.1 * talkers[::-1], speech=True)
    spoken = grades.talkers[0].speech
    assert spoken is not None and spoken.segments is None and spoken.after.bits_per_s is not None
    assert set(spoken.gain.undefined.values()) == {"the unprocessed recording was not given"}


def test_disagreement_is_said() -> None:
    before = SpeechFigures(bits_per_s=100.0)

    def lines(stoi: float, estoi: float, bits: float) -> list[str]:
        gain = SpeechFigures(bits_per_s=bits)
        grade = SpeechGrade(after=SpeechFigures(bits_per_s=100.0 + bits), before=before, gain=gain)
        return list(disagreements("mate", Figures(stoi=stoi, estoi=estoi), grade))

    assert lines(0.1, 0.1, 30.0) == []
    assert lines(0.1, 0.01, 3.0) == []  # the others see no change worth the name
    assert lines(0.1, 0.1, -30.0) == [
        "mate: measures disagree: STOI and ESTOI got better, bits worse; listen to decide"
    ]
    assert lines(-0.1, 0.1, 30.0)[0].startswith("mate: measures disagree: ESTOI and bits got better, STOI worse")


def test_of_a_long_recording_the_loudest_stretch_is_looked_at(
    talkers: Floats, rng: np.random.Generator, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Six seconds of which three are asked for: the louder half, and its figures."""
    loud = talkers * np.where(np.arange(talkers.shape[1]) < 3 * RATE, 0.05, 1.0)
    estimates = loud + 0.1 * loud[::-1]
    monkeypatch.setattr("unmix.metrics.speech.LONGEST_S", 3.0)
    part = Grader(loud, sample_rate=RATE, names=["a", "b"]).grade(estimates, speech=True).talkers[0].speech
    monkeypatch.undo()
    half = Grader(loud[:, 3 * RATE :], sample_rate=RATE, names=["a", "b"])
    alone = half.grade(estimates[:, 3 * RATE :], speech=True).talkers[0].speech
    assert part is not None and alone is not None
    assert 2.0 < part.speech_s <= 3.0
    # The loudest three seconds begin within a frame or so of the middle.
    assert part.after.bits_per_s == pytest.approx(alone.after.bits_per_s, rel=0.05)
    assert part.after.equivalent_snr_db == pytest.approx(alone.after.equivalent_snr_db, abs=0.5)


def test_covariance_of_stacked_frames_is_that_of_the_vectors(rng: np.random.Generator) -> None:
    a, b = rng.standard_normal((2, 80, BANDS)) + 3.0
    rows = [np.array([x[t : t + STACK].reshape(-1) for t in range(len(x) - STACK + 1)]) for x in (a, b)]
    centred = [r - r.mean(axis=0) for r in rows]
    assert _covariance(a, b) == pytest.approx(centred[0].T @ centred[1] / len(rows[0]), abs=1e-11)


def test_the_loudest_stretch_is_found_piece_by_piece(rng: np.random.Generator, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("unmix.metrics.speech.CHUNK", 64)
    for _ in range(20):
        x = rng.standard_normal(1000) * rng.uniform(0.1, 1.0, 1000)
        energies = [np.sum(x[start : start + 300] ** 2) for start in range(701)]
        best = int(np.argmax(energies))
        assert _loudest(x, 300) == slice(best, best + 300)
    assert _loudest(x, 1000) == slice(0, 1000)


def test_segments_left_out_to_save_time_are_not_called_silent(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("unmix.metrics.segments.MOST_SEGMENTS", 2)
    clean = speech("novel-reader", 12.0)
    found = segment_gains(clean, clean, clean, RATE)
    assert (found.used, found.silent) == (2, 0)
