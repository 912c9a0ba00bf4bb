"""From a variant and the talkers' paths to the least-squares problem, the same for every method."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.errors import UnsolvableError
from unmix.model.delays import Paths
from unmix.model.differentiators import Differentiators, choose_differentiators
from unmix.model.mixing import Mixing, mixing_from_paths
from unmix.model.noise import Noise, Spectra, diffuse_covariance, fitted_covariance, noise_from_covariance
from unmix.model.prior import make_prior
from unmix.physics import speed_of_sound
from unmix.settings import SolverSettings
from unmix.solvers.problem import Problem
from unmix.variant import Variant

__all__ = ["Posed", "check_solvable", "paths_collide", "pose"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Posed:
    """The least-squares problem of a variant at rest, with the choices made on the way."""

    problem: Problem
    differentiators: Differentiators
    fallbacks: tuple[str, ...] = ()


def pose(
    variant: Variant,
    paths: Paths,
    array: Array,
    *,
    sample_rate: int,
    temperature_c: float = 20.0,
    spectra: Spectra | None = None,
) -> Posed:
    """Pose the problem of a variant; when something moves, as it stands in the middle of the recording."""
    settings, model = variant.solver, variant.model
    differentiators = choose_differentiators(
        model.order,
        family=model.differentiator,
        error_db=model.moving_error_db if paths.moving else model.error_db,
        band_edge=model.moving_band_edge if paths.moving else model.band_edge,
        half_width=model.half_width,
    )
    mixing = mixing_from_paths(paths.still(), differentiators, sample_rate, anchor=model.anchor)
    noise, fallbacks = _noise(settings, mixing, paths, array, sample_rate, temperature_c, spectra)
    prior = make_prior(settings.prior, settings.prior_weight, noise.whiten_mixing(mixing), sample_rate)
    return Posed(Problem.of(mixing, noise, prior), differentiators, fallbacks)


def check_solvable(paths: Paths) -> None:
    """Raise UnsolvableError where no method has an answer: too many talkers, or bearings that coincide."""
    if paths.talkers > paths.channels:
        raise UnsolvableError(
            f"{paths.talkers} talkers and {paths.channels} microphones: there must be at least as many microphones as "
            "talkers; leave talkers out or add channels"
        )
    pair = paths_collide(paths)
    if pair is not None:
        raise UnsolvableError(
            f"talkers {pair[0]} and {pair[1]} (counted from 0) have the same delays at every microphone: nothing can "
            "tell them apart; correct their bearings, or give one talker"
        )


def paths_collide(paths: Paths, least_s: float = 2e-7) -> tuple[int, int] | None:
    """The first pair of talkers whose delays differ by less than `least_s` at every microphone, all the time."""
    delay = paths.delay_s.reshape(-1, paths.talkers, paths.channels)
    for a in range(paths.talkers):
        for b in range(a + 1, paths.talkers):
            if np.abs(delay[:, a] - delay[:, b]).max() < least_s:
                return a, b
    return None


def _noise(
    settings: SolverSettings,
    mixing: Mixing,
    paths: Paths,
    array: Array,
    sample_rate: int,
    temperature_c: float,
    spectra: Spectra | None,
) -> tuple[Noise, tuple[str, ...]]:
    kind = settings.noise
    if kind == "white":
        return Noise("white"), ()
    if paths.moving:
        return Noise("white"), (f"noise {kind} needs talkers at rest: white used instead",)
    speed = speed_of_sound(temperature_c)
    if kind == "diffuse":
        covariance = diffuse_covariance(array.positions_m, sample_rate, settings.self_noise_db, speed)
    elif spectra is None:
        raise UnsolvableError(
            f"noise {kind!r} needs stretches to measure; give `noise_only_s` in [recording], or use another noise"
        )
    elif kind == "fitted":
        covariance = fitted_covariance(spectra.covariance(), mixing, array.positions_m, sample_rate, speed)
    else:
        covariance = spectra.covariance()
    return noise_from_covariance(kind, covariance, settings.whitening_half_width), ()
