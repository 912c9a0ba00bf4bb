"""The report on one scene: who can be understood now, to see and to hear, and how that came about.

material -> sound and pictures -> verdict -> figures -> what was done -> one file
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from unmix.metrics.grades import FIGURES, Figures, Grades
from unmix.metrics.intervals import Interval
from unmix.metrics.words import CAUTION
from unmix.report.figures import embedded_svg
from unmix.report.health import Health, health_of
from unmix.report.material import SceneMaterial, pseudonyms
from unmix.report.page import PageFile, render_page, versions, write_page
from unmix.report.real import leakage_verdicts, real_tables
from unmix.report.scene_figures import conditioning_figure, scene_figure, verdict_figure
from unmix.report.scene_sound import MICROPHONE, OUTPUT, SceneSound, picture_of, scene_sound, timeline_rows
from unmix.report.spectrogram import RANGE_DB
from unmix.report.words import Verdict, figure_text, talker_verdict, understandable

__all__ = ["REPORT", "SOUND_MB", "UNGRADED", "player_of", "scene_report", "scene_views", "write_scene_report"]

REPORT = "report.html"
SOUND_MB = 5.0
"""Room for the sound, of the six megabytes that a mail attachment should stay below."""

_SPEECH = (
    ("words_ieee_percent", "words", "IEEE, %", 0),
    ("words_dantale_percent", "words", "Dantale II, %", 0),
    ("equivalent_snr_db", "equivalent SNR", "dB", 1),
    ("sii_sir_db", "SIR, speech bands", "dB", 1),
    ("bits_per_s", "intelligibility", "bit/s", 1),
)
_HEADS = {
    "sdr_db": ("SDR", "dB"),
    "sir_db": ("SIR", "dB"),
    "sar_db": ("SAR", "dB"),
    "si_sdr_db": ("SI-SDR", "dB"),
    "stoi": ("STOI", "0 to 1"),
    "estoi": ("ESTOI", "0 to 1"),
}


def write_scene_report(
    material: SceneMaterial,
    path: Path,
    *,
    audio: bool = True,
    hide_names: bool = False,
    sound_mb: float = SOUND_MB,
    overwrite: bool = False,
) -> PageFile:
    """Write the report on a scene as one HTML file.

    audio       whether it carries the voices
    hide_names  whether talkers appear as Talker A, Talker B, ...
    sound_mb    megabytes of sound at most; a longer recording is cut to its most telling stretch

    Raises FileError when the file exists and `overwrite` is not given, or the place cannot be written.
    """
    text = scene_report(material, audio=audio, hide_names=hide_names, sound_mb=sound_mb)
    return write_page(path, text, overwrite=overwrite)


def scene_report(
    material: SceneMaterial, *, audio: bool = True, hide_names: bool = False, sound_mb: float = SOUND_MB
) -> str:
    """The report as HTML; parameters as of `write_scene_report`."""
    if hide_names:
        material = pseudonyms(material)
    sound = scene_sound(material, megabytes=sound_mb)
    verdicts = _verdicts(material)
    health = health_of(material, sound)
    pictures, colours = picture_of(sound) if sound is not None else ([], "")
    player = player_of(sound) if sound is not None and audio else None
    return render_page(
        "scene.html",
        ["player.js"] if player is not None else [],
        kind=_kind(material, audio=audio, hide_names=hide_names),
        title=material.title,
        subtitle=_subtitle(material),
        headline=_headline(verdicts, material),
        verdicts=verdicts,
        graded=material.grades is not None,
        warnings=_warnings(material, sound, health),
        pictures=pictures,
        colours=colours,
        sound=player,
        views=scene_views(material, sound),
        **_drawings(material, verdicts),
        figures=_figures(material.grades) if material.grades is not None else None,
        real=real_tables(material.real),
        health=health,
        speech=_speech(material.grades) if material.grades is not None else None,
        done=_done(material),
        settings=_settings(material),
    )


def _kind(material: SceneMaterial, *, audio: bool, hide_names: bool) -> str:
    graded = "graded" if (material.grades or material.real) is not None else "not graded"
    return f"scene, {graded}, {'with' if audio else 'without'} sound, {'without' if hide_names else 'with'} names"


UNGRADED = "scene, not graded, with sound, with names"
"""What `solve` writes unless told otherwise: grading the same folder adds to it and takes nothing away."""


def _subtitle(material: SceneMaterial) -> str:
    parts = [f"{len(material.names)} talkers" if len(material.names) != 1 else "1 talker"]
    recording, solution = material.recording, material.solution
    if recording is not None:
        parts.append(f"{len(recording.channels)} microphones")
        parts.append(f"{recording.duration_s:.1f} s at {recording.sample_rate} Hz")
    elif solution is not None:
        parts.append(f"{solution['samples'] / solution['sample_rate']:.1f} s at {solution['sample_rate']} Hz")
    if solution is not None:
        parts.append(f"separated with the variant {solution['variant']}")
    if material.grades is not None:
        parts.append(f"graded against the {material.grades.against} references")
    return ", ".join(parts)


def _verdicts(material: SceneMaterial) -> list[Verdict]:
    if material.grades is not None:
        return [talker_verdict(talker) for talker in material.grades.talkers]
    if material.real is not None and "leakage" in material.real:
        return leakage_verdicts(material.names, material.real)
    if material.solution is None and not material.outputs:
        return [
            Verdict(name, "unknown", "not separated", "Nobody has separated this scene yet.") for name in material.names
        ]
    sentence = "No clean speech to compare with: listen below, or give references and grade."
    return [Verdict(name, "unknown", "not graded", sentence) for name in material.names]


def _headline(verdicts: list[Verdict], material: SceneMaterial) -> str:
    """The answer to the reader's first question."""
    grades = material.grades
    if grades is None:
        if material.real is not None:
            return "Leakage where one talker is alone"
        return "Not graded yet" if material.solution is not None or material.outputs else "Not separated yet"
    many, understood = len(verdicts), sum(v.level == "good" for v in verdicts)
    before = [t.unprocessed.stoi for t in grades.talkers]
    was = ""
    if None not in before:
        was = f"; before, {sum(understandable(b) for b in before if b is not None) or 'none'}"
    who = {1: "The talker", 2: "Both talkers"}.get(many, f"All {many} talkers")
    if understood < many:
        who = f"{understood or 'None'} of {many} talkers" if many > 1 else "The talker cannot be understood"
        if many == 1:
            return who
    return f"{who} can be understood after separation{was}"


def _warnings(material: SceneMaterial, sound: SceneSound | None, health: Health | None) -> list[str]:
    lines: list[str] = list(material.notes)
    if health is not None:
        lines += health.warnings
    if material.solution is not None:
        lines += material.solution["warnings"]
    if sound is not None:
        lines += sound.notes
    if material.grades is not None:
        lines += material.grades.warnings
        for talker in material.grades.talkers:
            reasons: dict[str, list[str]] = {}
            further = {} if talker.speech is None else talker.speech.after.undefined
            for figure, why in {**talker.undefined, **further}.items():
                reasons.setdefault(why, []).append(figure)
            lines += [f"{talker.name}: no {', '.join(names)}: {why}" for why, names in reasons.items()]
    return list(dict.fromkeys(lines))


def player_of(sound: SceneSound, key: str = "") -> dict[str, Any]:
    """The signals with their FLAC, grouped by talker for the radio buttons.

    key  tells several players of a page apart
    """
    signals = []
    groups: dict[str, list[dict[str, Any]]] = {}
    for number, (heard, coded) in enumerate(zip(sound.heard, sound.encoded(), strict=True), start=1):
        label = "microphone" if heard.kind == MICROPHONE else heard.kind
        groups.setdefault(heard.talker, []).append({"id": heard.id, "label": label, "number": number})
        signals.append({"id": heard.id, "data": coded.data, "matched": coded.matched, "asItWas": coded.as_it_was})
    described = {
        "signals": [{key: s[key] for key in ("id", "matched", "asItWas")} for s in signals],
        "seconds": sound.seconds,
        "sample_rate": sound.sample_rate,
        "start_s": sound.start_s,
    }
    return {
        "signals": signals,
        "groups": [{"name": name, "signals": members} for name, members in groups.items()],
        "seconds": sound.seconds,
        "key": key,
        "described": described,
    }


def scene_views(material: SceneMaterial, sound: SceneSound | None) -> dict[str, Any]:
    """Time line and spectrograms, microphone, output and reference side by side for each talker."""
    if sound is None:
        empty: dict[str, Any] = {"timeline": [], "spectrograms": [], "columns": 3, "excerpt": "", "activity_from": ""}
        return empty | {"long_axis": [], "short_axis": [], "top_khz": "", "range_db": RANGE_DB}
    by_talker: dict[str, list[dict[str, str]]] = {}
    microphone = [h for h in sound.heard if h.kind == MICROPHONE]
    for heard in sound.heard:
        if heard.kind != MICROPHONE:
            cell = {"id": heard.id, "label": heard.kind, "full": f"{heard.talker}, {heard.kind}"}
            by_talker.setdefault(heard.talker, []).append(cell)
    before = [{"id": m.id, "label": "microphone", "full": "the microphone as recorded"} for m in microphone]
    rows = [{"name": name, "cells": before + cells} for name, cells in by_talker.items()]
    rows = rows or [{"name": "", "cells": before}]
    given = {t.name: list(t.active_s) for t in material.seats if t.active_s}
    stop_s = sound.start_s + sound.seconds
    excerpt = ""
    if sound.seconds < sound.whole_s - 0.1:
        excerpt = (
            f"Shown and played: {_clock(sound.start_s)} to {_clock(stop_s)} of {_clock(sound.whole_s)}, the stretch in "
            "which the talker who is heard least has most to say."
        )
    return {
        "timeline": timeline_rows(sound, given),
        "spectrograms": rows,
        "columns": max(len(row["cells"]) for row in rows),
        "excerpt": excerpt,
        "activity_from": _activity_source(sound, given),
        "long_axis": [_clock(t) for t in np.linspace(0.0, sound.whole_s, 6)],
        "short_axis": [_clock(t) for t in np.linspace(sound.start_s, stop_s, 4)],
        "top_khz": f"{sound.sample_rate / 2000.0:g}",
        "range_db": f"{RANGE_DB:.0f}",
    }


def _activity_source(sound: SceneSound, given: dict[str, Any]) -> str:
    if given and all(name in given for name in sound.powers):
        return "as the scene states it"
    of = {OUTPUT: "the separated signal's", MICROPHONE: "the microphone's"}.get(sound.powers_of, "the reference's")
    return f"where {of} level is within 30 dB of loud speech"


def _clock(seconds: float) -> str:
    minutes = int(seconds // 60)
    return f"{minutes}:{seconds - 60 * minutes:04.1f}"


def _drawings(material: SceneMaterial, verdicts: list[Verdict]) -> dict[str, Any]:
    """Verdict, scene and conditioning as pictures."""
    from markupsafe import Markup

    grades, solution = material.grades, material.solution
    conditioning = (solution or {}).get("conditioning")
    drawn: dict[str, Any] = {"verdict_svg": None, "scene_svg": None, "conditioning_svg": None, "usable": None}
    if grades is not None and any(t.stoi is not None or t.sir_db is not None for t in grades.talkers):
        said = "; ".join(f"{v.name}: {v.sentence}" for v in verdicts)
        figure = verdict_figure(grades)
        drawn["verdict_svg"] = Markup(embedded_svg(figure, "verdict-picture", "Before and after", said))
    if material.scene is not None and any(t.located for t in material.seats):
        figure = scene_figure(material.seats, material.scene.array)
        drawn["scene_svg"] = Markup(embedded_svg(figure, "scene-picture", "The scene from above", _where(material)))
    if conditioning is not None:
        usable = conditioning["lowest_usable_hz"]
        said = "Usable at no frequency" if usable is None else f"Usable from {usable:.0f} Hz"
        said += f"; worst noise gain {conditioning['worst_noise_gain_db']:.1f} dB"
        figure = conditioning_figure(conditioning, material.names)
        drawn["conditioning_svg"] = Markup(embedded_svg(figure, "cond-picture", "Condition and noise gain", said))
        drawn["usable"] = None if usable is None else f"{usable:.0f}"
    return drawn


def _where(material: SceneMaterial) -> str:
    parts = []
    for talker in material.seats:
        if talker.track is not None:
            parts.append(f"{talker.name} moves")
        elif talker.azimuth is not None:
            far = "" if talker.distance_m is None else f", {talker.distance_m:.2f} m"
            parts.append(f"{talker.name} at {np.degrees(talker.azimuth):.0f} degrees{far}")
    return "; ".join(parts)


def _figures(grades: Grades) -> dict[str, Any]:
    """The table of figures: before, after, gain, and the best single microphone."""
    rows = []
    for talker in grades.talkers:
        parts: list[tuple[str, str, Figures]] = [
            ("before", "first", talker.unprocessed),
            ("after", "after", talker),
            ("gain", "gain", talker.gain),
        ]
        if talker.gain_over_best is not None and talker.best_channel is not None:
            parts.append((f"gain over best microphone ({talker.best_channel})", "over-best", talker.gain_over_best))
        for label, kind, part in parts:
            signed = label.startswith("gain")
            rows.append(
                {
                    "name": talker.name if label == "before" else None,
                    "span": len(parts),
                    "label": label,
                    "kind": kind,
                    "cells": [
                        {
                            "text": figure_text(getattr(part, name), 2 if "stoi" in name else 1, signed=signed),
                            "why": part.undefined.get(name, ""),
                        }
                        for name in FIGURES
                    ],
                }
            )
    start, stop = grades.span_s
    caption = (
        f"Against the {grades.against} references, {stop - start:.1f} s at {grades.sample_rate} Hz; BSS Eval with "
        f"{grades.filter_length} taps, every signal held back {grades.guard_samples} samples behind its reference."
    )
    return {"rows": rows, "heads": [_HEADS[name] for name in FIGURES], "caption": caption}


def _speech(grades: Grades) -> dict[str, Any] | None:
    """The table of what is understood, with intervals over segments; None when it was not asked for."""
    rows = []
    for talker in grades.talkers:
        if talker.speech is None:
            continue
        segments = talker.speech.segments
        for label, part in (
            ("before", talker.speech.before),
            ("after", talker.speech.after),
            ("gain", talker.speech.gain),
        ):
            cells = [
                {
                    "text": figure_text(getattr(part, name), digits, signed=label == "gain"),
                    "why": part.undefined.get(name, ""),
                }
                for name, _, _, digits in _SPEECH
            ]
            over = ("", "")
            if label == "gain" and segments is not None:
                silent = f", {segments.silent} silent" if segments.silent else ""
                over = (_interval_text(segments.stoi), f"{segments.used}{silent}")
            cells += [{"text": text, "why": ""} for text in over]
            first = label == "before"
            rows.append(
                {
                    "name": talker.name if first else None,
                    "span": 3,
                    "label": label,
                    "kind": "first" if first else label,
                    "cells": cells,
                }
            )
    if not rows:
        return None
    heads = [(title, unit) for _, title, unit, _ in _SPEECH]
    heads += [("STOI over 3 s", "mean gain [95 % interval]"), ("segments", "of 3 s")]
    return {"rows": rows, "heads": heads, "caption": f"Beside STOI. {CAUTION[:1].upper()}{CAUTION[1:]}."}


def _interval_text(interval: Interval) -> str:
    mean, low, high = (figure_text(v, 2, signed=True) for v in (interval.mean, interval.low, interval.high))
    return f"{mean} [{low} {high}]"


def _done(material: SceneMaterial) -> list[tuple[str, str]]:
    """Variant, stages, fallbacks, times and versions."""
    tree = material.solution
    if tree is None:
        return [("Report by", versions())]
    settings, details = tree["settings"], tree.get("details", {})
    solver, room = settings["solver"], settings["room"]
    lines = [
        ("Variant", f"{tree['variant']}: {settings['summary']}" if settings["summary"] else tree["variant"]),
        ("Model", f"order {settings['model']['order']}, {settings['model']['anchor']} anchor, {solver['constraint']}"),
        (
            "Solved by",
            f"{tree['method']} ({solver['noise']} noise, {solver['prior']} prior {solver['prior_weight']:g})",
        ),
    ]
    if settings["separator"] != "model":
        lines = [lines[0], ("Separator", settings["separator"])]
    if room is not None:
        stages = [name for name in ("prediction", "refinement", "post") if room.get(name) is not None]
        lines.append(("Room stage", ", ".join(stages) or "none"))
    lines.append(("Fallbacks", "; ".join(tree["fallbacks"]) or "none"))
    if "trusted_hz" in details:
        lines.append(("To be trusted up to", f"{float(details['trusted_hz']):.0f} Hz"))
    lines += [
        ("Latency", _duration(tree["latency_ms"])),
        ("Time taken", f"{tree['wall_time_s']:.1f} s, {tree['real_time_factor']:.2f} of the recording's length"),
        ("Report by", versions()),
    ]
    return lines


def _duration(ms: float) -> str:
    return f"{ms:.0f} ms" if ms < 1000.0 else f"{ms / 1000.0:.1f} s"


def _settings(material: SceneMaterial) -> str:
    if material.solution is None:
        return ""
    return json.dumps(material.solution["settings"], indent=1, ensure_ascii=False)
