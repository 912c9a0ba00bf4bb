"""A scene's references, ready to grade any number of variants.

What depends on the references alone (their place in time, the factored Gram matrix, their side of intelligibility,
the microphones' figures) is computed once, for all estimates graded.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.alignment import DRIFT_PPM, GUARD_S, MAX_OFFSET_S, Offset, advance, guard_samples
from unmix.metrics.assignment import best_assignment
from unmix.metrics.bench import Bench, difference_to_mir_eval_db
from unmix.metrics.distortion import EXACT, FILTER_LENGTH, ROUNDING_DB, Distortion, ReferenceSet, describe_unusable
from unmix.metrics.grades import Figures, Grades, TalkerGrade
from unmix.metrics.leakage import leakage_of_outputs_db, projected_leakage_db
from unmix.metrics.speech import SpeechBench, disagreements
from unmix.metrics.speech_figures import SpeechFigures, SpeechGrade
from unmix.metrics.timebase import Matched, Span, Timebase, clarity

__all__ = ["Grader", "Match"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]
Match = Literal["name", "best"]

KEPT = 4
"""Choices of time whose factored references are kept."""


@dataclass(frozen=True)
class _Before:
    """The microphones' figures for one talker."""

    unprocessed: Figures
    best: Figures | None
    best_channel: int | None


@dataclass(frozen=True)
class _Understood:
    """The unprocessed microphone's figures of understanding for one talker, and STOI and ESTOI of its segments."""

    figures: SpeechFigures
    segments: Floats


class Grader:
    """Grades the estimates of one scene, variant after variant.

    Parameters
    ----------
    references : (talkers, samples)
        Finite or not, silent or not: what cannot be graded is undefined in the result, with the reason.
    sample_rate : int
        In hertz, of every signal.
    names : sequence of str
        The talkers, in the references' order.
    unprocessed : (samples,), optional
        The recording's reference microphone.
    microphones : (channels, samples), optional
        All microphones, for the best of them.
    images : (talkers, samples), optional
        Each talker alone at the reference microphone, for leakage.
    against : str
        Kind of the references; only reported.
    filter_length, guard_s, max_offset_s
        Taps of BSS Eval; by how much signals are held back behind their references; how far offsets are searched.
    notes : sequence of str
        Warnings that go into every result.
    """

    def __init__(
        self,
        references: Signals,
        *,
        sample_rate: int,
        names: Sequence[str],
        unprocessed: Signals | None = None,
        microphones: Signals | None = None,
        images: Signals | None = None,
        against: str = "plain",
        filter_length: int = FILTER_LENGTH,
        guard_s: float = GUARD_S,
        max_offset_s: float = MAX_OFFSET_S,
        notes: Sequence[str] = (),
    ) -> None:
        self.references = references
        self.sample_rate = sample_rate
        self.names = tuple(names)
        self.unprocessed = unprocessed
        self.microphones = microphones
        self.images = images
        self.against = against
        self.filter_length = filter_length
        self.guard = guard_samples(sample_rate, guard_s)
        self.notes = tuple(notes)
        self._clock = Timebase(
            references, sample_rate, unprocessed=unprocessed, guard=self.guard, max_offset_s=max_offset_s
        )
        self._benches: dict[Span, Bench] = {}
        self._splits: dict[Span, Distortion] = {}
        self._befores: dict[Span, list[_Before]] = {}
        self._image_sets: dict[Span, ReferenceSet] = {}
        self._speech_benches: dict[Span, SpeechBench] = {}
        self._speech_befores: dict[tuple[Span, int], _Understood] = {}

    def grade(
        self,
        estimates: Signals,
        *,
        match: Match = "name",
        matched: Matched | None = None,
        image_outputs: Signals | None = None,
        cross_check: bool = False,
        speech: bool = False,
        notes: Sequence[str] = (),
    ) -> Grades:
        """Grade `estimates` (estimates, samples).

        Parameters
        ----------
        match : {"name", "best"}
            "name": `matched` says which estimate is whose (by default they stand in the references' order); "best":
            such that the mean SIR is highest.
        matched : list of int or None
            The estimate of each reference.
        image_outputs : (images, talkers, samples), optional
            What the filters behind the estimates make of each image alone; leakage is then read off these.
        cross_check : bool
            Recompute the ratios with mir_eval.
        speech : bool
            Also words, equivalent ratio, weighted interference, bits, and gains over segments of 3 s.
        notes : sequence of str
            Warnings that go into this result.
        """
        if match == "best":
            offsets = self._clock.offsets(estimates, None)
            matched = best_assignment(clarity(offsets))
        else:
            matched = matched or list(range(len(self.names)))
            offsets = self._clock.offsets(estimates, matched)
        time, aligned = self._clock.align(estimates, offsets, matched)
        distortion = self._bench(time).split(aligned)
        if match == "best" and (better := best_assignment(_scores(distortion))) != matched:
            # Ratios need offsets first; the pairs they choose may have others.
            matched = better
            time, aligned = self._clock.align(estimates, offsets, matched)
            distortion = self._bench(time).split(aligned)
        leakage, leakage_by = self._leakage(aligned, matched, time, image_outputs)
        difference, why_not = self._cross_check(time, aligned, distortion, matched) if cross_check else (None, None)
        talkers = tuple(
            self._talker(k, time, offsets, matched, aligned, distortion, leakage) for k in range(len(self.names))
        )
        if speech:
            talkers = tuple(self._with_speech(talker, k, time, aligned, distortion) for k, talker in enumerate(talkers))
        return Grades(
            talkers=talkers,
            against=self.against,
            sample_rate=self.sample_rate,
            filter_length=self.filter_length,
            guard_samples=self.guard,
            span_s=(time.start / self.sample_rate, time.stop / self.sample_rate),
            leakage_by=leakage_by,
            cross_check_db=difference,
            warnings=(
                *self.notes,
                *notes,
                *self._warnings(time, offsets, matched, aligned, why_not),
                *(line for t in talkers if t.speech is not None for line in disagreements(t.name, t.gain, t.speech)),
            ),
        )

    def aligned(self, estimates: Signals, matched: Matched) -> tuple[Signals, Signals, Floats | None]:
        """What is graded, for figures of one's own: references, estimates, and the unprocessed microphone.

        Moved to one time and cut as `grade` does it: (references, n), (estimates, n) and (n,), which is None when the
        recording was not given. `matched` says which estimate is each reference's.
        """
        time, moved = self._clock.align(estimates, self._clock.offsets(estimates, matched), matched)
        before = None if self.unprocessed is None else np.asarray(self.unprocessed[time.start : time.stop], float)
        return self._bench(time).references, moved, before

    def _bench(self, time: Span) -> Bench:
        if time not in self._benches:
            moved = np.empty((len(self.references), time.stop - time.start), dtype=self._clock.precision)
            for row, s, base in zip(moved, self.references, time.bases, strict=True):
                if describe_unusable(s) is None:
                    advance(s, time.start - base, out=row)
                else:
                    row[:] = s[: row.size]
            _drop_oldest(self._benches)
            self._benches[time] = Bench(
                moved,
                self.sample_rate,
                filter_length=self.filter_length,
                guard=self.guard,
            )
        return self._benches[time]

    def _talker(
        self,
        k: int,
        time: Span,
        offsets: dict[tuple[int, int], Offset],
        matched: Matched,
        aligned: Signals,
        distortion: Distortion,
        leakage: Floats | None,
    ) -> TalkerGrade:
        e, before = matched[k], self._before(time)[k]
        if e is None:
            figures, offset = Figures.none_because("no estimate was matched to this talker"), Offset(None)
        else:
            figures, offset = self._bench(time).figures(aligned[e], distortion, e, k), offsets[e, k]
        undefined = dict(figures.undefined)
        if offset.samples is None:
            undefined["offset_s"] = offset.undefined or "no estimate was matched to this talker"
        if offset.drift_ppm is None:
            undefined["drift_ppm"] = "fewer than four stretches of a second resemble the reference clearly"
        leaks = None
        if leakage is not None:
            leaks = {
                name: float(leakage[k, j]) if np.isfinite(leakage[k, j]) else None
                for j, name in enumerate(self.names)
                if j != k
            }
            undefined |= {
                f"leakage_db.{name}": "an image, or what comes out for it, is silent"
                for name, value in leaks.items()
                if value is None
            }
        found: dict[str, Any] = figures.figures()
        return TalkerGrade(
            **found,
            undefined=undefined,
            name=self.names[k],
            estimate=e,
            offset_s=None if offset.samples is None else offset.samples / self.sample_rate,
            drift_ppm=offset.drift_ppm,
            unprocessed=before.unprocessed,
            unprocessed_offset_s=self._heard_s(k),
            gain=figures.gain_over(before.unprocessed),
            best_microphone=before.best,
            best_channel=before.best_channel,
            gain_over_best=None if before.best is None else figures.gain_over(before.best),
            leakage_db=leaks,
        )

    def _with_speech(
        self, talker: TalkerGrade, k: int, time: Span, aligned: Signals, distortion: Distortion
    ) -> TalkerGrade:
        """The grade with figures of understanding."""
        bench, e = self._speech_bench(time), talker.estimate
        after = SpeechFigures.none_because("no estimate was matched to this talker")
        if e is not None:
            after = bench.figures(aligned[e], talker, distortion, e, k)
        before, segments = SpeechFigures.none_because("the unprocessed recording was not given"), None
        if self.unprocessed is not None:
            understood = self._understood(time, k, talker.unprocessed)
            before, parts = understood.figures, bench.segments[k]
            segments = None if e is None else parts.gains(parts.figures(aligned[e]), understood.segments)
        gain = after.gain_over(before)
        grade = SpeechGrade(after=after, before=before, gain=gain, speech_s=bench.speech_s(k), segments=segments)
        return replace(talker, speech=grade)

    def _understood(self, time: Span, k: int, known: Figures) -> _Understood:
        """The unprocessed microphone's figures of understanding; the same for every variant."""
        if (time, k) not in self._speech_befores:
            microphone, bench = self._microphone(time), self._speech_bench(time)
            _drop_oldest(self._speech_befores, len(self.names) * KEPT)
            self._speech_befores[time, k] = _Understood(
                bench.figures(microphone, known, self._split(time), 0, k), bench.segments[k].figures(microphone)
            )
        return self._speech_befores[time, k]

    def _microphone(self, time: Span) -> Signals:
        """The unprocessed microphone, cut. References were moved to where it hears their talkers, so it stays."""
        if self.unprocessed is None:
            raise TypeError("the unprocessed recording was not given")
        return self.unprocessed[time.start : time.stop]

    def _split(self, time: Span) -> Distortion:
        """The unprocessed microphone against every reference."""
        if time not in self._splits:
            _drop_oldest(self._splits)
            self._splits[time] = self._bench(time).split(self._microphone(time)[None])
        return self._splits[time]

    def _speech_bench(self, time: Span) -> SpeechBench:
        if time not in self._speech_benches:
            _drop_oldest(self._speech_benches)
            self._speech_benches[time] = SpeechBench(self._bench(time))
        return self._speech_benches[time]

    def _heard_s(self, k: int) -> float | None:
        samples = None if self._clock.heard is None else self._clock.heard[k].samples
        return None if samples is None else samples / self.sample_rate

    def _before(self, time: Span) -> list[_Before]:
        """The microphones' figures for each talker; the same for every variant."""
        if time not in self._befores:
            _drop_oldest(self._befores)
            talkers = range(len(self.names))
            unprocessed = self._unprocessed(time)
            best = self._best_microphones(time, unprocessed)
            self._befores[time] = [_Before(unprocessed[k], *best[k]) for k in talkers]
        return self._befores[time]

    def _unprocessed(self, time: Span) -> list[Figures]:
        if self.unprocessed is None:
            return [Figures.none_because("the unprocessed recording was not given") for _ in self.names]
        bench, signal, split = self._bench(time), self._microphone(time), self._split(time)
        return [bench.figures(signal, split, 0, k) for k in range(len(self.names))]

    def _best_microphones(self, time: Span, unprocessed: list[Figures]) -> list[tuple[Figures | None, int | None]]:
        """Figures and channel of the microphone with the highest SDR for each talker."""
        if self.microphones is None:
            return [(None, None) for _ in self.names]
        bench = self._bench(time)
        same = [
            self.unprocessed is not None and np.array_equal(channel, self.unprocessed) for channel in self.microphones
        ]
        split = self._split(time) if all(same) else bench.split(self.microphones[:, time.start : time.stop])
        found: list[tuple[Figures | None, int | None]] = []
        for k, sdr in enumerate(split.sdr_db.T):
            if not np.isfinite(sdr).any():
                found.append((Figures.none_because(split.undefined["sdr_db", 0, k]), None))
                continue
            best = int(np.nanargmax(sdr))
            if same[best]:
                found.append((unprocessed[k], best))
                continue
            offset = self._clock.finders[k].find(self.microphones[best]).samples
            late = 0.0 if offset is None else offset - time.bases[k]
            signal = advance(self.microphones[best], time.start + late, length=time.stop - time.start)
            found.append((bench.figures(signal, bench.split(signal[None]), 0, k), best))
        return found

    def _leakage(
        self, aligned: Signals, matched: Matched, time: Span, image_outputs: Signals | None
    ) -> tuple[Floats | None, str | None]:
        if image_outputs is not None:
            return leakage_of_outputs_db(image_outputs), "filters"
        if self.images is None:
            return None, None
        if time not in self._image_sets:
            _drop_oldest(self._image_sets)
            self._image_sets[time] = ReferenceSet(
                self.images[:, time.start : time.stop], filter_length=self.filter_length, guard=self.guard
            )
        given = [k for k, e in enumerate(matched) if e is not None]
        leakage = np.full((len(matched), len(matched)), np.nan)
        order = [e for e in matched if e is not None]
        signals = aligned if order == list(range(len(aligned))) else aligned[order]
        leakage[given] = projected_leakage_db(signals, self._image_sets[time], given)
        return leakage, "projection"

    def _cross_check(
        self, time: Span, aligned: Signals, distortion: Distortion, matched: Matched
    ) -> tuple[float | None, str | None]:
        order = [e for e in matched if e is not None]
        if len(order) < len(matched):
            return None, "not every talker has an estimate"
        ratios = np.array([getattr(distortion, name)[order] for name in ("sdr_db", "sir_db", "sar_db")])
        return difference_to_mir_eval_db(self._bench(time), aligned[order], ratios)

    def _warnings(
        self,
        time: Span,
        offsets: dict[tuple[int, int], Offset],
        matched: Matched,
        aligned: Signals,
        why_no_cross_check: str | None,
    ) -> Iterator[str]:
        for k, e in enumerate(matched):
            name = self.names[k]
            if e is None:
                yield f"{name}: no estimate was matched"
                continue
            offset = offsets[e, k]
            if offset.slips:
                yield (
                    f"{name}: the estimate drifts against its reference by {offset.drift_ppm:.1f} ppm, beyond "
                    f"{DRIFT_PPM:g}: two sample clocks, or a talker who moves; distortion figures are too low"
                )
            if (
                offset.samples is None
                and describe_unusable(aligned[e]) is None
                and k not in self._bench(time).set.unusable
            ):
                yield f"{name}: {offset.undefined}; graded as if it were in time"
        spare = sorted(set(range(len(aligned))) - set(matched))
        if spare:
            yield f"estimates left over, counted from zero: {', '.join(map(str, spare))}"
        samples, lost = self.references.shape[1], self.references.shape[1] - (time.stop - time.start)
        if lost:
            yield (
                f"graded over {(samples - lost) / self.sample_rate:.2f} of {samples / self.sample_rate:.2f} s, where "
                "every signal has samples once moved in time"
            )
        if self._bench(time).set.ridged:
            yield "a reference has no energy in part of its band; ratios beyond about 100 dB are not reached"
        if why_no_cross_check is not None:
            yield f"not cross-checked: {why_no_cross_check}"


def _scores(distortion: Distortion) -> Floats:
    """SIR of each pair, as the published assignment has it; SDR where nothing interferes."""
    name = "sir_db" if np.isfinite(distortion.sir_db).any() else "sdr_db"
    scores: Floats = getattr(distortion, name).copy()
    for (figure, e, k), why in distortion.undefined.items():
        if figure == name and why == EXACT:
            scores[e, k] = ROUNDING_DB  # undefined because nothing could fit better
    return scores


def _drop_oldest(kept: dict[Any, Any], most: int = KEPT) -> None:
    while len(kept) >= most:
        del kept[next(iter(kept))]
