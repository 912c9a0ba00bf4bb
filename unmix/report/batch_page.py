"""The report on a batch: which variant won and how sure that is, scene by scene, with three scenes to listen to.

rows and rankings -> who won -> pictures -> best, median and worst scene, separated again -> one file
"""

from __future__ import annotations

import hashlib
import json
import tempfile
import warnings
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import msgspec
import numpy as np

from unmix.errors import UnmixError
from unmix.jobs.solve import solve_to_folder
from unmix.report.batch_figures import cost_figure, dependence_figures, paired_figure, ranking_figure, unit_of
from unmix.report.batch_material import BatchMaterial, RankedVariant
from unmix.report.figures import embedded_svg
from unmix.report.material import material_of_scene, pseudonyms, rename, rename_table
from unmix.report.page import PageFile, render_page, versions, write_page
from unmix.report.scene_page import player_of, scene_views
from unmix.report.scene_sound import SceneSound, picture_of, scene_sound
from unmix.report.spectrogram import RANGE_DB
from unmix.report.words import figure_text, understandable
from unmix.scene import Scene
from unmix.variant import Variant

__all__ = ["BATCH_SOUND_MB", "batch_report", "kind_of_batch", "telling_scenes", "write_batch_report"]

BATCH_SOUND_MB = 10.0
"""Room for the sound of the three scenes, of the fifteen megabytes the page should stay below."""
PICTURED = 20
"""Variants in the picture of the ranking."""
NAMED = 3


def write_batch_report(
    material: BatchMaterial,
    path: Path,
    *,
    audio: bool = True,
    hide_names: bool = False,
    sound_mb: float = BATCH_SOUND_MB,
    overwrite: bool = False,
) -> PageFile:
    """Write the report on a batch as one HTML file.

    audio       whether it carries the voices of three scenes
    hide_names  whether talkers appear as Talker A, Talker B, ...
    sound_mb    megabytes of sound at most

    Raises FileError when the file exists and `overwrite` is not given, or the place cannot be written.
    """
    text = batch_report(material, audio=audio, hide_names=hide_names, sound_mb=sound_mb)
    return write_page(path, text, overwrite=overwrite)


def batch_report(
    material: BatchMaterial, *, audio: bool = True, hide_names: bool = False, sound_mb: float = BATCH_SOUND_MB
) -> str:
    """The report as HTML; parameters as of `write_batch_report`."""
    notes: list[str] = []
    kind = kind_of_batch(material, audio=audio, hide_names=hide_names)
    details = _details(material, notes, sound_mb / 3.0, hide_names=hide_names)
    if hide_names:
        material = _without_names(material)
    winner = material.winner
    rows, cut = _rows(material)
    shown = [detail.shown(material, audio=audio) for detail in details]
    return render_page(
        "batch.html",
        ["player.js", "tables.js", "batch.js"],
        kind=kind,
        title=material.title,
        subtitle=_subtitle(material),
        headline=_headline(material),
        verdict=_verdict(material),
        coverage=_coverage(material),
        warnings=[*_warnings(material), *notes],
        ranking=_ranking_table(material),
        details=shown,
        colours=details[0].colours if details else "",
        range_db=f"{RANGE_DB:.0f}",
        winner=winner.name if winner is not None else "",
        choices=_choices(material),
        columns=_columns(material),
        cut=cut,
        done=_done(material),
        settings=_settings(material),
        data={"columns": _columns(material), "rows": rows, "scenes": list(material.scenes)},
        described=[{"key": d["key"], **(d["sound"]["described"] if d["sound"] else {})} for d in shown],
        by_scene={d["scene"]: d["key"] for d in shown},
        **_drawings(material),
    )


def kind_of_batch(material: BatchMaterial, *, audio: bool, hide_names: bool) -> str:
    """What the page calls itself: a batch that says the same again needs no new one."""
    said = repr((material.title, material.rankings, material.total, material.missing, versions()))
    digest = hashlib.blake2b(said.encode("utf-8", "replace"), digest_size=8).hexdigest()
    return f"batch, {'with' if audio else 'without'} sound, {'without' if hide_names else 'with'} names, of {digest}"


def _subtitle(material: BatchMaterial) -> str:
    return f"{len(material.variants):,} variants on {len(material.scenes):,} scenes, {material.total:,} graded signals"


def _headline(material: BatchMaterial) -> str:
    """The answer to "which variant won"."""
    winner = material.winner
    if winner is None:
        return "Nothing could be graded"
    if not winner.peers:
        return f"{winner.name} won"
    return f"{winner.name} leads, but cannot be told apart from {_count(len(winner.peers), 'other variant')}"


def _count(number: int, what: str) -> str:
    return f"{number:,} {what}{'' if number == 1 else 's'}"


def _verdict(material: BatchMaterial) -> list[str]:
    winner = material.winner
    if winner is None:
        return ["No scene has a figure for any variant; the errors stand below."]
    column = material.metrics[0].column
    lines = [
        f"{winner.name}: {unit_of(column).removesuffix(', dB')} {_figure(winner.mean, column)}{_db(column)}"
        f"{_interval(winner, column)}, mean of {_count(winner.scenes, 'scene')}."
    ]
    if winner.peers:
        lines.append("Not told apart from it: " + _peers(material, winner) + ".")
    elif len(material.variants) > 1:
        lines.append("It can be told apart from every other variant it was compared with.")
    understood = _understood(material)
    return [*lines, understood] if understood else lines


def _db(column: str) -> str:
    return " dB" if "_db" in column else ""


def _digits(column: str) -> int:
    return 1 if "_db" in column else 2


def _figure(value: float | None, column: str) -> str:
    return figure_text(value, _digits(column), signed=column.endswith("_gain"))


def _interval(variant: RankedVariant, column: str) -> str:
    if variant.low is None or variant.high is None:
        return ""
    return f" (95 %: {_figure(variant.low, column)} to {_figure(variant.high, column)})"


def _peers(material: BatchMaterial, winner: RankedVariant) -> str:
    parts = []
    for name in winner.peers[:NAMED]:
        more = material.pairs.get(frozenset((winner.name, name)))
        parts.append(f"{name} (about {_count(more, 'more scene')} would tell)" if more else name)
    left = len(winner.peers) - NAMED
    return ", ".join(parts) + (f", and {left} more" if left > 0 else "")


def _understood(material: BatchMaterial) -> str:
    """How many talkers can be understood with the best variant, by the rule of the scene's report."""
    pairs = material.stoi
    if not pairs:
        return ""
    before, after = (sum(understandable(pair[i]) for pair in pairs) for i in (0, 1))
    means = [float(np.mean([pair[i] for pair in pairs])) for i in (0, 1)]
    return (
        f"With it {after} of {_count(len(pairs), 'talker')} can be understood, before {before or 'none'}; STOI "
        f"{means[0]:.2f} before, {means[1]:.2f} after, on average."
    )


def _coverage(material: BatchMaterial) -> str:
    found = material.coverage_percent
    if found is None:
        return ""
    said = ", ".join(f"{value:.0f} % ({name})" for name, value in found.items())
    return (
        f"With so few scenes, intervals meant to hold the true mean in 95 % of cases hold it in {said}, by simulation."
    )


def _warnings(material: BatchMaterial) -> list[str]:
    lines = list(material.notes)
    failures = sum(cost["failures"] for cost in material.costs.values())
    if failures:
        lines.append(f"{_count(failures, 'item')} of scenes x variants failed; they are left out of all figures")
        lines += [f"{name}: {why}" for name, why in list(material.failed.items())[:NAMED]]
    if material.missing:
        lines.append(f"{_count(material.missing, 'item')} missing: the batch was not finished; run it again")
    return lines


def _ranking_table(material: BatchMaterial) -> dict[str, Any]:
    """Every variant with means and intervals of all metrics, and what it costs."""
    heads = [{"title": "group", "unit": "", "kind": "number"}, {"title": "variant", "unit": "", "kind": "text"}]
    titles = [(unit_of(m.column).removesuffix(", dB"), _unit(m.column)) for m in material.metrics]
    titles += [("scenes", ""), ("failed", ""), ("time", "x real time"), ("latency", "ms")]
    heads += [{"title": title, "unit": unit, "kind": "number"} for title, unit in titles]
    by_name = {m.name: {v.name: v for v in material.rankings[m.name]} for m in material.metrics}
    rows = []
    for variant in material.rankings[material.metrics[0].name]:
        cost = material.costs.get(variant.name, {})
        cells: list[dict[str, Any]] = [
            {"text": str(variant.group or "\u2013"), "value": variant.group or None, "text_kind": False},
            {"text": variant.name, "value": variant.name, "text_kind": True},
        ]
        for metric in material.metrics:
            found = by_name[metric.name].get(variant.name, variant)
            interval = "" if found.low is None else _bracket(found, metric.column)
            cells.append({"text": f"{_figure(found.mean, metric.column)}{interval}", "value": found.mean})
        cells += [{"text": f"{n:,}", "value": n} for n in (variant.scenes, cost.get("failures", 0))]
        for key, digits in (("real_time_factor", 2), ("latency_ms", 0)):
            cells.append({"text": figure_text(cost.get(key), digits), "value": cost.get(key)})
        rows.append([{"text_kind": False, **cell} for cell in cells])
    return {"heads": heads, "rows": rows}


def _unit(column: str) -> str:
    return "dB, 95 % interval" if "_db" in column else "95 % interval"


def _bracket(variant: RankedVariant, column: str) -> str:
    return f" [{_figure(variant.low, column)} {_figure(variant.high, column)}]"


def _columns(material: BatchMaterial) -> list[dict[str, Any]]:
    """Columns of the table of all rows."""
    columns: list[dict[str, Any]] = [
        {"key": key, "title": key, "unit": "", "kind": "text"} for key in ("scene", "variant", "talker")
    ]
    for metric in material.metrics:
        title, unit = unit_of(metric.column).removesuffix(", dB"), "dB" if "_db" in metric.column else ""
        signed = metric.column.endswith("_gain")
        columns.append(_number(metric.column, title, unit, _digits(metric.column), signed=signed))
    columns += [
        _number("sdr_db", "SDR", "dB", 1),
        _number("sir_db", "SIR", "dB", 1),
        _number("stoi", "STOI", "0 to 1", 2),
        _number("real_time_factor", "time", "x real time", 2),
        _number("latency_ms", "latency", "ms", 0),
        _number("t20_s", "T20", "s", 2),
        _number("snr_db", "SNR", "dB", 0),
        {"key": "error", "title": "error", "unit": "", "kind": "text"},
    ]
    known = set(material.rows[0]) if material.rows else set()
    unique = {column["key"]: column for column in columns if column["key"] in known}
    return list(unique.values())


def _number(key: str, title: str, unit: str, digits: int, *, signed: bool = False) -> dict[str, Any]:
    return {"key": key, "title": title, "unit": unit, "kind": "number", "digits": digits, "signed": signed}


def _rows(material: BatchMaterial) -> tuple[list[list[Any]], str]:
    """Rows as lists in the columns' order, and a remark when there are too many for a page."""
    keys = [(c["key"], c.get("digits")) for c in _columns(material)]
    cut = ""
    if len(material.rows) < material.total:
        cut = (
            f"Of {material.total:,} rows {len(material.rows):,} are carried along here, "
            f"those of the {_count(material.kept, 'best variant')}."
        )
    return [[_short(row[key], digits) for key, digits in keys] for row in material.rows], cut


def _short(value: Any, digits: int | None) -> Any:
    return round(float(value), digits + 1) if digits is not None and value is not None else value


def _choices(material: BatchMaterial) -> list[dict[str, Any]]:
    return [
        {"title": "Scene", "key": "scene", "values": material.scenes},
        {"title": "Variant", "key": "variant", "values": material.variants},
    ]


def _drawings(material: BatchMaterial) -> dict[str, Any]:
    """The pictures, with their captions."""
    from markupsafe import Markup

    drawn: dict[str, Any] = dict.fromkeys(("ranking_svg", "paired_svg", "cost_svg", "ranking_caption"))
    drawn["dependence_svgs"] = []
    winner = material.winner
    if winner is None:
        return drawn
    metric = material.metrics[0]
    ranked = material.rankings[metric.name]
    table = material.tables[metric.name]
    chosen = _chosen(material)
    links = [f"#scene-{s}" for s in range(len(material.scenes))]
    said = "; ".join(f"{v.name} {_figure(v.mean, metric.column)}" for v in ranked[:PICTURED])

    def svg(figure: Any, name: str, title: str, description: str) -> Markup:
        return Markup(embedded_svg(figure, name, title, description))

    drawn["ranking_svg"] = svg(ranking_figure(ranked[:PICTURED], metric.column), "ranking-picture", "Ranking", said)
    drawn["ranking_caption"] = "A line separates variants that can be told apart from the one that leads above it." + (
        f" The best {PICTURED} of {len(ranked):,}." if len(ranked) > PICTURED else ""
    )
    shown = f"of {', '.join(material.variants[v] for v in chosen)}; the table of all rows holds the figures"
    figure = paired_figure(table, chosen, material.variants, material.scenes, metric.column, links)
    drawn["paired_svg"] = svg(figure, "paired-picture", "Gain scene by scene", f"Gains {shown}")
    drawn["cost_svg"] = svg(
        cost_figure(ranked, material.costs, metric.column),
        "cost-picture",
        "Gain against computing time and latency",
        "One mark per variant; the table of the ranking holds the figures",
    )
    found = dependence_figures(table, chosen[:2], material.variants, material.of_scene, metric.column, links)
    drawn["dependence_svgs"] = [
        svg(figure, f"dependence-picture-{k}", f"Gain against {axis}", f"Gains {shown}")
        for k, (axis, figure) in enumerate(found.items())
    ]
    return drawn


def _chosen(material: BatchMaterial) -> list[int]:
    """The best three variants, and the first that can be told apart from the best one."""
    ranked = [v for v in material.rankings[material.metrics[0].name] if v.mean is not None]
    chosen = ranked[:3]
    chosen += [v for v in ranked[3:] if v.name not in ranked[0].peers][:1]
    return [material.variants.index(v.name) for v in chosen]


@dataclass(frozen=True)
class _Detail:
    """One scene to look at and listen to."""

    key: str
    role: str
    scene: str
    sound: SceneSound
    views: dict[str, Any]
    pictures: list[dict[str, str]]
    colours: str

    def shown(self, material: BatchMaterial, *, audio: bool) -> dict[str, Any]:
        """What the template needs."""
        metric = material.metrics[0]
        winner = material.winner
        index = (material.scenes.index(self.scene), material.variants.index(winner.name) if winner else 0)
        value = float(material.tables[metric.name][index])
        sentence = f"{unit_of(metric.column).removesuffix(', dB')} {_figure(value, metric.column)}{_db(metric.column)}"
        return {
            "key": self.key,
            "role": self.role,
            "scene": self.scene,
            "sentence": f"{sentence} with {winner.name if winner else ''}.",
            "views": self.views,
            "pictures": self.pictures,
            "sound": player_of(self.sound, self.key) if audio else None,
        }


def _details(material: BatchMaterial, notes: list[str], megabytes: float, *, hide_names: bool) -> list[_Detail]:
    """The scenes in which the winner gains most, the median and least, separated again."""
    winner = material.winner
    if winner is None or not material.scene_files or winner.name not in material.settings:
        return []
    variant = msgspec.convert(material.settings[winner.name], Variant)
    found = []
    for key, (role, scene) in telling_scenes(material, winner.name).items():
        try:
            found.append(_detail(material, key, role, scene, variant, megabytes, hide_names=hide_names))
        except UnmixError as error:
            notes.append(f"{scene} cannot be heard here: {error}")
    return found


def telling_scenes(material: BatchMaterial, winner: str) -> dict[str, tuple[str, str]]:
    """The scenes in which a variant gains most, the median and least: (role, scene) by key."""
    metric = material.metrics[0]
    gains = material.tables[metric.name][:, material.variants.index(winner)]
    known = np.flatnonzero(np.isfinite(gains) & [name in material.scene_files for name in material.scenes])
    order = known[np.argsort(gains[known] if metric.higher_is_better else -gains[known], kind="stable")]
    if not len(order):
        return {}
    chosen = {"best": order[-1], "median": order[len(order) // 2], "worst": order[0]}
    roles = {"best": "Best", "median": "Median", "worst": "Worst"}
    unique: dict[int, str] = {}
    for role, index in chosen.items():
        unique.setdefault(int(index), role)
    return {role: (roles[role], material.scenes[index]) for index, role in unique.items()}


def _detail(
    material: BatchMaterial, key: str, role: str, scene: str, variant: Variant, megabytes: float, *, hide_names: bool
) -> _Detail:
    loaded = Scene.load(material.scene_files[scene])
    with tempfile.TemporaryDirectory(prefix="unmix-report-") as name, warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what they say stands in the batch's rows
        solution = solve_to_folder(loaded, Path(name), variant)
        made = material_of_scene(loaded, Path(name), solution=solution)
        if hide_names:
            made = pseudonyms(made, known=material.talkers)
        sound = scene_sound(made, megabytes=megabytes)
        if sound is None:
            raise UnmixError("nothing to hear")
    heard = tuple(replace(h, id=f"{key}-{h.id}") for h in sound.heard)
    sound = replace(sound, heard=heard)
    pictures, colours = picture_of(sound)
    return _Detail(key, role, scene, sound, scene_views(made, sound), pictures, colours)


def _without_names(material: BatchMaterial) -> BatchMaterial:
    """The same with pseudonyms; scenes keep their names, as their files do."""
    other = rename_table(material.talkers)
    rows = [
        row | {"talker": other.get(str(row["talker"])), "error": row["error"] and rename(row["error"], other)}
        for row in material.rows
    ]
    failed = {name: rename(why, other) for name, why in material.failed.items()}
    return replace(
        material,
        title=rename(material.title, other),
        rows=rows,
        failed=failed,
        talkers=tuple(other.values()),
    )


def _done(material: BatchMaterial) -> list[tuple[str, str]]:
    metrics = ", ".join(unit_of(m.column) for m in material.metrics)
    return [
        ("Ranked by", f"{metrics}; the first decides"),
        ("Intervals", "bootstrap over scenes, talkers of a scene together"),
        ("Told apart by", "Wilcoxon's signed ranks on the same scenes, corrected by Holm's method"),
        ("Report by", versions()),
    ]


def _settings(material: BatchMaterial) -> str:
    winner = material.winner
    settings: Sequence[Any] | dict[str, Any] | None = material.settings.get(winner.name) if winner is not None else None
    return json.dumps(settings, indent=1, ensure_ascii=False) if settings else ""
