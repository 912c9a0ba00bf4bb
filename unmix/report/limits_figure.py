"""The picture of `unmix limits`: what this array resolves, and how many microphones, how far apart."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from unmix.jobs.limits import Limits
from unmix.limits.sweep import SweepRow
from unmix.report.figures import COLOURS, MARKS, STYLE, new_figure

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["limits_figure"]

_GAIN_RANGE = (-10.0, 50.0)


def limits_figure(limits: Limits) -> Figure:
    """Noise gain over separation and frequency with the edge of what is usable; below, the sweep when there is one."""
    import matplotlib

    with matplotlib.rc_context(STYLE):
        swept = [s for s in ("line", "circle", "circle with centre") if any(r.shape == s for r in limits.sweep)]
        figure = new_figure(9.5, 8.0 if swept else 4.0)
        if not swept:
            axes = figure.subplots(1, 2)
            _map(axes[0], limits)
            _outputs(axes[1], limits)
            return figure
        parts: Any = figure.subfigures(2, 1)
        top, bottom = parts
        axes = top.subplots(1, 2)
        _map(axes[0], limits)
        _outputs(axes[1], limits)
        panels: Any = bottom.subplots(2, len(swept), sharex=True, sharey="row", squeeze=False)
        for column, shape in enumerate(swept):
            _panel(panels[:, column], limits, shape)
        bottom.legend(*panels[0, 0].get_legend_handles_labels(), loc="outside right upper", fontsize=8.0)
    return figure


def _map(axes: Any, limits: Limits) -> None:
    o, ladder = limits.options, limits.ladder
    gain = np.clip(ladder.noise_gain_db, *_GAIN_RANGE)
    drawn = axes.pcolormesh(
        ladder.band_hz, ladder.separation_deg, gain, shading="nearest", cmap="viridis_r",
        vmin=_GAIN_RANGE[0], vmax=_GAIN_RANGE[1],
    )  # fmt: skip
    axes.figure.colorbar(drawn, ax=axes, label="noise gain, dB", extend="max")
    limit = o.snr_db - o.required_db
    if gain.min() < limit < gain.max():
        axes.contour(ladder.band_hz, ladder.separation_deg, gain, levels=[limit], colors="k", linewidths=1.5)
    if limits.ambiguity_hz is not None:
        axes.axvline(limits.ambiguity_hz, color="w", linestyle="--", linewidth=1.2)
        axes.text(
            0.96 * limits.ambiguity_hz,
            5.2,
            "ambiguous from here",
            color="w",
            fontsize=8.0,
            va="bottom",
            ha="right",
            rotation=90,
        )
    axes.set(xscale="log", yscale="log", xlabel="frequency, Hz", ylabel="separation of two talkers, deg")
    axes.set_yticks(ladder.separation_deg, [f"{s:g}" for s in ladder.separation_deg])
    axes.minorticks_off()
    _hertz(axes, ladder.band_hz)
    axes.grid(False)
    axes.set_title(
        f"{limits.array.channels} microphones, {100 * limits.array.aperture_m:.1f} cm; black: usable edge at "
        f"{o.snr_db:g} dB SNR",
        fontsize=9.0,
    )


def _outputs(axes: Any, limits: Limits) -> None:
    x = limits.ladder.separation_deg
    lines = [("SNR, no room", [s.best_snr_db for s in limits.separations])]
    if limits.options.room is not None:
        room = limits.options.room
        tag = f"room {room.t60_s:g} s, {room.volume_m3:g} m³, {room.distance_m:g} m"
        lines += [(f"SIR, {tag}", [(s.room or {})["sir_db"] for s in limits.separations])]
        lines += [("direct sound over all else, same room", [(s.room or {})["sinr_db"] for s in limits.separations])]
    middle = int(np.argmin(np.abs(limits.band_hz - 1000.0)))
    lines += [("SIR left by the tolerances, 1 kHz", [s.tolerance_sir_db[middle] for s in limits.separations])]
    for k, (label, y) in enumerate(lines):
        axes.plot(x, y, MARKS[k] + "-", color=COLOURS[k], label=label, markersize=4)
    axes.set(xscale="log", xlabel="separation of two talkers, deg", ylabel="at best, dB")
    shown = [s for s in x if s in (5.0, 10.0, 20.0, 45.0, 90.0, 180.0)]
    axes.set_xticks(shown, [f"{s:g}" for s in shown])
    axes.minorticks_off()
    axes.legend(fontsize=8.0, loc="lower left", bbox_to_anchor=(0.0, 1.0))


def _panel(axes: Any, limits: Limits, shape: str) -> None:
    numbers = sorted({r.microphones for r in limits.sweep if r.shape == shape})
    colours = dict(zip(sorted({r.microphones for r in limits.sweep if r.shape != "yours"}), range(12), strict=False))
    for number in numbers:
        k = colours[number]
        _curve(axes, [r for r in limits.sweep if r.shape == shape and r.microphones == number],
               f"{number} microphones", MARKS[k % 7] + "-", COLOURS[k % 7])  # fmt: skip
    own = [r for r in limits.sweep if r.shape == "yours"]
    _curve(axes, own, "yours, scaled", "--", "#777777")
    pairs = [r for r in limits.sweep if r.shape == "head pairs"]
    if pairs:
        middle = pairs[len(pairs) // 2]
        for at, value in enumerate((middle.lowest_hz, middle.best_snr_db)):
            if value is not None:
                axes[at].axhline(value, color="#777777", linestyle=":", linewidth=1.2, label="two pairs at a head")
    axes[0].set_title(shape, fontsize=9.0)
    axes[0].set(xscale="log", yscale="log")
    axes[1].set(xlabel="size, cm", xscale="log")
    sizes = sorted({r.size_m for r in limits.sweep if r.shape == shape})
    axes[1].set_xticks([100 * s for s in sizes], [f"{100 * s:g}" for s in sizes])
    axes[1].minorticks_off()
    axes[0].set_yticks([50, 100, 200, 400, 800], ["50", "100", "200", "400", "800"])
    axes[0].minorticks_off()
    if axes[0].get_subplotspec().is_first_col():
        axes[0].set_ylabel(f"lowest usable, Hz ({limits.options.sweep_deg:g} deg)")
        axes[1].set_ylabel("output SNR at best, dB")


def _curve(axes: Any, rows: list[SweepRow], label: str, style: str, colour: str) -> None:
    x = [100 * r.size_m for r in rows]
    for at, y in enumerate(([r.lowest_hz or np.nan for r in rows], [r.best_snr_db for r in rows])):
        axes[at].plot(x, y, style, color=colour, label=label, markersize=4, linewidth=1.2)


def _hertz(axes: Any, band_hz: np.ndarray[Any, np.dtype[np.float64]]) -> None:
    ticks = [f for f in (63, 125, 250, 500, 1000, 2000, 4000, 8000, 16000) if band_hz[0] <= f <= 1.1 * band_hz[-1]]
    axes.set_xticks(ticks, [f"{f / 1000:g}k" if f >= 1000 else str(f) for f in ticks])
