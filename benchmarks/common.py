"""What the tables share: arrays, voices, scenes drawn from seeds, and a printer of plain tables.

Seeds below 1000 were used while developing; the tables draw from `TABLE_SEEDS`, which nothing was tuned on.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.audio import read_audio, resample
from unmix.render.compose import RenderedScene, render_scene
from unmix.render.spec import ArraySpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.scene import Scene, Talker

Floats = NDArray[np.float64]

SPEECH = Path(__file__).parent.parent / "tests" / "data" / "speech"
VOICES = ("novel-reader", "card-reader", "robot-commands", "arctic-a0007", "arctic-a0009", "digits")
DEVELOPMENT_SEEDS = range(1, 1000)
TABLE_SEEDS = range(4001, 4100)


def circle(microphones: int, radius_m: float, *, centre: bool) -> Array:
    """A ring of microphones, with the reference in its middle or the first of the ring."""
    angle = 2.0 * np.pi * np.arange(microphones) / microphones
    ring = np.stack([radius_m * np.cos(angle), radius_m * np.sin(angle), np.zeros(microphones)], axis=1)
    return Array.from_positions(np.vstack([np.zeros((1, 3)), ring]) if centre else ring)


def line(microphones: int, length_m: float) -> Array:
    """A straight line along y, the reference in its middle."""
    positions = np.zeros((microphones, 3))
    positions[:, 1] = np.linspace(-0.5, 0.5, microphones) * length_m
    return Array.from_positions(positions, reference_channel=microphones // 2)


PUCK = circle(6, 0.04, centre=True)


@dataclass(frozen=True)
class Case:
    """A scene to be drawn: `t20_s` None means no room."""

    label: str
    azimuths_deg: tuple[float, ...]
    voices: tuple[str, ...]
    array: Array = PUCK
    t20_s: float | None = None
    size_m: tuple[float, float, float] = (6.0, 4.5, 2.8)
    distance_m: float = 1.2
    seconds: float = 10.0
    sample_rate: int = 16000
    snr_db: float = 30.0
    seed: int = 4001

    def render(self) -> RenderedScene:
        """The scene with its truth."""
        clips = {f"{v}-{i}": clip(v, self.seconds, self.sample_rate) for i, v in enumerate(self.voices)}
        spec = RenderSpec(
            duration_s=self.seconds,
            sample_rate=self.sample_rate,
            seed=self.seed,
            room=None if self.t20_s is None else RoomSpec(size_m=list(self.size_m), t20_s=self.t20_s),
            array=ArraySpec(
                positions_m=self.array.positions_m.tolist(), reference_channel=self.array.reference_channel
            ),
            talker=[
                TalkerSpec(name=name, azimuth_deg=float(azimuth), distance_m=self.distance_m)
                for name, azimuth in zip(clips, self.azimuths_deg, strict=True)
            ],
            noise=NoiseSpec(sensor_snr_db=self.snr_db),
        )
        return render_scene(spec, clips=clips)

    def scene(self, rendered: RenderedScene, *, bearings: bool = True) -> Scene:
        """What a job is given: the mixture, the array and the bearings."""
        talkers = [
            Talker(name, float(np.radians(azimuth)), 0.0, self.distance_m)
            for name, azimuth in zip(rendered.names, self.azimuths_deg, strict=True)
        ]
        return Scene.from_arrays(
            rendered.mixture, rendered.array, talkers if bearings else (), sample_rate=self.sample_rate
        )


def clip(voice: str, seconds: float, sample_rate: int) -> Floats:
    """Real speech, repeated to the length asked for."""
    signal, rate = read_audio(SPEECH / f"{voice}.flac")
    signal = resample(signal, rate, sample_rate)[0]
    return np.asarray(np.resize(signal, round(seconds * sample_rate)))


def drawn_cases(
    label: str,
    talkers: int,
    t20_s: float | None,
    seeds: Sequence[int],
    *,
    array: Array = PUCK,
    least_apart_deg: float = 40.0,
    seconds: float = 15.0,
    sample_rate: int = 16000,
) -> Iterator[Case]:
    """Random seats, voices and rooms (5 to 7 m long, talkers at 1.2 to 1.4 m), one case per seed."""
    for seed in seeds:
        rng = np.random.default_rng([seed, talkers])
        while True:
            azimuths = np.sort(rng.uniform(-180.0, 180.0, talkers))
            gaps = np.diff(np.append(azimuths, azimuths[0] + 360.0))
            if gaps.min() >= least_apart_deg:
                break
        voices = tuple(str(v) for v in rng.choice(VOICES, talkers, replace=False))
        size = (float(rng.uniform(5.0, 7.0)), float(rng.uniform(4.0, 5.5)), float(rng.uniform(2.5, 3.0)))
        yield Case(
            label, tuple(float(round(a, 1)) for a in azimuths), voices, array, t20_s, size,
            float(rng.uniform(1.2, 1.4)), seconds, sample_rate, 30.0, seed,
        )  # fmt: skip


def timed(call: Callable[[], Any], *, repeats: int = 3) -> tuple[float, Any]:
    """Least wall time of several calls, and the last result."""
    best, result = np.inf, None
    for _ in range(repeats):
        began = time.perf_counter()
        result = call()
        best = min(best, time.perf_counter() - began)
    return float(best), result


def print_table(title: str, columns: Sequence[str], rows: Sequence[Sequence[object]]) -> None:
    """A Markdown table, so that what is printed can stand in README.md."""
    print(f"\n### {title}\n")
    print("| " + " | ".join(columns) + " |")
    print("|" + "---|" * len(columns))
    for row in rows:
        print("| " + " | ".join(_cell(value) for value in row) + " |", flush=True)


def _cell(value: object) -> str:
    if value is None:
        return "-"
    return (
        f"{value:.2f}"
        if isinstance(value, float) and abs(value) < 2
        else (f"{value:.1f}" if isinstance(value, float) else str(value))
    )
