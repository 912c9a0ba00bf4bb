"""Grades: the figures for each talker, before and after, and how they show themselves."""

from __future__ import annotations

import html
from dataclasses import dataclass, field, fields
from typing import Any

from unmix.metrics.speech_figures import SpeechGrade

__all__ = ["FIGURES", "Figures", "Grades", "TalkerGrade"]

FIGURES = ("sdr_db", "sir_db", "sar_db", "si_sdr_db", "stoi", "estoi")


@dataclass(frozen=True, kw_only=True)
class Figures:
    """The figures of one signal against one talker's reference; None where undefined, with the reason in `undefined`.

    sdr_db, sir_db, sar_db  BSS Eval: signal to distortion, to interference, to artifacts
    si_sdr_db               scale-invariant signal-to-distortion ratio
    stoi, estoi             short-time objective intelligibility and its extended form
    """

    sdr_db: float | None = None
    sir_db: float | None = None
    sar_db: float | None = None
    si_sdr_db: float | None = None
    stoi: float | None = None
    estoi: float | None = None
    undefined: dict[str, str] = field(default_factory=dict)

    @classmethod
    def none_because(cls, reason: str) -> Figures:
        """All figures undefined for one reason."""
        return cls(undefined=dict.fromkeys(FIGURES, reason))

    def figures(self) -> dict[str, float | None]:
        """The figures by name."""
        return {name: getattr(self, name) for name in FIGURES}

    def gain_over(self, before: Figures) -> Figures:
        """Each figure less the one `before`."""
        gains: dict[str, float | None] = {}
        undefined: dict[str, str] = {}
        for name in FIGURES:
            after, first = getattr(self, name), getattr(before, name)
            gains[name] = None if after is None or first is None else after - first
            if gains[name] is None:
                undefined[name] = self.undefined.get(name) or before.undefined.get(name, "")
        return Figures(**gains, undefined=undefined)


@dataclass(frozen=True, kw_only=True)
class TalkerGrade(Figures):
    """The figures of one talker's signal, of the microphones, and the gain.

    name             the talker
    estimate         index of the signal graded; None when no signal was matched
    offset_s         by how much the signal is behind the reference as given
    drift_ppm        how much faster that grows than time does
    unprocessed      the same figures for the reference microphone
    unprocessed_offset_s  by how much that microphone is behind the reference
    gain             figures less those of the unprocessed microphone
    best_microphone  the figures of the microphone with the highest SDR; None without the recording
    best_channel     which one that is
    gain_over_best   figures less those of the best microphone
    leakage_db       each other talker's leakage into this signal, by name; None without images
    speech           figures of understanding beside STOI and ESTOI; None when they were not asked for
    """

    name: str
    estimate: int | None = None
    offset_s: float | None = None
    drift_ppm: float | None = None
    unprocessed: Figures
    unprocessed_offset_s: float | None = None
    gain: Figures
    best_microphone: Figures | None = None
    best_channel: int | None = None
    gain_over_best: Figures | None = None
    leakage_db: dict[str, float | None] | None = None
    speech: SpeechGrade | None = None

    @classmethod
    def from_dict(cls, tree: dict[str, Any]) -> TalkerGrade:
        """What `to_dict` made, back again. Raises KeyError or TypeError when it is not."""
        undefined: dict[str, str] = tree["undefined"]

        def part(key: str) -> Figures:
            reasons = {
                name.removeprefix(f"{key}."): why for name, why in undefined.items() if name.startswith(f"{key}.")
            }
            return Figures(**{name: tree[key][name] for name in FIGURES}, undefined=reasons)

        parts = ("unprocessed.", "gain.", "best_microphone.", "gain_over_best_microphone.")
        best = tree["best_microphone"]
        return cls(
            **{name: tree[name] for name in ("name", "estimate", "offset_s", "drift_ppm", "leakage_db", *FIGURES)},
            undefined={name: why for name, why in undefined.items() if not name.startswith(parts)},
            unprocessed=part("unprocessed"),
            unprocessed_offset_s=tree["unprocessed"]["offset_s"],
            gain=part("gain"),
            best_microphone=None if best is None else part("best_microphone"),
            best_channel=None if best is None else best["channel"],
            gain_over_best=None if best is None else part("gain_over_best_microphone"),
            speech=None if tree["speech"] is None else SpeechGrade.from_dict(tree["speech"]),
        )

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON; reasons of the nested figures stand under `undefined` as ``part.figure``."""
        undefined = dict(self.undefined)
        parts = {
            "unprocessed": self.unprocessed,
            "gain": self.gain,
            "best_microphone": self.best_microphone,
            "gain_over_best_microphone": self.gain_over_best,
        }
        tree: dict[str, Any] = {
            "name": self.name,
            "estimate": self.estimate,
            **self.figures(),
            "offset_s": self.offset_s,
            "drift_ppm": self.drift_ppm,
        }
        for key, part in parts.items():
            tree[key] = None if part is None else part.figures()
            if part is not None:
                undefined.update({f"{key}.{name}": why for name, why in part.undefined.items()})
        tree["unprocessed"]["offset_s"] = self.unprocessed_offset_s
        if tree["best_microphone"] is not None:
            tree["best_microphone"]["channel"] = self.best_channel
        tree["leakage_db"] = self.leakage_db
        tree["speech"] = None if self.speech is None else self.speech.to_dict()
        tree["undefined"] = undefined
        return tree


@dataclass(frozen=True, kw_only=True)
class Grades:
    """The grades of all talkers of a scene.

    talkers        in the order of the references
    against        kind of reference: early, image, dry, or plain
    sample_rate    hertz
    filter_length  taps that BSS Eval allows the reference
    guard_samples  by how much every signal, and every microphone, was held back behind its reference
    span_s         stretch of the recording that was graded
    leakage_by     "filters" or "projection"; None without images
    cross_check_db largest difference to mir_eval; None when not asked for or not possible, `warnings` says why
    warnings       what the user should know
    """

    talkers: tuple[TalkerGrade, ...]
    against: str
    sample_rate: int
    filter_length: int
    guard_samples: int
    span_s: tuple[float, float]
    leakage_by: str | None = None
    cross_check_db: float | None = None
    warnings: tuple[str, ...] = ()

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON; undefined figures are None."""
        tree = {f.name: getattr(self, f.name) for f in fields(self)}
        tree["talkers"] = [talker.to_dict() for talker in self.talkers]
        tree["span_s"] = list(self.span_s)
        tree["warnings"] = list(self.warnings)
        return tree

    @classmethod
    def from_dict(cls, tree: dict[str, Any]) -> Grades:
        """What `to_dict` made, back again. Raises KeyError or TypeError when it is not."""
        plain = {f.name: tree[f.name] for f in fields(cls)}
        talkers = tuple(TalkerGrade.from_dict(talker) for talker in tree["talkers"])
        start_s, stop_s = tree["span_s"]
        return cls(**plain | {"talkers": talkers, "span_s": (start_s, stop_s), "warnings": tuple(tree["warnings"])})

    def _repr_html_(self) -> str:
        columns = (("sdr_db", "SDR / dB"), ("sir_db", "SIR / dB"), ("stoi", "STOI"))
        head = "".join(f"<th>{title} before</th><th>after</th><th>gain</th>" for _, title in columns)
        rows = []
        for talker in self.talkers:
            cells = [f"<td>{html.escape(talker.name)}</td>"]
            for name, _ in columns:
                digits = 2 if name == "stoi" else 1
                for part in (talker.unprocessed, talker, talker.gain):
                    value, why = getattr(part, name), part.undefined.get(name, "")
                    cells.append(
                        f'<td title="{html.escape(why)}">–</td>' if value is None else f"<td>{value:.{digits}f}</td>"
                    )
            rows.append(f"<tr>{''.join(cells)}</tr>")
        notes = "".join(f"<p>{html.escape(note)}</p>" for note in self.warnings)
        return f"<table><thead><tr><th>talker</th>{head}</tr></thead><tbody>{''.join(rows)}</tbody></table>{notes}"
