"""The pictures of one scene: before and after, the scene from above, how well posed the task was."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.metrics.grades import Grades
from unmix.report.figures import COLOURS, INK, MARKS, PAPER, QUIET, new_figure, plain_label, styled
from unmix.scene import Talker

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["conditioning_figure", "scene_figure", "verdict_figure"]

Floats = NDArray[np.float64]

_PANELS = (("stoi", "intelligibility (STOI)", (0.0, 1.0)), ("sir_db", "other talkers lower by (SIR), dB", None))
FAR_M = 1.5
"""Where somebody is drawn whose distance is not known, unless others are known to sit further away."""


def verdict_figure(grades: Grades) -> Figure:
    """Each talker before (hollow) and after (filled), for intelligibility and for how far down the others are.

    `save_figure` writes it, and raises what writing does.
    """
    talkers = grades.talkers
    with styled():
        figure = new_figure(5.6, 0.95 + 0.36 * len(talkers))
        axes: Any = figure.subplots(1, len(_PANELS), sharey=True)
        for ax, (name, title, limits) in zip(axes, _PANELS, strict=True):
            for k, talker in enumerate(talkers):
                _dumbbell(ax, k, getattr(talker.unprocessed, name), getattr(talker, name))
            ax.set_title(title, fontsize=9.0, loc="left")
            ax.set_ylim(len(talkers) - 0.5, -0.6)
            ax.grid(axis="y", visible=False)
            if limits is not None:
                ax.set_xlim(*limits)
            else:
                ax.axvline(0.0, color=QUIET, linewidth=0.8)
        axes[0].set_yticks(range(len(talkers)), [plain_label(t.name) for t in talkers])
        axes[0].tick_params(axis="y", length=0)
        axes[1].tick_params(axis="y", length=0)
    return figure


def _dumbbell(ax: Axes, k: int, before: float | None, after: float | None) -> None:
    colour, mark = COLOURS[k % len(COLOURS)], MARKS[k % len(MARKS)]
    if before is not None and after is not None:
        ax.annotate(
            "", (after, k), (before, k), arrowprops={"arrowstyle": "-|>", "color": colour, "linewidth": 1.4}, zorder=1
        )
    if before is not None:
        ax.plot([before], [k], mark, markersize=6, markerfacecolor=PAPER, markeredgecolor=colour, zorder=2)
    if after is not None:
        ax.plot([after], [k], mark, markersize=7, color=colour, zorder=3)


def scene_figure(talkers: Sequence[Talker], array: Array) -> Figure:
    """The scene from above, the front up and left on the left: bearings, tracks, and the array itself enlarged.

    Who has no bearing is left out. `save_figure` writes it, and raises what writing does.
    """
    reach = _reach(talkers)
    with styled():
        figure = new_figure(5.6, 3.1)
        axes: Any = figure.subplots(1, 2, width_ratios=[1.6, 1.0])
        _seats(axes[0], talkers, reach)
        _microphones(axes[1], array)
    return figure


def _reach(talkers: Sequence[Talker]) -> float:
    known = [t.distance_m for t in talkers if t.distance_m is not None]
    for t in talkers:
        if t.track is not None:
            distance = t.track.at(np.asarray(t.track.time_s))[2]
            known += [float(d) for d in distance[np.isfinite(distance)]]
    return max([*known, FAR_M if len(known) < len(talkers) else 0.5])


def _seats(ax: Axes, talkers: Sequence[Talker], reach: float) -> None:
    turn = np.linspace(0.0, 2.0 * np.pi, 181)
    for ring in np.arange(0.5, 1.15 * reach + 0.5, 0.5 if reach < 3 else 1.0):
        ax.plot(ring * np.sin(turn), ring * np.cos(turn), color=QUIET, linewidth=0.5, alpha=0.35, zorder=0)
    for k, talker in enumerate(talkers):
        colour, mark = COLOURS[k % len(COLOURS)], MARKS[k % len(MARKS)]
        if talker.track is not None:
            azimuth, _, distance = talker.track.at(np.asarray(talker.track.time_s))
            distance = np.where(np.isfinite(distance), distance, reach)
            x, y = distance * np.cos(azimuth), distance * np.sin(azimuth)
            ax.plot(-y, x, color=colour, linewidth=1.5)
            ax.annotate("", (-y[-1], x[-1]), (-y[-2], x[-2]), arrowprops={"arrowstyle": "-|>", "color": colour})
            _seat(ax, talker.name, float(-y[0]), float(x[0]), colour, mark, far=False)
        elif talker.azimuth is not None:
            distance_m = talker.distance_m if talker.distance_m is not None else reach
            x0, y0 = distance_m * np.cos(talker.azimuth), distance_m * np.sin(talker.azimuth)
            far = talker.distance_m is None
            ax.plot([0.0, -y0], [0.0, x0], color=colour, linewidth=1.0, linestyle=":" if far else "-")
            _seat(ax, talker.name, float(-y0), float(x0), colour, mark, far=far)
    ax.plot([0.0], [0.0], "s", color=INK, markersize=4)
    edge = 1.25 * reach
    ax.set(xlim=(-1.25 * edge, 1.25 * edge), ylim=(-edge, edge), aspect="equal")
    ax.set(xlabel="m to the right", ylabel="m to the front")
    ax.set_title("from above (dotted: distance not known)", loc="left", fontsize=9.0)
    ax.grid(False)


def _seat(ax: Axes, name: str, x: float, y: float, colour: str, mark: str, *, far: bool) -> None:
    ax.plot([x], [y], mark, color=colour, markersize=8, markerfacecolor="none" if far else colour)
    ax.annotate(plain_label(name), (x, y), xytext=(0, 8 if y >= 0 else -15), textcoords="offset points", ha="center")


def _microphones(ax: Axes, array: Array) -> None:
    positions = 100.0 * np.asarray(array.positions_m)
    reference = array.reference_channel
    ax.plot(-positions[:, 1], positions[:, 0], "o", color=INK, markersize=4)
    ax.plot(-positions[[reference], 1], positions[[reference], 0], "o", markersize=9, markerfacecolor="none", color=INK)
    reach = 1.3 * max(float(np.abs(positions[:, :2]).max()), 0.5)
    ax.set(xlim=(-reach, reach), ylim=(-reach, reach), aspect="equal", xlabel="cm")
    ax.set_title("array (ring: reference)", loc="left", fontsize=9.0)


def conditioning_figure(conditioning: dict[str, Any], names: Sequence[str]) -> Figure:
    """Condition of the delay model and each talker's noise gain over frequency, in thirds of an octave.

    conditioning  as it stands in `solution.json`, and in `Solution.conditioning`
    names         the talkers, in order

    `save_figure` writes it, and raises what writing does.
    """
    from matplotlib.ticker import LogLocator, NullFormatter

    hertz = np.asarray(conditioning["band_hz"])
    gain = np.asarray(conditioning["noise_gain_db"], dtype=np.float64)
    with styled():
        figure = new_figure(5.6, 3.4)
        top, low = figure.subplots(2, 1, sharex=True)
        top.semilogx(hertz, conditioning["condition"], color=INK, linewidth=1.5)
        top.set_yscale("log")
        top.set_ylabel("condition")
        top.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
        top.yaxis.set_major_formatter("{x:g}")
        top.yaxis.set_minor_formatter(NullFormatter())
        for k, name in enumerate(names[: gain.shape[1]]):
            style = ("-", "--", "-.", ":")[k % 4]
            low.semilogx(hertz, gain[:, k], style, color=COLOURS[k % len(COLOURS)], label=plain_label(name))
        low.axhline(0.0, color=QUIET, linewidth=0.8)
        low.set(xlabel="frequency, Hz", ylabel="noise gain, dB", xlim=(max(float(hertz[0]), 20.0), float(hertz[-1])))
        low.set_xticks([50, 100, 200, 500, 1000, 2000, 5000], ["50", "100", "200", "500", "1k", "2k", "5k"])
        low.minorticks_off()
        low.legend(fontsize=8.0, ncols=min(3, len(names)))
        if conditioning["lowest_usable_hz"] is not None:
            for ax in (top, low):
                ax.axvspan(1.0, conditioning["lowest_usable_hz"], color=QUIET, alpha=0.15, linewidth=0)
    return figure
