"""What grading without clean references says, as sentences and tables: leakage, and the bleed of close microphones."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from unmix.report.words import Verdict, figure_text

__all__ = ["leakage_verdicts", "real_tables"]

Table = dict[str, Any]


def leakage_verdicts(names: Sequence[str], real: dict[str, Any]) -> list[Verdict]:
    """How loud each talker's file is while only somebody else speaks; `real` as of `AloneGrades.to_dict`."""
    verdicts = []
    for name in names:
        means = {i["source"]: i["interval"]["mean"] for i in real["leakage"] if i["target"] == name}
        known = {source: mean for source, mean in means.items() if mean is not None}
        if not known:
            verdicts.append(Verdict(name, "unknown", "cannot be judged", "Nobody else is ever alone for long enough."))
            continue
        worst = max(known, key=lambda source: known[source])
        below = figure_text(-known[worst], 0)
        sentence = (
            f"{worst}, speaking alone, comes out of {name}\u2019s file {below} dB below the own file. What leaks while "
            "several speak this cannot say."
        )
        verdicts.append(Verdict(name, "unknown", "leakage measured", sentence))
    return verdicts


def real_tables(real: dict[str, Any] | None) -> dict[str, Any] | None:
    """Table and claims; None where clean references were compared with."""
    if real is None:
        return None
    table = _leakage(real) if "leakage" in real and "alone_s" in real else _bleed(real)
    where = "as the scene states them" if real["stretches"] == "given" else "found in the recording"
    return table | {"claims": [*real["claims"], f"Stretches in which talkers are alone: {where}."]}


def _leakage(real: dict[str, Any]) -> Table:
    rows = []
    for item in real["leakage"]:
        interval = item["interval"]
        mean, low, high = (figure_text(interval[key], 1) for key in ("mean", "low", "high"))
        pieces = f"{item['at_floor']} of {interval['scenes']}"
        rows.append([item["source"], item["target"], f"{mean} [{low} {high}]", figure_text(item["seconds"], 1), pieces])
    heads = [("talker", ""), ("in the file of", ""), ("leakage", "dB, mean [95 % interval]"), ("alone", "s")]
    noise = "taken off" if real["noise_taken_off"] else "counted as leakage"
    return {
        "title": "Leakage where one talker is alone",
        "caption": f"In dB of the level in the own file; noise {noise}.",
        "heads": [*heads, ("hidden by noise", "of pieces")],
        "rows": rows,
    }


def _bleed(real: dict[str, Any]) -> Table:
    rows = []
    for item in real["bleed"]:
        unsure = real["uncertainty"][item["target"]]
        figures = [item["before_db"], item["left_db"], item["seconds"], unsure["sdr_db"], unsure["sir_db"]]
        rows.append([item["source"], item["target"], *(figure_text(value, 1) for value in figures)])
    return {
        "title": "Bleed of the close microphones",
        "caption": "Where a talker is alone, before and after it was taken out; what it leaves open in the figures.",
        "heads": [
            ("talker", ""), ("in the microphone of", ""), ("bleed", "dB"), ("left", "dB"), ("alone", "s"),
            ("SDR", "\u00b1 dB"), ("SIR", "\u00b1 dB"),
        ],
        "rows": rows,
    }  # fmt: skip
