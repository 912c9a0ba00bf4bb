"""Grading a scene: time, microphones, assignment, leakage, what is shared, what is undefined."""

from __future__ import annotations

import json

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.conftest import speech
from unmix.metrics.alignment import advance
from unmix.metrics.distortion import Distortion, ReferenceSet
from unmix.metrics.grader import Grader
from unmix.metrics.grades import FIGURES, Figures, Grades

Floats = NDArray[np.float64]
RATE = 16000
TAPS = 128
NAMES = ("mate", "bosun")


def _talkers(seconds: float = 6.0, silence_s: float = 1.0) -> Floats:
    """Two talkers with silence before and after, so that moving them cuts nothing off."""
    speaking = np.array(
        [speech("novel-reader", seconds - 2 * silence_s), speech("card-reader", seconds - 2 * silence_s)]
    )
    return np.pad(speaking, ((0, 0), (round(silence_s * RATE),) * 2))


def _noise(signals: Floats, rng: np.random.Generator) -> Floats:
    """White noise where somebody speaks, so that cutting silence off changes no figure."""
    noise = rng.standard_normal(signals.shape)
    return np.where(np.abs(signals).sum(axis=0) > 0.0, noise, 0.0)


def _separated(references: Floats, rng: np.random.Generator) -> Floats:
    return references + 0.05 * references[::-1] + 3e-4 * _noise(references, rng)


def _heard(references: Floats, rng: np.random.Generator) -> Floats:
    """What the reference microphone hears."""
    return references.sum(axis=0) + 3e-4 * _noise(references, rng)[0]


def _moved(signals: Floats, samples: float) -> Floats:
    return np.array([advance(signal, samples) for signal in signals])


def _figures(figures: Figures) -> Floats:
    return np.array([getattr(figures, name) for name in FIGURES], dtype=float)


TOLERANCE = np.array([0.05, 0.05, 0.15, 0.05, 0.002, 0.002])
"""Per figure, for signals moved by interpolation, which takes a little noise near the Nyquist frequency."""


@pytest.mark.parametrize(
    ("early", "with_microphone"),
    [
        (0.1, True),
        (0.3, False),
        (0.5, True),
        (-0.4, True),
        (-7.7, False),
        (4000.3, True),
        (-15000.5, True),
        (9000.5, False),
    ],
)
def test_estimates_early_or_late_are_graded_alike(
    early: float, with_microphone: bool, rng: np.random.Generator
) -> None:
    references = _talkers()
    estimates = _separated(references, rng)
    microphone = _heard(references, rng) if with_microphone else None
    grader = Grader(references, sample_rate=RATE, filter_length=TAPS, names=NAMES, unprocessed=microphone)
    expected, found = grader.grade(estimates), grader.grade(_moved(estimates, early))
    # Without a microphone time runs by the estimates, and the frames of STOI begin elsewhere in the speech.
    tolerance = TOLERANCE * np.where(with_microphone, 1.0, [1, 1, 1, 1, 3, 3])
    for a, b in zip(expected.talkers, found.talkers, strict=True):
        assert (np.abs(_figures(b) - _figures(a)) < tolerance).all()
        assert b.offset_s == pytest.approx(-early / RATE, abs=0.02 / RATE)
        assert _figures(b.unprocessed) == pytest.approx(_figures(a.unprocessed), abs=0.1, nan_ok=True)


@pytest.mark.parametrize("early", [0.1, 0.3, 0.5])
def test_without_the_guard_an_early_estimate_would_lose_what_it_does_not_deserve(
    early: float, rng: np.random.Generator
) -> None:
    reference = speech("card-reader", 6.0)[None]
    estimate = _moved(reference, early) + 1e-4 * rng.standard_normal(reference.shape)
    unguarded = ReferenceSet(reference).split(estimate).sdr_db[0, 0]
    guarded = Grader(reference, sample_rate=RATE, names=["mate"]).grade(estimate)
    # The noise added lies 54 dB down; causal filters reach 33, 21 and 15 dB on this clip.
    assert unguarded < {0.1: 36.0, 0.3: 24.0, 0.5: 18.0}[early]
    assert guarded.talkers[0].sdr_db == pytest.approx(54.0, abs=0.2)
    assert guarded.guard_samples == 32


@pytest.mark.parametrize("late", [(0.4, 0.4), (8000.3, 8000.3), (8000.3, -5000.6), (-12000.0, 700.2)])
def test_references_off_by_their_own_amounts_are_graded_alike(
    late: tuple[float, float], rng: np.random.Generator
) -> None:
    references = _talkers()
    estimates, microphone = _separated(references, rng), _heard(references, rng)
    expected = Grader(references, sample_rate=RATE, filter_length=TAPS, names=NAMES, unprocessed=microphone).grade(
        estimates
    )
    off = np.array([advance(signal, -samples) for signal, samples in zip(references, late, strict=True)])
    found = Grader(off, sample_rate=RATE, filter_length=TAPS, names=NAMES, unprocessed=microphone).grade(estimates)
    for k in range(2):
        assert (np.abs(_figures(found.talkers[k]) - _figures(expected.talkers[k])) < TOLERANCE).all()
        assert (np.abs(_figures(found.talkers[k].gain) - _figures(expected.talkers[k].gain)) < 2 * TOLERANCE).all()
        assert found.talkers[k].offset_s == pytest.approx(-late[k] / RATE, abs=0.02 / RATE)
        assert found.talkers[k].unprocessed_offset_s == pytest.approx(-late[k] / RATE, abs=0.02 / RATE)


def test_gains_are_figures_less_the_microphones(rng: np.random.Generator) -> None:
    references = _talkers()
    grades = Grader(
        references,
        sample_rate=RATE,
        names=NAMES,
        unprocessed=references.sum(axis=0),
        microphones=references.sum(axis=0)[None],
    ).grade(_separated(references, rng))
    for talker in grades.talkers:
        np.testing.assert_allclose(_figures(talker.gain), _figures(talker) - _figures(talker.unprocessed))
        assert talker.sir_db == pytest.approx(26.0 + talker.unprocessed.sir_db, abs=0.2)
        assert talker.best_channel == 0
        np.testing.assert_allclose(_figures(talker.gain_over_best), _figures(talker.gain), atol=1e-3)


def test_the_best_microphone_is_each_talkers_own(rng: np.random.Generator) -> None:
    references = _talkers()
    gains = np.array([[1.0, 1.0], [1.0, 0.3], [0.5, 1.0], [0.0, 0.0]])
    microphones = gains @ references + 1e-4 * rng.standard_normal((4, references.shape[1]))
    microphones[1] = advance(microphones[1], 3.4)
    grades = Grader(
        references,
        sample_rate=RATE,
        filter_length=TAPS,
        names=NAMES,
        unprocessed=microphones[0],
        microphones=microphones,
    ).grade(_separated(references, rng))
    assert [talker.best_channel for talker in grades.talkers] == [1, 2]
    mate = grades.talkers[0].best_microphone
    assert mate is not None
    assert mate.si_sdr_db == pytest.approx(grades.talkers[0].unprocessed.si_sdr_db - 20 * np.log10(0.3), abs=0.2)


def test_best_assignment_finds_swapped_talkers_with_and_without_latency(rng: np.random.Generator) -> None:
    references = _talkers()
    estimates = _separated(references, rng)
    grader = Grader(references, sample_rate=RATE, filter_length=TAPS, names=NAMES, unprocessed=references.sum(axis=0))
    expected = grader.grade(estimates)
    found = grader.grade(_moved(estimates[::-1], -160.5), match="best")
    assert [talker.estimate for talker in found.talkers] == [1, 0]
    for a, b in zip(expected.talkers, found.talkers, strict=True):
        assert (np.abs(_figures(b) - _figures(a)) < TOLERANCE).all()


def test_best_assignment_with_too_few_and_too_many_estimates(rng: np.random.Generator) -> None:
    references = _talkers()
    estimates = _separated(references, rng)
    grader = Grader(references, sample_rate=RATE, filter_length=TAPS, names=NAMES)
    few = grader.grade(estimates[1:], match="best")
    assert [talker.estimate for talker in few.talkers] == [None, 0]
    assert few.talkers[0].sdr_db is None
    assert few.talkers[0].undefined["sdr_db"] == "no estimate was matched to this talker"
    assert "mate: no estimate was matched" in few.warnings
    many = grader.grade(np.vstack([rng.standard_normal(references.shape[1]), estimates]), match="best")
    assert [talker.estimate for talker in many.talkers] == [1, 2]
    assert any("left over" in warning and "0" in warning for warning in many.warnings)


def test_what_is_shared_between_variants_does_not_change_their_grades(rng: np.random.Generator) -> None:
    references = _talkers()
    variants = [_separated(references, rng), _moved(_separated(references, rng), -300.2), 0.1 * references]
    variants[2] = variants[2] + 0.01 * references[::-1]
    options = {"sample_rate": RATE, "filter_length": TAPS, "names": NAMES, "unprocessed": references.sum(axis=0)}
    shared = Grader(references, **options)
    for estimates in variants:
        assert shared.grade(estimates) == Grader(references, **options).grade(estimates)


def test_leakage_from_the_filters_and_by_projection(rng: np.random.Generator) -> None:
    references = _talkers()
    grader = Grader(
        references,
        sample_rate=RATE,
        filter_length=TAPS,
        names=NAMES,
        unprocessed=references.sum(axis=0),
        images=references,
    )
    mixing = np.array([[1.0, 0.02], [0.1, 1.0]])
    outputs = np.einsum("kj,jn->jkn", mixing, references)
    level_db = 20 * np.log10(np.linalg.norm(references[1]) / np.linalg.norm(references[0]))
    expected = [20 * np.log10(0.02) + level_db, 20 * np.log10(0.1) - level_db]
    by_filters = grader.grade(outputs.sum(axis=0), image_outputs=outputs)
    by_projection = grader.grade(outputs.sum(axis=0))
    assert (by_filters.leakage_by, by_projection.leakage_by) == ("filters", "projection")
    for grades, tolerance in ((by_filters, 1e-9), (by_projection, 0.1)):
        found = [grades.talkers[0].leakage_db["bosun"], grades.talkers[1].leakage_db["mate"]]
        assert found == pytest.approx(expected, abs=tolerance)


def test_drift_is_reported_and_warned_of(rng: np.random.Generator) -> None:
    reference = speech("novel-reader", 10.0)
    n = np.arange(reference.size)
    drifting = np.interp(n * (1.0 - 40e-6), n, reference)
    grades = Grader(reference[None], sample_rate=RATE, filter_length=TAPS, names=["mate"]).grade(drifting[None])
    assert grades.talkers[0].drift_ppm == pytest.approx(40.0, rel=0.1)
    assert any(warning.startswith("mate: the estimate drifts") for warning in grades.warnings)


@pytest.mark.parametrize(
    "kind", ["silent estimate", "nan estimate", "silent reference", "nan reference", "identical", "one"]
)
def test_whatever_is_broken_the_result_is_plain_numbers_and_reasons(kind: str, rng: np.random.Generator) -> None:
    references = _talkers(4.0, 0.5)
    estimates = _separated(references, rng)
    names = NAMES
    if "estimate" in kind:
        estimates[1] = np.nan if "nan" in kind else 0.0
    elif "reference" in kind:
        references[1] = np.nan if "nan" in kind else 0.0
    elif kind == "identical":
        references[1] = references[0]
    else:
        references, estimates, names = references[:1], estimates[:1], names[:1]
    grader = Grader(
        references,
        sample_rate=RATE,
        filter_length=TAPS,
        names=names,
        unprocessed=estimates[0],
        microphones=estimates,
        images=references,
    )
    for match in ("name", "best"):
        grades = grader.grade(estimates, match=match)
        text = json.dumps(grades.to_dict(), allow_nan=False)
        assert Grades.from_dict(json.loads(text)) == grades
        for talker in grades.talkers:
            for part in (talker, talker.unprocessed, talker.gain):
                assert all((getattr(part, name) is None) == (name in part.undefined) for name in FIGURES)
                assert all(part.undefined.values())
        assert grades.talkers[0].sdr_db is not None
        assert grades.talkers[0].stoi is not None


def test_grades_show_themselves(rng: np.random.Generator) -> None:
    references = _talkers(4.0, 0.5)
    grades = Grader(references, sample_rate=RATE, filter_length=TAPS, names=["<mate>", "bosun"]).grade(
        _separated(references, rng)
    )
    shown = grades._repr_html_()
    assert "&lt;mate&gt;" in shown
    assert f"{grades.talkers[0].sir_db:.1f}" in shown
    assert "the unprocessed recording was not given" in shown


def _figures_of(grades: Grades) -> Floats:
    """Every figure of a grade that is a ratio in dB, STOI or ESTOI."""
    rows = [[t, t.unprocessed, t.gain, t.best_microphone] for t in grades.talkers]
    figures = [getattr(f, name) for row in rows for f in row for name in FIGURES]
    more = [getattr(t.speech.after, name) for t in grades.talkers for name in ("equivalent_snr_db", "sii_sir_db")]
    return np.array([*figures, *more, *(t.speech.segments.stoi.mean for t in grades.talkers)], dtype=float)


def test_long_signals_in_single_precision_and_in_stretches_have_the_same_figures(
    rng: np.random.Generator, monkeypatch: pytest.MonkeyPatch
) -> None:
    references = _talkers(10.0).astype(np.float32)
    heard = np.array([_heard(references, rng), _heard(_moved(references, 3.3), rng)], dtype=np.float32)
    estimates = _moved(_separated(references, rng), -7.3).astype(np.float32)

    def graded() -> Grades:
        grader = Grader(references, sample_rate=RATE, names=NAMES, unprocessed=heard[0], microphones=heard)
        return grader.grade(estimates, speech=True)

    short = graded()
    for name in ("timebase.LONG_S", "resampling.KEEP"):
        monkeypatch.setattr(f"unmix.metrics.{name}", 0)
    for module in ("alignment.ADVANCED", "distortion.CHUNK", "speech.CHUNK", "resampling.PIECE"):
        monkeypatch.setattr(f"unmix.metrics.{module}", 5000)
    monkeypatch.setattr("unmix.metrics.speech.LONGEST_S", 8.0)
    monkeypatch.setattr("unmix.metrics.bands.FRAMES", 3)
    long = graded()
    monkeypatch.setattr("unmix.metrics.timebase.LONG_S", 600.0)
    double = graded()
    assert np.isfinite(_figures_of(short)).all()
    assert _figures_of(long) == pytest.approx(_figures_of(double), abs=1e-6)
    whole = slice(None, -6)  # what follows looks at the loudest 8 s only
    assert _figures_of(long)[whole] == pytest.approx(_figures_of(short)[whole], abs=1e-6)


def test_the_microphone_is_judged_once(rng: np.random.Generator, monkeypatch: pytest.MonkeyPatch) -> None:
    references = _talkers()
    heard = _heard(references, rng)
    grader = Grader(references, sample_rate=RATE, names=NAMES, unprocessed=heard, microphones=heard[None])
    calls: list[Floats] = []
    split = ReferenceSet.split

    def counted(self: ReferenceSet, signals: Floats) -> Distortion:
        calls.append(signals)
        return split(self, signals)

    monkeypatch.setattr(ReferenceSet, "split", counted)
    for _ in range(2):
        grades = grader.grade(_separated(references, rng), speech=True)
        assert all(t.best_channel == 0 and t.best_microphone == t.unprocessed for t in grades.talkers)
    assert len(calls) == 3  # the microphone, and each variant
