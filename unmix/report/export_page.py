"""The report on exported filters: what they cost and give, and what the presets would on the same array.

export.json and tradeoffs.json -> headline -> picture -> tables -> one file
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from unmix.errors import FileError, InputError
from unmix.export.tradeoffs import Tradeoffs
from unmix.report.figures import embedded_svg, tradeoff_figure
from unmix.report.material import rename_table
from unmix.report.page import PageFile, render_page, versions, write_page
from unmix.report.words import figure_text

__all__ = ["EXPORT", "TRADEOFFS", "ExportMaterial", "is_export", "material_of_export", "write_export_report"]

EXPORT = "export.json"
TRADEOFFS = "tradeoffs.json"
LOSS_DB = 1.0
_WORDS = {"float32": "32-bit float", "s24": "24 bits", "s16": "16 bits", "s12": "12 bits", "s8": "8 bits"}


@dataclass(frozen=True)
class ExportMaterial:
    """What the folder of an export holds.

    tree       figures of the export, as `Exported.to_dict` gives them
    tradeoffs  of the presets on the array; None where they were not measured
    note       why they were not
    """

    title: str
    tree: dict[str, Any]
    tradeoffs: Tradeoffs | None = None
    note: str = ""


def is_export(folder: Path) -> bool:
    """Whether `export` wrote this folder."""
    return (folder / EXPORT).is_file()


def material_of_export(folder: Path) -> ExportMaterial:
    """Everything the folder of an export holds. Raises FileError or InputError naming the file."""
    tree = _read(folder / EXPORT)
    missing = [key for key in ("variant", "talkers", "taps", "words", "costs") if key not in tree]
    if missing:
        raise InputError(f"{folder / EXPORT}: no {missing[0]!r}; export again")
    found = _read(folder / TRADEOFFS) if (folder / TRADEOFFS).is_file() else None
    title = folder.resolve().name
    if found is None:
        return ExportMaterial(title, tree, note="The presets were not measured on this array.")
    if "not_measured" in found:
        return ExportMaterial(title, tree, note=f"The presets were not compared: {found['not_measured']}.")
    try:
        return ExportMaterial(title, tree, Tradeoffs.from_dict(found))
    except InputError as error:
        raise InputError(f"{folder / TRADEOFFS}: {error}") from None


def write_export_report(
    material: ExportMaterial, path: Path, *, hide_names: bool = False, overwrite: bool = False
) -> PageFile:
    """Write the report on an export as one HTML file; it carries no sound.

    hide_names  whether talkers appear as Talker A, Talker B, ...

    Raises FileError when the file exists and `overwrite` is not given, or the place cannot be written.
    """
    tree = material.tree
    names = list(rename_table(tree["talkers"]).values()) if hide_names else tree["talkers"]
    text = render_page(
        "export.html",
        [],
        kind="export",
        title=f"Filters of {material.title}",
        subtitle=f"variant {tree['variant']} for {', '.join(names)}",
        headline=_headline(tree),
        lines=_lines(tree),
        tradeoff_svg=_picture(material.tradeoffs),
        room=_room(material.tradeoffs),
        note=material.note,
        tables=[t for t in (_presets(material.tradeoffs), _words(tree), _costs(tree)) if t is not None],
        done=[("Files", ", ".join(tree.get("files", []))), ("Report by", versions())],
    )
    return write_page(path, text, overwrite=overwrite)


def _headline(tree: dict[str, Any]) -> str:
    return (
        f"{len(tree['talkers'])} \u00d7 {tree['channels']} filters of {tree['taps']} taps, "
        f"{figure_text(tree['delay_ms'], 1)} ms late"
    )


def _lines(tree: dict[str, Any]) -> list[str]:
    rate = f"At {tree['sample_rate']} Hz; before shortening {tree['whole_taps']} taps."
    if not tree["sir_db"]:
        return [rate]
    after, before = figure_text(min(tree["sir_db"]), 1), figure_text(min(tree["sir_whole_db"]), 1)
    return [f"SIR of the worst talker without a room: {after} dB, before shortening {before} dB.", rate]


def _picture(found: Tradeoffs | None) -> Any:
    from markupsafe import Markup

    if found is None:
        return ""
    said = "; ".join(
        f"{s.variant}: SIR {figure_text(s.best_db, 1)} dB, STOI {figure_text(s.stoi, 2)}"
        for s in map(found.summary, found.variants)
    )
    return Markup(
        embedded_svg(tradeoff_figure(found), "tradeoffs", "Quality against latency, work and word length", said)
    )


def _room(found: Tradeoffs | None) -> str:
    return "without a room" if found is None or found.t20_s is None else f"in a room with T20 {found.t20_s:g} s"


def _presets(found: Tradeoffs | None) -> dict[str, Any] | None:
    if found is None:
        return None
    rows = [["unprocessed", _cell(found.unprocessed_sir_db, 1), _cell(found.unprocessed_stoi, 2), *[""] * 3]]
    for variant in found.variants:
        s = found.summary(variant, loss_db=LOSS_DB)
        work = None if s.mac_per_s is None else 1e-6 * s.mac_per_s
        cells = [_cell(s.best_db, 1), _cell(s.stoi, 2), _cell(s.latency_ms, 1), _cell(work, 1), _cell(s.bits, 0)]
        rows.append([variant, *cells])
    return {
        "id": "presets",
        "title": "Presets on this array",
        "caption": "The worst talker. Latency, work and word length: the least that comes within "
        f"{LOSS_DB:g} dB of the variant's best SIR.",
        "heads": [
            ("Variant", ""),
            ("Best SIR", "dB"),
            ("STOI there", ""),
            ("Latency", "ms"),
            ("Work", "million MAC/s"),
            ("Word", "bits"),
        ],
        "rows": rows,
    }


def _words(tree: dict[str, Any]) -> dict[str, Any]:
    rows = []
    for word in tree["words"]:
        pairs = zip(tree["sir_predicted_db"], word["sir_expected_db"], strict=True)
        expected = max((whole - rounded for whole, rounded in pairs), default=None)
        rows.append(
            [
                _WORDS.get(word["word"], word["word"]),
                _cell(expected, 2),
                _cell(max(word["loss_measured_db"], default=None), 2),
                _cell(max(word["noise_gain_predicted_db"]), 2),
                _cell(max(word["noise_gain_measured_db"]), 2),
                _cell(max(word["peak_gain_predicted_db"]), 1),
                _cell(max(word["peak_gain_measured_db"]), 1),
                str(word["headroom_bits"]),
            ]
        )
    return {
        "id": "words",
        "title": "Word lengths",
        "caption": "The worst talker of each. Expected and predicted: by formula; measured without a room.",
        "heads": [
            ("Word", ""),
            ("SIR lost", "expected, dB"),
            ("SIR lost", "measured, dB"),
            ("Noise gain", "predicted, dB"),
            ("Noise gain", "measured, dB"),
            ("Peak gain", "predicted, dB"),
            ("Peak gain", "measured, dB"),
            ("Head-room", "bits"),
        ],
        "rows": rows,
    }


def _costs(tree: dict[str, Any]) -> dict[str, Any]:
    return {
        "id": "costs",
        "title": "What running them costs",
        "caption": "Multiply-accumulates, memory at 32-bit words, latency with the filters' own.",
        "heads": [("Convolution", ""), ("Block", ""), ("Work", "million MAC/s"), ("Memory", "kB"), ("Latency", "ms")],
        "rows": [
            [
                cost["form"],
                str(cost["block"]),
                _cell(1e-6 * cost["mac_per_s"], 1),
                _cell(1e-3 * cost["memory_bytes"], 0),
                _cell(cost["latency_ms"], 1),
            ]
            for cost in tree["costs"]
        ],
    }


def _cell(value: float | None, digits: int) -> str:
    return "" if value is None else figure_text(value, digits)


def _read(path: Path) -> dict[str, Any]:
    try:
        tree = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check its permissions") from None
    except ValueError:
        raise InputError(f"{path}: is no JSON; export again") from None
    if not isinstance(tree, dict):
        raise InputError(f"{path}: holds no object; export again")
    return tree
