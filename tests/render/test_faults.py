import numpy as np
import pytest

from unmix.errors import InputError
from unmix.render.faults import draw_faults
from unmix.render.spec import FaultSpec

RATE = 16000


def draw(spec: FaultSpec, channels: int = 3, seed: int = 0):
    return draw_faults(spec, channels, np.random.default_rng(seed))


def test_without_faults_nothing_changes() -> None:
    signals = np.random.default_rng(0).standard_normal((3, 100))
    assert np.array_equal(draw(FaultSpec()).record(signals, RATE), signals)


def test_gain_delay_polarity_and_dead_channels() -> None:
    spec = FaultSpec(gain_db=[6.0, 0.0, 0.0], delay_s=[0.0, 2.5 / RATE, -1.0 / RATE], polarity=[1, -1, 1], dead=[0])
    faults = draw(spec)
    time = np.arange(2000.0)
    smooth = np.exp(-(((time - 1000.0) / 30.0) ** 2)) * np.cos(0.7 * time)
    truth = [np.exp(-(((time - d - 1000.0) / 30.0) ** 2)) * np.cos(0.7 * (time - d)) for d in (0.0, 2.5, -1.0)]
    recorded = faults.record(np.stack([smooth] * 3), RATE)
    assert not recorded[0].any()
    assert recorded[1] == pytest.approx(-truth[1], abs=1e-9)
    assert recorded[2] == pytest.approx(truth[2], abs=1e-9)
    alone = draw(FaultSpec(gain_db=[6.0, 0.0, 0.0])).record(smooth[None], RATE, channels=[0])
    assert alone[0] == pytest.approx(10.0**0.3 * smooth)


def test_clipping_counts_what_it_changes() -> None:
    clipped, count = draw(FaultSpec(clip_db=-6.0)).clip(np.array([[0.2, 0.6, -0.9]]))
    assert clipped[0] == pytest.approx([0.2, 10.0**-0.3, -(10.0**-0.3)])
    assert count == 2


def test_random_faults_have_the_stated_spread_and_do_not_depend_on_each_other() -> None:
    spec = FaultSpec(gain_std_db=1.5, delay_std_s=1e-5, position_std_m=0.002)
    faults = draw(spec, channels=4000)
    assert np.std(faults.gain_db) == pytest.approx(1.5, rel=0.05)
    assert np.std(faults.delay_s) == pytest.approx(1e-5, rel=0.05)
    assert np.std(faults.position_m) == pytest.approx(0.002, rel=0.05)
    assert np.array_equal(draw(FaultSpec(gain_std_db=1.5), channels=4000).gain_db, faults.gain_db)


@pytest.mark.parametrize(
    ("spec", "message"),
    [
        (FaultSpec(gain_db=[1.0]), r"key `faults\.gain_db`: 1 values for 3 channels"),
        (FaultSpec(position_m=[[0.0, 0.0, 0.0]]), r"key `faults\.position_m`: 1 values"),
        (FaultSpec(delay_s=[0.0, 0.0, float("nan")]), r"key `faults\.delay_s`: values must be finite"),
        (FaultSpec(dead=[3]), r"key `faults\.dead`: there is no channel 3; the array has 0 to 2"),
    ],
)
def test_faults_that_do_not_fit_the_array(spec: FaultSpec, message: str) -> None:
    with pytest.raises(InputError, match=message):
        draw(spec)
