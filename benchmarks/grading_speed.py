"""Times of grading beside mir_eval's and pystoi's, in one process, on the same signals.

    python benchmarks/grading_speed.py [--repeat 7] [--blas-threads 1]

Two cases: two talkers over 10 s, and 20 variants of a scene with three talkers over 10 s, all at 16 kHz, real speech
(`tests/data/speech`), noise from seed 11. Times of the first case are the smallest of so many runs of each program in
turn; the references' part (Gram matrix, factors, spectra) is built anew in every run. The largest difference of any
SDR, SIR or SAR is printed beside the times. mir_eval tries every assignment by default, as here every pair is graded;
its time for the pairs that belong together is given too.
"""

from __future__ import annotations

import argparse
import cProfile
import os
import pstats
import sys
import time
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from tests.conftest import speech
from unmix.metrics.distortion import ReferenceSet
from unmix.metrics.grader import Grader
from unmix.metrics.intelligibility import SpeechReference

Floats = NDArray[np.float64]
RATE, SECONDS, VARIANTS = 16000, 10.0, 20
CLIPS = ("novel-reader", "card-reader", "robot-commands")


def scene(talkers: int, variants: int, rng: np.random.Generator) -> tuple[Floats, Floats]:
    """References (talkers, samples) and estimates (variants, talkers, samples) with leakage, an echo and noise."""
    references = np.array([speech(clip, SECONDS) for clip in CLIPS[:talkers]])
    echo = np.zeros(400)
    echo[[0, 60, 399]] = 1.0, 0.3, -0.1
    mixed = (np.eye(talkers) + 0.05 * rng.standard_normal((variants, talkers, talkers))) @ references
    filtered = np.apply_along_axis(lambda s: np.convolve(s, echo)[: s.size], 2, mixed)
    return references, filtered + 1e-3 * rng.standard_normal(filtered.shape)


def best_times(runs: dict[str, Callable[[], Any]], repeat: int) -> tuple[dict[str, float], dict[str, Any]]:
    """Smallest wall time of each run, the runs taking turns, and what they returned."""
    times, results = dict.fromkeys(runs, float("inf")), {}
    for _ in range(repeat):
        for name, run in runs.items():
            started = time.perf_counter()
            results[name] = run()
            times[name] = min(times[name], time.perf_counter() - started)
    return times, results


def mir_eval_ratios(references: Floats, variants: Floats, *, permute: bool) -> Floats:
    """SDR, SIR, SAR of each variant in the references' order: (variants, 3, talkers)."""
    import mir_eval

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", FutureWarning)
        rows = [mir_eval.separation.bss_eval_sources(references, v, compute_permutation=permute) for v in variants]
    return np.array([row[:3] for row in rows])


def our_ratios(references: Floats, variants: Floats) -> Floats:
    """The same, every pair being graded on the way."""
    split = ReferenceSet(references).split(variants.reshape(-1, references.shape[1]))
    talkers = len(references)
    ratios = np.array([split.sdr_db, split.sir_db, split.sar_db]).reshape(3, len(variants), talkers, talkers)
    return np.diagonal(ratios, axis1=2, axis2=3).transpose(1, 0, 2)


def report(title: str, times: dict[str, float], ours: str) -> None:
    """Print times side by side."""
    print(f"\n{title}")
    for name, seconds in times.items():
        print(f"  {name:<44} {seconds:9.3f} s  {seconds / times[ours]:8.1f} x")


def main() -> None:
    """Read the options and run."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--repeat", type=int, default=7, help="runs of the first case; the long ones run once")
    parser.add_argument("--blas-threads", type=int, default=1, help="for all programs alike; 0: the library's choice")
    options = parser.parse_args()
    with threadpool_limits(options.blas_threads or None):
        run(options.repeat, options.blas_threads)


def run(repeat: int, blas_threads: int) -> None:
    """Both cases, intelligibility, and where the time of whole grades goes."""
    rng = np.random.default_rng(11)
    print(
        f"{os.cpu_count()} cores, {SECONDS:.0f} s at {RATE} Hz, BLAS threads {blas_threads or 'as the library likes'}"
    )

    for talkers, variants in ((2, 1), (3, VARIANTS)):
        references, estimates = scene(talkers, variants, rng)
        runs: dict[str, Callable[[], Any]] = {
            "unmix, every pair": lambda r=references, e=estimates: our_ratios(r, e),
            "mir_eval, every pair": lambda r=references, e=estimates: mir_eval_ratios(r, e, permute=True),
            "mir_eval, given pairs only": lambda r=references, e=estimates: mir_eval_ratios(r, e, permute=False),
        }
        times, results = best_times(runs, repeat if variants == 1 else 1)
        report(f"SDR, SIR, SAR: {talkers} talkers, {variants} variant(s)", times, "unmix, every pair")
        difference = np.abs(results["unmix, every pair"] - results["mir_eval, every pair"]).max()
        print(f"  largest difference {difference:.1e} dB")

    def ours_heard() -> Floats:
        speech_references = [SpeechReference(s, RATE) for s in references]
        heard = [[x.compare(y) for x, y in zip(speech_references, v, strict=True)] for v in estimates]
        return np.array([[(h.stoi, h.estoi) for h in row] for row in heard])

    def theirs_heard() -> Floats:
        from pystoi import stoi

        return np.array(
            [
                [[stoi(x, y, RATE, extended=e) for e in (False, True)] for x, y in zip(references, v, strict=True)]
                for v in estimates
            ]
        )

    times, results = best_times({"unmix": ours_heard, "pystoi": theirs_heard}, 1)
    report(f"STOI and ESTOI: 3 talkers, {VARIANTS} variants", times, "unmix")
    print(f"  largest difference {np.abs(results['unmix'] - results['pystoi']).max():.1e}")

    profile = cProfile.Profile()
    started = time.perf_counter()
    profile.enable()
    grader = Grader(references, sample_rate=RATE, names=CLIPS, unprocessed=references.sum(axis=0))
    for variant in estimates:
        grader.grade(variant)
    profile.disable()
    print(f"\nWhole grades, 3 talkers, {VARIANTS} variants one after the other: {time.perf_counter() - started:.2f} s")
    stages = {
        "find": "offsets and drift",
        "advance": "moving in time",
        "_factor": "Gram matrix and its factors, once",
        "split": "splitting estimates (SDR, SIR, SAR)",
        "compare": "STOI and ESTOI",
        "si_sdr_db": "SI-SDR",
    }
    for (file, _, function), (_, _, _, cumulative, _) in pstats.Stats(profile).stats.items():  # type: ignore[attr-defined]
        if function in stages and "metrics" in file:
            print(f"  {stages[function]:<44} {cumulative:9.3f} s")


if __name__ == "__main__":
    main()
