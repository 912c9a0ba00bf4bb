"""Image sources of a shoebox room.

The image of a source s with lattice index n and mirror flag p has, per axis with room length L, the coordinate

    (1 - 2 p) s + 2 n L,

is reflected |n - p| times by the wall at 0 and |n| times by the wall at L [1]_, and carries the product of those walls'
pressure reflection factors. Reflection is real, positive and the same at all frequencies.

Images of a perfect box line up in time and sweep upwards in pitch; every image but the direct one is therefore
displaced by a small random vector, uniform in a cube, the same for every microphone and every position of the
talker [2]_.

The number of images grows with the cube of time. Where more than two arrive per microsecond (0.5 s into a room of
60 m^3), a random share of them is kept, with the power of all: still 125 per sample at 16 kHz, from all directions.

.. [1] J. B. Allen and D. A. Berkley, "Image method for efficiently simulating small-room acoustics",
   J. Acoust. Soc. Am. 65, 1979.
.. [2] E. De Sena, N. Antonello, M. Moonen, T. van Waterschoot, "On the modeling of rectangular geometries in room
   acoustic simulations", IEEE/ACM Trans. Audio Speech Lang. Process. 23, 2015 (its 8 cm: value from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["DEFAULT_JITTER_M", "ImageField", "Images", "image_field"]

Floats = NDArray[np.float64]
Whole = NDArray[np.int64]

DEFAULT_JITTER_M = 0.08
_DENSEST_PER_M = 5800.0  # two per microsecond


@dataclass(frozen=True, slots=True)
class _Axis:
    """All images along one axis: at ``sign * s + offset_m``, reflected ``walls`` (2, images) times by its two walls."""

    sign: Floats
    offset_m: Floats
    walls: Whole


@dataclass(frozen=True, slots=True)
class Images:
    """Images of one source as functions of its place.

    ``index`` (3, images) is each image's place in the axes' tables, ``jitter_m`` (3, images) its displacement,
    ``weight`` (images,) what it stands for, ``direct`` the index of the source itself, -1 when it is not among them.
    """

    axes: tuple[_Axis, _Axis, _Axis]
    index: Whole
    jitter_m: Floats
    weight: Floats
    direct: int

    def at(self, source_m: Floats) -> Floats:
        """Places of all images for a source at ``source_m`` (3,): (3, images)."""
        places = np.empty(self.index.shape)
        for axis, index, source, place in zip(self.axes, self.index, source_m, places, strict=True):
            np.take(axis.sign * source + axis.offset_m, index, out=place)
        places += self.jitter_m
        return places

    @property
    def order(self) -> Whole:
        """Number of reflections of each image, (images,)."""
        x, y, z = (axis.walls.sum(axis=0)[index] for axis, index in zip(self.axes, self.index, strict=True))
        return np.asarray(x + y + z)

    def amplitude(self, reflection: Floats) -> Floats:
        """Product of the walls' reflection factors ``reflection`` (6,) for each image, (images,)."""
        factors = np.reshape(reflection, (3, 2, 1))
        x, y, z = (
            np.prod(factor**axis.walls, axis=0)[index]
            for factor, axis, index in zip(factors, self.axes, self.index, strict=True)
        )
        return np.asarray(x * y * z * self.weight)

    def select(self, chosen: NDArray[np.bool_]) -> Images:
        """The images for which ``chosen`` (images,) is true."""
        if chosen.all():
            return self
        kept = np.flatnonzero(chosen)
        place = np.flatnonzero(kept == self.direct)
        direct = int(place[0]) if place.size else -1
        return Images(self.axes, self.index[:, kept], self.jitter_m[:, kept], self.weight[kept], direct)


@dataclass(frozen=True, slots=True)
class ImageField:
    """The lattice that all positions of one source share.

    ``seed`` draws displacements of up to ``jitter_m`` along each axis, the same wherever the source goes.
    """

    axes: tuple[_Axis, _Axis, _Axis]
    volume_m3: float
    reach_m: float
    jitter_m: float
    seed: tuple[int, ...]

    def images(self, source_m: Floats, centre_m: Floats) -> Images:
        """The images that lie within reach of ``centre_m`` (3,) when the source is at ``source_m`` (3,)."""
        x, y, z = (
            (axis.sign * source + axis.offset_m - centre) ** 2
            for axis, source, centre in zip(self.axes, source_m, centre_m, strict=True)
        )
        plane = y[:, None] + z[None, :]
        home = [int(np.flatnonzero(~axis.walls.any(axis=0))[0]) for axis in self.axes]
        layers = []
        for at in np.flatnonzero((x <= self.reach_m**2) | (np.arange(x.size) == home[0])):
            distance2 = plane + x[at]
            if at == home[0]:
                # The source itself belongs to the field however short the reach.
                distance2[home[1], home[2]] = 0.0
            layers.append(self._layer(int(at), distance2))
        index = np.concatenate([layer[0] for layer in layers], axis=1)
        jitter = np.concatenate([layer[1] for layer in layers], axis=1)
        weight = np.concatenate([layer[2] for layer in layers])
        direct = int(np.flatnonzero(np.all(index == np.array(home)[:, None], axis=0))[0])
        jitter[:, direct] = 0.0
        return Images(self.axes, index, jitter, weight, direct)

    def _layer(self, at: int, distance2: Floats) -> tuple[Whole, Floats, Floats]:
        """Index, displacement and weight of the images of one layer of the lattice, given their squared distances."""
        rng = np.random.default_rng([*self.seed, at])
        kept = np.flatnonzero(distance2.ravel() <= self.reach_m**2)
        jitter = rng.uniform(-self.jitter_m, self.jitter_m, (3, distance2.size))[:, kept]
        crowd = (4.0 * np.pi / (self.volume_m3 * _DENSEST_PER_M)) * distance2.ravel()[kept]
        weight = np.ones(kept.size)
        if crowd.size and crowd.max() > 1.0:
            chosen = np.flatnonzero(rng.random(distance2.size)[kept] * crowd < 1.0)
            kept, jitter, weight = kept[chosen], jitter[:, chosen], np.sqrt(np.maximum(crowd[chosen], 1.0))
        _, width = distance2.shape
        return np.stack([np.full(kept.size, at), kept // width, kept % width]), jitter, weight


def image_field(
    size_m: Floats, reach_m: float, *, jitter_m: float = DEFAULT_JITTER_M, seed: tuple[int, ...] = (0,)
) -> ImageField:
    """Lattice of all images within ``reach_m`` of anywhere in a room of ``size_m`` (3,).

    ``jitter_m`` is the largest displacement along each axis; ``seed`` draws the displacements.
    """
    axes = []
    for length in size_m:
        last = int(np.ceil((reach_m + length) / (2.0 * length)))
        n = np.repeat(np.arange(-last, last + 1), 2)
        p = np.tile([0, 1], 2 * last + 1)
        sign, offset = np.asarray(1.0 - 2.0 * p), np.asarray(2.0 * float(length) * n)
        axes.append(_Axis(sign, offset, np.abs(np.stack([n - p, n]))))
    return ImageField((axes[0], axes[1], axes[2]), float(np.prod(size_m)), float(reach_m), jitter_m, seed)
