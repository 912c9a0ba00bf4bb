"""What `calibrate` hands over: the array with its corrections, how sure they are, and what else was found."""

from __future__ import annotations

import html
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.sofa import Responses

__all__ = ["Calibration", "ClockReport", "MeasuredTake", "TakeReport"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class TakeReport:
    """One take: its bearing, and how well one source explains it. `misfit` is near 1 without reflections."""

    name: str
    azimuth_deg: float
    elevation_deg: float
    distance_m: float | None
    duration_s: float
    snr_db: float
    bandwidth_hz: float
    misfit: float


@dataclass(frozen=True)
class ClockReport:
    """A channel whose clock ran by itself: delay in the middle of the recording and drift, put right."""

    channel: int
    delay_s: float
    drift_ppm: float
    drift_std_ppm: float


@dataclass(frozen=True)
class MeasuredTake:
    """Room figures of one sweep take at the reference microphone; None where undefined, with the reason."""

    name: str
    azimuth_deg: float
    elevation_deg: float
    t20_s: float | None
    drr_db: float | None
    undefined: dict[str, str]


@dataclass(frozen=True)
class Calibration:
    """An array with its corrections (`array.save` writes it), from takes or from diffuse noise.

    method      "takes", "diffuse noise", "tone" or "sweep"
    before      the array as it was
    axes        coordinates that were fitted
    scatter     how far takes disagree: mean square over their variances; None with one take
    clocks      channels that were put onto one clock
    tone_hz     of the level calibration, None without one
    responses   from sweeps
    """

    array: Array
    before: Array
    method: str
    axes: str = ""
    scatter: float | None = None
    takes: tuple[TakeReport, ...] = ()
    clocks: tuple[ClockReport, ...] = ()
    tone_hz: float | None = None
    responses: Responses | None = field(default=None, repr=False)
    measured: tuple[MeasuredTake, ...] = ()
    misfit: float | None = None
    notes: tuple[str, ...] = ()
    wall_time_s: float = 0.0

    @property
    def moved_m(self) -> Floats:
        """How far each microphone was moved: (channels,)."""
        return np.asarray(np.linalg.norm(self.array.positions_m - self.before.positions_m, axis=1))

    def save(self, path: str | Path, *, overwrite: bool = False) -> None:
        """Write the array file. Raises FileError when it exists and `overwrite` is not given."""
        self.array.save(path, overwrite=overwrite)

    def to_dict(self) -> dict[str, Any]:
        """Plain values: what `unmix calibrate --json` prints."""
        a = self.array

        def column(values: Any) -> list[Any] | None:
            return None if values is None else np.asarray(values).tolist()

        channels = {
            "gain_db": column(a.gain_db),
            "gain_std_db": column(a.gain_std_db),
            "delay_s": column(a.delay_s),
            "delay_std_s": column(a.delay_std_s),
            "polarity": column(a.polarity),
            "positions_m": column(a.positions_m),
            "position_std_m": column(a.position_std_m),
            "moved_m": column(self.moved_m),
        }
        return {
            "method": self.method,
            "reference_channel": a.reference_channel,
            "channels": channels,
            "axes": self.axes,
            "scatter": self.scatter,
            "misfit": self.misfit,
            "full_scale_db_spl": a.full_scale_db_spl,
            "tone_hz": self.tone_hz,
            "takes": [vars(t) for t in self.takes],
            "clocks": [vars(c) for c in self.clocks],
            "responses": [vars(m) for m in self.measured],
            "notes": list(self.notes),
            "wall_time_s": round(self.wall_time_s, 3),
        }

    def _repr_html_(self) -> str:
        a = self.array
        rows = "".join(
            f"<tr><td>{m}</td><td>{a.gain_db[m]:+.2f}</td><td>{1e6 * a.delay_s[m]:+.1f}</td>"
            f"<td>{'turned' if a.polarity[m] < 0 else ''}</td><td>{1e3 * self.moved_m[m]:.2f}</td></tr>"
            for m in range(a.channels)
        )
        notes = "".join(f"<p>{html.escape(note)}</p>" for note in self.notes)
        head = "<tr><th>channel</th><th>gain, dB</th><th>delay, us</th><th>polarity</th><th>moved, mm</th></tr>"
        return f"<table>{head}{rows}</table>{notes}"
