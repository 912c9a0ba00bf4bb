"""`unmix report`: the folder of a job in, one HTML file out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from unmix.cli.common import consent_line, existing_file, json_option, overwrite_option, print_json, progress_bar, say
from unmix.cli.reporting import REPORT

if TYPE_CHECKING:
    from unmix.report.material import SceneMaterial
    from unmix.report.page import PageFile

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
@click.option(
    "--listening",
    type=click.Choice(["scale", "pairs"]),
    help="Write a blind listening test instead: scores from 0 to 100 (ITU-R BS.1534), or two at a time.",
)
@click.option(
    "--with",
    "others",
    multiple=True,
    type=existing_file,
    metavar="FOLDER",
    help="Listening: another folder of the same scene to compare with; repeat it.",
)
@click.option("--variant", "variants", multiple=True, metavar="NAME", help="Listening, batch: a variant; repeat it.")
@click.option("--talker", "talkers", multiple=True, metavar="NAME", help="Listening: whom to listen to; repeat it.")
@overwrite_option
@json_option
def command(
    folder: Path,
    out: Path | None,
    scene: Path | None,
    no_audio: bool,
    pseudonyms: bool,
    sound_mb: float | None,
    listening: str | None,
    others: tuple[Path, ...],
    variants: tuple[str, ...],
    talkers: tuple[str, ...],
    overwrite: bool,
    as_json: bool,
) -> None:
    """Turn the folder of a job into one HTML file that opens anywhere.

    FOLDER is what `solve`, `grade`, `batch`, `demo`, `render` or `export` wrote. The file needs no network, carries
    pictures and sound inside itself, and prints. With --listening it is a page for listeners, and a key that tells
    which signal was which: keep the key, send the page, and read the answers with `unmix grade --listeners`.
    """
    if listening is None and (others or variants or talkers):
        raise click.UsageError("--with, --variant and --talker belong to --listening")
    if listening is not None:
        page, key = _listening(folder, out, scene, listening, others, variants, talkers, overwrite)
        _say_listening(page, key, as_json)
        return
    from unmix.files import refuse_to_replace
    from unmix.report.write import write_report

    path = folder / REPORT if out is None else out
    refuse_to_replace(path, overwrite=overwrite)
    with progress_bar("writing the report"):
        page = write_report(
            folder,
            path,
            scene=scene,
            audio=not no_audio,
            hide_names=pseudonyms,
            sound_mb=sound_mb,
            overwrite=overwrite,
        )
    if as_json:
        print_json({"file": str(page.path), "bytes": page.bytes})
        return
    say(f"Written: {page.path} ({page.bytes / 1e6:.1f} MB); open it in a browser")
    if not no_audio:
        say(consent_line())


def _listening(
    folder: Path,
    out: Path | None,
    scene: Path | None,
    procedure: str,
    others: tuple[Path, ...],
    variants: tuple[str, ...],
    talkers: tuple[str, ...],
    overwrite: bool,
) -> tuple[PageFile, Path]:
    """Write the page for listeners and its key."""
    from unmix.report.batch_listening import takes_of_batch
    from unmix.report.batch_material import is_batch, material_of_batch
    from unmix.report.listening_page import LISTENING, takes_of, write_listening_page
    from unmix.report.material import material_of_folder

    path = folder / LISTENING if out is None else out
    with progress_bar("preparing the listening test"):
        if is_batch(folder):
            if others:
                raise click.UsageError("--with is for folders of one scene; a batch takes --variant")
            takes = takes_of_batch(material_of_batch(folder), variants=variants, talkers=talkers)
        else:
            if variants:
                raise click.UsageError("--variant is for a batch; other folders of the scene come with --with")
            materials = [material_of_folder(place, scene=scene) for place in (folder, *others)]
            takes = takes_of(_named(materials, (folder, *others)), talkers=talkers)
        return write_listening_page(
            takes, path, procedure="scale" if procedure == "scale" else "pairs", overwrite=overwrite
        )


def _named(materials: list[SceneMaterial], folders: tuple[Path, ...]) -> list[tuple[str, SceneMaterial]]:
    """Each with its variant's name; with the folder's, too, where two have the same."""
    names = [str((m.solution or {}).get("variant", folder.name)) for m, folder in zip(materials, folders, strict=True)]
    unique = [
        name if names.count(name) == 1 else f"{name} ({folder})" for name, folder in zip(names, folders, strict=True)
    ]
    return list(zip(unique, materials, strict=True))


def _say_listening(page: PageFile, key: Path, as_json: bool) -> None:
    if as_json:
        print_json({"file": str(page.path), "bytes": page.bytes, "key": str(key)})
        return
    say(f"Written: {page.path} ({page.bytes / 1e6:.1f} MB) for listeners, and {key}, which they must not see")
    say(f"Read their answers with: unmix grade --listeners ANSWERS --key {key}")
    say(consent_line())
