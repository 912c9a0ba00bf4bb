"""Filters applied to a stream in chunks of any size, with no delay of their own and no allocation that grows.

Partitioned: filters are cut into P parts of B taps, input into blocks of B samples (T. G. Stockham, "High-speed
convolution and correlation", 1966; uniform partitions as in B. D. Kulp, "Digital equalization using Fourier transform
techniques", AES 85th Convention, 1988). With X_i the spectrum of blocks i - 1 and i and H_p of part p padded with B
zeros,

    block i of the output = last B samples of F^-1( sum_p H_p X_(i-p) ).

Parts 1..P-1 need whole blocks only and are summed once per block; part 0 is computed anew from as much of block i as
has come, the rest taken as zero: outputs depend on no later sample, so what has come can leave at once.

Direct: short filters as one product of matrices.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

__all__ = ["Convolver", "Direct", "Kernel", "Partitioned", "choose_block", "convolver_for"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
State = dict[str, NDArray[Any]]
Form = TypeVar("Form")

LONGEST_DIRECT = 48
"""Taps up to which the direct form is faster."""
SMALLEST_BLOCK, LARGEST_BLOCK = 32, 512


@dataclass
class Kernel:
    """Filters (talkers, channels, taps) in the form that a convolver applies, and what it keeps for them."""

    taps: Floats
    reversed_taps: Floats | None = None
    spectra: Complexes | None = None
    tail: Complexes | None = None
    tail_block: int = -1


class Convolver(Protocol):
    """Holds the input's past; any number of kernels may be applied to the same input."""

    @property
    def capacity(self) -> int:
        """Longest filter that can be applied."""

    @property
    def room(self) -> int:
        """Most samples that the next call of `apply` may take."""

    def kernel(self, taps: Floats) -> Kernel:
        """Prepare filters (talkers, channels, taps)."""

    def apply(self, piece: Floats, kernels: tuple[Kernel, ...]) -> list[Floats]:
        """Take (channels, n) samples, n up to `room`; return (talkers, n) for each kernel."""

    def reset(self) -> None:
        """Forget all input."""

    def state(self) -> State:
        """The input's past."""

    def restore(self, state: State) -> None:
        """Go on from a state."""


def convolver_for(channels: int, taps: int) -> Convolver:
    """The faster form for filters of about `taps` taps; its capacity leaves room for filters up to twice as long."""
    if taps <= LONGEST_DIRECT:
        return Direct(channels, 2 * LONGEST_DIRECT)
    block = choose_block(taps)
    return Partitioned(channels, block, -(-2 * taps // block))


def choose_block(taps: int) -> int:
    """Block length, a power of two near twice the root of the length: work for part 0 and for the others balance."""
    wanted = 2 ** round(np.log2(2.0 * np.sqrt(taps)))
    return int(min(max(wanted, SMALLEST_BLOCK), LARGEST_BLOCK))


class Direct:
    """Filters as one product of matrices per piece."""

    def __init__(self, channels: int, capacity: int) -> None:
        self._past = np.zeros((channels, capacity - 1))
        self.capacity = capacity
        self.room = 4096

    def kernel(self, taps: Floats) -> Kernel:
        """Prepare filters (talkers, channels, taps)."""
        return Kernel(taps, reversed_taps=_padded(taps, self.capacity)[..., ::-1].copy())

    def apply(self, piece: Floats, kernels: tuple[Kernel, ...]) -> list[Floats]:
        """Take (channels, n) samples; return (talkers, n) for each kernel."""
        joined = np.concatenate([self._past, piece], axis=1)
        self._past[:] = joined[:, joined.shape[1] - self._past.shape[1] :]
        windows = np.lib.stride_tricks.sliding_window_view(joined, self.capacity, axis=1)
        # (talkers, channels, taps) with (channels, n, taps): one product of matrices.
        return [np.tensordot(_made(kernel.reversed_taps), windows, axes=((1, 2), (0, 2))) for kernel in kernels]

    def reset(self) -> None:
        """Forget all input."""
        self._past[:] = 0.0

    def state(self) -> State:
        """The input's past."""
        return {"past": self._past.copy()}

    def restore(self, state: State) -> None:
        """Go on from a state."""
        self._past[:] = state["past"]


class Partitioned:
    """Uniformly partitioned FFT; see the module's description."""

    def __init__(self, channels: int, block: int, parts: int) -> None:
        self._block, self._parts, self._channels = block, parts, channels
        self.capacity = block * parts
        # Newest first, the channels of one block beside each other: a talker is then one row times this column.
        self._spectra = np.zeros((block + 1, parts * channels), np.complex128)
        self._segment = np.zeros((channels, 2 * block))
        self._filled = 0
        self._blocks = 0

    @property
    def room(self) -> int:
        """Samples that the current block still takes."""
        return self._block - self._filled

    def kernel(self, taps: Floats) -> Kernel:
        """Prepare filters (talkers, channels, taps)."""
        talkers = len(taps)
        parts = -(-taps.shape[-1] // self._block)
        if parts > self._parts:
            raise ValueError(f"filters of {taps.shape[-1]} taps, capacity {self.capacity}")
        padded = _padded(taps, parts * self._block).reshape(talkers, self._channels, parts, self._block)
        spectra = np.fft.rfft(padded, 2 * self._block, axis=-1).transpose(3, 0, 2, 1)
        return Kernel(taps, spectra=np.ascontiguousarray(spectra.reshape(self._block + 1, talkers, -1)))

    def apply(self, piece: Floats, kernels: tuple[Kernel, ...]) -> list[Floats]:
        """Take (channels, n) samples, n up to `room`; return (talkers, n) for each kernel."""
        b, m = self._block, self._channels
        start, stop = self._filled, self._filled + piece.shape[1]
        self._segment[:, b + start : b + stop] = piece
        newest = np.fft.rfft(self._segment, axis=-1).T
        outputs = []
        for kernel in kernels:
            product = (_made(kernel.spectra)[:, :, :m] @ newest[:, :, None])[..., 0] + self._tail(kernel)
            outputs.append(np.fft.irfft(product.T, 2 * b, axis=-1)[:, b + start : b + stop])
        self._filled = stop
        if stop == b:
            self._spectra[:, m:] = self._spectra[:, :-m].copy()
            self._spectra[:, :m] = newest
            self._segment[:, :b] = self._segment[:, b:]
            self._segment[:, b:] = 0.0
            self._filled = 0
            self._blocks += 1
        return outputs

    def _tail(self, kernel: Kernel) -> Complexes:
        """What parts 1..P-1 make of the blocks before this one."""
        if kernel.tail is None or kernel.tail_block != self._blocks:
            later = _made(kernel.spectra)[:, :, self._channels :]
            kernel.tail = (later @ self._spectra[:, : later.shape[-1], None])[..., 0]
            kernel.tail_block = self._blocks
        return kernel.tail

    def reset(self) -> None:
        """Forget all input."""
        self._spectra[:] = 0.0
        self._segment[:] = 0.0
        self._filled = 0
        self._blocks += 1

    def state(self) -> State:
        """The input's past."""
        return {
            "spectra": self._spectra.copy(),
            "segment": self._segment.copy(),
            "filled": np.array(self._filled),
        }

    def restore(self, state: State) -> None:
        """Go on from a state."""
        self._spectra[:] = state["spectra"]
        self._segment[:] = state["segment"]
        self._filled = int(state["filled"])
        self._blocks += 1


def _made(form: Form | None) -> Form:
    if form is None:
        raise ValueError("the kernel was made by another convolver")
    return form


def _padded(taps: Floats, length: int) -> Floats:
    if taps.shape[-1] > length:
        raise ValueError(f"filters of {taps.shape[-1]} taps, capacity {length}")
    return np.pad(taps, ((0, 0), (0, 0), (0, length - taps.shape[-1])))
