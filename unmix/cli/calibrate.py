"""`unmix calibrate`: what each channel does to the sound, from takes, diffuse noise, a tone or sweeps."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import click

from unmix.cli.common import existing_file, json_option, overwrite_option, print_json, print_table, say

if TYPE_CHECKING:
    from unmix.jobs.calibration import Calibration, ClockReport
    from unmix.scene import Scene

__all__ = ["command"]


@click.command("calibrate")
@click.argument("scenes", metavar="SCENE...", type=existing_file, nargs=-1, required=True)
@click.option("--out", type=existing_file, metavar="ARRAY", help="Array file to write, with the corrections.")
@click.option("--positions", is_flag=True, help="Also fit microphone positions.")
@click.option("--blind", is_flag=True, help="From diffuse noise (noise_only_s, else everything), without bearings.")
@click.option(
    "--repaired",
    type=existing_file,
    metavar="FILE",
    help="First resample drifting recorders onto one clock, into FILE; without --out nothing more.",
)
@click.option(
    "--tone-level", type=click.FloatRange(20.0, 180.0), metavar="DB_SPL",
    help="The recording is a tone of this level: find the level of full scale.",
)  # fmt: skip
@click.option("--tone-channel", type=click.IntRange(0), metavar="N", help="Microphone at the calibrator.")
@click.option(
    "--sweep", type=existing_file, metavar="FILE", help="The takes are this sweep, as played: measure responses."
)
@click.option("--responses", type=existing_file, metavar="SOFA", help="SOFA file to write, with --sweep.")
@click.option(
    "--window-ms", type=click.FloatRange(0.5, 500.0), default=4.0, show_default=True, metavar="MS",
    help="What is kept of a response behind the direct sound.",
)  # fmt: skip
@overwrite_option
@json_option
def command(
    scenes: tuple[Path, ...],
    out: Path | None,
    positions: bool,
    blind: bool,
    repaired: Path | None,
    tone_level: float | None,
    tone_channel: int | None,
    sweep: Path | None,
    responses: Path | None,
    window_ms: float,
    overwrite: bool,
    as_json: bool,
) -> None:
    """Find each channel's gain, delay and polarity, and positions when asked for, with standard deviations.

    SCENE is a scene file whose one talker is a source at a known bearing; give several for several bearings, or one
    scene whose talkers play one after the other (active_s). `solve` applies the corrections of the array file written.
    """
    from unmix.files import refuse_to_replace
    from unmix.scene import Scene

    _check_options(len(scenes), out, blind, repaired, tone_level, tone_channel, sweep, responses)
    for path in filter(None, (out, repaired, responses)):
        refuse_to_replace(path, overwrite=overwrite)
    loaded = [Scene.load(path) for path in scenes]
    clocks: tuple[ClockReport, ...] = ()
    if repaired is not None:
        from unmix.jobs.calibrate import put_on_one_clock

        loaded[0], reports = put_on_one_clock(loaded[0], repaired, overwrite=overwrite)
        clocks = tuple(reports)
        if out is None and sweep is None:
            _report_clocks(clocks, repaired, as_json)
            return
    found = _found(loaded, positions, blind, tone_level, tone_channel, sweep, window_ms)
    found = replace(found, clocks=clocks)
    written = [] if repaired is None else [repaired]
    if out is not None:
        found.save(out, overwrite=overwrite)
        written.append(out)
    if responses is not None and found.responses is not None:
        from unmix.sofa import write_sofa

        write_sofa(responses, found.responses, overwrite=overwrite)
        written.append(responses)
    if as_json:
        print_json(found.to_dict())
        return
    _print(found)
    for path in written:
        say(f"Written: {path}")


def _report_clocks(clocks: tuple[ClockReport, ...], repaired: Path, as_json: bool) -> None:
    """What was put onto one clock, when that was all that was asked for."""
    if as_json:
        print_json({"clocks": [vars(c) for c in clocks], "repaired": str(repaired)})
        return
    _print_clocks(clocks)
    if not clocks:
        say("All channels run on one clock; they were copied as they are")
    say(f"Written: {repaired}")


def _print_clocks(clocks: tuple[ClockReport, ...]) -> None:
    for clock in clocks:
        say(
            f"Channel {clock.channel}: {1e3 * clock.delay_s:+.3f} ms and {clock.drift_ppm:+.2f} +- "
            f"{clock.drift_std_ppm:.2f} ppm, put onto the reference's clock"
        )


def _check_options(
    scenes: int,
    out: Path | None,
    blind: bool,
    repaired: Path | None,
    tone_level: float | None,
    tone_channel: int | None,
    sweep: Path | None,
    responses: Path | None,
) -> None:
    """Options that would otherwise be ignored are refused."""
    if sum([blind, tone_level is not None, sweep is not None]) > 1:
        raise click.UsageError("--blind, --tone-level and --sweep are three different recordings; give one of them.")
    if (sweep is None) != (responses is None):
        raise click.UsageError("--sweep FILE and --responses SOFA belong together.")
    if sweep is None and out is None and (repaired is None or blind or tone_level is not None):
        raise click.UsageError("Give --out ARRAY, the array file to write.")
    if sweep is not None and out is not None:
        raise click.UsageError("--sweep writes --responses; for corrections run again without --sweep.")
    if tone_channel is not None and tone_level is None:
        raise click.UsageError("--tone-channel goes with --tone-level.")
    if scenes > 1 and (blind or tone_level is not None or repaired is not None):
        raise click.UsageError("--blind, --tone-level and --repaired take one scene.")


def _found(
    scenes: list[Scene],
    positions: bool,
    blind: bool,
    tone_level: float | None,
    tone_channel: int | None,
    sweep: Path | None,
    window_ms: float,
) -> Calibration:
    from unmix.jobs.calibrate import calibrate, calibrate_blindly, calibrate_level, measure_responses

    if tone_level is not None:
        return calibrate_level(scenes[0], tone_level, channel=tone_channel)
    if sweep is not None:
        from unmix.audio import read_audio

        signal, rate = read_audio(sweep)
        return measure_responses(scenes, signal[0], rate, window_s=1e-3 * window_ms)
    if blind:
        return calibrate_blindly(scenes[0], positions=positions)
    return calibrate(scenes, positions=positions)


def _print(found: Calibration) -> None:
    """Tables for people."""
    from unmix.cli.tables import number, plain_table

    _print_clocks(found.clocks)
    if found.tone_hz is not None:
        say(f"Tone at {found.tone_hz:.0f} Hz: full scale is {found.array.full_scale_db_spl:.1f} dB SPL")
        return
    if found.measured:
        heads = [("take", "left"), ("azimuth\ndeg", "right"), ("elevation\ndeg", "right"), ("T20\ns", "right")]
        heads += [("direct to\nreverberant, dB", "right"), ("undefined", "left")]
        rows = [
            [m.name, number(m.azimuth_deg, 1), number(m.elevation_deg, 1), number(m.t20_s, 2), number(m.drr_db, 1),
             "; ".join(f"{k}: {v}" for k, v in m.undefined.items())]
            for m in found.measured
        ]  # fmt: skip
        print_table(plain_table(heads, rows))
        return
    _print_channels(found)
    for note in found.notes:
        say(f"Note: {note}")


def _print_channels(found: Calibration) -> None:
    from unmix.cli.tables import number, plain_table

    a = found.array
    heads = [("channel", "left"), ("gain\ndB", "right"), ("+-", "right"), ("delay\nus", "right"), ("+-", "right")]
    heads += [("polarity", "left"), ("moved\nmm", "right"), ("+-", "right")] if found.axes else [("polarity", "left")]
    rows = []
    for m in range(a.channels):
        gain_std = None if a.gain_std_db is None else float(a.gain_std_db[m])
        delay_std = None if a.delay_std_s is None else 1e6 * float(a.delay_std_s[m])
        row = [str(m), number(float(a.gain_db[m]), 2), number(gain_std, 3)]
        row += [number(1e6 * float(a.delay_s[m]), 2), number(delay_std, 3), "turned" if a.polarity[m] < 0 else ""]
        if found.axes:
            position_std = None if a.position_std_m is None else 1e3 * float(a.position_std_m[m])
            row += [number(1e3 * float(found.moved_m[m]), 2), number(position_std, 3)]
        rows.append(row)
    what = f"{len(found.takes)} take{'s' if len(found.takes) != 1 else ''}" if found.takes else found.method
    fitted = f", positions fitted: {', '.join(found.axes)}" if found.axes else ""
    say(f"From {what}, against channel {a.reference_channel}{fitted}")
    print_table(plain_table(heads, rows))
