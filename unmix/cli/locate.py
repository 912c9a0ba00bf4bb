"""`unmix locate`: where the talkers of a scene are, how many, and when each one speaks."""

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
    from unmix.jobs.located import Located

__all__ = ["command"]


@click.command("locate")
@scene_argument
@click.option("--out", type=existing_file, metavar="SCENE2", help="Write the scene with the bearings filled in.")
@click.option(
    "--talkers", type=click.IntRange(0, 4), metavar="N", help="How many talkers there are; default: estimated."
)
@click.option(
    "--method",
    type=click.Choice(["mixture", "srp", "snapshots", "fit"]),
    default="mixture",
    show_default=True,
    help="How directions are scored; mixture is the one for rooms.",
)
@click.option(
    "--region",
    type=click.Choice(["sphere", "ring"]),
    default="sphere",
    show_default=True,
    help="Where to look: everywhere, or level with the array only.",
)
@click.option("--plot", type=existing_file, metavar="FILE", help="Picture of bearings over time (svg, png or pdf).")
@click.option("--rttm", type=existing_file, metavar="FILE", help="Write who speaks when as RTTM.")
@overwrite_option
@json_option
def command(
    scene: Path,
    out: Path | None,
    talkers: int | None,
    method: str,
    region: str,
    plot: Path | None,
    rttm: Path | None,
    overwrite: bool,
    as_json: bool,
) -> None:
    """Find the talkers of a scene: bearings with standard deviations, their number, when each one speaks.

    SCENE is a scene file (TOML). Talkers it lists without a bearing are found and keep their names; a scene that lists
    none has its talkers counted first.
    """
    from unmix.files import refuse_to_replace
    from unmix.jobs.locate import METHODS, locate
    from unmix.scene import Scene

    for path in filter(None, (out, plot, rttm)):
        refuse_to_replace(path, overwrite=overwrite)
    if plot is not None:
        from unmix.report.figures import check_format

        check_format(plot)
    loaded = Scene.load(scene)
    chosen = METHODS[[str(m) for m in METHODS].index(method)]
    with progress_bar(f"locating {loaded.title}") as report:
        located = locate(
            loaded, talkers=talkers, method=chosen, region="ring" if region == "ring" else "sphere", progress=report
        )
    written = _write(located, out, plot, rttm, overwrite)
    if as_json:
        print_json(located.to_dict())
        return
    _print(located)
    for path in written:
        say(f"Written: {path}")


def _write(located: Located, out: Path | None, plot: Path | None, rttm: Path | None, overwrite: bool) -> list[Path]:
    written: list[Path] = []
    if out is not None:
        written += located.save(out, overwrite=overwrite)
    if rttm is not None:
        from unmix.rttm import write_rttm

        stem = located.scene.path.stem if located.scene is not None and located.scene.path is not None else "recording"
        write_rttm(rttm, located.activity, file_id=stem, overwrite=overwrite)
        written.append(rttm)
    if plot is not None:
        from unmix.report.figures import bearing_figure, save_figure

        save_figure(bearing_figure(located), plot, overwrite=overwrite)
        written.append(plot)
    return written


def _print(located: Located) -> None:
    """The table for people."""
    from math import degrees

    from unmix.cli.tables import number, plain_table

    count = located.count
    speed = located.duration_s / max(located.wall_time_s, 1e-9)
    range_text = "" if not count.ambiguous else f" ({count.lowest} to {count.highest} possible)"
    say(
        f"{count.used} talkers{range_text} in {located.duration_s:.1f} s, bearings in the {located.frame}'s frame, "
        f"found in {located.wall_time_s:.1f} s ({speed:.0f} times faster than real time)"
    )
    if not located.talkers:
        return
    columns = [
        ("talker", "left"),
        ("azimuth, deg", "right"),
        ("+-", "right"),
        ("elevation, deg", "right"),
        ("+-", "right"),
        ("", "left"),
        ("speaks, s", "right"),
        ("or at, deg", "left"),
    ]
    rows = []
    for talker in located.talkers:
        spoken = sum(stop - start for start, stop in talker.active_s)
        others = ", ".join(f"{degrees(a):.0f}/{degrees(e):.0f}" for a, e in talker.candidates)
        state = "doubtful" if talker.doubtful else "moving" if talker.moving else "at rest"
        rows.append(
            [
                talker.name,
                number(degrees(talker.azimuth), 1),
                number(degrees(talker.azimuth_std), 1),
                number(degrees(talker.elevation), 1),
                number(degrees(talker.elevation_std), 1),
                state,
                number(spoken, 1),
                others,
            ]
        )
    print_table(plain_table(columns, rows))
