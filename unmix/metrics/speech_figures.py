"""What figures of understanding a talker's grade holds beside STOI and ESTOI; computed in `unmix.metrics.speech`."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from unmix.metrics.segments import SegmentGains

__all__ = ["SPEECH_FIGURES", "SpeechFigures", "SpeechGrade"]

SPEECH_FIGURES = ("words_ieee_percent", "words_dantale_percent", "equivalent_snr_db", "sii_sir_db", "bits_per_s")


@dataclass(frozen=True, kw_only=True)
class SpeechFigures:
    """Figures of understanding of one signal; None where undefined, with the reason in `undefined`.

    words_ieee_percent, words_dantale_percent  words correct, by the two published mappings from STOI
    equivalent_snr_db  talker over the others in a mixture of the references with the same STOI
    sii_sir_db         signal-to-interference ratio weighted by the SII's band importances
    bits_per_s         speech intelligibility in bits, Gaussian form
    """

    words_ieee_percent: float | None = None
    words_dantale_percent: float | None = None
    equivalent_snr_db: float | None = None
    sii_sir_db: float | None = None
    bits_per_s: float | None = None
    undefined: dict[str, str] = field(default_factory=dict)

    @classmethod
    def none_because(cls, reason: str) -> SpeechFigures:
        """All figures undefined for one reason."""
        return cls(undefined=dict.fromkeys(SPEECH_FIGURES, reason))

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return {name: getattr(self, name) for name in SPEECH_FIGURES} | {"undefined": dict(self.undefined)}

    def gain_over(self, before: SpeechFigures) -> SpeechFigures:
        """Each figure less the one `before`."""
        gains: dict[str, float | None] = {}
        undefined: dict[str, str] = {}
        for name in SPEECH_FIGURES:
            after, first = getattr(self, name), getattr(before, name)
            gains[name] = None if after is None or first is None else after - first
            if gains[name] is None:
                undefined[name] = self.undefined.get(name) or before.undefined.get(name, "")
        return SpeechFigures(**gains, undefined=undefined)


@dataclass(frozen=True, kw_only=True)
class SpeechGrade:
    """One talker's figures of understanding, after, before and the gain.

    speech_s  seconds of speech that the bits rest on, 20 or more being recommended; 0 where these are undefined
    segments  gains over segments of 3 s; None without the recording
    """

    after: SpeechFigures
    before: SpeechFigures
    gain: SpeechFigures
    speech_s: float = 0.0
    segments: SegmentGains | None = None

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return {
            **self.after.to_dict(),
            "unprocessed": self.before.to_dict(),
            "gain": self.gain.to_dict(),
            "speech_s": self.speech_s,
            "segments": None if self.segments is None else self.segments.to_dict(),
        }

    @classmethod
    def from_dict(cls, tree: dict[str, Any]) -> SpeechGrade:
        """What `to_dict` made, back again. Raises KeyError or TypeError when it is not."""
        names = (*SPEECH_FIGURES, "undefined")
        after, before, gain = (
            SpeechFigures(**{name: part[name] for name in names}) for part in (tree, tree["unprocessed"], tree["gain"])
        )
        segments = None if tree["segments"] is None else SegmentGains.from_dict(tree["segments"])
        return cls(after=after, before=before, gain=gain, speech_s=tree["speech_s"], segments=segments)
