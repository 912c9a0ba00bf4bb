"""What a bank costs on a device: multiply-accumulates, memory, latency.

K talkers, M channels, L taps, w bytes a word, f samples per second.

    direct            K M L f multiply-accumulates; K M L words of filters, M L of input
    partitioned FFT   blocks of B, P = L / B parts rounded up; per block M forward and K inverse real transforms of
                      N = 2B, and K M P (B + 1) complex multiply-accumulates of four real ones each; the spectra of
                      filters and input, and the blocks

A real transform of N is one complex radix-2 transform of N / 2, N/4 log2(N/2) butterflies of four multiply-accumulates,
and 2N for taking its halves apart: N (log2(N/2) + 2). A block must be complete before it is transformed: B samples of
latency more than the filters' own delay.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import ceil, log2
from typing import Literal

__all__ = ["Cost", "bank_costs", "direct_cost", "partitioned_cost"]

BLOCKS = (32, 64, 128, 256, 512)


@dataclass(frozen=True)
class Cost:
    """One way to run a bank.

    latency_samples  the filters' delay and, for blocks, the block
    """

    form: Literal["direct", "partitioned FFT"]
    block: int
    mac_per_s: float
    memory_bytes: int
    latency_samples: int


def direct_cost(talkers: int, channels: int, taps: int, *, delay: int, sample_rate: float, word_bytes: int = 4) -> Cost:
    """Every tap at every sample."""
    memory = (talkers * channels * taps + channels * taps) * word_bytes
    return Cost("direct", 1, talkers * channels * taps * sample_rate, memory, delay)


def partitioned_cost(
    talkers: int, channels: int, taps: int, block: int, *, delay: int, sample_rate: float, word_bytes: int = 4
) -> Cost:
    """Uniform partitions of `block` taps, a power of two."""
    parts, size = ceil(taps / block), 2 * block
    transform = size * (log2(size / 2) + 2.0)
    spectra = talkers * channels * parts * (block + 1)
    work = (channels + talkers) * transform + 4.0 * spectra
    memory = (2 * spectra + 2 * channels * parts * (block + 1) + (channels + talkers) * size) * word_bytes
    return Cost("partitioned FFT", block, work * sample_rate / block, memory, delay + block)


def bank_costs(
    talkers: int, channels: int, taps: int, *, delay: int, sample_rate: float, word_bytes: int = 4
) -> list[Cost]:
    """The direct form, and partitions from 32 taps up to the filters' length."""
    direct = direct_cost(talkers, channels, taps, delay=delay, sample_rate=sample_rate, word_bytes=word_bytes)
    blocks = [b for b in BLOCKS if b < 2 * taps]
    return [
        direct,
        *(
            partitioned_cost(talkers, channels, taps, b, delay=delay, sample_rate=sample_rate, word_bytes=word_bytes)
            for b in blocks
        ),
    ]
