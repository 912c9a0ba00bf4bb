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

__all__ = ["DEFAULT_JITTER_M", "ImageField", "Images", "image_field"]

Floats = NDArray[np.float64]
Whole = NDArray[np.int64]

DEFAULT_JITTER_M = 0.08


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
    ``direct`` the index of the source itself, -1 when it is not among them.
    """

    axes: tuple[_Axis, _Axis, _Axis]
    index: Whole
    jitter_m: Floats | None
    direct: int

    def at(self, source_m: Floats) -> Floats:
        """Places of all images for a source at ``source_m`` (3,): (3, images)."""
        places = np.empty(self.index.shape)
        for axis, index, source, place in zip(self.axes, self.index, source_m, places, strict=True):
            np.take(axis.sign * source + axis.offset_m, index, out=place)
        if self.jitter_m is not None:
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
        return np.asarray(x * y * z)

    def select(self, chosen: NDArray[np.bool_]) -> Images:
        """The images for which ``chosen`` (images,) is true."""
        if chosen.all():
            return self
        kept = np.flatnonzero(chosen)
        place = np.flatnonzero(kept == self.direct)
        jitter = None if self.jitter_m is None else self.jitter_m[:, kept]
        return Images(self.axes, self.index[:, kept], jitter, int(place[0]) if place.size else -1)


@dataclass(frozen=True, slots=True)
class ImageField:
    """The lattice that all positions of one source share: same images, same displacements wherever the source goes."""

    reach_m: float
    axes: tuple[_Axis, _Axis, _Axis]
    jitter_m: Floats | None

    def images(self, source_m: Floats, centre_m: Floats) -> Images:
        """The images that lie within reach of ``centre_m`` (3,) when the source is at ``source_m`` (3,)."""
        x, y, z = (
            (axis.sign * source + axis.offset_m - centre) ** 2
            for axis, source, centre in zip(self.axes, source_m, centre_m, strict=True)
        )
        distance2 = x[:, None, None] + y[None, :, None] + z[None, None, :]
        at_home = [int(np.flatnonzero(~axis.walls.any(axis=0))[0]) for axis in self.axes]
        source = int(np.ravel_multi_index(at_home, distance2.shape))
        # The source itself belongs to the field however short the reach.
        distance2[tuple(at_home)] = 0.0
        kept = np.flatnonzero(distance2.ravel() <= self.reach_m**2)
        direct = int(np.searchsorted(kept, source))
        jitter = None
        if self.jitter_m is not None:
            jitter = self.jitter_m[:, kept]
            jitter[:, direct] = 0.0
        return Images(self.axes, np.stack(np.unravel_index(kept, distance2.shape)), jitter, direct)


def image_field(
    size_m: Floats, reach_m: float, *, jitter_m: float = DEFAULT_JITTER_M, rng: np.random.Generator | None = None
) -> ImageField:
    """Lattice of all images within ``reach_m`` of anywhere in a room of ``size_m`` (3,).

    ``jitter_m`` is the largest displacement along each axis; it needs ``rng``. None is displaced when it is zero or
    ``rng`` is None.
    """
    axes = []
    for length in size_m:
        last = int(np.ceil((reach_m + length) / (2.0 * length)))
        n = np.repeat(np.arange(-last, last + 1), 2)
        p = np.tile([0, 1], 2 * last + 1)
        sign, offset = np.asarray(1.0 - 2.0 * p), np.asarray(2.0 * float(length) * n)
        axes.append(_Axis(sign, offset, np.abs(np.stack([n - p, n]))))
    jitter = None
    if rng is not None and jitter_m > 0.0:
        count = int(np.prod([axis.sign.size for axis in axes]))
        jitter = rng.uniform(-jitter_m, jitter_m, (3, count))
    return ImageField(float(reach_m), (axes[0], axes[1], axes[2]), jitter)
