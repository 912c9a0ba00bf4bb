"""`unmix demo`: the whole job on the demo scene, step by step."""

from __future__ import annotations

import time
from pathlib import Path
from typing import TYPE_CHECKING, Any

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
)
from unmix.cli.reporting import REPORT, no_report_option, refuse_report, write_report

if TYPE_CHECKING:
    from unmix.jobs.render import Rendered
    from unmix.jobs.solution import Solution
    from unmix.metrics.grades import Grades

__all__ = ["command"]

SCENE, TALKERS = "scene", "talkers"


@click.command("demo")
@click.option(
    "--out", default="demo_out", show_default=True, type=existing_file, metavar="DIR", help="Folder for everything."
)
@no_report_option
@overwrite_option
@json_option
def command(out: Path, no_report: bool, overwrite: bool, as_json: bool) -> None:
    """Render, solve and grade a small scene: the whole job at a glance.

    Three people talk at once in a ship's control room (an invented scene); seven microphones lie on the table between
    them. Needs nothing but this package and takes well under a minute.
    """
    began = time.perf_counter()
    if not no_report:
        refuse_report(out, overwrite=overwrite)
    tell = _silent if as_json else say
    tell("1  Rendering the scene")
    rendered = _render(out, overwrite)
    tell(f"   {_describe(rendered)}")
    tell("2  Separating the talkers")
    solution = _solve(rendered, out, overwrite)
    tell("3  Grading each talker against the clean speech")
    grades = _grade(rendered, out, overwrite)
    report = None
    if not no_report:
        tell("4  Writing the report")
        report = _report(rendered, out, solution, grades, overwrite)
    seconds = time.perf_counter() - began
    if as_json:
        print_json(_tree(out, rendered, solution, grades, report, seconds))
        return
    _print(out, rendered, solution, grades, report, seconds)


def _silent(message: str) -> None:
    """Say nothing."""


def _render(out: Path, overwrite: bool) -> Rendered:
    from unmix.jobs.render import render
    from unmix.render.demo import demo_spec_path

    with progress_bar("rendering"):
        return render(demo_spec_path(), out / SCENE, overwrite=overwrite)


def _solve(rendered: Rendered, out: Path, overwrite: bool) -> Solution:
    from unmix.jobs.solve import solve_to_folder
    from unmix.scene import Scene

    with progress_bar("separating") as report:
        return solve_to_folder(Scene.load(rendered.scene_path), out / TALKERS, overwrite=overwrite, progress=report)


def _grade(rendered: Rendered, out: Path, overwrite: bool) -> Grades:
    from unmix.jobs.grade import grade_scene
    from unmix.scene import Scene

    scene = Scene.load(rendered.scene_path)
    with progress_bar("grading"):
        return grade_scene(scene, out / TALKERS, out_dir=out / TALKERS, overwrite=overwrite)


def _report(rendered: Rendered, out: Path, solution: Solution, grades: Grades, overwrite: bool) -> Path | None:
    from unmix.report.material import material_of_scene
    from unmix.scene import Scene

    scene = Scene.load(rendered.scene_path)
    return write_report(
        lambda: material_of_scene(scene, out / TALKERS, solution=solution, grades=grades), out, overwrite=overwrite
    )


def _describe(rendered: Rendered) -> str:
    truth, scene = rendered.truth, rendered.scene
    t20 = [talker["t20_s"] for talker in truth["talkers"] if talker["t20_s"] is not None]
    room = f", reverberation time {sum(t20) / len(t20):.1f} s" if t20 else ""
    return (
        f"{truth['title']}: {len(scene.names)} talkers at once for {truth['duration_s']:.0f} s, "
        f"{scene.array.channels} microphones{room}"
    )


def _tree(
    out: Path, rendered: Rendered, solution: Solution, grades: Grades, report: Path | None, seconds: float
) -> dict[str, Any]:
    return {
        "folder": str(out),
        "scene": str(rendered.scene_path),
        "solution": solution.to_dict(),
        "grades": grades.to_dict(),
        "report": None if report is None else str(report),
        "wall_time_s": seconds,
    }


def _print(
    out: Path, rendered: Rendered, solution: Solution, grades: Grades, report: Path | None, seconds: float
) -> None:
    from unmix.cli.tables import before_and_after, decibels, number

    print_table(before_and_after(grades, brief=True))
    say("before: the reference microphone as recorded; after: the talker's own file.")
    say("SIR: how far the other talkers lie below. SDR: the same for everything that is not the talker.")
    say("STOI: how intelligible, 0 to 1.")
    say()
    click.echo(f"Listen, before:  {out / SCENE / 'mix.wav'}")
    for talker in solution.talkers:
        click.echo(f"        after:   {out / TALKERS / str(talker.file)}")
    if report is not None:
        click.echo(f"Look and listen: open {out / REPORT} in a browser")
    loudest = max(solution.talkers, key=lambda t: t.peak * t.scale)
    say(consent_line(f"{loudest.name} ({number(decibels(loudest.peak * loudest.scale), 1)} dB FS peak)"))
    say(f"Done in {seconds:.0f} s with the variant `{solution.variant.name}`. The same by hand:")
    click.echo(f"  unmix solve {rendered.scene_path} --out DIR")
    click.echo(f"  unmix grade {rendered.scene_path} --estimates DIR")
