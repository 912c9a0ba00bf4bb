"""`unmix limits`: what an array can achieve at best, before any recording exists."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from unmix.cli.common import existing_file, json_option, overwrite_option, print_json, print_table, say
from unmix.cli.tradeoffs import check_picture, measured_tradeoffs, print_tradeoffs, save_tradeoffs

if TYPE_CHECKING:
    from unmix.array import Array
    from unmix.export.tradeoffs import Tradeoffs
    from unmix.jobs.limits import Limits

__all__ = ["command"]

_SHOWN_HZ = (125.0, 250.0, 500.0, 1000.0, 2000.0, 4000.0)


@click.command("limits")
@click.argument("array", metavar="ARRAY", type=existing_file)
@click.option("--talkers", type=click.IntRange(2, 4), default=2, show_default=True, help="Talkers at once.")
@click.option(
    "--snr", "snr_db", type=click.FloatRange(0.0, 100.0), default=30.0, show_default=True, metavar="DB",
    help="Each talker over one microphone's own noise.",
)  # fmt: skip
@click.option(
    "--required", "required_db", type=click.FloatRange(-20.0, 60.0), default=10.0, show_default=True, metavar="DB",
    help="Output SNR at which a band counts as usable.",
)  # fmt: skip
@click.option(
    "--sample-rate", type=click.IntRange(8000, 192000), default=16000, show_default=True, metavar="HZ",
    help="Sample rate of the recordings to come.",
)  # fmt: skip
@click.option(
    "--error", "error_db", type=click.FloatRange(-120.0, -1.0), default=-40.0, show_default=True, metavar="DB",
    help="Expansion error to be held.",
)  # fmt: skip
@click.option(
    "--room", type=(click.FloatRange(0.05, 10.0), click.FloatRange(1.0, 1e5), click.FloatRange(0.05, 100.0)),
    default=(0.5, 60.0, 1.2), show_default=True, metavar="T60_S M3 M",
    help="Reverberation time, volume and talkers' distance of an ideal room.",
)  # fmt: skip
@click.option(
    "--tolerances", type=(click.FloatRange(0.0, 20.0), click.FloatRange(0.0, 90.0), click.FloatRange(0.0, 100.0)),
    default=(0.5, 3.0, 1.0), show_default=True, metavar="DB DEG MM",
    help="Standard deviations of gain, phase and position.",
)  # fmt: skip
@click.option("--sweep", is_flag=True, help="Also sweep number of microphones, size and shape.")
@click.option(
    "--sweep-separation", type=click.FloatRange(1.0, 180.0), default=45.0, show_default=True, metavar="DEG",
    help="Separation for which sweep and trade-offs are made.",
)  # fmt: skip
@click.option("--plot", type=existing_file, metavar="FILE", help="Picture (svg, png or pdf).")
@click.option(
    "--tradeoffs", type=existing_file, metavar="FILE",
    help="Picture of SIR and STOI of the presets against latency, work and word length, measured on rendered speech.",
)  # fmt: skip
@overwrite_option
@json_option
def command(
    array: Path,
    talkers: int,
    snr_db: float,
    required_db: float,
    sample_rate: int,
    error_db: float,
    room: tuple[float, float, float],
    tolerances: tuple[float, float, float],
    sweep: bool,
    sweep_separation: float,
    plot: Path | None,
    tradeoffs: Path | None,
    overwrite: bool,
    as_json: bool,
) -> None:
    """What an array can achieve at best: how close talkers may be, in which band, how well.

    ARRAY is an array file (TOML). Talkers are plane waves all around; figures are medians over bearings.
    """
    from math import radians

    from unmix.array import Array
    from unmix.jobs.limits import LimitsOptions, limits
    from unmix.limits.ladder import SEPARATIONS_DEG
    from unmix.limits.rooms import RoomCase
    from unmix.limits.tolerances import Tolerances

    for picture in (plot, tradeoffs):
        if picture is not None:
            check_picture(picture, overwrite=overwrite)
    loaded = Array.load(array)
    measured = None
    if tradeoffs is not None:
        measured = _tradeoffs(loaded, talkers, sweep_separation, room, snr_db, sample_rate)
        save_tradeoffs(measured, tradeoffs, overwrite=overwrite)
    options = LimitsOptions(
        talkers=talkers,
        separations_deg=tuple(s for s in SEPARATIONS_DEG if s <= 360.0 / talkers),
        snr_db=snr_db,
        required_db=required_db,
        sample_rate=sample_rate,
        error_db=error_db,
        room=RoomCase(*room),
        tolerances=Tolerances(tolerances[0], radians(tolerances[1]), 1e-3 * tolerances[2]),
        sweep_deg=sweep_separation if sweep else None,
    )
    found = limits(loaded, options)
    if plot is not None:
        from unmix.report.figures import save_figure
        from unmix.report.limits_figure import limits_figure

        save_figure(limits_figure(found), plot, overwrite=overwrite)
    if as_json:
        print_json(found.to_dict() | ({} if measured is None else {"tradeoffs": measured.to_dict()}))
        return
    _print(found)
    if measured is not None:
        print_tradeoffs(measured)
    for picture in (plot, tradeoffs):
        if picture is not None:
            say(f"Written: {picture}")


def _tradeoffs(
    array: Array,
    talkers: int,
    apart_deg: float,
    room: tuple[float, float, float],
    snr_db: float,
    sample_rate: int,
) -> Tradeoffs:
    """The presets with talkers side by side before the array, in the room that was named."""
    from unmix.errors import InputError
    from unmix.export.tradeoffs import ROOM_M
    from unmix.scene import Talker

    if talkers * apart_deg > 360.0:
        raise InputError(
            f"{talkers} talkers {apart_deg:g} degrees apart do not fit around the array; lower one of them"
        )
    t60_s, volume_m3, distance_m = room
    scale = (volume_m3 / (ROOM_M[0] * ROOM_M[1] * ROOM_M[2])) ** (1 / 3)
    seats = [
        Talker.at(f"talker-{k + 1}", apart_deg * (0.5 * (talkers - 1) - k), distance_m=distance_m)
        for k in range(talkers)
    ]
    return measured_tradeoffs(
        array, seats, sample_rate=sample_rate, t20_s=t60_s, size_m=[scale * edge for edge in ROOM_M], snr_db=snr_db
    )


def _print(found: Limits) -> None:
    """Tables for people."""
    import numpy as np

    o = found.options
    say(
        f"{found.array.channels} microphones, aperture {100 * found.array.aperture_m:.1f} cm; {o.talkers} talkers, "
        f"each {o.snr_db:g} dB over a microphone's own noise; a band is usable from {o.required_db:g} dB output SNR"
    )
    bands = [int(np.argmin(np.abs(found.band_hz - f))) for f in _SHOWN_HZ if f <= found.band_hz[-1] * 1.1]
    _print_ladder(found, bands)
    room = o.room
    if room is not None and found.critical_distance_m is not None:
        say(
            f"Room: {room.t60_s:g} s, {room.volume_m3:g} m3, talkers at {room.distance_m:g} m (direct and reverberant "
            f"sound are equal at {found.critical_distance_m:.2f} m); time-invariant filters"
        )
    t = o.tolerances
    say(
        f"Tolerances: {t.gain_db:g} dB, {np.degrees(t.phase):g} deg, {1e3 * t.position_m:g} mm; bearings from "
        f"{o.listened_s:g} s"
    )
    if found.ambiguity_hz is not None:
        say(f"Spatial ambiguity: from {found.ambiguity_hz:.0f} Hz up some bearings sound alike")
    if found.mirrored:
        say("Mirrored bearings (as front and back of a line) sound alike at every frequency")
    _print_orders(found, bands)
    if found.sweep:
        _print_sweep(found)


def _print_ladder(found: Limits, bands: list[int]) -> None:
    from unmix.cli.tables import number, plain_table

    middle = int(abs(found.band_hz - 1000.0).argmin())
    heads = [("apart\ndeg", "right"), ("usable\nHz", "right")]
    heads += [(f"gain {found.band_hz[b]:.0f}\ndB", "right") for b in bands]
    heads += [("SNR at\nbest, dB", "right"), ("in room:\nSIR, dB", "right"), ("SINR\ndB", "right")]
    heads += [("tolerance\nSIR, dB", "right"), ("bearing\n+- deg", "right")]
    rows = []
    for row, gain in zip(found.separations, found.ladder.noise_gain_db, strict=True):
        usable = row.usable
        reach = "none" if usable.lowest_hz is None else f"{usable.lowest_hz:.0f} to {usable.highest_hz:.0f}"
        rows.append(
            [
                number(row.separation_deg, 0),
                reach + ("" if usable.share in (0.0, 1.0) else f" ({100 * usable.share:.0f} %)"),
                *(number(float(gain[b]) if gain[b] < 150.0 else None, 1) for b in bands),
                number(row.best_snr_db, 1),
                number((row.room or {}).get("sir_db"), 1),
                number((row.room or {}).get("sinr_db"), 1),
                number(float(row.tolerance_sir_db[middle]), 1),
                number(row.bearing_std_deg, 3),
            ]
        )
    print_table(plain_table(heads, rows))


def _print_orders(found: Limits, bands: list[int]) -> None:
    from unmix.cli.tables import plain_table

    orders = found.orders
    heads = [(f"order for {orders.error_db:g} dB", "left")] + [(f"{found.band_hz[b]:.0f} Hz", "right") for b in bands]
    rows = [
        ["own anchor", *(str(orders.own[b]) for b in bands)],
        ["nearest anchor", *(str(orders.nearest[b]) for b in bands)],
    ]
    print_table(plain_table(heads, rows))


def _print_sweep(found: Limits) -> None:
    from unmix.cli.tables import number, plain_table

    heads = [
        ("shape", "left"),
        ("microphones", "right"),
        ("size, cm", "right"),
        ("usable from, Hz", "right"),
        ("SNR at best, dB", "right"),
        ("tolerance SIR, dB", "right"),
    ]
    rows = [
        [
            row.shape,
            str(row.microphones),
            number(100 * row.size_m, 1),
            number(row.lowest_hz, 0),
            number(row.best_snr_db, 1),
            number(row.tolerance_sir_db, 1),
        ]
        for row in found.sweep
    ]
    say(f"How many microphones, how far apart: two talkers {found.options.sweep_deg:g} degrees apart")
    print_table(plain_table(heads, rows))
