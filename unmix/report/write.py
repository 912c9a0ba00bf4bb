"""A job's folder in, its report out: for a scene, for a batch or for exported filters."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from unmix.report.batch_material import is_batch, material_of_batch
from unmix.report.batch_page import write_batch_report
from unmix.report.export_page import is_export, material_of_export, write_export_report
from unmix.report.material import material_of_folder
from unmix.report.page import PageFile
from unmix.report.scene_page import REPORT, write_scene_report

__all__ = ["write_report"]


def write_report(
    folder: str | Path,
    out: str | Path | None = None,
    *,
    scene: str | Path | None = None,
    audio: bool = True,
    hide_names: bool = False,
    sound_mb: float | None = None,
    overwrite: bool = False,
) -> PageFile:
    """Write the report on what a job (`solve`, `batch`, `export`, ...) left in a folder, as one HTML file.

    Parameters
    ----------
    folder : path
        The folder of the job.
    out : path, optional
        The file; ``report.html`` in the folder by default.
    scene : path, optional
        The scene file, where the folder does not say or it has moved.
    audio : bool
        Whether the report carries the voices.
    hide_names : bool
        Whether talkers appear as Talker A, Talker B, ...
    sound_mb : float, optional
        Megabytes of sound at most; a longer recording is cut to its most telling stretch.
    overwrite : bool
        Whether a file that exists may be replaced.

    Returns
    -------
    PageFile
        The file's path and size in bytes.

    Raises
    ------
    FileError, InputError
        Naming file and remedy.
    """
    place = Path(folder)
    path = place / REPORT if out is None else Path(out)
    options: dict[str, Any] = {"audio": audio, "hide_names": hide_names, "overwrite": overwrite}
    if sound_mb is not None:
        options["sound_mb"] = sound_mb
    if is_batch(place):
        return write_batch_report(material_of_batch(place), path, **options)
    if is_export(place):
        return write_export_report(material_of_export(place), path, hide_names=hide_names, overwrite=overwrite)
    material = material_of_folder(place, scene=None if scene is None else Path(scene))
    return write_scene_report(material, path, **options)
