"""What a plan would take, before it is run: items, time, disk."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from unmix.batch.items import Items
from unmix.batch.scenes import SceneSource
from unmix.batch.store import Store
from unmix.errors import InputError
from unmix.scene import Scene
from unmix.variant import Variant

__all__ = ["Forecast", "forecast"]

WITH_ROOM_STAGE, WITHOUT = 0.30, 0.03
PER_TALKER_GRADED = 0.05
RENDERING_IN_A_ROOM, RENDERING = 0.6, 0.1
"""Processor seconds per second of recording, of one core; rough, and replaced by what has been measured."""
PART_BYTES, ROW_BYTES = 8192, 1500
DEFAULT_DURATION_S, DEFAULT_MICROPHONES = 15.0, 8
MEASURED_FROM = 200
"""So many finished items, spread over the plan, are looked at for what they took."""


@dataclass(frozen=True)
class Forecast:
    """What is to do.

    measured  items that the time is estimated from; 0: from rough figures per second of recording
    """

    scenes: int
    variants: int
    items: int
    done: int
    todo: int
    to_render: int
    seconds: float
    megabytes: float
    measured: int


def forecast(items: Items, store: Store, pending: Sequence[int], *, workers: int) -> Forecast:
    """Estimate time and disk for the `pending` items."""
    distinct = sum(1 for _ in items.distinct())
    scenes = sorted({items.place(index)[0] for index in pending})
    sizes = {s: _size(items.scenes[s]) for s in scenes}
    unrendered = [s for s in scenes if store.scene_path(items.scenes[s]) is None]
    per_variant, measured = _measured(items, store)
    work = sum(_render_seconds(items.scenes[s], sizes[s]) for s in unrendered)
    for index in pending:
        s, v = items.place(index)
        seconds, talkers, _ = sizes[s]
        work += per_variant.get(v, _guess(items.variants[v], talkers)) * seconds
    disk = len(pending) * PART_BYTES + sum(sizes[s][2] for s in unrendered)
    disk += 2 * ROW_BYTES * sum(sizes[items.place(i)[0]][1] for i in pending)
    return Forecast(
        scenes=len(items.scenes),
        variants=len(items.variants),
        items=distinct,
        done=distinct - len(pending),
        todo=len(pending),
        to_render=len(unrendered),
        seconds=work / workers,
        megabytes=disk / 1e6,
        measured=measured,
    )


def _guess(variant: Variant, talkers: int) -> float:
    room = variant.separator == "model" and variant.room is not None
    return (WITH_ROOM_STAGE if room else WITHOUT) + PER_TALKER_GRADED * talkers


def _render_seconds(source: SceneSource, size: tuple[float, int, float]) -> float:
    room = source.spec is not None and source.spec.room is not None
    return (RENDERING_IN_A_ROOM if room else RENDERING) * size[0] * size[1]


def _size(source: SceneSource) -> tuple[float, int, float]:
    """Seconds, talkers, and bytes to be rendered."""
    if source.spec is None:
        scene = Scene.load(str(source.path))
        return scene.recording.duration_s, max(1, len(scene.talkers)), 0.0
    spec = source.spec
    seconds, talkers = spec.duration_s or DEFAULT_DURATION_S, len(spec.talker)
    microphones = len(spec.array.positions_m or range(DEFAULT_MICROPHONES))
    images = talkers * microphones if spec.write_images else 0
    return seconds, talkers, 4.0 * seconds * spec.sample_rate * (microphones + 3 * talkers + images)


def _measured(items: Items, store: Store) -> tuple[dict[int, float], int]:
    """Seconds per second of recording by variant, from parts that are there already."""
    present = store.keys()
    found: dict[int, list[float]] = {}
    for index in items.distinct():
        v = items.place(index)[1]
        if len(present) == 0 or len(found.get(v, ())) >= max(1, MEASURED_FROM // len(items.variants)):
            continue
        part = store.read(key) if (key := items.key(index)) in present else None
        if part is not None and part.error is None:
            took = part.item["solve_time_s"] + part.item["grade_time_s"]
            found.setdefault(v, []).append(took / part.item["duration_s"])
    means = {v: sum(values) / len(values) for v, values in found.items()}
    return means, sum(len(values) for values in found.values())


def check_many(count: int, limit: int, path: str) -> None:
    """Raise InputError when a plan stands for more items than anybody means by accident."""
    if count > limit:
        raise InputError(f"{path}: stands for {count:,} items; if that is meant, run with --yes (see --dry-run)")
