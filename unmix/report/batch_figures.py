"""The pictures of a batch: the ranking, gains scene by scene, and what gains cost and depend on."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from unmix.report.figures import COLOURS, INK, MARKS, PAPER, QUIET, new_figure, plain_label, styled

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from unmix.report.batch_material import RankedVariant

__all__ = ["cost_figure", "dependence_figures", "paired_figure", "ranking_figure", "unit_of"]

Floats = NDArray[np.float64]

MOST_SCENES, MOST_DOTS = 150, 600
"""So many are drawn at most, evenly chosen."""
AXES = {"t20_s": "reverberation time T20, s", "spacing_deg": "smallest angle between talkers, deg", "snr_db": "SNR, dB"}


def unit_of(metric: str) -> str:
    """A metric's name as people write it, with its unit: "SIR gain, dB"."""
    name = metric.removesuffix("_gain")
    unit = ", dB" if name.endswith("_db") else ""
    name = name.removesuffix("_db").replace("_", "-").upper() if name in _KNOWN else name
    return f"{name} gain{unit}" if metric.endswith("_gain") else f"{name}{unit}"


_KNOWN = ("sdr_db", "sir_db", "sar_db", "si_sdr_db", "stoi", "estoi")


def ranking_figure(ranked: Sequence[RankedVariant], metric: str) -> Figure:
    """Means with intervals, the best on top; a rule after each group of variants that cannot be told apart."""
    known = [v for v in ranked if v.mean is not None]
    with styled():
        figure = new_figure(5.6, 0.8 + 0.24 * max(len(known), 2))
        ax: Any = figure.subplots()
        for y, variant in enumerate(known):
            colour = COLOURS[(variant.group - 1) % 5] if variant.group else QUIET
            if variant.low is not None and variant.high is not None:
                ax.plot([variant.low, variant.high], [y, y], color=colour, linewidth=2.0, solid_capstyle="butt")
            ax.plot([variant.mean], [y], MARKS[(variant.group - 1) % 5], color=colour, markersize=6, zorder=3)
            if y and variant.group != known[y - 1].group:
                ax.axhline(y - 0.5, color=INK, linewidth=0.7)
        low, high = ax.get_xlim()
        if low - (high - low) <= 0.0 <= high + (high - low):  # further away it would only squeeze what differs
            ax.axvline(0.0, color=QUIET, linewidth=0.8)
        ax.set_yticks(range(len(known)), [plain_label(v.name) for v in known])
        ax.set_ylim(len(known) - 0.4, -0.6)
        ax.tick_params(axis="y", length=0)
        ax.grid(axis="y", visible=False)
        ax.set_xlabel(f"{unit_of(metric)}: mean over scenes with 95 % interval")
    return figure


def paired_figure(
    table: Floats, chosen: Sequence[int], names: Sequence[str], scenes: Sequence[str], metric: str, links: Sequence[str]
) -> Figure:
    """One line per scene with a dot for each chosen variant, ordered by the first one's gain.

    table  (scenes, variants); `links` are where a click on a scene's dots leads
    """
    order = _ordered(table[:, chosen[0]])
    if len(order) > MOST_SCENES:
        order = [order[int(i)] for i in np.linspace(0, len(order) - 1, MOST_SCENES)]
    many = len(order) > 60
    with styled():
        figure = new_figure(5.6, 0.9 + (0.07 if many else 0.2) * max(len(order), 3))
        ax: Any = figure.subplots()
        rows = table[np.ix_(order, list(chosen))]
        for y, row in enumerate(rows):
            if np.isfinite(row).any():
                ax.plot([np.nanmin(row), np.nanmax(row)], [y, y], color=QUIET, linewidth=0.7, zorder=1)
        for k, v in enumerate(chosen):
            dots = ax.scatter(
                rows[:, k],
                np.arange(len(order)),
                s=12 if many else 30,
                marker=MARKS[k],
                color=COLOURS[k],
                label=plain_label(names[v]),
                zorder=3,
            )
            dots.set_urls([links[s] for s in order])
        if many:
            ax.set_yticks([])
            ax.set_ylabel(f"{len(order)} scenes, by {plain_label(names[chosen[0]])}'s gain")
        else:
            ax.set_yticks(range(len(order)), [plain_label(scenes[s]) for s in order])
        ax.tick_params(axis="y", length=0)
        ax.set_ylim(len(order) - 0.4, -0.6)
        ax.axvline(0.0, color=QUIET, linewidth=0.8)
        ax.set_xlabel(unit_of(metric))
        ax.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=2, fontsize=8.0)
    return figure


def _ordered(values: Floats) -> list[int]:
    """Indices, the largest value first, those without one last."""
    return [int(i) for i in np.argsort(-np.where(np.isfinite(values), values, -np.inf), kind="stable")]


def cost_figure(
    ranked: Sequence[RankedVariant], costs: Mapping[str, Mapping[str, Any]], metric: str, *, named: int = 8
) -> Figure:
    """Mean gain against computing time and against latency, one mark per variant, the best ones named."""
    panels = (("real_time_factor", "computing time over duration", 1.0), ("latency_ms", "latency, ms", None))
    with styled():
        figure = new_figure(5.6, 3.0)
        axes: Any = figure.subplots(1, 2, sharey=True)
        for ax, (column, title, mark) in zip(axes, panels, strict=True):
            for place, variant in enumerate(ranked):
                x = costs.get(variant.name, {}).get(column)
                if x is None or variant.mean is None:
                    continue
                colour = COLOURS[(variant.group - 1) % 5] if variant.group else QUIET
                ax.plot([x], [variant.mean], MARKS[(variant.group - 1) % 5], color=colour, markersize=6)
                if place < named:
                    ax.annotate(
                        str(place + 1), (x, variant.mean), xytext=(4, 3), textcoords="offset points", fontsize=7.5
                    )
            ax.set_xscale("symlog", linthresh=0.01 if column == "real_time_factor" else 1.0)
            ax.set_xlabel(title)
            if mark is not None:
                ax.axvline(mark, color=QUIET, linewidth=0.8, linestyle="--")
        axes[0].set_ylabel(unit_of(metric))
    return figure


def dependence_figures(
    table: Floats,
    chosen: Sequence[int],
    names: Sequence[str],
    of_scene: Mapping[str, Floats],
    metric: str,
    links: Sequence[str],
) -> dict[str, Figure]:
    """Gain of the chosen variants, scene by scene, against each thing in which the scenes differ, by its title."""
    figures = {}
    for column, x in of_scene.items():
        if len(np.unique(np.round(x[np.isfinite(x)], 3))) < 2:
            continue
        with styled():
            figure = new_figure(3.4, 2.9)
            ax: Any = figure.subplots()
            for k, v in enumerate(chosen):
                here = np.flatnonzero(np.isfinite(x) & np.isfinite(table[:, v]))
                here = here[:: max(1, len(here) // MOST_DOTS)]
                dots = ax.scatter(
                    x[here],
                    table[here, v],
                    s=26,
                    marker=MARKS[k],
                    color=PAPER if k % 2 else COLOURS[k],
                    edgecolors=COLOURS[k],
                    linewidths=1.2,
                    label=plain_label(names[v]),
                )
                dots.set_urls([links[int(s)] for s in here])
            ax.set_xlabel(AXES[column])
            ax.set_ylabel(unit_of(metric))
            ax.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=2, fontsize=8.0)
        figures[AXES[column]] = figure
    return figures
