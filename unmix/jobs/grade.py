"""The grading job: talker signals and references in, figures out."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.audio import Recording
from unmix.errors import FileError, InputError
from unmix.files import path_from, refuse_to_replace, write_json
from unmix.jobs.grade_inputs import (
    PLAIN,
    check_options,
    check_signals,
    choose_kind,
    estimates_of_scene,
    fit,
    read_signal,
    recording_of_file,
    recording_of_scene,
    references_of_scene,
    stacked,
)
from unmix.metrics.assignment import match_names
from unmix.metrics.distortion import FILTER_LENGTH
from unmix.metrics.grader import Grader, Match
from unmix.metrics.grades import Grades, TalkerGrade
from unmix.scene import Scene

__all__ = [
    "Grades",
    "TalkerGrade",
    "grade",
    "grade_files",
    "grade_scene",
    "grader_of_scene",
    "grades_tree",
    "read_grades",
    "write_grades",
]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]


def grade(
    estimates: Signals,
    references: Signals | Mapping[str, Signals],
    *,
    sample_rate: int,
    unprocessed: Signals | None = None,
    microphones: Signals | None = None,
    reference_channel: int = 0,
    names: Sequence[str] | None = None,
    against: str | None = None,
    match: Match = "name",
    filter_length: int = FILTER_LENGTH,
    cross_check: bool = False,
    images: Signals | None = None,
    image_outputs: Signals | None = None,
    speech: bool = True,
) -> Grades:
    """Grade talker signals against their references.

    Signals are aligned to a fraction of a sample first, offsets up to 1 s being found. Every figure is also given for
    the unprocessed microphone and the best single one, with the gain. What cannot be computed is None, with its reason.

    Parameters
    ----------
    estimates : (talkers, samples)
        What separation made.
    references : (talkers, samples), or a mapping from kind ("early", "image", "dry") to such arrays
        Clean speech.
    sample_rate : int
        In hertz, of every signal.
    unprocessed : (samples,), optional
        The recording's reference microphone.
    microphones : (channels, samples), optional
        The whole recording, for the best single microphone; `reference_channel` of it is the unprocessed one.
    names : sequence of str, optional
        The talkers; talker-1, talker-2, ... by default.
    against : str, optional
        Kind of reference; by default the first there is of early, image, dry.
    match : {"name", "best"}
        "name": estimates stand in the references' order. "best": whichever gives the highest mean SIR.
    filter_length : int
        Taps of BSS Eval.
    cross_check : bool
        Recompute SDR, SIR and SAR with mir_eval and report the largest difference.
    images : (talkers, samples), optional
        Each talker alone at the reference microphone, to read leakage off by projection.
    image_outputs : (images, talkers, samples), optional
        What the filters that made the estimates make of each image alone: leakage without a ruler's end.
    speech : bool
        Also words correct, equivalent ratio, weighted interference, bits, and gains over segments of 3 s; these take
        most of the time.

    Raises
    ------
    InputError
        For arrays whose shapes, lengths or number do not fit.
    """
    check_options(sample_rate, filter_length)
    kinds = {PLAIN: references} if not isinstance(references, Mapping) else dict(references)
    kind = choose_kind({"of this call": tuple(kinds)}, against if isinstance(references, Mapping) else None)
    truth = check_signals(kinds[kind], "references")
    given = check_signals(estimates, "estimates")
    talkers = tuple(names) if names is not None else tuple(f"talker-{k + 1}" for k in range(len(truth)))
    if len(talkers) != len(truth):
        raise InputError(f"names: {len(talkers)} for {len(truth)} references")
    if match == "name" and len(given) != len(truth):
        raise InputError(f"{len(given)} estimates for {len(truth)} references; give one each, or match='best'")
    if microphones is not None:
        channels = check_signals(microphones, "microphones")
        if not 0 <= reference_channel < len(channels):
            raise InputError(f"reference_channel {reference_channel}: there are microphones 0 to {len(channels) - 1}")
        unprocessed = channels[reference_channel] if unprocessed is None else unprocessed
    fitted, notes = _fit_all(
        given.shape[1], sample_rate, references=truth, unprocessed=unprocessed, microphones=microphones, images=images
    )
    grader = Grader(
        **fitted,
        sample_rate=sample_rate,
        names=talkers,
        against=against or kind,
        filter_length=filter_length,
        notes=notes,
    )
    return grader.grade(given, match=match, image_outputs=image_outputs, cross_check=cross_check, speech=speech)


def _fit_all(samples: int, sample_rate: int, **signals: Signals | None) -> tuple[dict[str, Any], list[str]]:
    """Every array of `signals` at the estimates' length, and what was changed."""
    fitted: dict[str, Any] = {}
    notes: list[str] = []
    for what, array in signals.items():
        if array is None:
            continue
        given = check_signals(array if array.ndim == 2 else array[None], what)
        rows, said = fit(given, samples, sample_rate, what)
        fitted[what] = rows[0] if what == "unprocessed" else rows
        notes += said
    return fitted, notes


def grader_of_scene(scene: Scene, *, against: str | None = None, filter_length: int = FILTER_LENGTH) -> Grader:
    """The scene's truth and recording, ready to grade any number of variants (`Grader.grade`).

    Raises InputError when a talker has no reference, FileError or InputError naming a file that cannot be used.
    """
    check_options(scene.sample_rate, filter_length)
    if not scene.talkers:
        raise InputError(f"{scene.path}: has no talkers, so there is nothing to grade against; add [[talker]] tables")
    available = {talker.name: tuple(talker.references) for talker in scene.talkers}
    kind = choose_kind(available, against)
    references, notes = references_of_scene(scene, kind)
    images: Signals | None = None
    said: list[str] = []
    if all("image" in kinds for kinds in available.values()):
        images, said = (references, []) if kind == "image" else references_of_scene(scene, "image")
    unprocessed, microphones, more = recording_of_scene(scene)
    return Grader(
        references,
        sample_rate=scene.sample_rate,
        names=list(available),
        unprocessed=unprocessed,
        microphones=microphones,
        images=images,
        against=kind,
        filter_length=filter_length,
        notes=notes + said + more,
    )


def grade_scene(
    scene: Scene,
    estimates_dir: str | Path,
    *,
    against: str | None = None,
    match: Match | None = None,
    filter_length: int = FILTER_LENGTH,
    cross_check: bool = False,
    out_dir: str | Path | None = None,
    overwrite: bool = False,
) -> Grades:
    """Grade the talker signals in a folder against a scene's references.

    Parameters
    ----------
    scene : Scene
        With a reference for every talker.
    estimates_dir : path
        A folder `solve` wrote, or one of audio files named after the talkers.
    against : {"early", "image", "dry", "plain"}, optional
        Kind of reference; by default the first of these that every talker has.
    match : {"name", "best"}, optional
        By name where the folder holds every talker's, else by best assignment.
    filter_length, cross_check
        As in `grade`.
    out_dir : path, optional
        Gets ``grades.json``.

    Raises
    ------
    FileError, InputError
        Naming file, talker and remedy.
    """
    if out_dir is not None:
        refuse_to_replace(Path(out_dir) / "grades.json", overwrite=overwrite)
    grader = grader_of_scene(scene, against=against, filter_length=filter_length)
    estimates = estimates_of_scene(scene, Path(estimates_dir))
    matched, match, notes = _match(estimates.names, grader.names, match, str(estimates_dir))
    grades = grader.grade(
        estimates.signals,
        match=match,
        matched=matched,
        cross_check=cross_check,
        speech=True,
        notes=(*estimates.notes, *notes),
    )
    if out_dir is not None:
        write_grades(grades, out_dir, overwrite=overwrite, scene=scene.path, estimates=Path(estimates_dir))
    return grades


def grade_files(
    estimates: Sequence[str | Path],
    references: Sequence[str | Path],
    *,
    unprocessed: str | Path | None = None,
    unprocessed_channel: int = 0,
    match: Match | None = None,
    filter_length: int = FILTER_LENGTH,
    cross_check: bool = False,
    out_dir: str | Path | None = None,
    overwrite: bool = False,
) -> Grades:
    """Grade audio files, one signal each; talkers are called by their references' file stems.

    Parameters
    ----------
    estimates, references : sequences of paths
        Of any rate; what differs from the first estimate's rate is resampled.
    unprocessed : path, optional
        The recording; `unprocessed_channel` of it is the unprocessed microphone, all are looked at for the best one.
    match : {"name", "best"}, optional
        By name where every reference's stem is an estimate's too, else by best assignment.

    Other parameters and errors are those of `grade_scene`.
    """
    if out_dir is not None:
        refuse_to_replace(Path(out_dir) / "grades.json", overwrite=overwrite)
    if not estimates or not references:
        raise InputError("give at least one estimate and one reference")
    first = Recording.open([estimates[0]])
    sample_rate, samples, notes = first.sample_rate, first.samples, list[str]()
    check_options(sample_rate, filter_length)

    def stack(paths: Sequence[str | Path]) -> Signals:
        rows: list[Signals] = []
        for path in map(Path, paths):
            signal, said = read_signal(path, sample_rate)
            fitted, more = fit(signal, samples, sample_rate, str(path))
            rows.append(fitted)
            notes.extend(said + more)
        return stacked(rows)

    microphone = microphones = None
    if unprocessed is not None:
        microphone, microphones, said = recording_of_file(Path(unprocessed), sample_rate, samples, unprocessed_channel)
        notes += said
    names = [Path(path).stem for path in references]
    matched, match, said = _match([Path(path).stem for path in estimates], names, match, "estimates")
    grader = Grader(
        stack(references),
        sample_rate=sample_rate,
        names=names,
        unprocessed=microphone,
        microphones=microphones,
        filter_length=filter_length,
    )
    given = stack(estimates)
    grades = grader.grade(
        given, match=match, matched=matched, cross_check=cross_check, speech=True, notes=(*notes, *said)
    )
    if out_dir is not None:
        write_grades(grades, out_dir, overwrite=overwrite)
    return grades


def _match(
    estimates: Sequence[str], talkers: Sequence[str], match: Match | None, where: str
) -> tuple[list[int | None] | None, Match, list[str]]:
    """Which estimate is whose by name, or that best assignment must tell, and a note if nobody asked for that."""
    if match == "best":
        return None, "best", []
    matched = match_names(estimates, talkers)
    missing = [name for name, index in zip(talkers, matched, strict=True) if index is None]
    if not missing:
        return matched, "name", []
    if match == "name":
        raise InputError(
            f"{where}: no signal is called {missing[0]!r}, only {', '.join(estimates)}; match='best' helps"
        )
    return None, "best", [f"no signal is called {missing[0]!r}: talkers were matched by best assignment"]


def write_grades(
    grades: Grades,
    out_dir: str | Path,
    *,
    overwrite: bool = False,
    scene: Path | None = None,
    estimates: Path | None = None,
) -> Path:
    """Write ``grades.json`` into a folder, aside first and then renamed; returns its path.

    scene, estimates  what was graded, for those who read the file: kept as seen from the folder

    Raises FileError when it exists and `overwrite` is not given, or the folder cannot be written.
    """
    path = Path(out_dir) / "grades.json"
    write_json(path, grades_tree(grades, out_dir, scene=scene, estimates=estimates), overwrite=overwrite)
    return path


def grades_tree(
    grades: Grades, out_dir: str | Path | None, *, scene: Path | None = None, estimates: Path | None = None
) -> dict[str, Any]:
    """The content of ``grades.json`` in a folder: the figures, and which scene and estimates they are of."""
    tree = grades.to_dict()
    if out_dir is None:
        return tree
    folder = Path(out_dir)
    return tree | {"scene": path_from(folder, scene), "estimates": path_from(folder, estimates)}


def read_grades(path: str | Path) -> Grades:
    """Grades from a ``grades.json`` or the folder it is in. Raises FileError when there are none."""
    path = Path(path)
    path = path / "grades.json" if path.is_dir() else path
    try:
        return Grades.from_dict(json.loads(path.read_text(encoding="utf-8")))
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; grade first, or check the path") from None
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({error.strerror}); check its permissions") from None
    except (KeyError, TypeError, ValueError):
        raise FileError(f"{path}: does not hold grades as written by this version; grade again") from None
