"""`unmix export`: the filters of a variant as files for those who build the device."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from unmix.cli.common import (
    existing_file,
    json_option,
    overwrite_option,
    print_json,
    print_table,
    progress_bar,
    say,
)
from unmix.cli.presets import complete_variant
from unmix.cli.reporting import REPORT, no_report_option, refuse_report
from unmix.cli.seats import bearing_option, who_and_where
from unmix.cli.tradeoffs import check_picture, measured_tradeoffs, print_tradeoffs, save_tradeoffs

if TYPE_CHECKING:
    from unmix.export.job import Exported
    from unmix.export.tradeoffs import Tradeoffs

__all__ = ["command"]

WORDS: list[Any] = ["float32", "s24", "s16", "s12", "s8"]


@click.command("export")
@click.argument("source", metavar="SCENE_OR_ARRAY", type=existing_file)
@click.option("--out", required=True, type=existing_file, metavar="DIR", help="Folder for the files.")
@bearing_option
@click.option(
    "--variant",
    default="model",
    show_default=True,
    shell_complete=complete_variant,
    metavar="NAME_OR_FILE",
    help="A preset or a variant file that is filters alone.",
)
@click.option("--rate", type=int, metavar="HZ", help="Sample rate; needed with an array file.")
@click.option("--loss-db", type=float, default=0.5, show_default=True, help="Loss in SIR that tap length may cost.")
@click.option("--latency-ms", type=click.FloatRange(0.0, 1000.0), help="Most that filters may see of the future.")
@click.option(
    "--word", "words", multiple=True, type=click.Choice(WORDS), help="Word length; repeat it (default: all but s8)."
)
@click.option("--grid-deg", type=float, metavar="DEG", help="Also a table of filters, one talker going round in steps.")
@click.option("--grid-talker", metavar="NAME", help="Who goes round (default: the first).")
@click.option(
    "--plot", type=existing_file, metavar="FILE", help="Also a picture: presets' quality against latency, work, words."
)
@click.option(
    "--plot-t20-s",
    type=click.FloatRange(0.0, 1.5),
    default=0.3,
    show_default=True,
    help="Reverberation time of the picture's and the report's room; 0: none.",
)
@no_report_option
@overwrite_option
@json_option
def command(**options: Any) -> None:
    """Write a variant's filters: NumPy archive, CSV and C header, with what they cost.

    SCENE_OR_ARRAY is a scene file, whose array, talkers and rate are taken, or an array file with --bearing for each
    talker and --rate. Tap length follows from --loss-db. Every figure is by formula and measured on speech, without a
    room; they stand in export.json, which --json prints. The report compares the presets on the same array, in a room.
    """
    plot, t20_s, no_report, as_json = (options.pop(n) for n in ("plot", "plot_t20_s", "no_report", "as_json"))
    source, bearings, out, overwrite = (options[n] for n in ("source", "bearings", "out", "overwrite"))
    if plot is not None:
        check_picture(plot, overwrite=overwrite)
    if not no_report:
        refuse_report(out, overwrite=overwrite)
    why_not = _why_not_compared(source, bearings, asked=plot is not None)
    exported = _export(**options)
    found: Tradeoffs | None = None
    if not why_not and (plot is not None or not no_report):
        array, talkers, _ = who_and_where(source, bearings)
        found = measured_tradeoffs(array, talkers, sample_rate=exported.bank.sample_rate, t20_s=t20_s or None)
    if plot is not None and found is not None:
        save_tradeoffs(found, plot, overwrite=overwrite)
    report = None if no_report else _report(out, found, why_not, overwrite=overwrite)
    if as_json:
        tree = exported.to_dict()
        if found is not None:
            tree["tradeoffs"] = found.to_dict()
        tree["report"] = None if report is None else str(report)
        print_json(tree)
        return
    _print(exported, out)
    if found is not None:
        print_tradeoffs(found)
    elif not no_report:
        say(f"The presets were not compared: {why_not}")
    for what, path in (("Picture of the presets on this array", plot), ("Report", report)):
        if path is not None:
            say(f"{what}: {path}")


def _export(
    source: Path,
    out: Path,
    bearings: Sequence[str],
    variant: str,
    rate: int | None,
    loss_db: float,
    latency_ms: float | None,
    words: Sequence[Any],
    grid_deg: float | None,
    grid_talker: str | None,
    overwrite: bool,
) -> Exported:
    from unmix.errors import InputError
    from unmix.export.job import export_bank
    from unmix.live.design import noise_spectra

    array, talkers, scene = who_and_where(source, bearings)
    if scene is None and rate is None:
        raise click.UsageError("an array file says not at which rate; give --rate")
    if scene is not None and rate is not None and rate != scene.sample_rate:
        raise InputError(f"--rate {rate}: the scene's recording has {scene.sample_rate} Hz; leave --rate out")
    moving = [t.name for t in talkers if t.track is not None]
    if moving:
        raise InputError(f"{source}: {moving[0]} moves along a track; give bearings at rest, or a table by --grid-deg")
    names = [t.name for t in talkers]
    if grid_talker is not None and grid_talker not in names:
        raise InputError(f"--grid-talker {grid_talker}: nobody is called so; talkers are {', '.join(names)}")
    with progress_bar("making filters") as report:
        return export_bank(
            array, talkers, out, variant,
            sample_rate=rate or (0 if scene is None else scene.sample_rate),
            temperature_c=20.0 if scene is None else scene.temperature_c,
            noise=None if scene is None else noise_spectra(scene),
            loss_db=loss_db, latency_s=None if latency_ms is None else 1e-3 * latency_ms,
            words=words or WORDS[:4], grid_deg=grid_deg, grid_talker=names.index(grid_talker) if grid_talker else 0,
            overwrite=overwrite, progress=report,
        )  # fmt: skip


def _why_not_compared(source: Path, bearings: Sequence[str], *, asked: bool) -> str:
    """Why the presets cannot be measured on the array; empty when they can. An error when they were asked for."""
    from unmix.errors import InputError
    from unmix.export.tradeoffs import check_tradeoffs

    array, talkers, _ = who_and_where(source, bearings)
    try:
        check_tradeoffs(array, talkers)
    except InputError as error:
        if asked:
            raise
        return str(error)
    return ""


def _report(out: Path, found: Tradeoffs | None, why_not: str, *, overwrite: bool) -> Path | None:
    """Write tradeoffs.json and the report; when that fails the filters stand all the same, and a warning says so."""
    import warnings

    from unmix.errors import UnmixError, UnmixWarning
    from unmix.files import write_json
    from unmix.report.export_page import TRADEOFFS, material_of_export, write_export_report

    try:
        tree = {"not_measured": why_not} if found is None else found.to_dict()
        write_json(out / TRADEOFFS, tree, overwrite=overwrite)
        return write_export_report(material_of_export(out), out / REPORT, overwrite=overwrite).path
    except UnmixError as error:
        warnings.warn(f"no report was written: {error}", UnmixWarning, stacklevel=2)
        return None


def _print(exported: Exported, out: Path) -> None:
    """The tables for people."""
    bank = exported.bank
    talkers, channels, taps = bank.taps.shape
    late = 1e3 * bank.delay / bank.sample_rate
    say(
        f"{talkers} x {channels} filters of variant {bank.variant}: {taps} taps at {bank.sample_rate} Hz "
        f"(of {exported.whole_taps}), late by {bank.delay} samples ({late:.1f} ms)"
    )
    if exported.sir_db:
        say(
            f"SIR without a room, worst talker: {min(exported.sir_db):.1f} dB, before shortening "
            f"{min(exported.sir_whole_db):.1f} dB; shortening changes the output by {exported.change_db:.0f} dB"
        )
    _print_words(exported)
    _print_costs(exported)
    if exported.grid is not None:
        grid = exported.grid
        say(
            f"Table: {grid.talker} in steps of {grid.step_deg:g} deg, {grid.usable} of {grid.entries} entries with "
            f"filters, {grid.memory_bytes / 1e6:.1f} MB"
        )
        _print_interpolation(exported)
    say(f"Written to {out}: {', '.join(exported.files)}")


def _print_words(exported: Exported) -> None:
    from unmix.cli.tables import number, plain_table

    columns = [
        ("word", "left"),
        ("SIR lost\nexpected, dB", "right"),
        ("SIR lost\nmeasured, dB", "right"),
        ("noise gain\npredicted, dB", "right"),
        ("noise gain\nmeasured, dB", "right"),
        ("peak gain\npredicted, dB", "right"),
        ("peak gain\nmeasured, dB", "right"),
        ("head-room\nbits", "right"),
    ]
    rows = []
    for word in exported.words:
        pairs = zip(exported.sir_predicted_db, word.sir_expected_db, strict=True)
        expected = max((whole - rounded for whole, rounded in pairs), default=None)
        rows.append(
            [
                word.word,
                number(expected, 2),
                number(max(word.loss_measured_db, default=None), 2),
                number(max(word.noise_gain_predicted_db), 2),
                number(max(word.noise_gain_measured_db), 2),
                number(max(word.peak_gain_predicted_db), 1),
                number(max(word.peak_gain_measured_db), 1),
                str(word.headroom_bits),
            ]
        )
    print_table(plain_table(columns, rows))
    say("The worst talker of each. Expected: by formula, from the word length alone.")


def _print_interpolation(exported: Exported) -> None:
    from unmix.cli.tables import number, plain_table

    columns = [
        ("between entries", "left"),
        ("SIR lost\nmedian, dB", "right"),
        ("SIR lost\nworst, dB", "right"),
        ("SIR left\nmedian, dB", "right"),
        ("SIR left\nworst, dB", "right"),
    ]
    rows = [
        [c.how, *(number(v, 1) for v in (c.median_db, c.worst_db, c.left_median_db, c.left_worst_db))]
        for c in (exported.grid.interpolation if exported.grid else [])
    ]
    print_table(plain_table(columns, rows))


def _print_costs(exported: Exported) -> None:
    from unmix.cli.tables import number, plain_table

    columns = [
        ("convolution", "left"),
        ("block", "right"),
        ("million MAC/s", "right"),
        ("memory, kB", "right"),
        ("latency, ms", "right"),
    ]
    rows = [
        [
            cost.form,
            str(cost.block),
            number(1e-6 * cost.mac_per_s, 1),
            number(1e-3 * cost.memory_bytes, 0),
            number(1e3 * cost.latency_samples / exported.bank.sample_rate, 1),
        ]
        for cost in exported.costs
    ]
    print_table(plain_table(columns, rows))
