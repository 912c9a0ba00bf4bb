"""Figures of understanding beside STOI and ESTOI: words, equivalent ratio, weighted interference, bits, segments.

No measure has the last word: each was fitted to other listening tests. Where they disagree about a talker, that is
said, and ears must decide.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.bands import weighted_ratio_db
from unmix.metrics.bench import Bench
from unmix.metrics.distortion import Distortion
from unmix.metrics.equivalent import EquivalentRatio
from unmix.metrics.grades import Figures
from unmix.metrics.information import InformationReference
from unmix.metrics.intelligibility import SpeechReference
from unmix.metrics.segments import SegmentReference
from unmix.metrics.speech_figures import SPEECH_FIGURES, SpeechFigures, SpeechGrade
from unmix.metrics.words import words_dantale_percent, words_ieee_percent

__all__ = ["SpeechBench", "disagreements"]

Signals = NDArray[np.floating[Any]]


LONGEST_S = 300.0
"""Of a longer recording, equivalent ratio and bits are of the stretch of this length in which the talker is loudest."""


CHUNK = 1 << 18
"""Samples worked on at a time."""


class SpeechBench:
    """Figures of understanding on one bench; what depends on its references is computed once."""

    def __init__(self, bench: Bench) -> None:
        self._bench = bench

    @cached_property
    def _stretches(self) -> list[slice]:
        """What is looked at for each talker: all of it, or the loudest stretch of a long recording."""
        return [_loudest(s, round(LONGEST_S * self._bench.sample_rate)) for s in self._bench.references]

    @cached_property
    def _information(self) -> list[InformationReference]:
        rate = self._bench.sample_rate
        return [InformationReference(s[p], rate) for s, p in zip(self._bench.references, self._stretches, strict=True)]

    @cached_property
    def _speech(self) -> list[SpeechReference]:
        whole, rate = self._bench.speech, self._bench.sample_rate
        return [
            speech if p.stop - p.start == s.size else SpeechReference(s[p], rate)
            for s, p, speech in zip(self._bench.references, self._stretches, whole, strict=True)
        ]

    @cached_property
    def _equivalent(self) -> list[EquivalentRatio]:
        return [
            EquivalentRatio(self._bench.references[:, p], k, self._speech[k]) for k, p in enumerate(self._stretches)
        ]

    @cached_property
    def segments(self) -> list[SegmentReference]:
        """The references in segments of 3 s."""
        return [SegmentReference(s, self._bench.sample_rate) for s in self._bench.references]

    def speech_s(self, talker: int) -> float:
        """Seconds of speech that the measure in bits rests on; 0 when it is undefined."""
        reference = self._information[talker]
        return reference.speech_s if reference.undefined is None else 0.0

    def figures(self, signal: Signals, known: Figures, split: Distortion, row: int, talker: int) -> SpeechFigures:
        """The figures of one signal (samples,) whose STOI and SIR are `known`; `split` holds it in row `row`."""
        undefined: dict[str, str] = {}
        words: tuple[float | None, float | None] = (None, None)
        if known.stoi is not None:
            words = words_ieee_percent(known.stoi), words_dantale_percent(known.stoi)
        else:
            undefined |= dict.fromkeys(SPEECH_FIGURES[:2], known.undefined.get("stoi", "STOI is undefined"))
        part = self._stretches[talker]
        whole = part.stop - part.start == signal.size
        stoi = known.stoi if whole else self._speech[talker].compare(signal[part]).stoi
        ratio, why_no_ratio = self._equivalent[talker].ratio_db(stoi)
        bits, why_no_bits = self._information[talker].bits_per_s(signal[part])
        sir, why_no_sir = self._weighted(known, split, row, talker)
        for name, why in zip(SPEECH_FIGURES[2:], (why_no_ratio, why_no_sir, why_no_bits), strict=True):
            if why is not None:
                undefined[name] = why
        return SpeechFigures(
            words_ieee_percent=words[0],
            words_dantale_percent=words[1],
            equivalent_snr_db=ratio,
            sii_sir_db=sir,
            bits_per_s=bits,
            undefined=undefined,
        )

    def _weighted(self, known: Figures, split: Distortion, row: int, talker: int) -> tuple[float | None, str | None]:
        if known.sir_db is None:
            return None, known.undefined.get("sir_db", "SIR is undefined")
        samples = self._bench.references.shape[1] + self._bench.guard
        ratio = weighted_ratio_db(self._bench.set.parts(split, row, talker), samples, self._bench.sample_rate)
        return ratio, None if ratio is not None else "no band holds both talker and interference"


def _loudest(reference: Signals, length: int) -> slice:
    """The stretch of `length` samples with the most energy, or all of a shorter signal."""
    if reference.size <= length:
        return slice(0, reference.size)
    best, start, energy = 0.0, 0, 0.0
    for first in range(0, reference.size - length, CHUNK):
        last = min(first + CHUNK, reference.size - length)
        entering, leaving = (
            np.square(np.nan_to_num(reference[a : a + last - first]), dtype=np.float64) for a in (first + length, first)
        )
        # Beyond that of the first stretch: what has come in since, less what has gone out.
        energies = energy + np.cumsum(entering - leaving)
        highest = int(np.argmax(energies))
        if energies[highest] > best:
            best, start = float(energies[highest]), first + highest + 1
        energy = float(energies[-1])
    return slice(start, start + length)


NOTICEABLE = {"STOI": 0.02, "ESTOI": 0.02, "bits": 0.05}
"""Gains smaller than this are no gains: in STOI and ESTOI as they are, in bits as a share of those before."""


def disagreements(name: str, gain: Figures, speech: SpeechGrade) -> Iterator[str]:
    """Where measures of intelligibility disagree about a talker, in words."""
    signs: dict[str, int] = {}
    for measure, value in (("STOI", gain.stoi), ("ESTOI", gain.estoi)):
        if value is not None:
            signs[measure] = _sign(value, NOTICEABLE[measure])
    bits, before = speech.gain.bits_per_s, speech.before.bits_per_s
    if bits is not None and before is not None:
        signs["bits"] = _sign(bits, NOTICEABLE["bits"] * before)
    up, down = ([m for m, sign in signs.items() if sign == way] for way in (1, -1))
    if up and down:
        yield f"{name}: measures disagree: {' and '.join(up)} got better, {' and '.join(down)} worse; listen to decide"


def _sign(value: float, noticeable: float) -> int:
    return 0 if abs(value) < noticeable else 1 if value > 0.0 else -1
