"""Word lengths: filters rounded to 32-bit float, or to fixed point with one scale per filter.

Fixed point of b bits: a tap h becomes an integer c, h = c D, with D the step at which the filter's largest tap just
fits: a device sums with c and multiplies by D once per filter and sample. Powers of two for D, which would need a shift
only, would cost up to one bit more.

Rounding errors are fed back, as in converters (H. A. Spang and P. M. Schultheiss, "Reduction of quantizing noise by use
of feedback", IRE Trans. Communications Systems 10, 1962): each tap's error is carried into the next, so that their
spectrum is (D^2 / 12) |1 - a e^(-i omega)|^2 per tap, low where speech is strong. a is the one-step predictor of the
average speech spectrum. Taps below (1 - a) D / 2 never fire: they are lost whole. So, before anything is rounded,

    e_km(omega) = sum over taps of (h^2 where |h| < (1 - a) D / 2, else D^2 / 12 |1 - a e^(-i omega)|^2),
    dE_kj = sum_omega S_j sum_m g_mj^2 e_km,

S_j the talkers' power spectra, and white noise gains the mean of e_km over frequency.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from unmix.export.sir import energies, sir_of_energies_db, speech_spectra
from unmix.model.delays import Paths
from unmix.solvers.stationary import FilterBank

__all__ = [
    "ALL_WORDS",
    "BITS",
    "WORDS",
    "Word",
    "Words",
    "noise_gain_after_rounding_db",
    "noise_gain_db",
    "peak_gain",
    "predictor",
    "quantise",
    "sir_after_rounding_db",
    "worst_input",
]

Floats = NDArray[np.float64]
Word = Literal["float32", "s24", "s16", "s12", "s8"]
ALL_WORDS: tuple[Word, ...] = get_args(Word)
WORDS = ALL_WORDS[:4]
"""What is exported unless something else is asked for."""
BITS: dict[Word, int] = {"s24": 24, "s16": 16, "s12": 12, "s8": 8}


@dataclass(frozen=True)
class Words:
    """Filters in a word length.

    values  (talkers, channels, taps) float32, or integers: the tap is value * scale
    scale   (talkers, channels), one for float32
    """

    word: Word
    values: NDArray[np.float32] | NDArray[np.int32]
    scale: NDArray[np.float32]

    @property
    def taps(self) -> Floats:
        """What the words stand for."""
        return np.asarray(self.values.astype(np.float64) * self.scale[..., None].astype(np.float64))


def quantise(taps: Floats, word: Word, sample_rate: float) -> Words:
    """Round filters (talkers, channels, taps) to a word length."""
    if word == "float32":
        return Words(word, taps.astype(np.float32), np.ones(taps.shape[:2], np.float32))
    scale, feedback = _scales(taps, word), predictor(sample_rate)
    most = 2.0 ** (BITS[word] - 1) - 1.0
    scaled = taps / scale[..., None].astype(np.float64)
    values = np.empty(taps.shape, np.int32)
    error = np.zeros(taps.shape[:2])
    for n in range(taps.shape[-1]):
        wanted = scaled[..., n] + feedback * error
        rounded = np.clip(np.rint(wanted), -most, most)
        error = wanted - rounded
        values[..., n] = rounded
    return Words(word, values, scale)


def predictor(sample_rate: float) -> float:
    """a: how much of a sample of average speech its predecessor foretells."""
    lags = np.fft.irfft(speech_spectra(1, sample_rate)[0])
    return float(lags[1] / lags[0])


def _scales(taps: Floats, word: Word) -> NDArray[np.float32]:
    """The step of each filter, a 32-bit float; one for a filter that is all zero."""
    largest = np.abs(taps).max(axis=-1)
    step = (largest / (2.0 ** (BITS[word] - 1) - 1.0)).astype(np.float32)
    # Rounded up, so that the largest tap still fits.
    return np.where(largest > 0.0, np.nextafter(step, np.float32(np.inf)), np.float32(1.0))


def _errors(taps: Floats, word: Word, sample_rate: float) -> tuple[Floats, Floats, float]:
    """(talkers, channels) energies of lost taps and of rounding, and how rounding is coloured (0: white)."""
    size = np.abs(taps)
    if word == "float32":
        step = 2.0 ** (np.floor(np.log2(np.maximum(size, 2.0**-126))) - 23.0)
        return np.zeros(taps.shape[:2]), (step**2 / 12.0).sum(axis=-1), 0.0
    feedback = predictor(sample_rate)
    step = _scales(taps, word).astype(np.float64)[..., None]
    lost = size < 0.5 * (1.0 - feedback) * step
    return (taps**2 * lost).sum(axis=-1), (step**2 / 12.0 * ~lost).sum(axis=-1), feedback


def sir_after_rounding_db(bank: FilterBank, word: Word, paths: Paths, spectra: Floats, sample_rate: float) -> Floats:
    """SIR of each talker in a word length, by the formula above, before anything is rounded."""
    lost, rounded, feedback = _errors(bank.taps, word, sample_rate)
    omega = np.pi * np.arange(spectra.shape[-1]) / (spectra.shape[-1] - 1)
    colour = np.abs(1.0 - feedback * np.exp(-1j * omega)) ** 2
    heard = paths.gain**2
    more = np.einsum("jm,km,j->kj", heard, lost, spectra.sum(axis=-1))
    more += np.einsum("jm,km,j->kj", heard, rounded, spectra @ colour)
    return sir_of_energies_db(energies(bank, paths, spectra, sample_rate) + more)


def noise_gain_after_rounding_db(taps: Floats, word: Word, sample_rate: float) -> Floats:
    """Noise gain of each talker in a word length, by formula."""
    lost, rounded, feedback = _errors(taps, word, sample_rate)
    energy = (taps**2).sum(axis=-1) - lost + rounded * (1.0 + feedback**2)
    return np.asarray(10.0 * np.log10(energy.sum(axis=1)))


def noise_gain_db(taps: Floats) -> Floats:
    """Power gain of each talker's filters for noise that is white and independent in all channels."""
    return np.asarray(10.0 * np.log10((taps**2).sum(axis=(1, 2))))


def peak_gain(taps: Floats) -> Floats:
    """Largest magnitude of each talker's output for inputs within full scale: the sum of all |h|."""
    return np.asarray(np.abs(taps).sum(axis=(1, 2)))


def worst_input(taps: Floats, talker: int) -> Floats:
    """(channels, taps): the input within full scale at whose end the talker's output is largest."""
    return np.asarray(np.sign(taps[talker, :, ::-1]))
