"""What a scene's report is made of: from memory, or from the folder a command wrote."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from unmix.audio import Recording, Samples
from unmix.errors import FileError, InputError, UnmixError
from unmix.files import safe_names
from unmix.jobs.grade import read_grades
from unmix.jobs.solution import Solution
from unmix.metrics.grades import Grades
from unmix.scene import REFERENCE_KINDS, Scene, Talker

__all__ = [
    "SceneMaterial",
    "find_solution",
    "material_of_folder",
    "material_of_scene",
    "pseudonyms",
    "read_solution",
    "rename",
    "rename_table",
]

SOUND_SUFFIXES = (".wav", ".flac", ".w64", ".rf64", ".aiff", ".aif")


@dataclass(frozen=True)
class SceneMaterial:
    """A recording with what was made of it; whatever is missing is left out of the report.

    names       the talkers, in order
    seats       where they are, for the picture
    recording   all microphones; `reference_channel` is the unprocessed one
    outputs     the talkers' own files
    references  clean speech, by talker
    solution    the content of `solution.json`
    real        what grading without clean references says (`unmix.jobs.grade_real`), as plain values: leakage where one
                talker is alone, or the bleed of close microphones
    notes       what the reader should know about the report itself
    """

    title: str
    names: tuple[str, ...]
    scene: Scene | None = None
    seats: tuple[Talker, ...] = ()
    recording: Recording | Samples | None = None
    reference_channel: int = 0
    outputs: dict[str, Path] = field(default_factory=dict)
    references: dict[str, Path] = field(default_factory=dict)
    solution: dict[str, Any] | None = None
    grades: Grades | None = None
    real: dict[str, Any] | None = None
    notes: tuple[str, ...] = ()


def material_of_scene(
    scene: Scene,
    folder: Path,
    *,
    solution: Solution | dict[str, Any] | None = None,
    grades: Grades | None = None,
    real: dict[str, Any] | None = None,
    notes: tuple[str, ...] = (),
) -> SceneMaterial:
    """A scene with the talker signals in a folder and what `solve` and `grade` said of them."""
    tree = solution.to_dict() if isinstance(solution, Solution) else solution
    names = _names(tree, grades, scene)
    return SceneMaterial(
        title=scene.title,
        names=names,
        scene=scene,
        seats=_seats(scene, tree),
        recording=scene.recording,
        reference_channel=scene.array.reference_channel,
        outputs=_outputs(names, folder, tree),
        references=_references(scene, grades),
        solution=tree,
        grades=grades,
        real=real,
        notes=notes,
    )


def _names(tree: dict[str, Any] | None, grades: Grades | None, scene: Scene | None) -> tuple[str, ...]:
    if tree is not None:
        return tuple(str(t["name"]) for t in tree["talkers"])
    if grades is not None:
        return tuple(t.name for t in grades.talkers)
    return tuple(t.name for t in scene.talkers) if scene is not None else ()


def _seats(scene: Scene, tree: dict[str, Any] | None) -> tuple[Talker, ...]:
    """The scene's talkers, with the bearings that `solve` found where the scene has none."""
    if tree is None:
        return scene.talkers
    known = {t.name: t for t in scene.talkers}
    seats = []
    for solved in tree["talkers"]:
        talker = known.get(str(solved["name"]), Talker(str(solved["name"])))
        if not talker.located and solved["azimuth_deg"] is not None:
            azimuth, elevation = np.radians([solved["azimuth_deg"], solved.get("elevation_deg") or 0.0])
            talker = replace(talker, azimuth=float(azimuth), elevation=float(elevation))
        seats.append(talker)
    return tuple(seats)


def _outputs(names: tuple[str, ...], folder: Path, tree: dict[str, Any] | None) -> dict[str, Path]:
    """The talkers' files: as the solution says, else those whose names are made of the talkers'."""
    if tree is not None:
        named = {str(t["name"]): folder / t["file"] for t in tree["talkers"] if isinstance(t["file"], str)}
        return {name: path for name, path in named.items() if path.is_file()}
    found = {path.stem.lower(): path for path in folder.iterdir() if path.suffix.lower() in SOUND_SUFFIXES}
    stems = zip(names, safe_names(names), strict=True)
    return {name: found[stem.lower()] for name, stem in stems if stem.lower() in found}


def _references(scene: Scene, grades: Grades | None) -> dict[str, Path]:
    """Of each talker the kind that was graded against, else the preferred one there is."""
    chosen = {}
    for talker in scene.talkers:
        for kind in (grades.against if grades is not None else "", *REFERENCE_KINDS, "plain"):
            if kind in talker.references:
                chosen[talker.name] = talker.references[kind]
                break
    return chosen


def find_solution(folder: Path) -> Path | None:
    """The folder with `solution.json` or `grades.json`: this one, or the `talkers` folder that the demo makes in it."""
    for candidate in (folder, folder / "talkers"):
        if (candidate / "solution.json").exists() or (candidate / "grades.json").exists():
            return candidate
    return None


def material_of_folder(folder: Path, *, scene: Path | None = None) -> SceneMaterial:
    """Everything a folder that `solve`, `grade`, `demo` or `render` wrote holds.

    scene  the scene file, where the folder does not say or it has moved

    Raises FileError or InputError, naming file and remedy.
    """
    if not folder.is_dir():
        raise FileError(f"{folder}: no such folder; name one that `solve`, `grade`, `batch` or `demo` wrote")
    found = find_solution(folder)
    if found is None:
        return _unsolved(folder, scene)
    tree = read_solution(found / "solution.json")
    real = _real(found / "grades.json")
    grades = read_grades(found) if (found / "grades.json").exists() and "alone_s" not in (real or {}) else None
    notes: list[str] = []
    if tree is not None and (grades or real) is not None and _older(found / "grades.json", found / "solution.json"):
        notes.append("grades.json is older than solution.json and may not belong to it; grade again")
    graded = _pointers(found / "grades.json")
    loaded = _scene(found, (tree or graded).get("scene"), scene, notes)
    signals = found
    if tree is None and graded.get("estimates") is not None and (found / graded["estimates"]).is_dir():
        signals = found / graded["estimates"]
        tree = read_solution(signals / "solution.json")
    if loaded is not None:
        return material_of_scene(loaded, signals, solution=tree, grades=grades, real=real, notes=tuple(notes))
    names = _names(tree, grades, None)
    title = folder.resolve().name
    outputs = _outputs(names, signals, tree)
    return SceneMaterial(title, names, outputs=outputs, solution=tree, grades=grades, real=real, notes=tuple(notes))


def _unsolved(folder: Path, given: Path | None) -> SceneMaterial:
    """A scene that nobody has separated yet, as `render` leaves it."""
    path = given if given is not None else folder / "scene.toml"
    if not path.exists():
        raise InputError(
            f"{folder}: holds neither solution.json nor grades.json nor results.parquet nor scene.toml; name a folder "
            "that `solve`, `grade`, `batch`, `demo` or `render` wrote"
        )
    scene = Scene.load(path)
    return SceneMaterial(
        title=scene.title,
        names=_names(None, None, scene),
        scene=scene,
        seats=scene.talkers,
        recording=scene.recording,
        reference_channel=scene.array.reference_channel,
        references=_references(scene, None),
    )


def _older(a: Path, b: Path) -> bool:
    return a.stat().st_mtime < b.stat().st_mtime - 1.0


def read_solution(path: Path) -> dict[str, Any] | None:
    """The content of a `solution.json`; None when there is none. Raises FileError when it cannot be used."""
    needed = {"variant", "settings", "method", "warnings", "fallbacks", "sample_rate", "samples"}
    try:
        tree = json.loads(path.read_text(encoding="utf-8"))
        known = needed <= set(tree) and all({"name", "file", "azimuth_deg"} <= set(t) for t in tree["talkers"])
    except FileNotFoundError:
        return None
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check its permissions") from None
    except (UnicodeDecodeError, json.JSONDecodeError, KeyError, TypeError):
        known = False
    if not known:
        raise FileError(f"{path}: is not a solution as written by this version; solve again")
    return dict(tree)


def _real(path: Path) -> dict[str, Any] | None:
    """The content of a `grades.json` that was graded without clean references; None for any other."""
    try:
        tree = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, json.JSONDecodeError):
        return None  # what is wrong with it is said where grades are read
    known = isinstance(tree, dict) and "claims" in tree and ({"leakage", "alone_s"} <= set(tree) or "bleed" in tree)
    return tree if known else None


def _pointers(path: Path) -> dict[str, Any]:
    """What `grades.json` says it belongs to, seen from its folder."""
    if not path.exists():
        return {}
    tree = json.loads(path.read_text(encoding="utf-8"))
    return {key: tree[key] for key in ("scene", "estimates") if isinstance(tree.get(key), str)}


def _scene(found: Path, named: object, given: Path | None, notes: list[str]) -> Scene | None:
    """The scene that was given, else the one that the folder names."""
    if given is not None:
        return Scene.load(given)
    if not isinstance(named, str):
        notes.append("the folder does not say which scene it belongs to: pass --scene to hear the recording, too")
        return None
    try:
        return Scene.load(found / named)
    except UnmixError as error:
        notes.append(f"no sound before separation and no picture of the scene: {error}")
        return None


def pseudonyms(material: SceneMaterial, *, known: Sequence[str] = ()) -> SceneMaterial:
    """The same with every talker called Talker A, Talker B, ...: in tables, pictures, the title and warnings.

    known  talkers that come first, so that the same person has the same letter in several scenes
    """
    other = rename_table([*known, *material.names, *(t.name for t in material.seats)])
    grades = material.grades
    return replace(
        material,
        title=rename(material.title, other),
        names=tuple(other[name] for name in material.names),
        seats=tuple(replace(t, name=other[t.name]) for t in material.seats),
        outputs={other.get(name, name): path for name, path in material.outputs.items()},
        references={other.get(name, name): path for name, path in material.references.items()},
        solution=None if material.solution is None else _rename_tree(material.solution, other, keep=("settings",)),
        grades=None if grades is None else Grades.from_dict(_rename_tree(grades.to_dict(), other)),
        real=None if material.real is None else _rename_tree(material.real, other),
        notes=tuple(rename(note, other) for note in material.notes),
    )


def rename_table(names: Sequence[str]) -> dict[str, str]:
    """Pseudonyms by name, in order."""
    return {name: f"Talker {_letters(k)}" for k, name in enumerate(dict.fromkeys(names))}


def _letters(index: int) -> str:
    return chr(ord("A") + index) if index < 26 else f"{_letters(index // 26 - 1)}{chr(ord('A') + index % 26)}"


def rename(text: str, other: Mapping[str, str]) -> str:
    """The names in a text replaced in one pass, the longest first, whole words of any case only."""
    if not other:
        return text
    folded = {name.casefold(): new for name, new in other.items()}
    spelt = dict.fromkeys([*other, *safe_names(other)])
    pattern = "|".join(rf"(?<!\w){re.escape(name)}(?!\w)" for name in sorted(spelt, key=len, reverse=True))
    stems = {stem.casefold(): new for stem, new in zip(safe_names(other), other.values(), strict=True)}
    table = stems | folded
    return re.sub(pattern, lambda m: table.get(m.group(0).casefold(), m.group(0)), text, flags=re.IGNORECASE)


def _rename_tree(tree: Any, other: Mapping[str, str], keep: tuple[str, ...] = ()) -> Any:
    if isinstance(tree, str):
        return rename(tree, other)
    if isinstance(tree, list | tuple):
        return [_rename_tree(value, other, keep) for value in tree]
    if isinstance(tree, dict):
        return {
            other.get(key, key): value if key in keep else _rename_tree(value, other, keep)
            for key, value in tree.items()
        }
    return tree
