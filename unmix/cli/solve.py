"""`unmix solve`: a scene in, one audio file per talker out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from unmix.cli.common import (
    consent_line,
    existing_file,
    json_option,
    overwrite_option,
    print_json,
    print_table,
    progress_bar,
    say,
    scene_argument,
)
from unmix.cli.presets import complete_variant
from unmix.cli.reporting import REPORT, no_report_option, refuse_report, write_report
from unmix.variant import DEFAULT

if TYPE_CHECKING:
    from unmix.jobs.solution import Solution

__all__ = ["command", "print_solution"]


@click.command("solve")
@scene_argument
@click.option("--out", required=True, type=existing_file, metavar="DIR", help="Folder for the talker signals.")
@click.option(
    "--variant",
    default=DEFAULT,
    show_default=True,
    shell_complete=complete_variant,
    metavar="NAME_OR_FILE",
    help="A preset (see `unmix variants`) or a variant file.",
)
@no_report_option
@overwrite_option
@json_option
def command(scene: Path, out: Path, variant: str, no_report: bool, overwrite: bool, as_json: bool) -> None:
    """Separate the talkers of a scene: one audio file each.

    SCENE is a scene file (TOML): the recording, the array, who sits where. Writes one 32-bit float WAV file per talker
    and solution.json, which says whose is whose and what was done, and a report to look at and listen to.
    """
    from unmix.files import refuse_to_replace
    from unmix.jobs.solve import solve_to_folder
    from unmix.scene import Scene

    loaded = Scene.load(scene)
    refuse_to_replace(out / "solution.json", overwrite=overwrite)
    if not no_report:
        refuse_report(out, overwrite=overwrite)
    with progress_bar(f"separating {loaded.title}") as report:
        solution = solve_to_folder(loaded, out, variant, overwrite=overwrite, progress=report)
    report_path = None
    if not no_report:
        from unmix.report.material import material_of_scene

        report_path = write_report(lambda: material_of_scene(loaded, out, solution=solution), out, overwrite=overwrite)
    if as_json:
        print_json(solution.to_dict())
        return
    print_solution(solution, out, reported=report_path is not None)


def print_solution(solution: Solution, out: Path, *, reported: bool = False) -> None:
    """The table for people, and the cautions that belong to voices."""
    from unmix.cli.tables import decibels, number, solution_table

    seconds = solution.samples / solution.sample_rate
    speed = seconds / max(solution.wall_time_s, 1e-9)
    times = number(speed, 0 if speed >= 10.0 else 1)
    say(
        f"{len(solution.talkers)} talkers, {seconds:.1f} s at {solution.sample_rate} Hz, variant "
        f"{solution.variant.name}, in {solution.wall_time_s:.1f} s ({times} times faster than real time)"
    )
    print_table(solution_table(solution))
    loudest = max(solution.talkers, key=lambda t: t.peak * t.scale)
    say(f"Written to {out}: the talkers' files, solution.json{f' and {REPORT}' if reported else ''}")
    say(consent_line(f"{loudest.name} ({number(decibels(loudest.peak * loudest.scale), 1)} dB FS peak)"))
