"""The array from above and from the side, with the talkers' bearings drawn in."""

from __future__ import annotations

from collections.abc import Collection
from typing import TYPE_CHECKING, Any

import numpy as np

from unmix.physics import unit_vector
from unmix.report.figures import COLOURS, MARKS, STYLE, new_figure
from unmix.scene import Scene, Talker

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["array_figure"]

_VIEWS = (("from above", 1, 0, "left", "front"), ("from the right", 0, 2, "front", "up"))


def array_figure(scene: Scene, *, marked: Collection[int] = ()) -> Figure:
    """Microphones with their channel numbers, the reference ringed, bearings as rays; `marked` channels crossed out."""
    import matplotlib

    with matplotlib.rc_context(STYLE):
        figure = new_figure(9.0, 4.6)
        axes: Any = figure.subplots(1, 2)
        for panel, view in zip(axes, _VIEWS, strict=True):
            _panel(panel, scene, marked, view)
        handles, labels = axes[0].get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside lower center", ncols=min(5, max(1, len(labels))), fontsize=8.0)
        axes[0].text(
            0.0, 1.08, f"{scene.title}: {scene.array.channels} microphones, {100 * scene.array.aperture_m:.1f} cm",
            transform=axes[0].transAxes, fontsize=9.0,
        )  # fmt: skip
    return figure


def _panel(axes: Any, scene: Scene, marked: Collection[int], view: tuple[str, int, int, str, str]) -> None:
    title, across, up, across_name, up_name = view
    p = 100.0 * scene.array.positions_m
    reach = 1.7 * max(float(np.abs(p).max()), 1.0)
    for k, (talker, direction) in enumerate(_rays(scene)):
        end = reach * direction
        colour = COLOURS[k % len(COLOURS)]
        axes.plot([0, end[across]], [0, end[up]], color=colour, linewidth=1.2, zorder=1)
        axes.plot([end[across]], [end[up]], MARKS[k % len(MARKS)], color=colour, markersize=8, label=talker.name)
    crossed = [m for m in range(len(p)) if m in marked]
    axes.plot(p[:, across], p[:, up], "o", color="#222222", markersize=6, zorder=3, label="microphone")
    axes.plot(*p[scene.array.reference_channel][[across, up]], "o", color="#222222", markersize=11,
              markerfacecolor="none", zorder=3, label="reference")  # fmt: skip
    if crossed:
        axes.plot(p[crossed, across], p[crossed, up], "x", color=COLOURS[1], markersize=13, markeredgewidth=2, zorder=4,
                  label="has a finding")  # fmt: skip
    for (x, y), numbers in _together(p[:, [across, up]]).items():
        axes.annotate(", ".join(map(str, numbers)), (x, y), xytext=(5, 5), textcoords="offset points", fontsize=8.0)
    axes.set(aspect="equal", xlim=(-1.1 * reach, 1.1 * reach), ylim=(-1.1 * reach, 1.1 * reach))
    axes.set(xlabel=f"{across_name}, cm", ylabel=f"{up_name}, cm")
    if across == 1:
        axes.invert_xaxis()  # left is left when one looks down with the front ahead
    axes.set_title(title, fontsize=9.0)


def _rays(scene: Scene) -> list[tuple[Talker, Any]]:
    rays = []
    for talker in scene.talkers:
        azimuth, elevation = talker.azimuth, talker.elevation
        if talker.track is not None:
            middle = 0.5 * (talker.track.time_s[0] + talker.track.time_s[-1])
            az, el, _ = talker.track.at(np.array([middle]))
            azimuth, elevation = float(az[0]), float(el[0])
        if azimuth is not None:
            rays.append((talker, unit_vector(azimuth, elevation)))
    return rays


def _together(points: Any) -> dict[tuple[float, float], list[int]]:
    """Channel numbers by the place where they are drawn; some views put several microphones on one spot."""
    places: dict[tuple[float, float], list[int]] = {}
    for m, (x, y) in enumerate(points):
        places.setdefault((round(float(x), 2), round(float(y), 2)), []).append(m)
    return places
