"""Arrays to choose from: a line, circles, two pairs at a head's width, or the user's own at another size."""

from __future__ import annotations

from dataclasses import replace
from typing import Literal

import numpy as np

from unmix.array import Array
from unmix.errors import InputError

__all__ = ["HEAD_WIDTH_M", "SHAPES", "Shape", "make_shape", "scaled"]

Shape = Literal["line", "circle", "circle with centre", "head pairs"]
SHAPES: tuple[Shape, ...] = ("line", "circle", "circle with centre", "head pairs")
HEAD_WIDTH_M = 0.16


def make_shape(shape: Shape, microphones: int, size_m: float) -> Array:
    """An array of a shape.

    size_m  length of the line, diameter of the circle, or distance within each of the two pairs, which face the front
            on either side of a head; the head itself casts no shadow here

    Raises InputError when the shape cannot be made of that many microphones.
    """
    fewest = {"line": 2, "circle": 2, "circle with centre": 3, "head pairs": 4}[shape]
    if microphones < fewest or (shape == "head pairs" and microphones != 4):
        raise InputError(f"{shape}: {microphones} microphones; it takes {fewest}{'' if fewest == 4 else ' or more'}")
    positions = np.zeros((microphones, 3))
    if shape == "line":
        positions[:, 1] = np.linspace(-0.5, 0.5, microphones) * size_m
    elif shape == "head pairs":
        positions[:, 0] = 0.5 * size_m * np.array([1, -1, 1, -1])
        positions[:, 1] = 0.5 * HEAD_WIDTH_M * np.array([1, 1, -1, -1])
    else:
        ring = microphones - (shape == "circle with centre")
        angle = 2.0 * np.pi * np.arange(ring) / ring
        positions[microphones - ring :, :2] = 0.5 * size_m * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    return Array.from_positions(positions)


def scaled(array: Array, aperture_m: float) -> Array:
    """The same array with another aperture, without its corrections."""
    return Array.from_positions(
        replace(array).positions_m * (aperture_m / array.aperture_m), reference_channel=array.reference_channel
    )
