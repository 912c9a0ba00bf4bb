"""`unmix check`: is the recording sound, and does it fit its array?"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from unmix.cli.common import (
    existing_file,
    json_option,
    overwrite_option,
    print_json,
    print_table,
    progress_bar,
    say,
    scene_argument,
)

if TYPE_CHECKING:
    from unmix.jobs.findings import Checked

__all__ = ["command"]

UNFIT = 4


@click.command("check")
@scene_argument
@click.option("--plot", type=existing_file, metavar="FILE", help="Picture of array and bearings (svg, png or pdf).")
@overwrite_option
@json_option
def command(scene: Path, plot: Path | None, overwrite: bool, as_json: bool) -> int:
    """Check recording and array before anything is separated: one pass, findings with what to do.

    SCENE is a scene file (TOML). Exit status: 0 fit to separate, 4 unfit.
    """
    from unmix.files import refuse_to_replace
    from unmix.jobs.check import check
    from unmix.scene import Scene

    if plot is not None:
        refuse_to_replace(plot, overwrite=overwrite)
    loaded = Scene.load(scene)
    with progress_bar(f"checking {loaded.title}") as report:
        checked = check(loaded, progress=report)
    if plot is not None:
        from unmix.report.array_figure import array_figure
        from unmix.report.figures import save_figure

        marked = {c for f in checked.findings if f.severity == "unfit" for c in f.channels}
        save_figure(array_figure(loaded, marked=marked), plot, overwrite=overwrite)
    if as_json:
        print_json(checked.to_dict())
    else:
        _print(checked)
        if plot is not None:
            say(f"Written: {plot}")
    return 0 if checked.fit else UNFIT


def _print(checked: Checked) -> None:
    """Tables for people."""
    from unmix.cli.tables import number, plain_table
    from unmix.jobs.findings import surely

    speed = checked.duration_s / max(checked.wall_time_s, 1e-9)
    say(
        f"{checked.title}: {len(checked.channels)} channels, {checked.duration_s:.1f} s at {checked.sample_rate} Hz, "
        f"looked through in {checked.wall_time_s:.1f} s ({speed:.0f} times faster than real time)"
    )
    spl = any(c.level_db_spl is not None for c in checked.channels)
    heads = [("channel", "left"), ("level\ndB FS", "right"), ("peak\ndB FS", "right"), ("noise\ndB FS", "right")]
    heads += [("level\ndB SPL", "right"), ("noise\ndB SPL", "right")] if spl else []
    heads += [("clipped\nsamples", "right"), ("drop-outs", "right"), ("delay\nms", "right")]
    rows = []
    for c in checked.channels:
        row = [str(c.channel), number(c.level_db, 1), number(c.peak_db, 1), number(c.noise_db, 1)]
        row += [number(c.level_db_spl, 1), number(c.noise_db_spl, 1)] if spl else []
        delay = None if c.delay_s is None else 1e3 * c.delay_s
        rows.append([*row, str(c.clipped), str(c.dropouts), number(delay, 3)])
    print_table(plain_table(heads, rows))
    if checked.findings:
        heads = [("", "left"), ("what", "left"), ("where", "left"), ("how sure", "left"), ("what to do", "left")]
        print_table(
            plain_table(
                heads, [[f.severity, f.what, f.where, surely(f.confidence), f.remedy] for f in checked.findings]
            )
        )
    say("Fit to separate." if checked.fit else "Not fit to separate: put right what is marked unfit first.")
