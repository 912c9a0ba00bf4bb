"""Figures in a page: names stay text, colours follow the page, ids do not clash."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from tests.conftest import circle, speech
from unmix.report.batch_figures import paired_figure
from unmix.report.figures import COLOURS, LONGEST_LABEL, embedded_svg, plain_label, save_figure
from unmix.report.scene_figures import scene_figure
from unmix.report.spectrogram import spectrogram_figure
from unmix.scene import Talker
from unmix.track import Track

NASTY = 'x id="a" #0072b2'


def figure_of(*names: str) -> str:
    talkers = [Talker.at(name, 30.0 + 90.0 * k, distance_m=1.0) for k, name in enumerate(names)]
    return embedded_svg(scene_figure(talkers, circle()), "pic", "Title <x>", "Description & more")


def test_names_stay_text() -> None:
    svg = figure_of(NASTY, "a<b>", "$x$", "\u202eevil")
    assert '>x id="a" #0072b2<' in svg
    assert "a&lt;b&gt;" in svg and "<b>" not in svg
    assert ">$x$<" in svg
    assert '<title id="pic-title">Title &lt;x&gt;</title>' in svg


def test_colours_are_the_pages() -> None:
    svg = figure_of("mate")
    assert f"var(--s0, {COLOURS[0]})" in svg and "var(--ink, " in svg
    left = re.sub(r"var\(--\w+, #\w+\)", "", svg)
    assert not re.search(r"(?:fill|stroke): #(?!f)", left)


def test_ids_do_not_clash() -> None:
    svg = figure_of("mate")
    ids = re.findall(r'\sid="([^"]*)"', svg)
    assert len(ids) == len(set(ids)) and all(name.startswith("pic-") for name in ids)
    referred = set(re.findall(r'(?:url\(#|href="#)([^")]+)', svg))
    assert referred <= set(ids)


def test_links_of_dots_are_left_as_they_are() -> None:
    table = np.array([[1.0, 2.0], [3.0, np.nan]])
    figure = paired_figure(table, [0, 1], ["a", "b"], ["one", "two"], "sir_db_gain", ["#scene-0", "#scene-1"])
    svg = embedded_svg(figure, "pic", "t", "d")
    assert svg.count('xlink:href="#scene-0"') == 2


def test_long_names_keep_both_ends() -> None:
    one, two = (plain_label(f"model:prior_weight_of_everything={value}") for value in ("0.01", "0.0001"))
    assert one != two and len(one) <= LONGEST_LABEL and one.endswith("=0.01")


@pytest.mark.parametrize("suffix", [".svg", ".png", ".pdf"])
def test_a_moving_talker_is_drawn_and_written(tmp_path: Path, suffix: str) -> None:
    time_s = np.linspace(0.0, 4.0, 9)
    track = Track(time_s, np.linspace(-1.0, 1.0, 9), np.zeros(9), np.full(9, np.nan))
    figure = scene_figure([Talker("mate", track=track), Talker("nobody knows where")], circle())
    save_figure(figure, tmp_path / f"scene{suffix}")
    assert (tmp_path / f"scene{suffix}").stat().st_size > 2000


def test_spectrograms_as_a_figure(tmp_path: Path) -> None:
    signals = np.stack([speech("novel-reader", 1.0), speech("card-reader", 1.0)])
    figure = spectrogram_figure(signals, 16000, ["before", "after"], start_s=2.0)
    assert figure.axes[0].get_xlim() == (2.0, 3.0)
    save_figure(figure, tmp_path / "s.png")
