"""Quality against latency, against multiply-accumulates and against word length, for variants on one array.

A scene of speech is rendered on the array, in a room or without one, and every point is graded on it like any other
separated signal: the worst talker's SIR and STOI against the early references. Per variant,

    latency  filters that see less and less of the future
    work     filters that are shorter and shorter
    word     filters at the default length in each word length

`unmix.report.figures.tradeoff_figure` draws them.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any, Literal

import msgspec
import numpy as np
from numpy.typing import NDArray

from unmix.array import Array
from unmix.errors import InputError
from unmix.export.costs import direct_cost
from unmix.export.material import speech_material
from unmix.export.shorten import shorten, shorten_to
from unmix.export.sir import filtered, spectra_of
from unmix.export.words import ALL_WORDS, BITS, Word, quantise
from unmix.live.design import Designer, check_is_filters
from unmix.live.separator import LiveSeparator
from unmix.metrics.grader import Grader
from unmix.render.compose import RenderedScene, render_scene
from unmix.render.spec import ArraySpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.scene import Talker
from unmix.solvers.stationary import FilterBank
from unmix.variant import PRESETS, Variant, load_variant

__all__ = ["LIVE_PRESETS", "Summary", "Tradeoff", "Tradeoffs", "check_tradeoffs", "measure_tradeoffs"]

Floats = NDArray[np.float64]
Axis = Literal["latency", "work", "word"]

LIVE_PRESETS = tuple(
    name
    for name in ("delay-and-sum", "minimum-variance", "linear-constraint", "model", "low-latency")
    if name in PRESETS
)
"""The presets that run on a device."""
LATENCIES_MS = (0.0, 0.5, 1.0, 2.0, 4.0, 8.0, 16.0)
LENGTHS = (8, 16, 32, 64, 128, 256, 512)
LOSS_DB = 0.5
ROOM_M = (6.0, 4.5, 2.8)
DISTANCE_M = 1.2
SNR_DB = 30.0


@dataclass(frozen=True)
class Tradeoff:
    """One point: what a choice costs and what it gives.

    axis         what was varied
    latency_ms   of the filters, without a device's blocks
    mac_per_s    of direct convolution; None for more than filters
    bits         word length: 32 for floats
    sir_db, stoi  of the worst talker; None where undefined
    """

    variant: str
    axis: Axis
    latency_ms: float
    mac_per_s: float | None
    taps: int | None
    word: Word
    bits: int
    sir_db: float | None
    stoi: float | None


@dataclass(frozen=True)
class Summary:
    """A variant in one line: what it gives at best, and the least that comes within a loss of its best SIR.

    best_db, stoi  the best SIR among its points, and the STOI there
    latency_ms, mac_per_s, bits   least latency, work and word length within the loss; None where nothing was varied
    """

    variant: str
    best_db: float | None
    stoi: float | None
    latency_ms: float | None
    mac_per_s: float | None
    bits: int | None


@dataclass(frozen=True)
class Tradeoffs:
    """Points of all variants, the unprocessed microphone beside them, and on what they were measured."""

    points: tuple[Tradeoff, ...]
    unprocessed_sir_db: float | None
    unprocessed_stoi: float | None
    t20_s: float | None
    sample_rate: int

    def along(self, axis: Axis, variant: str) -> list[Tradeoff]:
        """A variant's points along an axis, in the order of what it varies."""
        chosen = [p for p in self.points if p.axis == axis and p.variant == variant]
        keys: dict[Axis, Callable[[Tradeoff], float]] = {
            "latency": lambda p: p.latency_ms,
            "work": lambda p: p.mac_per_s or 0.0,
            "word": lambda p: p.bits,
        }
        return sorted(chosen, key=keys[axis])

    @property
    def variants(self) -> list[str]:
        """Names, in the order given."""
        return list(dict.fromkeys(point.variant for point in self.points))

    def summary(self, variant: str, *, loss_db: float = 1.0) -> Summary:
        """A variant in one line; `loss_db` of SIR may be given away."""
        graded = [p for p in self.points if p.variant == variant and p.sir_db is not None]
        best = max(graded, key=lambda p: p.sir_db or 0.0, default=None)
        if best is None or best.sir_db is None:
            return Summary(variant, None, None, None, None, None)
        enough = [p for p in graded if p.sir_db is not None and p.sir_db >= best.sir_db - loss_db]
        work = [p.mac_per_s for p in enough if p.axis == "work" and p.mac_per_s is not None]
        return Summary(
            variant=variant,
            best_db=best.sir_db,
            stoi=best.stoi,
            latency_ms=min((p.latency_ms for p in enough if p.axis == "latency"), default=None),
            mac_per_s=min(work, default=None),
            bits=min((p.bits for p in enough if p.axis == "word"), default=None),
        )

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return asdict(self)

    @classmethod
    def from_dict(cls, tree: dict[str, Any]) -> Tradeoffs:
        """From plain values, as `to_dict` gives them. Raises InputError for others."""
        try:
            return msgspec.convert(tree, cls)
        except msgspec.ValidationError as error:
            raise InputError(f"trade-offs: {error}; export again") from None


def measure_tradeoffs(
    array: Array,
    talkers: Sequence[Talker],
    variants: Sequence[str | Variant] = LIVE_PRESETS,
    *,
    sample_rate: int,
    t20_s: float | None = 0.3,
    seconds: float = 4.0,
    seed: int = 1,
    size_m: Sequence[float] = ROOM_M,
    snr_db: float = SNR_DB,
    progress: Callable[[float], None] | None = None,
) -> Tradeoffs:
    """Render speech on an array and grade each variant along the three axes.

    t20_s   reverberation time of the room in seconds; None for none
    size_m  edges of the room
    snr_db  speech over the microphones' own noise

    Raises InputError for fewer than two talkers or a variant that cannot run on a device, UnsolvableError for bearings
    that coincide.
    """
    check_tradeoffs(array, talkers)
    chosen = [load_variant(variant) for variant in variants]
    room = None if t20_s is None else RoomSpec(size_m=list(size_m), t20_s=t20_s)
    rendered = _rendered(array, talkers, sample_rate, room, seconds, seed, snr_db)
    grader = Grader(
        rendered.early,
        sample_rate=sample_rate,
        names=rendered.names,
        unprocessed=rendered.mixture[array.reference_channel],
        against="early",
    )
    points: list[Tradeoff] = []
    for index, variant in enumerate(chosen):
        points += _points(variant, array, talkers, rendered, grader)
        if progress is not None:
            progress((index + 1) / len(chosen))
    before = grader.grade(np.tile(rendered.mixture[array.reference_channel], (len(talkers), 1)))
    sir, stoi = _worst(before.talkers, "sir_db"), _worst(before.talkers, "stoi")
    return Tradeoffs(tuple(points), sir, stoi, t20_s, sample_rate)


def check_tradeoffs(array: Array, talkers: Sequence[Talker]) -> None:
    """Raise InputError for an array or talkers that trade-offs cannot be measured on."""
    if len(talkers) < 2:
        raise InputError(f"{len(talkers)} talkers: a trade-off in SIR needs two at least")
    if array.responses is not None:
        raise InputError(
            "trade-offs are measured on speech rendered for free microphones, not for measured responses; give the "
            "array as positions"
        )


def _rendered(
    array: Array,
    talkers: Sequence[Talker],
    sample_rate: int,
    room: RoomSpec | None,
    seconds: float,
    seed: int,
    snr_db: float,
) -> RenderedScene:
    speech = speech_material(len(talkers), sample_rate, seconds)
    spec = RenderSpec(
        duration_s=seconds,
        sample_rate=sample_rate,
        seed=seed,
        room=room,
        array=ArraySpec(positions_m=array.positions_m.tolist(), reference_channel=array.reference_channel),
        talker=[
            TalkerSpec(
                name=talker.name,
                azimuth_deg=float(np.degrees(talker.azimuth or 0.0)),
                elevation_deg=float(np.degrees(talker.elevation)),
                distance_m=talker.distance_m or DISTANCE_M,
            )
            for talker in talkers
        ],
        noise=NoiseSpec(sensor_snr_db=snr_db),
    )
    return render_scene(spec, clips={t.name: row for t, row in zip(talkers, speech, strict=True)})


def _points(
    variant: Variant, array: Array, talkers: Sequence[Talker], rendered: RenderedScene, grader: Grader
) -> Iterator[Tradeoff]:
    if variant.room is not None:
        yield _adaptive_point(variant, array, talkers, rendered, grader)
        return
    check_is_filters(variant, spectra=None)
    rate = rendered.sample_rate
    design = Designer(array, variant, rate)
    bank, paths, spectra = design(talkers), design.paths(talkers), spectra_of(rendered.early)

    def cut(loss_db: float, before: int | None = None) -> FilterBank:
        return shorten(bank, paths, spectra, rate, loss_db=loss_db, before=before).bank

    known: dict[tuple[int, int, Word], Tradeoff] = {}

    def point(axis: Axis, filters: FilterBank, word: Word = "float32") -> Tradeoff:
        key = (filters.before, filters.taps.shape[-1], word)
        if key not in known:
            known[key] = _graded(variant.name, axis, filters, word, rendered, grader)
        return replace(known[key], axis=axis)

    for latency_ms in LATENCIES_MS:
        before = round(1e-3 * latency_ms * rate)
        if before <= bank.before:
            yield point("latency", cut(LOSS_DB, before))
    usual = cut(LOSS_DB)
    yield point("latency", usual)
    for length in LENGTHS:
        if length < usual.taps.shape[-1]:
            yield point("work", shorten_to(bank, length, paths, spectra, rate))
    yield point("work", usual)
    for word in ALL_WORDS:
        yield point("word", usual, word)


def _graded(name: str, axis: Axis, bank: FilterBank, word: Word, rendered: RenderedScene, grader: Grader) -> Tradeoff:
    rate, samples = rendered.sample_rate, rendered.mixture.shape[1]
    taps = bank.taps if word == "float32" else quantise(bank.taps, word, rate).taps
    signals = filtered(taps, rendered.mixture)[:, bank.before : bank.before + samples]
    signals = np.pad(signals, ((0, 0), (0, samples - signals.shape[1])))
    grades = grader.grade(signals).talkers
    return Tradeoff(
        variant=name,
        axis=axis,
        latency_ms=1e3 * bank.before / rate,
        mac_per_s=direct_cost(*taps.shape, delay=bank.before, sample_rate=rate).mac_per_s,
        taps=taps.shape[-1],
        word=word,
        bits=BITS.get(word, 32),
        sir_db=_worst(grades, "sir_db"),
        stoi=_worst(grades, "stoi"),
    )


def _adaptive_point(
    variant: Variant, array: Array, talkers: Sequence[Talker], rendered: RenderedScene, grader: Grader
) -> Tradeoff:
    """A variant that is more than filters has one latency, and is run as it would be on a device."""
    separator = LiveSeparator(array, talkers, variant, sample_rate=rendered.sample_rate)
    out = np.concatenate([separator.push(rendered.mixture), separator.flush()], axis=1)
    grades = grader.grade(out[:, separator.latency_samples :]).talkers
    latency_ms = 1e3 * separator.latency_s
    return Tradeoff(
        variant.name, "latency", latency_ms, None, None, "float32", 32, _worst(grades, "sir_db"), _worst(grades, "stoi")
    )


def _worst(talkers: Sequence[Any], figure: str) -> float | None:
    values = [getattr(talker, figure) for talker in talkers]
    return None if any(value is None for value in values) else float(min(values))
