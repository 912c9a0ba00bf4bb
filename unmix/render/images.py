"""Image sources of a shoebox room.

The image of a source s with lattice index n and mirror flag p has, per axis with room length L, the coordinate

    (1 - 2 p) s + 2 n L,

is reflected |n - p| times by the wall at 0 and |n| times by the wall at L [1]_, and carries the product of those walls'
pressure reflection factors. Reflection is real, positive and the same at all frequencies.

Images of a perfect box line up in time and sweep upwards in pitch; every image but the direct one is therefore
displaced by a small random vector, uniform in a cube, the same for every microphone and every position of the
talker [2]_.

.. [1] J. B. Allen and D. A. Berkley, "Image method for efficiently simulating small-room acoustics",
   J. Acoust. Soc. Am. 65, 1979.
.. [2] E. De Sena, N. Antonello, M. Moonen, T. van Waterschoot, "On the modeling of rectangular geometries in room
   acoustic simulations", IEEE/ACM Trans. Audio Speech Lang. Process. 23, 2015 (its 8 cm: value from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["DEFAULT_JITTER_M", "ImageField", "Images", "NearImages", "image_field", "wall_product"]

Floats = NDArray[np.float64]
Counts = NDArray[np.int16]

DEFAULT_JITTER_M = 0.08


@dataclass(frozen=True, slots=True)
class Images:
    """Images of one source: ``positions_m`` (3, images) and ``walls`` (6, images), how often each wall (x=0, x=L, y=0,
    y=L, z=0, z=L) reflected; ``direct`` is the index of the source itself."""

    positions_m: Floats
    walls: Counts
    direct: int

    @property
    def order(self) -> NDArray[np.int64]:
        """Number of reflections of each image, (images,)."""
        return np.asarray(self.walls.sum(axis=0, dtype=np.int64))

    def amplitude(self, reflection: Floats) -> Floats:
        """Product of the walls' reflection factors ``reflection`` (6,) for each image, (images,)."""
        return wall_product(self.walls, reflection)


@dataclass(frozen=True, slots=True)
class NearImages:
    """Images of few reflections as functions of the source's place s: ``sign * s + offset_m``, (3, images) each."""

    sign: Floats
    offset_m: Floats
    walls: Counts
    direct: int


@dataclass(frozen=True, slots=True)
class ImageField:
    """The lattice that all positions of one source share: same images, same displacements wherever the source goes."""

    size_m: Floats
    reach_m: float
    lattice: tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]
    jitter_m: Floats | None

    def images(self, source_m: Floats, centre_m: Floats) -> Images:
        """Images of the source at ``source_m`` (3,) that lie within reach of ``centre_m`` (3,)."""
        axes = [self._axis(axis, float(source_m[axis])) for axis in range(3)]
        square = [(place - centre) ** 2 for (place, _, _), centre in zip(axes, centre_m, strict=True)]
        distance2 = square[0][:, None, None] + square[1][None, :, None] + square[2][None, None, :]
        kept = np.flatnonzero(distance2.ravel() <= self.reach_m**2)
        index = np.unravel_index(kept, distance2.shape)
        places = np.stack([axes[axis][0][index[axis]] for axis in range(3)])
        walls: Counts = np.stack([axes[axis][side][index[axis]] for axis in range(3) for side in (1, 2)])
        direct = int(np.flatnonzero(~walls.any(axis=0))[0])
        if self.jitter_m is not None:
            places += self.jitter_m[:, kept]
            places[:, direct] = source_m
        return Images(places, walls, direct)

    def nearest(self, order: int) -> NearImages:
        """The images of at most ``order`` reflections, for a source at any place."""
        n, p = (np.stack(np.meshgrid(*axes, indexing="ij")).reshape(3, -1) for axes in self._indices())
        walls = np.stack([count for axis in range(3) for count in (np.abs(n - p)[axis], np.abs(n)[axis])])
        kept = np.flatnonzero(walls.sum(axis=0) <= order)
        n, p, walls = n[:, kept], p[:, kept], walls[:, kept].astype(np.int16)
        direct = int(np.flatnonzero(~walls.any(axis=0))[0])
        offset = 2.0 * n * self.size_m[:, None]
        if self.jitter_m is not None:
            offset += self.jitter_m[:, kept]
            offset[:, direct] = 0.0
        return NearImages((1 - 2 * p).astype(np.float64), offset, walls, direct)

    def _indices(self) -> tuple[list[NDArray[np.int64]], list[NDArray[np.int64]]]:
        """Lattice index and mirror flag along each axis, in the order in which images are counted."""
        return [np.repeat(n, 2) for n in self.lattice], [np.tile([0, 1], n.size) for n in self.lattice]

    def _axis(self, axis: int, source: float) -> tuple[Floats, Counts, Counts]:
        n, p = (index[axis] for index in self._indices())
        place = (1 - 2 * p) * source + 2.0 * n * self.size_m[axis]
        return place, np.abs(n - p).astype(np.int16), np.abs(n).astype(np.int16)


def image_field(
    size_m: Floats, reach_m: float, *, jitter_m: float = DEFAULT_JITTER_M, rng: np.random.Generator | None = None
) -> ImageField:
    """Lattice of all images within ``reach_m`` of anywhere in a room of ``size_m`` (3,).

    ``jitter_m`` is the largest displacement along each axis; it needs ``rng``. None is displaced when it is zero or
    ``rng`` is None.
    """
    size = np.asarray(size_m, dtype=np.float64)
    lattice = []
    for length in size:
        last = int(np.ceil((reach_m + length) / (2.0 * length)))
        lattice.append(np.arange(-last, last + 1))
    jitter = None
    if rng is not None and jitter_m > 0.0:
        count = int(np.prod([2 * axis.size for axis in lattice]))
        jitter = rng.uniform(-jitter_m, jitter_m, (3, count))
    return ImageField(size, float(reach_m), (lattice[0], lattice[1], lattice[2]), jitter)


def wall_product(walls: Counts, reflection: Floats) -> Floats:
    """Product of the reflection factors ``reflection`` (6,) to the powers ``walls`` (6, images): (images,)."""
    if np.all(reflection == reflection[0]):
        order = walls.sum(axis=0, dtype=np.int64)
        return np.asarray(_powers(reflection[0], int(order.max(initial=0)))[order])
    total = np.ones(walls.shape[1])
    for count, factor in zip(walls, reflection, strict=True):
        total *= _powers(factor, int(count.max(initial=0)))[count]
    return total


def _powers(factor: float, last: int) -> Floats:
    return np.asarray(float(factor) ** np.arange(last + 1, dtype=np.float64))
