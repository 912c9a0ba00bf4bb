"""What `solve` hands over: the talkers' signals, and a record of what was done."""

from __future__ import annotations

import html
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from unmix.audio import AudioWriter, Recording
from unmix.files import safe_names
from unmix.room.stage import RoomReport
from unmix.scene import Scene
from unmix.solvers.assemble import Assembly
from unmix.variant import Variant

__all__ = ["Memory", "Sink", "Solution", "SolvedTalker", "TalkerFiles", "describe"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class SolvedTalker:
    """One talker of a solution.

    file     the signal's file in the folder, None when it stayed in memory
    peak     largest magnitude before any scaling
    scale    what the signal was multiplied with so that it stays within full scale; 1 when it was left alone
    """

    name: str
    file: str | None
    azimuth_deg: float | None
    elevation_deg: float
    distance_m: float | None
    peak: float
    scale: float
    moving: bool = False


@dataclass(frozen=True)
class Solution:
    """Talker signals and what was done to get them.

    signals           (talkers, samples), as received at the reference microphone; None when written to files
    method            how the blocks were solved
    fallbacks         what was done instead of what was asked for, and why
    warnings          everything the user should know, fallbacks included
    conditioning      lowest usable frequency, condition and noise gain, in thirds of an octave too; None for baselines
    margin_s          time from the ends within which the answer differs from one long solve
    latency_ms        algorithmic latency: the future that an output needs
    real_time_factor  wall time over duration
    scene             the scene's file, as seen from the folder with the signals; None when they stayed in memory
    """

    talkers: tuple[SolvedTalker, ...]
    sample_rate: int
    samples: int
    variant: Variant
    method: str
    signals: Floats | None = None
    fallbacks: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    conditioning: dict[str, Any] | None = None
    margin_s: float = 0.0
    latency_ms: float = 0.0
    wall_time_s: float = 0.0
    real_time_factor: float = 0.0
    details: dict[str, Any] = field(default_factory=dict)
    scene: str | None = None

    @property
    def names(self) -> tuple[str, ...]:
        """Talker names in the order of the signals."""
        return tuple(t.name for t in self.talkers)

    def to_dict(self) -> dict[str, Any]:
        """The content of `solution.json`: plain values only."""
        return {
            "talkers": [
                {
                    "name": t.name,
                    "file": t.file,
                    "azimuth_deg": t.azimuth_deg,
                    "elevation_deg": t.elevation_deg,
                    "distance_m": t.distance_m,
                    "moving": t.moving,
                    "peak": t.peak,
                    "scale": t.scale,
                }
                for t in self.talkers
            ],
            "scene": self.scene,
            "variant": self.variant.name,
            "settings": self.variant.to_dict(),
            "method": self.method,
            "sample_rate": self.sample_rate,
            "samples": self.samples,
            "fallbacks": list(self.fallbacks),
            "warnings": list(self.warnings),
            "conditioning": self.conditioning,
            "margin_s": self.margin_s,
            "latency_ms": self.latency_ms,
            "wall_time_s": self.wall_time_s,
            "real_time_factor": self.real_time_factor,
            "details": self.details,
        }

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>{html.escape(t.name)}</td><td>{'moving' if t.moving else _degrees(t.azimuth_deg)}</td>"
            f"<td>{20 * np.log10(max(t.peak * t.scale, 1e-10)):.1f}</td></tr>"
            for t in self.talkers
        )
        seconds = self.samples / self.sample_rate
        return (
            "<table><thead><tr><th>talker</th><th>azimuth, deg</th><th>peak, dB re full scale</th></tr></thead>"
            f"<tbody>{rows}</tbody></table><p>{html.escape(self.variant.name)}: {seconds:.1f} s at "
            f"{self.sample_rate} Hz in {self.wall_time_s:.1f} s</p>"
        )


def _degrees(value: float | None) -> str:
    return "" if value is None else f"{value:.1f}"


class Sink(Protocol):
    """Where talkers go, chunk by chunk."""

    def open(self, names: Sequence[str], sample_rate: int, samples: int) -> None:
        """Get ready for so many talkers."""

    def write(self, talkers: Floats) -> None:
        """Take (talkers, n) samples."""

    def close(self) -> Stored:
        """Finish, and say what is where."""


@dataclass(frozen=True)
class Stored:
    """Where the signals ended up: in memory or in files, with their peaks and the scales applied."""

    signals: Floats | None
    files: tuple[str | None, ...]
    peaks: tuple[float, ...]
    scales: tuple[float, ...]


class Memory:
    """Keeps the signals as one array; nothing is scaled."""

    def open(self, names: Sequence[str], sample_rate: int, samples: int) -> None:
        """Get ready for so many talkers."""
        self._signals = np.zeros((len(names), samples))
        self._at = 0

    def write(self, talkers: Floats) -> None:
        """Take (talkers, n) samples."""
        self._signals[:, self._at : self._at + talkers.shape[1]] = talkers
        self._at += talkers.shape[1]

    def close(self) -> Stored:
        """The array."""
        count = len(self._signals)
        peaks = tuple(float(p) for p in np.abs(self._signals).max(axis=1))
        return Stored(self._signals, (None,) * count, peaks, (1.0,) * count)


class TalkerFiles:
    """Writes one 32-bit float WAV file per talker; a signal beyond full scale is scaled down whole."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder

    def open(self, names: Sequence[str], sample_rate: int, samples: int) -> None:
        """Open one file per talker."""
        self._rate, self._samples = sample_rate, samples
        self._files = [f"{name}.wav" for name in safe_names(names)]
        self._writers = [AudioWriter(self._folder / f, sample_rate, 1, expect=samples) for f in self._files]

    def write(self, talkers: Floats) -> None:
        """Append (talkers, n) samples."""
        for writer, signal in zip(self._writers, talkers, strict=True):
            writer.write(signal[None, :])

    def close(self) -> Stored:
        """Close the files; rewrite those that go beyond full scale."""
        scales = []
        for file, writer in zip(self._files, self._writers, strict=True):
            writer.close()
            scale = 1.0 if writer.peak <= 1.0 else 1.0 / writer.peak
            if scale < 1.0:
                self._rescale(self._folder / file, scale)
            scales.append(scale)
        return Stored(None, tuple(self._files), tuple(w.peak for w in self._writers), tuple(scales))

    def _rescale(self, path: Path, scale: float) -> None:
        loud = path.with_name(f".loud-{path.name}")
        path.rename(loud)
        with AudioWriter(path, self._rate, 1, expect=self._samples) as writer:
            for chunk in Recording.open([loud]).chunks():
                writer.write(chunk * scale)
        loud.unlink()


def describe(
    scene: Scene,
    variant: Variant,
    assembly: Assembly,
    room: RoomReport | None,
    stored: Stored,
    findings: Sequence[str],
    wall_time_s: float,
) -> Solution:
    """Put together what was done."""
    rate = scene.sample_rate
    talkers = tuple(
        SolvedTalker(
            name=t.name,
            file=file,
            azimuth_deg=None if t.azimuth is None else float(np.degrees(t.azimuth)),
            elevation_deg=float(np.degrees(t.elevation)),
            distance_m=t.distance_m,
            peak=peak,
            scale=scale,
            moving=t.track is not None,
        )
        for t, file, peak, scale in zip(scene.talkers, stored.files, stored.peaks, stored.scales, strict=True)
    )
    details: dict[str, Any] = dict(assembly.notes)
    if assembly.differentiators is not None:
        d = assembly.differentiators
        details |= {
            "order": d.order,
            "differentiator_half_width": d.half_width,
            "expansion_error_db": d.error_db,
            "expansion_band_hz": d.band_edge * rate / 2,
        }
    if scene.array.full_scale_db_spl is not None:
        details["full_scale_db_spl"] = scene.array.full_scale_db_spl
    if assembly.trusted_hz is not None:
        details["trusted_hz"] = assembly.trusted_hz
    if assembly.bank is not None:
        details["filter_taps"] = int(assembly.bank.taps.shape[-1])
    fallbacks = assembly.fallbacks
    if room is not None:
        details["room"] = room.to_dict()
        # What the model alone would have fallen back to does not matter when the room stage answers.
        fallbacks = room.reasons
    return Solution(
        talkers=talkers,
        sample_rate=rate,
        samples=scene.recording.samples,
        variant=variant,
        method=assembly.method if room is None else "room",
        signals=stored.signals,
        fallbacks=fallbacks,
        # Locating has looked at the same channels before.
        warnings=tuple(dict.fromkeys((*fallbacks, *(room.warnings if room else ()), *findings, *_loudness(talkers)))),
        conditioning=assembly.conditioning.to_dict() if assembly.conditioning else None,
        margin_s=assembly.margin / rate,
        latency_ms=1e3 * assembly.latency_samples / rate if room is None else room.latency_ms,
        wall_time_s=wall_time_s,
        real_time_factor=wall_time_s / scene.recording.duration_s,
        details=details,
    )


def _loudness(talkers: Sequence[SolvedTalker]) -> list[str]:
    return [
        f"{t.name} went {20 * np.log10(t.peak):.1f} dB beyond full scale and was scaled down by as much"
        for t in talkers
        if t.scale < 1.0
    ]
