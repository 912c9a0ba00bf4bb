"""Tables for people: results in, rich tables out. Short, numbers aligned, units in the heads."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

from rich import box
from rich.table import Table

from unmix.metrics.grades import Grades, TalkerGrade

if TYPE_CHECKING:
    from unmix.jobs.grade_real import AloneGrades, CloseGrades
    from unmix.jobs.solution import Solution

__all__ = [
    "alone_table",
    "before_and_after",
    "bleed_table",
    "decibels",
    "number",
    "plain_table",
    "solution_table",
    "speech_table",
    "undefined_lines",
]

UNDEFINED = "–"
_FIGURES = (
    ("SDR\ndB", "sdr_db", 1),
    ("SIR\ndB", "sir_db", 1),
    ("STOI\n0 to 1", "stoi", 2),
    ("SAR\ndB", "sar_db", 1),
    ("SI-SDR\ndB", "si_sdr_db", 1),
    ("ESTOI\n0 to 1", "estoi", 2),
)
_BRIEF = 3


def plain_table(columns: Sequence[tuple[str, str]], rows: Sequence[Sequence[str]], *, title: str = "") -> Table:
    """A table from texts; each column is a head and how it is set: "left" or "right"."""
    table = Table(box=box.SIMPLE_HEAD, title=title or None, title_justify="left", title_style="bold", pad_edge=False)
    for index, (head, side) in enumerate(columns):
        # Names and numbers stay whole; what is folded is prose.
        whole = index == 0 or side == "right"
        table.add_column(head, justify="right" if side == "right" else "left", no_wrap=whole, overflow="fold")
    for row in rows:
        table.add_row(*row)
    return table


def solution_table(solution: Solution) -> Table:
    """Who was separated, from where, how loud, and into which file; dB SPL where the array's level is calibrated."""
    full = solution.details.get("full_scale_db_spl")
    rows = [
        [
            talker.name,
            "moving" if talker.moving else number(talker.azimuth_deg, 1),
            number(talker.elevation_deg, 1),
            "far" if talker.distance_m is None else number(talker.distance_m, 2),
            number(decibels(talker.peak * talker.scale), 1),
            *([] if full is None else [number(_sound_pressure(talker.peak, full), 1)]),
            talker.file or "",
        ]
        for talker in solution.talkers
    ]
    columns = [
        ("talker", "left"),
        ("azimuth\ndeg", "right"),
        ("elevation\ndeg", "right"),
        ("distance\nm", "right"),
        ("peak\ndB FS", "right"),
        *([] if full is None else [("peak\ndB SPL", "right")]),
        ("file", "left"),
    ]
    return plain_table(columns, rows)


def before_and_after(grades: Grades, *, brief: bool = False) -> Table:
    """Each talker in the unprocessed microphone, in the separated signal, and the gain.

    brief  only the figures that a newcomer needs
    """
    figures = _FIGURES[:_BRIEF] if brief else _FIGURES
    # Read off by projection, leakage is a hint at best in rooms: it stays in the JSON, under `leakage_by`.
    leakage = not brief and grades.leakage_by == "filters"
    columns = [("talker", "left"), ("", "left"), *[(head, "right") for head, _, _ in figures]]
    table = plain_table([*columns, ("leakage\ndB", "right")] if leakage else columns, [])
    for talker in grades.talkers:
        for label, part in (("before", talker.unprocessed), ("after", talker), ("gain", talker.gain)):
            gain = label == "gain"
            cells = [number(getattr(part, key), digits, signed=gain) for _, key, digits in figures]
            if leakage:
                cells.append(number(_worst_leakage(talker), 1) if label == "after" else "")
            name = talker.name if label == "before" else ""
            table.add_row(name, label, *cells, style="bold" if gain else None, end_section=gain)
    return table


_SPEECH = (
    ("equivalent\nSNR, dB", "equivalent_snr_db", 1),
    ("SIR, SII-\nweighted, dB", "sii_sir_db", 1),
    ("bits/s", "bits_per_s", 0),
    ("words, %\nIEEE", "words_ieee_percent", 0),
    ("words, %\nDantale II", "words_dantale_percent", 0),
)


def speech_table(grades: Grades) -> Table:
    """How well each talker is understood, before and after, beside STOI; the gains over segments of 3 s last."""
    heads = [*(head for head, _, _ in _SPEECH), "STOI over 3 s\nmean [95 % interval]", "segments\n(silent)"]
    table = plain_table([("talker", "left"), ("", "left"), *[(head, "right") for head in heads]], [])
    for talker in grades.talkers:
        if talker.speech is None:
            continue
        for label, part in (
            ("before", talker.speech.before),
            ("after", talker.speech.after),
            ("gain", talker.speech.gain),
        ):
            gain = label == "gain"
            cells = [number(getattr(part, key), digits, signed=gain) for _, key, digits in _SPEECH]
            segments = talker.speech.segments if gain else None
            if segments is not None:
                mean, low, high = (
                    number(v, 2, signed=True) for v in (segments.stoi.mean, segments.stoi.low, segments.stoi.high)
                )
                cells += [f"{mean} [{low} {high}]", f"{segments.used} ({segments.silent})"]
            name = talker.name if label == "before" else ""
            table.add_row(name, label, *cells, style="bold" if gain else None, end_section=gain)
    return table


def alone_table(grades: AloneGrades) -> Table:
    """How loud each talker comes out of the others' files where nobody else speaks."""
    columns = [("talker", "left"), ("in the file of", "left"), ("leakage, dB\nmean [95 % interval]", "right")]
    columns += [("alone\ns", "right"), ("hidden by noise\nof pieces", "right")]
    rows = []
    for item in grades.leakage:
        mean, low, high = (number(v, 1) for v in (item.interval.mean, item.interval.low, item.interval.high))
        hidden = f"{item.at_floor} of {item.interval.scenes}"
        rows.append([item.source, item.target, f"{mean} [{low} {high}]", number(item.seconds, 1), hidden])
    return plain_table(columns, rows)


def bleed_table(grades: CloseGrades) -> Table:
    """The bleed in each close microphone, before and after it was taken out, and what it leaves in the figures."""
    columns = [("talker", "left"), ("in the close microphone of", "left"), ("bleed\ndB", "right")]
    columns += [("left\ndB", "right"), ("alone\ns", "right"), ("SDR\n+- dB", "right"), ("SIR\n+- dB", "right")]
    rows = []
    for item in grades.bleed:
        unsure = grades.uncertainty[item.target]
        rows.append(
            [item.source, item.target, number(item.before_db, 1), number(item.left_db, 1), number(item.seconds, 1)]
            + [number(unsure[figure], 1) for figure in ("sdr_db", "sir_db")]
        )
    return plain_table(columns, rows)


def undefined_lines(grades: Grades) -> list[str]:
    """Why figures are missing, one line for each talker and reason."""
    lines = []
    for talker in grades.talkers:
        reasons: dict[str, list[str]] = {}
        further = {} if talker.speech is None else talker.speech.after.undefined
        for figure, why in {**talker.undefined, **further}.items():
            reasons.setdefault(why, []).append(figure)
        lines += [f"{talker.name}: no {', '.join(figures)}: {why}" for why, figures in reasons.items()]
    return lines


def number(value: float | None, digits: int, *, signed: bool = False) -> str:
    """A figure as text; a dash when there is none."""
    if value is None or not math.isfinite(value):
        return UNDEFINED
    return f"{round(value, digits) + 0.0:{'+' if signed else ''}.{digits}f}"  # no "-0.0"


def _sound_pressure(peak: float, full_scale_db_spl: float) -> float | None:
    """Peak level re 20 uPa: a full-scale sine of `full_scale_db_spl` peaks 3 dB above its level."""
    level = decibels(peak)
    return None if level is None else level + full_scale_db_spl + 10.0 * math.log10(2.0)


def decibels(magnitude: float) -> float | None:
    """Level of a magnitude relative to full scale; None for silence."""
    return 20.0 * math.log10(magnitude) if magnitude > 0.0 else None


def _worst_leakage(talker: TalkerGrade) -> float | None:
    known = [value for value in (talker.leakage_db or {}).values() if value is not None]
    return max(known, default=None)
