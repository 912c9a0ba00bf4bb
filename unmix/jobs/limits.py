"""What an array can achieve at best: an array in, tables out.

ladder over separations -> usable bands -> ambiguity -> expansion orders -> room -> bounds -> tolerances -> sweep
"""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.errors import InputError
from unmix.limits.ambiguity import ambiguity_hz, mirror_pairs
from unmix.limits.bounds import bearing_bounds, signal_bound
from unmix.limits.expansion import OrdersNeeded, orders_needed
from unmix.limits.ladder import (
    CAP_DB,
    SEPARATIONS_DEG,
    Ladder,
    Spectrum,
    UsableBand,
    climb,
    group_azimuths,
    responses,
    spectrum_weights,
    third_octaves,
    usable_band,
)
from unmix.limits.rooms import RoomCase, RoomLimits, best_in_room, critical_distance_m, reverberation_ratio
from unmix.limits.sweep import SweepRow, sweep
from unmix.limits.tolerances import Tolerances, first_order_leakage, monte_carlo_leakage

__all__ = ["Limits", "LimitsOptions", "SeparationLimits", "limits"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class LimitsOptions:
    """What limits are computed for.

    snr_db           each talker over one microphone's own noise, over all bands
    required_db      output SNR at which a band counts as usable
    spectrum         of the talkers: "speech" (long-term average) or "white"; usable bands take `snr_db` in every band
    sample_rate      in hertz; bands end at 0.9 of half of it
    lowest_hz        where the lowest third octave may begin
    error_db         expansion error to be held
    room             an ideal diffuse room, or None
    tolerances       of gain, phase and position
    listened_s       seconds of sound that bearings are found from
    draws            random arrays of the Monte Carlo check on the tolerances
    sweep_deg        separation for which the sweep is made; None: no sweep
    """

    talkers: int = 2
    separations_deg: tuple[float, ...] = SEPARATIONS_DEG
    snr_db: float = 30.0
    required_db: float = 10.0
    spectrum: Spectrum = "speech"
    sample_rate: int = 16000
    lowest_hz: float = 50.0
    error_db: float = -40.0
    room: RoomCase | None = field(default_factory=lambda: RoomCase(0.5, 60.0, 1.2))
    tolerances: Tolerances = field(default_factory=Tolerances)
    listened_s: float = 1.0
    draws: int = 100
    sweep_deg: float | None = None
    temperature_c: float = 20.0


@dataclass(frozen=True)
class SeparationLimits:
    """What holds at one separation; figures in dB are medians over bearings, of the worst talker. None: undefined.

    usable             third octaves that reach the required output SNR
    best_snr_db        output SNR over all bands at best, no room
    room               best output in the room: sinr, sir, snr in dB
    bearing_std_deg    no unbiased estimate of the bearings is better, from `listened_s` seconds
    signal_found_db    least signal error per band relative to the talker when the bearings are found as well
    tolerance_sir_db   SIR that tolerances leave, per band, first order; drawn_sir_db by Monte Carlo
    """

    separation_deg: float
    usable: UsableBand
    best_snr_db: float
    room: dict[str, float] | None
    bearing_std_deg: float | None
    signal_known_db: Floats
    signal_found_db: Floats
    tolerance_sir_db: Floats
    drawn_sir_db: Floats


@dataclass(frozen=True)
class Limits:
    """What an array can achieve at best. `band_hz` are third octaves; all per-band rows follow it."""

    array: Array
    options: LimitsOptions
    ladder: Ladder
    separations: tuple[SeparationLimits, ...]
    orders: OrdersNeeded
    ambiguity_hz: float | None
    mirrored: bool
    critical_distance_m: float | None
    sweep: tuple[SweepRow, ...]
    wall_time_s: float

    @property
    def band_hz(self) -> Floats:
        """Midbands of the third octaves."""
        return self.ladder.band_hz

    def to_dict(self) -> dict[str, Any]:
        """Plain values: what `unmix limits --json` prints. Noise gains at the cap are None."""
        capped = [_finite_row(row, CAP_DB - 20.0) for row in self.ladder.noise_gain_db]
        worst = [_finite_row(row, CAP_DB - 20.0) for row in self.ladder.worst_gain_db]
        rows = []
        for at, row in enumerate(self.separations):
            rows.append(
                {
                    "separation_deg": row.separation_deg,
                    "lowest_usable_hz": row.usable.lowest_hz,
                    "highest_usable_hz": row.usable.highest_hz,
                    "usable_share": row.usable.share,
                    "best_snr_db": row.best_snr_db,
                    "room": row.room,
                    "bearing_std_deg": row.bearing_std_deg,
                    "singular_values": self.ladder.singular_values[at].tolist(),
                    "noise_gain_db": capped[at],
                    "worst_noise_gain_db": worst[at],
                    "signal_error_known_db": _finite_row(row.signal_known_db, CAP_DB - 50.0),
                    "signal_error_found_db": _finite_row(row.signal_found_db, CAP_DB - 50.0),
                    "tolerance_sir_db": _finite_row(row.tolerance_sir_db, CAP_DB),
                    "tolerance_sir_drawn_db": _finite_row(row.drawn_sir_db, CAP_DB),
                }
            )
        o = self.options
        return {
            "microphones": self.array.channels,
            "aperture_m": self.array.aperture_m,
            "snr_db": o.snr_db,
            "required_db": o.required_db,
            "ambiguity_hz": self.ambiguity_hz,
            "mirrored": self.mirrored,
            "critical_distance_m": self.critical_distance_m,
            "band_hz": self.band_hz.tolist(),
            "separations": rows,
            "orders": {
                "error_db": self.orders.error_db,
                "own": self.orders.own.tolist(),
                "nearest": self.orders.nearest.tolist(),
            },
            "sweep": [vars(row) for row in self.sweep],
            "wall_time_s": round(self.wall_time_s, 3),
        }


def limits(array: Array, options: LimitsOptions | None = None) -> Limits:
    """What an array can achieve at best, before anything is recorded.

    Raises InputError when there are fewer microphones than talkers or an option is out of its range.
    """
    began = time.perf_counter()
    o = options or LimitsOptions()
    _check(array, o)
    bands = third_octaves(o.lowest_hz, 0.45 * o.sample_rate)
    ladder = climb(
        array, bands, separations_deg=o.separations_deg, talkers=o.talkers, snr_db=o.snr_db,
        spectrum=o.spectrum, temperature_c=o.temperature_c,
    )  # fmt: skip
    rows = tuple(_at_separation(array, o, ladder, index) for index in range(len(o.separations_deg)))
    swept: tuple[SweepRow, ...] = ()
    if o.sweep_deg is not None:
        swept = sweep(
            array, bands, separation_deg=o.sweep_deg, snr_db=o.snr_db, required_db=o.required_db,
            tolerances=o.tolerances, temperature_c=o.temperature_c,
        )  # fmt: skip
    return Limits(
        array=array,
        options=o,
        ladder=ladder,
        separations=rows,
        orders=orders_needed(array, bands, o.sample_rate, o.error_db, o.temperature_c),
        ambiguity_hz=ambiguity_hz(array, 0.5 * o.sample_rate, o.temperature_c),
        mirrored=mirror_pairs(array, o.temperature_c),
        critical_distance_m=None if o.room is None else critical_distance_m(o.room, o.temperature_c),
        sweep=swept,
        wall_time_s=time.perf_counter() - began,
    )


def _check(array: Array, o: LimitsOptions) -> None:
    if array.responses is not None:
        raise InputError(
            "array: limits are computed for microphones in free air; give an array file with positions instead of "
            "measured responses"
        )
    if array.channels < o.talkers or o.talkers < 2:
        raise InputError(
            f"array: {array.channels} microphones for {o.talkers} talkers; limits of a separation need two talkers or "
            "more, and at least as many microphones"
        )
    widest = 360.0 / o.talkers
    for separation in o.separations_deg:
        if not 0.0 < separation <= widest:
            raise InputError(f"separation {separation:g} deg: {o.talkers} talkers can stand 0 to {widest:g} deg apart")
    if len(third_octaves(o.lowest_hz, 0.45 * o.sample_rate)) == 0:
        raise InputError(f"sample rate {o.sample_rate} Hz: no third octave lies between {o.lowest_hz:g} Hz and its end")


def _at_separation(array: Array, o: LimitsOptions, ladder: Ladder, index: int) -> SeparationLimits:
    separation = np.radians(o.separations_deg[index])
    azimuth = group_azimuths(float(separation), o.talkers)
    tolerance, drawn = _tolerances(array, o, azimuth, ladder.band_hz)
    known, found, bearing = _bounds(array, o, azimuth, ladder.band_hz)
    return SeparationLimits(
        separation_deg=o.separations_deg[index],
        usable=usable_band(ladder.band_hz, ladder.noise_gain_db[index], o.snr_db, o.required_db),
        best_snr_db=float(ladder.best_snr_db[index]),
        room=_room(array, o, azimuth),
        bearing_std_deg=bearing,
        signal_known_db=known,
        signal_found_db=found,
        tolerance_sir_db=tolerance,
        drawn_sir_db=drawn,
    )


def _even(o: LimitsOptions, points: int = 128) -> tuple[Floats, Floats, float]:
    """Evenly spread frequencies, a talker's power density there, and the noise's."""
    frequency = np.linspace(o.lowest_hz, 0.45 * o.sample_rate, points)
    return frequency, spectrum_weights(frequency, o.spectrum), 10.0 ** (-o.snr_db / 10.0)


def _room(array: Array, o: LimitsOptions, azimuth: Floats) -> dict[str, float] | None:
    if o.room is None:
        return None
    frequency, power, noise = _even(o)
    h = responses(array, azimuth, frequency, o.temperature_c)
    rho = reverberation_ratio(o.room, o.temperature_c)
    best: RoomLimits = best_in_room(h, array.positions_m, frequency, power, noise, rho, o.temperature_c)
    return {name: float(np.median(value.min(axis=-1))) for name, value in vars(best).items()}


def _bounds(array: Array, o: LimitsOptions, azimuth: Floats, band_hz: Floats) -> tuple[Floats, Floats, float | None]:
    """Signal error per band with bearings known and found, and the bearings' deviation; medians over bearings."""
    frequency, power, noise = _even(o)
    snapshots = float(frequency[1] - frequency[0]) * o.listened_s
    level = spectrum_weights(np.concatenate([frequency, band_hz]), o.spectrum)[len(frequency) :]
    known, found, deviations = [], [], []
    for pair in azimuth:
        covariance = bearing_bounds(array, pair, frequency, power, noise, snapshots, o.temperature_c)
        if covariance is not None:
            deviations.append(np.degrees(np.sqrt(np.diag(covariance).max())))
        bands = signal_bound(
            array, pair, band_hz, level, noise, band_hz * (2.0 ** (1 / 6) - 2.0 ** (-1 / 6)) * o.listened_s,
            o.temperature_c,
        )  # fmt: skip
        known.append(bands.known_db.max(axis=-1))
        found.append(bands.found_db.max(axis=-1))
    typical = float(np.median(deviations)) if 2 * len(deviations) > len(azimuth) else None
    return np.median(known, axis=0), np.median(found, axis=0), typical


def _tolerances(array: Array, o: LimitsOptions, azimuth: Floats, band_hz: Floats) -> tuple[Floats, Floats]:
    h = responses(array, azimuth, band_hz, o.temperature_c)
    first = first_order_leakage(h, band_hz, o.tolerances, o.temperature_c)
    drawn = monte_carlo_leakage(
        h, azimuth, band_hz, o.tolerances, draws=o.draws, temperature_c=o.temperature_c
    )  # fmt: skip

    def sir(leak: Floats) -> Floats:
        return np.asarray(-10.0 * np.log10(np.median(leak.max(axis=-1), axis=0)))

    return sir(first), sir(drawn)


def _finite_row(row: Floats, beyond: float) -> list[float | None]:
    return [float(v) if np.isfinite(v) and abs(v) < beyond else None for v in row]
