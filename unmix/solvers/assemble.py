"""From a variant and the talkers' paths to a separator that can be fed chunks.

Decides, in this order: which noise, which prior, which method (and by what name a method that cannot be used falls
back), how long blocks and margins are.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.errors import UnsolvableError
from unmix.model.conditioning import Conditioning, condition
from unmix.model.delays import Paths
from unmix.model.differentiators import Differentiators
from unmix.model.mixing import Mixing, mixing_from_paths, model_reach
from unmix.model.noise import Noise, Spectra
from unmix.model.prior import Prior
from unmix.physics import speed_of_sound
from unmix.settings import SolverSettings
from unmix.solvers import convex, kkt, propagated, reduced, snapshots
from unmix.solvers.baselines import baseline_bank
from unmix.solvers.pose import Posed, check_solvable, pose
from unmix.solvers.problem import Problem
from unmix.solvers.stationary import FilterBank, design, filter_bank_from_response
from unmix.solvers.streaming import BlockSeparator, FilterBankSeparator, Separator, SnapshotSeparator
from unmix.variant import Variant

__all__ = ["Assembly", "assemble"]

Floats = NDArray[np.float64]

_LONGEST_BLOCK_S = 8.0
_LARGEST_GRID = 8192


@dataclass(frozen=True)
class Assembly:
    """A separator and what was decided on the way to it.

    bank             the filter bank, where the separator is one
    conditioning     of the model at rest (moving talkers: at the middle of the recording); None for baselines
    margin           samples from an end within which the answer differs from one long solve
    latency_samples  samples of the future that an output needs
    fallbacks        what was done instead of what was asked for, and why
    """

    separator: Separator
    method: str
    margin: int
    latency_samples: int
    bank: FilterBank | None = None
    mixing: Mixing | None = None
    conditioning: Conditioning | None = None
    differentiators: Differentiators | None = None
    trusted_hz: float | None = None
    fallbacks: tuple[str, ...] = ()
    notes: dict[str, float | str] = field(default_factory=dict)


def assemble(
    variant: Variant,
    paths: Paths,
    array: Array,
    *,
    sample_rate: int,
    temperature_c: float = 20.0,
    spectra: Spectra | None = None,
) -> Assembly:
    """Make the separator of a variant.

    spectra  running covariance of the recording (noise `observed`, `fitted`) or of its talker-free stretches
    (`measured`)

    Raises UnsolvableError when the case has no answer: more talkers than microphones, bearings that coincide, ...
    """
    check_solvable(paths)
    if variant.separator != "model":
        return _baseline(variant, paths, array, sample_rate, temperature_c)
    settings = variant.solver
    if paths.taps is not None and (settings.constraint != "tied" or settings.method == "kkt"):
        raise UnsolvableError(
            'measured responses are no expansion of delays; solve with constraint "tied" and another method than kkt'
        )
    if settings.constraint == "free":
        return _free(variant, paths, sample_rate)
    posed = pose(variant, paths, array, sample_rate=sample_rate, temperature_c=temperature_c, spectra=spectra)
    build = _Builder(variant, paths, posed, sample_rate)
    made = build.tied() if settings.constraint == "tied" else build.propagated()
    problem = posed.problem
    return replace(
        made,
        mixing=problem.mixing,
        conditioning=condition(problem.whitened, problem.prior, sample_rate),
        differentiators=posed.differentiators,
        fallbacks=(*posed.fallbacks, *made.fallbacks),
    )


def _baseline(variant: Variant, paths: Paths, array: Array, sample_rate: int, temperature_c: float) -> Assembly:
    if variant.separator == "model":
        raise UnsolvableError("the model is no baseline")
    bank = baseline_bank(
        variant.separator,
        paths.still(),
        array.positions_m,
        reference_channel=array.reference_channel,
        sample_rate=sample_rate,
        speed_m_s=speed_of_sound(temperature_c),
        self_noise_db=variant.solver.self_noise_db,
        tail=variant.solver.tail,
    )
    moved = ("the baseline steers at where talkers are in the middle of the recording",)
    fallbacks = moved if paths.moving and variant.separator != "reference-mic" else ()
    return Assembly(
        FilterBankSeparator(bank), variant.separator, bank.margin, bank.before, bank=bank, fallbacks=fallbacks
    )


def _free(variant: Variant, paths: Paths, sample_rate: int) -> Assembly:
    solver = snapshots.SnapshotSolver.of(paths, variant.model.order, sample_rate)
    return Assembly(SnapshotSeparator(solver), "snapshots", 0, 0, notes={"degrees_of_freedom": solver.freedom})


@dataclass(frozen=True)
class _Builder:
    variant: Variant
    paths: Paths
    posed: Posed
    sample_rate: int

    @property
    def problem(self) -> Problem:
        return self.posed.problem

    @property
    def noise(self) -> Noise:
        return self.problem.noise

    @property
    def prior(self) -> Prior:
        return self.problem.prior

    @property
    def differentiators(self) -> Differentiators:
        return self.posed.differentiators

    @property
    def settings(self) -> SolverSettings:
        return self.variant.solver

    @property
    def hold(self) -> int:
        return max(1, round(self.settings.hold_s * self.sample_rate))

    def tied(self) -> Assembly:
        problem = self.problem
        method, fallbacks = self._method()
        if method != "stationary" and self.prior.weight == 0.0 and self.paths.talkers > 1:
            raise UnsolvableError(
                f'method {method!r} needs a prior with two talkers or more; set prior = "flat", or '
                'method = "stationary" for the minimum-norm answer'
            )
        bank = design(problem, tail=self.settings.tail)
        if method == "stationary":
            notes: dict[str, float | str] = {"answer": bank.note} if bank.note else {}
            return Assembly(FilterBankSeparator(bank), method, bank.margin, bank.before, bank=bank, notes=notes)
        margin = bank.margin + self.noise.half_width + problem.reach
        solve = {"reduced": self._reduced, "kkt": self._kkt, "convex": self._convex}[method](problem)
        return self._blocks(solve, method, margin, fallbacks)

    def _method(self) -> tuple[str, tuple[str, ...]]:
        method = self.settings.method
        if method == "stationary" and self.paths.moving:
            return "reduced", ("method stationary needs talkers and array at rest: reduced used instead",)
        return method, ()

    def _blocks(
        self, solve: Callable[[Floats, int], Floats], method: str, margin: int, fallbacks: tuple[str, ...]
    ) -> Assembly:
        longest = round(_LONGEST_BLOCK_S * self.sample_rate)
        block = round(self.settings.block_s * self.sample_rate) if self.settings.block_s else min(8 * margin, longest)
        block = max(self.hold, block // self.hold * self.hold)
        margin = -(-margin // self.hold) * self.hold
        separator = BlockSeparator(
            solve, channels=self.paths.channels, talkers=self.paths.talkers, block=block, margin=margin
        )
        notes: dict[str, float | str] = {"block_samples": block}
        return Assembly(separator, method, margin, block + margin, fallbacks=fallbacks, notes=notes)

    def _reduced(self, problem: Problem) -> Callable[[Floats, int], Floats]:
        if not self.paths.moving:
            factors: dict[int, reduced.Factor] = {}

            def at_rest(samples: Floats, _: int) -> Floats:
                length = samples.shape[1]
                if length not in factors:
                    factors.clear()
                    factors[length] = reduced.factorise(problem, length)
                return factors[length].solve(self.noise.whiten(samples))

            return at_rest

        anchor = self.variant.model.anchor
        reach = model_reach(self.paths, self.differentiators, self.sample_rate, anchor)

        def moving(samples: Floats, start: int) -> Floats:
            mixing = mixing_from_paths(
                self.paths, self.differentiators, self.sample_rate,
                anchor=anchor, start=start, samples=samples.shape[1], hold=self.hold, reach=reach,
            )  # fmt: skip
            return reduced.solve_block(Problem.of(mixing, self.noise, self.prior), samples)

        return moving

    def _kkt(self, _: Problem) -> Callable[[Floats, int], Floats]:
        def solve(samples: Floats, start: int) -> Floats:
            return kkt.solve_block(
                self.paths, self.differentiators, self.noise, self.prior, self.noise.whiten(samples),
                sample_rate=self.sample_rate, anchor=self.variant.model.anchor, start=start, hold=self.hold,
            )  # fmt: skip

        return solve

    def _convex(self, problem: Problem) -> Callable[[Floats, int], Floats]:
        s = self.settings
        compiled: dict[int, convex.ConvexBlock] = {}
        reach = model_reach(self.paths, self.differentiators, self.sample_rate, self.variant.model.anchor)

        def solve(samples: Floats, start: int) -> Floats:
            length = samples.shape[1]
            if self.paths.moving:
                compiled.clear()
                mixing = mixing_from_paths(
                    self.paths, self.differentiators, self.sample_rate,
                    anchor=self.variant.model.anchor, start=start, samples=length, hold=self.hold, reach=reach,
                )  # fmt: skip
            else:
                mixing = problem.mixing
            if length not in compiled:
                compiled.clear()
                compiled[length] = convex.ConvexBlock(
                    Problem.of(mixing, self.noise, self.prior), length,
                    huber=s.huber, clip=s.clip_level, peak=s.peak, solver=s.convex_solver,
                )  # fmt: skip
            return compiled[length].solve(self.noise.whiten(samples))

        return solve

    def propagated(self) -> Assembly:
        order = self.variant.model.order
        if self.settings.prior == "none" or self.settings.prior_weight == 0.0:
            raise UnsolvableError(
                'constraint "propagated" takes the talkers\' assumed power from the prior; set prior = "speech" '
                'or "flat"'
            )
        power = 1.0 / (self.settings.prior_weight * self.paths.channels)
        weight = propagated.transition_weight(order, self.prior, power)
        trusted = propagated.trusted_band(order) * self.sample_rate / 2
        if self.settings.method in ("kkt", "convex"):
            raise UnsolvableError(
                f'constraint "propagated" is solved by method "reduced" or "stationary", not {self.settings.method!r}'
            )
        bank = filter_bank_from_response(
            lambda omega: self._propagated_response(omega, weight), tail=self.settings.tail, largest_grid=_LARGEST_GRID
        )
        method, fallbacks = self._method()
        if method == "stationary":
            made = Assembly(FilterBankSeparator(bank), method, bank.margin, bank.before, bank=bank)
        else:
            made = self._blocks(self._propagated_blocks(weight), method, bank.margin + self.noise.half_width, fallbacks)
        return replace(made, trusted_hz=trusted)

    def _propagated_response(self, omega: Floats, weight: Floats) -> NDArray[np.complex128]:
        w = self.noise.response(omega)
        response = propagated.stationary_response(
            self.paths.still(), self.variant.model.order, self.prior, weight, omega,
            sample_rate=self.sample_rate, anchor=self.variant.model.anchor, whitening=w,
        )  # fmt: skip
        return response if w is None else np.asarray(response @ w)

    def _propagated_blocks(self, weight: Floats) -> Callable[[Floats, int], Floats]:
        cached: dict[int, propagated.PropagatedBlock] = {}

        def solve(samples: Floats, start: int) -> Floats:
            length = samples.shape[1]
            if self.paths.moving or length not in cached:
                cached.clear()
                cached[length] = propagated.PropagatedBlock(
                    self.paths, self.differentiators, self.noise, self.prior, length,
                    sample_rate=self.sample_rate, weight=weight, anchor=self.variant.model.anchor,
                    start=start, hold=self.hold,
                )  # fmt: skip
            return cached[length].solve(self.noise.whiten(samples))

        return solve
