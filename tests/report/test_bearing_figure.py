"""The picture of bearings: what it says in words and marks, and that it is written whole or not at all."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from unmix.bearings.count import TalkerCount
from unmix.errors import FileError, InputError
from unmix.jobs.located import Located, LocatedTalker, ScoreMap
from unmix.report.figures import bearing_figure, check_format, save_figure
from unmix.track import Track

AZIMUTH = np.linspace(-np.pi, np.pi, 181)


def talker(name: str, azimuth_deg: float, *, to_deg: float | None = None, std_deg: float = 0.9) -> LocatedTalker:
    ends = np.radians([azimuth_deg, azimuth_deg if to_deg is None else to_deg])
    track = Track(np.array([0.0, 8.0]), ends, np.zeros(2), np.full(2, np.nan))
    return LocatedTalker(
        name=name,
        azimuth=float(ends.mean()),
        elevation=0.0,
        azimuth_std=float(np.radians(std_deg)),
        elevation_std=0.1,
        candidates=(),
        track=track,
        moving=to_deg is not None,
        active_s=[(1.0, 3.0), (5.0, 7.5)],
        share=0.5,
    )


def located(*talkers: LocatedTalker, ambiguity: str | None = None) -> Located:
    count = TalkerCount(len(talkers), len(talkers), len(talkers), len(talkers))
    score = ScoreMap(AZIMUTH, np.exp(-((AZIMUTH - 0.5) ** 2) / 0.02))
    seen = np.array([[1.0, 0.5], [2.0, 0.52]])
    return Located(talkers, count, "mixture", "array", ambiguity, (), 8.0, score, seen)


def words(result: Located) -> str:
    figure = bearing_figure(result)
    found = [t.get_text() for t in figure.findobj(lambda a: hasattr(a, "get_text"))]
    return "\n".join(found)


def test_names_bearings_and_axes_are_in_words() -> None:
    said = words(located(talker("mate", 29.0), talker("pilot", -110.0, std_deg=0.021)))
    assert "mate: 29 ± 0.9°" in said and "pilot: -110.0 ± 0.02°" in said
    assert "time, s" in said and "azimuth in the array's frame, deg (left positive)" in said
    assert {"front", "left", "back", "right", "score around the array"} <= set(said.split("\n"))


def test_a_talker_on_the_move_has_beginning_and_end() -> None:
    assert "mate: -20 to 60°, moving" in words(located(talker("mate", -20.0, to_deg=60.0)))


def test_a_doubtful_talker_is_marked() -> None:
    assert "mate (doubtful): 29" in words(located(replace(talker("mate", 29.0), doubtful=True)))


def test_a_line_names_its_ambiguity_and_draws_the_other_candidate() -> None:
    lines = "straight line of microphones: only the angle to the line is known, and so on"
    two = replace(talker("mate", 35.0), candidates=((float(np.radians(145.0)), 0.0),))
    result = located(two, ambiguity=lines)
    assert "front and back, and the cone around the line, look alike (dotted: the other candidate)" in words(result)
    over_time, ring = bearing_figure(result).axes
    dotted = [line for line in over_time.lines if line.get_linestyle() == ":"]
    assert len(dotted) == 1
    np.testing.assert_allclose(dotted[0].get_ydata(), 145.0, atol=1e-6)
    hollow = [line for line in ring.lines if line.get_markerfacecolor() == "none"]
    assert [float(np.degrees(line.get_xdata()[0])) for line in hollow] == [pytest.approx(145.0)]
    moving = replace(talker("mate", 15.0, to_deg=55.0), candidates=((float(np.radians(145.0)), 0.0),))
    (mirrored,) = [line for line in bearing_figure(located(moving)).axes[0].lines if line.get_linestyle() == ":"]
    np.testing.assert_allclose(np.asarray(mirrored.get_ydata())[[0, -1]], [165.0, 125.0], atol=0.2)


def test_activity_is_heavy_where_somebody_speaks() -> None:
    axes = bearing_figure(located(talker("mate", 29.0))).axes[0]
    (heavy,) = [line for line in axes.lines if line.get_linewidth() == 4.0]
    time_s = np.asarray(heavy.get_xdata())[np.isfinite(np.asarray(heavy.get_ydata(), dtype=float))]
    assert np.all(((time_s >= 1.0) & (time_s < 3.0)) | ((time_s >= 5.0) & (time_s < 7.5)))
    assert len(time_s) == pytest.approx(400 * 4.5 / 8.0, abs=4)


def test_nobody_found_is_said() -> None:
    assert "no talker found" in words(located())


@pytest.mark.parametrize("suffix", [".svg", ".png", ".pdf"])
def test_the_same_picture_gives_the_same_bytes(tmp_path: Path, suffix: str) -> None:
    for name in ("a", "b"):
        save_figure(bearing_figure(located(talker("mate", 29.0))), tmp_path / f"{name}{suffix}")
    assert (tmp_path / f"a{suffix}").read_bytes() == (tmp_path / f"b{suffix}").read_bytes()
    with pytest.raises(FileError, match="overwrite"):
        save_figure(bearing_figure(located()), tmp_path / f"a{suffix}")


def test_an_unknown_suffix_is_refused_before_any_work(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"a\.bmp: pictures are written as \.svg, \.png, \.pdf"):
        check_format(tmp_path / "a.bmp")
    assert not list(tmp_path.iterdir())
