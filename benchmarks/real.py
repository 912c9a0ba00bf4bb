"""Do the figures for real recordings order variants as the true ones do? On rendered scenes, where both are known.

    python benchmarks/real.py [--scenes 4] [--seconds 16]

Each scene has a puck and a close microphone at 20 cm from each talker, in one room; talkers take turns, overlap and
pause. Against the truth: leakage where one talker is alone against SIR, and figures against close microphones, with and
without their bleed, against those against the early references. Spearman's rank correlation over the presets.
"""

from __future__ import annotations

import argparse
import tempfile
import warnings
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
from common import PUCK, clip, print_table
from numpy.typing import NDArray
from scipy.stats import spearmanr

from unmix.audio import write_audio
from unmix.jobs.grade import grade
from unmix.jobs.grade_real import grade_alone, grade_close
from unmix.jobs.solve import solve
from unmix.render.compose import RenderedScene, render_scene
from unmix.render.spec import ArraySpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.scene import Scene, Talker
from unmix.variant import PRESETS

Floats = NDArray[np.float64]
RATE, DISTANCE_M, CLOSE_M = 16000, 1.2, 0.2
VOICES = ("novel-reader", "card-reader")
VARIANTS = [name for name in PRESETS if name != "low-latency"]


def drawn(
    seed: int, seconds: float, t20_s: float
) -> tuple[RenderedScene, dict[str, list[tuple[float, float]]], Floats]:
    """A scene with its close microphones as further channels, who speaks when, and the bearings."""
    rng = np.random.default_rng(seed)
    first = rng.uniform(-180.0, 180.0)
    azimuth = np.array([first, first + rng.uniform(50.0, 140.0)])
    towards = np.stack([np.cos(np.radians(azimuth)), np.sin(np.radians(azimuth)), [0.0, 0.0]], axis=1)
    close = (DISTANCE_M - CLOSE_M) * towards
    spoken = {
        VOICES[0]: [(0.0, 0.35 * seconds), (0.5 * seconds, 0.8 * seconds)],
        VOICES[1]: [(0.2 * seconds, 0.6 * seconds), (0.7 * seconds, seconds - 0.5)],
    }
    clips = {}
    for voice, stretches in spoken.items():
        time_s = np.arange(round(seconds * RATE)) / RATE
        clips[voice] = clip(voice, seconds, RATE) * sum((time_s >= a) & (time_s < b) for a, b in stretches)
    spec = RenderSpec(
        duration_s=seconds,
        seed=seed,
        room=RoomSpec(size_m=[6.0, 4.5, 2.8], t20_s=t20_s),
        array=ArraySpec(positions_m=np.vstack([PUCK.positions_m, close]).tolist()),
        talker=[
            TalkerSpec(name=name, azimuth_deg=float((a + 180.0) % 360.0 - 180.0), distance_m=DISTANCE_M)
            for name, a in zip(VOICES, azimuth, strict=True)
        ],
        noise=NoiseSpec(sensor_snr_db=35.0),
    )
    return render_scene(spec, clips=clips), spoken, np.radians(azimuth)


def figures(seed: int, seconds: float, t20_s: float, given: bool) -> Iterator[list[float]]:
    """For each variant: true SIR, STOI and gain in SDR; leakage alone; the same against close microphones."""
    rendered, spoken, azimuth = drawn(seed, seconds, t20_s)
    microphones, close = rendered.mixture[: PUCK.channels], rendered.mixture[PUCK.channels :]
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        files = []
        for voice, signal in zip(VOICES, close, strict=True):
            files.append(folder / f"close-{voice}.wav")
            write_audio(files[-1], signal[None], RATE)
        talkers = [
            Talker(v, float(a), 0.0, DISTANCE_M, None, list(spoken[v]) if given else None, {"plain": f})
            for v, a, f in zip(VOICES, azimuth, files, strict=True)
        ]
        scene = Scene.from_arrays(microphones, PUCK, talkers, sample_rate=RATE)
        if given:
            scene = replace(scene, noise_only_s=[(seconds - 0.3, seconds)])
        for variant in VARIANTS:
            signals = solve(scene, variant).signals
            assert signals is not None
            out = folder / variant
            out.mkdir()
            for voice, signal in zip(VOICES, signals, strict=True):
                write_audio(out / f"{voice}.wav", signal[None], RATE)
            truth = grade(signals, rendered.early, sample_rate=RATE, unprocessed=microphones[0], speech=False).talkers
            alone = [item.interval.mean or 0.0 for item in grade_alone(scene, out).leakage]
            judged = grade_close(scene, out)
            bled = grade(signals, close, sample_rate=RATE, unprocessed=microphones[0], speech=False).talkers
            yield [
                float(np.mean(values))
                for values in (
                    [t.sir_db for t in truth], [t.stoi for t in truth], [t.sdr_db for t in truth],
                    alone,
                    [t.sir_db for t in judged.grades.talkers],
                    [t.stoi for t in judged.grades.talkers],
                    [t.sdr_db for t in judged.grades.talkers],
                    [u["sir_db"] for u in judged.uncertainty.values()],
                    [b.before_db for b in judged.bleed], [b.left_db for b in judged.bleed],
                    [t.sir_db for t in bled],
                )
            ]  # fmt: skip


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--scenes", type=int, default=4)
    parser.add_argument("--seconds", type=float, default=16.0)
    options = parser.parse_args()
    warnings.simplefilter("ignore")
    for given in (True, False):
        rows = []
        tables = []
        for index in range(options.scenes):
            t20_s = (0.2, 0.4)[index % 2]
            tables.append(np.array(list(figures(4001 + index, options.seconds, t20_s, given))))
            x = tables[-1]
            rows.append(
                [f"seed {4001 + index}, T20 {t20_s} s", _rank(x[:, 0], -x[:, 3]), _rank(x[:, 0], x[:, 4]),
                 _rank(x[:, 0], x[:, 10]), _rank(x[:, 1], x[:, 5]), _rank(x[:, 2], x[:, 6]),
                 float(x[0, 8]), float(x[0, 9])]
            )  # fmt: skip
        x = np.mean(tables, axis=0)
        rows.append(
            ["mean over scenes", _rank(x[:, 0], -x[:, 3]), _rank(x[:, 0], x[:, 4]), _rank(x[:, 0], x[:, 10]),
             _rank(x[:, 1], x[:, 5]), _rank(x[:, 2], x[:, 6]), float(x[0, 8]), float(x[0, 9])]
        )  # fmt: skip
        said = "activity given" if given else "activity found"
        print_table(
            f"Real figures against true ones, rank correlation over {len(VARIANTS)} variants, {said}",
            ["scene", "SIR / leakage alone", "SIR / close, cleaned", "SIR / close, with bleed", "STOI / close",
             "SDR / close", "bleed, dB", "left, dB"],
            rows,
        )  # fmt: skip
        print_table(
            f"Means over scenes, {said}",
            ["variant", "true SIR", "leakage alone", "SIR, close", "+-", "SIR, bleeding", "true STOI", "STOI, close"],
            [[v, *(float(x[i, c]) for c in (0, 3, 4, 7, 10, 1, 5))] for i, v in enumerate(VARIANTS)],
        )


def _rank(a: Floats, b: Floats) -> float:
    return float(spearmanr(a, b).statistic)


if __name__ == "__main__":
    main()
