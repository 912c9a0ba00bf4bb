"""The render job: a spec in, a folder with mixture, references, array and scene file out."""

from __future__ import annotations

import csv
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import msgspec
import numpy as np
from numpy.typing import NDArray

from unmix.audio import write_audio
from unmix.errors import InputError
from unmix.files import folder_aside, refuse_to_replace, safe_names, write_json, write_toml
from unmix.render.activity import quiet_stretches, speech_stretches
from unmix.render.compose import RenderedScene, render_scene
from unmix.render.spec import RenderSpec
from unmix.scene_file import (
    ArrayTable,
    OrientationTable,
    RecordingTable,
    ReferencesTable,
    RoomTable,
    SceneFile,
    TalkerTable,
)
from unmix.track import Orientation

__all__ = ["Rendered", "render"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Rendered:
    """A rendered scene on disk.

    ``scene`` holds the arrays and the truth, ``files`` the names written into ``folder``, ``truth`` what
    ``truth.json`` says: faults, levels, measured reverberation.
    """

    folder: Path
    scene: RenderedScene
    files: tuple[str, ...]
    truth: dict[str, Any]

    @property
    def scene_path(self) -> Path:
        """The scene file, ready for the other jobs."""
        return self.folder / "scene.toml"


def render(
    spec: RenderSpec | str | Path,
    out_dir: str | Path,
    *,
    base: str | Path | None = None,
    clips: Mapping[str, Floats] | None = None,
    overwrite: bool = False,
    progress: Callable[[float], None] | None = None,
) -> Rendered:
    """Render a scene with known truth into a folder.

    Parameters
    ----------
    spec : RenderSpec or path
        What to render, or the TOML file that says so.
    out_dir : path
        Gets ``mix.wav``, ``array.toml``, ``scene.toml``, ``truth.json`` and for each talker ``NAME-dry.wav``,
        ``NAME-early.wav`` and ``NAME-image.wav`` as far as they are known (32-bit float).
    base : path, optional
        Folder that the spec's paths are relative to: the spec file's own, or the current one.
    clips : mapping, optional
        Dry speech by talker's name, (samples,) at the spec's rate, instead of files.
    overwrite : bool
        Whether files in ``out_dir`` may be replaced.
    progress : optional
        Called with the share done, 0 to 1.

    Raises
    ------
    FileError, InputError, UnsolvableError
        Naming file, key and remedy. Nothing is left half-written.
    """
    where = "" if isinstance(spec, RenderSpec) else f"{spec}: "
    if not isinstance(spec, RenderSpec):
        base = Path(spec).parent if base is None else base
        spec = RenderSpec.load(spec)
    folder = Path(out_dir)
    stems = safe_names(talker.name for talker in spec.talker)
    refuse_to_replace(folder / "scene.toml", overwrite=overwrite)
    try:
        scene = render_scene(spec, base=base or ".", clips=clips, progress=progress)
    except InputError as error:
        raise InputError(f"{where}{error}") from None
    truth = _truth(spec, scene)
    with folder_aside(folder, overwrite=overwrite) as aside:
        references = [_write_references(aside, scene, k, stem) for k, stem in enumerate(stems)]
        write_audio(aside / "mix.wav", scene.mixture, scene.sample_rate)
        if spec.write_images:
            for stem, image in zip(stems, scene.images, strict=True):
                write_audio(aside / f"{stem}-images.wav", image, scene.sample_rate)
        scene.array.save(aside / "array.toml")
        content = _scene_file(aside, spec, scene, stems, references)
        write_toml(aside / "scene.toml", msgspec.to_builtins(content))
        write_json(aside / "truth.json", truth)
        files = tuple(sorted(path.name for path in aside.iterdir()))
    return Rendered(folder, scene, files, truth)


def _write_references(folder: Path, scene: RenderedScene, talker: int, stem: str) -> ReferencesTable:
    """Write the kinds of reference that are known."""
    table = ReferencesTable()
    for kind in ("dry", "early", "image"):
        signal = getattr(scene, kind)[talker]
        if np.isfinite(signal).all():
            write_audio(folder / f"{stem}-{kind}.wav", signal[None], scene.sample_rate)
            setattr(table, kind, f"{stem}-{kind}.wav")
    return table


def _scene_file(
    folder: Path, spec: RenderSpec, scene: RenderedScene, stems: list[str], references: list[ReferencesTable]
) -> SceneFile:
    """The scene as its file says it; tracks and orientation are written beside it."""
    talkers = []
    spoken = [speech_stretches(image, scene.sample_rate) for image in scene.image]
    for index, (name, stem, track) in enumerate(zip(scene.names, stems, scene.tracks, strict=True)):
        table = TalkerTable(name=name, references=references[index])
        if track is not None and spec.write_bearings and len(track.time_s) > 1:
            track.save(folder / f"{stem}-track.csv")
            table.track = f"{stem}-track.csv"
        elif track is not None and spec.write_bearings:
            table.azimuth_deg = round(float(np.degrees(track.azimuth[0])), 6)
            table.elevation_deg = round(float(np.degrees(track.elevation[0])), 6)
            table.distance_m = None if np.isnan(track.distance_m[0]) else float(track.distance_m[0])
        if spec.write_activity:
            table.active_s = spoken[index]
        talkers.append(table)
    orientation = None
    if scene.orientation is not None:
        _save_orientation(folder / "orientation.csv", scene.orientation)
        orientation = OrientationTable(file="orientation.csv")
    recording = RecordingTable(file="mix.wav")
    if spec.write_activity:
        duration_s = scene.mixture.shape[1] / scene.sample_rate
        recording.noise_only_s = quiet_stretches(spoken, duration_s, ring_s=0.2) or None
    return SceneFile(
        title=spec.title,
        recording=recording,
        array=ArrayTable(file="array.toml"),
        talker=talkers,
        orientation=orientation,
        room=RoomTable(temperature_c=spec.temperature_c),
    )


def _save_orientation(path: Path, orientation: Orientation) -> None:
    with path.open("w", newline="", encoding="utf-8") as stream:
        writer = csv.writer(stream)
        writer.writerow(["time_s", "qw", "qx", "qy", "qz"])
        for time_s, quaternion in zip(orientation.time_s, orientation.quaternions, strict=True):
            writer.writerow([f"{time_s:.6f}", *(f"{part:.9f}" for part in quaternion)])


def _truth(spec: RenderSpec, scene: RenderedScene) -> dict[str, Any]:
    """What is known of the scene and stands in no other file."""
    faults = scene.faults
    noise_db = 10.0 * np.log10(np.maximum(np.mean(scene.noise**2, axis=1), 1e-30))
    return {
        "title": spec.title,
        "seed": spec.seed,
        "sample_rate": scene.sample_rate,
        "duration_s": scene.mixture.shape[1] / scene.sample_rate,
        "temperature_c": scene.temperature_c,
        "talkers": [
            {
                "name": name,
                "level_db": talker.level_db + scene.scale_db,
                "t20_s": scene.t20_s[k],
                "drr_db": scene.drr_db[k],
                "clip_s": list(scene.active_s[k]),
            }
            for k, (name, talker) in enumerate(zip(scene.names, spec.talker, strict=True))
        ],
        "absorption": None if scene.absorption is None else scene.absorption.tolist(),
        "noise_level_db": noise_db.tolist() if scene.noise.any() else None,
        "faults": {
            "gain_db": faults.gain_db.tolist(),
            "delay_s": faults.delay_s.tolist(),
            "polarity": faults.polarity.tolist(),
            "position_m": faults.position_m.tolist(),
            "dead": np.flatnonzero(~faults.alive).tolist(),
            "clip_db": faults.clip_db,
        },
        "scale_db": scene.scale_db,
        "clipped_samples": scene.clipped,
    }
