"""Leakage put in is leakage found."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import convolution_matrix, lstsq

from tests.conftest import speech
from unmix.metrics.distortion import ReferenceSet
from unmix.metrics.leakage import leakage_of_outputs_db, projected_leakage_db


def test_outputs_of_the_images_alone(rng: np.random.Generator) -> None:
    images = rng.standard_normal((3, 2000))
    images /= np.linalg.norm(images, axis=1, keepdims=True)
    gains_db = np.array([[0.0, -20.0, -60.0], [-33.0, 0.0, -47.0], [-10.0, -200.0, 0.0]])
    outputs = np.array([[10.0 ** (gains_db[k, j] / 20.0) * images[j] for k in range(3)] for j in range(3)])
    leakage = leakage_of_outputs_db(outputs)
    others = ~np.eye(3, dtype=bool)
    np.testing.assert_allclose(leakage[others], gains_db[others], atol=1e-9)
    assert np.isnan(np.diag(leakage)).all()


def test_a_silent_output_has_no_leakage() -> None:
    outputs = np.zeros((2, 2, 100))
    outputs[0, 0] = 1.0
    assert np.isnan(leakage_of_outputs_db(outputs)).all()


@pytest.mark.parametrize("leak_db", [-10.0, -30.0, -45.0])
def test_projection_finds_what_was_mixed_in(leak_db: float, rng: np.random.Generator) -> None:
    images = np.array([speech("novel-reader", 6.0), speech("card-reader", 6.0)])
    gain = 10.0 ** (leak_db / 20.0)
    filtered = np.convolve(images[1], [0.6, 0.0, 0.0, -0.8])[: images.shape[1]]
    filtered *= np.linalg.norm(images[0]) / np.linalg.norm(filtered)
    estimate = images[0] + gain * filtered + 1e-5 * rng.standard_normal(images.shape[1])
    leakage = projected_leakage_db(estimate[None], ReferenceSet(images), [0])
    assert leakage[0, 1] == pytest.approx(leak_db, abs=0.1)
    assert np.isnan(leakage[0, 0])


def test_projection_ends_where_the_docstring_says(rng: np.random.Generator) -> None:
    """Noise 27 dB down and no leakage: the 512 taps fit as much of the noise as their share of the samples."""
    images = rng.standard_normal((2, 80000))
    noise = rng.standard_normal((8, 80000)) * 10.0 ** (-27.0 / 20.0)
    leakage = projected_leakage_db(images[0] + noise, ReferenceSet(images), [0] * 8)
    end_db = -(27.0 + 10.0 * np.log10(80000 / 512))
    assert float(np.mean(leakage[:, 1])) == pytest.approx(end_db, abs=0.3)


def test_projection_is_what_only_one_of_three_talkers_can_explain(rng: np.random.Generator) -> None:
    """The definition written out with explicit delayed copies."""
    taps, images = 12, rng.standard_normal((3, 900))
    images[2] += 0.8 * images[1]
    estimate = images[0] + 0.2 * images[1] - 0.1 * images[2] + 0.05 * rng.standard_normal(900)
    copies = [convolution_matrix(image, taps, mode="full") for image in images]
    e = np.concatenate([estimate, np.zeros(taps - 1)])

    def project(*talkers: int) -> np.ndarray:
        A = np.hstack([copies[j] for j in talkers])
        return np.asarray(A @ lstsq(A, e)[0])

    whole = project(0, 1, 2)
    expected = [
        10.0 * np.log10(np.sum((whole - project(*others)) ** 2) / np.sum(project(0) ** 2))
        for others in ((0, 2), (0, 1))
    ]
    leakage = projected_leakage_db(estimate[None], ReferenceSet(images, filter_length=taps), [0])
    np.testing.assert_allclose(leakage[0, 1:], expected, atol=1e-9)
