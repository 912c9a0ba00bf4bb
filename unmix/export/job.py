"""The job: a variant's filters into a folder, with what shortening and rounding them costs.

filters of the variant -> tap length from a stated loss -> word lengths -> grid of bearings -> costs -> files
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from unmix.array import Array
from unmix.errors import InputError
from unmix.export.costs import Cost, bank_costs
from unmix.export.files import ExportedBank, write_csv, write_grid, write_header, write_npz
from unmix.export.grid import BearingGrid, InterpolationCost, bearing_grid, interpolation_cost
from unmix.export.material import speech_material
from unmix.export.shorten import Shortened, shorten
from unmix.export.sir import filtered, images_of, measured_sir_db, predicted_sir_db, spectra_of
from unmix.export.words import (
    ALL_WORDS,
    WORDS,
    Word,
    Words,
    noise_gain_after_rounding_db,
    peak_gain,
    quantise,
    sir_after_rounding_db,
    worst_input,
)
from unmix.files import folder_aside, write_json
from unmix.live.design import Designer, check_is_filters
from unmix.model.delays import Paths
from unmix.model.noise import Spectra
from unmix.scene import Talker
from unmix.solvers.stationary import FilterBank
from unmix.variant import Variant, load_variant

__all__ = ["Exported", "GridReport", "WordReport", "export_bank"]

Floats = NDArray[np.float64]

LOSS_DB = 0.5
"""Default loss in SIR that the tap length may cost."""
_NOISE_S = 2.0


@dataclass(frozen=True)
class WordReport:
    """What a word length costs, each figure by formula and as measured, talker by talker.

    sir_db, noise_gain_db  with rounded filters: formula from the word length alone; formula with the rounded filters;
                           measured on speech, or on white noise
    peak_gain_db           largest output for inputs within full scale: the sum of the filters' magnitudes, and what the
                           worst input makes of the rounded filters
    headroom_bits          bits that an output needs above full scale so that nothing overflows
    """

    word: Word
    sir_expected_db: list[float]
    sir_predicted_db: list[float]
    sir_measured_db: list[float]
    loss_measured_db: list[float]
    noise_gain_predicted_db: list[float]
    noise_gain_measured_db: list[float]
    peak_gain_predicted_db: list[float]
    peak_gain_measured_db: list[float]
    headroom_bits: int


@dataclass(frozen=True)
class GridReport:
    """The table over bearings and what interpolation costs in SIR."""

    talker: str
    step_deg: float
    entries: int
    usable: int
    memory_bytes: int
    interpolation: list[InterpolationCost]


@dataclass(frozen=True)
class Exported:
    """What was written, and its figures.

    bank        the filters, shortened, in double precision and in the word lengths
    whole_taps, whole_delay   of the variant before shortening
    sir_whole_db, sir_db      measured on speech without a room, before and after shortening; none for one talker
    sir_predicted_db          after shortening, by formula
    loss_predicted_db         largest loss in SIR by shortening, by formula
    change_db                 largest change of an output by shortening, relative to it
    costs                     at 32-bit words
    """

    bank: ExportedBank
    whole_taps: int
    whole_delay: int
    sir_whole_db: list[float]
    sir_db: list[float]
    sir_predicted_db: list[float]
    loss_predicted_db: float
    change_db: float
    words: list[WordReport]
    costs: list[Cost]
    grid: GridReport | None = None
    files: list[str] = field(default_factory=list)

    def to_dict(self) -> dict[str, Any]:
        """Plain values, as they stand in export.json."""
        _, channels, length = self.bank.taps.shape
        rest = {
            name: value
            for name, value in asdict(self).items()
            if name not in ("bank", "costs", "words", "grid", "files")
        }
        rate = self.bank.sample_rate
        costs = [{**asdict(c), "latency_ms": 1e3 * c.latency_samples / rate} for c in self.costs]
        return {
            "variant": self.bank.variant,
            "talkers": list(self.bank.names),
            "channels": channels,
            "taps": length,
            "delay_samples": self.bank.delay,
            "delay_ms": 1e3 * self.bank.delay / rate,
            "sample_rate": rate,
            **rest,
            "words": [asdict(word) for word in self.words],
            "costs": costs,
            "grid": None if self.grid is None else asdict(self.grid),
            "files": self.files,
        }


def export_bank(
    array: Array,
    talkers: Sequence[Talker],
    out: str | Path,
    variant: str | Path | Variant = "model",
    *,
    sample_rate: int,
    temperature_c: float = 20.0,
    noise: Spectra | None = None,
    loss_db: float = LOSS_DB,
    latency_s: float | None = None,
    words: Sequence[Word] = WORDS,
    grid_deg: float | None = None,
    grid_talker: int = 0,
    signals: ArrayLike | None = None,
    overwrite: bool = False,
    progress: Callable[[float], None] | None = None,
) -> Exported:
    """Write the filters of a variant for talkers at rest: bank.npz, bank.csv, bank.h, export.json, and grid.npz.

    Parameters
    ----------
    array, talkers, variant, sample_rate, temperature_c, noise
        As of `LiveSeparator`; the variant must be filters alone.
    loss_db : float
        Loss in SIR that the tap length may cost, without a room.
    latency_s : float, optional
        Most that filters may see of the future.
    words : sequence of "float32", "s24", "s16", "s12", "s8"
        Word lengths to write.
    grid_deg, grid_talker
        Spacing of a table in which one talker goes round the array, and who.
    signals : (talkers, samples) array, optional
        Speech to measure with; the demo's clips when left out.

    Raises InputError for what was handed in, UnsolvableError for a variant that is more than filters and for bearings
    that coincide, FileError when the folder cannot be written or a file would be replaced without `overwrite`.
    """
    chosen = load_variant(variant)
    _check(loss_db, latency_s, words)
    check_is_filters(chosen, spectra=noise)
    design = Designer(array, chosen, sample_rate, temperature_c, noise)
    out = Path(out)
    names = ["bank.npz", "bank.csv", "bank.h", "export.json", *(["grid.npz"] if grid_deg else [])]
    with folder_aside(out, overwrite=overwrite, expect=names) as aside:
        whole, paths = design(talkers), design.paths(talkers)
        speech = _speech(signals, len(talkers), sample_rate)
        images, spectra = images_of(speech, paths, sample_rate), spectra_of(speech)
        before = None if latency_s is None else round(latency_s * sample_rate)
        cut = shorten(whole, paths, spectra, sample_rate, loss_db=loss_db, before=before)
        rounded = [quantise(cut.bank.taps, word, sample_rate) for word in words]
        bank = _described(design, talkers, cut.bank, rounded)
        reports = [_word_report(r, cut.bank, paths, images, spectra, sample_rate) for r in rounded]
        made, grid = _grid(design, talkers, cut, spectra, grid_deg, grid_talker, progress)
        exported = Exported(
            bank=bank,
            whole_taps=whole.taps.shape[-1],
            whole_delay=whole.before,
            sir_whole_db=_several(measured_sir_db(whole.taps, images)),
            sir_db=_several(measured_sir_db(cut.bank.taps, images)),
            sir_predicted_db=_several(predicted_sir_db(cut.bank, paths, spectra, sample_rate)),
            loss_predicted_db=cut.loss_db,
            change_db=cut.change_db,
            words=reports,
            costs=bank_costs(*bank.taps.shape, delay=bank.delay, sample_rate=sample_rate),
            grid=grid,
            files=names,
        )
        write_npz(aside / "bank.npz", bank)
        write_csv(aside / "bank.csv", bank)
        write_header(aside / "bank.h", bank)
        if made is not None:
            write_grid(aside / "grid.npz", made, sample_rate)
        write_json(aside / "export.json", exported.to_dict())
    return exported


def _check(loss_db: float, latency_s: float | None, words: Sequence[str]) -> None:
    if not 0.0 < loss_db <= 20.0:
        raise InputError(f"loss of {loss_db:g} dB; give more than 0 and at most 20")
    if latency_s is not None and latency_s < 0.0:
        raise InputError(f"latency of {latency_s:g} s; give seconds from zero up")
    for word in words:
        if word not in ALL_WORDS:
            raise InputError(f"there is no word length {word!r}; known are {', '.join(ALL_WORDS)}")


def _speech(signals: ArrayLike | None, talkers: int, sample_rate: int) -> Floats:
    if signals is None:
        return speech_material(talkers, sample_rate)
    given = np.asarray(signals, dtype=np.float64)
    if given.ndim != 2 or len(given) != talkers or not np.isfinite(given).all():
        raise InputError(f"signals of shape {given.shape}; give finite samples (talkers, samples) of {talkers} talkers")
    if not np.all(np.any(given != 0.0, axis=1)):
        raise InputError("signals: a talker is silent throughout; give speech of each")
    return given


def _described(design: Designer, talkers: Sequence[Talker], bank: FilterBank, words: Sequence[Words]) -> ExportedBank:
    bearings = [
        [np.degrees(t.azimuth or 0.0), np.degrees(t.elevation), np.nan if t.distance_m is None else t.distance_m]
        for t in talkers
    ]
    return ExportedBank(
        taps=bank.taps,
        delay=bank.before,
        sample_rate=design.sample_rate,
        names=tuple(t.name for t in talkers),
        bearings=np.array(bearings),
        positions_m=design.array.positions_m,
        reference_channel=design.array.reference_channel,
        variant=design.variant.name,
        words=tuple(words),
    )


def _word_report(
    words: Words, bank: FilterBank, paths: Paths, images: Floats, spectra: Floats, sample_rate: int
) -> WordReport:
    taps, word = words.taps, words.word
    rounded = FilterBank(taps, bank.before, bank.cut_share)
    measured = measured_sir_db(taps, images)
    white = np.random.default_rng(1).standard_normal((taps.shape[1], round(_NOISE_S * sample_rate)))
    gained = 10.0 * np.log10((filtered(taps, white) ** 2).sum(axis=-1) / (white**2).sum(axis=-1).mean())
    peaks = [np.abs(filtered(taps, worst_input(taps, k))[k]).max() for k in range(len(taps))]
    predicted_peak = peak_gain(bank.taps)
    return WordReport(
        word=word,
        sir_expected_db=_several(sir_after_rounding_db(bank, word, paths, spectra, sample_rate)),
        sir_predicted_db=_several(predicted_sir_db(rounded, paths, spectra, sample_rate)),
        sir_measured_db=_several(measured),
        loss_measured_db=_several(measured_sir_db(bank.taps, images) - measured) if len(taps) > 1 else [],
        noise_gain_predicted_db=noise_gain_after_rounding_db(bank.taps, word, sample_rate).tolist(),
        noise_gain_measured_db=gained.tolist(),
        peak_gain_predicted_db=(20.0 * np.log10(predicted_peak)).tolist(),
        peak_gain_measured_db=(20.0 * np.log10(peaks)).tolist(),
        headroom_bits=int(np.ceil(np.log2(max(1.0, predicted_peak.max())) - 1e-9)),
    )


def _grid(
    design: Designer,
    talkers: Sequence[Talker],
    cut: Shortened,
    spectra: Floats,
    step_deg: float | None,
    talker: int,
    progress: Callable[[float], None] | None,
) -> tuple[BearingGrid | None, GridReport | None]:
    if step_deg is None:
        return None, None
    bank = cut.bank
    grid = bearing_grid(
        design, talkers, talker=talker, step_deg=step_deg, before=bank.before, after=bank.after, progress=progress
    )
    report = GridReport(
        talker=talkers[talker].name,
        step_deg=step_deg,
        entries=len(grid.azimuth_deg),
        usable=int(grid.valid.sum()),
        memory_bytes=4 * grid.taps.size,
        interpolation=interpolation_cost(grid, design, talkers, spectra),
    )
    return grid, report


def _several(sir_db: Floats) -> list[float]:
    """SIR of each talker; nothing for one, who has none."""
    return [] if len(sir_db) < 2 else [float(value) for value in sir_db]
