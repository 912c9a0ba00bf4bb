"""Pictures: one small style, colours that colour-blind readers tell apart, matplotlib imported only when drawn.

Colours are those of Okabe and Ito; what colour says, a line style or a mark says too. Every picture is a function that
hands back a figure: `save_figure` writes it to a file, `embedded_svg` puts it into a page, where its colours follow the
page's light or dark scheme.
"""

from __future__ import annotations

import contextlib
import html
import io
import re
import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from unmix.errors import InputError
from unmix.export.tradeoffs import Tradeoffs
from unmix.files import write_aside
from unmix.jobs.located import Located, LocatedTalker
from unmix.physics import wrapped

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.projections.polar import PolarAxes

__all__ = [
    "COLOURS",
    "INK",
    "MARKS",
    "PAPER",
    "QUIET",
    "STYLE",
    "bearing_figure",
    "check_format",
    "embedded_svg",
    "new_figure",
    "plain_label",
    "save_figure",
    "styled",
    "tradeoff_figure",
]

COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000")
"""M. Okabe and K. Ito, "Color universal design", 2008."""
MARKS = ("o", "s", "^", "D", "v", "P", "X")
INK = "#1d1f21"
QUIET = "#6b7077"
PAPER = "#fcfbf8"
STYLE: Any = {
    "font.size": 9.0,
    "text.color": INK,
    "axes.labelcolor": INK,
    "axes.edgecolor": QUIET,
    "xtick.color": INK,
    "ytick.color": INK,
    "grid.color": QUIET,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "grid.alpha": 0.25,
    "legend.frameon": False,
    "svg.fonttype": "none",
    "svg.hashsalt": "unmix",
}
FORMATS = (".svg", ".png", ".pdf")
LONGEST_LABEL = 28


@contextlib.contextmanager
def styled() -> Iterator[None]:
    """The house style, to be drawn in; glyphs that the measuring font lacks are no matter, the reader's has them."""
    import matplotlib

    with matplotlib.rc_context(STYLE), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message=r"Glyph .* missing from")
        warnings.filterwarnings("ignore", message=r"Matplotlib currently does not support .* natively")
        yield


def plain_label(name: str) -> str:
    """A name as a label: no mathematics in `$`, no control characters, long ones with their middle left out."""
    text = "".join(c if c.isprintable() else " " for c in name)
    if len(text) > LONGEST_LABEL:
        half = LONGEST_LABEL // 2
        text = f"{text[:half]}\u2026{text[1 - half :]}"
    return text.replace("$", r"\$")


def new_figure(width_in: float, height_in: float) -> Figure:
    """An empty figure in the house style, drawn without any display."""
    from matplotlib.figure import Figure

    with styled():
        return Figure(figsize=(width_in, height_in), layout="constrained")


def check_format(path: Path) -> None:
    """Raise InputError for a file name whose suffix no picture can be written as; called before work begins."""
    if path.suffix.lower() not in FORMATS:
        raise InputError(f"{path}: pictures are written as {', '.join(FORMATS)}; choose one of these endings")


def save_figure(figure: Figure, path: str | Path, *, overwrite: bool = False) -> None:
    """Write a figure in the format of the file's suffix; the same figure gives the same bytes.

    Raises InputError for an unknown suffix, FileError when the file exists and ``overwrite`` is not given.
    """
    path = Path(path)
    check_format(path)
    dates: dict[str, dict[str, Any]] = {".svg": {"Date": None}, ".pdf": {"CreationDate": None}, ".png": {}}
    with styled(), write_aside(path, overwrite=overwrite) as aside:
        figure.savefig(aside, format=path.suffix.lower()[1:], dpi=150, metadata=dates[path.suffix.lower()])


def embedded_svg(figure: Figure, name: str, title: str, description: str) -> str:
    """The figure as an `<svg>` element for a page, with a title and a description for those who hear it read.

    name  unique on the page: the element's ids begin with it
    """
    stream = io.StringIO()
    with styled():
        figure.savefig(stream, format="svg", transparent=True, metadata=dict.fromkeys(("Date", "Creator", "Format")))
    text = stream.getvalue()
    body = text[text.index("<svg") :]
    body = re.sub(r"<metadata>.*?</metadata>\s*", "", body, flags=re.DOTALL)
    used = set(re.findall(r"(?:url\(#|href=\"#)([^\")]+)", body)) & set(re.findall(r'\sid="([^"]*)"', body))
    # Only tags are touched: what stands between them is text, and a name may look like anything.
    body = re.sub(r"<[^>]*>", lambda tag: _tag_for_a_page(tag.group(0), name, used), body)
    view = re.search(r'viewBox="([^"]+)"', body)
    label = (
        f'<svg class="figure" viewBox="{view.group(1) if view else ""}" role="img" '
        f'aria-labelledby="{name}-title {name}-desc" xmlns="http://www.w3.org/2000/svg" '
        f'xmlns:xlink="http://www.w3.org/1999/xlink"><title id="{name}-title">{html.escape(title)}</title>'
        f'<desc id="{name}-desc">{html.escape(description)}</desc>'
    )
    return re.sub(r"\n\s*", "\n", label + body[body.index(">") + 1 :])


def _tag_for_a_page(tag: str, name: str, used: set[str]) -> str:
    """A tag with its ids made unique by `name`, colours as the page's variables, and the page's typeface."""

    def named(match: re.Match[str]) -> str:
        return f"{match.group(1)}{name}-{match.group(2)}" if match.group(2) in used else match.group(0)

    tag = re.sub(r'\s+id="([^"]*)"', lambda m: m.group(0) if m.group(1) in used else "", tag)
    tag = re.sub(r"(\sid=\"|url\(#|href=\"#)([^\")]+)", named, tag)
    for colour, variable in _page_colours().items():
        tag = re.sub(re.escape(colour), f"var({variable}, {colour})", tag, flags=re.IGNORECASE)
    return re.sub(r'font: (?:[\w.]+ )?([\d.]+)px [^;"]*', r"font-size: \1px", tag)


def _page_colours() -> dict[str, str]:
    """Colours of the pictures, and the page's variables that stand for them."""
    series = {colour: f"--s{k}" for k, colour in enumerate(COLOURS[:-1])}
    return {INK: "--ink", QUIET: "--quiet", PAPER: "--paper", **series}


def bearing_figure(located: Located) -> Figure:
    """Bearing against time with activity, beside the score around the array.

    Heavy where a talker speaks, thin where not; grey dots are single detections; hollow marks and dotted lines are
    directions the array cannot tell from the talker's. `save_figure` writes it, and raises what writing does.
    """
    with styled():
        figure = new_figure(9.0, 3.8)
        # The polar axes say so themselves; `subplot_mosaic` only types the common base.
        axes: Any = figure.subplot_mosaic(
            [["time", "ring"]], width_ratios=[2.2, 1.0], per_subplot_kw={"ring": {"polar": True}}
        )
        _over_time(axes["time"], located)
        _ring(axes["ring"], located)
        if located.ambiguity is not None:
            figure.suptitle(f"Note: {located.ambiguity.split(':')[0]}, so {_short(located)}", fontsize=8.0, color=QUIET)
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
            # Mirrored, what goes to the left goes to the right.
            other = np.degrees(wrapped(a + talker.azimuth - talker.track.at(time_s)[0]))
            axes.plot(time_s, _unjumped(other), color=colour, linewidth=0.9, linestyle=":", zorder=2)
        speaks = np.zeros(len(time_s), dtype=bool)
        for start, stop in talker.active_s:
            speaks |= (time_s >= start) & (time_s < stop)
        speaking = np.where(speaks, azimuth, np.nan)
        axes.plot(time_s, speaking, color=colour, linewidth=4.0, zorder=3, label=_bearing_label(talker))
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
    else:
        axes.text(0.5, 0.5, "no talker found", transform=axes.transAxes, ha="center", va="center", color=QUIET)


def _bearing_label(talker: LocatedTalker) -> str:
    """Name and bearing; of a talker on the move where they began and ended."""
    name = f"{plain_label(talker.name)}{' (doubtful)' if talker.doubtful else ''}"
    if talker.moving:
        first, last = np.degrees(talker.track.azimuth[[0, -1]])
        return f"{name}: {first:.0f} to {last:.0f}°, moving"
    deviation = float(np.degrees(talker.azimuth_std))
    places = 0 if deviation >= 0.1 else 1
    return f"{name}: {np.degrees(talker.azimuth):.{places}f} ± {deviation:.{places + 1}f}°"


def _ring(axes: PolarAxes, located: Located) -> None:
    axes.set_theta_zero_location("N")
    score = located.score.score / max(float(located.score.score.max(initial=0.0)), 1e-12)
    axes.fill(located.score.azimuth, score, color="#bbbbbb", alpha=0.6, linewidth=0)
    for k, talker in enumerate(located.talkers):
        colour = COLOURS[k % len(COLOURS)]
        axes.plot([talker.azimuth] * 2, [0.0, 1.0], color=colour, linewidth=1.5)
        if talker.moving:
            # The way gone, each talker on a ring of their own.
            way = np.unwrap(talker.track.azimuth)
            axes.plot(way, np.full(len(way), 1.0 - 0.05 * k), color=colour, linewidth=2.5, alpha=0.6)
        axes.plot([talker.azimuth], [1.0 - 0.05 * k * talker.moving], MARKS[k % len(MARKS)], color=colour, markersize=7)
        for a, _ in talker.candidates if _aside(talker) else ():
            axes.plot([a], [1.0], MARKS[k % len(MARKS)], color=colour, markersize=7, markerfacecolor="none")
    axes.set(rlim=(0.0, 1.1), yticks=[])
    axes.set_xticks(np.radians([0, 90, 180, 270]), ["front", "left", "back", "right"])
    axes.set_title("score around the array", fontsize=9.0)


def _aside(talker: LocatedTalker) -> bool:
    """Whether the other candidates lie at another azimuth, and not just above or below."""
    return any(abs(wrapped(a - talker.azimuth)) > np.radians(2.0) for a, _ in talker.candidates)


def _unjumped(azimuth_deg: np.ndarray[Any, np.dtype[np.float64]]) -> np.ndarray[Any, np.dtype[np.float64]]:
    """The same with a gap where the curve goes from 180 to -180 degrees."""
    out = azimuth_deg.copy()
    out[1:][np.abs(np.diff(azimuth_deg)) > 180.0] = np.nan
    return out


def tradeoff_figure(tradeoffs: Tradeoffs) -> Figure:
    """SIR and STOI of the worst talker against latency, multiply-accumulates and word length, one line per variant."""
    heads = {
        "latency": "latency of the filters, ms",
        "work": "million MAC/s, direct convolution",
        "word": "bits",
    }
    with styled():
        figure = new_figure(9.0, 5.2)
        axes = figure.subplots(2, 3, sharex="col", sharey="row", squeeze=False)
        for row, figure_name in enumerate(("sir_db", "stoi")):
            for column, axis in enumerate(heads):
                _tradeoff(axes[row, column], tradeoffs, axis, figure_name)
        for column, head in enumerate(heads.values()):
            axes[1, column].set_xlabel(head)
        axes[0, 0].set_ylabel("SIR, dB")
        axes[1, 0].set_ylabel("STOI")
        axes[0, 0].set_xscale("symlog", linthresh=0.5, base=2)
        axes[0, 0].set_xlim(-0.03, 1.2 * max((p.latency_ms for p in tradeoffs.points), default=1.0))
        axes[0, 1].set_xscale("log")
        axes[0, 2].set_xticks([8, 12, 16, 24, 32], ["8", "12", "16", "24", "float"])
        for shown in axes[1, :2]:
            shown.xaxis.set_major_formatter("{x:g}")
        handles, labels = axes[0, 0].get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside upper center", ncols=6, fontsize=8.0)
        room = "without a room" if tradeoffs.t20_s is None else f"in a room, T20 {tradeoffs.t20_s:g} s"
        axes[0, 1].set_title(f"the worst talker, {room}", fontsize=9.0)
    return figure


def _tradeoff(axes: Axes, tradeoffs: Tradeoffs, axis: Any, figure_name: str) -> None:
    for k, variant in enumerate(tradeoffs.variants):
        points = tradeoffs.along(axis, variant)
        across = [
            {"latency": p.latency_ms, "work": 1e-6 * (p.mac_per_s or np.nan), "word": p.bits}[axis] for p in points
        ]
        up = [np.nan if getattr(p, figure_name) is None else getattr(p, figure_name) for p in points]
        mark = MARKS[k % len(MARKS)]
        # A single point must not drown in the lines of others.
        size = 4 if len(points) > 1 else 7
        axes.plot(
            across,
            up,
            marker=mark,
            markersize=size,
            linewidth=1.2,
            color=COLOURS[k % len(COLOURS)],
            label=variant,
            zorder=2 + (len(points) == 1),
        )
    before = tradeoffs.unprocessed_sir_db if figure_name == "sir_db" else tradeoffs.unprocessed_stoi
    if before is not None:
        axes.axhline(before, color=QUIET, linewidth=0.8, linestyle="--", label="unprocessed")
