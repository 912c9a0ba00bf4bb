"""Quality against latency, work and word length, and its picture."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.conftest import circle
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
