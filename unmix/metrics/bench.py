"""The bench signals are graded on: one set of references, cut and aligned, and all that figures share of them."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.distortion import FILTER_LENGTH, Distortion, ReferenceSet, si_sdr_db
from unmix.metrics.grades import Figures
from unmix.metrics.intelligibility import SpeechReference

__all__ = ["Bench", "difference_to_mir_eval_db"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]


class Bench:
    """Grades signals that are aligned with its references.

    Parameters
    ----------
    references : (references, samples)
    sample_rate : int
        In hertz.
    filter_length : int
        Taps that BSS Eval allows.
    guard : int
        Samples by which every signal is held back for BSS Eval, whose filters are causal.
    """

    def __init__(self, references: Signals, sample_rate: int, *, filter_length: int, guard: int) -> None:
        self.references = references
        self.sample_rate = sample_rate
        self.filter_length = filter_length
        self.guard = guard

    @cached_property
    def set(self) -> ReferenceSet:
        """The references for BSS Eval."""
        return ReferenceSet(self.references, filter_length=self.filter_length, guard=self.guard)

    @cached_property
    def speech(self) -> tuple[SpeechReference, ...]:
        """The references for STOI and ESTOI."""
        return tuple(SpeechReference(reference, self.sample_rate) for reference in self.references)

    def split(self, signals: Signals) -> Distortion:
        """SDR, SIR and SAR of `signals` (signals, samples) against every reference."""
        return self.set.split(signals)

    def figures(self, signal: Signals, distortion: Distortion, row: int, talker: int) -> Figures:
        """All figures of one signal (samples,) against one reference; `distortion` holds it in row `row`."""
        ratios = {
            name: None if (name, row, talker) in distortion.undefined else float(getattr(distortion, name)[row, talker])
            for name in ("sdr_db", "sir_db", "sar_db")
        }
        undefined = {name: why for (name, e, k), why in distortion.undefined.items() if (e, k) == (row, talker)}
        si_sdr, why = si_sdr_db(signal, self.references[talker])
        if why is not None:
            undefined["si_sdr_db"] = why
        heard = self.speech[talker].compare(signal)
        if heard.undefined is not None:
            undefined |= dict.fromkeys(("stoi", "estoi"), heard.undefined)
        return Figures(**ratios, si_sdr_db=si_sdr, stoi=heard.stoi, estoi=heard.estoi, undefined=undefined)


def difference_to_mir_eval_db(bench: Bench, signals: Signals, ratios: Floats) -> tuple[float | None, str | None]:
    """Largest difference of SDR, SIR and SAR to mir_eval's on the same aligned signals, or why there is none.

    `signals` (references, samples) in the references' order, `ratios` (3, signals, references) theirs. mir_eval
    refuses silent signals.
    """
    if bench.filter_length != FILTER_LENGTH:
        return None, f"mir_eval allows {FILTER_LENGTH} taps only"
    import warnings

    import mir_eval

    with warnings.catch_warnings():
        # Its separation metrics are deprecated as a whole; the floor in the project's metadata knows.
        warnings.simplefilter("ignore", FutureWarning)
        try:
            theirs = mir_eval.separation.bss_eval_sources(
                np.pad(bench.references, ((0, 0), (0, bench.guard))),
                np.pad(signals, ((0, 0), (bench.guard, 0))),
                compute_permutation=False,
            )
        except (ValueError, np.linalg.LinAlgError) as error:
            return None, f"mir_eval refuses: {str(error).splitlines()[0]}"
    differences = np.abs(np.diagonal(ratios, axis1=1, axis2=2) - np.array(theirs[:3]))
    known = differences[np.isfinite(differences)]
    return (float(known.max()), None) if known.size else (None, "no figure is defined")
