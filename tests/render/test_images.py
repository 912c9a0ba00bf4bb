import itertools

import numpy as np

from unmix.render.images import image_field

SIZE = np.array([5.0, 4.0, 3.0])
SOURCE, CENTRE = np.array([1.2, 2.9, 1.6]), np.array([3.1, 1.4, 1.1])


def mirrored(order: int) -> dict[tuple[float, ...], int]:
    """Places by reflecting in one wall after another, with the number of reflections: no lattice involved."""
    found = {tuple(np.round(SOURCE, 9)): 0}
    shell = [SOURCE]
    for count in range(1, order + 1):
        shell = [mirror(place, axis, side) for place in shell for axis, side in itertools.product(range(3), range(2))]
        fresh = {tuple(np.round(place, 9)): place for place in shell}
        shell = [place for key, place in fresh.items() if key not in found]
        found.update({tuple(np.round(place, 9)): count for place in shell})
    return found


def mirror(place: np.ndarray, axis: int, side: int) -> np.ndarray:
    image = place.copy()
    image[axis] = 2.0 * side * SIZE[axis] - place[axis]
    return image


def test_images_are_the_mirror_images_of_mirror_images() -> None:
    images = image_field(SIZE, 40.0, jitter_m=0.0).images(SOURCE, CENTRE)
    order = images.order
    places = {tuple(np.round(p, 9)): int(n) for p, n in zip(images.at(SOURCE).T, order, strict=True) if n <= 2}
    truth = mirrored(2)
    assert len(places) == 25
    assert places == {key: truth[key] for key in places}


def test_amplitude_is_the_product_of_the_walls() -> None:
    images = image_field(SIZE, 12.0, jitter_m=0.0).images(SOURCE, CENTRE)
    reflection = np.array([0.9, 0.8, 0.7, 0.6, 0.5, 0.4])
    amplitude, places = images.amplitude(reflection), images.at(SOURCE)
    for wall, (axis, side) in enumerate(itertools.product(range(3), range(2))):
        found = np.argmin(np.linalg.norm(places - mirror(SOURCE, axis, side)[:, None], axis=0))
        assert amplitude[found] == reflection[wall]
    assert amplitude[images.direct] == 1.0


def test_displacements_stay_with_their_images_when_the_source_moves() -> None:
    field = image_field(SIZE, 30.0, jitter_m=0.08, seed=(4,))
    step = np.array([0.02, -0.01, 0.005])
    images = field.images(SOURCE, CENTRE)
    moved = images.at(SOURCE + step) - images.at(SOURCE)
    assert np.allclose(np.abs(moved), np.abs(step)[:, None])
    assert np.abs(images.jitter_m).max() <= 0.08
    assert not images.jitter_m[:, images.direct].any()


def test_thinning_keeps_the_power() -> None:
    # 2.2 x 1.8 x 1.4 m: thinned from 50 m on, an eighth of the images are left at 150 m.
    size = np.array([2.2, 1.8, 1.4])
    images = image_field(size, 150.0, jitter_m=0.0).images(0.4 * size, 0.5 * size)
    everything = 4.0 / 3.0 * np.pi * 150.0**3 / np.prod(size)
    assert images.weight.size < 0.35 * everything
    assert np.isclose(np.sum(images.weight**2), everything, rtol=0.005)


def test_the_source_is_its_own_only_image_without_reach() -> None:
    images = image_field(SIZE, 0.0).images(SOURCE, CENTRE)
    assert images.direct == 0
    assert np.array_equal(images.at(SOURCE)[:, 0], SOURCE)
