"""A short run of the long table for rooms: three scenes, and what the tables promise of each."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "benchmarks"))

from common import DEVELOPMENT_SEEDS, drawn_cases
from rooms import one_scene

VARIANTS = ("reference-mic", "linear-constraint", "model", "full")


@pytest.mark.filterwarnings("ignore::unmix.errors.UnmixWarning")
@pytest.mark.parametrize(("talkers", "t20_s", "least_sir_db"), [(2, 0.2, 24.0), (2, 0.4, 23.0), (3, 0.4, 16.0)])
def test_a_scene_of_the_table_for_rooms(talkers: int, t20_s: float, least_sir_db: float) -> None:
    case = next(iter(drawn_cases("short", talkers, t20_s, DEVELOPMENT_SEEDS[650:651])))
    found, _ = one_scene(case, VARIANTS, marks=False)
    sir, stoi = (np.array([found[v][:, i] for v in VARIANTS]) for i in range(2))
    assert sir[3].mean() > least_sir_db
    assert sir[3].mean() > sir[1].mean() + 6.0, "the full variant beats linear constraints by 6 dB"
    assert np.all(stoi[3] > stoi[0] - 0.01), "nobody is harder to understand than at the microphone"
    assert np.all(np.diff(stoi.mean(axis=1)[[0, 2, 3]]) > 0.0)
