"""Quality against latency, work and word length, and its picture."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from tests.conftest import circle
from tests.test_sofa import free_field
from unmix.errors import InputError, UnsolvableError
from unmix.export.shorten import shorten_to
from unmix.export.sir import speech_spectra
from unmix.export.tradeoffs import Tradeoffs, measure_tradeoffs
from unmix.live.design import Designer
from unmix.report.figures import save_figure, tradeoff_figure
from unmix.scene import Talker
from unmix.variant import PRESETS

RATE = 16000
SEATS = [Talker.at("mate", 20.0, distance_m=1.2), Talker.at("pilot", 110.0, distance_m=1.2)]


@pytest.fixture(scope="module")
def found() -> Tradeoffs:
    return measure_tradeoffs(circle(), SEATS, ["delay-and-sum", "model"], sample_rate=RATE, t20_s=None, seconds=1.5)


def test_future_and_taps_buy_separation(found: Tradeoffs) -> None:
    latency, work = found.along("latency", "model"), found.along("work", "model")
    assert [p.latency_ms for p in latency] == sorted(p.latency_ms for p in latency)
    assert latency[0].latency_ms == 0.0
    for points, bought_db in ((latency, -0.5), (work, 10.0)):
        first, last = points[0], points[-1]
        assert first.sir_db is not None and last.sir_db is not None and last.stoi is not None
        assert last.sir_db > first.sir_db + bought_db
        assert last.stoi > 0.9
    assert work[-1].mac_per_s == 2 * 7 * (work[-1].taps or 0) * RATE
    assert [p.bits for p in found.along("word", "model")] == [8, 12, 16, 24, 32]


def test_the_model_beats_delays_alone_and_those_the_microphone(found: Tradeoffs) -> None:
    best = {v: max(p.sir_db or -99.0 for p in found.along("latency", v)) for v in found.variants}
    assert found.unprocessed_sir_db is not None
    assert best["model"] > best["delay-and-sum"] + 20.0 > found.unprocessed_sir_db + 15.0


def test_a_summary_names_the_least_that_will_do(found: Tradeoffs) -> None:
    line = found.summary("model", loss_db=3.0)
    points = [p for p in found.points if p.variant == "model" and p.sir_db is not None]
    best = max(p.sir_db or -99.0 for p in points)
    assert line.best_db == best
    for axis, least, cost in (
        ("latency", line.latency_ms, lambda p: p.latency_ms),
        ("work", line.mac_per_s, lambda p: p.mac_per_s),
        ("word", line.bits, lambda p: p.bits),
    ):
        along = [p for p in points if p.axis == axis]
        assert least in [cost(p) for p in along if p.sir_db >= best - 3.0]
        assert all(p.sir_db < best - 3.0 for p in along if cost(p) < least)
    # Eight bits are too few for the model, and more loss allowed asks for no more.
    assert line.bits is not None and line.bits > 8
    wide = found.summary("model", loss_db=20.0)
    assert wide.mac_per_s is not None and line.mac_per_s is not None and wide.mac_per_s < line.mac_per_s


def test_plain_values_are_read_back(found: Tradeoffs) -> None:
    assert Tradeoffs.from_dict(json.loads(json.dumps(found.to_dict()))) == found
    with pytest.raises(InputError, match=r"trade-offs: .*points.* export again"):
        Tradeoffs.from_dict({"sample_rate": 16000})


def test_measured_responses_are_refused_in_one_line() -> None:
    plain = circle(3)
    with pytest.raises(InputError, match="not for measured responses; give the array as positions"):
        measure_tradeoffs(replace(plain, responses=free_field(plain)), SEATS, sample_rate=RATE)


def test_the_picture_is_drawn(found: Tradeoffs, tmp_path: Path) -> None:
    save_figure(tradeoff_figure(found), tmp_path / "t.svg")
    text = (tmp_path / "t.svg").read_text()
    for said in (
        "model",
        "delay-and-sum",
        "unprocessed",
        "SIR, dB",
        "STOI",
        "latency of the filters",
        "without a room",
    ):
        assert said in text


def test_what_cannot_be_compared_is_said() -> None:
    with pytest.raises(InputError, match="needs two"):
        measure_tradeoffs(circle(), SEATS[:1], sample_rate=RATE)
    with pytest.raises(UnsolvableError, match="cannot run chunk by chunk"):
        measure_tradeoffs(circle(), SEATS, ["full"], sample_rate=RATE, t20_s=None, seconds=1.0)


@pytest.mark.parametrize("taps", [1, 8, 100, 10**6])
def test_shortened_to_a_length(taps: int) -> None:
    design = Designer(circle(), PRESETS["model"], RATE)
    bank = design(SEATS)
    cut = shorten_to(bank, taps, design.paths(SEATS), speech_spectra(2, RATE), RATE)
    assert min(taps, bank.taps.shape[-1]) * 0.8 <= cut.taps.shape[-1] <= taps
    assert np.isfinite(cut.taps).all()
