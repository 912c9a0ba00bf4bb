"""How exactly bearings can be known at best: Cramer-Rao bounds.

At one frequency, N snapshots y = A s + v of M microphones, v ~ CN(0, sigma2 I), K talkers with covariance P; D holds
the derivatives of A's columns with respect to each talker's parameters, and Pi = I - A A^+ projects onto what the
talkers do not reach. With H_(ka)(lb) = d_ka^H Pi d_lb, the inverse bounds are

    deterministic signals [1]_:  F = 2 N / sigma2  Re[ H_(ka)(lb) P_lk ]
    random signals [2]_:         F = 2 N / sigma2  Re[ H_(ka)(lb) (P A^H R^(-1) A P)_lk ],   R = A P A^H + sigma2 I.

Frequencies are independent and add up.

.. [1] P. Stoica and A. Nehorai, "MUSIC, maximum likelihood, and Cramer-Rao bound", IEEE Trans. Acoust. Speech Signal
   Process. 37, 1989.
.. [2] P. Stoica and A. Nehorai, "Performance study of conditional and unconditional direction-of-arrival estimation",
   IEEE Trans. Acoust. Speech Signal Process. 38, 1990.
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from unmix.errors import UnsolvableError

__all__ = ["bearing_bound", "fisher_information", "signal_part", "white_noise_bound"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Signals = Literal["deterministic", "random"]


def projected_derivatives(steering: Complexes, derivative: Complexes) -> Complexes:
    """H = D^H Pi D for steering (..., M, K) and derivative (..., M, K, d): (..., K d, K d)."""
    *_, m, k, d = derivative.shape
    flat = derivative.reshape(*derivative.shape[:-3], m, k * d)
    inside = steering @ (np.linalg.pinv(steering) @ flat)
    return np.asarray(np.swapaxes(flat.conj(), -1, -2) @ (flat - inside))


def signal_part(covariance: Complexes, d: int) -> Complexes:
    """Covariance (..., K, K) of signals as the factor of H: transposed, each entry repeated d x d times."""
    return np.asarray(np.repeat(np.repeat(np.swapaxes(covariance, -1, -2), d, axis=-1), d, axis=-2))


def fisher_information(
    steering: Complexes,
    derivative: Complexes,
    power: Complexes,
    noise: ArrayLike,
    snapshots: ArrayLike,
    *,
    signals: Signals = "deterministic",
) -> Floats:
    """Information about the bearings, summed over frequencies: (K d, K d), parameters of one talker side by side.

    steering    (frequencies, M, K), derivative (frequencies, M, K, d)
    power       (frequencies, K, K) covariance of the talkers' signals
    noise       noise power per microphone; snapshots per frequency: numbers or (frequencies,)
    """
    sigma2 = np.broadcast_to(np.asarray(noise, np.float64), steering.shape[:1])
    n = np.broadcast_to(np.asarray(snapshots, np.float64), steering.shape[:1])
    if signals == "random":
        m = steering.shape[1]
        pa = power @ np.swapaxes(steering.conj(), 1, 2)
        total = steering @ pa + sigma2[:, None, None] * np.eye(m)
        power = pa @ np.linalg.solve(total, np.swapaxes(pa.conj(), 1, 2))
    h = projected_derivatives(steering, derivative)
    weighted = np.real(h * signal_part(power, derivative.shape[-1]))
    return np.asarray(np.einsum("f,fij->ij", 2.0 * n / sigma2, weighted))


def bearing_bound(fisher: Floats) -> Floats:
    """Covariance (K d, K d) that no unbiased estimate goes below.

    Raises UnsolvableError where a parameter leaves the recording as it is.
    """
    scale = np.sqrt(np.maximum(np.diag(fisher), 1e-300))
    scaled = fisher / np.outer(scale, scale)
    if np.linalg.eigvalsh(scaled)[0] < 1e-12:
        raise UnsolvableError(
            "the array cannot tell these directions: a change of bearing changes nothing to first order; "
            "move the talkers apart or hold the elevation fixed"
        )
    return np.asarray(np.linalg.inv(scaled) / np.outer(scale, scale))


def white_noise_bound(
    tau: Floats,
    tau_derivative: Floats,
    frequency_hz: Floats,
    power: Complexes,
    noise: ArrayLike,
    snapshots: ArrayLike,
    *,
    signals: Signals = "deterministic",
) -> Floats:
    """Bound for plane waves that reach microphone m with delays tau (K, M), derivatives (K, M, d): (K d, K d)."""
    omega = 2.0 * np.pi * np.asarray(frequency_hz, np.float64)
    steering = np.exp(-1j * omega[:, None, None] * tau.T)
    derivative = -1j * omega[:, None, None, None] * steering[..., None] * np.swapaxes(tau_derivative, 0, 1)
    return bearing_bound(fisher_information(steering, derivative, power, noise, snapshots, signals=signals))
