"""`unmix report`: the folder of a job in, one HTML file out."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from unmix.cli.common import consent_line, existing_file, json_option, overwrite_option, print_json, progress_bar, say
from unmix.cli.reporting import REPORT

__all__ = ["command"]


@click.command("report")
@click.argument("folder", metavar="FOLDER", type=existing_file)
@click.option("--out", type=existing_file, metavar="FILE", help=f"The file to write. [default: {REPORT} in the folder]")
@click.option("--scene", type=existing_file, metavar="SCENE", help="The scene file, where the folder does not say.")
@click.option("--no-audio", is_flag=True, help="Leave the voices out.")
@click.option("--pseudonyms", is_flag=True, help="Call the talkers Talker A, Talker B, ...")
@click.option(
    "--sound-mb",
    type=click.FloatRange(0.1, 500.0),
    metavar="MB",
    help="Megabytes of sound at most; longer recordings are cut to a telling stretch. [default: 5; batch: 10]",
)
@overwrite_option
@json_option
def command(
    folder: Path,
    out: Path | None,
    scene: Path | None,
    no_audio: bool,
    pseudonyms: bool,
    sound_mb: float | None,
    overwrite: bool,
    as_json: bool,
) -> None:
    """Turn the folder of a job into one HTML file that opens anywhere.

    FOLDER is what `solve`, `grade`, `batch` or `demo` wrote. The file needs no network, carries pictures and sound
    inside itself, and prints.
    """
    from unmix.files import refuse_to_replace
    from unmix.report.batch_material import is_batch, material_of_batch
    from unmix.report.batch_page import write_batch_report
    from unmix.report.material import material_of_folder
    from unmix.report.scene_page import write_scene_report

    path = folder / REPORT if out is None else out
    refuse_to_replace(path, overwrite=overwrite)
    options: dict[str, Any] = {"audio": not no_audio, "hide_names": pseudonyms, "overwrite": overwrite}
    if sound_mb is not None:
        options["sound_mb"] = sound_mb
    with progress_bar("writing the report"):
        if is_batch(folder):
            page = write_batch_report(material_of_batch(folder), path, **options)
        else:
            page = write_scene_report(material_of_folder(folder, scene=scene), path, **options)
    if as_json:
        print_json({"file": str(page.path), "bytes": page.bytes})
        return
    say(f"Written: {page.path} ({page.bytes / 1e6:.1f} MB); open it in a browser")
    if not no_audio:
        say(consent_line())
