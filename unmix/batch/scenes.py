"""The scenes of a plan: files as they are, and scenes to be rendered, each with the digest of all it depends on."""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import msgspec
import numpy as np

from unmix.batch.digests import Digests, Stamp, digest_of
from unmix.batch.plan import Plan, RandomSeats, RenderTable, RoomTable, SeatsTable, refuse_namesakes
from unmix.errors import InputError
from unmix.files import convert_tree, read_toml
from unmix.render.spec import RenderSpec
from unmix.scene import Scene
from unmix.scene_file import SceneFile

__all__ = ["SceneSource", "count_scenes", "plan_scenes"]


@dataclass(frozen=True)
class SceneSource:
    """Where a scene comes from.

    name    unique in the batch
    digest  of everything the scene depends on
    path    its file; None for a scene to be rendered from `spec`, whose paths are relative to `base`
    stamps  of every file it depends on
    labels  what tells it apart: spec, room, seats, snr_db, seed
    """

    name: str
    digest: str
    path: str | None = None
    spec: RenderSpec | None = None
    base: str = "."
    stamps: tuple[Stamp, ...] = ()
    labels: dict[str, Any] = field(default_factory=dict)


def count_scenes(plan: Plan, base: Path) -> int:
    """How many scenes the plan names, without making them."""
    return len(_scene_files(plan, base)) + sum(_count(table) for table in plan.render)


def _count(table: RenderTable) -> int:
    return len(_seeds(table)) * max(1, len(table.snr_db or ())) * max(1, len(table.rooms)) * max(1, len(table.seats))


def plan_scenes(plan: Plan, base: Path) -> list[SceneSource]:
    """The scenes, in the plan's order; `base` is the folder that files are relative to.

    Raises InputError or FileError naming the file or key, and when two scenes have one name.
    """
    digests = Digests()
    scenes = [_from_file(path, base, digests) for path in _scene_files(plan, base)]
    for index, table in enumerate(plan.render):
        scenes += _rendered(table, base, digests, f"key `render[{index}]`")
    refuse_namesakes("scenes", [s.name for s in scenes], "give one [[render]] table another `name`")
    return scenes


def _scene_files(plan: Plan, base: Path) -> list[Path]:
    found: dict[Path, None] = {}
    for entry in plan.scenes:
        path = Path(entry)
        if not any(sign in entry for sign in "*?["):
            found[base / entry] = None
            continue
        root, pattern = (Path(path.anchor), str(path.relative_to(path.anchor))) if path.is_absolute() else (base, entry)
        some = sorted(root.glob(pattern))
        if not some:
            raise InputError(f"key `scenes`: no file fits {entry!r} in {base}; correct the pattern")
        found |= dict.fromkeys(some)
    return list(found)


def _from_file(path: Path, base: Path, digests: Digests) -> SceneSource:
    scene = Scene.load(path)  # what is wrong with it is better said before the night than after it
    content = read_toml(path, SceneFile)
    keys, names = zip(*_files_of(content), strict=True)
    found = [digests.of(path.parent / name) for name in names]
    tree = msgspec.to_builtins(content) | {"title": ""}
    stamps = (digests.of(path)[1], *(stamp for _, stamp in found))
    # What files are called does not matter, but what is in them and which key names them.
    digest = digest_of(
        "scene", _without_names(tree), [(key, digest) for key, (digest, _) in zip(keys, found, strict=True)]
    )
    place = path.parent if path.name == "scene.toml" else path.with_suffix("")
    name = place.relative_to(base).as_posix() if place.is_relative_to(base) else place.as_posix()
    return SceneSource(
        name=scene.title if name == "." else name,
        digest=digest,
        path=str(path.resolve()),
        stamps=_absolute(stamps),
        labels={"spec": None, "room": None, "seats": None, "snr_db": None, "seed": None},
    )


def _files_of(content: SceneFile) -> Iterator[tuple[str, str]]:
    """Key and name of every file that a scene file names."""
    recording = content.recording
    single = [recording.file] if recording.file is not None else []
    yield from (("recording", name) for name in recording.files or single)
    named = {"array": content.array.file, "activity": content.activity}
    named["orientation"] = content.orientation.file if content.orientation else None
    for index, talker in enumerate(content.talker):
        references = msgspec.structs.asdict(talker.references) if talker.references else {}
        given = {"track": talker.track, "plain": talker.reference, **references}
        named |= {f"talker[{index}].{key}": name for key, name in given.items()}
    yield from ((key, name) for key, name in named.items() if name is not None)


def _without_names(tree: Any) -> Any:
    """The tree without the names of files."""
    keys = {"file", "files", "activity", "track", "reference", "dry", "early", "image"}
    if isinstance(tree, dict):
        return {k: _without_names(v) for k, v in tree.items() if k not in keys or not isinstance(v, str | list)}
    if isinstance(tree, list):
        return [_without_names(v) for v in tree]
    return tree


def _absolute(stamps: tuple[Stamp, ...]) -> tuple[Stamp, ...]:
    return tuple((str(Path(path).resolve()), size, time_ns, digest) for path, size, time_ns, digest in stamps)


def _seeds(table: RenderTable) -> Sequence[int | None]:
    if table.seeds is None:
        return [None]
    return range(table.seeds) if isinstance(table.seeds, int) else table.seeds


def _rendered(table: RenderTable, base: Path, digests: Digests, key: str) -> Iterator[SceneSource]:
    path = base / table.spec
    spec = RenderSpec.load(path)
    start = msgspec.to_builtins(spec)
    name = table.name or path.stem
    found = [digests.of(path.parent / file) for file in _files_of_spec(spec)]
    content, stamps = [digest for digest, _ in found], _absolute(tuple(stamp for _, stamp in found))
    folder = str(path.parent.resolve())
    rooms: Sequence[RoomTable | None] = table.rooms or [None]
    seatings: Sequence[SeatsTable | None] = table.seats or [None]
    levels: Sequence[float | None] = table.snr_db or [None]
    for room, seats, snr_db, seed in itertools.product(rooms, seatings, levels, _seeds(table)):
        tree = dict(start)
        if seed is not None:
            tree["seed"] = seed
        if room is not None:
            tree["room"] = _furnished(tree.get("room") or {}, msgspec.to_builtins(room))
        if seats is not None:
            tree["talker"] = _seated(tree["talker"], msgspec.to_builtins(seats), f"{key}: seats {seats.name!r}")
        if table.random_seats is not None:
            tree["talker"] = _seated(tree["talker"], _drawn(table.random_seats, spec, tree.get("seed", 0)), key)
        if snr_db is not None:
            tree["noise"] = {**tree.get("noise", {}), f"{table.snr_of}_snr_db": snr_db}
        seated = "random" if table.random_seats else seats.name if seats else None
        labels = {"spec": name, "room": room.name if room else None, "seats": seated, "snr_db": snr_db, "seed": seed}
        parts = [name, room.name if room else "", seats.name if seats else ""]
        parts += ["" if snr_db is None else f"{snr_db:g} dB", "" if seed is None else f"seed {seed}"]
        yield SceneSource(
            name="/".join(filter(None, parts)),
            digest=digest_of("render", {k: v for k, v in tree.items() if k != "title"}, content),
            spec=convert_tree(tree, RenderSpec, where=f"{path}, {key}"),
            base=folder,
            stamps=stamps,
            labels=labels,
        )


def _furnished(room: dict[str, Any], table: dict[str, Any]) -> dict[str, Any]:
    """The spec's room with what the plan's says instead; a new reverberation time takes the old walls' place."""
    given = {k: v for k, v in table.items() if v is not None and k != "name"}
    walls = {"t20_s", "absorption"}
    return {k: v for k, v in room.items() if k not in walls or not walls & set(given)} | given


def _files_of_spec(spec: RenderSpec) -> Iterator[str]:
    for talker in spec.talker:
        yield from filter(None, [talker.clip, talker.responses, talker.take, talker.track])
    yield from filter(None, [spec.array.file, spec.array.orientation, spec.noise.file])


def _seated(talkers: list[dict[str, Any]], seats: dict[str, Any], where: str) -> list[dict[str, Any]]:
    """The talkers' tables with one value per talker of each list in `seats`."""
    columns = {k: seats[k] for k in ("azimuth_deg", "elevation_deg", "distance_m") if seats.get(k) is not None}
    for column, values in columns.items():
        if len(values) != len(talkers):
            raise InputError(f"{where}: `{column}` has {len(values)} values for {len(talkers)} talkers")
    return [
        {k: v for k, v in talker.items() if k != "track"} | {column: values[i] for column, values in columns.items()}
        for i, talker in enumerate(talkers)
    ]


MOST_DRAWS = 10_000


def _drawn(random: RandomSeats, spec: RenderSpec, seed: int) -> dict[str, Any]:
    count = len(spec.talker)
    rng = np.random.default_rng([seed, count, 11])
    for _ in range(MOST_DRAWS):
        azimuth = np.sort(rng.uniform(-180.0, 180.0, count))
        if count == 1 or np.diff(np.append(azimuth, azimuth[0] + 360.0)).min() >= random.least_apart_deg:
            shortest, longest = random.distance_m
            return {
                "azimuth_deg": np.round(rng.permutation(azimuth), 1).tolist(),
                "distance_m": np.round(rng.uniform(shortest, longest, count), 2).tolist(),
            }
    raise InputError(
        f"key `random_seats.least_apart_deg`: {count} talkers do not fit {random.least_apart_deg:g} degrees apart"
    )
