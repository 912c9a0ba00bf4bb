"""`unmix grade`: talker signals and references in, figures out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from unmix.cli.common import existing_file, json_option, overwrite_option, print_json, print_table, progress_bar, say
from unmix.cli.listeners import grade_listeners
from unmix.cli.reporting import REPORT, no_report_option, refuse_report, write_report

if TYPE_CHECKING:
    from unmix.metrics.grades import Grades
    from unmix.report.material import SceneMaterial
    from unmix.scene import Scene

__all__ = ["command", "print_grades"]


@click.command("grade")
@click.argument("scene", metavar="[SCENE]", type=existing_file, required=False)
@click.option("--estimates", type=existing_file, metavar="DIR", help="Folder of talker signals, as `solve` writes it.")
@click.option(
    "--against",
    type=click.Choice(["early", "image", "dry", "plain"]),
    help="Kind of reference. [default: the first the talkers have]",
)
@click.option("--reference", "references", multiple=True, type=existing_file, help="Clean speech; once per talker.")
@click.option("--estimate", "given", multiple=True, type=existing_file, help="A talker signal; once per talker.")
@click.option("--unprocessed", type=existing_file, metavar="MIX", help="The recording, for the figures before.")
@click.option("--unprocessed-channel", type=int, default=0, show_default=True, help="Its reference microphone.")
@click.option(
    "--match",
    type=click.Choice(["name", "best"]),
    help="By name, or whichever assignment gives the highest SIR. [default: name where names fit]",
)
@click.option("--alone", is_flag=True, help="Without references: leakage where one talker is alone.")
@click.option("--close", is_flag=True, help="References are close microphones: take the others' bleed out first.")
@click.option("--filter-length", type=int, default=512, show_default=True, help="Taps of BSS Eval's allowed filter.")
@click.option(
    "--listeners",
    multiple=True,
    type=existing_file,
    metavar="FILE",
    help="Instead: answers of a listening test that `unmix report --listening` made; once per listener.",
)
@click.option("--key", type=existing_file, metavar="FILE", help="Its key. [default: listening-key.json beside them]")
@click.option("--keep-all", is_flag=True, help="Keep listeners who did not recognise the hidden reference.")
@click.option("--cross-check", is_flag=True, help="Recompute with mir_eval and print the largest difference.")
@click.option("--out", type=existing_file, metavar="DIR", help="Folder for grades.json and the report.")
@click.option("--plot", type=existing_file, metavar="FILE", help="Picture of before and after (svg, png or pdf).")
@no_report_option
@overwrite_option
@json_option
def command(
    scene: Path | None,
    estimates: Path | None,
    against: str | None,
    references: tuple[Path, ...],
    given: tuple[Path, ...],
    unprocessed: Path | None,
    unprocessed_channel: int,
    match: str | None,
    alone: bool,
    close: bool,
    filter_length: int,
    listeners: tuple[Path, ...],
    key: Path | None,
    keep_all: bool,
    cross_check: bool,
    out: Path | None,
    plot: Path | None,
    no_report: bool,
    overwrite: bool,
    as_json: bool,
) -> None:
    """Grade talker signals against references, before and after.

    Either a SCENE with references and --estimates DIR, or files: --reference and --estimate once per talker, and
    --unprocessed for the recording. Or what people heard: --listeners. A report that `solve` left in the --out folder
    is renewed with the figures.
    """
    if listeners:
        if scene is not None or references or given:
            raise click.UsageError("--listeners stands alone: give no SCENE, --reference or --estimate with it")
        grade_listeners(listeners, key, keep_all=keep_all, out=out, overwrite=overwrite, as_json=as_json)
        return
    if key is not None or keep_all:
        raise click.UsageError("--key and --keep-all belong to --listeners")
    _check_usage(scene, estimates, references, given)
    if plot is not None and alone:
        raise click.UsageError("--plot draws figures before and after; with --alone there are none")
    if alone or close:
        if scene is None or estimates is None or (alone and close):
            raise click.UsageError("give SCENE and --estimates DIR with --alone or --close, one of them")
        kind = against if close else None
        shown = {"overwrite": overwrite, "as_json": as_json, "report": not no_report}
        _grade_real(scene, estimates, kind, out, plot, close=close, **shown)
        return
    from unmix.files import refuse_to_replace
    from unmix.jobs.grade import grade_files, grade_scene, grades_tree
    from unmix.scene import Scene

    options: dict[str, Any] = {
        "match": match,
        "filter_length": filter_length,
        "cross_check": cross_check,
        "out_dir": out,
        "overwrite": overwrite,
    }
    if out is not None and not no_report:
        refuse_to_replace(out / "grades.json", overwrite=overwrite)
        refuse_report(out, overwrite=overwrite, renew=True)
    if plot is not None:
        _check_plot(plot, overwrite)
    loaded = None if scene is None else Scene.load(scene)
    with progress_bar("grading"):
        if loaded is not None and estimates is not None:
            grades = grade_scene(loaded, estimates, against=against, **options)
        else:
            grades = grade_files(
                given, references, unprocessed=unprocessed, unprocessed_channel=unprocessed_channel, **options
            )
    if plot is not None:
        _draw(grades, plot, overwrite)
    reported = None
    if out is not None and not no_report:

        def material() -> SceneMaterial:
            if loaded is not None and estimates is not None:
                return _graded_scene(loaded, estimates, grades)
            return _graded_files(grades, given, references, unprocessed, unprocessed_channel)

        reported = write_report(material, out, overwrite=True)
    if as_json:
        source = None if loaded is None else loaded.path
        print_json(grades_tree(grades, out, scene=source, estimates=estimates))
        return
    print_grades(grades, cross_check=cross_check)
    if out is not None:
        say(f"Written to {out}: grades.json{f' and {REPORT}' if reported else ''}")


def _grade_real(
    scene: Path,
    estimates: Path,
    against: str | None,
    out: Path | None,
    plot: Path | None,
    *,
    close: bool,
    overwrite: bool,
    as_json: bool,
    report: bool,
) -> None:
    """Grade a recording that has no clean references, and say what the figures can claim."""
    from unmix.cli.tables import alone_table, bleed_table
    from unmix.files import path_from, refuse_to_replace, write_json
    from unmix.jobs.grade_real import AloneGrades, grade_alone, grade_close
    from unmix.scene import Scene

    if out is not None:
        refuse_to_replace(out / "grades.json", overwrite=overwrite)
        if report:
            refuse_report(out, overwrite=overwrite, renew=True)
    if plot is not None:
        _check_plot(plot, overwrite)
    loaded = Scene.load(scene)
    with progress_bar("grading"):
        graded = grade_close(loaded, estimates, against=against) if close else grade_alone(loaded, estimates)
    if plot is not None and not isinstance(graded, AloneGrades):
        _draw(graded.grades, plot, overwrite)
    tree, reported = graded.to_dict(), None
    if out is not None:
        tree |= {"scene": path_from(out, scene), "estimates": path_from(out, estimates)}
        write_json(out / "grades.json", tree, overwrite=overwrite)
        grades = None if isinstance(graded, AloneGrades) else graded.grades
        if report:
            reported = write_report(lambda: _graded_scene(loaded, estimates, grades, tree), out, overwrite=True)
    if as_json:
        print_json(tree)
        return
    if isinstance(graded, AloneGrades):
        noise = "taken off" if graded.noise_taken_off else "counted as leakage, since noise_only_s is not given"
        say(f"Leakage where one talker is alone; stretches {graded.stretches}, noise {noise}")
        print_table(alone_table(graded))
    else:
        print_grades(graded.grades)
        say(f"Bleed of the close microphones, where one talker is alone; stretches {graded.stretches}")
        print_table(bleed_table(graded))
    for claim in graded.claims:
        say(claim)
    if out is not None:
        say(f"Written to {out}: grades.json{f' and {REPORT}' if reported else ''}")


def _check_plot(plot: Path, overwrite: bool) -> None:
    """Say what is wrong with a picture's place before the work."""
    from unmix.files import refuse_to_replace
    from unmix.report.figures import check_format

    check_format(plot)
    refuse_to_replace(plot, overwrite=overwrite)


def _draw(grades: Grades, plot: Path, overwrite: bool) -> None:
    from unmix.report.figures import save_figure
    from unmix.report.scene_figures import verdict_figure

    save_figure(verdict_figure(grades), plot, overwrite=overwrite)


def _graded_scene(
    scene: Scene, estimates: Path, grades: Grades | None, real: dict[str, Any] | None = None
) -> SceneMaterial:
    """What the report on a graded scene is made of."""
    from unmix.report.material import material_of_scene, read_solution

    solution = read_solution(estimates / "solution.json")
    return material_of_scene(scene, estimates, solution=solution, grades=grades, real=real)


def _graded_files(
    grades: Grades, given: tuple[Path, ...], references: tuple[Path, ...], unprocessed: Path | None, channel: int
) -> SceneMaterial:
    """The same for files without a scene."""
    from unmix.audio import Recording
    from unmix.report.material import SceneMaterial

    names = tuple(t.name for t in grades.talkers)
    return SceneMaterial(
        title="Graded: " + ", ".join(names),
        names=names,
        recording=None if unprocessed is None else Recording.open([unprocessed]),
        reference_channel=channel,
        outputs={t.name: given[t.estimate] for t in grades.talkers if t.estimate is not None},
        references=dict(zip(names, references, strict=True)),
        grades=grades,
    )


def _check_usage(
    scene: Path | None, estimates: Path | None, references: tuple[Path, ...], given: tuple[Path, ...]
) -> None:
    if scene is None and (references or given):
        if not references or not given:
            raise click.UsageError("give --reference and --estimate, once per talker each")
        if estimates is not None:
            raise click.UsageError("--estimates belongs to a SCENE; give files with --estimate")
        return
    if scene is None:
        raise click.UsageError("give SCENE and --estimates DIR, or --reference and --estimate files")
    if references or given:
        raise click.UsageError("give a SCENE or files with --reference and --estimate, not both")
    if estimates is None:
        raise click.UsageError("with SCENE, give the folder of talker signals: --estimates DIR")


def print_grades(grades: Grades, *, cross_check: bool = False) -> None:
    """The table for people."""
    from unmix.cli.tables import before_and_after, speech_table, undefined_lines
    from unmix.metrics.information import ENOUGH_S
    from unmix.metrics.words import CAUTION

    start, stop = grades.span_s
    say(f"Against the {grades.against} references, {stop - start:.1f} s at {grades.sample_rate} Hz")
    print_table(before_and_after(grades))
    if any(talker.speech is not None for talker in grades.talkers):
        print_table(speech_table(grades))
        say(
            "equivalent SNR: a mixture of the references with the others so far below would be as intelligible by STOI."
        )
        say(f"Mind: {CAUTION}.")
        shortest = min(
            (t.speech.speech_s for t in grades.talkers if t.speech is not None and t.speech.speech_s), default=0.0
        )
        if 0.0 < shortest < ENOUGH_S:
            say(f"Bits rest on {shortest:.0f} s of speech and more; {ENOUGH_S:.0f} s are recommended.")
    for line in (*undefined_lines(grades), *grades.warnings):
        say(f"Note: {line}")
    if cross_check and grades.cross_check_db is not None:
        say(f"Largest difference to mir_eval: {grades.cross_check_db:.2e} dB")
