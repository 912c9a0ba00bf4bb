"""Filters on a stream: chunks of any size give what one convolution gives."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter

from unmix.live.convolver import Convolver, Direct, Partitioned, choose_block, convolver_for

RNG = np.random.default_rng(81)
TAPS = RNG.standard_normal((2, 3, 40))
SOUND = RNG.standard_normal((3, 700))


def plain(taps: np.ndarray, sound: np.ndarray) -> np.ndarray:
    return np.stack([sum(lfilter(h, 1.0, y) for h, y in zip(rows, sound, strict=True)) for rows in taps])


def carried(convolver: Convolver, taps: np.ndarray, sizes: list[int]) -> np.ndarray:
    kernel, at, out = convolver.kernel(taps), 0, []
    while at < SOUND.shape[1]:
        count = min(sizes[len(out) % len(sizes)], convolver.room, SOUND.shape[1] - at)
        out.append(convolver.apply(SOUND[:, at : at + count], (kernel,))[0])
        at += count
    return np.concatenate(out, axis=1)


@pytest.mark.parametrize("sizes", [[1], [5, 1, 17], [16], [1000]])
@pytest.mark.parametrize("make", [lambda: Direct(3, 64), lambda: Partitioned(3, 16, 4), lambda: Partitioned(3, 64, 1)])
def test_any_chunks_give_the_plain_convolution(make, sizes) -> None:
    # Rounding of a few hundred products.
    assert np.allclose(carried(make(), TAPS, sizes), plain(TAPS, SOUND), rtol=0, atol=1e-12)


def test_the_form_follows_the_length() -> None:
    assert isinstance(convolver_for(3, 20), Direct)
    assert isinstance(convolver_for(3, 1328), Partitioned)
    assert (choose_block(1328), choose_block(100), choose_block(10**6)) == (64, 32, 512)
    assert convolver_for(3, 1328).capacity >= 2 * 1328


@pytest.mark.parametrize("convolver", [Direct(3, 16), Partitioned(3, 16, 2)])
def test_filters_beyond_the_capacity_are_refused(convolver: Convolver) -> None:
    with pytest.raises(ValueError, match="40 taps"):
        convolver.kernel(TAPS)


def test_kernels_of_another_form_are_refused() -> None:
    with pytest.raises(ValueError, match="another convolver"):
        Direct(3, 64).apply(SOUND[:, :4], (Partitioned(3, 16, 4).kernel(TAPS),))
