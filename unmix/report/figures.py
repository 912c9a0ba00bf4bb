"""Pictures: one small style, colours that colour-blind readers tell apart, matplotlib imported only when drawn.

Colours are those of Okabe and Ito; what colour says, a line style or a mark says too.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from unmix.errors import InputError
from unmix.files import write_aside
from unmix.jobs.located import Located, LocatedTalker

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.projections.polar import PolarAxes

__all__ = ["COLOURS", "MARKS", "STYLE", "bearing_figure", "new_figure", "save_figure"]

COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000")
"""M. Okabe and K. Ito, "Color universal design", 2008."""
MARKS = ("o", "s", "^", "D", "v", "P", "X")
STYLE: Any = {
    "font.size": 9.0,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "grid.alpha": 0.3,
    "legend.frameon": False,
    "svg.fonttype": "none",
    "svg.hashsalt": "unmix",
}
FORMATS = (".svg", ".png", ".pdf")
_QUIET = "#777777"


def new_figure(width_in: float, height_in: float) -> Figure:
    """An empty figure in the house style, drawn without any display."""
    import matplotlib
    from matplotlib.figure import Figure

    with matplotlib.rc_context(STYLE):
        return Figure(figsize=(width_in, height_in), layout="constrained")


def save_figure(figure: Figure, path: Path, *, overwrite: bool = False) -> None:
    """Write a figure in the format of the file's suffix; the same figure gives the same bytes.

    Raises InputError for an unknown suffix, FileError when the file exists and ``overwrite`` is not given.
    """
    import matplotlib

    if path.suffix.lower() not in FORMATS:
        raise InputError(f"{path}: pictures are written as {', '.join(FORMATS)}; choose one of these endings")
    dates: dict[str, dict[str, Any]] = {".svg": {"Date": None}, ".pdf": {"CreationDate": None}, ".png": {}}
    with matplotlib.rc_context(STYLE), write_aside(path, overwrite=overwrite) as aside:
        figure.savefig(aside, format=path.suffix.lower()[1:], dpi=150, metadata=dates[path.suffix.lower()])


def bearing_figure(located: Located) -> Figure:
    """Bearing against time with activity, beside the score around the array.

    Heavy where a talker speaks, thin where not; grey dots are single detections; hollow marks and dotted lines are
    directions the array cannot tell from the talker's.
    """
    import matplotlib

    with matplotlib.rc_context(STYLE):
        figure = new_figure(9.0, 3.8)
        # The polar axes say so themselves; `subplot_mosaic` only types the common base.
        axes: Any = figure.subplot_mosaic(
            [["time", "ring"]], width_ratios=[2.2, 1.0], per_subplot_kw={"ring": {"polar": True}}
        )
        _over_time(axes["time"], located)
        _ring(axes["ring"], located)
        if located.ambiguity is not None:
            figure.suptitle(
                f"Note: {located.ambiguity.split(':')[0]}, so {_short(located)}", fontsize=8.0, color=_QUIET
            )
    return figure


def _short(located: Located) -> str:
    words = located.ambiguity or ""
    if words.startswith("straight"):
        return "front and back, and the cone around the line, look alike (dotted: the other candidate)"
    return "mirror directions across its plane look alike"


def _over_time(axes: Axes, located: Located) -> None:
    seen = located.detections
    axes.plot(seen[:, 0], np.degrees(seen[:, 1]), ".", color="#bbbbbb", markersize=3, zorder=1)
    for k, talker in enumerate(located.talkers):
        colour = COLOURS[k % len(COLOURS)]
        time_s = np.linspace(0.0, located.duration_s, 400)
        if talker.moving:
            time_s = time_s[(time_s >= talker.track.time_s[0]) & (time_s <= talker.track.time_s[-1])]
        azimuth = _unjumped(np.degrees(talker.track.at(time_s)[0]))
        axes.plot(time_s, azimuth, color=colour, linewidth=0.8, zorder=2)
        for a, _ in talker.candidates if _aside(talker) else ():
            axes.axhline(float(np.degrees(a)), color=colour, linewidth=0.8, linestyle=":", zorder=2)
        speaks = np.zeros(len(time_s), dtype=bool)
        for start, stop in talker.active_s:
            speaks |= (time_s >= start) & (time_s < stop)
        label = f"{talker.name}: {np.degrees(talker.azimuth):.0f} ± {np.degrees(talker.azimuth_std):.1f}°"
        axes.plot(time_s, np.where(speaks, azimuth, np.nan), color=colour, linewidth=4.0, zorder=3, label=label)
        every = max(1, len(time_s) // 8)
        axes.plot(time_s[::every], azimuth[::every], MARKS[k % len(MARKS)], color=colour, markersize=5, zorder=4)
    axes.set(
        xlabel="time, s",
        ylabel=f"azimuth in the {located.frame}'s frame, deg (left positive)",
        ylim=(-180, 180),
        yticks=np.arange(-180, 181, 45),
        xlim=(0.0, located.duration_s),
    )
    if located.talkers:
        axes.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=min(4, len(located.talkers)), fontsize=8.0)


def _ring(axes: PolarAxes, located: Located) -> None:
    axes.set_theta_zero_location("N")
    score = located.score.score / max(float(located.score.score.max(initial=0.0)), 1e-12)
    axes.fill(located.score.azimuth, score, color="#bbbbbb", alpha=0.6, linewidth=0)
    for k, talker in enumerate(located.talkers):
        colour = COLOURS[k % len(COLOURS)]
        axes.plot([talker.azimuth] * 2, [0.0, 1.0], color=colour, linewidth=1.5)
        axes.plot([talker.azimuth], [1.0], MARKS[k % len(MARKS)], color=colour, markersize=7)
        for a, _ in talker.candidates if _aside(talker) else ():
            axes.plot([a], [1.0], MARKS[k % len(MARKS)], color=colour, markersize=7, markerfacecolor="none")
    axes.set(rlim=(0.0, 1.1), yticks=[])
    axes.set_xticks(np.radians([0, 90, 180, 270]), ["front", "left", "back", "right"])
    axes.set_title("score around the array", fontsize=9.0)


def _aside(talker: LocatedTalker) -> bool:
    """Whether the other candidates lie at another azimuth, and not just above or below."""
    return any(abs(np.angle(np.exp(1j * (a - talker.azimuth)))) > np.radians(2.0) for a, _ in talker.candidates)


def _unjumped(azimuth_deg: np.ndarray[Any, np.dtype[np.float64]]) -> np.ndarray[Any, np.dtype[np.float64]]:
    """The same with a gap where the curve goes from 180 to -180 degrees."""
    out = azimuth_deg.copy()
    out[1:][np.abs(np.diff(azimuth_deg)) > 180.0] = np.nan
    return out
