"""What `check` hands over: findings, each with what, where, how sure and what to do."""

from __future__ import annotations

import html
from dataclasses import dataclass
from typing import Any, Literal

__all__ = ["ChannelFigures", "Checked", "Finding", "Severity", "surely"]

Severity = Literal["unfit", "warning", "note"]


@dataclass(frozen=True)
class Finding:
    """One thing found.

    kind        what it is about, e.g. "clipping"
    severity    "unfit": do not separate before this is put right; "warning": results suffer; "note": worth knowing
    what        the finding, in words
    where       channels, times or bands, in words
    channels    the channels concerned, counted from zero in the array's order
    confidence  0 to 1
    remedy      what to do
    value, unit the figure behind it, where there is one
    """

    kind: str
    severity: Severity
    what: str
    where: str
    confidence: float
    remedy: str
    channels: tuple[int, ...] = ()
    value: float | None = None
    unit: str = ""

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return {**vars(self), "channels": list(self.channels), "confidence": round(self.confidence, 3)}


@dataclass(frozen=True)
class ChannelFigures:
    """One channel's levels: dB relative to full scale, where a full-scale sine is 0 dB; None for silence.

    level_db_spl  sound pressure level, when the array's `full_scale_db_spl` is known
    delay_s, drift_ppm  against the reference channel; None when nothing could be measured
    """

    channel: int
    level_db: float | None
    peak_db: float | None
    noise_db: float | None
    dc: float
    clipped: int
    dropouts: int
    level_db_spl: float | None
    noise_db_spl: float | None
    delay_s: float | None
    drift_ppm: float | None


@dataclass(frozen=True)
class Checked:
    """All findings on a scene, the gravest first, and each channel's figures."""

    title: str
    findings: tuple[Finding, ...]
    channels: tuple[ChannelFigures, ...]
    duration_s: float
    sample_rate: int
    lowest_usable_hz: float | None
    ambiguity_hz: float | None
    separation_deg: float
    wall_time_s: float

    @property
    def fit(self) -> bool:
        """Whether the scene is fit to separate."""
        return all(f.severity != "unfit" for f in self.findings)

    def to_dict(self) -> dict[str, Any]:
        """Plain values: what `unmix check --json` prints."""
        return {
            "fit": self.fit,
            "findings": [f.to_dict() for f in self.findings],
            "channels": [vars(c) for c in self.channels],
            "array": {
                "lowest_usable_hz": self.lowest_usable_hz,
                "ambiguity_hz": self.ambiguity_hz,
                "separation_deg": self.separation_deg,
            },
            "duration_s": self.duration_s,
            "sample_rate": self.sample_rate,
            "wall_time_s": round(self.wall_time_s, 3),
        }

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>{f.severity}</td><td>{html.escape(f.what)}</td><td>{html.escape(f.where)}</td>"
            f"<td>{surely(f.confidence)}</td><td>{html.escape(f.remedy)}</td></tr>"
            for f in self.findings
        )
        verdict = "fit to separate" if self.fit else "not fit to separate"
        head = "<tr><th></th><th>what</th><th>where</th><th>how sure</th><th>what to do</th></tr>"
        return f"<p>{html.escape(self.title)}: {verdict}</p><table>{head}{rows}</table>"


def surely(confidence: float) -> str:
    """A confidence in words."""
    return "certain" if confidence >= 0.97 else "likely" if confidence >= 0.75 else "possible"
