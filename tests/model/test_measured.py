"""Measured responses in place of delays: the same answer where both say the same."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.conftest import circle, delayed, speech
from tests.test_sofa import free_field
from unmix.errors import InputError, UnmixWarning, UnsolvableError
from unmix.jobs.solve import solve
from unmix.metrics.leakage import leakage_of_outputs_db
from unmix.model.delays import paths_from_bearings
from unmix.model.measured import paths_from_responses
from unmix.model.mixing import mixing_from_responses
from unmix.scene import Scene, Talker
from unmix.track import Track
from unmix.variant import load_variant

RATE = 16000
AZIMUTH = np.radians([20.0, 110.0])


def test_free_field_responses_are_delays() -> None:
    """Measured at 48 kHz, used at 16 kHz."""
    array = circle(4)
    measured = replace(array, responses=free_field(array))
    paths = paths_from_responses(measured, AZIMUTH, np.zeros(2), sample_rate=RATE)
    plain = paths_from_bearings(array, AZIMUTH)
    assert paths.taps is not None
    omega = np.linspace(0.05, 0.9, 60) * np.pi
    h = mixing_from_responses(paths.taps, paths.centre).response(omega)
    truth = np.exp(-1j * omega[:, None, None] * RATE * plain.delay_s.T)
    assert np.abs(h - truth).max() < 10 ** (-40 / 20)
    # Delays nearest to the responses: an eighth of a sample.
    assert paths.delay_s == pytest.approx(plain.delay_s, abs=0.07 / RATE)
    assert paths.gain == pytest.approx(1.0, abs=0.02)


def test_corrections_act_on_responses() -> None:
    content = circle(4).to_file()
    content.gain_db, content.polarity, content.delay_s = [0, 6, 0, 0, 0], [1, 1, -1, 1, 1], [0, 0, 0, 2e-5, 0]
    array = replace(circle(4).from_file(content, where=""), responses=free_field(circle(4)))
    paths = paths_from_responses(array, AZIMUTH, np.zeros(2), sample_rate=RATE)
    plain = paths_from_bearings(array, AZIMUTH)
    assert paths.taps is not None
    omega = np.array([0.1, 0.5]) * np.pi
    h = mixing_from_responses(paths.taps, paths.centre).response(omega)
    truth = plain.gain.T * np.exp(-1j * omega[:, None, None] * RATE * plain.delay_s.T)
    assert np.abs(h - truth).max() < 0.02


@pytest.mark.parametrize("variant", ["model", "delay-and-sum", "linear-constraint"])
def test_solving_with_responses_is_solving_with_delays(variant: str) -> None:
    array = circle(4)
    talkers = [Talker("a", float(AZIMUTH[0])), Talker("b", float(AZIMUTH[1]))]
    signals = np.stack([speech("novel-reader", 2.0), speech("card-reader", 2.0)])
    images = delayed(signals, paths_from_bearings(array, AZIMUTH), RATE)
    leaks = []
    for used in (array, replace(array, responses=free_field(array))):
        outputs = np.array(
            [solve(Scene.from_arrays(i, used, talkers, sample_rate=RATE), variant).signals for i in images]
        )
        leaks.append(leakage_of_outputs_db(outputs)[[0, 1], [1, 0]])
    assert leaks[1] == pytest.approx(leaks[0], abs=1.5)


def test_what_responses_cannot_do() -> None:
    array = replace(circle(4), responses=free_field(circle(4)))
    samples = 0.1 * np.random.default_rng(0).standard_normal((5, RATE))
    track = Track(np.array([0.0, 1.0]), np.array([0.0, 1.0]), np.zeros(2), np.full(2, np.nan))
    moving = Scene.from_arrays(samples, array, [Talker("a", track=track)], sample_rate=RATE)
    with pytest.raises(InputError, match="at rest"):
        solve(moving, "model")
    still = Scene.from_arrays(samples, array, [Talker("a", 0.0)], sample_rate=RATE)
    variant = load_variant("model")
    import msgspec

    wrong = msgspec.structs.replace(variant, solver=msgspec.structs.replace(variant.solver, method="kkt"))
    with pytest.raises(UnsolvableError, match="measured responses"):
        solve(still, wrong)


def test_bearings_found_without_the_responses_are_said_to_be() -> None:
    array = circle(4)
    images = delayed(speech("novel-reader", 2.0)[None], paths_from_bearings(array, AZIMUTH[:1]), RATE)[0]
    noise = 1e-4 * np.random.default_rng(0).standard_normal(images.shape)
    scene = Scene.from_arrays(images + noise, replace(array, responses=free_field(array)), sample_rate=RATE)
    with pytest.warns(UnmixWarning) as caught:
        result = solve(scene, "model")
    assert any("as if in free air" in str(w.message) for w in caught)
    assert any("as if in free air" in line for line in result.warnings)
