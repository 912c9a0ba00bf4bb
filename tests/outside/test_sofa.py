"""The measured head of W. G. Gardner and K. D. Martin, "HRTF measurements of a KEMAR", J. Acoust. Soc. Am. 97, 1995,
as Debian's libmysofa1 installs it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import scipy.signal

from tests.conftest import speech
from unmix.array import Array
from unmix.audio import resample, write_audio
from unmix.jobs.grade import grade
from unmix.jobs.solve import solve
from unmix.scene import Scene
from unmix.sofa import Responses, read_sofa

KEMAR = Path("/usr/share/libmysofa/MIT_KEMAR_normal_pinna.sofa")
RATE = 16000

pytestmark = pytest.mark.skipif(not KEMAR.exists(), reason="libmysofa1 is not installed")


@pytest.fixture(scope="module")
def head() -> Responses:
    return read_sofa(KEMAR)


def test_a_source_at_the_left(head: Responses) -> None:
    """90 degrees: 726 us (32 samples at 44.1 kHz) and 11.8 dB between the ears."""
    at, away = head.nearest(np.pi / 2, 0.0)
    left, right = head.taps[at]
    assert away < 1e-6
    lag = int(np.argmax(np.correlate(right, left, "full"))) - (len(left) - 1)
    assert 1e6 * lag / head.sample_rate == pytest.approx(726.0, abs=0.5)
    assert 10 * np.log10(np.sum(left**2) / np.sum(right**2)) == pytest.approx(11.8, abs=0.05)
    assert head.positions_m[0, 1] > 0.0


def test_the_two_ears_are_mirror_images(head: Responses) -> None:
    for azimuth in np.radians([30.0, 60.0, 90.0, 140.0]):
        here, there = head.nearest(azimuth, 0.0)[0], head.nearest(-azimuth, 0.0)[0]
        assert np.array_equal(head.taps[here, 0], head.taps[there, 1])


def test_interpolation_is_better_than_the_nearest_neighbour(head: Responses) -> None:
    """Each level direction predicted from the others, 200 Hz to 7 kHz."""
    from dataclasses import replace

    f = np.linspace(200.0, 7000.0, 100)
    errors = []
    for left_out in np.flatnonzero(np.abs(head.elevation) < 1e-6)[::9]:
        kept = np.delete(np.arange(len(head.taps)), left_out)
        others = replace(
            head, taps=head.taps[kept], azimuth=head.azimuth[kept], elevation=head.elevation[kept],
            distance_m=head.distance_m[kept],
        )  # fmt: skip
        truth = head.spectrum(head.azimuth[left_out], 0.0, f)
        for interpolate in (True, False):
            guess = others.spectrum(head.azimuth[left_out], 0.0, f, interpolate=interpolate)
            errors.append(10 * np.log10(np.sum(np.abs(guess - truth) ** 2) / np.sum(np.abs(truth) ** 2)))
    smooth, nearest = np.mean(np.reshape(errors, (-1, 2)), axis=0)
    assert smooth < -25.0 and smooth < nearest - 10.0


def at_the_ears(head: Responses, azimuth_deg: tuple[float, float], seconds: float) -> np.ndarray:
    """Two talkers' images at both ears: (talkers, ears, samples) at 16 kHz, convolved at the head's own rate."""
    images = []
    for name, azimuth in zip(("novel-reader", "card-reader"), azimuth_deg, strict=True):
        taps = head.taps[head.nearest(np.radians(azimuth), 0.0)[0]]
        dry = resample(speech(name, seconds)[None], RATE, 44100)[0]
        heard = scipy.signal.fftconvolve(np.broadcast_to(dry, (2, len(dry))), taps, axes=1)
        images.append(resample(heard, 44100, RATE)[:, : round(seconds * RATE)])
    out = np.array(images)
    return np.asarray(0.05 * out / out.std())


@pytest.mark.parametrize("reference", [0, 1])
def test_two_talkers_and_two_ears_from_end_to_end(head: Responses, tmp_path: Path, reference: int) -> None:
    """A scene file that names the SOFA file; 40 dB over microphone noise."""
    images = at_the_ears(head, (40.0, -50.0), 4.0)
    mixture = images.sum(axis=0) + 5e-4 * np.random.default_rng(1).standard_normal(images.shape[1:])
    write_audio(tmp_path / "ears.wav", mixture, RATE)
    (tmp_path / "scene.toml").write_text(
        f'[recording]\nfile = "ears.wav"\n[array]\nfile = "{KEMAR}"\nreference_channel = {reference}\n'
        '[[talker]]\nname = "left"\nazimuth_deg = 40.0\n[[talker]]\nname = "right"\nazimuth_deg = -50.0\n'
    )
    scene = Scene.load(tmp_path / "scene.toml")
    assert scene.array.responses is not None and scene.array.reference_channel == reference
    result = solve(scene, "model")
    assert result.signals is not None
    grades = grade(
        result.signals, images[:, reference], sample_rate=RATE, unprocessed=mixture[reference],
        names=["left", "right"],
    )  # fmt: skip
    for talker in grades.talkers:
        assert talker.sir_db is not None and talker.sir_db > 50.0
        assert talker.sdr_db is not None and talker.sdr_db > 30.0
    # Ears as microphones in free air, which is what the positions alone say, do far worse.
    alone = Scene.from_arrays(
        mixture, Array.from_positions(scene.array.positions_m, reference_channel=reference), scene.talkers,
        sample_rate=RATE,
    )  # fmt: skip
    free = solve(alone, "model")
    assert free.signals is not None
    poorer = grade(free.signals, images[:, reference], sample_rate=RATE, names=["left", "right"])
    for with_head, without in zip(grades.talkers, poorer.talkers, strict=True):
        assert with_head.sir_db is not None and without.sir_db is not None
        assert with_head.sir_db > without.sir_db + 30.0
